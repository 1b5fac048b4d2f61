"""Samples drawn from templates, as the likelihood sees them."""

import math

import numpy as np

from ..events.fold import LN_T, STEP
from .data import made, mass_weight
from .likelihood import moved, resloped
from .selection import Selection

__all__ = ["mass_shift", "mock"]


def mock(templates, part_weight, rng, sigma=0.05, slope=0.0, shift=0.0, stretch=1.0, mass_error=0.2, measured=None,
         selection=None, rate=None, seen=None, ln_mass=0.0):  # fmt: skip
    """Return the Data of a sample drawn from the templates.

    Parameters
    ----------
    templates : Templates
    part_weight : ndarray, shape (R,)
        Weight of every part; stellar ones count once.
    rng : Generator
    sigma : float
        Error of ln t_E of every event.
    slope, shift, stretch : float
        True nuisances of the stellar parts.
    mass_error : float
        Error of ln M of those whose mass is measured.
    measured : dict of str to float, optional
        Probability by class that the mass is measured, nowhere else.
    selection : Selection, optional
        Stages of the sample instead of `measured`; the likelihood must be told the same. A parallax that is no mass
        counts by its being there.
    rate : ndarray, shape (F,), optional
        Factor of each field's number.
    seen : Templates, optional
        Those of the inference, where another scenario is true.
    ln_mass : float
        ln of the factor on the masses of neutron stars and black holes.

    Returns
    -------
    Data, lens
        And the class of every event, as text.
    """
    rows = templates.rate.copy()
    stellar, factor = resloped(templates, slope)
    rows[:, templates.stellar] = moved(stellar, shift, stretch)
    dark = np.array([p.lens in ("neutron_star", "black_hole") for p in templates.parts])
    if ln_mass:
        rows[:, dark] = math.exp(0.5 * ln_mass) * moved(rows[:, dark], 0.5 * ln_mass, 1.0)
    rows[:, dark] *= factor[:, None, None]
    found = rows * templates.efficiency[:, None, :] * np.asarray(part_weight)[:, None]
    if rate is not None:
        found = found * np.asarray(rate)[:, None, None]
    fields, x, part = [], [], []
    for f in range(found.shape[0]):
        flat = np.cumsum(found[f].ravel())
        n = rng.poisson(flat[-1] * STEP)
        at = np.searchsorted(flat, rng.random(n) * flat[-1])
        part.append(at // LN_T.size)
        x.append(LN_T[at % LN_T.size] + STEP * (rng.random(n) - 0.5))
        fields.append(np.full(n, f))
    field, x, part = np.concatenate(fields), np.concatenate(x), np.concatenate(part)
    lens = np.array([templates.parts[r].lens for r in part])
    target = templates if seen is None else seen
    weight = np.ones((x.size, len(target.parts)))
    if selection is None and measured:
        selection = Selection(mass={c: float(measured.get(c, 0.0)) for c in {*templates.classes, *target.classes}})
    if selection is not None:
        reached, listed = selection.draw(lens, rng)
        field, x, part, lens, reached = (v[listed] for v in (field, x, part, lens, reached))
        by = {r: [selection.weight(q.lens, r) for q in target.parts] for r in np.unique(reached)}
        weight = np.array([by[r] for r in reached]).reshape(x.size, len(target.parts))
        has = reached == "mass"
        mean, spread = (np.array([getattr(q, k) for q in templates.parts])[part[has]] for k in ("ln_mass", "spread"))
        mean = mean + ln_mass * dark[part[has]]
        seen_mass = mean + np.hypot(mass_error, spread) * rng.standard_normal(mean.size)
        weight[has] *= mass_weight(target, seen_mass, mass_error)
    error = np.full(x.size, float(sigma))
    return made(target, field, x + sigma * rng.standard_normal(x.size), error, weight), lens


def mass_shift(parameters, theta):
    """Return ln of the factor on remnants' masses among parameter values, 0 where it is none of them."""
    names = [p.name for p in parameters]
    return float(np.log(theta[names.index("remnant_mass")])) if "remnant_mass" in names else 0.0
