"""Densities of kick-resolved fields at the nodes of their grid, and what the batches say about their error."""

import numpy as np

from ..kernels.fields import EMPTY
from .fields import STEPS

__all__ = ["block_sums", "node_density", "sampling_error"]


def node_density(field):
    """Return the density of every element at the nodes of the grid.

    Parameters
    ----------
    field : RemnantField

    Returns
    -------
    ndarray, shape (components, kick bins + 1, n_R, n_z, n_phi)  [1/kpc^3 per remnant born]
        Zero where no orbit came.
    """
    return np.where(field.ln_rho == EMPTY, 0.0, np.exp(field.ln_rho.astype(float) * STEPS[0]))


def block_sums(array):
    """Return sums over the blocks of 2 x 2 x 2 cells that batches are kept for; the last three axes are the grid."""
    *first, n_R, n_z, n_phi = array.shape
    return array.reshape(*first, n_R // 2, 2, n_z // 2, 2, n_phi // 2, 2).sum(axis=(-5, -3, -1))


def sampling_error(field, kick_weights):
    """Return the relative standard error of a component's remnants in a block of eight cells.

    Parameters
    ----------
    field : RemnantField
    kick_weights : array_like, shape (k + 1,)
        Shares: unkicked, then each bin.

    Returns
    -------
    ndarray, shape (components,)
        Root mean square over the blocks, each weighed with the remnants in it.
    """
    weights = np.asarray(kick_weights, dtype=float)
    held = block_sums(node_density(field) * field.grid.volumes())
    held = held * weights[:, None, None, None]
    batches = np.einsum("ckrzp,ckbrzp->cbrzp", held, field.batches / 1000.0)
    mean, n = held.sum(axis=1), batches.shape[1]
    relative = batches.std(axis=1, ddof=1) / np.sqrt(n) / np.maximum(mean, 1e-300)
    return np.sqrt(np.sum(mean * relative**2, axis=(1, 2, 3)) / np.maximum(mean.sum(axis=(1, 2, 3)), 1e-300))
