"""Planned measurements of one event: what a facility, started at a date, would measure of everything it may be."""

from dataclasses import dataclass, fields

import astropy.units as u
import numpy as np
from scipy.spatial import cKDTree

from ..datafiles import read_set
from ..errors import InputError, one_of
from ..galaxy.frames import icrs_from_galactic
from ..remnants.tables import check_keys, number
from ..scenario import resolve
from ..surveys.facilities import Facility, LightCurve
from ..surveys.fisher import mass_errors

__all__ = ["Extra", "Started", "Target", "extras", "light_curve_of", "sharpness"]

_NODES = 7  # of theta_E
_MEMBERS = 64  # points at which errors are computed; the others take their neighbours'
_RESOLVED = 0.4  # of the spread over n^(1/6), the finest errors of t_E and pi_E: what n points resolve
_DEEP = 35.0
_LEAST_SAMPLES = 40  # epochs per t_E of a thinned light curve
_MEASURES = ("lens_light", "source_motion")


@dataclass(frozen=True, eq=False)
class Started(Facility):
    """A facility whose first epoch is not before `start` [MJD]."""

    start: float = -np.inf

    @classmethod
    def at(cls, facility, start):
        """Return the facility started at a date."""
        return cls(**{f.name: getattr(facility, f.name) for f in fields(Facility)}, start=float(start))

    def schedule(self, t_0, u_0, t_E, next_open=None):
        """As `Facility.schedule`; epochs counted from the alert wait for the start, others before it are lost."""
        if not self.number:
            times = super().schedule(t_0, u_0, t_E, next_open)
            return np.where(times < self.start, np.nan, times)
        reach = np.sqrt(np.maximum(self.alert_u**2 - np.asarray(u_0) ** 2, 0.0))
        when = np.maximum(t_0 - t_E * reach + self.first_epoch, self.start)
        times = np.empty((when.size, self.number))
        for k in range(self.number):
            when = when if next_open is None else next_open(when)
            times[:, k] = when
            when = when + self.spacing
        return times


@dataclass(frozen=True)
class Extra:
    """A measurement without a schedule: the lens's own light, or the source's proper motion.

    Attributes
    ----------
    name : str
    measures : str
        "lens_light": whether a lens shines brighter than `limit` [mag in I]; "source_motion": the source's proper
        motion with `error` [mas/yr] along each axis.
    hours : float
    limit, error : float
        NaN where they have no meaning.
    invented : bool
    """

    name: str
    measures: str
    hours: float
    limit: float = np.nan
    error: float = np.nan
    invented: bool = False


def extras(file="marram"):
    """Read the measurements without a schedule, ``[[measurement]]``, of a file of facilities.

    Parameters
    ----------
    file : str
        Name of a shipped file, or a path ending in ``.toml``.

    Returns
    -------
    list of Extra

    Raises
    ------
    InputError
        Unknown key or word, or an impossible value.
    """
    table = read_set("facilities", file)
    out = []
    for i, row in enumerate(table.get("measurement", [])):
        where = f"facilities '{file}', measurement {i + 1}"
        check_keys(where, row, ("name", "measures", "hours", "limit", "error"), ("name", "measures", "hours"))
        what = one_of(f"{where}.measures", row["measures"], _MEASURES)
        needed, other = ("limit", "error") if what == "lens_light" else ("error", "limit")
        if needed not in row or other in row:
            raise InputError(f"{where}: {what} needs {needed}, and has no {other}")
        unit, low, high = ("mag", -5.0, 40.0) if needed == "limit" else ("mas/yr", 1e-4, 1e3)
        value = {needed: number(where, row, needed, unit, low, high)}
        hours = number(where, row, "hours", "h", 1e-3, 1e4)
        out.append(Extra(str(row["name"]), what, hours, invented=bool(table.get("invented", False)), **value))
    return out


