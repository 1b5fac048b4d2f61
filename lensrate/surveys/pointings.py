"""Where to point: fields of a map in the order of the events that a unit of survey time brings."""

import math

import astropy.units as u
import numpy as np

from ..errors import InputError, one_of
from ..units import DAYS_PER_YEAR, strip

__all__ = ["FORMULA", "PER", "rank"]

PER = ("field", "star")
FORMULA = (
    "events per field and year = field area x mean over it of (rate per source star x source density x efficiency, "
    "where one is given, x weight); events per hour = that / (visit time x visits per year)"
)
_ARCMIN2_PER_DEG2 = 3600.0
_OVERLAP = 0.02  # of a field's side, so that degrees of longitude do not push fields one pixel apart


def rank(
    skymap, lens="black_hole", *, top=20, area=None, visit=None, cadence=1.0 * u.day, per="field", weight=None
):  # fmt: skip
    """Rank pointings by the expected events of a class per unit of survey time.

    Parameters
    ----------
    skymap : SkyMap
        On a grid, fields are squares of the camera's area, and none overlaps a better one. In a list, each field is
        a pointing of its own.
    lens : str
        Class, or "all".
    top : int
        Pointings wanted; fewer where the map holds no more.
    area : Quantity, optional
        Of the camera [deg2], one or, for a list, one for each field; if not given that of a campaign's fields, else
        1 deg2.
    visit : Quantity, optional
        Time of one visit with its overheads, one or, for a list, one for each field. Without it the order is that of
        events per field and year.
    cadence : Quantity
        Time from visit to visit. Together with `visit` it gives the telescope's time a field takes.
    per : str
        "field", or "star": events per monitored source star, for a survey that is limited by the stars it can follow.
    weight : callable or array_like, optional
        Called with the map, returns a factor for each pixel, (n,): for example the share of events whose mass will be
        measured.

    Returns
    -------
    astropy.table.QTable
        Columns rank, name (of a list), l, b, events_per_field_yr, events_per_hour (with `visit`), rate (per star),
        stars (in the field), share, mean_t_E; the best first. The formula is in its metadata.

    Raises
    ------
    InputError
        Unknown class, a number that is not above zero, a weight of another shape, or a map without source counts.

    Notes
    -----
    N = A <Gamma n_S epsilon w>, averaged over the field, its pixels weighed with the solid angle that is inside;
    events per hour = N / (t_visit x 365.25 d / cadence). A season shorter than the year cancels.
    """
    from astropy.table import QTable

    one_of("lens class", lens, skymap.classes)
    one_of("per", per, PER)
    if isinstance(top, bool) or not isinstance(top, (int, np.integer)) or top < 1:
        raise InputError(f"top: {top!r} given, a whole number from 1 up is needed")
    n, grid = skymap.size, skymap.grid
    if area is None:
        area = (1.0 if skymap.area_deg2 is None else skymap.area_deg2) * u.deg**2
    A = _positive("area", area, u.deg**2, n, grid)
    w = _weights(weight, skymap)
    detected = skymap.detected is not None
    density = skymap.per_deg2(lens, detected) * w
    stars = np.nan_to_num(skymap.source_density) * _ARCMIN2_PER_DEG2
    if grid is not None:
        half = 0.5 * math.sqrt(float(A))
        solid = grid.areas()
        density, stars = (_field_means(grid, half, v * solid, solid) for v in (np.nan_to_num(density), stars))
        inside = _inside(grid, half)
    else:
        inside = np.ones(n, dtype=bool)
    events, monitored = density * A, stars * A
    per_star = np.divide(events, monitored, out=np.zeros(n), where=monitored > 0)
    hours = None
    if visit is not None:
        each = _positive("visit", visit, u.hour, n, grid)
        every = float(_positive("cadence", cadence, u.day, 1, grid))
        hours = events / (each * DAYS_PER_YEAR / every)
    merit = per_star if per == "star" else events if hours is None else hours
    merit = np.where(inside, np.nan_to_num(merit), -1.0)
    chosen = _apart(grid, merit, 2 * half, top) if grid is not None else np.argsort(-merit, kind="stable")[:top]
    chosen = [i for i in chosen if merit[i] > 0]
    out = QTable()
    out["rank"] = np.arange(1, len(chosen) + 1)
    if skymap.names:
        out["name"] = [skymap.names[i] for i in chosen]
    out["l"], out["b"] = skymap.l[chosen], skymap.b[chosen]
    found = "found" if detected else "expected, no efficiency"
    _add(out, "events_per_field_yr", events[chosen] / u.yr, f"events of {lens} {found}, per field and year")
    if hours is not None:
        _add(out, "events_per_hour", hours[chosen] / u.hour, "the same per hour of telescope time")
    _add(out, "rate", per_star[chosen] / u.yr, f"events of {lens} {found}, per source star and year, mean of the field")
    _add(out, "stars", monitored[chosen], "source stars in the field")
    _add(out, "share", skymap.share(lens)[chosen], f"share of {lens} in all events at the centre, no efficiency")
    _add(out, "mean_t_E", skymap.mean_t_E(lens)[chosen] * u.day, f"of {lens} at the centre, no efficiency")
    out.meta.update(
        {
            **skymap.meta(),
            "ranked": {
                "lens": lens,
                "asked": int(top),
                "per": per,
                "formula": FORMULA,
                "field_area_deg2": A.tolist(),
                "visit_h": None if visit is None else each.tolist(),
                "cadence_d": None if visit is None else every,
                "weighted": weight is not None,
            },
        }
    )
    return out


