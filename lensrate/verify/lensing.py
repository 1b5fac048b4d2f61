"""Worked values and closed forms of lensing, recomputed: one function for each row.

The closed forms use Galaxies built here: one density, observer and source at rest, lenses of one solar mass.
"""

from functools import cache, partial
from types import SimpleNamespace

import astropy.units as u
import numpy as np

from ..galaxy.model import Galaxy
from ..kernels import rates as kernels
from ..kernels import speeds
from ..lensing import distributions, geometry, rates
from ..lensing.quadrature import Isogrid, Numerics
from ..lensing.sightline import sightline
from ..remnants.classes import CLASSES
from ..scenario import Scenario, resolve
from ..sources.extinction import DustDisc
from ..sources.model import Sources
from ..sources.rules import DistanceRule
from ..units import DAYS_PER_YEAR, KAPPA, KMS_PER_MASYR_KPC, MAS, RE2_PER_M_D

__all__ = ["COMPUTE"]

_SIGMA = 100.0  # km/s, dispersion per axis of the uniform box
_BOX = 8.0  # kpc, its depth; the density is 0.1 Msun/pc3
_DIRECTIONS = 8192  # of the mean speed; elongated Gaussians (100 by 1) need more than the default 16
_COLD = 0.02  # dispersion that stands for none, in units of the single speed
_SPEEDS = 96  # nodes over the cosine of the single speed's inclination


def _at_rest(sigma=_SIGMA, **density):
    """A Galaxy of one component, isotropic and not rotating, seen by an observer at rest."""
    still = {"R0": 8.0, "z": 0.0, "U": 0.0, "V": 0.0, "W": 0.0}
    motion = {"kind": "bar", "sigma_x": sigma, "sigma_y": sigma, "sigma_z": sigma}
    component = {"name": "box", "density": density, "kinematics": motion, "stars": False, "sources": False}
    return Galaxy.from_dict({"sun": still, "component": [component]})


def _totals(galaxy, l, b, distance):
    """Optical depth and rate [1/yr] of 1 Msun lenses to a source at rest."""
    l, b = np.radians(l), np.radians(b)
    toward = Sources(DistanceRule(distance), (None,), DustDisc.read(), {}).toward(l, b, galaxy)
    ready = rates.prepare(SimpleNamespace(galaxy=galaxy), galaxy.sightline(l, b), toward, Numerics())
    tau, gamma, _ = rates.moments(ready)
    return float(tau.sum()), float(gamma.sum())


def _uniform(rho, distance):
    return _totals(_at_rest(kind="uniform", rho={"value": rho, "unit": "Msun/pc3"}), 1.0, -3.9, distance)


def _disc(h_z, rho):
    density = {"rho_sun": {"value": rho, "unit": "Msun/pc3"}, "h_R": 3.5, "h_z": {"value": h_z, "unit": "pc"}}
    return _totals(_at_rest(kind="exp_disc", **density), 1.0, -3.9, 8.0)[0]


@cache
def _halo(l, b, distance):
    scenario = Scenario.read("griest1991").replace(sources=f"distance:{distance:g}")
    return sightline(l * u.deg, b * u.deg, scenario).lenses["all"]


def _halo_mass(radius):
    """Mass inside a radius [kpc] of the same halo."""
    halo = Galaxy.read("griest1991").components[0].density
    x, w = np.polynomial.legendre.leggauss(200)
    r = 0.5 * radius * (x + 1.0)
    rho = halo.at(r, 0 * r, 0 * r, 8.5)
    return float(np.sum(0.5 * radius * w * 4 * np.pi * r**2 * rho))


def _speed(m_l, m_b, s_1, s_2):
    """Mean length of a 2-D Gaussian velocity."""
    vectors, length = np.zeros((2, 5, speeds.BLOCK)), np.empty(speeds.BLOCK)
    vectors[1, :, 0] = m_l, m_b, s_1**2, 0.0, s_2**2
    speeds.mean_lengths(vectors, 1, 1, speeds.half_circle(_DIRECTIONS), length)
    return float(length[0])


