"""From deposited sums to the numbers a field keeps: densities at nodes, means, dispersions, correlations."""

import numpy as np

from ..kernels.fields import EMPTY
from ..kernels.orbits import FAR, SOFT
from .fields import STEPS

__all__ = ["batch_ratios", "encode", "node_correction", "split_speeds", "velocity_numbers"]

_LEND = 20.0  # deposits' worth of the neighbourhood's velocities lent to each cell, so that rare cells stay sane


def _lent(sums, grid):
    """Return sums with `_LEND` deposits of the ring's mean velocity moments added, or of the whole element's."""
    ring = sums.sum(axis=2, keepdims=True)
    column = ring.sum(axis=1, keepdims=True)
    whole = sums.sum(axis=(0, 1, 2), keepdims=True)
    R, z, _ = grid.centres()
    slowness = 1 / np.hypot(np.hypot(R[:, None], z), SOFT) + 1 / FAR
    unit = 1 / slowness[:, :, None, None]  # weight of one deposit
    lent = whole / whole[..., :1] if whole.flat[0] > 0 else np.eye(10)[0] * np.ones((1, 1, 1, 10))
    for wider in (column, ring):
        lent = (wider + _LEND * unit * lent) / (wider[..., :1] + _LEND * unit)
    return sums + _LEND * unit * lent


def split_speeds(sums, grid):
    """Return the speed along the rotation at which inner cells are divided: the mean, steadied by the ring.

    Parameters
    ----------
    sums : ndarray, shape (n_R, n_z, n_phi, 10)
        Deposits of a pilot run.
    grid : Grid

    Returns
    -------
    ndarray, shape (n_two, n_z, n_phi)
    """
    lent = _lent(sums, grid)[: grid.n_two]
    return np.ascontiguousarray(lent[..., 2] / lent[..., 0])


def velocity_numbers(sums, grid):
    """Return means, dispersions and correlations of cells, shape (..., 9), in km/s and pure numbers."""
    lent = _lent(sums, grid)
    m = lent[..., 1:] / lent[..., :1]
    mean = m[..., :3]
    sigma = np.sqrt(np.maximum(m[..., 3:6] - mean**2, 1.0))
    pairs = ((0, 1), (0, 2), (1, 2))
    cross = [m[..., 6 + i] - mean[..., a] * mean[..., b] for i, (a, b) in enumerate(pairs)]
    scale = [sigma[..., a] * sigma[..., b] for a, b in pairs]
    return np.concatenate([mean, sigma, np.clip(np.stack(cross, -1) / np.stack(scale, -1), -0.95, 0.95)], axis=-1)


def _smooth(array, axis):
    """Return the array smoothed by 1-2-1 along the other two axes; empty cells and their neighbours as they are."""
    out = array
    for other in {0, 1, 2} - {axis}:
        mode = "wrap" if other == 2 else "edge"
        ends = [(1, 1) if i == other else (0, 0) for i in range(3)]
        padded = np.moveaxis(np.pad(out, ends, mode=mode), other, 0)
        out = np.moveaxis(0.25 * padded[:-2] + 0.5 * padded[1:-1] + 0.25 * padded[2:], 0, other)
    return np.where(np.isfinite(out), out, array)


def _neighbours(array, axis, n):
    """Return the array moved by n cells up and down; azimuth is periodic, z = 0 a mirror, nothing beyond other ends."""
    if axis == 2:
        return np.roll(array, -n, axis), np.roll(array, n, axis)
    ends = [(n, n) if i == axis else (0, 0) for i in range(3)]
    padded = np.moveaxis(np.pad(array, ends, constant_values=np.nan), axis, 0)
    if axis == 1:
        padded[:n] = padded[n : 2 * n][::-1]
    size = array.shape[axis]
    return np.moveaxis(padded[2 * n : 2 * n + size], 0, axis), np.moveaxis(padded[:size], 0, axis)


def node_correction(ln_rho, grid):
    """Return what takes ln of cells' mean densities to nodes between which ln rho is interpolated linearly.

    Parameters
    ----------
    ln_rho : ndarray, shape (n_R, n_z, n_phi)
        Not-a-number in empty cells, where nothing is corrected.
    grid : Grid

    Returns
    -------
    ndarray, shape (n_R, n_z, n_phi)

    Notes
    -----
    To second order, for cells even in an index t with volume J dt. Mean of a cell to its middle:
    mean = middle + (rho'' + 2 rho' J'/J) / 24. Middle to node: straight pieces between points of a bent curve lie on
    one side of it, by f'' / 12 on average, which is taken off. Slopes come from smoothed values against noise.
    """
    per_R, per_z = grid.pack()[[1, 4]]
    u, v = (np.arange(grid.n_R) + 0.5) / per_R, (np.arange(grid.n_z) + 0.5) / per_z
    jacobian = ((1 / np.tanh(u) + np.tanh(u)) / per_R, np.tanh(v) / per_z, np.zeros(grid.n_phi))
    total = np.zeros(ln_rho.shape)
    for axis, j in enumerate(jacobian):
        ln = _smooth(ln_rho, axis)
        up, down = _neighbours(ln, axis, 2)
        # over two cells, which is much quieter than over one
        slope, bend = 0.25 * (up - down), 0.25 * (up + down - 2 * ln)
        shape = [1, 1, 1]
        shape[axis] = -1
        term = (bend + slope**2 + 2 * slope * j.reshape(shape)) / 24 + bend / 12
        total -= np.clip(np.nan_to_num(term), -0.1, 0.1)
    return total


def encode(sums, scale, grid):
    """Turn an element's sums into stored integers.

    Parameters
    ----------
    sums : ndarray, shape (2, n_R, n_z, n_phi, 10)
        Deposits of the faster and the slower part.
    scale : float
        Turns a summed weight into a share of the born.
    grid : Grid

    Returns
    -------
    one, two : ndarray of int16, shape (n_R, n_z, n_phi, 10) and (n_two, n_z, n_phi, 10)
    """
    with np.errstate(divide="ignore"):
        ln_rho = np.log(sums[..., 0] * scale / grid.volumes())
        whole = np.log(sums[..., 0].sum(axis=0) * scale / grid.volumes())
    correction = node_correction(np.where(np.isfinite(whole), whole, np.nan), grid)
    parts = []
    for part, ln in zip(sums, ln_rho):
        numbers = np.concatenate([(ln + correction)[..., None], velocity_numbers(part, grid)], axis=-1)
        steps = np.repeat(STEPS, (1, 6, 3))
        codes = np.clip(np.rint(np.nan_to_num(numbers / steps, neginf=0.0)), -32767, 32767).astype(np.int16)
        codes[..., 0] = np.where(np.isfinite(ln), codes[..., 0], EMPTY)
        parts.append(codes)
    return parts[0], np.ascontiguousarray(parts[1][: grid.n_two])


def batch_ratios(weights):
    """Return each batch's share of the weight over the mean, in blocks of eight cells, in thousandths.

    Parameters
    ----------
    weights : ndarray, shape (b, n_R, n_z, n_phi)

    Returns
    -------
    ndarray of int16, shape (b, n_R / 2, n_z / 2, n_phi / 2)
    """
    b, r, z, p = weights.shape
    blocks = weights.reshape(b, r // 2, 2, z // 2, 2, p // 2, 2).sum(axis=(2, 4, 6))
    mean = blocks.mean(axis=0)
    ratio = np.where(mean > 0, blocks / np.where(mean > 0, mean, 1.0), 1.0)
    return np.rint(1000 * ratio).astype(np.int16)
