"""Orbit weights that hold a stellar component in equilibrium (Schwarzschild 1979, ApJ 232, 236).

Bundles of orbits start with rough velocities; Richardson-Lucy iterations weigh the bundles so that the time
they spend in cells adds up to the component's density. A later window, which the weights have not seen,
tells how well it holds. Snapshots of the weighted orbits are the places and velocities at which remnants are born.
"""

from dataclasses import dataclass

import astropy.units as u
import numpy as np

from ..errors import InputError
from ..galaxy.density import Bar, PowerHalo, Uniform
from ..kernels import equilibrium as kernels
from ..kernels import kinematics as motion
from ..kernels.potential import LANES
from ..parallel import run_map
from ..units import KPC_PER_MYR
from .orbits import step

__all__ = [
    "CHUNK",
    "TRAIN_GYR",
    "Cells",
    "Equilibrium",
    "cells_of",
    "own_velocities",
    "richardson_lucy",
    "rotation_table",
    "solve",
]

_SHELL_SHARES = np.concatenate([[0, 0.01, 0.03], np.linspace(0.07, 0.91, 9), [0.95, 0.98, 0.995]])
_HEIGHT_SHARES = np.array([0, 0.15, 0.3, 0.45, 0.6, 0.75, 0.88, 0.96, 0.995])
#: bundles done as one job, whatever the number of threads
CHUNK = 64
_STRIDE = 8  # steps between notes: longer strides waste orbits, shorter ones add nothing
_SNAPSHOTS = 4  # per orbit
#: training window [Gyr] of components that are no bar, and of a bar
TRAIN_GYR = (4.0, 8.0)


@dataclass(frozen=True)
class Cells:
    """Cells of `kernels.equilibrium.cell_of`, with the component's share of mass in each.

    Parameters
    ----------
    scale : ndarray, shape (4,)
    m_edges, t_edges : ndarray
    n_phi : int
    target : ndarray, shape (cells + 1,)
        Sums to one; the last is outside.
    profile : tuple of ndarray
        Shell coordinate and the share of mass inside it, to draw from.
    heights : tuple of ndarray
        The same for the height, over all shells.
    mass : float
        Of the component, over all the space that was integrated [Msun].
    """

    scale: np.ndarray
    m_edges: np.ndarray
    t_edges: np.ndarray
    n_phi: int
    target: np.ndarray
    profile: tuple
    heights: tuple
    mass: float

    @property
    def shape(self):
        """Numbers of shells, heights and azimuths."""
        return self.m_edges.size - 1, self.t_edges.size - 1, self.n_phi


@dataclass(frozen=True)
class Equilibrium:
    """Weighted snapshots of a component in equilibrium, and how well they hold.

    Parameters
    ----------
    states : ndarray, shape (bundles, snapshots a bundle, 6)
        x, y, z [kpc], p_x, p_y, p_z [km/s] in the bar's frame.
    weights : ndarray, shape (bundles,)
        Sum to one.
    effective : float
        Effective number of bundles, 1 / sum of squared weights.
    mismatch : dict of str to float
        Mass-weighted rms of synthesised over wanted mass per cell minus one: "start" (equal weights), "trained",
        "later" (the judge), and of that "later_plane", "later_middle", "later_high" by thirds of the mass in height.
    """

    states: np.ndarray
    weights: np.ndarray
    effective: float
    mismatch: dict


