"""Many sightlines at once: read directions from a table, forecast each, gather one table."""

import astropy.units as u
import numpy as np

from ..errors import InputError, did_you_mean
from ..galaxy.frames import galactic_from_icrs
from ..parallel import run_map
from ..scenario import Scenario, resolve
from ..sources.bands import BANDS
from ..units import check_range
from .sightline import sightline

__all__ = ["directions_of", "sightlines"]


def directions_of(table, icrs=False):
    """Return Galactic directions and measured extinctions from a table's columns.

    Parameters
    ----------
    table : astropy.table.Table
        Columns l, b (or ra, dec) in degrees unless they carry a unit; optional A_V, A_I, A_J, A_H, A_Ks in mag.
    icrs : bool
        Take ra, dec.

    Returns
    -------
    l, b : Quantity, shape (n,)
    extinction : list of dict
        Measured A by band, empty where there is none.

    Raises
    ------
    InputError
        Missing column, text, NaN or a latitude beyond 90, with the row number.
    """
    wanted = ("ra", "dec") if icrs or ("l" not in table.colnames and "ra" in table.colnames) else ("l", "b")
    values = []
    for name in wanted:
        if name not in table.colnames:
            raise InputError(
                f"table: no column '{name}'{did_you_mean(name, table.colnames)} (columns: {', '.join(table.colnames)})"
            )
        values.append(_column(table, name, u.deg))
    limit = 90.0
    for i, value in enumerate(values[1]):
        if abs(value) > limit:
            raise InputError(f"table: row {i + 1}, column {wanted[1]}: {value:g} deg given, must be between -90 and 90")
    lon, lat = (v * u.deg for v in values)
    if wanted[0] == "ra":
        lon, lat = galactic_from_icrs(lon, lat)
    extinction = [{} for _ in values[0]]
    for band in BANDS:
        if f"A_{band}" in table.colnames:
            for row, a in zip(extinction, _column(table, f"A_{band}", u.mag)):
                row[band] = float(a)
    return lon, lat, extinction


def _column(table, name, unit):
    column = table[name]
    if hasattr(column, "mask") and np.any(column.mask):
        raise InputError(f"table: row {int(np.argmax(column.mask)) + 1}, column {name}: no value")
    try:
        value = u.Quantity(column, column.unit or unit).to_value(unit)
        value = np.asarray(value, dtype=float)
    except (TypeError, ValueError, u.UnitConversionError):
        raise InputError(f"table: column {name} must hold numbers in {unit}") from None
    bad = ~np.isfinite(value)
    if bad.any():
        raise InputError(f"table: row {int(np.argmax(bad)) + 1}, column {name}: {value[bad][0]} is not a finite number")
    return np.atleast_1d(value)


def sightlines(l, b, scenario="default", *, extinction=None, t_E_range=None, jobs=1, executor=None, progress=None):
    """Forecast many directions.

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
        A row per direction; ``meta["rows"]`` holds each one's `Sightline.to_dict`.

    Raises
    ------
    InputError, ConvergenceError
        As `sightline`.
    """
    from astropy.table import QTable

    if not isinstance(scenario, Scenario):
        scenario = Scenario.read(scenario)
    l, b = np.atleast_1d(u.Quantity(l)), np.atleast_1d(u.Quantity(b))
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
    results = [one(0), *run_map(one, range(1, l.size), jobs, executor, progress)]
    table = QTable()
    table["l"] = l.to(u.deg)
    table["b"] = b.to(u.deg)
    rows = [r.to_dict() for r in results]
    for r, row in zip(results, rows):
        for key, value in r.sources["extinction"].items():
            row[f"A_{key}"] = value
    for name in results[0].lenses:
        table[f"optical_depth_{name}"] = np.array([r.lenses[name].optical_depth for r in results])
        table[f"rate_{name}"] = np.array([r.lenses[name].rate for r in results]) / u.yr
        table[f"mean_t_E_{name}"] = np.array([r.lenses[name].mean_t_E for r in results]) * u.day
        table[f"median_t_E_{name}"] = np.array([r.lenses[name].median_t_E for r in results]) * u.day
    table["mean_source_distance"] = np.array([r.sources["mean_distance_kpc"] for r in results]) * u.kpc
    density = [r.sources["source_density_per_arcmin2"] for r in results]
    if density[0] is not None:
        table["source_density"] = np.array(density) / u.arcmin**2
    for band in results[0].sources["extinction"]:
        table[f"A_{band}"] = np.array([r.sources["extinction"][band] for r in results]) * u.mag
    meta = results[0].meta()
    for key in ("l_deg", "b_deg"):
        meta.pop(key)
    rule = results[0].sources["rule"]
    meta["header"] = results[0].header() if not density[0] or len(results) == 1 else _common_header(results[0], rule)
    meta["warnings"] = list(dict.fromkeys(w for r in results for w in r.warnings))
    table.meta.update(meta)
    table.meta["rows"] = rows
    return table


def _common_header(result, rule):
    limit = result.header().split("; ", 1)[1]
    bands = ", ".join(f"A_{b} by row" for b in result.sources["extinction"]) or "no dust used"
    return f"sources {rule} ({bands}); {limit}"
