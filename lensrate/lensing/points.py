"""The event rate density of one sightline at given points: timescale, parallax or Einstein radius, direction, mass.

What `rates.rate_density` sums over directions and source distances is kept apart here: on every row of relative
parallax the density of relative motion is a sum of Gaussians, evaluated where it is asked for. So directions,
source distances and what is known of the source's own motion are exact, with no grid but that of the rows.
"""

from dataclasses import dataclass, field
from functools import cached_property
from pathlib import Path
from threading import Lock

import numpy as np

from ..kernels import odds as kernels
from ..kernels.followup import by_mass
from ..units import KAPPA
from .masses import bases_of, fine_masses
from .mixtures import SETTINGS, Mixture, Nodes, split_normal
from .motions import H, Motions

__all__ = ["LAYOUT", "Axes", "EventRates", "Points", "SourceData"]

_STEP = 0.1 * np.log(10.0)  # of ln pi_rel
_ROWS = (3e-5, 500.0)  # mas
_SHARES = (0.0, 0.01, 0.05, 0.15, 0.3, 0.45, 0.6, 0.75, 0.87, 0.95, 0.985, 1.0)  # of sources, edges of distance cells
_DECADES = 3.4
_SPEED = 100.0  # km/s, around which the table's motions are gathered
_RARE = 1e-6  # rate of a row over that of the base's largest, below which it is left out once something is known
#: what the numbers of a kept sightline depend on
LAYOUT = (_STEP, _ROWS, _SHARES, H, _DECADES, _SPEED, SETTINGS)
_FAR = 9.0  # errors away, beyond which masses are left out


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
    turns : int
        Sum the rate over so many directions where the points have none: needed in a frame that moves; 0: by the table.
    vector : ndarray, shape (7,)
        Value, lower and upper error of pi_EN and of pi_EE, and their correlation, where sizes are no parallaxes.
    toward : ndarray, shape (2, Q)
        Each point's direction toward north and east, for `vector`; (2, 0): not measured.
    """

    t_E: np.ndarray
    X: np.ndarray
    weight: np.ndarray
    on_theta: bool = False
    angle: np.ndarray | None = None
    earth: tuple = (0.0, 0.0)
    terms: np.ndarray = field(default_factory=lambda: np.zeros((3, 0, 3)))
    turns: int = 0
    vector: np.ndarray = field(default_factory=lambda: np.zeros(7))
    toward: np.ndarray = field(default_factory=lambda: np.zeros((2, 0)))

    def __len__(self):
        return self.t_E.size


class EventRates:
    """Rates of events on one sightline at given points, by class of lens.

    Parameters
    ----------
    ready : Line
        From `rates.prepare`.
    layout : (list, dict), optional
        Bases and spectra in the form of `masses.bases_of`, whose it is by default.
    kept : Kept, optional
        Files of this sightline, taken where they are there and written where not.

    Attributes
    ----------
    classes : list of ClassMasses
    ln_pi : ndarray, shape (P,)
        Rows of relative parallax.
    D_S : ndarray, shape (C,)
        Mean source distance of each cell [kpc].
    """

    def __init__(self, ready, layout=None, kept=None):
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
        self._lens_of_base = bases
        # nearer lenses move faster: the table's window of motions follows
        D_L = 1.0 / (np.exp(self.ln_pi) + 1.0 / max(float(ready.mean_distance()), 0.1))
        middle = np.log(_SPEED / (4.74 * D_L))
        self.k_first = np.floor((middle - 0.62 * _DECADES * np.log(10.0)) / H).astype(np.int64)
        self._ln_mu = (self.k_first[:, None] + np.arange(int(_DECADES * np.log(10.0) / H) + 1)) * H
        self._lock = Lock()
        self._by_timescale = {}
        self._with_source = None
        self._kept = kept
        self.mixture, table = self._made("rates", False)
        if table is not None:
            self.table = table
        self.gauss = self.mixture.finished(self.mixture.parts)

    def _made(self, what, with_source):
        """A mixture, and its table where that was kept."""
        found = self._kept.load(what) if self._kept else None
        if found is not None:
            return Mixture(found["first"], found["cell"], found["parts"], self.ln_pi.size), found.get("table")
        made, table = Mixture.gathered(self._nodes(), with_source), None
        if self._kept:
            arrays = {"first": made.first, "cell": made.cell, "parts": made.parts}
            if not with_source:
                table = arrays["table"] = self._summed(made)
            self._kept.save(what, arrays)
        return made, table

    def _nodes(self):
        model, pi, bases = self.ready.model, np.exp(self.ln_pi), self._lens_of_base
        m = model.n_stellar
        nodes = [Nodes(self.ready, pi, False, bases[:m], self.cell_edges)]
        if len(bases) > m:
            element_of_row = model.kicked.element_of_row
            rows_of = [np.flatnonzero(element_of_row == k) for k in range(element_of_row.max() + 1)]
            lens_of_base = [[(int(r), f) for e, f in members for r in rows_of[e - m]] for members in bases[m:]]
            nodes.append(Nodes(self.ready, pi, True, lens_of_base, self.cell_edges))
        return nodes

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

    @property
    def notes(self):
        """What was wrong with kept files."""
        return tuple(self._kept.notes) if self._kept else ()

    def is_kept(self, folder):
        """Return whether files in this folder hold the sightline."""
        return self._kept is not None and self._kept.folder.resolve() == Path(folder).resolve()

    def nbytes(self):
        """Return the memory that this sightline takes [bytes]."""
        tables = sum(self.__dict__[k].nbytes for k in ("table", "ln_table") if k in self.__dict__)
        more = 0 if self._with_source is None else self._with_source.nbytes
        return self.mixture.nbytes + self.gauss[0].nbytes + more + tables

    @cached_property
    def table(self):
        """The density summed over directions: (B, P, C, K) per ln pi_rel and ln mu_rel, at motions `_ln_mu`."""
        with self._lock:
            return self._summed(self.mixture)

    def _summed(self, mixture):
        every = np.tile(np.array([0, self._ln_mu.shape[1]]), (self.n_bases, self.ln_pi.size, 1))
        return mixture.speeds(mixture.parts, every, self._ln_mu, H, self.D_S.size)

    @cached_property
    def ln_table(self):
        """The logarithm of the table."""
        return np.log(np.maximum(self.table, 1e-300))

    def _sources(self):
        """The mixture that keeps sources apart, made when first asked for."""
        with self._lock:
            if self._with_source is None:
                self._with_source, _ = self._made("sources", True)
            return self._with_source

    def _given(self, known, rows):
        """A mixture and its Gaussians, once something is known of the source; rows wanted of each base."""
        if known is None:
            return self.mixture, self.gauss
        mixture = self._sources()
        return mixture, mixture.finished(mixture.given(known, rows))

    def _table_given(self, known, points, ln_X, ln_t, ln_z):
        """The logarithm of the table where points need it, once something is known of the source."""
        mixture = self._sources()
        windows = self._windows(points, ln_X, ln_t, ln_z)
        some = windows[:, :, 0] < windows[:, :, 1]
        # first and last row wanted
        rows = [(int(np.argmax(s)), int(s.size - np.argmax(s[::-1]))) if s.any() else (0, 0) for s in some]
        table = mixture.speeds(mixture.given(known, rows), windows, self._ln_mu, H, self.D_S.size)
        return np.log(np.maximum(table, 1e-300))

    def _windows(self, points, ln_X, ln_t, ln_z):
        """Motions that points ask of each base and row, (bases, P, 2), where any lens comes as close to moving so."""
        K = self._ln_mu.shape[1]
        out = np.zeros((self.n_bases, self.ln_pi.size, 2), dtype=np.int64)
        ends = np.array([ln_z.min(), ln_z.max()])
        by_size = ends[None] + np.zeros((self.ln_pi.size, 1)) if points.on_theta else self.ln_pi[:, None] - ends[::-1]
        rate = self.table.sum(axis=2)
        for base, (lo, hi) in enumerate(self._spans(points, ln_X)):
            masses = [c.ln_M for c in self.classes if base in c.bases]
            if not masses or hi <= lo:
                continue
            low, high = min(m.min() for m in masses) - _STEP / 5, max(m.max() for m in masses) + _STEP / 5
            # theta_E of the lightest and of the heaviest lens, over the longest and the shortest time
            theta = 0.5 * (self.ln_pi[:, None] + np.log(KAPPA) + np.array([low, high]))
            by_mass = theta - np.array([ln_t.max(), ln_t.min()])
            # rows between those of an event are read too
            by_mass = by_mass + 2 * self.step * np.array([-1.0, 1.0])
            ln_mu = np.maximum(by_size[:, 0], by_mass[:, 0]), np.minimum(by_size[:, 1], by_mass[:, 1])
            first = np.clip(np.floor(ln_mu[0] / H).astype(np.int64) - 1 - self.k_first, 0, K)
            last = np.clip(np.floor(ln_mu[1] / H).astype(np.int64) + 3 - self.k_first, 0, K)
            inside = np.zeros(self.ln_pi.size, dtype=bool)
            inside[lo:hi] = True
            sums = np.concatenate([np.zeros((self.ln_pi.size, 1)), np.cumsum(rate[base], axis=1)], axis=1)
            i = np.arange(self.ln_pi.size)
            here = np.where(inside & (first < last), sums[i, last] - sums[i, np.minimum(first, last)], 0.0)
            inside &= here > _RARE * here.max()
            out[base, inside, 0], out[base, inside, 1] = first[inside], last[inside]
        return out

    def rates(self):
        """Return the total rate of each class [1/yr] within an impact parameter of 1, from the table."""
        summed = self.table.sum(axis=(1, 2, 3))
        area = self.step * H
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
        for x, w in zip(np.log(t_E) / H, weight):
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
            points = Points(np.full(X.size, np.exp(k * H)), X, np.full(X.size, step))
            self._by_timescale[k] = self.evaluate(points, histograms=hist).sum(axis=1), hist
        return self._by_timescale[k]

    def source_evidence(self, known):
        """Return the density of what is known of the source among all sources of the sightline."""
        src = self.ready.src
        density = np.ones(src.shape[1:])
        if known.motion is not None:
            kernels.condition_sources(src, *known.motion, np.empty_like(src), density)
        if known.distance is not None:
            density = density * split_normal(self.ready.D_S, *known.distance)
        return float(np.sum(src[0] * density))

    def evaluate(self, points, known=None, light=None, histograms=None):
        """Sum the rate of each class over lens masses at every point, weighed with what is measured.

        Parameters
        ----------
        points : Points
        known : SourceData, optional
        light : LensLimit, optional
            Limit on the lens's light.
        histograms : ndarray, shape (classes, 4, n, 2), optional
            Added to: weight and weight times value of ln M, ln D_L, ln theta_E, ln mu_rel, on `Axes`.

        Returns
        -------
        ndarray, shape (classes, Q)
            Weight times the rate [1/yr] per ln t_E and ln X.
        """
        out = np.zeros((len(self.classes), len(points)))
        nothing = np.zeros((4, 0, 2))
        for part, c, given in self._parts(points, known, light):
            some = np.zeros(part.size)
            kernels.sum_masses(
                *given, 1.0 / self.D_S, Axes.x0, Axes.dx, nothing if histograms is None else histograms[c], some
            )  # fmt: skip
            out[c, part] = some
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
        out = [(np.zeros((len(points), c.ln_M.size)), np.zeros((len(points), c.ln_M.size))) for c in self.classes]
        for part, c, given in self._parts(points, known, light):
            some, ln_M = np.zeros((2, part.size, self.classes[c].ln_M.size))
            by_mass(*given, some, ln_M)
            rate, mean = out[c]
            rate[part] = some
            mean[part] = np.where(some > 0, ln_M / np.where(some > 0, some, 1.0), self.classes[c].ln_M)
        return out

    def _parts(self, points, known, light):
        """Yield points, class and what the sums over masses take, batch by batch."""
        motions = Motions(self, points, known)
        for part, motion, h in motions.batches():
            summed = np.ascontiguousarray(h.sum(axis=3).transpose(2, 0, 1))
            terms = np.ascontiguousarray(points.terms[:, part]) if points.terms.size else np.zeros((3, part.size, 3))
            toward = np.ascontiguousarray(points.toward[:, part]) if points.toward.size else np.zeros((2, 0))
            for c, masses in enumerate(self.classes):
                if masses.ln_M.size:
                    magnitude, spread = (np.zeros(0), 1.0) if light is None else light.of(masses)
                    yield part, c, (
                        h, summed, motion, self.ln_pi[0], self.step, np.log(KAPPA), points.on_theta,
                        motions.ln_X[part], motions.ln_t[part], points.weight[part], masses.bases, masses.number,
                        masses.ln_M, masses.width, _pieces(terms), terms, points.vector, toward, magnitude, spread,
                        np.zeros((1, 1)) if light is None else light.threshold,
                    )  # fmt: skip

    def _spans(self, points, ln_X):
        """Rows that each base needs for points of these sizes."""
        spans = [(0, 0)] * self.n_bases
        k, low, high = np.log(KAPPA), ln_X.min(), ln_X.max()
        # what else is measured leaves few masses: ln M between these
        least, most = -np.inf, np.inf
        size = points.terms[1 if points.on_theta else 0]
        if size.size and np.all(size[:, 1] > 0) and np.all(size == size[0]):
            value, lo, hi = size[0]
            ends = np.log(max(value - _FAR * lo, 1e-300)), np.log(value + _FAR * hi)
            least, most = (low - k - ends[1], high - k - ends[0]) if points.on_theta else (
                ends[0] - k - high, ends[1] - k - low
            )  # fmt: skip
        for masses in self.classes:
            if not masses.ln_M.size:
                continue
            lo, hi = max(masses.ln_M.min(), least) - _STEP / 5, min(masses.ln_M.max(), most) + _STEP / 5
            if lo > hi:
                continue
            ends = (2 * low - k - hi, 2 * high - k - lo) if points.on_theta else (2 * low + k + lo, 2 * high + k + hi)
            i = (np.array(ends) - self.ln_pi[0]) / self.step
            i_lo, i_hi = max(int(np.floor(i[0])) - 1, 0), min(int(np.floor(i[1])) + 3, self.ln_pi.size)
            for b in masses.bases:
                old = spans[b]
                spans[b] = (i_lo, i_hi) if old == (0, 0) else (min(old[0], i_lo), max(old[1], i_hi))
        return [(a, max(a, b)) for a, b in spans]


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
