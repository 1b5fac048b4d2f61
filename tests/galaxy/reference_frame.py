"""astropy's Galactocentric frame set up as this package's, for tests of places and velocities."""

import astropy.units as u
import numpy as np
from astropy.coordinates import ICRS, CartesianDifferential, Galactic, Galactocentric, SkyCoord


def galactocentric(sun):
    """astropy's frame with its centre at l = b = 0 and the same Sun."""
    frame = Galactocentric(
        galcen_coord=Galactic(0 * u.deg, 0 * u.deg).transform_to(ICRS()),
        galcen_distance=sun.R0,
        z_sun=sun.z,
        galcen_v_sun=CartesianDifferential(sun.U, sun.V, sun.W),
    )
    # astropy's default roll puts the pole 0.1 arcsec off the plane through the Sun and the axis
    pole = SkyCoord(0 * u.deg, 90 * u.deg, 1 * u.kpc, frame="galactic").transform_to(frame)
    return frame.replicate_without_data(roll=np.arctan2(pole.y, pole.z - sun.z))
