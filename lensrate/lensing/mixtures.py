"""What a sightline's rate density is made of: on every row of relative parallax a mixture of Gaussians in motion."""

from functools import lru_cache

import numpy as np

from ..kernels import mixtures as kernels
from ..kernels import rates as rate_kernels
from ..units import KAPPA, MAS
from . import rates, rings
from .quadrature import row_nodes

__all__ = ["SETTINGS", "Mixture", "Nodes", "split_normal"]

# Gaussians no further apart are joined: means in dispersions, relative covariance, source distance [kpc], and for the
# source's own motion, which is kept apart only where something is known of it
_JOINED = ((0.2, 0.2, np.inf, np.inf), (0.2, 0.2, np.inf, np.inf))  # stellar, kicked
_WITH_SOURCE = ((0.2, 0.2, 0.4, 0.3), (0.3, 0.3, 0.6, 0.4))
_FULL = 0.03  # over the number of lens rows: share of a row's rate from which on those tolerances hold
_MOST_FULL = 1e-3
_CUT = 1e-7  # share of a row's rate below which a Gaussian is left out
_DIRECTIONS = {False: 2.5, True: 2.0}  # fineness of speed distributions, as numerics.directions; with sources apart
#: what the numbers of a kept mixture depend on
SETTINGS = (_JOINED, _WITH_SOURCE, _FULL, _MOST_FULL, _CUT, tuple(_DIRECTIONS.values()))


class Mixture:
    """Gaussians of every base and row, of lens and source motion.

    Parameters
    ----------
    first : ndarray of int, shape (bases * P + 1,)
        Where those of each base and row start.
    cell : ndarray of int, shape (G,)
        Cell of source distance.
    parts : ndarray, shape (13, G) or (6, G)
        As from `kernels.mixtures.gather`; where sources are not apart, weight, mean and covariance alone.
    n_rows : int
    """

    def __init__(self, first, cell, parts, n_rows):
        self.first, self.cell, self.parts, self.n_rows = first, cell, parts, n_rows

    @property
    def nbytes(self):
        """Memory [bytes]."""
        return self.first.nbytes + self.cell.nbytes + self.parts.nbytes

    @classmethod
    def gathered(cls, nodes, with_source, tolerances=None):
        """Gather the Gaussians of some `Nodes`.

        Parameters
        ----------
        nodes : list of Nodes
            Stellar bases, then kicked ones.
        with_source : bool
            Keep the source's own motion and distance apart.
        tolerances : pair of tuples of float, optional
            Mean, covariance, distance [kpc], source, of stellar and of kicked bases; for tests.
        """
        tolerances = tolerances or (_WITH_SOURCE if with_source else _JOINED)
        first, cells, parts, count = [], [], [], 0
        for some, chosen in zip(nodes, tolerances):
            for members in some.lens_of_base:
                lens_row = np.array([r for r, _ in members])
                factor = np.array([f for _, f in members], dtype=float)
                full = min(_FULL / lens_row.size, _MOST_FULL)
                here, cell, part = kernels.gather(
                    some.start, some.geometry, some.src, some.lens, lens_row, factor, some.D, some.cell, some.n_cells,
                    _CUT, *chosen, full,
                )  # fmt: skip
                first.append(here[:-1] + count)
                cells.append(cell)
                parts.append(part)
                count += cell.size
        first.append(np.array([count]))
        kept = slice(None) if with_source else slice(0, 6)
        parts = np.concatenate([p[kept] for p in parts], axis=1)
        return cls(np.concatenate(first), np.concatenate(cells), parts, nodes[0].start.size - 1)

    def given(self, known, rows):
        """Return weight, mean and covariance of the relative motion (6, G) once something is known of the source.

        rows (bases, 2): first and last row wanted of each base.
        """
        out = np.zeros((6, self.cell.size))
        nothing = np.zeros(0)
        motion = nothing if known.motion is None else known.motion
        distance = nothing if known.distance is None else np.array(known.distance, dtype=float)
        kernels.relative(self.parts, self.first, self.n_rows, np.array(rows), motion, distance, out)
        return out

    def finished(self, gauss):
        """Return weight, mean and covariance (6, G) as `at_motions` takes them, and the peaks (bases, P)."""
        out, peak = np.empty(gauss.shape, dtype=np.float32), np.empty(self.first.size - 1)
        kernels.finish(self.first, gauss, peak, out)
        return out, peak.reshape(-1, self.n_rows)

    def speeds(self, gauss, windows, ln_mu, h, n_cells):
        """Return the density summed over directions, per ln pi_rel and ln mu_rel, (bases, P, cells, K).

        gauss (6, G): weight, mean, covariance. windows (bases, P, 2): motions wanted, none where the first is not below
        the last. ln_mu (P, K): even nodes of each row, h apart.
        """
        P, K = ln_mu.shape
        table = _rings(h, K, _DIRECTIONS[self.parts.shape[0] > 6])
        out = np.zeros((len(windows), P, n_cells, K))
        mu = np.exp(ln_mu)
        for b, window in enumerate(windows):
            kernels.speeds(
                self.first, P, b, window, self.cell, gauss, ln_mu[:, 0], mu, h, table.table, table.ends,
                rings._ORDERS, *rings._rules(), table.accuracy, table.per_kappa, out[b],
            )  # fmt: skip
        return out


@lru_cache(maxsize=2)
def _rings(h, K, directions):
    return rings.Rings.make(h, K, directions)


class Nodes:
    """Source distances on every row, with sources and lenses there, of the stellar or of the kicked bases."""

    def __init__(self, ready, pi, kicked, lens_of_base, cell_edges):
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
        self.src = rates._merged(ready.model, src)
        D_L = 1.0 / (pi[row] + 1.0 / D)
        self.lens = ready.kicked_table.at(D_L) if kicked else ready.model.galaxy.profile(ready.line, D_L)
        self.geometry = np.empty(D.size)
        rate_kernels.node_weights(pi, row, D, KAPPA, MAS, self.geometry)
        self.start = np.searchsorted(row, np.arange(pi.size + 1))
        self.D, self.lens_of_base = D, lens_of_base
        self.n_cells = len(cell_edges) - 1
        self.cell = np.clip(np.searchsorted(cell_edges, D, side="right") - 1, 0, self.n_cells - 1)


def split_normal(x, value, lo, hi):
    """Return the density of a split normal distribution at x."""
    z = (x - value) / np.where(x > value, hi, lo)
    return np.exp(-0.5 * z * z) / (np.sqrt(np.pi / 2.0) * (lo + hi))
