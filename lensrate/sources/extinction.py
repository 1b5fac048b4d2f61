"""Dust along a sightline: a disc of dust, published ratios between bands, and a field's measured extinction."""

import math
from dataclasses import dataclass
from functools import cache

import astropy.units as u
import numpy as np

from ..datafiles import read_set
from ..errors import InputError
from ..params import Params, param
from ..remnants.tables import check_keys, number, numbers
from .bands import check_band

__all__ = ["DustDisc", "Extinction", "band_ratio", "extinction_from_colours", "sightline_extinction"]

_STEP = 0.02  # kpc, cells of the integral; each is exact for an exponential
_REACH = 30.0  # kpc
_UNSURE = math.radians(2.0)  # |b| below which a smooth disc of dust says little about one field


@dataclass(frozen=True)
class DustDisc(Params):
    """Dust exponential in R and |z|, thinned by a factor toward the Galactic centre."""

    local_rate: u.Quantity = param("mag/kpc", "A_I per distance at the Sun's own place")
    h_R: u.Quantity = param("kpc", "scale length")
    h_z: u.Quantity = param("kpc", "scale height")
    bulge_factor: u.Quantity = param("", "factor on sightlines toward the centre")
    inner_angle: u.Quantity = param("deg", "whole factor within this angle of the centre")
    outer_angle: u.Quantity = param("deg", "no factor beyond this angle")

    def __post_init__(self):
        super().__post_init__()
        for key in ("local_rate", "bulge_factor"):
            if getattr(self, key).value < 0:
                raise InputError(f"DustDisc.{key}: {getattr(self, key)} given, must be at least 0")
        for key in ("h_R", "h_z"):
            if getattr(self, key).value <= 0:
                raise InputError(f"DustDisc.{key}: {getattr(self, key)} given, must be above 0")
        if not 0 <= self.inner_angle.value <= self.outer_angle.value <= 180:
            raise InputError(f"DustDisc: angles {self.inner_angle} and {self.outer_angle} must rise within 0-180 deg")

    @classmethod
    def read(cls, name="dust_default"):
        """Read a shipped set by name or a user's ``.toml`` file with a table ``[dust]``.

        Raises
        ------
        InputError
            Unknown name or key, missing key, or an impossible value.
        """
        table = read_set("sources", name)
        check_keys(f"dust '{name}'", table, ["reference", "dust"], ["dust"])
        return cls.from_table(table["dust"], f"dust '{name}'")

    def factor(self, l, b):
        """Return the factor of a sightline; `l`, `b` in radians. A cosine leads from the bulge's to one."""
        angle = math.degrees(math.acos(max(-1.0, min(1.0, math.cos(b) * math.cos(l)))))
        low, inner, outer = self.bulge_factor.value, self.inner_angle.value, self.outer_angle.value
        if angle <= inner:
            return low
        if angle >= outer:
            return 1.0
        return low + (1 - low) * 0.5 * (1 - math.cos(math.pi * (angle - inner) / (outer - inner)))

    def profile(self, l, b, distances_kpc, R0, z_sun):
        """Return A_I out to the given distances.

        Parameters
        ----------
        l, b : float
            Sightline [rad].
        distances_kpc : array_like, shape (n,)
            From 0 up [kpc].
        R0, z_sun : float
            The Sun's distance from the centre and height above the plane [kpc]; the frame is tilted so that
            the centre lies in the plane.

        Returns
        -------
        ndarray, shape (n,)
            [mag]

        Notes
        -----
        Each cell is integrated as if the logarithm of the dust were straight in it, which leaves
        an error below 1e-5; cells end where the sightline crosses the plane.
        """
        if not abs(b) <= 0.5 * math.pi + 1e-12:
            raise InputError(f"b: {b:g} rad given, must lie within -pi/2 to pi/2")
        given = np.atleast_1d(np.asarray(distances_kpc, dtype=float))
        if given.size and not (np.all(np.isfinite(given)) and given.min() >= 0):
            raise InputError("distances: finite numbers of kpc from 0 up are needed")
        far = max(float(given.max(initial=0.0)), _STEP)
        sine = z_sun / R0
        cosine = math.sqrt(1 - sine * sine)
        toward, across, up = math.cos(b) * math.cos(l), math.cos(b) * math.sin(l), math.sin(b)
        rise = up * cosine - toward * sine
        crossing = -z_sun / rise if rise != 0 else -1.0
        kinks = [crossing] if 0 < crossing < far else []
        s = np.unique(np.concatenate([np.linspace(0, far, max(2, math.ceil(far / _STEP) + 1)), given, kinks]))
        x = s * (toward * cosine + up * sine) - R0 * cosine
        y, z = s * across, z_sun + s * rise
        ln = (R0 - np.hypot(x, y)) / self.h_R.value - (np.abs(z) - abs(z_sun)) / self.h_z.value
        step, width = np.diff(ln), np.diff(s)
        flat = np.abs(step) < 1e-8
        mean = np.exp(ln[:-1]) * np.where(flat, 1 + 0.5 * step, np.expm1(step) / np.where(flat, 1.0, step))
        depth = np.concatenate([[0.0], np.cumsum(mean * width)])
        return self.local_rate.value * self.factor(l, b) * depth[np.searchsorted(s, given)]


