"""A component's stars today, brown dwarfs and remnants, per solar mass of the mass it states.

Stars of birth mass m live if born less than lifetime(m) ago; that share is known in closed form from
the history, so the only quadrature is over birth mass.
"""

from dataclasses import dataclass

import numpy as np

from ..errors import InputError, one_of
from .classes import CLASSES, MassSpectrum

__all__ = ["COUNTS", "Population", "population"]

#: what the stated mass of a component may count, and the classes that this means
COUNTS = {
    "total": CLASSES,
    "luminous": ("star",),
    "stars+brown dwarfs": ("star", "brown_dwarf"),
}
_NODES = 12
_MOST = 120  # nodes of one class handed on


@dataclass(frozen=True, eq=False)
class Population:
    """What one solar mass of a component's stated mass consists of today.

    Parameters
    ----------
    counts : str
        What the stated mass counts: "total", "luminous" (living stars) or "stars+brown dwarfs".
    spectra : dict of str to MassSpectrum
        For each of the five classes.
    mass_fraction : dict of str to float
        Mass of each class per stated solar mass.
    number : dict of str to float
        Objects of each class today [1/Msun]; remnants wherever their kicks took them.
    born_per_msun : dict of str to float
        Objects of each class that ever were [1/Msun]: `number`, and for stars the dead ones too.
    total_to_luminous : float
        Mass of everything over the mass of living stars.
    initial_mass_per_msun : float
        Stellar and substellar mass ever formed per stated solar mass.
    mean_mass : float
        Mean mass of an object today [Msun].
    turnoff : (float, float)
        Masses dying among the oldest and the youngest stars [Msun].
    """

    counts: str
    spectra: dict
    mass_fraction: dict
    number: dict
    born_per_msun: dict
    total_to_luminous: float
    initial_mass_per_msun: float
    mean_mass: float
    turnoff: tuple

    def moment(self, power):
        """Return the sum of number times mass^power over all classes [Msun^(power-1)]; 0.5 weighs the event rate."""
        return sum(spectrum.moment(power) for spectrum in self.spectra.values())


def population(history, imf, lifetimes, ifmr, counts="total", nodes=_NODES):
    """Work out what one solar mass of a component consists of today.

    Parameters
    ----------
    history : History
        When its stars were born.
    imf : Imf
        With which masses.
    lifetimes : Lifetimes
        How long they live; not used by a relation with a fixed ``alive_below``.
    ifmr : Ifmr
        What they leave.
    counts : str
        "total", "luminous" or "stars+brown dwarfs": what the component's stated mass counts.
    nodes : int
        Gauss-Legendre nodes in ln M between two masses where something bends.

    Returns
    -------
    Population

    Raises
    ------
    InputError
        Unknown `counts`, or nothing left of what it counts.
    """
    one_of("counts", counts, COUNTS)
    if ifmr.alive_below is None:
        turnoff = tuple(float(lifetimes.turnoff_mass(age)) for age in (history.age_hi, history.age_lo))
    else:
        turnoff = (ifmr.alive_below, ifmr.alive_below)
    m, born = imf.nodes(_edges(imf, lifetimes, ifmr, turnoff), nodes)
    if ifmr.alive_below is None:
        alive = history.fraction_younger(lifetimes.lifetime(m))
    else:
        alive = np.where(m < ifmr.alive_below, 1.0, 0.0)
    shines = m >= ifmr.star_above
    alive = np.where(shines, alive, 1.0)
    spectra = {
        "star": _spectrum(m, born * alive * shines, m),
        "brown_dwarf": _spectrum(m, born * ~shines, m),
    }
    gone = born * (1 - alive)
    dead = gone > 0
    for end in ifmr.outcomes(m[dead]):
        number = (gone[dead] * end.probability)[:, None] * end.weight
        spectra[end.name] = _spectrum(end.mass.ravel(), number.ravel(), np.repeat(m[dead], end.weight.size))
    return _normalise(spectra, counts, float(born @ shines), turnoff)


def _edges(imf, lifetimes, ifmr, turnoff):
    """Birth masses between which everything is smooth, ends of the mass function included."""
    lo, hi = imf.breaks[0], imf.breaks[-1]
    inner = {*ifmr.edges(), *turnoff}
    if turnoff[0] < turnoff[1]:
        inner |= {mass for mass in lifetimes.masses if turnoff[0] < mass < turnoff[1]}
    return [lo, *sorted(x for x in inner if lo < x < hi), hi]


def _normalise(spectra, counts, stars_born, turnoff):
    """Turn numbers per solar mass formed into numbers per stated solar mass."""
    mass = {name: spectrum.moment(1) for name, spectrum in spectra.items()}
    counted = sum(mass[name] for name in COUNTS[counts])
    if not counted > 0:
        raise InputError(f"counts: nothing that '{counts}' counts is left of this population")
    formed = 1 / counted
    spectra = {
        name: MassSpectrum(spectra[name].mass, spectra[name].number * formed, spectra[name].initial_mass)
        for name in CLASSES
    }
    number = {name: spectrum.moment(0) for name, spectrum in spectra.items()}
    total = sum(mass.values())
    return Population(
        counts=counts,
        spectra=spectra,
        mass_fraction={name: mass[name] * formed for name in CLASSES},
        number=number,
        born_per_msun={**number, "star": stars_born * formed},
        total_to_luminous=total / mass["star"] if mass["star"] > 0 else np.inf,
        initial_mass_per_msun=formed,
        mean_mass=total * formed / sum(number.values()),
        turnoff=turnoff,
    )


def _spectrum(mass, number, initial):
    """Drop empty nodes, join equal masses, and thin to `_MOST` nodes keeping number and mass."""
    some = number > 0
    mass, number, initial = mass[some], number[some], initial[some]
    if mass.size == 0:
        return MassSpectrum(np.zeros(0), np.zeros(0), np.zeros(0))
    key = np.round(np.log(mass), 11)
    if np.unique(key).size > _MOST:
        # two nodes a bin at the bin's mean -+ its standard deviation keep number, mass and mass squared
        return _thin(mass, number, initial)
    _, where = np.unique(key, return_inverse=True)
    return _join(where, mass, number, initial)


def _join(where, mass, number, initial):
    total = np.bincount(where, number)
    return MassSpectrum(np.bincount(where, number * mass) / total, total, np.bincount(where, number * initial) / total)


def _thin(mass, number, initial):
    x = np.log(mass)
    bins = _MOST // 2
    where = np.minimum(((x - x.min()) / (x.max() - x.min()) * bins).astype(int), bins - 1)
    _, where = np.unique(where, return_inverse=True)
    joined = _join(where, mass, number, initial)
    spread = np.sqrt(np.maximum(np.bincount(where, number * mass**2) / joined.number - joined.mass**2, 0))
    two = np.concatenate([joined.mass - spread, joined.mass + spread])
    return MassSpectrum(two, np.tile(joined.number / 2, 2), np.tile(joined.initial_mass, 2))
