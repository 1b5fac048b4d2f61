"""Cells of space and blocks of sky in which a stellar component's mass is asked for, and how much belongs in each."""

import itertools
from dataclasses import dataclass

import astropy.units as u
import numpy as np

from ..errors import InputError
from ..galaxy.density import Bar, PowerHalo, Uniform

__all__ = ["COLUMNS_END", "LATITUDES", "LONGITUDES", "Cells", "cells_of", "columns_of", "eye_of"]

_SHELL_SHARES = np.concatenate([[0, 0.01, 0.04, 0.1], np.linspace(0.18, 0.54, 5), [0.62, 0.7, 0.76, 0.815, 0.86]])
_SHELL_SHARES = np.concatenate([_SHELL_SHARES, [0.9, 0.935, 0.96, 0.98, 0.995]])
_HEIGHT_SHARES = np.array([0, 0.12, 0.24, 0.36, 0.48, 0.6, 0.7, 0.8, 0.88, 0.94, 0.98, 0.995])
# heights over shell coordinate; narrow about the minor axis, along which orbits crowd or which they avoid
_ANGLES = np.concatenate([np.linspace(0, 0.8, 9), [0.86, 0.91, 0.95, 0.98, 1.0]])
#: blocks of sky, edges in l and |b| [rad], whose columns are asked of the weights beside the cells
LONGITUDES, LATITUDES = np.radians(np.linspace(-10, 10, 9)), np.radians([1.0, 1.7, 2.6, 3.8, 5.2, 7.0])
#: distance of the sources behind those columns [kpc]
COLUMNS_END = 8.5


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


def cells_of(component, galaxy, potential, n_phi=None):
    """Choose cells for a component and integrate its density over them.

    Parameters
    ----------
    component : Component
    galaxy : Galaxy
    potential : Potential
        Its bar's frame is used.
    n_phi : int, optional
        Cells over half a turn; 12 for bars, 4 for discs, 1 for halos.

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
        scale, n_phi = np.array([1 / density.a.value, 1 / density.b.value, 1 / density.c.value, 0.0]), n_phi or 12
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
    t_edges = _ANGLES if scale[3] == 0 else np.interp(_HEIGHT_SHARES, heights, t_fine)
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


def columns_of(component, galaxy, mass):
    """Return the component's columns in the blocks of sky that the weights are asked for.

    A column is the mean over a block, above and below the plane, of the integral of rho D (D_s - D) / D_s, as a source
    at D_s = 8.5 kpc is lensed by it.

    Parameters
    ----------
    component : Component
    galaxy : Galaxy
    mass : float
        By which it is divided.

    Returns
    -------
    ndarray, shape (blocks,)
        Times the solid angle of the block on both sides.
    """
    D = (np.arange(400) + 0.5) / 400 * COLUMNS_END
    x, w = np.polynomial.legendre.leggauss(4)
    out = np.zeros((LONGITUDES.size - 1, LATITUDES.size - 1))
    for (i, j), _ in np.ndenumerate(out):
        blocks = (LONGITUDES[i : i + 2], LATITUDES[j : j + 2])
        (l, wide), (b, high) = ((e.mean(), 0.5 * (e[1] - e[0])) for e in blocks)
        for (dl, wl), (db, wb), side in itertools.product(zip(x, w), zip(x, w), (-1, 1)):
            b_here = b + db * high
            rho = component.density.at(*galaxy.sightline(l + dl * wide, side * b_here).xyz(D), galaxy.R0)
            solid = wide * high * wl * wb * np.cos(b_here)
            out[i, j] += solid * np.sum(rho * D * (1 - D / COLUMNS_END)) * D[0] * 2
    return out.ravel() / mass


def eye_of(galaxy, potential):
    """Return the Sun's place and its axes toward the centre, along l and b, in the bar's frame."""
    line = galaxy.sightline(0.0, 0.0)
    return potential.to_bar_frame(np.vstack([line.origin, line.axes]))
