"""The event rate density of one sightline at given points: timescale, parallax or Einstein radius, direction, mass.

What `rates.rate_density` sums over directions and source distances is kept apart here: on every row of relative
parallax the density of relative motion is a sum of Gaussians, evaluated where it is asked for. So directions,
source distances and what is known of the source's own motion are exact, with no grid but that of the rows.
"""

from dataclasses import dataclass, field
from functools import cached_property
from threading import Lock

import numpy as np

from ..kernels import odds as kernels
from ..kernels import rates as rate_kernels
from ..kernels.followup import by_mass
from ..units import DAYS_PER_YEAR, KAPPA, MAS
from . import rates
from .directions import MANY, Directions
from .masses import bases_of, fine_masses
from .quadrature import row_nodes

__all__ = ["EventRates", "Points", "SourceData"]

_STEP = 0.1 * np.log(10.0)  # of ln pi_rel
_ROWS = (3e-5, 500.0)  # mas
_CUT = {"stellar": 3e-6, "kicked": 1e-4}  # share of a row's rate below which a Gaussian is left out
_SHARES = (0.0, 0.01, 0.05, 0.15, 0.3, 0.45, 0.6, 0.75, 0.87, 0.95, 0.985, 1.0)  # of sources, edges of distance cells
_H = 0.05 * np.log(10.0)  # of ln mu_rel in the table summed over directions
_DECADES = 3.4
_DENSITY = 2.5  # directions per dispersion, on a circle of mu_rel
_Q_MAX = 18.0  # exponents beyond are dropped in that table
_SPEED = 100.0  # km/s, around which the table's motions are gathered
_BATCH = 128  # points at a time


@dataclass(frozen=True, eq=False)
class SourceData:
    """What is measured of the source itself; None where it is not.

    Attributes
    ----------
    motion : ndarray, shape (5,), or None
        Proper motion along l and b, covariance ll, lb, bb [mas/yr].
    distance : (float, float, float) or None
        Value, lower and upper error [kpc].
    """

    motion: np.ndarray | None = None
    distance: tuple | None = None


@dataclass(frozen=True, eq=False)
class Points:
    """Where the rate is wanted, in the frame of the data.

    Attributes
    ----------
    t_E : ndarray, shape (Q,)
        [d]
    X : ndarray, shape (Q,)
        pi_E, or theta_E [mas] with `on_theta`.
    weight : ndarray, shape (Q,)
        Multiplies the rate per ln t_E and ln X (and radian where `angle` is given).
    on_theta : bool
    angle : ndarray, shape (Q,), or None
        Direction of relative motion from +l toward +b [rad]; None: summed over directions.
    earth : (float, float)
        Earth's velocity along l and b [au/yr] that the frame moves with; zeros: heliocentric.
    terms : ndarray, shape (3, Q, 3)
        Value, lower and upper error of theta_E, pi_E and mu_rel; errors of 0: not measured.
    """

    t_E: np.ndarray
    X: np.ndarray
    weight: np.ndarray
    on_theta: bool = False
    angle: np.ndarray | None = None
    earth: tuple = (0.0, 0.0)
    terms: np.ndarray = field(default_factory=lambda: np.zeros((3, 0, 3)))

    def __len__(self):
        return self.t_E.size


