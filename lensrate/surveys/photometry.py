"""How often and how well a survey measures brightness."""

from dataclasses import dataclass, field

import astropy.units as u
import numpy as np

from ..errors import InputError
from ..io import read_rows
from ..remnants.tables import check_keys
from ..sources.bands import check_band
from .efficiency import locate

__all__ = ["Photometry", "positive"]

# what the numbers of a campaign count, for complaints
_OF = {"cadence_d": "days", "monitored_stars": "stars", "star_density_per_arcmin2": "stars per square arcminute"}
_NO_ERROR = 1.0  # mag; an error larger than this is taken for one in mmag


@dataclass(frozen=True, eq=False)
class Photometry:
    """How often and how well the survey measures brightness.

    Attributes
    ----------
    band : str
        V, I, J, H or Ks.
    cadence_d : float
        Days between epochs in open time.
    magnitude, sigma : ndarray, shape (n,)
        Error of one epoch against magnitude [mag]; empty where the campaign does not say.
    floor : float
        Systematic error added in quadrature [mag].
    file : str
        Where the errors were read from; empty where the campaign does not say.
    """

    band: str = "I"
    cadence_d: float = 1.0
    magnitude: np.ndarray = field(default_factory=lambda: np.zeros(0))
    sigma: np.ndarray = field(default_factory=lambda: np.zeros(0))
    floor: float = 0.0
    file: str = ""

    @classmethod
    def from_dict(cls, table, beside):
        """Build from the campaign's [photometry].

        Raises
        ------
        InputError
            Unknown key or band, cadence not above zero, unusable table of errors.
        """
        where = "photometry"
        check_keys(where, table, ("band", "cadence_d", "precision", "floor_mag"), ("band", "cadence_d"))
        check_band(f"{where}.band", table["band"])
        cadence = positive(where, table, "cadence_d", 1000.0)
        floor = table.get("floor_mag", 0.0)
        if isinstance(floor, bool) or not isinstance(floor, (int, float)) or not 0 <= floor < 1:
            raise InputError(f"{where}.floor_mag: {floor!r} given, must be at least 0 and below 1 mag")
        if "precision" not in table:
            return cls(table["band"], cadence, floor=float(floor))
        if not isinstance(table["precision"], str):
            raise InputError(
                f"{where}.precision: {table['precision']!r} given, must name a file with columns mag, sigma"
            )
        path = locate(table["precision"], beside)
        rows = read_rows(path, f"{where}.precision")
        sigma_name = "sigma_mmag" if "sigma_mmag" in rows.colnames else "sigma"
        for name in ("mag", sigma_name):
            if name not in rows.colnames:
                raise InputError(
                    f"{where}.precision: no column '{name}' (columns: {', '.join(rows.colnames)}; needed: mag and "
                    "sigma, or sigma_mmag)"
                )
        if {"sigma", "sigma_mmag"} <= set(rows.colnames):
            raise InputError(f"{where}.precision: columns sigma and sigma_mmag are both there; keep one")
        unit = u.mmag if sigma_name == "sigma_mmag" else u.mag
        try:
            magnitude, sigma = (np.asarray(u.Quantity(rows[c], rows[c].unit or v).to_value(u.mag), dtype=float)
                                for c, v in (("mag", u.mag), (sigma_name, unit)))  # fmt: skip
        except (TypeError, ValueError, u.UnitConversionError):
            raise InputError(f"{where}.precision: columns mag and {sigma_name} must hold magnitudes") from None
        if rows[sigma_name].unit is None and unit == u.mag and np.any(sigma > _NO_ERROR):
            raise InputError(
                f"{where}.precision: column sigma reaches {np.nanmax(sigma):g} without a unit, and in mag that is no "
                "measurement; name the column sigma_mmag if these are millimagnitudes, or state unit: mag in its header"
            )
        bad = ~(np.isfinite(magnitude) & np.isfinite(sigma) & (sigma > 0))
        bad[1:] |= np.diff(magnitude) <= 0
        if bad.any():
            i = int(np.argmax(bad))
            raise InputError(
                f"{where}.precision: row {i + 1}: mag {magnitude[i]:g}, sigma {sigma[i]:g}; "
                "magnitudes must rise and errors be above 0"
            )
        return cls(table["band"], cadence, magnitude, sigma, float(floor), str(path))

    def error(self, magnitude):
        """Return the error of one epoch [mag]; infinite beyond the faint end, as at the bright end before it."""
        m = np.asarray(magnitude, dtype=float)
        if self.magnitude.size == 0:
            raise InputError("photometry: the campaign states no precision; name a file with columns mag, sigma")
        s = np.exp(np.interp(m, self.magnitude, np.log(self.sigma)))
        return np.where(m > self.magnitude[-1], np.inf, np.hypot(s, self.floor))


def positive(where, table, key, high, optional=False):
    value = table.get(key)
    if value is None and optional:
        return None
    if isinstance(value, bool) or not isinstance(value, (int, float)):
        raise InputError(f"{where}.{key}: {value!r} given, must be a number of {_OF[key]}, without quotes or a unit")
    if not 0 < value <= high:
        raise InputError(f"{where}.{key}: {value!r} given, must be above 0 and at most {high:g} {_OF[key]}")
    return float(value)
