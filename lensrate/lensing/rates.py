"""Rates of one sightline by element: the product rule for optical depth and rate, the isogrid for everything finer."""

from dataclasses import dataclass
from functools import cached_property

import numpy as np

from ..errors import ConvergenceError
from ..kernels import profile as profiles
from ..kernels import rates as kernels
from ..units import FOUR_G_C2, KAPPA, KMS_PER_MASYR_KPC, MAS
from . import rings
from .quadrature import Isogrid, legendre, lens_pairs, panel_edges, panel_nodes, row_nodes

__all__ = [
    "Line",
    "event_rate_density",
    "isogrid",
    "kicked_moments",
    "kicked_rate_density",
    "moments",
    "prepare",
    "rate_density",
]

_ARCMIN2 = (np.pi / 10800.0) ** 2  # sr


@dataclass(frozen=True, eq=False)
class Line:
    """A sightline made ready: panels, source nodes and weights, normalisation.

    Source rows are the Galaxy's components in order (weight 0 where one does not count); src[0] sums to one.
    """

    model: object
    line: object  # Sightline3D
    sources: object  # LineSources: weight of each component against distance
    numerics: object
    edges: np.ndarray
    kinks: np.ndarray
    D_S: np.ndarray  # (J,) kpc
    src: np.ndarray  # (6, S, J)
    norm: float  # sum of source weights before normalisation: sources per sr, where the rule counts them

    @cached_property
    def kicked_table(self):
        """Profile of the kicked lenses along the sightline."""
        return _Table(self)

    @property
    def elements(self):
        """Element names, in the order of lens rows."""
        return [c.element for c in self.model.galaxy.components]

    def mean_distance(self):
        """Return the mean source distance [kpc]."""
        return float(np.sum(self.src[0] * self.D_S))

    def source_shares(self):
        """Return the share of sources by component, (S,)."""
        return self.src[0].sum(axis=1)

    def per_arcmin2(self):
        """Return sources per square arcminute."""
        return self.norm * _ARCMIN2


def prepare(model, line, sources, numerics):
    """Evaluate the source mixture along a sightline.

    Parameters
    ----------
    model : Model
        Resolved scenario.
    line : Sightline3D
        Direction.
    sources : LineSources
        Source weights against distance.
    numerics : Numerics
        Steps.

    Returns
    -------
    Line

    Raises
    ------
    ConvergenceError
        No star passes the source rule.
    """
    radii = [r for c in model.galaxy.components for part in (c.density, c.kinematics) for r in part.kink_radii()]
    fixed = sources.fixed_distance
    D_max = fixed if fixed else numerics.D_max
    edges, kinks = panel_edges(line, radii, D_max, sources.kinks())
    if fixed:
        D, w = np.array([fixed]), np.ones(1)
    else:
        D, w = panel_nodes(edges, numerics.nodes + 2)
    src = _source_rows(model, line, sources, D)
    src[0] *= w
    norm = float(src[0].sum())
    if not (np.isfinite(norm) and norm > 0):
        raise ConvergenceError(
            f"sources: no star passes '{sources.rule.text}' on this sightline; "
            "take a fainter limit, a smaller extinction or 'distance:D'"
        )
    src[0] /= norm
    return Line(model, line, sources, numerics, edges, kinks, D, src, norm)


def _source_rows(model, line, sources, D):
    """Source weight and motion by component, (6, S, n); one row at rest in a Galaxy without source stars."""
    if any(c.sources for c in model.galaxy.components):
        src = model.galaxy.profile(line, D)
        src[0] = sources.weights(D, src[0])
        return src
    src = np.zeros((6, 1, D.size))
    src[0] = 1.0
    src[1:3] = -(line.axes[1:] @ line.v_sun)[:, None, None] / (KMS_PER_MASYR_KPC * D)
    return src


def moments(ready):
    """Return optical depth and rate of 1 Msun lenses by element and source row.

    Parameters
    ----------
    ready : Line
        From `prepare`.

    Returns
    -------
    tau, gamma : ndarray, shape (E, S)
        Per stated Msun/kpc^3 of each element; gamma [1/yr], u_0 < 1.
    distance : ndarray, shape (E,)
        Rate-weighted mean lens distance [kpc].
    """
    outer, D_L, w_L = lens_pairs(ready.D_S, ready.edges, ready.numerics.nodes + 2)
    lens = ready.model.galaxy.profile(ready.line, D_L)
    E, S = lens.shape[1], ready.src.shape[1]
    tau, gamma, distance = np.zeros((E, S)), np.zeros((E, S)), np.zeros(E)
    kernels.moments(
        outer, ready.D_S, ready.src, D_L, w_L, lens, np.arange(E), FOUR_G_C2, KAPPA, MAS,
        int(ready.numerics.half_circle), tau, gamma, distance,
    )  # fmt: skip
    total = gamma.sum(axis=1)
    return tau, gamma, np.divide(distance, total, out=np.full(E, np.nan), where=total > 0)