def _wide_timescales(step_dex, rows):
    """Timescales in the uniform box on a grid that reaches into the tails: t_E [yr] and the rate per ln t_E.

    `rows` gives speed, dispersion [km/s] and share of each Gaussian, (L,) each; a mean speed points along l, which
    is as good as isotropic, because the density in ln mu sums over all directions.
    """
    speed, sigma, share = (np.asarray(a, dtype=float)[:, None] for a in rows)
    pi = 10 ** np.arange(-10.0, 9.0, 2 * step_dex)
    grid = Isogrid(step_dex * np.log(10), pi, 10 ** np.arange(-4.5, 11.0, step_dex))
    D_S = np.full(pi.size, _BOX)
    k = KMS_PER_MASYR_KPC / (pi + 1.0 / _BOX)
    zero = np.zeros((share.size, pi.size))
    lens = np.array([zero + 1e8 * share, speed / k, zero, (sigma / k) ** 2, zero, (sigma / k) ** 2])
    source = np.zeros((6, 1, pi.size))
    source[0] = 1.0
    geometric = np.empty(pi.size)
    row = np.arange(pi.size)
    kernels.node_weights(pi, row, D_S, KAPPA, MAS, geometric)
    T = np.empty((1, pi.size, grid.mu.size))
    one_element = np.zeros(share.size, dtype=np.int64)
    kernels.rate_density(pi, row, geometric, source, lens, one_element, grid.mu, 6.0, 40.0, 0.0, T)
    return distributions.timescale_grid(grid) / DAYS_PER_YEAR, distributions.unit_timescales(grid, T)[0]


@cache
def _gaussian_box():
    return _wide_timescales(0.02, ([0.0], [_SIGMA], [1.0]))


@cache
def _one_speed_box():
    """Lenses of one speed in isotropic directions, their sharp velocities smeared by `_COLD`."""
    x, w = np.polynomial.legendre.leggauss(_SPEEDS)
    cosine, share = 0.5 * (x + 1.0), 0.5 * w
    sine = np.sqrt(1.0 - cosine**2)
    return _wide_timescales(0.01, (_SIGMA * sine, np.full(x.size, _COLD * _SIGMA), share))


def _unit_time():
    """Largest Einstein radius over the speed [yr]."""
    r_E = geometry.einstein_radius(1 * u.Msun, 0.5 * _BOX * u.kpc, _BOX * u.kpc)
    return float((r_E / (_SIGMA * u.km / u.s)).to_value(u.yr))


def _pdf(box, t):
    """Rate per ln t_E at t [yr]; power laws and what lies between are smooth in the logarithms."""
    from scipy.interpolate import CubicSpline

    grid, pdf = box
    some = pdf > 0
    return float(np.exp(CubicSpline(np.log(grid[some]), np.log(pdf[some]))(np.log(t))))


def _share_beyond(box, t, side):
    """Share of events shorter (side -1) or longer (+1) than t [yr].

    The cumulative sum of a smooth function of ln t on its own grid is exact up to half of its last term.
    """
    grid, pdf = box
    pdf = pdf if side < 0 else pdf[::-1]
    grid = grid if side < 0 else grid[::-1]
    below = (np.cumsum(pdf) - 0.5 * pdf) / pdf.sum()
    some = below > 0
    order = np.argsort(np.log(grid[some]))
    return float(np.exp(np.interp(np.log(t), np.log(grid[some])[order], np.log(below[some])[order])))


def _tail(box, x, side):
    """Coefficient of t^3 or t^-3 at x times the unit time."""
    return _share_beyond(box(), x * _unit_time(), side) * x ** (3 * side)


def _tail_slope(box, x, side):
    """d ln P / d ln t over a factor two in t."""
    t = x * _unit_time()
    shares = [_share_beyond(box(), factor * t, side) for factor in (0.5**0.5, 2**0.5)]
    return float(np.log(shares[1] / shares[0]) / np.log(2.0))


def _density_tail(x, power):
    """Coefficient of t^2 or t^-4 in the probability density of t in unit times."""
    box = _gaussian_box()
    grid, pdf = box
    norm = pdf.sum() * np.log(grid[1] / grid[0])
    return _pdf(box, x * _unit_time()) / norm / x ** (power + 1)


def _box_mean(unit):
    grid, pdf = _gaussian_box()
    return float(np.sum(grid * pdf) / np.sum(pdf)) * unit


def _box_rate():
    grid, pdf = _gaussian_box()
    return float(pdf.sum() * np.log(grid[1] / grid[0]))


