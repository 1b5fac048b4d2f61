"""Orbit weights that hold a stellar component in equilibrium (Schwarzschild 1979, ApJ 232, 236).

Bundles of like orbits start with rough velocities; Richardson-Lucy iterations weigh the bundles so that the time
they spend in cells adds up to the component's density, and to its columns toward the bulge. A later window, which the
weights have not seen, tells how well it holds. Snapshots of the weighted orbits are the places and velocities at
which remnants are born.
"""

from dataclasses import dataclass

import astropy.units as u
import numpy as np

from ..kernels import equilibrium as kernels
from ..kernels import kinematics as motion
from ..kernels.potential import LANES
from ..parallel import run_map
from ..units import KPC_PER_MYR
from .cells import COLUMNS_END, LATITUDES, LONGITUDES, cells_of, columns_of, eye_of
from .orbits import step

__all__ = [
    "CHUNK",
    "TRAIN_GYR",
    "Equilibrium",
    "followed_gyr",
    "own_velocities",
    "richardson_lucy",
    "rotation_table",
    "solve",
]

#: bundles done as one job, whatever the number of threads
CHUNK = 64
_STRIDE = 8  # steps between notes: longer strides waste orbits, shorter ones add nothing
_SNAPSHOTS = 4  # per orbit
#: training window [Gyr]
TRAIN_GYR = 3.0
_DROPPED = 0.5  # Gyr before it
_GAP, _JUDGED = 0.25, 0.5  # training windows between it and the judging window, and length of that one
_LIKE = 0.3  # share of a bundle's random velocities that its orbits do not have in common
#: what all columns together weigh against all cells
_COLUMNS_WEIGH = 1.0


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
        "later" (the judge); of that "later_plane", "later_middle", "later_high" by thirds of the cells in height,
        "later_inner" of the shells that hold the inner 80 % of the mass, "later_rings" of cells summed over azimuth;
        "later_noise", which is in all of these, from the two halves of the judging window.
    """

    states: np.ndarray
    weights: np.ndarray
    effective: float
    mismatch: dict


def richardson_lucy(occupancy, target, iterations):
    """Weigh mixtures so that their sum approaches a target; each iteration raises the likelihood.

    Parameters
    ----------
    occupancy : ndarray, shape (n, cells)
        Not negative.
    target : ndarray, shape (cells,)
    iterations : int

    Returns
    -------
    ndarray, shape (n,)
        Weights, summing to one.

    Notes
    -----
    Richardson (1972), Lucy (1974, AJ 79, 745): w_b times the mean of target over model in the cells it visits.
    """
    weights = np.full(occupancy.shape[0], 1 / occupancy.shape[0], dtype=occupancy.dtype)
    target, whole = target.astype(occupancy.dtype), occupancy.sum(axis=1)
    for _ in range(iterations):
        weights *= occupancy @ (target / np.maximum(weights @ occupancy, 1e-30)) / whole
        weights /= weights.sum()  # rows of unlike sums would have the whole grow instead of shift
    weights = weights.astype(float)
    return weights / weights.sum()


def followed_gyr(train_gyr=None):
    """Return how long orbits are followed in all [Gyr], for a training window."""
    return _DROPPED + (train_gyr or TRAIN_GYR) * (1 + _GAP + _JUDGED)


def solve(
    component,
    galaxy,
    potential,
    rng,
    *,
    bundles=6144,
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
        Length of the training window, after half a Gyr dropped, see `TRAIN_GYR`; the judging window is half as long
        and begins a quarter of a training window later.
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
    wanted = columns_of(component, galaxy, cells.mass)
    share = _COLUMNS_WEIGH / wanted.size
    train = (train_gyr or TRAIN_GYR) * 1e3 * KPC_PER_MYR
    run = _Bundles(component, galaxy, potential, cells, wanted, pieces, train, eta)
    parts = run_map(run, enumerate(rng.spawn(pieces)), jobs, executor, progress)
    trained, first, second = (np.concatenate([p[0][i] for p in parts]) for i in range(3))
    asked = np.hstack([trained, np.concatenate([p[1] for p in parts])])
    weights = richardson_lucy(asked, np.append(cells.target, np.full(wanted.size, share)), iterations)
    mismatch = _judged(weights, trained, weights @ first, weights @ second, cells)
    states = np.concatenate([p[2] for p in parts]).reshape(weights.size, LANES * _SNAPSHOTS, 6)
    return Equilibrium(states, weights, float(1 / np.sum(weights**2)), mismatch)


@dataclass(frozen=True)
class _Bundles:
    """What runs a piece of the bundles through the three windows; other processes take it too."""

    component: object
    galaxy: object
    potential: object
    cells: object
    wanted: np.ndarray
    pieces: int
    train: float
    eta: float

    def __call__(self, piece):
        (number, rng), potential, cells = piece, self.potential, self.cells
        kinds, pars = potential.packed
        drop = _DROPPED * 1e3 * KPC_PER_MYR
        train, gap, half = self.train, _GAP * self.train, 0.5 * _JUDGED * self.train
        shares = (number + (np.arange(CHUNK) + 0.5) / CHUNK) / self.pieces
        states, times = _start(self.component, self.galaxy, potential, cells, shares, rng)
        windows, columns = np.empty((3, CHUNK, cells.target.size)), np.empty((CHUNK, self.wanted.size))
        snapshots, none = np.empty((*times.shape, 6)), np.empty((times.shape[0], 0, 6))
        orbit = (kinds, pars, potential.omega, step(self.eta), states)
        grid = (_STRIDE, cells.scale, cells.m_edges, cells.t_edges, cells.n_phi)
        grid += (eye_of(self.galaxy, potential), COLUMNS_END, LONGITUDES, LATITUDES)
        kernels.occupy(*orbit, drop, drop + train, *grid, drop + train * times, windows[0], columns, snapshots)
        kernels.occupy(*orbit, gap, gap + half, *grid, times[:, :0], windows[1], columns[:, :0], none)
        kernels.occupy(*orbit, 0.0, half, *grid, times[:, :0], windows[2], columns[:, :0], none)
        share = _COLUMNS_WEIGH / self.wanted.size / self.wanted
        return windows.astype(np.float32), (share * columns).astype(np.float32), snapshots


def _judged(weights, trained, first, second, cells):
    """Return the mismatches of `Equilibrium` from the training window and the two halves of the judging window."""
    later, rings = 0.5 * (first + second), cells.target[:-1].reshape(cells.shape)
    mismatch = {"start": _rms(trained.mean(axis=0), cells), "trained": _rms(weights @ trained, cells)}
    mismatch["later"] = _rms(later, cells)
    for name, part in zip(("plane", "middle", "high"), np.array_split(np.arange(cells.shape[1]), 3)):
        mismatch[f"later_{name}"] = _rms(later, cells, (slice(None), part))
    inside = np.cumsum(rings.sum(axis=(1, 2))) < 0.82
    mismatch["later_inner"] = _rms(later, cells, inside)
    rings = rings.sum(axis=2)
    off = later[:-1].reshape(cells.shape).sum(axis=2) / np.where(rings > 0, rings, 1.0) - 1
    mismatch["later_rings"] = float(np.sqrt(np.average(off**2, weights=rings)))
    mismatch["later_noise"] = _rms(cells.target + 0.5 * (first - second), cells)
    return mismatch


def _rms(model, cells, part=slice(None)):
    wanted = cells.target[:-1].reshape(cells.shape)[part]
    found = model[:-1].reshape(cells.shape)[part]
    good = wanted > 0
    return float(np.sqrt(np.average((found[good] / wanted[good] - 1) ** 2, weights=wanted[good])))


class _Common:
    """Random numbers that the orbits of a bundle have in common, in part or, with `like` 0, wholly."""

    def __init__(self, rng, bundles):
        self.rng, self.bundles = rng, bundles

    def normal(self, size=None, like=_LIKE):
        """Return normal numbers of unit variance, shape (bundles * LANES,) or that and 3."""
        more = () if size is None else size[1:]
        common = np.repeat(self.rng.normal(size=(self.bundles, *more)), LANES, axis=0)
        return np.sqrt(1 - like**2) * common + like * self.rng.normal(size=common.shape)

    def uniform(self, low=0.0, high=1.0):
        """Return numbers that are the same all over a bundle, shape (bundles * LANES,)."""
        return np.repeat(self.rng.uniform(low, high, self.bundles), LANES)

    def near(self, width):
        """Return normal numbers of each orbit's own, of a standard deviation."""
        return width * self.rng.normal(size=self.bundles * LANES)