_TABLE_STEP = 0.03  # kpc; the fields' cells are several times as large
_LENS_PANEL = 0.4  # kpc
_LENS_NODES = 3
_KICKED_NODES = 4  # per panel of sources
_KICKED_GAP = 0.3  # kpc, source panels shorter than this are joined
_KICKED_RINGS = 1.5  # half of what the stars get: kicked lenses are a hundredth of all
_KICKED_DIRECTIONS = 16
_BUNDLE = 2  # source nodes behind a lens of which only weight, mean and covariance are kept
_COLD = 0.2  # kpc from the centre, within which the stars' motions turn too sharply for that


class _Table:
    """Profile of the kicked lenses along a sightline, evaluated once and interpolated after that."""

    def __init__(self, ready):
        kicked = ready.model.kicked
        self.end = min(_leaving(kicked.field.grid, ready.line, ready.edges[-1]), ready.edges[-1])
        # through the innermost Galaxy cells are as small as a few hundredths of a kpc
        fine = 3 if _through_the_centre(ready) else 1
        n = max(int(np.ceil(self.end / _TABLE_STEP * fine)), 2)
        self.step = self.end / n
        self.values = kicked.profile(ready.line, self.step * np.arange(1, n + 1) * (1 - 1e-12))

    def places(self, D):
        """Return where distances D [kpc], (n,), are in the table, as its kernels take it."""
        out = np.empty(D.size, dtype=np.int64), np.empty(D.size), np.empty(D.size), np.empty(D.size)
        profiles.places(self.step, self.values.shape[2], D, *out)
        return out

    def at(self, D):
        """Return the profile at distances D [kpc], (6, rows, n)."""
        out = np.empty((6, self.values.shape[1], D.size))
        profiles.interpolate_rows(self.step, self.values, np.ascontiguousarray(D), out)
        return out


def _through_the_centre(ready):
    """Whether the sightline passes the centre so closely that the fields' innermost cells matter."""
    return _passes(ready, 0.4)


def _passes(ready, miss):
    """Whether the sightline passes the centre within a distance [kpc] before it ends."""
    tangent = ready.line.tangent_distance()
    return 0 < tangent < ready.edges[-1] and np.linalg.norm(ready.line.xyz(tangent)) < miss


def _leaving(grid, line, far):
    """Distance [kpc] at which a sightline leaves the fields' grid, or `far`."""
    exits = line.radius_crossings(grid.R_max)
    n = line.axes[0, 2]
    if abs(n) > 1e-9:
        exits += [d for d in ((grid.z_max - line.origin[2]) / n, (-grid.z_max - line.origin[2]) / n) if d > 0]
    return min([*exits, far])


def kicked_moments(ready):
    """Return optical depth and rate of 1 Msun lenses on the remnants' own fields.

    Parameters
    ----------
    ready : Line
        From `prepare`, of a model with fields.

    Returns
    -------
    tau, gamma : ndarray, shape (K,)
        By kicked element, as `moments`, summed over sources.
    error : ndarray, shape (K,)
        Standard error of gamma from the scatter of the fields' batches.
    """
    kicked, table = ready.model.kicked, ready.kicked_table
    n = max(_KICKED_NODES, ready.numerics.nodes - 1)
    D_L, w_L = panel_nodes(_lens_edges(ready, table.end), _LENS_NODES + (2 if _through_the_centre(ready) else 0))
    edges = ready.edges if _through_the_centre(ready) else _joined(ready.edges)
    first, D_S, src = _behind(ready, D_L, edges, n)
    tau, gamma = np.zeros((len(kicked.host), D_L.size)), np.zeros((len(kicked.host), D_L.size))
    depth, bundles = np.empty(D_L.size), np.empty(src.shape)
    counts = kernels.gather_behind(D_L, first, D_S, src, 1 if _passes(ready, _COLD) else _BUNDLE, depth, bundles)
    kernels.lens_moments(
        D_L, w_L, table.at(D_L), kicked.element_of_row, first, counts, depth, bundles, FOUR_G_C2, KAPPA, MAS,
        _KICKED_DIRECTIONS, tau, gamma,
    )  # fmt: skip
    by_batch = np.einsum("bkn,kn->bk", kicked.batch_factors(ready.line, D_L), gamma)
    error = by_batch.std(axis=0, ddof=1) / np.sqrt(len(by_batch))
    return tau.sum(axis=1), gamma.sum(axis=1), error


