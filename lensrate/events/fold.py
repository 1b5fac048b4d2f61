"""A forecast folded into what a survey reports: efficiency at the true timescale, then errors of measurement.

Everything lives on one grid of ln t_E, so that fields, classes and scenarios add up as arrays.
"""

from dataclasses import dataclass, replace
from functools import cached_property

import astropy.units as u
import numpy as np
from scipy.special import ndtr

from ..errors import InputError
from ..galaxy.frames import icrs_from_galactic
from ..lensing import rates
from ..lensing.earth import to_heliocentric
from ..lensing.sightline import sightline
from ..parallel import run_map
from ..sources.rules import LimitRule, PeakRule
from ..surveys.efficiency import Efficiency
from ..surveys.sky import Circle, Patch, to_plane
from ..surveys.stars import field_curve
from ..surveys.yields import campaign
from ..units import DAYS_PER_YEAR
from .observed import size_of_vector

__all__ = ["LN_T", "STEP", "Errors", "Folded", "assign", "fold_campaign", "fold_groups", "grouped", "heliocentric"]

STEP = 0.0125 * np.log(10.0)
#: ln(t_E / d) of every folded distribution, 1e-3 to 1e5 d
LN_T = np.log(1e-3) + STEP * np.arange(641)
_PARTS = 4  # of a cell, over which an efficiency is averaged
_LEVELS = (0.1, 0.3, 0.5, 0.7, 0.9)  # of the spread of errors at one timescale
_WINDOWS = 6  # of source distance, in which a source's rate is worked out
_RADIUS = 0.6  # deg, events closer than this share a sightline
_MOST_GROUPS = 12


def on_grid(t_E, pdf):
    """Return distributions per ln t_E, (..., n), interpolated onto `LN_T`, zero outside theirs."""
    x, pdf = np.log(t_E), np.asarray(pdf, dtype=float)
    h = x[1] - x[0]
    # Catmull-Rom: the same interpolation as of quantiles
    padded = np.concatenate([np.zeros((*pdf.shape[:-1], 2)), pdf, np.zeros((*pdf.shape[:-1], 2))], axis=-1)
    place = (LN_T - x[0]) / h
    i = np.clip(np.floor(place).astype(int), -1, x.size - 1)
    s = np.clip(place - i, 0.0, 1.0)
    f = [padded[..., i + 1 + j] for j in range(4)]
    d0, d1 = 0.5 * (f[2] - f[0]), 0.5 * (f[3] - f[1])
    out = f[1] + s * (d0 + s * (3 * (f[2] - f[1]) - 2 * d0 - d1 + s * (2 * (f[1] - f[2]) + d0 + d1)))
    return np.where((place >= -1) & (place <= x.size), np.maximum(out, 0.0), 0.0)


def on_cells(curve):
    """Return an efficiency averaged over the cells of `LN_T`."""
    inner = (np.arange(_PARTS) + 0.5) / _PARTS - 0.5
    return curve.of(np.exp(LN_T[:, None] + STEP * inner)).mean(axis=1)


@dataclass(frozen=True, eq=False)
class Errors:
    """Relative errors of t_E in a sample: a trend with timescale, and the spread around it.

    Attributes
    ----------
    trend : (float, float)
        Level and slope of ln(sigma of ln t_E) at and against ln t_E - `pivot`.
    pivot : float
    spread : tuple of float
        Offsets of ln sigma from the trend, equally likely.
    """

    trend: tuple
    pivot: float
    spread: tuple

    @classmethod
    def of(cls, x, sigma):
        """Fit to events: x = ln t_E, sigma = error of it."""
        y, pivot = np.log(sigma), float(np.mean(x))
        if x.size >= 8 and np.ptp(x) > 0.5:
            slope, level = np.polyfit(x - pivot, y, 1)
        else:
            slope, level = 0.0, float(np.median(y))
        rest = y - level - slope * (x - pivot)
        return cls((float(level), float(slope)), pivot, tuple(float(q) for q in np.quantile(rest, _LEVELS)))

    def sigma(self, x, level=0.0):
        """Return the error of ln t_E at ln t_E = x, for an offset of the spread."""
        return np.exp(np.clip(self.trend[0] + self.trend[1] * (x - self.pivot) + level, np.log(1e-4), np.log(2.0)))

    @cached_property
    def matrix(self):
        """Density of the observed ln t_E (rows) given the true one (columns), on `LN_T`, times the step."""
        edges = np.append(LN_T - 0.5 * STEP, LN_T[-1] + 0.5 * STEP)
        out = np.zeros((LN_T.size, LN_T.size))
        for level in self.spread:
            out += np.diff(ndtr((edges[:, None] - LN_T) / self.sigma(LN_T, level)), axis=0)
        return out / len(self.spread)

    def draw(self, x, rng):
        """Return errors of ln t_E for true values x."""
        return self.sigma(x, rng.choice(self.spread, np.shape(x)))


