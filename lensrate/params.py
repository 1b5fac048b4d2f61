"""Declared parameters: a frozen record states unit and meaning of each number once."""

from dataclasses import dataclass, field, fields
from functools import lru_cache

import astropy.units as u
import numpy as np

from .errors import InputError, did_you_mean

__all__ = ["Params", "param"]


#: unit, least and largest size of what is not 0; beyond lies nothing of a Galaxy, but numbers in another unit do
_SIZES = (
    ("kpc", 1e-5, 1e9), ("km/s", 1e-3, 3e5), ("Msun", 1e-3, 1e16), ("Msun / kpc3", 1.0, 1e18),
    ("Msun / kpc2", 1.0, 1e16), ("deg", 1e-9, 1e4), ("", 1e-30, 1e30),
)  # fmt: skip


@lru_cache(maxsize=64)
def _sizes(unit):
    """Least and largest size in a unit, by the kind of thing it measures."""
    for name, low, high in _SIZES:
        like = u.Unit(name)
        if unit.is_equivalent(like):
            return low * like.to(unit), high * like.to(unit)
    return 1e-30, 1e30


def param(unit, doc, span=None, **kwargs):
    """Declare one field of a `Params` record.

    Parameters
    ----------
    unit : str
        Internal unit, "" for a pure number.
    doc : str
        One line of meaning.
    span : (float, float), optional
        Least and largest value, in `unit`.
    **kwargs
        Passed to `dataclasses.field`, for example ``default``.

    Returns
    -------
    dataclasses.Field
    """
    return field(metadata={"unit": u.Unit(unit), "doc": doc, "span": span}, **kwargs)


def _check_size(where, value, span):
    """Refuse what no Galaxy holds, mostly a number in another unit than was meant."""
    if span is None:
        (low, high), size, first = _sizes(value.unit), abs(value.value), "0 or "
    else:
        (low, high), size, first = span, value.value, ""
    if not (low <= size <= high or (first and size == 0.0)):
        unit = f" {value.unit}".rstrip().replace("solMass", "Msun")
        raise InputError(
            f"{where}: {value.value:g}{unit} given, must be {first}between {low:g} and {high:g}{unit}; a number "
            "without a unit is taken in this one"
        )


@dataclass(frozen=True)
class Params:
    """Frozen record whose fields are declared with `param`; values are kept as Quantities.

    A bare number is accepted and taken in the declared unit, since that unit stands beside the name.
    """

    def __post_init__(self):
        for f in fields(self):
            if "unit" not in f.metadata:
                continue
            try:
                # what cannot be held is told below
                with np.errstate(over="ignore", invalid="ignore"):
                    value = u.Quantity(getattr(self, f.name), f.metadata["unit"], dtype=float)
            except u.UnitConversionError as error:
                raise InputError(f"{type(self).__name__}.{f.name}: {error}") from None
            except (TypeError, ValueError):
                raise InputError(f"{type(self).__name__}.{f.name}: {getattr(self, f.name)!r} is not a number") from None
            if not np.isfinite(value.value):
                raise InputError(f"{type(self).__name__}.{f.name}: {value} is not finite")
            _check_size(f"{type(self).__name__}.{f.name}", value, f.metadata["span"])
            object.__setattr__(self, f.name, value)

    def pack(self):
        """Return the declared values in field order, in declared units.

        Returns
        -------
        ndarray, shape (n,)
        """
        return np.array(
            [getattr(self, f.name).to_value(f.metadata["unit"]) for f in fields(self) if "unit" in f.metadata]
        )

    @classmethod
    def from_table(cls, table, where):
        """Build from a mapping of key to number or {value, unit, source} tables.

        Parameters
        ----------
        table : dict
            As read from a parameter file.
        where : str
            Named in complaints.

        Returns
        -------
        Params

        Raises
        ------
        InputError
            Unknown or missing key, or a unit that does not fit.
        """
        if not isinstance(table, dict):
            raise InputError(f"{where}: {table!r} given, must be a table of {cls.__name__}")
        known = {f.name: f for f in fields(cls) if "unit" in f.metadata}
        values = {}
        for key, entry in table.items():
            if key not in known:
                raise InputError(
                    f"{where}.{key}: not a parameter of {cls.__name__}{did_you_mean(key, known)} "
                    f"(known: {', '.join(known)})"
                )
            values[key] = _quantity(entry, f"{where}.{key}", known[key].metadata["unit"])
        missing = [f for f, d in known.items() if f not in values and d.default is d.default_factory]
        if missing:
            raise InputError(f"{where}: {cls.__name__} needs {', '.join(missing)}")
        try:
            return cls(**values)
        except InputError as error:
            # a record names its own numbers after itself; the reader of a file knows where they stand
            own, text = f"{cls.__name__}.", str(error)
            text = f"{where}.{text.removeprefix(own)}" if text.startswith(own) else f"{where}: {text}"
            raise InputError(text) from None


_unit = lru_cache(maxsize=256)(u.Unit)  # the same few words again and again, each of which takes half a millisecond


def _quantity(entry, where, unit):
    if isinstance(entry, dict):
        if "value" not in entry:
            raise InputError(f"{where}: a table needs 'value' (and 'unit', 'source')")
        for key in entry:
            if key not in ("value", "unit", "source"):
                near = did_you_mean(key, ("value", "unit", "source"))
                raise InputError(f"{where}: unknown key '{key}'{near} (known: value, unit, source)")
        value, given = entry["value"], entry.get("unit")
    else:
        value, given = entry, None
    if isinstance(value, bool) or not isinstance(value, (int, float)):
        raise InputError(f"{where}: {value!r} is not a number")
    if not (given is None or isinstance(given, str)):
        raise InputError(f"{where}: unit {given!r} given, must be text, for example '{unit}'")
    try:
        return float(value) * (unit if given is None else _unit(given))
    except (ValueError, TypeError):
        raise InputError(f"{where}: unit '{given}' is not known to astropy") from None
    except OverflowError:
        raise InputError(f"{where}: {value} is too large") from None