def _against_tail(t, side):
    """Rate per ln t_E of the box over its asymptotic power law, Mao & Paczynski 1996."""
    n, s = 1e8, (_SIGMA * u.km / u.s).to_value(u.au / u.yr)
    kpc = u.kpc.to(u.au)
    R2 = RE2_PER_M_D * _BOX
    if side > 0:
        law = 2 * n * _BOX * R2**2 / (30 * s**2) * t**-3
    else:
        law = 64 * n * _BOX * s**4 / R2 * t**3
    # lenses per kpc^3 times kpc along the line and au^2 across it
    return _pdf(_gaussian_box(), t) * kpc**2 / law


@cache
def _published_galaxy():
    return sightline(1 * u.deg, -3.9 * u.deg, Scenario.read("hangould2003").replace(numerics={"weight_cut": 0.0}))


def _share(name, what):
    lenses = _published_galaxy().lenses
    return 100 * getattr(lenses[name], what) / getattr(lenses["all"], what)


def _tail_weight(name, t, power):
    """Share of a class at t_E [d] over its share of the sum of n(M) M^power."""
    forecast = _published_galaxy()
    pdf = forecast.rate_per_ln_t_E
    at = [np.interp(np.log(t), np.log(forecast.t_E), row) for row in pdf]
    model = resolve(forecast.scenario)
    # both components have the same mass function, so one stands for both
    moment = {c: model.spectrum(c, 0).moment(power) for c in CLASSES}
    expected = moment[name] / sum(moment.values())
    return at[forecast.classes.index(name)] / sum(at) / expected


@cache
def _default():
    return sightline(1 * u.deg, -3.9 * u.deg)


def _identity():
    """(pi/2) Gamma <t_E> / tau, the mean from the distribution, which has its own quadrature."""
    forecast = _default()
    total = forecast.lenses["all"]
    mean = distributions.Quantiles(forecast.t_E, forecast.rate_per_ln_t_E.sum(axis=0)).mean() / DAYS_PER_YEAR
    return 0.5 * np.pi * total.rate * mean / total.optical_depth


def _angle(mass, D_L, D_S):
    return geometry.theta_E(mass * u.Msun, geometry.pi_rel(D_L * u.kpc, D_S * u.kpc)).value


def _time(mass, D_L, D_S, speed, unit):
    r_E = geometry.einstein_radius(mass * u.Msun, D_L * u.kpc, D_S * u.kpc)
    mu = (speed * u.km / u.s / (D_L * u.kpc)).to(u.mas / u.yr, u.dimensionless_angles())
    angle = (r_E / (D_L * u.kpc)).to(u.mas, u.dimensionless_angles())
    return geometry.t_E(angle, mu).to_value(unit)


def _largest_shift():
    s = np.linspace(1.0, 2.0, 1_000_001)
    return float(geometry.centroid_shift(s, 1 * u.mas).value.max())


_LMC = (280.46, -32.89)
_LMC_ROUND = (280.5, -32.9)