def cells_of(component, galaxy, potential, n_phi=None):
    """Choose cells for a component and integrate its density over them.

    Parameters
    ----------
    component : Component
    galaxy : Galaxy
    potential : Potential
        Its bar's frame is used.
    n_phi : int, optional
        Cells over half a turn; 8 for bars, 4 for discs, 1 for halos.

    Returns
    -------
    Cells

    Raises
    ------
    InputError
        A density without an end, which has no equilibrium here.
    """
    density = component.density
    if isinstance(density, Uniform):
        raise InputError(f"component '{component.element}': a uniform density has no equilibrium; leave it out")
    if isinstance(density, Bar):
        scale, n_phi = np.array([1 / density.a.value, 1 / density.b.value, 1 / density.c.value, 0.0]), n_phi or 8
        m_fine = np.concatenate([[0.0], np.geomspace(0.02, 25.0, 160)])
    elif not hasattr(density, "h_R"):
        q = density.q.value if isinstance(density, PowerHalo) else 1.0
        scale, n_phi = np.array([1.0, 1.0, 1 / q, 0.0]), n_phi or 1
        m_fine = np.concatenate([[0.0], np.geomspace(0.05, 100.0, 160)])
    else:
        h = density.h_R.value
        flat = getattr(density, "R_flat", 0 * u.kpc).value
        scale, n_phi = np.array([1.0, 1.0, 0.0, 1.0]), n_phi or 4
        m_fine = np.linspace(0.0, flat + 9 * h, 240)
    t_fine = np.linspace(0.0, 1.0, 25) if scale[3] == 0 else np.concatenate([[0.0], np.geomspace(0.01, 15.0, 80)])

    def masses(m_edges, t_edges, phi, nodes):
        return _integrate(density, galaxy.R0, potential, scale, m_edges, t_edges, phi, nodes)

    fine = masses(m_fine, t_fine, max(4, n_phi), 2).sum(axis=2)
    mass = float(4 * fine.sum())  # the cells cover a quarter of space
    shells, heights = (np.concatenate([[0.0], np.cumsum(fine.sum(axis=i))]) / fine.sum() for i in (1, 0))
    m_edges = np.interp(_SHELL_SHARES, shells, m_fine)
    t_edges = np.linspace(0, 1, 9) if scale[3] == 0 else np.interp(_HEIGHT_SHARES, heights, t_fine)
    target = masses(m_edges, t_edges, n_phi, 4).ravel() / fine.sum()
    target = np.append(target, max(1 - target.sum(), 1e-9))
    return Cells(scale, m_edges, t_edges, n_phi, target / target.sum(), (m_fine, shells), (t_fine, heights), mass)


def _integrate(density, R0, potential, scale, m_edges, t_edges, n_phi, nodes):
    """Return the mass in each cell by Gauss-Legendre, shape (shells, heights, n_phi)."""
    x, w = np.polynomial.legendre.leggauss(nodes)

    def spread(edges):
        half = 0.5 * np.diff(edges)[:, None]
        return (edges[:-1, None] + half * (1 + x)).ravel(), (half * w).ravel()

    (m, wm), (t, wt), (phi, wp) = (spread(e) for e in (m_edges, t_edges, np.linspace(0, np.pi, n_phi + 1)))
    m, t, phi = np.meshgrid(m, t, phi, indexing="ij")
    if scale[3] == 1:
        volume, flat, z = m, m, t
    else:
        volume = m**2 / np.prod(scale[:3])
        flat, z = m * np.sqrt(1 - t**2), m * t / scale[2]
    points = np.stack([flat * np.cos(phi) / scale[0], flat * np.sin(phi) / scale[1], z], axis=-1).reshape(-1, 3)
    rho = density.at(*potential.from_bar_frame(points).T, R0).reshape(m.shape)
    mass = rho * volume * wm[:, None, None] * wt[:, None] * wp
    return mass.reshape(m_edges.size - 1, nodes, t_edges.size - 1, nodes, n_phi, nodes).sum(axis=(1, 3, 5))


def richardson_lucy(occupancy, target, iterations):
    """Weigh mixtures so that their sum approaches a target; each iteration raises the likelihood.

    Parameters
    ----------
    occupancy : ndarray, shape (n, cells)
        Rows sum to one.
    target : ndarray, shape (cells,)
        Sums to one.
    iterations : int

    Returns
    -------
    ndarray, shape (n,)
        Weights, summing to one.

    Notes
    -----
    Richardson (1972), Lucy (1974, AJ 79, 745): w_b times the mean of target over model in the cells it visits.
    """
    weights = np.full(occupancy.shape[0], 1 / occupancy.shape[0])
    for _ in range(iterations):
        weights *= occupancy @ (target / np.maximum(weights @ occupancy, 1e-300))
    return weights / weights.sum()


