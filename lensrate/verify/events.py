"""Real events judged from published measurements: class, mass and distance, a function for each row.

What was measured is listed here with its source; what was concluded stands in ``data/published/events.toml``.
"""

from functools import cache

from astropy.table import Table

from ..events.observed import Sample
from ..events.odds import odds

__all__ = ["COMPUTE", "EVENTS"]

#: what was measured: values and errors
EVENTS = {
    # OGLE-2011-BLG-0462. Sahu+ 2022, ApJ 933, 83: theta_E, D_S seen in secondary sources; t_E and pi_E from memory;
    # frame not seen, its size of pi_E is the same in both
    "ob110462": {
        "l": 359.8613, "b": -1.6210, "t_E": 270.7, "t_E_err": 11.2, "pi_E": 0.0894, "pi_E_err": 0.0135,
        "theta_E": 5.18, "theta_E_err": 0.51, "D_S": 5.9, "D_S_err": 1.3,
        # no light of the lens was found; the limit is from memory and stands for 'much fainter than a star of its mass'
        "I_lens_limit": 20.0,
    },
    # the remnant candidate of 9.3 Msun at 2.4 kpc of Wyrzykowski+ 2016 (1509.04899): pi_E follows from that mass and
    # distance for a source at 8 kpc; t_E and place are from memory, errors are our choice
    "par02": {"l": 0.0, "b": -2.0, "t_E": 250.0, "t_E_err": 10.0, "pi_E": 0.062, "pi_E_err": 0.006},
    # TCP J05074264+2447555. theta_E: Dong+ 2019, ApJ 871, 70; mu_rel: Zang+ 2020 (1912.00038), both seen; t_E is their
    # ratio, pi_E that of the published mass; place from memory
    "tcp": {
        "ra": 76.928, "dec": 24.7988, "t_E": 25.7, "t_E_err": 0.7, "pi_E": 0.464, "pi_E_err": 0.059,
        "theta_E": 1.87, "theta_E_err": 0.03,
    },
    # Stein 2051 B. theta_E: Sahu+ 2017, Science 356, 1046, pi_E from it and the parallax of 180.8 mas, t_E from 2.3
    # arcsec/yr (memory); the limit stands for 'fainter than a star of its mass', which would have I of about 6
    "stein2051b": {
        "ra": 67.802, "dec": 58.978, "t_E": 5.0, "t_E_err": 0.2, "pi_E": 5.73, "pi_E_err": 0.22,
        "theta_E": 31.53, "theta_E_err": 1.2, "I_lens_limit": 10.0,
    },
}  # fmt: skip


@cache
def _judged(name, *used):
    """Odds of one event from some of its quantities."""
    every = EVENTS[name]
    row = {k: v for k, v in every.items() if k.removesuffix("_err") in ("l", "b", "ra", "dec", *used)}
    sample = Sample.from_table(Table([{"event": name, **row}]), "heliocentric")
    return odds(sample).events[0]


_SHORT = ("t_E", "pi_E")
_MASS = (*_SHORT, "theta_E")


def _p(name, lens, *used):
    return lambda: _judged(name, *used).p(lens)


def _median(name, quantity, lens, *used):
    return lambda: _judged(name, *used).quantiles(quantity, lens)["p50"]


def _gain():
    """Black hole odds with theta_E over those without."""
    with_it, without = (_judged("ob110462", *used).p("black_hole") for used in (_MASS, _SHORT))
    return (with_it / (1 - with_it)) / (without / (1 - without))


COMPUTE = {
    "ob110462_black_hole": _p("ob110462", "black_hole", *_MASS, "D_S", "I_lens_limit"),
    "ob110462_mass": _median("ob110462", "mass_msun", "black_hole", *_MASS, "D_S", "I_lens_limit"),
    "ob110462_mass_2022": _median("ob110462", "mass_msun", "black_hole", *_MASS, "D_S", "I_lens_limit"),
    "ob110462_distance": _median("ob110462", "distance_kpc", "black_hole", *_MASS, "D_S", "I_lens_limit"),
    "ob110462_short": _p("ob110462", "black_hole", *_SHORT),
    "ob110462_gain": _gain,
    "par02_short": _p("par02", "black_hole", *_SHORT),
    "tcp_star": _p("tcp", "star", *_MASS),
    "tcp_mass": _median("tcp", "mass_msun", "star", *_MASS),
    "stein2051b_dark": _p("stein2051b", "white_dwarf", *_MASS, "I_lens_limit"),
    "stein2051b_free": lambda: _p("stein2051b", "star", *_MASS)() / _p("stein2051b", "white_dwarf", *_MASS)(),
    "stein2051b_mass": _median("stein2051b", "mass_msun", "white_dwarf", *_MASS, "I_lens_limit"),
}