@dataclass(frozen=True, eq=False)
class Folded:
    """What a scenario says a survey finds, by field (or group of events), class and true timescale.

    Attributes
    ----------
    scenario : Scenario
    names : tuple of str
        Fields, or groups.
    classes : list of str
    rate : ndarray, shape (F, C, n)
        Events per ln t_E with every event found; absolute where `anchored`, else in units that differ from field to
        field.
    efficiency : ndarray, shape (F, n)
    anchored : ndarray of bool, shape (F,)
        Whether the number of stars monitored is stated, so that the expected number means something.
    star_years : ndarray, shape (F,)
        Stars times years; NaN for groups.
    sightlines : tuple of Sightline
    curves : tuple of Efficiency
    survey : Campaign or None
    stated : Efficiency
        As it was given, before it was averaged for each field.
    meta : dict
    warnings, references : tuple of str
    """

    scenario: object
    names: tuple
    classes: list
    rate: np.ndarray
    efficiency: np.ndarray
    anchored: np.ndarray
    star_years: np.ndarray
    sightlines: tuple
    curves: tuple
    survey: object
    stated: object
    meta: dict
    warnings: tuple = ()
    references: tuple = ()

    @cached_property
    def found(self):
        """Events found per ln t_E (true), (F, C, n)."""
        return self.rate * self.efficiency[:, None, :]

    def expected(self):
        """Return events by field and class, (F, C)."""
        return self.found.sum(axis=2) * STEP

    def observed(self, errors):
        """Return events found per observed ln t_E, (F, C, n), for an `Errors`."""
        return self.found @ errors.matrix.T

    @cached_property
    def _magnitudes(self):
        return {}

    def magnitude_shares(self, field, edges):
        """Return the share of a field's found events with source magnitudes between edges, (m,); None where unknown.

        The rate of each magnitude's own sources enters; unless the efficiency depends on magnitude, every magnitude is
        found equally well.
        """
        ready = self.sightlines[field]._integrals.ready
        rule = ready.sources.rule
        if not isinstance(rule, (LimitRule, PeakRule)) or rule.band != "I":
            return None
        key = (field, tuple(edges))
        if key not in self._magnitudes:
            below = _rate_brighter(ready, edges)
            share = np.diff(below)
            curve = self.stated
            if curve.second == "I_S":
                total, t = self.rate[field].sum(axis=0), np.exp(LN_T)
                middle = 0.5 * (np.asarray(edges)[1:] + np.asarray(edges)[:-1])
                share = share * [float(total @ curve.of(t, np.full(t.size, m))) for m in middle]
            self._magnitudes[key] = share / share.sum() if share.sum() > 0 else None
        return self._magnitudes[key]


def _rate_brighter(ready, edges):
    """Rate of events on sources brighter than magnitudes, up to a constant, stars as lenses."""
    D, whole, rule = ready.D_S, ready.sources.per_msun(ready.D_S), ready.sources.rule
    roots = np.array([0.0 if p is None else p.spectra["star"].moment(0.5) for p in ready.model.populations])
    # the rate of a source against its distance, from windows that hold equally many sources
    weight = ready.src[0].sum(axis=0)
    window = np.minimum((np.cumsum(weight) * _WINDOWS).astype(int), _WINDOWS - 1)
    at, rate = [], []
    for k in np.unique(window[weight > 0]):
        src = ready.src.copy()
        src[0] *= window == k
        mine = src[0].sum(axis=0)
        at.append(float(mine @ D / mine.sum()))
        rate.append(float(roots @ rates.moments(replace(ready, src=src))[1].sum(axis=1) / mine.sum()))
    each = np.interp(D, at, rate)
    out = []
    for m in edges:
        brighter = replace(ready.sources, rule=replace(rule, magnitude=float(min(m, rule.magnitude))))
        share = np.divide(brighter.per_msun(D), whole, out=np.zeros_like(whole), where=whole > 0)
        out.append(float(np.sum(ready.src[0] * share * each)))
    return np.array(out)


