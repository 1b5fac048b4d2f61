"""The table of round Gaussians' speed distributions, and the rate density of a sightline's nodes by it."""

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from scipy.special import i0e

from ..kernels import rates as direct
from ..kernels import rings as kernels
from ..units import KAPPA, MAS

__all__ = ["Rings", "rate_density"]

_KAPPA_MAX = 16.0  # faster means are taken for wider ones: relative width 1/16 in mu, below the grid's step
_ORDERS = np.array([1, 2, 3, 4, 5, 6, 7, 8, 10, 12, 15, 19, 24, 30, 40])
_NOTHING = 1e-12


@dataclass(frozen=True, eq=False)
class Rings:
    """Speed distributions of round Gaussians on the isogrid's ln mu, and the rules that make others of them.

    Attributes
    ----------
    table : ndarray, shape (m, kappas, J)
        Per ln mu, for kappa even from 0, at scales m to a step of ln mu; see `kernels.rings.rate_density`.
    ends : ndarray of int, shape (kappas,)
        Columns that count.
    per_kappa : float
        Nodes per unit of kappa.
    accuracy : float
        Of the Gauss-Hermite rules, as the logarithm.
    """

    table: np.ndarray
    ends: np.ndarray
    per_kappa: float
    accuracy: float

    @classmethod
    def make(cls, h, K, directions):
        """Build the table for K steps of ln mu; errors fall with the fourth power of `directions`."""
        m = int(np.ceil(h * directions / 0.18))
        per_kappa = directions / 0.5
        kappa = np.arange(int(np.ceil(_KAPPA_MAX * per_kappa)) + 3) / per_kappa
        J = K + int(np.ceil(np.log(kappa[-1] + 8.0) / h))
        x = h * (np.arange(J) - K)[None, None, :] - h * np.arange(m)[:, None, None] / m
        rho = np.exp(x)
        # the density per ln rho of the length of a round unit Gaussian about kappa (Rice 1945, eq. 3.10-11)
        table = rho**2 * np.exp(-0.5 * (rho - kappa[:, None]) ** 2) * i0e(rho * kappa[:, None])
        ends = J - np.argmax((table > _NOTHING)[:, :, ::-1].any(axis=0), axis=1)
        # `apply_table` takes rows four at a time, to the last one's end
        ends = np.maximum.accumulate(ends)
        table[:, np.arange(J) >= ends[:, None]] = 0.0
        return cls(table, ends, per_kappa, 2.5 * directions)


_rings = lru_cache(maxsize=4)(Rings.make)


@lru_cache(maxsize=1)
def _rules():
    """Gauss-Hermite nodes and weights of each order in `_ORDERS`, for the normal distribution, (orders, most)."""
    x, w = np.zeros((2, _ORDERS.size, _ORDERS[-1]))
    for i, n in enumerate(_ORDERS):
        x[i, :n], w[i, :n] = np.polynomial.hermite_e.hermegauss(n)
    return x, w / w.sum(axis=1, keepdims=True)


_AT_NODES = np.empty(0, dtype=np.int64), np.empty(0), np.empty(0), np.empty(0)


def rate_density(grid, row, D_S, src, lens, element, directions, weight_cut, places=_AT_NODES):
    """Return the mass-free rate density of a sightline's nodes.

    Parameters
    ----------
    grid : Isogrid
    row, D_S : ndarray, shape (N,)
        Row of the grid, rising, and source distance [kpc] of each node.
    src, lens : ndarray, shapes (6, S, N), (6, L, N)
        Profiles at the nodes; source weights sum to one over a row. With `places`, the lens's is a table (6, L, n).
    element : ndarray of int, shape (L,)
        Element of each lens row, rising.
    directions : float
        Fineness; errors fall with its fourth power.
    weight_cut : float
        Nodes below this part of an element's largest weight are dropped.
    places : tuple of ndarray, shape (N,) each
        Of the nodes in a table along the sightline, from `kernels.profile.places`.

    Returns
    -------
    ndarray, shape (E, P, K)
        Events per source, year, unit ln pi_rel and ln mu_rel, for 1 Msun lenses.
    """
    geometry = np.empty(D_S.size)
    direct.node_weights(grid.pi, row, D_S, KAPPA, MAS, geometry)
    rings = _rings(grid.h, grid.mu.size, directions)
    T = np.empty((int(element[-1]) + 1, grid.pi.size, grid.mu.size))
    kernels.rate_density(
        row, geometry, src, lens, *places, element, grid.mu, rings.table, rings.ends, _ORDERS, *_rules(),
        rings.accuracy, rings.per_kappa, weight_cut, T,
    )  # fmt: skip
    return T
