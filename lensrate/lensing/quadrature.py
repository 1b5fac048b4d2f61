"""Where the integrals along a sightline are evaluated: panels between the model's kinks, nodes, the isogrid.

Two independent rules are used. Optical depth and rate come from a product rule in (source, lens) distance. The rate
density lives on a grid uniform in ln pi_rel and ln mu_rel whose steps make every mass shift a whole number of cells;
each of its rows has its own source-distance panels, which include the images of the lens's kinks.
"""

from dataclasses import dataclass
from functools import cache

import numpy as np

from ..scenario.numerics import Numerics

__all__ = ["Isogrid", "Numerics", "lens_pairs", "panel_edges", "panel_nodes", "row_nodes"]

LN10 = np.log(10.0)


@dataclass(frozen=True)
class Isogrid:
    """The common grid: ln pi_rel step 2h, ln mu_rel step h, ln t_E step h, ln M step 2h."""

    h: float  # natural logarithm
    pi: np.ndarray  # (P,) mas
    mu: np.ndarray  # (K,) mas/yr

    @classmethod
    def make(cls, step_dex, D_min, D_max, fine=1):
        """Cover sources between D_min and D_max [kpc]; `fine` divides the step."""
        h = step_dex / fine
        low = np.floor(np.log10(1e-5 / D_max) / (2 * h)) * 2 * h
        # lenses down to 1e-4 of the nearest sources' distance, whose proper motions are as much larger
        high = np.ceil(np.log10(1e4 / D_min) / (2 * h)) * 2 * h
        pi = 10 ** np.arange(low, high + h, 2 * h)
        mu = 10 ** np.arange(-3.0, 4.5 - np.log10(min(D_min, 1.0)) + h / 2, h)
        return cls(h * LN10, pi, mu)


@cache
def legendre(n):
    """Return Gauss-Legendre nodes and weights on [0, 1], each (n,)."""
    x, w = np.polynomial.legendre.leggauss(n)
    return 0.5 * (x + 1.0), 0.5 * w


def panel_edges(line, kink_radii, D_max, extra=()):
    """Return increasing panel edges [kpc] from 0 to D_max, with the kinks of the model among them.

    Parameters
    ----------
    line : Sightline3D
        The sightline.
    kink_radii : iterable of float
        Cylindrical radii [kpc] at which a density or dispersion has a jump in a derivative.
    D_max : float
        Last edge [kpc].
    extra : iterable of float
        Further edges [kpc], for example where the clump drops below the magnitude limit.

    Returns
    -------
    edges, kinks : ndarray
        All edges; those whose images matter in the rows of the rate density.
    """
    tangent = line.tangent_distance()
    base = [0.4, 1.2, 2.5, 4.5, 7.0, 9.5, 12.0, 16.0, 22.0, 30.0, 40.0, 60.0, 100.0, 200.0]
    kinks = []
    if tangent > 0:
        x, y, z = line.xyz(tangent)
        miss = float(np.hypot(x, y))
        kinks = [tangent + s for s in (-0.4, 0.0, 0.4)]
        # the closer the sightline passes the centre, the sharper the features there
        if miss < 3.0:
            base = [e for e in base if abs(e - tangent) > 1.5] + [tangent - 1.2, tangent + 1.2]
        for reach, half in ((0.4, 0.12), (0.12, 0.03)):
            if max(abs(float(z)), miss) < reach:
                kinks += [tangent - half, tangent + half]
    for R in sorted(set(kink_radii)):
        kinks += line.radius_crossings(R)
    crossing = line.plane_crossing()
    kinks += crossing
    base += [d + s for d in crossing for s in (-0.3, 0.3)]
    kinks = _spaced(kinks, D_max)
    edges = _spaced([*base, *kinks, *extra, D_max], D_max, keep={*kinks, D_max})
    return np.concatenate([[0.0], edges]), kinks


def _spaced(values, D_max, keep=frozenset(), gap=0.02):
    """Sort values inside (0, D_max]; of two closer than `gap` the one in `keep`, else the first, stays."""
    out = []
    for v in sorted({v for v in values if 1e-3 < v <= D_max}):
        if out and v - out[-1] < gap:
            if v in keep:
                out[-1] = v
        else:
            out.append(v)
    return np.array(out)


def panel_nodes(edges, n):
    """Return nodes and weights of a composite Gauss-Legendre rule over `edges`, each (panels * n,)."""
    x, w = legendre(n)
    edges = np.asarray(edges)
    width = np.diff(edges)[:, None]
    return (edges[:-1, None] + width * x).ravel(), (width * w).ravel()


def lens_pairs(D_S, edges, n):
    """Return the lens nodes in front of each source node.

    The first panel is mapped quadratically at the observer and the last at the source, where the rate goes with the
    square root of the distance.

    Parameters
    ----------
    D_S : ndarray, shape (J,)
        Source nodes [kpc].
    edges : ndarray
        Panel edges [kpc], the first one 0.
    n : int
        Nodes per panel.

    Returns
    -------
    outer, D_L, w_L : ndarray, shape (N,)
        Source index, lens distance and quadrature weight of each pair.
    """
    x, w = legendre(n)
    # number of the last edge in front of each source, without a sliver behind the last kink
    last = np.maximum(np.searchsorted(edges, D_S * (1 - 1e-9)) - 1, 0)
    sliver = (last > 1) & (D_S - edges[last] < 0.2 * (edges[last] - edges[last - 1]))
    last = last - sliver
    near = np.where(last > 0, edges[1], 0.5 * D_S)
    far = np.where(last > 1, edges[last], 0.5 * (near + D_S))
    # panels between the two mapped ones
    panels = np.maximum(last - 1, 1)
    j = np.repeat(np.arange(D_S.size), panels)
    i = np.arange(j.size) - np.repeat(np.cumsum(panels) - panels, panels)
    low = np.where(i > 0, edges[1 + i], near[j])
    width = np.where(last[j] > 1, edges[np.minimum(2 + i, edges.size - 1)], far[j]) - low
    behind = (D_S - far)[:, None]
    D = near[:, None] * x**2, low[:, None] + width[:, None] * x, D_S[:, None] - behind * x**2
    W = 2 * near[:, None] * x * w, width[:, None] * w, 2 * behind * x * w
    outer = np.repeat(np.concatenate([np.arange(D_S.size), j, np.arange(D_S.size)]), n)
    return outer, np.concatenate(D).ravel(), np.concatenate(W).ravel()


def row_nodes(pi, edges, kinks, n):
    """Return source nodes for each row of the isogrid, panels split also at the images of the lens's kinks.

    For relative parallax pi a lens at a kink D_k belongs to the source at 1 / (1/D_k - pi).

    Parameters
    ----------
    pi : ndarray, shape (P,)
        Relative parallaxes [mas].
    edges, kinks : ndarray
        From `panel_edges`.
    n : int
        Nodes per panel.

    Returns
    -------
    row, D_S, w : ndarray, shape (N,)
        Row index, source distance [kpc] and quadrature weight [kpc].
    """
    row, D, W = [], [], []
    top = edges[-1]
    for i, p in enumerate(pi):
        inverse = 1.0 / kinks - p if len(kinks) else np.empty(0)
        images = 1.0 / inverse[inverse > 1.0 / top]
        e = _spaced([*edges[1:], *images], top, keep={*images, top}, gap=0.05)
        d, w = panel_nodes(np.concatenate([[0.0], e]), n)
        row.append(np.full(d.size, i, dtype=np.int64))
        D.append(d)
        W.append(w)
    return np.concatenate(row), np.concatenate(D), np.concatenate(W)