def _lens_edges(ready, end):
    """Panel edges for kicked lenses: even, with those of the model's narrow places, gathered at the observer."""
    panels = max(int(np.ceil(end / _LENS_PANEL)), 1) * max(1, ready.numerics.nodes // 5)
    even = np.linspace(0.0, end, panels + 1)
    # the rate goes with the square root of the distance there
    near = even[1] * np.array([0.01, 0.06, 0.25])
    narrow = ready.kinks[(ready.kinks > even[1]) & (ready.kinks < end)]
    edges = np.sort(np.concatenate([even, near, narrow]))
    return edges[np.concatenate([[True], np.diff(edges) > 1e-3])]


def _behind(ready, D_L, edges, n):
    """Source nodes behind each lens node, the first panel mapped so that the square root at D_S = D_L is taken out."""
    if ready.sources.fixed_distance:
        behind = D_L < ready.sources.fixed_distance
        first = np.concatenate([[0], np.cumsum(behind)])
        D = np.full(int(first[-1]), ready.sources.fixed_distance)
        w = np.ones(D.size)
    else:
        x, weight = legendre(n)
        nodes, weights, counts = [], [], []
        for d in D_L:
            e = edges[edges > d * 1.0001]
            width = np.diff(e)[:, None]
            nodes += [d + (e[0] - d) * x**2, (e[:-1, None] + width * x).ravel()]
            weights += [2 * (e[0] - d) * x * weight, (width * weight).ravel()]
            counts.append(nodes[-1].size + n)
        first = np.concatenate([[0], np.cumsum(counts)])
        D, w = np.concatenate(nodes), np.concatenate(weights)
    src = _source_rows(ready.model, ready.line, ready.sources, D)
    src[0] *= w / ready.norm
    # source nodes of less than 1e-9 of all sources are not worth their time
    src[0][:, src[0].sum(axis=0) < 1e-9] = 0.0
    return first, D, _merged(ready.model, src, two=True)


def kicked_rate_density(ready, grid):
    """Return the mass-free rate density of the remnants' own fields on a given isogrid, (K, P, K_mu)."""
    numerics = ready.numerics
    if ready.sources.fixed_distance:
        D = np.full(grid.pi.size, ready.sources.fixed_distance)
        row, w = np.arange(grid.pi.size), np.ones(grid.pi.size)
    else:
        end = np.array([ready.kicked_table.end])
        kinks = np.concatenate([end, ready.kinks]) if _through_the_centre(ready) else end
        edges = ready.edges if _through_the_centre(ready) else _joined(ready.edges)
        row, D, w = row_nodes(grid.pi, edges, kinks, max(_KICKED_NODES, numerics.nodes - 1))
    src = _source_rows(ready.model, ready.line, ready.sources, D)
    src[0] *= w / ready.norm
    light = src[0].sum(axis=0) > 1e-7 * src[0].sum(axis=0).max()
    row, D, src = row[light], D[light], _merged(ready.model, np.ascontiguousarray(src[:, :, light]), two=True)
    kicked = ready.model.kicked
    # the table itself: a profile at every node would take 200 MB, and most nodes are too faint to be looked at
    table = ready.kicked_table
    places = table.places(1.0 / (grid.pi[row] + 1.0 / D))
    return rings.rate_density(grid, row, D, src, table.values, kicked.element_of_row, _KICKED_RINGS, 1e-4, places)


def _joined(edges):
    """Panel edges without those that follow another one closely."""
    keep = [edges[0]]
    for e in edges[1:-1]:
        if e - keep[-1] >= _KICKED_GAP:
            keep.append(e)
    return np.array([*keep, edges[-1]])


def _merged(model, src, two=False):
    """Source rows moment-matched into the components' groups, or into disc and bulge."""
    if src.shape[1] == 1:
        return src
    components = model.galaxy.components
    own = [c.group if c.group >= 0 else 10_000 + i for i, c in enumerate(components)]
    group = [int(c.bulge) for c in components] if two else own
    _, group = np.unique(group, return_inverse=True)
    out = np.empty((6, group.max() + 1, src.shape[2]))
    profiles.merge_rows(src, group, out)
    return out


def isogrid(ready):
    """Return the grid of a sightline's rate densities."""
    step, fixed = ready.numerics.step_dex, ready.sources.fixed_distance
    if fixed:
        # one source distance: nothing averages over the kinks of the lens density, so the rows are finer
        return Isogrid.make(step, fixed, fixed, fine=4)
    near = max(ready.D_S[np.argmax(ready.src[0].sum(axis=0) > 1e-6)], 1.0)
    return Isogrid.make(step, near, ready.edges[-1])


def _nodes(ready):
    """Isogrid, node rows and distances, source rows (merged if asked) and lens profile at the nodes."""
    numerics, grid = ready.numerics, isogrid(ready)
    fixed = ready.sources.fixed_distance
    if fixed:
        row, D, w = np.arange(grid.pi.size), np.full(grid.pi.size, fixed), np.ones(grid.pi.size)
    else:
        row, D, w = row_nodes(grid.pi, ready.edges, ready.kinks, numerics.nodes)
    src = _source_rows(ready.model, ready.line, ready.sources, D)
    src[0] *= w / ready.norm
    if numerics.merge_sources:
        src = _merged(ready.model, src)
    lens = ready.model.galaxy.profile(ready.line, 1.0 / (grid.pi[row] + 1.0 / D))
    return grid, row, D, src, lens


def rate_density(ready):
    """Return the mass-free rate density of each element.

    Parameters
    ----------
    ready : Line
        From `prepare`.

    Returns
    -------
    grid : Isogrid
    T : ndarray, shape (E, P, K)
        Events per source, year, unit ln pi_rel and ln mu_rel, for 1 Msun lenses.
    """
    grid, row, D, src, lens = _nodes(ready)
    n, element = ready.numerics, np.arange(lens.shape[1])
    return grid, rings.rate_density(grid, row, D, src, lens, element, float(n.directions), float(n.weight_cut))


def event_rate_density(ready, element_weight, D_edges, n_phi=24):
    """Return the rate density before the sums over source distance and direction of motion.

    Linear in `element_weight`, so kick laws and histories are weights here too. Summed over its source-distance and
    direction cells it is `rate_density` of the weighted elements.

    Parameters
    ----------
    ready : Line
        From `prepare`.
    element_weight : ndarray, shape (E,)
        Factor of each element, for example the number of lenses per stated Msun: the Galaxy's components, then, in a
        model with fields, their kick bins.
    D_edges : ndarray, shape (C + 1,)
        Edges of source-distance cells [kpc]; sources outside are left out.
    n_phi : int
        Direction cells, the angle counted from +l toward +b.

    Returns
    -------
    grid : Isogrid
    R : ndarray of float32, shape (P, C, n_phi, K)
        Events per source, year, unit ln pi_rel and ln mu_rel, integrated over each cell, for 1 Msun lenses.
    """
    grid, row, D, src, lens = _nodes(ready)
    geometry = np.empty(D.size)
    kernels.node_weights(grid.pi, row, D, KAPPA, MAS, geometry)
    n = ready.numerics
    weight = np.asarray(element_weight, dtype=float)
    row_weight = weight[: lens.shape[1]]
    if ready.model.kicked is not None and weight.size > lens.shape[1]:
        # kick bins that count, as further rows
        more = weight[lens.shape[1] :][ready.model.kicked.element_of_row]
        counts = more > 0
        kicked = ready.kicked_table.at(1.0 / (grid.pi[row] + 1.0 / D))[:, counts]
        lens, row_weight = np.concatenate([lens, kicked], axis=1), np.concatenate([row_weight, more[counts]])
    cell = np.searchsorted(D_edges, D, side="right") - 1
    cell[(cell >= len(D_edges) - 1)] = -1
    R = np.zeros((grid.pi.size, len(D_edges) - 1, n_phi, grid.mu.size), dtype=np.float32)
    kernels.event_rate_density(
        grid.pi, row, cell, geometry, src, lens, row_weight, grid.mu, int(n_phi),
        float(n.directions), float(n.q_max), float(n.weight_cut), R,
    )  # fmt: skip
    return grid, R
