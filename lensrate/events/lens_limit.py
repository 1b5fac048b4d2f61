"""What a limit on the lens's light says: stars shine by their mass, white dwarfs by mass and age, others do not."""

import numpy as np

from ..sources.extinction import band_ratio
from ..sources.lens_light import dwarf_magnitude, white_dwarf_magnitude

__all__ = ["LensLimit"]

_STAR_SPREAD = 0.5  # mag; age and metals at a given mass, our choice
_AGES = np.linspace(0.25, 9.75, 20)  # Gyr, cooling ages taken as equally likely; our choice
_DARK = 60.0


class LensLimit:
    """A lens fainter than a limit in I.

    Parameters
    ----------
    limit : float
        Apparent magnitude in I.
    rates : EventRates
        Sightline.

    Attributes
    ----------
    threshold : ndarray, shape (P, C)
        Absolute magnitude that the lens must be fainter than, for each relative parallax and source distance.
    """

    def __init__(self, limit, rates):
        ready = rates.ready
        D_L = 1.0 / (np.exp(rates.ln_pi)[:, None] + 1.0 / rates.D_S)
        dust = np.asarray(ready.sources.dust(D_L.ravel())).reshape(D_L.shape)
        dust = dust / band_ratio(ready.sources.dust.band)
        self.threshold = limit - 5.0 * np.log10(D_L) - 10.0 - dust

    def of(self, masses):
        """Return absolute magnitudes (J,) of a class at its masses, and their spread."""
        mass = np.exp(masses.ln_M)
        if masses.name == "star":
            return dwarf_magnitude("I", mass), _STAR_SPREAD
        if masses.name == "white_dwarf":
            faded = white_dwarf_magnitude("I", mass[:, None], _AGES)
            return faded.mean(axis=1), float(faded.std(axis=1).mean())
        return np.full(mass.size, _DARK), 1.0
