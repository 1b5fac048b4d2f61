"""The density of relative motion of a sightline on a grid of sizes and directions, for wide parallax vectors.

Thousands of points of such an event would each sum up to a million Gaussians; between nodes the logarithm of their sum
is smooth. Which sources belong to it is kept on a coarser grid of directions.
"""

import numpy as np

from ..kernels import odds as kernels

__all__ = ["MANY", "Directions"]

MANY = 300  # points of an event from which on the grid is worth while
_N = 72  # directions
_COARSE = 3  # of them share their sources
_Q_MAX = 20.0  # exponents beyond are dropped


class Directions:
    """Table of one sightline.

    Parameters
    ----------
    sets : list
        Gaussians of the stellar and the kicked bases, from `points`.
    n_bases : int
    ln_mu : ndarray, shape (P, K)
        Even nodes of each row; the first is h times a whole number.
    k_first : ndarray of int, shape (P,)
        That number.
    h : float
    n_cells : int
        Of source distance.
    """

    def __init__(self, sets, n_bases, ln_mu, k_first, h, n_cells):
        self.k_first, self.h = k_first, h
        angle = (np.arange(_N) + 0.5) * (2 * np.pi / _N)
        P, K = ln_mu.shape
        self.ln_density = np.full((n_bases, P, K, _N), -800.0, dtype=np.float32)
        self.shares = np.zeros((n_bases, P, K, _N // _COARSE, n_cells), dtype=np.float32)
        mu, cosine, sine = np.exp(ln_mu), np.cos(angle), np.sin(angle)
        for group in sets:
            for b, base in enumerate(group.bases):
                kernels.fill_directions(
                    group.first, P, b, group.cell, group.gauss, mu, cosine, sine, _Q_MAX, _COARSE,
                    self.ln_density[base], self.shares[base],
                )  # fmt: skip

    def place(self, x, y):
        """Return where motions x, y (P, Q) lie in every base's table: ln mu and steps of direction."""
        return np.log(np.hypot(x, y)), np.arctan2(y, x) * (_N / (2 * np.pi)) + (_N - 0.5)

    def add(self, base, lo, hi, place, out):
        """Fill out (P, C, Q), rows lo to hi, with one base's density at a `place`."""
        ln_mu, turn = place
        kernels.between_directions(
            self.ln_density[base], self.k_first, lo, hi, self.h, ln_mu, turn, _COARSE, self.shares[base], out
        )  # fmt: skip

    @property
    def nbytes(self):
        """Memory [bytes]."""
        return self.ln_density.nbytes + self.shares.nbytes
