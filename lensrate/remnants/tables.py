"""Reading the numbers of a parameter file: {value, unit, source} entries to plain floats in the wanted unit."""

import math

import astropy.units as u

from ..errors import InputError, did_you_mean

__all__ = ["check_keys", "number", "numbers"]


def check_keys(where, table, known, needed=()):
    """Raise unless every key of `table` is known and every needed one is there.

    Parameters
    ----------
    where : str
        Named in the message.
    table : dict
        As read from a TOML file.
    known, needed : collection of str
        Allowed keys; those that may not be missing.

    Raises
    ------
    InputError
        With the nearest known key, or the missing ones.
    """
    if not isinstance(table, dict):
        raise InputError(f"{where}: {table!r} is not a table; known keys are {', '.join(sorted(known))}")
    for key in table:
        if key not in known:
            raise InputError(
                f"{where}.{key}: not a key here{did_you_mean(key, known)} (known: {', '.join(sorted(known))})"
            )
    missing = [key for key in needed if key not in table]
    if missing:
        raise InputError(f"{where}: needs {', '.join(missing)}")


def number(where, table, key, unit, low=None, high=None):
    """Return one number of `table` in `unit`, checked.

    Parameters
    ----------
    where : str
        Named in the message.
    table : dict
        Holds `key` as a number or a {value, unit, source} table; a bare number is in `unit`.
    key : str
        Which one.
    unit : str
        Wanted unit, "" for a pure number.
    low, high : float, optional
        Allowed closed range.

    Returns
    -------
    float

    Raises
    ------
    InputError
        Missing, not a finite number, unit that does not fit, or out of range.
    """
    values = numbers(where, table, key, unit, low, high)
    if len(values) != 1:
        raise InputError(f"{where}.{key}: {len(values)} values given, one needed")
    return values[0]


def numbers(where, table, key, unit, low=None, high=None):
    """Return a tuple of numbers of `table` in `unit`, checked; arguments and errors as for `number`."""
    check_keys(where, {k: v for k, v in table.items() if k == key}, [key], [key])
    entry, given = table[key], unit
    if isinstance(entry, dict):
        check_keys(f"{where}.{key}", entry, ["value", "unit", "source"], ["value"])
        entry, given = entry["value"], entry.get("unit", unit)
    entry = entry if isinstance(entry, (list, tuple)) else [entry]
    for value in entry:
        if isinstance(value, bool) or not isinstance(value, (int, float)) or not math.isfinite(value):
            raise InputError(f"{where}.{key}: {value!r} is not a finite number")
    try:
        factor = 1.0 if given == unit else u.Unit(given).to(u.Unit(unit))
    except (ValueError, TypeError) as error:
        raise InputError(f"{where}.{key}: unit '{given}' cannot be converted to '{unit}' ({str(error)[:60]})") from None
    values = tuple(float(value) * factor for value in entry)
    for value in values:
        if low is not None and value < low:
            raise InputError(f"{where}.{key}: {value:g} {unit} given, must be at least {low:g}".replace("  ", " "))
        if high is not None and value > high:
            raise InputError(f"{where}.{key}: {value:g} {unit} given, must be at most {high:g}".replace("  ", " "))
    return values