def _start(component, galaxy, potential, cells, shares, rng):
    """Return starting states of bundles at given shares of the mass, shape (n * LANES, 6), and snapshot times (0-1).

    A bundle's orbits start beside one another, so that each bundle is one kind of orbit and not a mean over azimuths.
    """
    common, odd = _Common(rng, shares.size), np.repeat(np.arange(shares.size) % 2, LANES)
    m = np.repeat(np.interp(shares, cells.profile[1], cells.profile[0]), LANES)
    # every other bundle starts farther out, to feed the outer orbits that the weights may want
    m *= np.where(odd, 1.0, 1.2 if cells.scale[3] else 1.5) * np.exp(common.near(0.05))
    phi = common.uniform(0, np.pi) + common.near(0.15)
    if cells.scale[3] == 1:
        z = np.interp(common.uniform(0, 0.999), cells.heights[1], cells.heights[0])
        z *= common.uniform(0.3, 1.7) * np.exp(common.near(0.1))
        flat = m
    else:
        t = np.clip(common.uniform(-1, 1) + common.near(0.05), -1, 1)
        flat, z = m * np.sqrt(1 - t**2), m * t / cells.scale[2]
    place = np.column_stack([flat * np.cos(phi) / cells.scale[0], flat * np.sin(phi) / cells.scale[1], z])
    here = potential.from_bar_frame(place)
    velocity = _velocities(component, galaxy, potential, here, common)
    times = np.sort(rng.uniform(size=(place.shape[0], _SNAPSHOTS)), axis=1)
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
        Or whatever has its `normal`.

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