class _Set:
    """Gaussians of the stellar or of the kicked bases."""

    def __init__(self, ready, pi, kicked, bases, lens_of_base, cell_edges):
        numerics = ready.numerics
        fixed = ready.sources.fixed_distance
        if fixed:
            row, D, w = np.arange(pi.size), np.full(pi.size, fixed), np.ones(pi.size)
        elif kicked:
            end, inner = np.array([ready.kicked_table.end]), rates._through_the_centre(ready)
            edges = ready.edges if inner else rates._joined(ready.edges)
            row, D, w = row_nodes(pi, edges, np.concatenate([end, ready.kinks]) if inner else end, 4)
        else:
            row, D, w = row_nodes(pi, ready.edges, ready.kinks, numerics.nodes)
        src = rates._source_rows(ready.model, ready.line, ready.sources, D)
        src[0] *= w / ready.norm
        self.src = rates._merged(ready.model, src, two=kicked)
        D_L = 1.0 / (pi[row] + 1.0 / D)
        lens = ready.kicked_table.at(D_L) if kicked else ready.model.galaxy.profile(ready.line, D_L)
        geometry = np.empty(D.size)
        rate_kernels.node_weights(pi, row, D, KAPPA, MAS, geometry)
        rows = [(r, b, f) for b, members in enumerate(lens_of_base) for r, f in members]
        lens_row, base, factor = (np.array([x[k] for x in rows]) for k in range(3))
        n, B = pi.size, len(lens_of_base)
        self.first = np.zeros(B * n + 1, dtype=np.int64)
        none, empty = np.zeros(0, dtype=np.int32), np.zeros(0)
        chosen = (row, n, geometry, self.src, lens, lens_row, base, factor.astype(float), B)
        cut = _CUT["kicked" if kicked else "stellar"]
        G = kernels.pick_gaussians(*chosen, cut, self.first, none, none, none, empty)
        self.node, out_lens, self.src_row = (np.empty(G, dtype=np.int32) for _ in range(3))
        self.weight = np.empty(G)
        kernels.pick_gaussians(*chosen, cut, self.first, self.node, out_lens, self.src_row, self.weight)
        self.motion = np.ascontiguousarray(lens[1:, out_lens, self.node])
        self.D, self.bases = D, bases
        cell = np.clip(np.searchsorted(cell_edges, D, side="right") - 1, 0, len(cell_edges) - 2)
        self.cell = cell[self.node].astype(np.int32)
        self.gauss = self.finish(self.src, np.ones(self.src.shape[1:]))

    def finish(self, src, factor):
        out = np.empty((6, self.node.size))
        kernels.finish_gaussians(self.node, self.src_row, self.weight, self.motion, src, factor, out)
        return out

    def given(self, known):
        """Gaussians once something is known of the source, and the density of that knowledge among all sources."""
        src, factor = self.src, np.ones(self.src.shape[1:])
        if known.motion is not None:
            out = np.empty_like(src)
            kernels.condition_sources(src, *known.motion, out, factor)
            src = out
        if known.distance is not None:
            factor = factor * _split_normal(self.D, *known.distance)
        return self.finish(src, factor)

    def nbytes(self):
        arrays = (self.node, self.src_row, self.weight, self.motion, self.cell, self.gauss, self.src)
        return sum(a.nbytes for a in arrays)