def _add(table, name, values, description):
    table[name] = values
    table[name].info.description = description


def _positive(name, given, unit, n, grid):
    """One number or, for a list of fields, n of them, above zero."""
    value = np.asarray(strip(name, given, unit))
    if value.ndim and (grid is not None or value.shape != (n,)):
        few = "one number is needed on a grid" if grid is not None else f"one or {n} are needed"
        raise InputError(f"{name}: {value.size} numbers given, {few}")
    if not np.all(value > 0):
        raise InputError(f"{name}: {value.min():g} {unit} given, must be above 0")
    return value


def _weights(weight, skymap):
    if weight is None:
        return np.ones(skymap.size)
    w = np.asarray(weight(skymap) if callable(weight) else weight, dtype=float)
    if w.shape != (skymap.size,) or not np.all(w >= 0):
        raise InputError(f"weight: shape {w.shape} given; {skymap.size} numbers from 0 up, one a pixel, are needed")
    return w


def _field_means(grid, half, weighted, weights):
    """Mean over the square field around every pixel, pixels that it cuts counted with the part inside."""
    n_b, n_l = grid.shape
    _, b = grid.axes()
    around = n_l * grid.step > 360.0 - 1e-6
    up = half / grid.step
    sums = [_windows(np.asarray(v).reshape(n_b, n_l).T, up, False).T for v in (weighted, weights)]
    out = np.zeros((n_b, n_l))
    for j in range(n_b):
        # degrees of longitude shrink with latitude
        wide = min(up / max(math.cos(math.radians(b[j])), 1e-6), 0.5 * n_l if around else n_l)
        above, below = (_windows(v[j], wide, around) for v in sums)
        out[j] = above / below
    return out.ravel()


def _windows(v, half, around):
    """Sums over windows of `half` pixels on either side along the last axis, cut at the ends or going around."""
    n = v.shape[-1]
    extra = int(math.ceil(half)) + 1 if around else 0
    if around:
        v = np.concatenate([v[..., (n - extra) % n :], v, v[..., :extra]], axis=-1) if extra < n else np.tile(v, 3)
        extra = extra if extra < n else n
    run = np.concatenate([np.zeros((*v.shape[:-1], 1)), np.cumsum(v, axis=-1)], axis=-1)
    middle = extra + np.arange(n) + 0.5
    return _between(run, middle + half) - _between(run, middle - half)


def _between(run, x):
    """Straight lines between the running sums, cut at the ends."""
    x = np.clip(x, 0.0, run.shape[-1] - 1)
    i = np.minimum(x.astype(int), run.shape[-1] - 2)
    return run[..., i] + (x - i) * (run[..., i + 1] - run[..., i])


def _inside(grid, half):
    """Pixels around which a whole field lies on the map, as far as the map is as large as a field."""
    n_b, n_l = grid.shape
    l, b = grid.axes()
    edge = 0.5 * grid.step * (1 + 1e-6)
    rows = (b - half >= b[0] - edge) & (b + half <= b[-1] + edge)
    rows = rows if rows.any() else np.ones(n_b, dtype=bool)
    if n_l * grid.step > 360.0 - 1e-6:
        return np.repeat(rows, n_l)
    wide = half / np.maximum(np.cos(np.radians(b)), 1e-6)[:, None]
    columns = (l - wide >= l[0] - edge) & (l + wide <= l[-1] + edge)
    columns[~columns.any(axis=1)] = True
    return (rows[:, None] & columns).ravel()


def _apart(grid, merit, side, top):
    """Best pixels one after the other, no two fields overlapping by more than a fiftieth of their side."""
    l, b = grid.centres()
    free, chosen = merit > 0, []
    cos = np.cos(np.radians(b))
    while len(chosen) < top and free.any():
        i = int(np.argmax(np.where(free, merit, -1.0)))
        chosen.append(i)
        dl = np.abs((l - l[i] + 180.0) % 360.0 - 180.0) * np.minimum(cos, cos[i])
        free &= (dl >= side * (1 - _OVERLAP)) | (np.abs(b - b[i]) >= side * (1 - _OVERLAP))
        free[i] = False
    return chosen
