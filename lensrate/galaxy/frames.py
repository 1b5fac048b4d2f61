"""The Sun's place and motion, and the ways between (l, b, distance) and Galactocentric x, y, z.

The Galactocentric frame is that of `astropy.coordinates.Galactocentric` with the Galactic centre at l = b = 0:
right-handed, the Sun at x < 0, y = 0, tilted for the Sun's height; the disc rotates toward +y at the Sun.
"""

from dataclasses import dataclass

import astropy.units as u
import numpy as np

from ..params import Params, param
from ..units import strip

__all__ = ["Sightline3D", "Sun", "galactic_from_icrs", "icrs_from_galactic", "sky_angle"]

# rotation ICRS -> Galactic from the pole and node of the IAU 1958 system in J2000 as the Hipparcos Catalogue gives it
# (ESA 1997, SP-1200, vol. 1, eq. 1.5.11); astropy's FK5 route agrees to 0.01 arcsec
_ICRS_TO_GALACTIC = np.array(
    [
        [-0.0548755604162154, -0.8734370902348850, -0.4838350155487132],
        [+0.4941094278755837, -0.4448296299600112, +0.7469822444972189],
        [-0.8676661490190047, -0.1980763734312015, +0.4559837761750669],
    ]
)


@dataclass(frozen=True)
class Sun(Params):
    """Place and velocity of the observer; velocity toward the centre, along rotation, toward the north pole."""

    R0: u.Quantity = param("kpc", "distance from the Galactic centre", (1.0, 30.0))
    z: u.Quantity = param("kpc", "height above the plane", (-1.0, 1.0))
    U: u.Quantity = param("km/s", "velocity toward the Galactic centre", (-1000.0, 1000.0))
    V: u.Quantity = param("km/s", "total velocity along the disc's rotation", (-1000.0, 1000.0))
    W: u.Quantity = param("km/s", "velocity toward the north Galactic pole", (-1000.0, 1000.0))

    def tilt(self):
        """Return the rotation heliocentric -> Galactocentric axes, shape (3, 3)."""
        s = float((self.z / self.R0).to_value(u.one))
        c = np.sqrt(1.0 - s * s)
        return np.array([[c, 0.0, s], [0.0, 1.0, 0.0], [-s, 0.0, c]])

    def origin(self):
        """Return the Sun's Galactocentric place in kpc, shape (3,)."""
        return self.tilt() @ np.array([-self.R0.value, 0.0, 0.0])

    def velocity(self):
        """Return the Sun's Galactocentric velocity in km/s, shape (3,)."""
        return np.array([self.U.value, self.V.value, self.W.value])


@dataclass(frozen=True)
class Sightline3D:
    """Origin, direction and sky axes of one sightline in the Galactocentric frame, as the kernels want them."""

    origin: np.ndarray  # (3,) kpc
    axes: np.ndarray  # (3, 3): unit vectors toward the sightline, along l, along b
    v_sun: np.ndarray  # (3,) km/s

    @classmethod
    def toward(cls, sun, l, b):
        """Build for l, b in radians."""
        cl, sl, cb, sb = np.cos(l), np.sin(l), np.cos(b), np.sin(b)
        axes = np.array([[cb * cl, cb * sl, sb], [-sl, cl, 0.0], [-sb * cl, -sb * sl, cb]])
        return cls(sun.origin(), np.ascontiguousarray(axes @ sun.tilt().T), sun.velocity())

    def xyz(self, D):
        """Return Galactocentric x, y, z [kpc] at distances D [kpc]; each of D's shape."""
        D = np.asarray(D, dtype=float)
        return tuple(self.origin[i] + D * self.axes[0, i] for i in range(3))

    def tangent_distance(self):
        """Return the distance [kpc] of closest approach to the Galactic axis (negative: behind the observer)."""
        n = self.axes[0]
        flat = n[0] ** 2 + n[1] ** 2
        return -(self.origin[0] * n[0] + self.origin[1] * n[1]) / flat if flat > 1e-12 else 0.0

    def radius_crossings(self, R):
        """Return the positive distances [kpc] at which the cylindrical radius equals R."""
        n, o = self.axes[0], self.origin
        a = n[0] ** 2 + n[1] ** 2
        h = o[0] * n[0] + o[1] * n[1]
        disc = h * h - a * (o[0] ** 2 + o[1] ** 2 - R * R)
        if a < 1e-12 or disc <= 0.0:
            return []
        return [d for d in ((-h - np.sqrt(disc)) / a, (-h + np.sqrt(disc)) / a) if d > 0.0]

    def plane_crossing(self):
        """Return the positive distances [kpc] at which z = 0, none or one."""
        n = self.axes[0, 2]
        d = -self.origin[2] / n if abs(n) > 1e-9 else -1.0
        return [d] if 0.0 < d < 1e3 else []


def galactic_from_icrs(ra, dec):
    """Turn right ascension and declination (ICRS) into Galactic longitude and latitude.

    Parameters
    ----------
    ra, dec : Quantity, any shape
        Angles.

    Returns
    -------
    l, b : Quantity
        Degrees, l in [0, 360).

    Raises
    ------
    InputError
        Not an angle, not finite, or |dec| > 90 deg.

    See Also
    --------
    icrs_from_galactic
    """
    ra, dec = strip("ra", ra, u.deg), strip("dec", dec, u.deg, low=-90.0, high=90.0)
    return _rotate(_ICRS_TO_GALACTIC, np.radians(ra), np.radians(dec))


def icrs_from_galactic(l, b):
    """Turn Galactic longitude and latitude into right ascension and declination (ICRS).

    Parameters
    ----------
    l, b : Quantity, any shape
        Angles.

    Returns
    -------
    ra, dec : Quantity
        Degrees, ra in [0, 360).

    Raises
    ------
    InputError
        Not an angle, not finite, or |b| > 90 deg.

    See Also
    --------
    galactic_from_icrs
    """
    l, b = strip("l", l, u.deg), strip("b", b, u.deg, low=-90.0, high=90.0)
    return _rotate(_ICRS_TO_GALACTIC.T, np.radians(l), np.radians(b))


def sky_angle(l, b):
    """Return the position angle of the direction of rising b, from North (ICRS) through East.

    Parameters
    ----------
    l, b : Quantity, shapes that broadcast
        Where on the sky; undefined at the poles of either frame.

    Returns
    -------
    Quantity [rad]
        With it v_N = v_b cos - v_l sin and v_E = v_b sin + v_l cos.

    Raises
    ------
    InputError
        Not an angle, not finite, or |b| > 90 deg.
    """
    l, b = np.radians(strip("l", l, u.deg)), np.radians(strip("b", b, u.deg, low=-90.0, high=90.0))
    # the ICRS pole on the axes along l and b: cos(dec) is common to both and drops out
    x, y, z = _ICRS_TO_GALACTIC[:, 2]
    along_l = y * np.cos(l) - x * np.sin(l)
    along_b = z * np.cos(b) - np.sin(b) * (x * np.cos(l) + y * np.sin(l))
    return np.arctan2(-along_l, along_b) << u.rad


def _rotate(matrix, lon, lat):
    v = np.array([np.cos(lat) * np.cos(lon), np.cos(lat) * np.sin(lon), np.sin(lat)])
    x, y, z = np.tensordot(matrix, v, axes=1)
    return np.degrees(np.arctan2(y, x)) % 360.0 << u.deg, np.degrees(np.arctan2(z, np.hypot(x, y))) << u.deg
