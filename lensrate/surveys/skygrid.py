"""Pixels of a map: a grid in Galactic longitude and latitude, and its place on the sky for FITS headers."""

import math
from dataclasses import dataclass

import numpy as np

from ..errors import InputError
from ..units import check_range

__all__ = ["MOST_PIXELS", "SkyGrid"]

#: more than these are refused: days of work, and no map is looked at that finely
MOST_PIXELS = 300_000
_SAME = 1e-7  # of a step, so that an end that falls on a pixel is in


@dataclass(frozen=True)
class SkyGrid:
    """Pixel centres at even steps of l and b, the ends included where they fall on a step.

    Parameters
    ----------
    l_start, l_end : float
        Longitudes of the first and last pixel centre [deg]; an end below the start means through l = 0, as in 355, 5.
    b_start, b_end : float
        Latitudes likewise [deg], the end not below the start.
    step : float
        [deg]

    Raises
    ------
    InputError
        An end before its start, a step that is not above zero, a latitude beyond 90 deg, or more than
        `MOST_PIXELS` pixels.
    """

    l_start: float
    l_end: float
    b_start: float
    b_end: float
    step: float

    def __post_init__(self):
        check_range("l", np.array([self.l_start, self.l_end]), "deg", -360.0, 720.0)
        check_range("b", np.array([self.b_start, self.b_end]), "deg", -90.0, 90.0)
        if not (math.isfinite(self.step) and self.step > 0):
            raise InputError(f"step: {self.step:g} deg given, must be above 0, for example 0.5")
        if self.b_end < self.b_start:
            raise InputError(
                f"b: the end, {self.b_end:g} deg, lies before the start, {self.b_start:g} deg; exchange them"
            )
        span = self.l_end - self.l_start
        if span < 0:
            span += 360.0
            if not 0 <= span <= 180:
                raise InputError(
                    f"l: the end, {self.l_end:g} deg, lies before the start, {self.l_start:g} deg; exchange them "
                    "(355 to 5 is understood as the ten degrees through l = 0)"
                )
            object.__setattr__(self, "l_end", self.l_end + 360.0)
        if span > 360:
            raise InputError(f"l: {self.l_start:g} to {self.l_end:g} deg given, which is more than once around")
        n = self._count(span) * self._count(self.b_end - self.b_start)
        if n > MOST_PIXELS:
            fits, high = self.step, self.b_end - self.b_start
            while (math.floor(span / fits) + 1) * (math.floor(high / fits) + 1) > MOST_PIXELS:
                fits *= 1.01
            digits = 1 - math.floor(math.log10(fits))
            fits = math.ceil(fits * 10**digits) / 10**digits
            raise InputError(
                f"step: {self.step:g} deg makes {n:.3g} pixels, at most {MOST_PIXELS} are allowed; take a step of "
                f"{fits:g} deg or more, a smaller area, or several maps"
            )

        # ends are those of the last pixels
        n_b, n_l = self.shape
        object.__setattr__(self, "l_end", round(self.l_start + self.step * (n_l - 1), 9) + 0.0)
        object.__setattr__(self, "b_end", round(self.b_start + self.step * (n_b - 1), 9) + 0.0)

    def _count(self, span):
        return math.floor(span / self.step + _SAME) + 1

    @property
    def shape(self):
        """Rows in b and columns in l."""
        n_l = self._count(self.l_end - self.l_start)
        # once around, the last column would be the first again
        if (n_l - 1) * self.step > 360.0 - _SAME * self.step:
            n_l -= 1
        return self._count(self.b_end - self.b_start), n_l

    @property
    def size(self):
        """Number of pixels."""
        return math.prod(self.shape)

    def axes(self):
        """Return longitudes (n_l,) rising from the start and latitudes (n_b,) of the pixel centres [deg]."""
        n_b, n_l = self.shape
        # rounded, so that the third pixel of 0.1 deg is at 0.3
        return (
            np.round(self.l_start + self.step * np.arange(n_l), 9) + 0.0,
            np.round(self.b_start + self.step * np.arange(n_b), 9) + 0.0,
        )

    def centres(self):
        """Return l and b of every pixel [deg], each (n,): row by row in b, each row from the first l to the last.

        Longitudes are as typed: below zero where the start is, else within 0 to 360.
        """
        l, b = self.axes()
        l = l if self.l_start < 0 else l % 360.0
        return np.tile(l, b.size), np.repeat(b, l.size)

    def image(self, values):
        """Return values (n,) in the order of `centres` as an image (n_b, n_l) with l increasing to the left."""
        return np.ascontiguousarray(np.asarray(values).reshape(self.shape)[:, ::-1])

    def areas(self):
        """Return the solid angle of each pixel [deg2], (n,)."""
        b = np.radians(self.centres()[1])
        half = 0.5 * math.radians(self.step)
        top, bottom = np.minimum(b + half, 0.5 * np.pi), np.maximum(b - half, -0.5 * np.pi)
        return self.step * np.degrees(np.sin(top) - np.sin(bottom))

    def header(self):
        """Return the celestial WCS of `image` as FITS cards: plate carree in Galactic coordinates.

        Returns
        -------
        dict of str to (value, comment)

        Notes
        -----
        Calabretta & Greisen (2002), sections 2 and 5.2.3; the reference point is on the equator, where CAR is
        straight in both coordinates.
        """
        n_b, n_l = self.shape
        l, b = self.axes()
        return {
            "WCSAXES": (2, "celestial axes"),
            "CTYPE1": ("GLON-CAR", "Galactic longitude, plate carree"),
            "CTYPE2": ("GLAT-CAR", "Galactic latitude"),
            "CUNIT1": ("deg", ""),
            "CUNIT2": ("deg", ""),
            "CRPIX1": (0.5 * (n_l + 1), "the middle of the map"),
            "CRPIX2": (1.0 - float(b[0]) / self.step, "the equator, on or off the map"),
            "CRVAL1": (float(0.5 * (l[0] + l[-1]) % 360.0), "[deg] l at the reference pixel"),
            "CRVAL2": (0.0, "[deg] b at the reference pixel"),
            "CDELT1": (-self.step, "[deg] l increases to the left"),
            "CDELT2": (self.step, "[deg]"),
            "LONPOLE": (0.0, "[deg]"),
            "LATPOLE": (90.0, "[deg]"),
        }
