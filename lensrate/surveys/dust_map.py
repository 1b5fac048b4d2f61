"""Extinction maps of a field: a FITS image of magnitudes with celestial coordinates."""

import os
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from ..claims import check_claims
from ..errors import InputError
from .sky import Patch, even_points, from_plane

__all__ = ["DustMap"]

_LARGEST = 400_000_000  # bytes
_POINTS = 2500  # of a field at which the map is read
_PATCHES = 12  # values of A that stand for a field


@dataclass(frozen=True, eq=False)
class DustMap:
    """A map of extinction.

    Attributes
    ----------
    image : ndarray, shape (ny, nx)
        [mag], NaN where unknown.
    wcs : astropy.wcs.WCS
    path : str
    """

    image: np.ndarray
    wcs: object
    path: str

    @classmethod
    def read(cls, path):
        """Read the first image of a FITS file.

        Raises
        ------
        InputError
            Missing, too large, no image with celestial coordinates, or no finite magnitude from 0 up in it.
        """
        import warnings

        from astropy.io import fits
        from astropy.wcs import WCS

        where = f"sky_map_of_extinction '{path}'"
        if not os.path.isfile(path):
            raise InputError(f"{where}: no such file")
        if Path(path).stat().st_size > _LARGEST:
            raise InputError(f"{where}: larger than {_LARGEST} bytes; cut out the field")
        check_claims(Path(path), where)
        try:
            # opened here, since astropy leaves a file open that it cannot read
            with warnings.catch_warnings(), open(path, "rb") as file, fits.open(file, memmap=False) as hdus:
                warnings.simplefilter("ignore")
                hdu = next(h for h in hdus if h.is_image and h.header.get("NAXIS", 0) == 2)
                image, wcs = np.array(hdu.data, dtype=float), WCS(hdu.header)
        except StopIteration:
            raise InputError(f"{where}: holds no two-dimensional image") from None
        except Exception as error:  # astropy raises many kinds for a damaged file; all mean that it cannot be used
            raise InputError(f"{where}: cannot be read as FITS ({str(error)[:80]})") from None
        if not wcs.has_celestial:
            raise InputError(f"{where}: its header states no celestial coordinates")
        known = np.isfinite(image)
        if not known.any() or image[known].min() < 0 or image[known].max() > 60:
            raise InputError(f"{where}: magnitudes of 0 to 60 are needed")
        return cls(image, wcs, str(path))

    def at(self, l_deg, b_deg):
        """Return the extinction [mag] at a direction, float; the nearest pixel's.

        Raises
        ------
        InputError
            Outside the map, or unknown there.
        """
        return float(self._many(l_deg, b_deg)[0])

    def _many(self, l_deg, b_deg):
        """The nearest pixels' extinction at directions, (n,).

        Raises
        ------
        InputError
            Outside the map, or unknown there.
        """
        import astropy.units as u
        from astropy.coordinates import SkyCoord

        l, b = np.atleast_1d(l_deg), np.atleast_1d(b_deg)
        x, y = self.wcs.world_to_pixel(SkyCoord(l * u.deg, b * u.deg, frame="galactic"))
        i, j = np.rint(y), np.rint(x)
        inside = (i >= 0) & (i < self.image.shape[0]) & (j >= 0) & (j < self.image.shape[1])
        value = self.image[np.where(inside, i, 0).astype(int), np.where(inside, j, 0).astype(int)]
        bad = ~(inside & np.isfinite(value))
        if bad.any():
            k = int(np.argmax(bad))
            raise InputError(f"sky_map_of_extinction '{self.path}': says nothing at l = {l[k]:.3f}, b = {b[k]:.3f}")
        return value

    def patches(self, f):
        """Return values of A [mag], (n,), that stand for equal parts of a field's area, rising."""
        if isinstance(f.shape, Patch):
            return np.array([self.at(f.l_deg, f.b_deg)])
        x, y, _ = even_points(f.shape, _POINTS)
        l, b = np.degrees(from_plane(*np.radians([f.l_deg, f.b_deg]), x, y))
        values = np.sort(self._many(l, b))
        return np.array([part.mean() for part in np.array_split(values, min(_PATCHES, values.size))])

    def mean(self, f):
        """Return the mean extinction [mag] over a field."""
        return float(self.patches(f).mean())
