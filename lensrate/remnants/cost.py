"""What a synthesis will take: steps of orbits by piece of work, time from a short measurement, memory from sizes."""

import time
from dataclasses import dataclass

import astropy.units as u
import numpy as np

from ..kernels.orbits import FAR, SOFT
from ..kernels.potential import LANES
from ..units import KPC_PER_MYR
from .births import self_held, window
from .cells import cells_of
from .equilibrium import followed_gyr
from .orbits import integrate, step

__all__ = ["PILOT", "Estimate", "estimate", "steps"]

PILOT = 8  # one tracer in so many finds the velocities about which cells are divided
_GYR = 1e3 * KPC_PER_MYR
_FADES = 450.0  # km/s; orbits of faster kicks lead outward, where steps are long, and end beyond 100 kpc
_OVERHEAD = 1.1  # a step with its notes and deposits over one in the short measurement
_PROCESS = 250e6  # bytes of the interpreter with its libraries
_CELLS = 1800  # of an equilibrium, at most


@dataclass(frozen=True)
class Estimate:
    """Time and memory of a synthesis.

    Parameters
    ----------
    seconds : float
        On so many threads as were asked for, if nothing else runs there.
    memory : float  [bytes]
    """

    seconds: float
    memory: float


def steps(component, galaxy, potential, settings):
    """Return the number of orbit steps of a component's equilibrium (0 where it has none) and of each kick bin.

    Parameters
    ----------
    component : Component
    galaxy : Galaxy
    potential : Potential
    settings : Settings

    Returns
    -------
    ndarray, shape (k + 2,)
    """
    cells = cells_of(component, galaxy, potential)
    radius = np.interp(np.linspace(0.05, 0.95, 10), cells.profile[1], cells.profile[0]) / cells.scale[0]
    per_time = np.mean(1 / np.hypot(radius, SOFT) + 1 / FAR) / step(settings.eta)
    held = 0 if self_held(component) else settings.bundles * LANES * followed_gyr() * _GYR
    edges = np.asarray(settings.kick_edges, dtype=float)
    speed = np.concatenate([[0.0], 0.5 * (edges[1:] + edges[:-1])])
    share = 0.05 + 0.95 * np.exp(-((speed / _FADES) ** 3))
    each = settings.tracers * (1 + 1 / PILOT) * window(component).old * share
    return per_time * np.concatenate([[held], each])


def estimate(components, galaxy, potential, settings, jobs=1):
    """Work out what a synthesis of some components will take; takes a few seconds itself.

    Parameters
    ----------
    components : sequence of Component
    galaxy : Galaxy
    potential : Potential
    settings : Settings
    jobs : int
        Threads.

    Returns
    -------
    Estimate
    """
    total = sum(steps(c, galaxy, potential, settings).sum() for c in components)
    grid = settings.grid
    cells = grid.n_R * grid.n_z * grid.n_phi
    # int16 numbers of two and four Gaussians and float64 density, each held once by element and once stacked
    element = 2 * cells * (2 * (1 + 20 * (1 + grid.n_four / grid.n_R)) + 8)
    kept = len(components) * len(settings.kick_edges) * element
    # a thread sums all of it, a batch, and works on copies of them
    working = jobs * cells * 8 * (6 * 40 + settings.batches)
    bundles = settings.bundles * LANES * 8
    held = bundles * 4 * 6 * len(components) + settings.bundles * _CELLS * 4 * 5
    return Estimate(total * _seconds_a_step(potential, settings) * _OVERHEAD / jobs, _PROCESS + kept + working + held)


def _seconds_a_step(potential, settings):
    """Measure the time of a step on circular orbits."""
    n, span = 64 * LANES, 50.0
    place = np.zeros((n, 3))
    place[:, 0], place[:, 2] = np.linspace(-9, -1, n), 0.05
    velocity = np.zeros((n, 3))
    velocity[:, 1] = 200.0
    orbit = (place * u.kpc, velocity * (u.km / u.s), span * u.Myr, settings.eta)
    integrate(potential, *orbit)  # compiled, or taken from the cache
    taken = []
    for _ in range(5):  # the fastest is least disturbed by whatever else runs
        start = time.perf_counter()
        integrate(potential, *orbit)
        taken.append(time.perf_counter() - start)
    per_time = np.mean(1 / np.hypot(place[:, 0], SOFT) + 1 / FAR) / step(settings.eta)
    return min(taken) / (n * per_time * span * KPC_PER_MYR)
