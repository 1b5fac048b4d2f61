"""From the rows of a table to events: every cell checked, bad rows told together, solutions of one event joined."""

import astropy.units as u
import numpy as np

from ..errors import InputError, one_of
from ..galaxy.frames import galactic_from_icrs
from ..io import header_of, read_rows
from .observed import (
    _PLACES,
    _POSITIVE,
    FRAMES,
    LABELS,
    MEASURED,
    PLAIN,
    Measure,
    Observed,
    Problems,
    Solution,
    check_columns,
)
from .posterior import read_draws, reference_epoch

__all__ = ["read_events", "said_epoch"]

_TOLD = 5  # events that are told by name
_APART = 0.01  # deg, solutions of one event agree in place


def read_events(table, frame, t_0par, skip_bad, where, beside):
    """Return the fields of a `Sample` from a table; see `Sample.read`."""
    place, strangers = check_columns(table, where)
    head = header_of(table)
    problems, notes = Problems(where), []
    n = len(table)
    lon, lat = (_numbers(table, c, "deg", _PLACES[c], problems, needed=True) for c in place)
    measured = {name: _measure(table, name, problems) for name in MEASURED}
    plain = {name: _numbers(table, name, unit, span, problems) for name, (unit, span, _) in PLAIN.items()}
    label = next((c for c in LABELS if c in table.colnames), "event")
    names, solutions, files = (_texts(table, c) for c in (label, "solution", "samples"))
    frames, epochs = _frames(table, head, frame, t_0par, where, problems, notes)
    for one, other in (("pi_EN", "pi_EE"), ("mu_S_N", "mu_S_E")):
        odd = np.isfinite(measured[one][0]) != np.isfinite(measured[other][0])
        for i in np.flatnonzero(odd):
            lone, missing = (one, other) if np.isfinite(measured[one][0][i]) else (other, one)
            problems.add(i + 1, missing, f"no value, but {lone} has one; give both or neither")
    both = np.isfinite(measured["pi_E"][0]) & np.isfinite(measured["pi_EN"][0])
    # the size follows from the parts, which say more
    measured["pi_E"][0][both] = np.nan
    bare = ~np.isfinite(measured["t_E"][0]) & np.array([f == "" for f in files])
    for i in np.flatnonzero(bare):
        if i + 1 not in problems.rows:
            problems.add(i + 1, "t_E", "no value, and no samples")
    draws = {}
    for i, name in enumerate(files):
        if name and i + 1 not in problems.rows:
            path = beside.parent / name
            try:
                draws[i] = read_draws(read_rows(path, f"samples of row {i + 1}"), f"samples '{name}'")
            except InputError as error:
                problems.add(i + 1, "samples", str(error))
    groups = _groups(names, n)
    again = []
    for event, rows in groups.items():
        first = rows[0]
        if len({solutions[i] for i in rows}) < len(rows):
            again.append(f"{event} in rows {', '.join(str(i + 1) for i in rows)}")
        for i in rows[1:]:
            around = (lon[i] - lon[first] + 180.0) % 360.0 - 180.0
            if np.hypot(around * np.cos(np.radians(lat[first])), lat[i] - lat[first]) > _APART:
                problems.add(i + 1, place[0], f"not the place of row {first + 1}, of the same event {event}")
            if (frames[i], epochs[i]) != (frames[first], epochs[first]):
                problems.add(i + 1, "frame", f"not the frame of row {first + 1}, of the same event {event}")
    if again:
        told = "; ".join(again[:_TOLD]) + f"; and {len(again) - _TOLD} more" * (len(again) > _TOLD)
        notes.append(
            f"rows of one event that column solution does not tell apart, taken as its degenerate solutions: {told}"
        )
    if problems.found and not skip_bad:
        some = "; the other rows are read with --skip-bad (skip_bad=True)" if len(set(problems.rows)) < n else ""
        raise InputError(problems.text() + some)
    bad = {r - 1 for r in problems.rows}
    events = []
    for name, rows in groups.items():
        rows = [i for i in rows if i not in bad]
        if rows:
            events.append(_event(name, rows, place, lon, lat, frames, epochs, measured, plain, solutions, draws))
    if not events:
        raise InputError(problems.text() if problems.found else f"{where}: no events")
    if bad:
        notes.append(f"left out: {problems.text().removeprefix(where + ': ')}")
    if "weight" in strangers:
        strangers.remove("weight")
        notes.append("column weight is not used: every event counts once; draw unweighted events, or select by weight")
    if strangers:
        notes.append(f"columns not used: {', '.join(strangers)}")
    if both.any():
        notes.append("pi_E is not used where pi_EN and pi_EE are given")
    name = beside.name if beside.name not in ("", ".") else "table"
    return {
        "events": tuple(events),
        "name": name,
        "notes": tuple(notes),
        "left_out": len(bad),
        "invented": bool(head.get("invented", False)),
    }


