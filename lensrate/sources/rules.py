"""Which stars count as sources: clump giants, stars above a limit at baseline or at peak, all stars at one distance."""

import math
from dataclasses import dataclass

import numpy as np

from ..errors import InputError, did_you_mean
from .bands import check_band

__all__ = ["ClumpRule", "DistanceRule", "LimitRule", "PeakRule", "parse_rule"]

NEAREST = 0.05  # kpc; nearer than this there is nothing to lens the sources
FARTHEST = 1000.0  # kpc
_USAGE = {
    "clump": "clump or clump:all",
    "limit": "limit:BAND=MAGNITUDE, for example limit:I=21",
    "peak": "peak:BAND=MAGNITUDE, for example peak:I=19",
    "distance": "distance:KPC, for example distance:8.0",
}


@dataclass(frozen=True)
class ClumpRule:
    """Red-clump giants, bright enough to be seen through the whole bulge.

    Parameters
    ----------
    discs : bool
        Whether the discs' clump giants count beside the bulge's.
    """

    discs: bool = False

    @property
    def text(self):
        """What `parse_rule` reads back."""
        return "clump:all" if self.discs else "clump"


@dataclass(frozen=True)
class LimitRule:
    """Every star brighter than an apparent magnitude, extinction included.

    Parameters
    ----------
    band : str
        V, I, J, H or Ks.
    magnitude : float
        The limit [mag].
    """

    band: str
    magnitude: float

    @property
    def text(self):
        """What `parse_rule` reads back."""
        return f"limit:{self.band}={self.magnitude:.12g}"


@dataclass(frozen=True)
class PeakRule:
    """Every star that an event brings above an apparent magnitude, extinction included.

    A rate is then per star of a list that counts each star with its chance to be magnified enough, u_0 being even
    between 0 and its limit.

    Parameters
    ----------
    band : str
        V, I, J, H or Ks.
    magnitude : float
        The limit at peak, of a source without blend [mag].
    u_0_limit : float
        Largest impact parameter.
    """

    band: str
    magnitude: float
    u_0_limit: float = 1.0

    @property
    def text(self):
        """What `parse_rule` reads back."""
        return f"peak:{self.band}={self.magnitude:.12g}"

    def gains(self, n=12):
        """Return magnitudes by which events brighten a star, and their shares, (n,) each.

        Notes
        -----
        Gauss-Legendre in sqrt(u_0), which takes out the logarithm at u_0 = 0.
        """
        x, w = np.polynomial.legendre.leggauss(n)
        s, w = 0.5 * (x + 1), 0.5 * w
        u = self.u_0_limit * s**2
        return 2.5 * np.log10((u * u + 2) / (u * np.sqrt(u * u + 4))), 2 * s * w


@dataclass(frozen=True)
class DistanceRule:
    """All sources at one distance, moving as the Galaxy's stars do there.

    Parameters
    ----------
    distance : float
        [kpc]
    """

    distance: float

    @property
    def text(self):
        """What `parse_rule` reads back."""
        return f"distance:{self.distance:.12g}"


def parse_rule(text):
    """Read a source rule.

    Parameters
    ----------
    text : str
        ``clump``, ``clump:all``, ``limit:I=21`` or ``peak:I=19`` (bands V, I, J, H, Ks), or ``distance:8.0`` (kpc, at
        least 0.05).

    Returns
    -------
    ClumpRule, LimitRule, PeakRule or DistanceRule

    Raises
    ------
    InputError
        Unknown rule or band (with the nearest known one), or an impossible number.
    """
    if isinstance(text, (ClumpRule, LimitRule, PeakRule, DistanceRule)):
        return text
    text = str(text).strip()
    word, colon, rest = text.partition(":")
    if word not in _USAGE:
        raise InputError(f"sources: '{text}' is not a rule{did_you_mean(word, _USAGE)} ({'; '.join(_USAGE.values())})")
    if word == "clump":
        if colon and rest != "all":
            raise InputError(f"sources: '{text}' is not a rule{did_you_mean(rest, ['all'])} ({_USAGE[word]})")
        return ClumpRule(rest == "all")
    if word == "distance":
        distance = _number(text, rest, word)
        if not NEAREST <= distance <= FARTHEST:
            raise InputError(f"sources: '{text}': {distance:g} kpc given, must be {NEAREST:g} to {FARTHEST:g} kpc")
        return DistanceRule(distance)
    band, equals, magnitude = rest.partition("=")
    if not equals:
        raise InputError(f"sources: '{text}' is not complete ({_USAGE[word]})")
    check_band(f"sources: '{text}': band", band)
    magnitude = _number(text, magnitude, word)
    if not 0 < magnitude <= 40:
        raise InputError(f"sources: '{text}': {magnitude:g} mag given, must be above 0 and at most 40 mag")
    return (LimitRule if word == "limit" else PeakRule)(band, magnitude)


def _number(text, given, word):
    try:
        value = float(given)
    except ValueError:
        value = math.nan
    if not math.isfinite(value):
        raise InputError(f"sources: '{text}': '{given}' is not a finite number ({_USAGE[word]})")
    return value