class EventRates:
    """Rates of events on one sightline at given points, by class of lens.

    Parameters
    ----------
    ready : Line
        From `rates.prepare`.
    layout : (list, dict), optional
        Bases and spectra in the form of `masses.bases_of`, whose it is by default.

    Attributes
    ----------
    classes : list of ClassMasses
    ln_pi : ndarray, shape (P,)
        Rows of relative parallax.
    D_S : ndarray, shape (C,)
        Mean source distance of each cell [kpc].
    """

    def __init__(self, ready, layout=None):
        model = ready.model
        self.ready = ready
        step = _STEP / (2 if ready.sources.fixed_distance else 1)
        self.step = step
        lo, hi = (np.floor(np.log(x) / step) for x in _ROWS)
        self.ln_pi = np.arange(lo, hi + 1) * step
        bases, spectra = bases_of(model) if layout is None else layout
        self.n_bases = len(bases)
        self.classes = [fine_masses(name, rows) for name, rows in spectra.items()]
        self.cell_edges, self.D_S = self._cells()
        m = model.n_stellar
        pi = np.exp(self.ln_pi)
        sets = [_Set(ready, pi, False, list(range(m)), bases[:m], self.cell_edges)]
        if len(bases) > m:
            element_of_row = model.kicked.element_of_row
            rows_of = [np.flatnonzero(element_of_row == k) for k in range(element_of_row.max() + 1)]
            lens_of_base = [[(int(r), f) for e, f in members for r in rows_of[e - m]] for members in bases[m:]]
            sets.append(_Set(ready, pi, True, list(range(m, len(bases))), lens_of_base, self.cell_edges))
        self.sets = sets
        self._lock = Lock()
        self._by_timescale = {}
        self._directions = None

    def _cells(self):
        ready = self.ready
        if ready.sources.fixed_distance:
            D = ready.sources.fixed_distance
            return np.array([0.0, 2 * D]), np.array([D])
        w = ready.src[0].sum(axis=0)
        cumulative = np.cumsum(w) / w.sum()
        inner = np.interp(_SHARES[1:-1], cumulative, ready.D_S)
        edges = np.unique(np.concatenate([[0.0], inner, [ready.edges[-1] * 1.001]]))
        cell = np.searchsorted(edges, ready.D_S, side="right") - 1
        total = np.bincount(cell, w, edges.size - 1)
        inverse = np.bincount(cell, w / ready.D_S, edges.size - 1)
        middle = 0.5 * (edges[1:] + edges[:-1])
        return edges, np.where(total > 0, total / np.maximum(inverse, 1e-300), middle)

    def nbytes(self):
        """Return the memory that this sightline takes [bytes]."""
        table = self.__dict__.get("table")
        tables = table[0].nbytes if table is not None else 0
        return sum(s.nbytes() for s in self.sets) + tables + (self._directions.nbytes if self._directions else 0)

    @cached_property
    def table(self):
        """The density summed over directions: (B, P, C, K) per ln pi_rel and ln mu_rel, first motion of each row."""
        with self._lock:
            return self._table()

    def directions(self):
        """Return the density on a grid of sizes and directions of motion, made when first asked for."""
        table, k_first = self.table
        with self._lock:
            if self._directions is None:
                ln_mu = (k_first[:, None] + np.arange(table.shape[-1])) * _H
                self._directions = Directions(self.sets, self.n_bases, ln_mu, k_first, _H, self.D_S.size)
            return self._directions

    def _table(self):
        K = int(_DECADES * np.log(10.0) / _H) + 1
        # nearer lenses move faster: the window of motions follows
        D_L = 1.0 / (np.exp(self.ln_pi) + 1.0 / max(float(self.ready.mean_distance()), 0.1))
        middle = np.log(_SPEED / (4.74 * D_L))
        k_first = np.floor((middle - 0.62 * _DECADES * np.log(10.0)) / _H).astype(np.int64)
        ln_mu = (k_first[:, None] + np.arange(K)) * _H
        mu = np.exp(ln_mu)
        P, C = self.ln_pi.size, self.D_S.size
        out = np.zeros((self.n_bases, P, C, K))
        for group in self.sets:
            for b, base in enumerate(group.bases):
                kernels.around(group.first, P, b, group.cell, group.gauss, mu, _DENSITY, _Q_MAX, out[base])
        out *= (mu**3)[:, None, :]
        return out, k_first

    def rates(self):
        """Return the total rate of each class [1/yr] within an impact parameter of 1, from the table."""
        summed = self.table[0].sum(axis=(1, 2, 3))
        area = self.step * _H
        return np.array([float(np.exp(0.5 * c.ln_M) @ c.number @ summed[c.bases]) * area for c in self.classes])

    def timescale_only(self, t_E, weight, histograms=None):
        """Sum the rate of each class at timescales alone, everything else left open.

        Parameters
        ----------
        t_E, weight : ndarray, shape (n,)
            Heliocentric timescales [d] and their weights.
        histograms : ndarray, optional
            As in `evaluate`.

        Returns
        -------
        ndarray, shape (classes,)
            Weighted rate [1/yr] per ln t_E.
        """
        out = np.zeros(len(self.classes))
        for x, w in zip(np.log(t_E) / _H, weight):
            k = int(np.floor(x))
            (low, h_low), (high, h_high) = self._at_timescale(k), self._at_timescale(k + 1)
            share = x - k
            both = (low > 0) & (high > 0)
            geometric = np.exp(
                (1 - share) * np.log(np.where(both, low, 1.0)) + share * np.log(np.where(both, high, 1.0))
            )
            here = np.where(both, geometric, (1 - share) * low + share * high)
            out += w * here
            if histograms is not None:
                near, of = (low, h_low) if share < 0.5 else (high, h_high)
                scale = np.divide(w * here, near, out=np.zeros_like(near), where=near > 0)
                histograms += scale[:, None, None, None] * of
        return out

    def _at_timescale(self, k):
        """Rates and histograms at exp(k h) days, kept."""
        if k not in self._by_timescale:
            step = 0.1 * np.log(10.0)
            X = np.exp(np.arange(np.log(1e-4), np.log(1e2), step))
            hist = np.zeros((len(self.classes), 4, Axes.n, 2))
            points = Points(np.full(X.size, np.exp(k * _H)), X, np.full(X.size, step))
            self._by_timescale[k] = self.evaluate(points, histograms=hist).sum(axis=1), hist
        return self._by_timescale[k]

    def source_evidence(self, known):
        """Return the density of what is known of the source among all sources of the sightline."""
        src = self.ready.src
        density = np.ones(src.shape[1:])
        if known.motion is not None:
            kernels.condition_sources(src, *known.motion, np.empty_like(src), density)
        if known.distance is not None:
            density = density * _split_normal(self.ready.D_S, *known.distance)
        return float(np.sum(src[0] * density))

    def evaluate(self, points, known=None, light=None, histograms=None, grid=False):
        """Sum the rate of each class over lens masses at every point, weighed with what is measured.

        Parameters
        ----------
        points : Points
        known : SourceData, optional
            Makes directions necessary.
        light : LensLimit, optional
            Limit on the lens's light.
        histograms : ndarray, shape (classes, 4, n, 2), optional
            Added to: weight and weight times value of ln M, ln D_L, ln theta_E, ln mu_rel, on `Axes`.
        grid : bool
            Read many points in directions off `directions`, which costs as much as several events at first: rates
            within 3e-4, distances within a percent.

        Returns
        -------
        ndarray, shape (classes, Q)
            Weight times the rate [1/yr] per ln t_E and ln X.
        """
        out = np.zeros((len(self.classes), len(points)))
        gauss = self._gaussians(points, known, light, grid)
        # points of like size need the same few rows
        order = np.argsort(points.X, kind="stable")
        for start in range(0, len(points), _BATCH):
            part = order[start : start + _BATCH]
            some = np.zeros((len(self.classes), part.size))
            self._batch(points, part, gauss, light, histograms, some)
            out[:, part] = some
        return out

    def by_mass(self, points, known=None, light=None):
        """As `evaluate`, with lens masses kept apart.

        Parameters
        ----------
        points, known, light
            As `evaluate`.

        Returns
        -------
        list of (ndarray, ndarray), shapes (Q, J)
            For each class: weight times rate in each of its mass bins, and the mean ln M there.
        """
        gauss = self._gaussians(points, known, light, False)
        out = [(np.zeros((len(points), c.ln_M.size)), np.zeros((len(points), c.ln_M.size))) for c in self.classes]
        order = np.argsort(points.X, kind="stable")
        for start in range(0, len(points), _BATCH):
            part = order[start : start + _BATCH]
            h, ln_t, ln_X = self._densities(points, part, gauss)
            summed = np.ascontiguousarray(h.sum(axis=2).transpose(2, 0, 1))
            terms = points.terms[:, part] if points.terms.size else np.zeros((3, part.size, 3))
            for masses, (rate, mean) in zip(self.classes, out):
                if not masses.ln_M.size:
                    continue
                some, ln_M = np.zeros((2, part.size, masses.ln_M.size))
                magnitude, spread = (np.zeros(0), 1.0) if light is None else light.of(masses)
                by_mass(
                    h, summed, self.ln_pi[0], self.step, np.log(KAPPA), points.on_theta, ln_X, ln_t,
                    points.weight[part], masses.bases, masses.number, masses.ln_M, masses.width, _pieces(terms),
                    np.ascontiguousarray(terms), magnitude, spread,
                    np.zeros((1, 1)) if light is None else light.threshold, some, ln_M,
                )  # fmt: skip
                rate[part], mean[part] = some, np.where(some > 0, ln_M / np.where(some > 0, some, 1.0), masses.ln_M)
        return out

    def _gaussians(self, points, known, light, grid):
        """The Gaussians of each set; None where many points in directions are read off the grid."""
        if known is not None:
            return [s.given(known) for s in self.sets]
        wide = grid and points.angle is not None and len(points) > MANY and light is None
        return None if wide else [s.gauss for s in self.sets]

    def _densities(self, points, part, gauss):
        """Density of the relative motion that each point needs of every base and row, (B, P, C, Q); ln t, ln X."""
        ln_t, ln_X = np.log(points.t_E[part] / DAYS_PER_YEAR), np.log(points.X[part])
        P, Q, C = self.ln_pi.size, ln_t.size, self.D_S.size
        pi = np.exp(self.ln_pi)[:, None]
        ln_theta = ln_X + np.zeros((P, 1)) if points.on_theta else self.ln_pi[:, None] - ln_X
        ln_mu = ln_theta - ln_t
        h = np.zeros((self.n_bases, P, C, Q))
        span = self._spans(points.on_theta, ln_X)
        if points.angle is None:
            table, k_first = self.table
            for b in range(self.n_bases):
                kernels.between_motions(table[b], k_first, *span[b], 0.0, _H, ln_mu, h[b])
        else:
            mu = np.exp(ln_mu)
            x = mu * np.cos(points.angle[part]) + pi * points.earth[0]
            y = mu * np.sin(points.angle[part]) + pi * points.earth[1]
            # per ln mu and radian of the frame's motion; the rate goes with the heliocentric one
            jacobian = (mu**2 * np.hypot(x, y))[:, None, :]
            if gauss is None:
                grid = self.directions()
                place = grid.place(x, y)
                for base, (lo, hi) in enumerate(span):
                    grid.add(base, lo, hi, place, h[base])
                    h[base, lo:hi] *= jacobian[lo:hi]
                return h, ln_t, ln_X
            for group, g in zip(self.sets, gauss):
                for b, base in enumerate(group.bases):
                    lo, hi = span[base]
                    kernels.at_motions(group.first, P, b, lo, hi, group.cell, g, x, y, h[base])
                    h[base, lo:hi] *= jacobian[lo:hi]
        return h, ln_t, ln_X

    def _batch(self, points, part, gauss, light, histograms, out):
        h, ln_t, ln_X = self._densities(points, part, gauss)
        Q = ln_t.size
        summed = np.ascontiguousarray(h.sum(axis=2).transpose(2, 0, 1))
        terms = points.terms[:, part] if points.terms.size else np.zeros((3, Q, 3))
        n_sub = _pieces(terms)
        no_histogram = np.zeros((4, 0, 2))
        nothing = np.zeros(0)
        for c, masses in enumerate(self.classes):
            if not masses.ln_M.size:
                continue
            magnitude, spread = (nothing, 1.0) if light is None else light.of(masses)
            threshold = np.zeros((1, 1)) if light is None else light.threshold
            target = no_histogram if histograms is None else histograms[c]
            kernels.sum_masses(
                h, summed, self.ln_pi[0], self.step, np.log(KAPPA), points.on_theta, ln_X, ln_t, points.weight[part],
                masses.bases, masses.number, masses.ln_M, masses.width, n_sub, np.ascontiguousarray(terms),
                magnitude, spread, threshold, 1.0 / self.D_S, Axes.x0, Axes.dx, target, out[c],
            )  # fmt: skip

    def _spans(self, on_theta, ln_X):
        """Rows that each base needs for these points."""
        spans = [(0, 0)] * self.n_bases
        k = np.log(KAPPA)
        for masses in self.classes:
            if not masses.ln_M.size:
                continue
            lo, hi = masses.ln_M.min() - _STEP / 5, masses.ln_M.max() + _STEP / 5
            ends = (2 * ln_X.min() - k - hi, 2 * ln_X.max() - k - lo) if on_theta else (
                2 * ln_X.min() + k + lo, 2 * ln_X.max() + k + hi
            )  # fmt: skip
            i = (np.array(ends) - self.ln_pi[0]) / self.step
            i_lo, i_hi = max(int(np.floor(i[0])) - 1, 0), min(int(np.floor(i[1])) + 3, self.ln_pi.size)
            for b in masses.bases:
                old = spans[b]
                spans[b] = (i_lo, i_hi) if old == (0, 0) else (min(old[0], i_lo), max(old[1], i_hi))
        return [(a, max(a, b)) for a, b in spans]


def _split_normal(x, value, lo, hi):
    z = (x - value) / np.where(x > value, hi, lo)
    return np.exp(-0.5 * z * z) / (np.sqrt(np.pi / 2.0) * (lo + hi))


def _pieces(terms):
    """Into how many pieces a mass bin is cut so that the narrowest measurement is resolved."""
    measured = terms[:, :, 1] > 0
    if not measured.any():
        return 1
    width = np.minimum(terms[:, :, 1], terms[:, :, 2])[measured] / np.abs(terms[:, :, 0])[measured]
    return int(np.clip(np.ceil(0.05 / max(width.min(), 1e-4) * 1.5), 1, 64))


class Axes:
    """Bins of the posteriors: ln M [Msun], ln D_L [kpc], ln theta_E [mas], ln mu_rel [mas/yr]."""

    names = ("mass_msun", "distance_kpc", "theta_E_mas", "mu_rel_mas_per_yr")
    dx = 0.01 * np.log(10.0)
    n = 800
    x0 = np.log(np.array([1e-4, 1e-4, 1e-4, 1e-3]))