def _event(name, rows, place, lon, lat, frames, epochs, measured, plain, solutions, draws):
    first = rows[0]
    l, b = float(lon[first]), float(lat[first])
    if place[0] == "ra":
        l, b = (float(x.to_value(u.deg)) for x in galactic_from_icrs(l * u.deg, b * u.deg))
    out = []
    for i in rows:
        found = {
            key: Measure(float(v[i]), float(lo[i]), float(hi[i]))
            for key, (v, lo, hi) in measured.items()
            if np.isfinite(v[i])
        }
        numbers = {key: float(v[i]) for key, v in plain.items() if np.isfinite(v[i])}
        chi2, corr = numbers.pop("delta_chi2", 0.0), numbers.pop("pi_E_corr", 0.0)
        out.append(Solution(solutions[i], found, chi2, corr, draws.get(i), numbers))
    return Observed(name, l, b, frames[first], epochs[first], tuple(out), tuple(i + 1 for i in rows))


def _groups(names, n):
    """Rows of each event, in order of first appearance; without names each row is an event."""
    groups = {}
    for i in range(n):
        groups.setdefault(names[i] or f"row {i + 1}", []).append(i)
    return groups


def _texts(table, name):
    if name not in table.colnames:
        return [""] * len(table)
    column = table[name]
    mask = np.asarray(getattr(column, "mask", np.zeros(len(table), bool)))
    cells = np.asarray(column)
    if cells.dtype.kind == "S":
        cells = np.char.decode(cells, "utf-8", "replace")
    return ["" if m else str(c).strip() for c, m in zip(cells, mask)]


def _numbers(table, name, unit, span, problems, needed=False, above=False):
    """A column as floats in `unit`, NaN where empty; complaints noted."""
    n = len(table)
    if name not in table.colnames:
        return np.full(n, np.nan)
    column = table[name]
    mask = np.asarray(getattr(column, "mask", np.zeros(n, bool))).copy()
    filled = column.filled() if hasattr(column, "filled") else column
    value = np.full(n, np.nan)
    factor = _factor(column.unit, unit, name, problems.where)
    try:
        value[:] = factor * np.asarray(filled, dtype=float)
    except (TypeError, ValueError):
        # some cell is text: find out which
        for i, cell in enumerate(np.asarray(filled)):
            text = cell.decode("utf-8", "replace") if isinstance(cell, bytes) else str(cell)
            if mask[i] or text.strip() in ("", "--", "nan"):
                mask[i] = True
                continue
            try:
                value[i] = factor * float(text)
            except ValueError:
                problems.add(i + 1, name, f"'{text}' is not a number")
                mask[i] = True
    empty = mask | np.isnan(value)
    value[empty] = np.nan
    if needed:
        for i in np.flatnonzero(empty):
            if i + 1 not in problems.rows:
                problems.add(i + 1, name, "no value")
    low, high = span
    with np.errstate(invalid="ignore"):
        bad = ~empty & ~((value >= low) & (value <= high))
        if above:
            bad |= ~empty & ~(value > 0)
    for i in np.flatnonzero(bad):
        first = "above 0" if above and value[i] <= 0 else f"at least {low:g}"
        problems.add(i + 1, name, f"{value[i]:g} {unit}".strip() + f" given, must be {first} and at most {high:g}")
        value[i] = np.nan
    return value


