"""The rate density at the motions that an event's points have: from a sightline's table or its Gaussians, each once."""

import numpy as np

from ..kernels import odds as kernels
from ..units import DAYS_PER_YEAR

__all__ = ["H", "Motions"]

H = 0.05 * np.log(10.0)  # of ln mu_rel in the table summed over directions
_BATCH = 128  # motions at a time
_LEAST = 1e-30  # of a row's peak, what single precision still tells from nothing


class Motions:
    """The rate density at all motions that an event's points have.

    Attributes
    ----------
    of_point : ndarray of int, shape (Q,)
        Which motion each point has.
    """

    def __init__(self, line, points, known):
        self.line, self.points = line, points
        ln_t, self.ln_X = np.log(points.t_E / DAYS_PER_YEAR), np.log(points.X)
        # with pi_E given, the motion on a row goes with 1 / (pi_E t_E)
        self.ln_z = self.ln_X - ln_t if points.on_theta else self.ln_X + ln_t
        self.ln_t = ln_t
        self.table = self.gauss = None
        if points.angle is not None:
            self.mixture, self.gauss = line._given(known, line._spans(points, self.ln_X))
            key = np.round(np.stack([self.ln_z, points.angle], axis=1), 9)
            _, self.some, self.of_point = np.unique(key, axis=0, return_index=True, return_inverse=True)
            self.of_point = self.of_point.ravel()
            return
        self.some = self.of_point = np.arange(len(points))
        if points.turns:
            self.table, self.start, self.h = self._turned(known)
        elif known is None:
            self.table, self.start, self.h = line.ln_table, line.k_first, H
        else:
            self.table = line._table_given(known, points, self.ln_X, ln_t, self.ln_z)
            self.start, self.h = line.k_first, H

    def _turned(self, known):
        """The density summed over directions on an even grid of ln z, for every row."""
        line, points, h = self.line, self.points, 0.5 * H
        first = int(np.floor(self.ln_z.min() / h)) - 1
        ln_z = np.arange(first, int(np.floor(self.ln_z.max() / h)) + 3) * h
        spans = line._spans(points, self.ln_X)
        mixture, gauss = line._given(known, spans)
        turn = (np.arange(points.turns) + 0.5) * (2 * np.pi / points.turns)
        P, C, K = line.ln_pi.size, line.D_S.size, ln_z.size
        out = np.full((line.n_bases, P, C, K), -700.0)
        grid, angle = np.repeat(ln_z, turn.size), np.tile(turn, K)
        for base, (lo, hi) in enumerate(spans):
            if hi > lo:
                here = self._sum(mixture, gauss, base, lo, hi, grid, angle)
                summed = here.reshape(hi - lo, C, K, turn.size).sum(axis=3) * (2 * np.pi / turn.size)
                out[base, lo:hi] = np.log(np.maximum(summed, 1e-300))
        return out, None, (first, h)

    def _sum(self, mixture, gauss, base, lo, hi, ln_z, angle):
        """The density of one base on rows lo to hi at motions (n,) of some directions, (hi - lo, C, n)."""
        line, earth = self.line, self.points.earth
        gauss, peak = gauss
        pi = np.exp(line.ln_pi[lo:hi, None])
        mu = np.exp(ln_z) + np.zeros_like(pi) if self.points.on_theta else pi * np.exp(-ln_z)
        x, y = mu * np.cos(angle) + pi * earth[0], mu * np.sin(angle) + pi * earth[1]
        out = np.zeros((hi - lo, line.D_S.size, ln_z.size), dtype=np.float32)
        single = x.astype(np.float32), y.astype(np.float32)
        kernels.at_motions(mixture.first, line.ln_pi.size, base, lo, hi, mixture.cell, gauss, *single, out)
        # per ln mu and radian of the frame's motion; the rate goes with the heliocentric one
        factor = mu**2 * np.hypot(x, y) * np.exp(np.maximum(peak[base, lo:hi, None], -600.0))
        return np.where(out > _LEAST, out, 0.0) * factor[:, None, :]

    def batches(self):
        """Yield points, which motion of the batch each has, and these motions' density, (bases, P, motions, cells)."""
        order = np.argsort(self.ln_X[self.some], kind="stable")
        place = np.empty(order.size, dtype=np.int64)
        place[order] = np.arange(order.size)
        rank = place[self.of_point]
        by_rank = np.argsort(rank, kind="stable")
        ends = np.searchsorted(rank[by_rank], np.arange(0, order.size + _BATCH, _BATCH))
        for k, start in enumerate(range(0, order.size, _BATCH)):
            part = by_rank[ends[k] : ends[k + 1]]
            yield part, rank[part] - start, self._density(self.some[order[start : start + _BATCH]], part)

    def _density(self, some, part):
        line = self.line
        spans = line._spans(self.points, self.ln_X[part])
        P, C = line.ln_pi.size, line.D_S.size
        h = np.zeros((line.n_bases, P, some.size, C))
        ln_z = self.ln_z[some]
        for base, (lo, hi) in enumerate(spans):
            if hi <= lo:
                continue
            if self.gauss is not None:
                here = self._sum(self.mixture, self.gauss, base, lo, hi, ln_z, self.points.angle[some])
                h[base, lo:hi] = here.transpose(0, 2, 1)
            elif self.start is None:
                first, step = self.h
                at = np.broadcast_to(ln_z, (P, some.size))
                kernels.between_motions(
                    self.table[base], np.full(P, first, dtype=np.int64), lo, hi, 0.0, step, at, h[base]
                )  # fmt: skip
            else:
                ln_mu = ln_z + np.zeros((P, 1)) if self.points.on_theta else line.ln_pi[:, None] - ln_z
                kernels.between_motions(self.table[base], self.start, lo, hi, 0.0, self.h, ln_mu, h[base])
        return h