def fold_campaign(survey, scenario=None, jobs=1, progress=None, forecast=None):
    """Fold a scenario through a campaign.

    Parameters
    ----------
    survey : Campaign or str
    scenario : Scenario or str, optional
        Default the campaign's own.
    jobs : int
        Threads over fields.
    progress : str, optional
    forecast : CampaignForecast, optional
        One already made, instead.

    Returns
    -------
    Folded

    Raises
    ------
    InputError
        As `surveys.yields.campaign`.
    """
    made = campaign(survey, scenario, jobs=jobs, progress=progress) if forecast is None else forecast
    survey = made.campaign
    years = survey.calendar.exposure(survey.efficiency.includes).sum() / DAYS_PER_YEAR
    rows, curves = [], []
    for f in made.fields:
        curves.append(field_curve(survey.efficiency, survey.u_0_limit, f.sightline._integrals.ready))
        rows.append(_scaled(f.sightline, f.sources * f.rate_factor * years))
    return Folded(
        made.scenario, tuple(f.field.name for f in made.fields), list(made.classes), np.array(rows),
        np.array([on_cells(c) for c in curves]), np.array([f.counted == "stated" for f in made.fields]),
        np.array([f.sources * years for f in made.fields]), tuple(f.sightline for f in made.fields), tuple(curves),
        survey, survey.efficiency, made.meta(), made.warnings, made.references,
    )  # fmt: skip


def _scaled(line, factor):
    """Rate on the grid, each class's total that of the forecast."""
    pdf = on_grid(line.t_E, line.rate_per_ln_t_E)
    total = pdf.sum(axis=1) * STEP
    wanted = np.array([line.lenses[name].rate for name in line.classes]) * factor
    return pdf * np.divide(wanted, total, out=np.zeros_like(total), where=total > 0)[:, None]


def fold_groups(places, scenario, efficiency=None, jobs=1, progress=None, executor=None):
    """Fold a scenario along the sightlines of groups of events: shapes only, no numbers.

    Parameters
    ----------
    places : list of (float, float)
        l, b [deg] of each sightline.
    scenario : Scenario
        With its source rule.
    efficiency : Efficiency, optional
        Without one every event counts as found.
    jobs, progress, executor
        As `parallel.run_map`, over places.

    Returns
    -------
    Folded
    """
    curve = efficiency or Efficiency.complete(scenario.u_0_limit)

    def one(place):
        return sightline(place[0] * u.deg, place[1] * u.deg, scenario)

    # the first alone, so that threads do not compile the same kernels at once
    alone = [one(places[0])] if executor is None else []
    lines = [*alone, *run_map(one, places[len(alone) :], jobs, executor, progress)]
    rows = np.array([_scaled(line, 1.0) for line in lines])
    curves = [field_curve(curve, scenario.u_0_limit, line._integrals.ready) for line in lines]
    meta = {k: v for k, v in lines[0].meta().items() if k not in ("l_deg", "b_deg", "field_mismatch")}
    warnings = tuple(dict.fromkeys(w for line in lines for w in line.warnings))
    return Folded(
        scenario, tuple(f"{l:.2f}{b:+.2f}" for l, b in places), list(lines[0].classes), rows,
        np.array([on_cells(c) for c in curves]), np.zeros(len(places), dtype=bool), np.full(len(places), np.nan),
        tuple(lines), tuple(curves), None, curve, meta, warnings, lines[0].references,
    )  # fmt: skip


