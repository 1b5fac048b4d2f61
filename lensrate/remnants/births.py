"""Where and how fast remnants start, and at which ages they count.

A remnant is born with the place and velocity of a star of its component, drawn from the component's equilibrium,
and gets a kick in a random direction, with a speed that is flat inside its bin.
"""

import math
from dataclasses import dataclass

import numpy as np

from ..errors import InputError
from ..galaxy.density import NuclearDisc
from ..units import KPC_PER_MYR
from .cells import cells_of
from .equilibrium import own_velocities

__all__ = ["KICK_EDGES", "Window", "analytic", "draw", "kicked", "self_held", "window"]

#: edges of the kick bins [km/s]: narrow where kicks are like the stars' own dispersions
KICK_EDGES = (0, 5, 10, 20, 40, 60, 90, 130, 180, 240, 310, 400, 520, 700, 1000, 1500)
_SHORTEST = 2.0  # Gyr: a burst is seen over its last two, since the potential is steady
_MIXED = 2.0  # Gyr: several hundred turns of a self-held component, after which nothing changes any more


@dataclass(frozen=True)
class Window:
    """Ages that count, in kernel time [kpc/(km/s)], weighed as exp(growth * age)."""

    young: float
    old: float
    growth: float

    @property
    def total(self):
        """Integral of the weight over the window."""
        if self.growth == 0:
            return self.old - self.young
        return (math.exp(self.growth * self.old) - math.exp(self.growth * self.young)) / self.growth


def window(component):
    """Return the ages at which a component's remnants are seen.

    Parameters
    ----------
    component : Component
        A burst is seen over the two Gyr before its age; a self-held component over the second Gyr of its orbits.

    Returns
    -------
    Window
    """
    gyr = 1e3 * KPC_PER_MYR
    young, old = component.age
    if old <= 0:
        raise InputError(f"component '{component.element}': remnants need an age above 0, got {component.age} Gyr")
    if self_held(component):
        return Window(0.5 * min(old, _MIXED) * gyr, min(old, _MIXED) * gyr, 0.0)
    if young == old:
        young = max(0.0, old - _SHORTEST)
        return Window(young * gyr, old * gyr, 0.0)
    growth = 0.0 if math.isinf(component.efold) else 1 / (component.efold * gyr)
    return Window(young * gyr, old * gyr, growth)


def self_held(component):
    """Say whether a component is held by its own gravity, which the other orbits leave out.

    So compact a body scatters orbits until no weights can hold it: its stars and remnants start from its own
    density and dispersions instead, and move in the whole potential.
    """
    return isinstance(component.density, NuclearDisc)


def analytic(component, galaxy, potential, n, rng):
    """Draw places and velocities from a component's own density and velocity distribution.

    Parameters
    ----------
    component : Component
    galaxy : Galaxy
    potential : Potential
    n : int
    rng : numpy.random.Generator

    Returns
    -------
    ndarray, shape (n, 6)
        Rows in the bar's frame.
    """
    cells = cells_of(component, galaxy, potential)
    m = np.interp(rng.uniform(0, 1, n), cells.profile[1], cells.profile[0])
    height = np.interp(rng.uniform(0, 1, n), cells.heights[1], cells.heights[0])
    phi = rng.uniform(0, 2 * np.pi, n)
    if cells.scale[3] == 1:
        flat, z = m, height
    else:
        flat, z = m * np.sqrt(1 - height**2), m * height / cells.scale[2]
    z = z * rng.choice([-1.0, 1.0], n)
    place = np.column_stack([flat * np.cos(phi) / cells.scale[0], flat * np.sin(phi) / cells.scale[1], z])
    mean, random = own_velocities(component, galaxy, potential, potential.from_bar_frame(place), rng)
    return np.hstack([place, potential.to_bar_frame(mean + random)])


def draw(equilibrium, n, rng):
    """Draw rows from weighted snapshots, turned by the two exact symmetries of the potential.

    Parameters
    ----------
    equilibrium : Equilibrium
    n : int
    rng : numpy.random.Generator

    Returns
    -------
    ndarray, shape (n, 6)
        Equal weight each: resampling scatters less than carried weights would.
    """
    # one row per equal step of the summed weights, so that no bundle is drawn much more or less than it should
    steps = (np.arange(n) + rng.uniform()) / n
    bundle = np.searchsorted(np.cumsum(equilibrium.weights), steps, side="right").clip(max=equilibrium.weights.size - 1)
    rows = equilibrium.states[bundle, rng.integers(equilibrium.states.shape[1], size=n)].copy()
    rows[:, [0, 1, 3, 4]] *= rng.choice([-1.0, 1.0], n)[:, None]
    rows[:, [2, 5]] *= rng.choice([-1.0, 1.0], n)[:, None]
    return rows


def kicked(rows, low, high, rng):
    """Add a kick of isotropic direction and a speed flat between two values.

    Parameters
    ----------
    rows : ndarray, shape (n, 6)
        At birth, in the bar's frame.
    low, high : float  [km/s]
    rng : numpy.random.Generator

    Returns
    -------
    ndarray, shape (n, 6)
    """
    n = rows.shape[0]
    direction = rng.normal(size=(n, 3))
    # stratified, so that the bin is evenly filled
    speed = low + (high - low) * (rng.permutation(n) + rng.uniform(size=n)) / n
    out = rows.copy()
    out[:, 3:] += direction * (speed / np.linalg.norm(direction, axis=1))[:, None]
    return out
