"""Observed t_E by field, also shifted and stretched: likelihoods, shares, draws; and the parallax given t_E."""

from functools import cached_property

import numpy as np
from scipy.special import i0e, ndtr
from scipy.stats import ncx2

from .fold import LN_T, STEP

__all__ = ["Parallaxes", "Shapes"]

_TINY = 1e-300
_SHIFTS = np.linspace(-0.9, 0.9, 73)
_STRETCHES = np.linspace(0.8, 1.25, 10)
_NODES, _WEIGHTS = np.polynomial.hermite_e.hermegauss(5)
_FINE = 6  # of the steps in ln pi_E
_PLAIN = 30.0  # value over error from which the size of a vector errs like a plain number


class Shapes:
    """Observed ln t_E by field under a grid of shifts and stretches of the true one.

    Parameters
    ----------
    folded : Folded
    errors : Errors
    free : bool
        Whether shift and stretch are free; else there is the forecast alone.

    Attributes
    ----------
    places : ndarray, shape (G, 2)
        Shift of ln t_E and factor of its spread.
    pdf, below : ndarray, shape (G, F, n)
        Per observed ln t_E, and its integral; each field's integral is one.
    expected : ndarray, shape (G, F)
        Events found.
    """

    def __init__(self, folded, errors, free=False):
        rate = folded.rate.sum(axis=1)
        total = rate.sum(axis=0)
        pivot = float(total @ LN_T / total.sum())
        if free:
            self.places = np.array([(d, s) for d in _SHIFTS for s in _STRETCHES])
        else:
            self.places = np.array([(0.0, 1.0)])
        shape = (len(self.places), *rate.shape)
        self.pdf, self.expected = np.empty(shape), np.empty(shape[:2])
        for g, (shift, stretch) in enumerate(self.places):
            moved = rate
            if free:
                source = pivot + (LN_T - pivot - shift) / stretch
                moved = np.array([np.interp(source, LN_T, row, 0.0, 0.0) for row in rate]) / stretch
            found = moved * folded.efficiency
            self.expected[g] = found.sum(axis=1) * STEP
            self.pdf[g] = found @ errors.matrix.T
        norm = self.pdf.sum(axis=2, keepdims=True) * STEP
        self.pdf /= np.where(norm > 0, norm, 1.0)
        inner = 0.5 * STEP * (self.pdf[:, :, 1:] + self.pdf[:, :, :-1])
        self.below = np.concatenate([np.zeros((*shape[:2], 1)), np.cumsum(inner, axis=2)], axis=2)
        self.below /= np.maximum(self.below[:, :, -1:], _TINY)

    @cached_property
    def _ln(self):
        return np.log(np.maximum(self.pdf, _TINY))

    @property
    def plain(self):
        """Index of the forecast itself."""
        return int(np.argmin(np.abs(self.places - [0.0, 1.0]).sum(axis=1)))

    def best(self, x, field):
        """Return the index of the likeliest shift and stretch of events."""
        if len(self.places) == 1:
            return 0
        i = np.clip(np.rint((x - LN_T[0]) / STEP).astype(int), 0, LN_T.size - 1)
        flat = np.bincount(field * LN_T.size + i, minlength=self.pdf.shape[1] * LN_T.size)
        some = np.flatnonzero(flat)
        return int(np.argmax(self._ln.reshape(len(self.places), -1)[:, some] @ flat[some]))

    def density(self, g, x, field):
        """Return the density of each event in its own field."""
        s, i = self._place(x)
        return (1 - s) * self.pdf[g][field, i] + s * self.pdf[g][field, i + 1]

    def shares(self, g, x, field):
        """Return the share of each event's own field below its t_E; evenly spread under the truth."""
        s, i = self._place(x)
        return np.clip((1 - s) * self.below[g][field, i] + s * self.below[g][field, i + 1], 0.0, 1.0)

    def draw(self, g, counts, rng):
        """Return observed ln t_E and fields of so many events of each field."""
        x, field = [], np.repeat(np.arange(len(counts)), counts)
        for f, n in enumerate(counts):
            if n:
                rising = np.concatenate([[True], np.diff(self.below[g][f]) > 0])
                x.append(np.interp(rng.random(n), self.below[g][f][rising], LN_T[rising]))
        return (np.concatenate(x) if x else np.zeros(0)), field

    def in_bins(self, g, edges):
        """Return the share of each field's events between edges of ln t_E, (F, m)."""
        return np.array([np.diff(np.interp(edges, LN_T, row)) for row in self.below[g]])

    def at_the_edge(self, g):
        """Return whether a shift or stretch is the farthest that is tried."""
        ends = self.places[[0, -1]]
        return len(self.places) > 1 and bool(np.any(self.places[g] == ends))

    @staticmethod
    def _place(x):
        place = np.clip((np.asarray(x) - LN_T[0]) / STEP, 0.0, LN_T.size - 1.001)
        i = place.astype(int)
        return place - i, i


class Parallaxes:
    """Distribution of pi_E given t_E, so that it is free of how timescales are selected.

    Parameters
    ----------
    folded : Folded
    """

    def __init__(self, folded):
        self._folded, self._kept = folded, {}

    def _joint(self, field):
        if field not in self._kept:
            t, y, density = self._folded.sightlines[field].joint("pi_E")
            y, total = np.log(np.asarray(y)), sum(np.asarray(d) for d in density.values())
            fine = np.linspace(y[0], y[-1], _FINE * (y.size - 1) + 1)
            self._kept[field] = np.log(np.asarray(t)), y, total, fine
        return self._kept[field]

    def given(self, field, x, sigma, value, error, vector):
        """Return the share of parallaxes below a measured one, and its density, given t_E.

        Parameters
        ----------
        field : int
        x, sigma : float
            ln t_E and its error.
        value, error : float
            Measured pi_E.
        vector : bool
            Whether `value` is the size of a vector of two measured components.

        Returns
        -------
        share, density : float
            The share is NaN where the forecast knows no event of this t_E.
        """
        t, y, joint, fine = self._joint(field)
        nodes = x + sigma * _NODES
        found = np.interp(nodes, LN_T, self._folded.efficiency[field]) * _WEIGHTS
        if not found.sum() > 0:
            found = _WEIGHTS
        place = np.clip((nodes - t[0]) / (t[1] - t[0]), 0, t.size - 1.001)
        i = place.astype(int)
        s = (place - i)[:, None]
        p = np.interp(fine, y, found @ ((1 - s) * joint[i] + s * joint[i + 1]))
        if not p.sum() > 0:
            return np.nan, 0.0
        p /= p.sum()
        size = np.exp(fine)
        below = ndtr((value - size) / error)
        near = np.exp(-0.5 * ((value - size) / error) ** 2) / (error * np.sqrt(2 * np.pi))
        low = size < _PLAIN * error
        if vector and low.any():
            a, b = value / error, size[low] / error
            below[low] = ncx2.cdf(a * a, 2, np.maximum(b * b, 1e-12))
            near[low] = a * np.exp(-0.5 * (a - b) ** 2) * i0e(a * b) / error
        return float(np.clip(p @ below, 0.0, 1.0)), float(p @ near)