@cache
def _law():
    table, where = read_set("sources", "extinction_law"), "sources 'extinction_law'"
    single = ["A_I_per_E_VI", "E_JKs_per_E_VI", "variation"]
    check_keys(where, table, ["reference", "near_infrared", *single])
    per_colour, infrared, variation = (number(where, table, key, "") for key in single)
    return per_colour, infrared, variation, numbers(where, table, "near_infrared", "")


def band_ratio(band):
    """Return A_band / A_I toward the bulge.

    Parameters
    ----------
    band : str
        V, I, J, H or Ks.

    Returns
    -------
    float

    Notes
    -----
    V from A_I = 1.217 E(V-I); near infrared from E(J-Ks) = 0.3433 E(V-I), both Nataf+ (2013), and
    A_J : A_H : A_Ks = 3.02 : 1.73 : 1, Nishiyama+ (2009).
    """
    check_band("band", band)
    if band == "I":
        return 1.0
    per_colour, infrared, _, ratios = _law()
    if band == "V":
        return 1 + 1 / per_colour
    A_Ks = infrared / per_colour / (ratios[0] - ratios[2]) * ratios[2]
    return A_Ks * dict(zip(("J", "H", "Ks"), ratios))[band]


def extinction_from_colours(E_VI, E_JKs):
    """Return A_I [mag] of a bulge field from its reddening in two colours [mag], floats or arrays.

    Notes
    -----
    Nataf+ (2013): A_I = 1.217 E(V-I) [1 + 1.126 (E(J-Ks)/E(V-I) - 0.3433)].
    """
    per_colour, infrared, variation, _ = _law()
    return per_colour * E_VI * (1 + variation * (E_JKs / E_VI - infrared))


@dataclass(frozen=True, eq=False)
class Extinction:
    """Extinction along one sightline.

    Parameters
    ----------
    band : str
        V, I, J, H or Ks.
    distance : ndarray, shape (n,)
        Rising from 0 [kpc].
    magnitude : ndarray, shape (n,)
        A_band out to there [mag].
    at_R0 : float
        A_band at the distance of the Galactic centre [mag].
    source : str
        "measured" or "dust disc".
    warnings : tuple of str
        For the user.
    """

    band: str
    distance: np.ndarray
    magnitude: np.ndarray
    at_R0: float
    source: str
    warnings: tuple

    def __call__(self, D):
        """Return A_band at distances `D` [kpc], float or array; beyond the last it stays."""
        return np.interp(D, self.distance, self.magnitude)


def sightline_extinction(dust, l, b, band, measured=None, R0=8.178, z_sun=0.0208, distances_kpc=None):
    """Return the extinction along a sightline, scaled to the field's own where that is known.

    Parameters
    ----------
    dust : DustDisc
        Form of the profile.
    l, b : float
        Sightline [rad].
    band : str
        Wanted band: V, I, J, H or Ks.
    measured : dict of str to float, optional
        The field's extinction at the bulge, band to magnitudes; the wanted band is used if it is there, else
        the one nearest to it in extinction, by the published ratios.
    R0, z_sun : float
        The Sun's distance from the centre and height above the plane [kpc].
    distances_kpc : array_like, optional
        Where to tabulate beside 0 and R0; default 0 to 30 kpc in steps of 0.02 kpc.

    Returns
    -------
    Extinction

    Raises
    ------
    InputError
        Unknown band, or a measured extinction that is not a number from 0 up.
    """
    check_band("band", band)
    given = np.linspace(0, _REACH, round(_REACH / _STEP) + 1) if distances_kpc is None else distances_kpc
    grid = np.unique(np.append(np.asarray(given, dtype=float), [0.0, R0]))
    profile = band_ratio(band) * dust.profile(l, b, grid, R0, z_sun)
    at_R0 = float(profile[np.searchsorted(grid, R0)])
    warnings = []
    if not measured:
        if abs(b) < _UNSURE:
            warnings.append(
                f"extinction: A_{band} = {at_R0:.2f} mag at {R0:.2f} kpc comes from a smooth dust disc, which can be "
                "wrong by a factor two within 2 deg of the plane; give the field's own extinction"
            )
        return Extinction(band, grid, profile, at_R0, "dust disc", tuple(warnings))
    wanted, note = _measured(measured, band)
    if note:
        warnings.append(note)
    if at_R0 == 0:
        raise InputError("extinction: the dust profile is empty, so a measured extinction cannot scale it")
    return Extinction(band, grid, profile * (wanted / at_R0), wanted, "measured", tuple(warnings))


def _measured(measured, band):
    """The measured extinction in the wanted band, and what to say about it."""
    for key, value in measured.items():
        check_band("extinction", key)
        if isinstance(value, bool) or not isinstance(value, (int, float, np.floating, np.integer)):
            raise InputError(f"extinction: A_{key} = {value!r} is not a number of magnitudes")
        if not (math.isfinite(value) and 0 <= value <= 100):
            raise InputError(f"extinction: A_{key} = {value:g} mag given, must be 0 to 100 mag")
    if band in measured:
        return float(measured[band]), ""
    nearest = min(measured, key=lambda other: abs(math.log(band_ratio(other) / band_ratio(band))))
    value = float(measured[nearest]) * band_ratio(band) / band_ratio(nearest)
    law = "Nataf+ 2013" if {band, nearest} <= {"V", "I"} else "Nataf+ 2013 and Nishiyama+ 2009"
    return value, f"extinction: A_{band} = {value:.3f} mag from the measured A_{nearest} by the ratios of {law}"