def _velocities(component, galaxy, potential, place, common):
    """Draw rough velocities about the component's own motion, hotter and colder from bundle to bundle."""
    mean, random = own_velocities(component, galaxy, potential, place, common)
    velocity = mean + common.uniform(0.5, 1.25)[:, None] * random
    kind = np.repeat(np.arange(common.bundles) // 2 % 4, LANES)
    escape = np.sqrt(-2 * potential.value(*(place.T * u.kpc)).value)
    if hasattr(component.density, "h_R"):
        # half the bundles start near the top of their vertical motion, whatever the vertical force is there,
        # and inside a scale length half of these turn too slowly for their radius, as high orbits near the centre must
        velocity[:, 2] *= np.where(kind % 2 == 1, 0.2, 1.0)
        slow = (kind == 3) & (np.hypot(place[:, 0], place[:, 1]) < component.density.h_R.value)
        slowed = common.uniform(0.1, 1.0) * np.exp(common.near(0.05))
        velocity[:, :2] *= np.where(slow, slowed, 1.0)[:, None]
    else:
        # a quarter cold and fast, a quarter of any speed in any direction
        g = common.normal(size=(place.shape[0], 3), like=0.15)
        speed = escape * common.uniform(0.05, 0.75) * np.exp(common.near(0.05))
        flat = g / np.linalg.norm(g, axis=1)[:, None] * speed[:, None]
        fast = 1.6 * mean + 0.4 * random
        velocity = np.where((kind == 1)[:, None], fast, np.where((kind == 3)[:, None], flat, velocity))
    # nothing near escape
    return velocity * np.minimum(1, 0.8 * escape / np.maximum(np.linalg.norm(velocity, axis=1), 1e-9))[:, None]
