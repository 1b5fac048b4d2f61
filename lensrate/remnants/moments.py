"""From deposited sums to the numbers a field keeps: densities at nodes, means, dispersions, correlations."""

import numpy as np

from ..kernels.fields import EMPTY
from ..kernels.orbits import FAR, SOFT
from .fields import STEPS

__all__ = ["batch_ratios", "encode", "frames", "gaussians", "node_correction"]

_LEND = 20.0  # deposits' worth of the neighbourhood's velocities lent to a part, so that rare cells stay sane
_SHRINK = np.linspace(0.0, 1.0, 21)


def _lent(sums, grid):
    """Return sums with `_LEND` deposits a part of the ring's velocity moments added, or of the whole element's.

    Parts, the first axis, share what is lent as they share the ring.
    """
    ring = sums.sum(axis=3, keepdims=True)
    column = ring.sum(axis=2, keepdims=True)
    whole = sums.sum(axis=(1, 2, 3), keepdims=True)
    R, z, _ = grid.centres()
    slowness = 1 / np.hypot(np.hypot(R[:, None], z), SOFT) + 1 / FAR
    unit = 1 / slowness[:, :, None, None]  # weight of one deposit
    unit = _LEND * len(sums) * unit
    weight = whole[..., :1].sum(axis=0)
    lent = whole / weight if weight.flat[0] > 0 else np.eye(10)[0] * np.ones_like(whole) / len(sums)
    for wider in (column, ring):
        lent = (wider + unit * lent) / (wider[..., :1].sum(axis=0) + unit)
    return sums + unit * lent


def _numbers(lent):
    """Return means and covariances of sums, shapes (..., 3) and (..., 3, 3); zeros where there is nothing."""
    m = lent[..., 1:] / np.where(lent[..., :1] > 0, lent[..., :1], 1.0)
    second = m[..., [3, 6, 7, 6, 4, 8, 7, 8, 5]].reshape(*m.shape[:-1], 3, 3)
    return m[..., :3], second - m[..., :3, None] * m[..., None, :3]


def frames(sums, grid):
    """Return the velocities about which cells are divided, steadied by the ring, and inverse dispersions.

    Parameters
    ----------
    sums : ndarray, shape (n_R, n_z, n_phi, 10)
        Deposits of a pilot run.
    grid : Grid

    Returns
    -------
    ndarray, shape (n_R, n_z, n_phi, 6)
        Along R, rotation and z.
    """
    mean, covariance = _numbers(_lent(sums[None], grid)[0])
    variance = np.diagonal(covariance, axis1=-2, axis2=-1)
    return np.concatenate([mean, 1 / np.sqrt(np.maximum(variance, 1.0))], axis=-1)


def gaussians(sums, grid, frame=None, fourth=None):
    """Return share, means, dispersions and correlations of the parts of cells.

    Parameters
    ----------
    sums : ndarray, shape (p, n_R, n_z, n_phi, 10)
    grid : Grid
    frame, fourth : ndarray, optional
        As for `kernels.fields.deposit_orbits`: the parts are drawn together until the fourth moment fits.

    Returns
    -------
    ndarray, shape (p, n_R, n_z, n_phi, 10)
        In km/s and pure numbers.

    Notes
    -----
    Gaussians of sharply cut parts fall off too early where the whole has the wings of a Gaussian or more. All
    displacements from the cell's mean are then shrunk by one factor f in each ring, and what they lose in variance,
    (1 - f^2) of the covariance between the parts, is given to each part, which leaves the cell's second moments as
    they are. The fourth moment that decides is that of the whole velocity: with the one across the rotation alone the
    short tail of t_E came out 4 to 7 % too low.
    """
    lent = _lent(sums, grid)
    share = lent[..., :1] / lent[..., :1].sum(axis=0)
    mean, covariance = _numbers(lent)
    whole = np.sum(share * mean, axis=0)
    offset = mean - whole
    between = np.sum(share[..., None] * offset[..., None] * offset[..., None, :], axis=0)
    if fourth is not None:
        f = _shrinkage(sums[..., 0].sum(axis=0), share[..., 0], whole, offset, covariance, between, frame, fourth)
        mean = whole + f * offset
        covariance = covariance + (1 - f**2)[..., None] * between
    sigma = np.sqrt(np.maximum(np.diagonal(covariance, axis1=-2, axis2=-1), 1.0))
    pairs = ((0, 1), (0, 2), (1, 2))
    cross = np.stack([covariance[..., a, b] / (sigma[..., a] * sigma[..., b]) for a, b in pairs], axis=-1)
    return np.concatenate([share, mean, sigma, np.clip(cross, -0.95, 0.95)], axis=-1)