def assign(events, fields):
    """Return the index of the field that each event lies in, (n,); -1 where none; the first of several.

    A field of which only the area is known is taken as a circle of that area.

    Parameters
    ----------
    events : sequence of Observed
    fields : sequence of Field
    """
    l, b = np.radians([[e.l for e in events], [e.b for e in events]])
    out = np.full(len(events), -1)
    for i in reversed(range(len(fields))):
        f = fields[i]
        x, y, front = to_plane(*np.radians([f.l_deg, f.b_deg]), l, b)
        shape = Circle(np.sqrt(f.shape.area / np.pi)) if isinstance(f.shape, Patch) else f.shape
        out[front & shape.inside(x, y)] = i
    return out


def grouped(events):
    """Group events into few sightlines: returns the places (l, b) [deg] and each event's group."""
    l = np.array([e.l for e in events])
    l, b = (l + 180.0) % 360.0 - 180.0, np.array([e.b for e in events])
    if np.ptp(l) > 180.0:
        l = l % 360.0
    radius = _RADIUS
    while True:
        left, index, places = np.ones(l.size, dtype=bool), np.full(l.size, -1), []
        while left.any() and len(places) <= _MOST_GROUPS:
            at = np.flatnonzero(left)
            near = np.hypot((l[at, None] - l[at]) * np.cos(np.radians(b[at])), b[at, None] - b[at]) < radius
            mine = at[near[np.argmax(near.sum(axis=1))]]
            index[mine] = len(places)
            places.append((float(l[mine].mean()), float(b[mine].mean())))
            left[mine] = False
        if not left.any() and len(places) <= _MOST_GROUPS:
            return places, index
        radius *= 1.4


def heliocentric(events):
    """Return each event's ln t_E, its error, and the best solution's parallax, heliocentric where that can be had.

    Parameters
    ----------
    events : sequence of Observed

    Returns
    -------
    x, sigma : ndarray, shape (n,)
    pi_E : list of (float, float, bool) or None
        Size, error, and whether it is the size of a vector of two components.
    notes : list of str
    """
    x, sigma, parallax, stuck, several = np.empty(len(events)), np.empty(len(events)), [], 0, 0
    for i, e in enumerate(events):
        t = e.t_E
        value, size = t.value, None
        best = e.best_solution
        several += len(e.solutions) > 1
        vector = _vector(best)
        if vector is not None:
            north, east, error = vector
            if e.frame == "geocentric":
                ra, dec = icrs_from_galactic(e.l * u.deg, e.b * u.deg)
                hel = to_heliocentric(value * u.day, north, east, e.t_0par, ra, dec)
                value, north, east = float(hel[0].to_value(u.day)), float(hel[1]), float(hel[2])
            size = (float(np.hypot(north, east)), error, True)
        else:
            stuck += e.frame == "geocentric"
            if "pi_E" in best.measured:
                m = best.measured["pi_E"]
                size = (m.value, m.err, False)
        x[i] = np.log(value)
        sigma[i] = 0.5 * (np.log1p(t.hi / t.value) - np.log1p(-min(t.lo / t.value, 0.95)))
        parallax.append(size)
    notes = []
    if stuck:
        notes.append(
            f"{stuck} geocentric events have no parallax components: their t_E is compared as it stands, though the "
            "forecast is heliocentric"
        )
    if several:
        notes.append(f"{several} events have several solutions: the best of each is compared")
    if not np.all(np.isfinite(x)):
        bad = next(e.name for e, v in zip(events, x) if not np.isfinite(v))
        raise InputError(f"event '{bad}': its heliocentric t_E is not finite; check its parallax and t_0par")
    return x, np.maximum(sigma, 1e-4), parallax, notes


def _vector(solution):
    """Components of the parallax and an error of its size, from numbers or draws; None where there are none."""
    if "pi_EN" in solution.measured:
        n, e = solution.measured["pi_EN"], solution.measured["pi_EE"]
        vn, ve, cross = n.err**2, e.err**2, solution.pi_E_corr * n.err * e.err
        north, east = n.value, e.value
    elif solution.draws is not None and "pi_EN" in solution.draws.columns:
        d = solution.draws
        (vn, cross), (_, ve) = np.cov(d.columns["pi_EN"], d.columns["pi_EE"], aweights=d.weight)
        north, east = (float(np.average(d.columns[c], weights=d.weight)) for c in ("pi_EN", "pi_EE"))
    else:
        return None
    return north, east, size_of_vector(north, east, vn, ve, cross)[1]
