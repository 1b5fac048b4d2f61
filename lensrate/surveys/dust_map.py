"""Extinction maps of a field: a FITS image of magnitudes with celestial coordinates."""

from dataclasses import dataclass
from pathlib import Path

import numpy as np

from ..errors import InputError
from .sky import Patch, even_points, from_plane

__all__ = ["DustMap"]

_LARGEST = 400_000_000  # bytes
_POINTS = 40  # of a field at which the map is read


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
        if not Path(path).is_file():
            raise InputError(f"{where}: no such file")
        if Path(path).stat().st_size > _LARGEST:
            raise InputError(f"{where}: larger than {_LARGEST} bytes; cut out the field")
        try:
            with warnings.catch_warnings(), fits.open(path) as hdus:
                warnings.simplefilter("ignore")
                hdu = next(h for h in hdus if h.is_image and h.header.get("NAXIS", 0) == 2)
                image, wcs = np.array(hdu.data, dtype=float), WCS(hdu.header)
        except StopIteration:
            raise InputError(f"{where}: holds no two-dimensional image") from None
        except (OSError, ValueError, TypeError) as error:
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
        import astropy.units as u
        from astropy.coordinates import SkyCoord

        x, y = self.wcs.world_to_pixel(SkyCoord(l_deg * u.deg, b_deg * u.deg, frame="galactic"))
        i, j = int(np.rint(y)), int(np.rint(x))
        inside = 0 <= i < self.image.shape[0] and 0 <= j < self.image.shape[1]
        if not inside or not np.isfinite(self.image[i, j]):
            raise InputError(f"sky_map_of_extinction '{self.path}': says nothing at l = {l_deg:.3f}, b = {b_deg:.3f}")
        return float(self.image[i, j])

    def directions(self, f):
        """Return l, b [deg] and equal weights of the points of a field at which the map is read."""
        if isinstance(f.shape, Patch):
            return f.directions()
        x, y, w = even_points(f.shape, _POINTS)
        l, b = from_plane(*np.radians([f.l_deg, f.b_deg]), x, y)
        return np.degrees(l), np.degrees(b), w

    def mean(self, f):
        """Return the mean extinction [mag] over a field."""
        l, b, w = self.directions(f)
        return float(np.sum(w * [self.at(x, y) for x, y in zip(l, b)]))