@dataclass(frozen=True)
class Target:
    """What of a running event its planning needs beside the fit.

    Attributes
    ----------
    t_0, u_0 : float
        [MJD, -]
    source, blend : float
        Magnitude of the source, and of all other light in its place, infinite for none, in the light curve's band.
    """

    t_0: float
    u_0: float
    source: float
    blend: float

    @classmethod
    def of(cls, event):
        """Read from an Observed; InputError names what is missing."""
        best = event.best_solution.plain
        missing = [name for name in ("t_0", "u_0", "I_S") if name not in best]
        if missing:
            raise InputError(f"{event.name}: no {', '.join(missing)}, so its follow-up cannot be planned")
        share, blend = best.get("source_fraction", 1.0), np.inf
        if 0.0 < share < 1.0:
            blend = best["I_S"] - 2.5 * np.log10((1.0 - share) / share)
        t_0 = best["t_0"]
        t_0 = t_0 - 2400000.5 if t_0 > 2.4e6 else t_0
        return cls(float(t_0), float(best["u_0"]), float(best["I_S"]), float(blend))


def light_curve_of(survey, target, t_E):
    """Return a survey's light curve of one event, thinned where it has far more epochs than the event needs.

    Parameters
    ----------
    survey : Campaign
    target : Target
    t_E : float
        [d]

    Returns
    -------
    LightCurve, bool
        And whether the event lies in the campaign's seasons; if not, it is taken as watched without gaps from five
        t_E before its peak to five after.
    """
    full = LightCurve.of(survey.photometry, survey.calendar)
    # independent errors: n epochs averaged are one with the error over sqrt(n)
    n = max(int(t_E / _LEAST_SAMPLES / full.cadence), 1)
    inside = bool(full.open[0, 0] <= target.t_0 <= full.open[-1, 1])
    spans = full.open
    if not inside:
        spans = np.array([[target.t_0 - 5 * t_E, target.t_0 + 5 * t_E]])
    else:
        keep = (spans[:, 1] > target.t_0 - 12 * t_E - 400) & (spans[:, 0] < target.t_0 + 12 * t_E + 400)
        spans = spans[keep]
    root = np.sqrt(n)
    thin = LightCurve(spans, full.cadence * n, full.mag, full.sigma / root, full.floor / root, full.saturation)
    return thin, inside


def image_source(line, event, band, magnitude):
    """Return the magnitude of a source in another band than the source rule's.

    A star keeps its rank in the luminosity function of its component, as in `masses.image_magnitudes`; components
    count by their sources, all at the mean source distance.
    """
    here = line.ready.sources
    if band == here.dust.band:
        return magnitude
    model = line.ready.model
    if model.scenario.luminosity:
        raise InputError(f"facility: its band is {band}, and the scenario's luminosity function has one band only")
    deep = resolve(model.scenario.replace(sources=f"limit:{band}={_DEEP:g}", kicks="none", bh_kicks="same"))
    there = deep.sources.toward(np.radians(event.l), np.radians(event.b), deep.galaxy)
    D = float(line.ready.mean_distance())
    modulus = 5.0 * np.log10(D) + 10.0
    absolute = magnitude - modulus - float(here.dust(D))
    weight = line.ready.src[0].sum(axis=1)
    weight = weight if weight.size == len(here.shining) else np.ones(len(here.shining))
    rows = [
        (w, np.interp(mine.brighter(absolute), other.cumulative, other.magnitude))
        for w, mine, other in zip(weight, here.shining, there.shining)
        if mine is not None and other is not None and w > 0
    ]
    w, m = np.array(rows).T
    return float(w @ m / w.sum()) + modulus + float(there.dust(D))


