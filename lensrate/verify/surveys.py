"""Optical depths, rates and timescales that surveys measured, recomputed: one function for each row.

Totals come from the product rule alone, which needs no distribution of timescales and is ten times faster.
"""

from functools import cache, partial

import numpy as np

from ..lensing import rates
from ..lensing.quadrature import Numerics
from ..scenario import Scenario, resolve
from ..units import DAYS_PER_YEAR

__all__ = ["COMPUTE", "LATITUDES"]

LATITUDES = (1.5, 2.0, 3.0, 4.0, 5.0, 6.0)  # deg from the plane
_LONGITUDES = (-2.25, -0.75, 0.75, 2.25)  # deg, midpoints of four strips of |l| < 3
_SIGN = {"south": -1, "north": 1}
# EROS-2's directions in the spiral arms (l, b in deg) and millions of stars: Rahal+ 2009, A&A 500, 1027 (memory)
_ARMS = ((26.6, -2.2, 3.0), (18.5, -2.1, 2.4), (-29.0, -2.4, 5.2), (-53.0, -1.5, 2.3))


@cache
def _model(rule):
    return resolve(Scenario.read("default").replace(sources=rule))


@cache
def _totals(l, b, rule):
    """Optical depth and rate [1/yr] of all classes toward l, b [deg]."""
    model = _model(rule)
    l, b = np.radians(l), np.radians(b)
    galaxy = model.galaxy
    numerics = Numerics(**model.scenario.numerics)
    ready = rates.prepare(model, galaxy.sightline(l, b), model.sources.toward(l, b, galaxy), numerics)
    tau, gamma, _ = rates.moments(ready)
    tau, gamma = tau.sum(axis=1), gamma.sum(axis=1)
    if model.kicked is not None:
        more_tau, more_gamma, _ = rates.kicked_moments(ready)
        tau, gamma = np.concatenate([tau, more_tau]), np.concatenate([gamma, more_gamma])
    mass, root = (_moments(model, power) for power in (1.0, 0.5))
    return float(mass @ tau), float(root @ gamma) * model.scenario.u_0_limit


def _moments(model, power):
    """Sum of number times mass^power over the classes, by element, per stated solar mass."""
    return np.array([sum(s.moment(power) for s in column if s is not None) for column in zip(*model.spectra())])


@cache
def _strip(b, rule="limit:I=21"):
    """Mean optical depth and rate over |l| < 3 deg at latitude b [deg]."""
    return tuple(np.mean([_totals(l, b, rule) for l in _LONGITUDES], axis=0))


def _at(side, b, which, rule="limit:I=21"):
    return float(_strip(_SIGN[side] * b, rule)[which])


def _mean_time(side, b):
    """Mean t_E [d] from the identity tau = (pi/2) Gamma <t_E>."""
    tau, gamma = _strip(_SIGN[side] * b)
    return float(2 / np.pi * tau / gamma * DAYS_PER_YEAR)


def _slope(side, which, rule="limit:I=21"):
    """e-folds per degree toward the plane, by least squares."""
    values = [_at(side, b, which, rule) for b in LATITUDES]
    return -float(np.polyfit(LATITUDES, np.log(values), 1)[0])


def _rises(side):
    """In how many of the steps away from the plane the mean t_E rises."""
    return int(np.sum(np.diff([_mean_time(side, b) for b in LATITUDES]) > 0))


def _arms(rule):
    """Optical depth averaged over EROS-2's stars in the spiral arms."""
    stars = np.array([row[2] for row in _ARMS])
    return float(stars @ [_totals(l, b, rule)[0] for l, b, _ in _ARMS] / stars.sum())


COMPUTE = {
    "A16_tau": lambda: _totals(1.50, -2.68, "clump")[0],
    "A18_tau": lambda: _totals(1.16, -2.75, "clump")[0],
    "A20_tau": partial(_at, "south", 3.0, 0, "clump"),
    "A20_slope": partial(_slope, "south", 0, "clump"),
    "A21_tau": lambda: _totals(2.5, -4.0, "clump")[0],
    "A24_all": partial(_arms, "limit:I=19.5"),
    "A24_bright": partial(_arms, "limit:I=18.5"),
}
for _side in _SIGN:
    for _b in LATITUDES:
        COMPUTE[f"tau_{_side}_{_b:g}"] = partial(_at, _side, _b, 0)
        COMPUTE[f"rate_{_side}_{_b:g}"] = partial(_at, _side, _b, 1)
        COMPUTE[f"t_E_{_side}_{_b:g}"] = partial(_mean_time, _side, _b)
    COMPUTE[f"tau_{_side}_slope"] = partial(_slope, _side, 0)
    COMPUTE[f"rate_{_side}_slope"] = partial(_slope, _side, 1)
    COMPUTE[f"t_E_{_side}_rises"] = partial(_rises, _side)
