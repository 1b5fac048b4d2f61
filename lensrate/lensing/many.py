"""Many sightlines at once: read directions from a table, forecast each, gather one table."""

import astropy.units as u
import numpy as np

from ..errors import InputError, did_you_mean
from ..galaxy.frames import galactic_from_icrs
from ..parallel import run_map
from ..scenario import Scenario, resolve
from ..sources.bands import BANDS
from ..units import check_range, strip
from .sightline import sightline

__all__ = ["directions_of", "forecasts", "gather", "sightlines"]

_EXTINCTIONS = tuple(f"A_{band}" for band in BANDS)
_DUST_WORDS = ("extinction", "reddening", "dust")


def directions_of(table, icrs=False, where="table", more=()):
    """Return Galactic directions and measured extinctions from a table's columns.

    Parameters
    ----------
    table : astropy.table.Table
        Columns l, b (or ra, dec) in degrees unless they carry a unit; optional A_V, A_I, A_J, A_H, A_Ks in mag, where
        an empty cell leaves the dust disc's value. Other columns are carried along.
    icrs : bool
        Take ra, dec.
    where : str
        Which table, for complaints.
    more : tuple of str
        Further columns that the caller reads.

    Returns
    -------
    l, b : Quantity, shape (n,)
    extinction : list of dict
        Measured A by band, empty where there is none.
    carried : astropy.table.Table
        The table's other columns.

    Raises
    ------
    InputError
        Missing column, one that nearly has the name of a known one, unknown extinction, text, NaN, a latitude beyond
        90 or a right ascension outside 0 to 360, with row and value.
    """
    wanted = ("ra", "dec") if icrs or ("l" not in table.colnames and "ra" in table.colnames) else ("l", "b")
    values = []
    for name in wanted:
        if name not in table.colnames:
            near = did_you_mean(name, table.colnames)
            raise InputError(f"{where}: no column '{name}'{near} (columns: {', '.join(table.colnames)})")
        values.append(_column(table, name, u.deg, where))
    spans = ((0.0, 360.0) if wanted[0] == "ra" else (-np.inf, np.inf), (-90.0, 90.0))
    for name, column, (low, high) in zip(wanted, values, spans):
        for i in np.flatnonzero((column < low) | (column > high))[:1]:
            raise InputError(
                f"{where}: row {i + 1}, column {name}: {column[i]:g} deg given, must be between {low:g} and {high:g}"
            )
    lon, lat = (v * u.deg for v in values)
    if wanted[0] == "ra":
        lon, lat = galactic_from_icrs(lon, lat)
    extinction = [{} for _ in values[0]]
    _refuse_near_misses(table, where, ("l", "b", "ra", "dec", *_EXTINCTIONS, *more))
    for name in _EXTINCTIONS:
        if name not in table.colnames:
            continue
        for row, a in zip(extinction, _column(table, name, u.mag, where, blanks=True)):
            if np.isfinite(a):
                row[name[2:]] = float(a)
    used = {*wanted, *_EXTINCTIONS}
    return lon, lat, extinction, table[[c for c in table.colnames if c not in used]]


def _refuse_near_misses(table, where, known):
    """Raise for a column that is an unknown extinction, or a known column written differently."""
    plain = {_plain(k): k for k in known}
    for name in table.colnames:
        if name in known:
            continue
        dust = name.startswith(("A_", "a_")) or any(word in name.lower() for word in _DUST_WORDS)
        # radius for radius_deg: the unit left out
        short = [k for k in known if k.startswith(f"{name.lower()}_") and k not in _EXTINCTIONS]
        if dust or short or _plain(name) in plain:
            near = short[0] if short else plain.get(_plain(name))
            meant = f", did you mean '{near}'?" if near else did_you_mean(name, _EXTINCTIONS)
            raise InputError(f"{where}: column '{name}' is not known{meant} (known: {', '.join(known)})")


def _plain(name):
    return name.lower().replace("_", "").replace(" ", "").replace("-", "")


def _column(table, name, unit, where, blanks=False):
    column = table[name]
    empty = np.zeros(len(table), dtype=bool)
    if hasattr(column, "mask") and np.any(column.mask):
        if not blanks:
            raise InputError(f"{where}: row {int(np.argmax(column.mask)) + 1}, column {name}: no value")
        empty = np.asarray(column.mask)
        column = column.filled(0)
    try:
        value = np.atleast_1d(np.asarray(u.Quantity(column, column.unit or unit).to_value(unit), dtype=float)).copy()
    except u.UnitConversionError:
        raise InputError(f"{where}: column {name} is in '{column.unit}', must be in '{unit}'") from None
    except (TypeError, ValueError):
        raise InputError(f"{where}: {_first_text(column, name)} in {unit}") from None
    bad = ~np.isfinite(value)
    if bad.any():
        raise InputError(
            f"{where}: row {int(np.argmax(bad)) + 1}, column {name}: {value[bad][0]} is not a finite number"
        )
    value[empty] = np.nan
    return value