COMPUTE = {
    "C1_kappa": lambda: KAPPA,
    "C2_theta_E": lambda: geometry.theta_E(1 * u.Msun, 1 * u.mas).value,
    "C2_theta_E_4_8": partial(_angle, 1, 4, 8),
    "C2_r_E_4_8": lambda: geometry.einstein_radius(1 * u.Msun, 4 * u.kpc, 8 * u.kpc).value,
    # a source at 20 kpc makes 1 - D_L/D_S one half
    "C3_theta_E_published": lambda: _angle(1, 10, 20) * 2**0.5,
    "C3_theta_E": lambda: _angle(1, 10, 20) * 2**0.5,
    "C3_t_published": lambda: _time(1, 10, 20, 200, u.yr) * 2**0.5,
    "C3_t": lambda: _time(1, 10, 20, 200, u.yr) * 2**0.5,
    "C4_t_E": partial(_time, 1, 4, 8, 200, u.day),
    "C5_identity": _identity,
    "C6_short": partial(_tail, _one_speed_box, 0.02, -1),
    "C6_long": partial(_tail, _one_speed_box, 40.0, 1),
    "C6_short_slope": partial(_tail_slope, _one_speed_box, 0.02, -1),
    "C6_long_slope": partial(_tail_slope, _one_speed_box, 40.0, 1),
    "C7_pdf_short": partial(_density_tail, 0.01, 2),
    "C7_pdf_long": partial(_density_tail, 100.0, -4),
    "C7_short": partial(_tail, _gaussian_box, 0.01, -1),
    "C7_long": partial(_tail, _gaussian_box, 100.0, 1),
    "C7_mean": lambda: _box_mean(1.0) / _unit_time(),
    "C8_largest_shift": _largest_shift,
    "C9_magnification_1": lambda: float(geometry.magnification(1.0)),
    "C9_magnification_sqrt2": lambda: float(geometry.magnification(2**0.5)),
    "C10_k": lambda: KMS_PER_MASYR_KPC,
    "B8_long_black_hole": partial(_tail_weight, "black_hole", 1e4, 2),
    "B8_long_star": partial(_tail_weight, "star", 1e4, 2),
    "B8_short_brown_dwarf": partial(_tail_weight, "brown_dwarf", 0.2, -1),
    "B8_short_star": partial(_tail_weight, "star", 0.2, -1),
    "B16_tau": lambda: _halo(*_LMC, 50.0).optical_depth,
    "B17_tau": lambda: _halo(*_LMC, 50.0).optical_depth,
    "B17_mass": partial(_halo_mass, 50.0),
    "B17_smc": lambda: _halo(302.8, -44.3, 60.0).optical_depth,
    "B17_bulge": lambda: _halo(1.0, -3.9, 8.5).optical_depth,
    "B18_rate_published": lambda: _halo(*_LMC, 50.0).rate,
    "B18_rate": lambda: _halo(*_LMC, 50.0).rate,
    "B18_t_hat_published": lambda: 2 * _halo(*_LMC, 50.0).mean_t_E,
    "B18_t_hat": lambda: 2 * _halo(*_LMC, 50.0).mean_t_E,
    "B23_tau": lambda: _uniform(0.1, 8.0)[0],
    "B24_300_0.10": partial(_disc, 300, 0.10),
    "B24_325_0.10": partial(_disc, 325, 0.10),
    "B24_325_0.06": partial(_disc, 325, 0.06),
    "H_tau_0.1_8": lambda: _uniform(0.1, 8.0)[0],
    "H_tau_0.06_8": lambda: _uniform(0.06, 8.0)[0],
    "H_tau_1_1": lambda: _uniform(1.0, 1.0)[0],
    "H_r_E": lambda: float(np.sqrt(RE2_PER_M_D * _BOX)),
    "H_speed_round": partial(_speed, 0, 0, 100, 100),
    "H_speed_offset_80_-40": partial(_speed, 80, -40, 110, 66.3),
    "H_speed_220_30": partial(_speed, 220, 30, 50, 20),
    "H_speed_300_0": partial(_speed, 300, 0, 30, 20),
    "H_speed_200_150": partial(_speed, 200, 150, 120, 60),
    "H_box_rate": lambda: _uniform(0.1, 8.0)[1],
    "H_box_rate_distribution": _box_rate,
    "H_box_mean": partial(_box_mean, DAYS_PER_YEAR),
    "H_box_long_1": partial(_against_tail, 1.0, 1),
    "H_box_long_10": partial(_against_tail, 10.0, 1),
    "H_box_long_101": partial(_against_tail, 101.0, 1),
    "H_box_short_3e-4": partial(_against_tail, 3e-4, -1),
    "H_box_short_1e-3": partial(_against_tail, 1e-3, -1),
    "H_box_short_3e-3": partial(_against_tail, 3e-3, -1),
}
for _offset in (50, 100, 220, 500, 1000):
    COMPUTE[f"H_speed_rice_{_offset}"] = partial(_speed, _offset, 0, 100, 100)
for _s1, _s2 in ((110, 66.3), (120, 30), (100, 1)):
    COMPUTE[f"H_speed_{_s1}_{_s2:g}"] = partial(_speed, 0, 0, _s1, _s2)
for _d in (50.0, 55.0):
    COMPUTE[f"H_halo_tau_{_d:g}"] = lambda d=_d: _halo(*_LMC_ROUND, d).optical_depth
    COMPUTE[f"H_halo_rate_{_d:g}"] = lambda d=_d: _halo(*_LMC_ROUND, d).rate
    COMPUTE[f"H_halo_mean_{_d:g}"] = lambda d=_d: _halo(*_LMC_ROUND, d).mean_t_E
for _name in CLASSES:
    COMPUTE[f"B7_tau_{_name}_sightline"] = partial(_share, _name, "optical_depth")
    if _name in ("white_dwarf", "neutron_star", "black_hole"):
        COMPUTE[f"B7_rate_{_name}_sightline"] = partial(_share, _name, "rate")
