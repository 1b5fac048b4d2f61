"""Published numbers about mass functions, remnant masses and natal kicks, recomputed: one function for each row."""

from functools import cache, partial

import numpy as np

from ..remnants.classes import CLASSES
from ..remnants.history import History
from ..remnants.ifmr import Ifmr
from ..remnants.imf import Imf
from ..remnants.kicks import parse_kick
from ..remnants.lifetimes import Lifetimes
from ..remnants.population import population
from .kicked import COMPUTE as KICKED

__all__ = ["COMPUTE", "bound_fraction"]

_DRAWS = 1_000_000


def bound_fraction(law, circular, escape, draws=_DRAWS, seed=1):
    """Return the share still bound when isotropic kicks are added to one circular orbit.

    Parameters
    ----------
    law : KickLaw
        Kick speeds.
    circular, escape : float
        Speed of the orbit and of escape [km/s].
    draws, seed : int
        Size and seed of the sample.

    Returns
    -------
    float
        The standard error is sqrt(p (1 - p) / draws).
    """
    rng = np.random.default_rng(seed)
    speed = law.sample(draws, rng)
    cosine = rng.uniform(-1, 1, draws)
    return float(np.mean(speed**2 + circular**2 + 2 * circular * speed * cosine < escape**2))


def _mean(name):
    return parse_kick(name).mean()


def _median(name):
    return parse_kick(name).median()


def _below(name, speed):
    return float(parse_kick(name).cdf(speed))


def _mode(name):
    v = np.linspace(1, 1000, 100_000)
    return float(v[np.argmax(parse_kick(name).pdf(v))])


def _sigma(name, which):
    return parse_kick(name).values[which]


def _bound(name, circular, escape):
    return bound_fraction(parse_kick(name), circular, escape)


def _remnant(relation, which, mass):
    outcomes = {outcome.name: outcome for outcome in Ifmr.read(relation).outcomes(mass)}
    return float(outcomes[which].mass[0] @ outcomes[which].weight)


def _loss(mass):
    return 100 * (1 - _remnant("default", "white_dwarf", mass) / mass)


def _core(mass):
    """Helium core alone: the first term of the black holes' law."""
    law = dict(Ifmr.read("raithel2018").laws)["black_hole"][0]
    _, origin, coefficients, _, _ = law.terms[0]
    return float(np.polynomial.polynomial.polyval(mass - origin, coefficients))


def _kroupa(lightest):
    return Imf.read("kroupa2001").between(lightest, 100)


def _born(lightest, m_lo, m_hi):
    return float(_kroupa(lightest).number(m_lo, m_hi))


def _mean_born(lightest):
    return 1 / _born(lightest, 0, 1000)


def _lifetime(mass):
    return float(Lifetimes.read("standard").lifetime(mass))


@cache
def _gould():
    old = History(10, 10)
    return population(old, Imf.read("gould2000"), Lifetimes.read("standard"), Ifmr.read("gould2000"))


def _share(name, power):
    """Optical depth goes as mass, the event rate as its root, where all lenses share one phase space."""
    return 100 * _gould().spectra[name].moment(power) / _gould().moment(power)


COMPUTE = {
    "E18_mean_published": partial(_mean, "hobbs2005"),
    "E18_mean": partial(_mean, "hobbs2005"),
    "E18_median": partial(_median, "hobbs2005"),
    "E18_below_50": partial(_below, "hobbs2005", 50),
    "E19_sigma_1": partial(_sigma, "verbunt2017", 0),
    "E19_sigma_2": partial(_sigma, "verbunt2017", 1),
    "E19_below_60_published": partial(_below, "verbunt2017", 60),
    "E19_below_60": partial(_below, "verbunt2017", 60),
    "E19_young_sigma_1": partial(_sigma, "verbunt2017_young", 0),
    "E19_young_sigma_2": partial(_sigma, "verbunt2017_young", 1),
    "E19_young_below_60": partial(_below, "verbunt2017_young", 60),
    "E20_mean": partial(_mean, "igoshev2020"),
    "E20_below_60_published": partial(_below, "igoshev2020", 60),
    "E20_below_60": partial(_below, "igoshev2020", 60),
    "E21_median": partial(_median, "disbergmandel2025"),
    "E21_mode": partial(_mode, "disbergmandel2025"),
    "E21_mode_published": partial(_mode, "disbergmandel2025"),
    "E21_mean": partial(_mean, "disbergmandel2025"),
    "E21_below_50": partial(_below, "disbergmandel2025", 50),
    "E21_hobbs_ratio": lambda: _median("hobbs2005") / _median("disbergmandel2025"),
    "E24_at_0.83": partial(_remnant, "default", "white_dwarf", 0.83),
    "E24_at_2.85": partial(_remnant, "default", "white_dwarf", 2.85),
    "E24_at_3.60": partial(_remnant, "default", "white_dwarf", 3.60),
    "E24_at_7.20": partial(_remnant, "default", "white_dwarf", 7.20),
    "E24_loss_0.83": partial(_loss, 0.83),
    "E24_loss_7.5": partial(_loss, 7.5),
    "E25_at_1.16": partial(_remnant, "kalirai2008", "white_dwarf", 1.16),
    "E25_at_7": partial(_remnant, "kalirai2008", "white_dwarf", 7),
    "E26_core_20": partial(_core, 20),
    "E26_at_45": partial(_remnant, "raithel2018", "black_hole", 45),
    "E27_at_11": partial(_remnant, "raithel2018", "neutron_star", 11),
    "E31_mean_mass": partial(_mean_born, 0.08),
    "E31_above_8": partial(_born, 0.08, 8, 100),
    "E31_above_20": partial(_born, 0.08, 20, 100),
    "E31_1_to_8": partial(_born, 0.08, 1, 8),
    "E31_full_mean_mass": partial(_mean_born, 0.01),
    "E31_full_above_8": partial(_born, 0.01, 8, 100),
    "E32_at_1": partial(_lifetime, 1),
    "E32_at_8": partial(_lifetime, 8),
    "E32_at_20": partial(_lifetime, 20),
    "E32_at_100": partial(_lifetime, 100),
    "B7_mean_mass": lambda: _gould().mean_mass,
}
for _law in ("hobbs2005", "igoshev2020", "disbergmandel2025"):
    COMPUTE[f"E22_{_law}_a"] = partial(_bound, _law, 220, 550)
    COMPUTE[f"E22_{_law}_b"] = partial(_bound, _law, 233, 528)
for _name in CLASSES:
    COMPUTE[f"B7_tau_{_name}"] = COMPUTE[f"B7_tau_{_name}_published"] = partial(_share, _name, 1)
    COMPUTE[f"B7_rate_{_name}"] = partial(_share, _name, 0.5)
    if _name in ("white_dwarf", "neutron_star", "black_hole"):
        COMPUTE[f"B7_rate_{_name}_published"] = partial(_share, _name, 0.5)
COMPUTE.update(KICKED)