def _first_text(column, name):
    """Say which cell of a column is no number."""
    for i, cell in enumerate(np.asarray(column)):
        text = cell.decode("utf-8", "replace") if isinstance(cell, bytes) else str(cell)
        try:
            float(text)
        except ValueError:
            return f"row {i + 1}, column {name}: '{text}' is not a number"
    return f"column {name} does not hold numbers"


def forecasts(l, b, scenario="default", *, extinction=None, t_E_range=None, jobs=1, executor=None, progress=None):
    """Forecast many directions; parameters as `sightlines`.

    Returns
    -------
    list of Sightline
    """
    if not isinstance(scenario, Scenario):
        scenario = Scenario.read(scenario)
    l, b = (np.atleast_1d(strip(name, value, u.deg)) * u.deg for name, value in (("l", l), ("b", b)))
    check_range("b", b.to_value(u.deg), "deg", -90.0, 90.0)
    extinction = extinction if extinction is not None else [{}] * l.size
    if not (l.size == b.size == len(extinction)):
        raise InputError(
            f"sightlines: {l.size} longitudes, {b.size} latitudes, {len(extinction)} extinctions given; "
            "equal numbers are needed"
        )
    resolve(scenario)

    def one(i):
        return sightline(l[i], b[i], scenario, extinction=extinction[i] or None, t_E_range=t_E_range)

    # the first alone, so that threads do not compile the same kernels at once
    alone = [one(0)] if executor is None else []
    return [*alone, *run_map(one, range(len(alone), l.size), jobs, executor, progress)]


def sightlines(l, b, scenario="default", *, extinction=None, t_E_range=None, jobs=1, executor=None, progress=None):
    """Forecast many directions into one table.

    Parameters
    ----------
    l, b : Quantity, shape (n,)
        Galactic directions.
    scenario : Scenario or str
        Every assumption.
    extinction : list of dict, optional
        Measured A by band [mag] for each direction; an empty one leaves the scenario's own.
    t_E_range : (Quantity, Quantity), optional
        As in `sightline`.
    jobs : int
        Local threads.
    executor : object with ``map``, optional
        Instead of local threads.
    progress : str, optional
        Label of a progress bar.

    Returns
    -------
    astropy.table.QTable
        A row per direction.

    Raises
    ------
    InputError, ConvergenceError
        As `sightline`.
    """
    if not isinstance(scenario, Scenario):
        scenario = Scenario.read(scenario)
    options = {"extinction": extinction, "t_E_range": t_E_range, "jobs": jobs, "executor": executor}
    return gather(forecasts(l, b, scenario, progress=progress, **options), scenario)


def gather(results, scenario, carried=None):
    """Put forecasts into one table, a row each.

    Parameters
    ----------
    results : list of Sightline
        All of the same classes.
    scenario : Scenario
        What they share; a row with an extinction of its own has its own hash in column scenario_hash.
    carried : astropy.table.Table, optional
        Further columns to stand first, for example names.

    Returns
    -------
    astropy.table.QTable
    """
    from astropy.table import QTable

    table = QTable() if carried is None else QTable(carried, copy=True)
    table["l"] = np.array([r.l.to_value(u.deg) for r in results]) * u.deg
    table["b"] = np.array([r.b.to_value(u.deg) for r in results]) * u.deg
    for band in dict.fromkeys(band for r in results for band in r.sources["extinction"]):
        table[f"A_{band}"] = np.array([r.sources["extinction"].get(band, np.nan) for r in results]) * u.mag
    for name in results[0].lenses:
        lenses = [r.lenses[name] for r in results]
        table[f"optical_depth_{name}"] = np.array([x.optical_depth for x in lenses])
        table[f"rate_{name}"] = np.array([x.rate for x in lenses]) / u.yr
        table[f"mean_t_E_{name}"] = np.array([x.mean_t_E for x in lenses]) * u.day
        table[f"median_t_E_{name}"] = np.array([x.median_t_E for x in lenses]) * u.day
    table["mean_source_distance"] = np.array([r.sources["mean_distance_kpc"] for r in results]) * u.kpc
    density = [r.sources["source_density_per_arcmin2"] for r in results]
    if all(d is not None for d in density):
        table["source_density"] = np.array(density) / u.arcmin**2
    table["scenario_hash"] = [r.scenario.hash for r in results]
    meta = results[0].meta()
    for key in ("l_deg", "b_deg", "quadrature_error", "field_mismatch"):
        meta.pop(key)
    limit = results[0].header().split("; ", 1)[1]
    bands = ", ".join(f"A_{band} by row" for band in results[0].sources["extinction"]) or "no dust used"
    table.meta.update(
        {
            **meta,
            "header": f"sources {results[0].sources['rule']} ({bands}); {limit}",
            **scenario.made(),
            "warnings": _together(results),
        }
    )
    return table


def _together(results):
    """Each warning once; one that differs only in its numbers is shown for its first row, with a count."""
    kinds = {}
    for r in results:
        for w in r.warnings:
            kinds.setdefault("".join(c for c in w if not c.isdigit()), []).append(w)
    return [
        ws[0] if len(ws) == 1 or len(set(ws)) == 1 else f"{ws[0]} (and {len(ws) - 1} rows more)"
        for ws in kinds.values()
    ]