def solve(
    component,
    galaxy,
    potential,
    rng,
    *,
    bundles=2048,
    iterations=300,
    train_gyr=None,
    eta=0.1,
    jobs=1,
    executor=None,
    progress=None,
):
    """Find the equilibrium of one component.

    Parameters
    ----------
    component : Component
    galaxy : Galaxy
    potential : Potential
        What the orbits feel; see `Potential.for_orbits`.
    rng : numpy.random.Generator
    bundles : int
        Of 16 orbits each, rounded up to whole pieces of 64; the result does not depend on `jobs`.
    iterations : int
        Of Richardson and Lucy.
    train_gyr : float, optional
        Length of the training window, after half a Gyr dropped; the judging window is half as long and begins half
        a training window later. 8 for bars, 4 for the rest: see `TRAIN_GYR`.
    eta : float
        Step, see `orbits.step`.
    jobs, executor, progress
        See `parallel.run_map`.

    Returns
    -------
    Equilibrium
    """
    cells = cells_of(component, galaxy, potential)
    pieces = -(-bundles // CHUNK)
    train = (train_gyr or TRAIN_GYR[isinstance(component.density, Bar)]) * 1e3 * KPC_PER_MYR
    drop = 0.5e3 * KPC_PER_MYR
    kinds, pars = potential.packed

    def run(piece):
        number, rng = piece
        shares = (number + (np.arange(CHUNK) + 0.5) / CHUNK) / pieces
        states, times = _start(component, galaxy, potential, cells, shares, rng)
        trained, later = (np.empty((CHUNK, cells.target.size)) for _ in range(2))
        snapshots = np.empty((*times.shape, 6))
        orbit = (kinds, pars, potential.omega, step(eta), states)
        grid = (_STRIDE, cells.scale, cells.m_edges, cells.t_edges, cells.n_phi)
        kernels.occupy(*orbit, drop, drop + train, *grid, drop + train * times, trained, snapshots)
        kernels.occupy(*orbit, 0.5 * train, train, *grid, times[:, :0], later, snapshots[:, :0])
        return trained, later, snapshots

    parts = run_map(run, enumerate(rng.spawn(pieces)), jobs, executor, progress)
    trained, later, snapshots = (np.concatenate([p[i] for p in parts]) for i in range(3))
    weights = richardson_lucy(trained, cells.target, iterations)
    mismatch = {"start": _rms(trained.mean(axis=0), cells), "trained": _rms(weights @ trained, cells)}
    mismatch["later"] = _rms(weights @ later, cells)
    for name, part in zip(("plane", "middle", "high"), np.array_split(np.arange(cells.shape[1]), 3)):
        mismatch[f"later_{name}"] = _rms(weights @ later, cells, part)
    states = snapshots.reshape(weights.size, LANES * _SNAPSHOTS, 6)
    return Equilibrium(states, weights, float(1 / np.sum(weights**2)), mismatch)


def _rms(model, cells, heights=slice(None)):
    wanted = cells.target[:-1].reshape(cells.shape)[:, heights]
    found = model[:-1].reshape(cells.shape)[:, heights]
    good = wanted > 0
    return float(np.sqrt(np.average((found[good] / wanted[good] - 1) ** 2, weights=wanted[good])))


def _start(component, galaxy, potential, cells, shares, rng):
    """Return starting states of bundles at given shares of the mass, shape (n * LANES, 6), and snapshot times (0-1)."""
    n = shares.size * LANES
    bundle = np.repeat(np.arange(shares.size), LANES)
    m = np.interp(shares, cells.profile[1], cells.profile[0])
    # every other bundle starts farther out, to feed the outer orbits that the weights may want
    m = m * np.where(np.arange(shares.size) % 2, 1.0, 1.2 if cells.scale[3] else 1.5)
    m = m[bundle] * np.exp(0.05 * rng.normal(size=n))
    phi = rng.uniform(0, 2 * np.pi, n)
    if cells.scale[3] == 1:
        z = np.interp(rng.uniform(0, 0.999, n), cells.heights[1], cells.heights[0])
        z *= rng.choice([-1, 1], n) * rng.uniform(0.3, 1.7, shares.size)[bundle]
        flat = m
    else:
        t = rng.uniform(-1, 1, n)
        flat, z = m * np.sqrt(1 - t**2), m * t / cells.scale[2]
    place = np.column_stack([flat * np.cos(phi) / cells.scale[0], flat * np.sin(phi) / cells.scale[1], z])
    here = potential.from_bar_frame(place)
    velocity = _velocities(component, galaxy, potential, here, bundle, rng)
    times = np.sort(rng.uniform(size=(n, _SNAPSHOTS)), axis=1)
    return np.hstack([place, potential.to_bar_frame(velocity)]), times


def rotation_table(potential):
    """Return the potential's circular speed as the kinematics' rotation table, 0 to 30 kpc."""
    radius = np.arange(301) * 0.1
    speed = np.concatenate([[0.0], potential.circular_speed(radius[1:] * u.kpc).value])
    return np.concatenate([[motion.TABLE, 0.1], speed])


def own_velocities(component, galaxy, potential, place, rng):
    """Draw from the component's own velocity distribution, rotating with the potential's circular speed.

    Parameters
    ----------
    component : Component
    galaxy : Galaxy
    potential : Potential
    place : ndarray, shape (n, 3)  [kpc]
        Galactocentric.
    rng : numpy.random.Generator

    Returns
    -------
    mean, random : ndarray, shape (n, 3)  [km/s]
        Galactocentric; their sum is the velocity.
    """
    moments = np.empty((place.shape[0], 9))
    parameters = np.asarray(component.kinematics.pack(galaxy.R0, component.density), dtype=float)
    rotation = rotation_table(potential)
    motion.velocity_many(component.kinematics.kind, parameters, rotation, *place.T.copy(), moments)
    # the tensors of this family have no terms with z but zz
    xx, yy, zz, xy = (np.maximum(moments[:, 3], 1e-12), moments[:, 4], moments[:, 5], moments[:, 6])
    g, s = rng.normal(size=(place.shape[0], 3)), np.sqrt(xx)
    across = np.sqrt(np.maximum(yy - xy**2 / xx, 0))
    random = np.column_stack([s * g[:, 0], xy / s * g[:, 0] + across * g[:, 1], np.sqrt(zz) * g[:, 2]])
    return moments[:, :3], random


def _velocities(component, galaxy, potential, place, bundle, rng):
    """Draw rough velocities about the component's own motion, hotter and colder from bundle to bundle."""
    n = place.shape[0]
    mean, random = own_velocities(component, galaxy, potential, place, rng)
    warmth = rng.uniform(0.5, 1.25, bundle[-1] + 1)[bundle]
    velocity = mean + warmth[:, None] * random
    kind = (bundle // 2) % 4
    if hasattr(component.density, "h_R"):
        # half the bundles start near the top of their vertical motion, whatever the vertical force is there,
        # and inside a scale length half of these turn too slowly for their radius, as high orbits near the centre must
        velocity[:, 2] *= np.where(kind % 2 == 1, 0.2, 1.0)
        slow = (kind == 3) & (np.hypot(place[:, 0], place[:, 1]) < component.density.h_R.value)
        velocity[:, :2] *= np.where(slow, rng.uniform(0.1, 1.0, n), 1.0)[:, None]
        return velocity
    # a quarter cold and fast, a quarter of any speed in any direction; nothing near escape
    escape = np.sqrt(-2 * potential.value(*(place.T * u.kpc)).value)
    g = rng.normal(size=(n, 3))
    flat = g / np.linalg.norm(g, axis=1)[:, None] * (escape * rng.uniform(0.05, 0.75, n))[:, None]
    fast = 1.6 * mean + 0.4 * random
    velocity = np.where((kind == 1)[:, None], fast, np.where((kind == 3)[:, None], flat, velocity))
    return velocity * np.minimum(1, 0.8 * escape / np.maximum(np.linalg.norm(velocity, axis=1), 1e-9))[:, None]