def sharpness(latent, target, light_curve, facility, line, members=_MEMBERS):
    """Return how sharply a plan measures t_E, pi_E and theta_E of everything an event may be.

    Parameters
    ----------
    latent : Latent
    target : Target
    light_curve : LightCurve
    facility : Facility or None
        None: the light curve alone.
    line : EventRates
    members : int
        Points at which errors are computed.

    Returns
    -------
    list of ndarray, shape (3, N, J)
        By class: inverse errors of ln t_E, pi_E and theta_E [1/mas], 0 for no measurement.
    hours : float
        Mean telescope time over what it may be [h].

    Notes
    -----
    Errors are those of the joint Fisher matrix, `surveys.fisher`; that of the present fit is taken out of t_E and pi_E,
    since the light curve holds it already. Correlations of the three are left out. Errors of t_E and pi_E are not
    taken as finer than a share of their present spread that the points resolve. Lens light in the images is left out.
    """
    t, p_N, p_E = latent.vectors()
    pi = np.hypot(p_N, p_E)
    # class-balanced choice, evenly through the cumulative weight
    balanced = sum(w.sum(axis=1) / max(w.sum(), 1e-300) for w in latent.weight if w.sum() > 1e-9)
    cum = np.cumsum(balanced) / balanced.sum()
    chosen = np.unique(np.minimum(np.searchsorted(cum, (np.arange(members) + 0.5) / members), cum.size - 1))
    every = np.concatenate([x[w > 1e-4 * w.max(initial=0.0)] for x, w in zip(latent.theta_E, latent.weight)])
    nodes = np.geomspace(every.min() * 0.98, every.max() * 1.02, _NODES)
    T, N_, E_ = (np.repeat(a[chosen], _NODES) for a in (t, p_N, p_E))
    n = T.size
    data = {
        "t_0": np.full(n, target.t_0), "u_0": np.full(n, target.u_0), "t_E": T, "pi_EN": N_, "pi_EE": E_,
        "theta_E": np.tile(nodes, chosen.size), "source_mag": np.full(n, target.source),
        "blend_mag": np.full(n, target.blend),
    }  # fmt: skip
    if facility is not None:
        data["image_source_mag"] = np.full(n, image_source(line, latent.event, facility.band, target.source))
    place = icrs_from_galactic(latent.event.l * u.deg, latent.event.b * u.deg)
    found = mass_errors(data, light_curve, facility, place)
    info = np.zeros((3, chosen.size, _NODES))
    with np.errstate(divide="ignore"):
        info[0] = (1.0 / found.sigma_t_E).reshape(-1, _NODES)
        info[1] = (1.0 / (found.sigma_pi_E * np.hypot(N_, E_))).reshape(-1, _NODES)
        if facility is not None:
            info[2] = (1.0 / (found.sigma_theta_E * data["theta_E"])).reshape(-1, _NODES)
    weight = latent.timescales()
    hours = float(np.average(found.hours.reshape(-1, _NODES).mean(axis=1), weights=balanced[chosen] + 1e-300))
    near = _nearest(t, p_N, p_E, chosen)
    present, finest = _present(latent, t, pi, weight)
    out = []
    for x in latent.theta_E:
        out.append(_on_masses(info, near, nodes, x, pi, present, finest))
    return out, hours


def _nearest(t, p_N, p_E, chosen):
    at = np.column_stack([np.log(t), p_N, p_E])
    at = at / np.maximum(at[chosen].std(axis=0), 1e-9)
    return cKDTree(at[chosen]).query(at)[1]


def _present(latent, t, pi, weight):
    """Inverse errors of ln t_E and pi_E of the fit so far, and the sharpest that the points resolve."""
    solution = latent.event.best_solution
    best = solution.measured
    have = [best["t_E"].value / best["t_E"].err, 0.0]
    if "pi_EN" in best:
        have[1] = 1.0 / solution.parallax()[1]
    elif "pi_E" in best:
        have[1] = 1.0 / best["pi_E"].err
    w = weight / weight.sum()
    n = 1.0 / np.sum(w**2)
    spread = []
    for x in (np.log(t), np.log(pi)):
        spread.append(max(np.sqrt(w @ (x - w @ x) ** 2), 1e-6))
    width = _RESOLVED * n ** (-1.0 / 6.0)
    return have, [1.0 / (width * s) for s in spread]


def _on_masses(info, near, nodes, theta, pi, present, finest):
    """Spread errors from members and nodes to all points and masses of one class."""
    N, J = theta.shape
    out = np.zeros((3, N, J))
    if not J:
        return out
    x = np.clip(np.interp(np.log(theta), np.log(nodes), np.arange(nodes.size)), 0, nodes.size - 1)
    i = np.minimum(x.astype(int), nodes.size - 2)
    f = x - i
    rows = near[:, None]
    for k in range(3):
        a, b = info[k][rows, i], info[k][rows, i + 1]
        out[k] = np.where((a > 0) & (b > 0), (1 - f) * a + f * b, 0.0)
    # the light curve's t_E is that of the point, whatever the mass
    out[0] = out[0].max(axis=1, keepdims=True)
    for k, scale in ((0, np.ones(N)), (1, pi)):
        new = np.sqrt(np.maximum(out[k] ** 2 - present[k] ** 2, 0.0))
        # a hundredth of a measurement is none
        new = np.where(new > 0.1 * present[k], new, 0.0)
        out[k] = np.minimum(new, finest[k] / scale[:, None])
    out[0] = out[0].min(axis=1, keepdims=True)
    return out
