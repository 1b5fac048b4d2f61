"""Light of lenses: dwarfs on their sequence, white dwarfs by age and mass; all others give none."""

from functools import cache

import numpy as np

from ..datafiles import read_set
from ..remnants.tables import check_keys, number
from .bands import check_band
from .luminosity import _sequence

__all__ = ["dwarf_magnitude", "white_dwarf_magnitude"]


def dwarf_magnitude(band, mass):
    """Return the absolute magnitude of main-sequence stars.

    Parameters
    ----------
    band : str
        V, I, J, H or Ks.
    mass : ndarray
        [Msun]; from 0.079 Msun up, lighter ones are as bright as that one.

    Returns
    -------
    ndarray [mag]

    Notes
    -----
    Pecaut & Mamajek (2013), straight in ln M; what a star has brightened on its way to the turn-off is left out, so
    that a lens just before it is up to a magnitude too faint.
    """
    check_band("band", band)
    return _sequence(band, np.asarray(mass, dtype=float))


@cache
def _cooling(band):
    table, where = read_set("sources", "white_dwarf_cooling"), "sources 'white_dwarf_cooling'"
    check_keys(where, table, ["reference", "status", "retrieved", "units", "radius", "columns"], ["radius", "columns"])
    radius = table["radius"]
    columns = table["columns"]
    return (
        np.log(np.array(columns["age"])),
        np.array(columns[f"M_{band}"]),
        number(where, radius, "power", ""),
        number(where, radius, "mass", "Msun"),
    )


def white_dwarf_magnitude(band, mass, age):
    """Return the absolute magnitude of white dwarfs.

    Parameters
    ----------
    band : str
        V, I, J, H or Ks.
    mass : ndarray
        [Msun]
    age : ndarray
        Since they became white dwarfs [Gyr]; the shapes broadcast. Outside 1 Myr to 10.5 Gyr the ends hold.

    Returns
    -------
    ndarray [mag]

    Notes
    -----
    The sequence of 0.6 Msun, straight in ln age, with the surface of another mass scaled as R^2. That heavy ones cool
    at another pace is left out: some tenths of a magnitude.
    """
    check_band("band", band)
    log_age, magnitude, power, typical = _cooling(band)
    faded = np.interp(np.log(np.maximum(age, 1e-9)), log_age, magnitude)
    return faded - 5.0 * power * np.log10(np.asarray(mass, dtype=float) / typical)
