"""Where bundles of orbits spend their time: occupancies of cells in ellipsoidal or cylindrical coordinates.

A cell system is a flat row `scale`: inverse axes along x, y, z of the shell coordinate
m = sqrt((x / a)^2 + (y / b)^2 + (z / c)^2), and a flag. With the flag 1 (discs, 1/c = 0) height is |z| in kpc,
with the flag 0 it is |z| / (c m). Azimuth is counted over half a turn, in axes scaled by a and b.
"""

import math

import numpy as np

from ._jit import kernel
from .orbits import ROWS, TIME, WEIGHT, load, release, take_steps
from .potential import LANES

__all__ = ["cell_of", "occupy"]


@kernel
def _interval(edges, value):
    """Return i with edges[i] <= value < edges[i + 1]; edges.size - 1 beyond the last."""
    low, high = 0, edges.size - 1
    if value >= edges[high]:
        return high
    while high - low > 1:
        middle = (low + high) // 2
        if value >= edges[middle]:
            low = middle
        else:
            high = middle
    return low


@kernel
def cell_of(scale, m_edges, t_edges, n_phi, x, y, z):
    """Return the number of the cell that holds a point; the last number means outside all cells.

    Parameters
    ----------
    scale : ndarray, shape (4,)
        1/a, 1/b, 1/c [1/kpc] and the flag.
    m_edges, t_edges : ndarray
        Rising, from 0.
    n_phi : int
        Cells over half a turn.
    x, y, z : float  [kpc]

    Returns
    -------
    int
        (i_m * n_t + i_t) * n_phi + i_phi.
    """
    u, v, w = x * scale[0], y * scale[1], z * scale[2]
    m = math.sqrt(u * u + v * v + w * w)
    n_m, n_t = m_edges.size - 1, t_edges.size - 1
    t = abs(z) if scale[3] == 1.0 else abs(w) / max(m, 1e-12)
    i, j = _interval(m_edges, m), min(_interval(t_edges, t), n_t - 1 + int(scale[3]))
    if i >= n_m or j >= n_t:
        return n_m * n_t * n_phi
    k = int(math.atan2(v, u) / math.pi * n_phi + 2 * n_phi) % n_phi
    return (i * n_t + j) * n_phi + k


@kernel
def _add_columns(eye, far, l_edges, b_edges, x, y, z, weight, row):
    """Add what a body and its image half a turn away contribute to columns in blocks of sky.

    eye: place of the Sun and unit vectors toward l = b = 0, along l and along b, shape (4, 3); far: distance of the
    sources [kpc]; edges of l and of |b| [rad]; row gets weight (1 - D / far) / (2 D), whose sum over a block's solid
    angle is the mean of the integral of density times D (1 - D / far) over D.
    """
    n_b = b_edges.size - 1
    for turn in (1.0, -1.0):
        dx, dy, dz = turn * x - eye[0, 0], turn * y - eye[0, 1], z - eye[0, 2]
        D = math.sqrt(dx * dx + dy * dy + dz * dz)
        up = abs(dx * eye[3, 0] + dy * eye[3, 1] + dz * eye[3, 2])
        # the sine is close to the angle: this spares most arcs
        if D < far and b_edges[0] * 0.99 * D <= up < b_edges[n_b] * D:
            ahead = dx * eye[1, 0] + dy * eye[1, 1] + dz * eye[1, 2]
            aside = dx * eye[2, 0] + dy * eye[2, 1] + dz * eye[2, 2]
            l, b = math.atan2(aside, ahead), math.asin(up / D)
            if l_edges[0] <= l and b_edges[0] <= b:
                i, j = _interval(l_edges, l), _interval(b_edges, b)
                if i < l_edges.size - 1 and j < n_b:
                    row[i * n_b + j] += 0.5 * weight * (1.0 - D / far) / D


@kernel
def occupy(
    kinds, pars, omega, ds, states, start, end, stride, scale, m_edges, t_edges, n_phi, eye, far, l_edges, b_edges,
    times, occupancy, columns, snapshots,
):  # fmt: skip
    """Follow bundles of LANES orbits, note the time spent in each cell and on each column, and take snapshots.

    Parameters
    ----------
    kinds, pars, omega, ds
        As for `orbits.take_steps`.
    states : ndarray, shape (n * LANES, 6)
        Changed to the states at the end.
    start, end : float  [kpc/(km/s)]
        Window that counts.
    stride : int
        Steps between notes.
    scale, m_edges, t_edges, n_phi
        As for `cell_of`.
    eye, far, l_edges, b_edges
        As for `_add_columns`.
    times : ndarray, shape (n * LANES, s)
        Rising times of the snapshots.
    occupancy : ndarray, shape (n, cells + 1)
        Gets shares that sum to one per bundle, the last for outside.
    columns : ndarray, shape (n, blocks)
        Gets the sums of `_add_columns` over the whole time that counts; may be empty.
    snapshots : ndarray, shape (n * LANES, s, 6)
    """
    s = np.zeros(ROWS * LANES)
    taken = np.zeros(LANES, dtype=np.int64)
    for b in range(occupancy.shape[0]):
        first = b * LANES
        load(states, first, s)
        taken[:] = 0
        occupancy[b, :] = 0.0
        columns[b, :] = 0.0
        running = LANES
        while running > 0:
            take_steps(kinds, pars, omega, ds, s, stride)
            running = 0
            for i in range(LANES):
                t = s[TIME + i]
                while taken[i] < times.shape[1] and t >= times[first + i, taken[i]]:
                    release(s, i, snapshots[first + i, taken[i]])
                    taken[i] += 1
                if start <= t < end:
                    x, y, z, w = s[i], s[LANES + i], s[2 * LANES + i], 1.0 / s[WEIGHT + i]
                    occupancy[b, cell_of(scale, m_edges, t_edges, n_phi, x, y, z)] += w
                    if columns.shape[1] > 0:
                        _add_columns(eye, far, l_edges, b_edges, x, y, z, w, columns[b])
                if t < end:
                    running += 1
        total = occupancy[b].sum()
        occupancy[b] /= total
        columns[b] /= total
        for i in range(LANES):
            release(s, i, states[first + i])
