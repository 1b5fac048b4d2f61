"""What a limit on the lens's light says: stars shine by their mass, white dwarfs by mass and age, others do not."""

import numpy as np

from ..sources.extinction import band_ratio
from ..sources.lens_light import dwarf_magnitude, white_dwarf_magnitude
from .light import cooling_age

__all__ = ["LensLimit"]

_STAR_SPREAD = 0.5  # mag; age and metals at a given mass, our choice
_BIRTHS = (np.arange(12) + 0.5) / 12  # at which the cooling ages of a component's white dwarfs are taken
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
        self._rates = rates
        self.threshold = limit - 5.0 * np.log10(D_L) - 10.0 - dust

    def of(self, masses):
        """Return absolute magnitudes (J,) of a class at its masses, and their spread."""
        mass = np.exp(masses.ln_M)
        if masses.name == "star":
            return dwarf_magnitude("I", mass), _STAR_SPREAD
        if masses.name == "white_dwarf":
            return self._white_dwarfs(mass, masses)
        return np.full(mass.size, _DARK), 1.0

    def _white_dwarfs(self, mass, masses):
        """Means over components, by their events, and over the ages of their white dwarfs; and the spread around."""
        model = self._rates.ready.model
        # the first bases are the components themselves
        mine = [k for k, base in enumerate(masses.bases) if base < model.n_stellar]
        events = self._rates.table.sum(axis=(1, 2, 3))[masses.bases[mine]]
        weight = masses.number[:, mine] * events
        of_mass = weight.sum(axis=1) * np.sqrt(mass)
        weight = weight / np.maximum(weight.sum(axis=1, keepdims=True), 1e-300)
        u = np.broadcast_to(_BIRTHS, (mass.size, _BIRTHS.size))
        M = np.broadcast_to(mass[:, None], u.shape)
        faded = [white_dwarf_magnitude("I", M, cooling_age(model, masses.bases[k], M, u)) for k in mine]
        faded = np.stack(faded, axis=1)  # (J, components, births)
        mean = np.einsum("jk,jkn->j", weight, faded) / _BIRTHS.size
        variance = np.einsum("jk,jkn->j", weight, (faded - mean[:, None, None]) ** 2) / _BIRTHS.size
        return mean, float(np.sqrt(of_mass @ variance / of_mass.sum()))