def _factor(stated, unit, name, where):
    """By what the numbers of a column are multiplied, from the unit it states, if any, to ours."""
    if stated is None:
        return 1.0
    given = u.Unit(str(stated), parse_strict="silent")
    wanted = f"'{unit}'" if unit else "no unit"
    if isinstance(given, u.UnrecognizedUnit):
        raise InputError(f"{where}: column {name} has unit '{stated}', which is not known; take {wanted}")
    try:
        return float(given.to(unit))
    except (u.UnitConversionError, u.UnitTypeError, TypeError):
        raise InputError(f"{where}: column {name} is in '{stated}', must be in {wanted}") from None


def _measure(table, name, problems):
    """Value, lower and upper error of a measured column, (n,) each."""
    unit, span, _ = MEASURED[name]
    n = len(table)
    if name not in table.colnames:
        for part in ("err", "lo", "hi"):
            if f"{name}_{part}" in table.colnames:
                raise InputError(f"{problems.where}: column '{name}_{part}' without '{name}'")
        return tuple(np.full(n, np.nan) for _ in range(3))
    before = set(problems.rows)
    value = _numbers(table, name, unit, span, problems, above=name in _POSITIVE)
    wide = (0.0, 1e9)
    err, lo, hi = (_numbers(table, f"{name}_{p}", unit, wide, problems, above=True) for p in ("err", "lo", "hi"))
    lo, hi = np.where(np.isfinite(lo), lo, err), np.where(np.isfinite(hi), hi, err)
    lacking = np.isfinite(value) & ~(np.isfinite(lo) & np.isfinite(hi))
    for i in np.flatnonzero(lacking):
        # a bad error has been told already
        if i + 1 in before or i + 1 not in problems.rows:
            problems.add(i + 1, f"{name}_err", f"no error of {name}; give {name}_err, or {name}_lo and {name}_hi")
    return value, lo, hi


def _frames(table, head, frame, t_0par, where, problems, notes):
    """Frame and epoch of each row."""
    n = len(table)
    said = head.get("frame")
    if said is not None:
        said = one_of(f"{where}: frame", str(said), FRAMES)
        if frame is not None and frame != said:
            raise InputError(f"{where}: its header says {said}, --frame says {frame}; correct one")
    cells = _texts(table, "frame")
    frames, unsaid = [], 0
    for i, cell in enumerate(cells):
        if cell and cell not in FRAMES:
            problems.add(i + 1, "frame", f"'{cell}' given, must be heliocentric or geocentric")
            cell = "heliocentric"
        if not cell and said is None and frame is None:
            unsaid += 1
        frames.append(cell or said or frame or "heliocentric")
    if unsaid:
        who = "the sample" if unsaid == n else f"{unsaid} rows"
        notes.append(
            f"{who} does not say a frame: taken as heliocentric (published parallax fits are geocentric; see --frame)"
        )
    general = said_epoch(head, t_0par, where)
    own = _numbers(table, "t_0par", "", (0.0, 3e6), problems)
    if t_0par is not None:
        geocentric = np.array([f == "geocentric" for f in frames], dtype=bool)
        kept = int(np.sum(geocentric & np.isfinite(own)))
        if not geocentric.any():
            notes.append("the t_0par given is not used: no event is geocentric")
        elif kept:
            notes.append(f"{kept} rows state a t_0par of their own, which holds; the one given is for the others")
    epochs = []
    for i, name in enumerate(frames):
        epoch = None
        if name == "geocentric":
            given = own[i] if np.isfinite(own[i]) else general
            if given is None:
                problems.add(i + 1, "t_0par", "geocentric, but no reference epoch [MJD]; add this column, or --t-0par")
            else:
                try:
                    epoch = reference_epoch(given, where)
                except InputError as error:
                    problems.add(i + 1, "t_0par", str(error).split("t_0par: ", 1)[-1])
        epochs.append(epoch)
    return frames, epochs


def said_epoch(head, t_0par, where):
    """The epoch of the header or of the caller; two that differ are refused."""
    said = head.get("t_0par")
    if said is None or t_0par is None:
        return t_0par if said is None else said
    if abs(reference_epoch(said, where) - reference_epoch(t_0par, "--t-0par")) > 1e-6:
        raise InputError(f"{where}: its header says t_0par = {said}, --t-0par says {t_0par:g}; correct one")
    return said