def _shrinkage(weight, share, whole, offset, covariance, between, frame, fourth):
    """Return the factor of displacements at which the mean |x|^4 of the Gaussians fits that of the deposits."""
    scale = frame[..., 3:]
    whole, offset = (whole - frame[..., :3]) * scale, offset * scale
    square = scale[..., :, None] * scale[..., None, :]
    covariance, between = covariance * square, between * square
    model = []
    for f in _SHRINK:
        x, c = whole + f * offset, covariance + (1 - f**2) * between
        trace = np.trace(c, axis1=-2, axis2=-1)
        wing = 2 * np.sum(c**2, axis=(-2, -1)) + 4 * np.einsum("...i,...ij,...j", x, c, x)
        model.append(_pooled(weight * np.sum(share * ((np.sum(x**2, axis=-1) + trace) ** 2 + wing), axis=0)))
    model, wanted = np.array(model), _pooled(fourth)
    over = np.count_nonzero(model > wanted, axis=0)  # the more the displacements shrink, the longer the wings
    low = np.clip(over - 1, 0, len(_SHRINK) - 2)
    upper, lower = (np.take_along_axis(model, (low + i)[None], axis=0)[0] for i in (0, 1))
    part = (upper - wanted) / np.where(upper > lower, upper - lower, 1.0)
    f = _SHRINK[low] + np.clip(part, 0, 1) * _SHRINK[1]
    return np.where(wanted > 0, f, 1.0)[..., None]


def _pooled(cells):
    """Return sums over a ring and its neighbours in R and |z|, shape (n_R, n_z, 1)."""
    padded = np.pad(cells.sum(axis=2), 1)
    return sum(padded[i : i + cells.shape[0], j : j + cells.shape[1]] for i in range(3) for j in range(3))[..., None]


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


def encode(sums, scale, grid, frame=None, fourth=None):
    """Turn an element's sums into stored integers.

    Parameters
    ----------
    sums : ndarray, shape (4, n_R, n_z, n_phi, 10)
        Deposits of the parts.
    scale : float
        Turns a summed weight into a share of the born.
    grid : Grid
    frame, fourth : ndarray, optional
        See `gaussians`.

    Returns
    -------
    ln_rho, four, two : ndarray of int16
        Shapes (n_R, n_z, n_phi), (n_four, n_z, n_phi, 4, 10) and (n_R - n_four, n_z, n_phi, 2, 10).
    """
    with np.errstate(divide="ignore"):
        ln = np.log(sums[..., 0].sum(axis=0) * scale / grid.volumes())
    ln += node_correction(np.where(np.isfinite(ln), ln, np.nan), grid)
    codes = np.rint(np.clip(np.nan_to_num(ln / STEPS[0], neginf=0.0), -32767, 32767))
    ln_rho = np.where(np.isfinite(ln), codes, EMPTY).astype(np.int16)
    n = grid.n_four
    outer = gaussians(sums[::2] + sums[1::2], grid)[:, n:]
    steps = STEPS[[3, 1, 1, 1, 1, 1, 1, 2, 2, 2]]
    parts = (gaussians(sums, grid, frame, fourth)[:, :n], outer)
    four, two = (np.rint(np.moveaxis(p, 0, -2) / steps).astype(np.int16) for p in parts)
    return ln_rho, np.ascontiguousarray(four), np.ascontiguousarray(two)


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
