"""From the mass-free rate density to distributions of t_E, theta_E and pi_E: mass shifts, sums, quantiles.

On the isogrid (steps h in ln mu_rel and ln t_E, 2h in ln pi_rel and ln M) a mass moves every observable by whole cells:
ln t_E = (ln kappa M pi_rel) / 2 - ln mu_rel, ln theta_E = (ln kappa M pi_rel) / 2, ln pi_E = (ln pi_rel / kappa M) / 2.
"""

from dataclasses import dataclass
from functools import cached_property, lru_cache

import numpy as np

from ..kernels import rates as kernels
from ..units import DAYS_PER_YEAR, KAPPA

__all__ = ["MassGrid", "Quantiles", "joint", "timescale_grid", "timescales", "unit_timescales"]

_SMALL = 200_000  # multiplications that the libraries below numpy do in one thread: two would wait for each other


@dataclass(frozen=True)
class MassGrid:
    """Mass spectra laid on masses exp(2 h k), k0 <= k < k0 + n: number times sqrt(M) per stated Msun."""

    k0: int
    weight: np.ndarray  # (classes, elements, n)
    root: np.ndarray  # (classes, elements) sum of number sqrt(M), exact
    mass: np.ndarray  # (classes, elements) sum of number M, exact

    @classmethod
    def deposit(cls, h, spectra, bins=()):
        """Lay spectra down with 4-point Lagrange weights, which keep moments up to the third power of ln M.

        Parameters
        ----------
        h : float
            Step of ln t_E; masses are 2h apart in ln M.
        spectra : list of list of MassSpectrum or None
            [class][element]; None where a class does not ride on an element.
        bins : list of (int, int, ndarray (n,), ndarray (k, n))
            Class, first element, masses and numbers of elements beyond those of `spectra`.

        Returns
        -------
        MassGrid
        """
        known = len(spectra[0]) if spectra else 0
        shape = len(spectra), max([known, *(first + len(numbers) for _, first, _, numbers in bins)])
        root, mass = np.zeros(shape), np.zeros(shape)
        # components born alike share one array of masses: they are laid down together
        alike = {}
        for c, row in enumerate(spectra):
            for e, s in enumerate(row):
                if s is not None and s.mass.size:
                    masses, classes, elements, numbers = alike.setdefault(id(s.mass), (s.mass, [], [], []))
                    classes.append(c)
                    elements.append(e)
                    numbers.append(s.number)
        parts = [(masses, (c, e), np.array(numbers)) for masses, c, e, numbers in alike.values()]
        for c, first, masses, numbers in bins:
            if masses.size:
                parts.append((masses, (c, slice(first, first + len(numbers))), numbers))
        if not parts:
            return cls(0, np.zeros((*shape, 4)), root, mass)
        laid = [_lagrange(np.asarray(masses, dtype=float).tobytes(), h) for masses, _, _ in parts]
        k0 = min(first for _, _, first in laid)
        n = max(first + matrix.shape[1] for _, matrix, first in laid) - k0
        weight = np.zeros((*shape, n))
        for (masses, at, numbers), (roots, matrix, first) in zip(parts, laid):
            w = numbers * roots
            root[at], mass[at] = w.sum(axis=1), numbers @ masses
            weight[*at, first - k0 : first - k0 + matrix.shape[1]] = w @ matrix
        return cls(k0, weight, root, mass)


@lru_cache(maxsize=256)
def _lagrange(mass, h):
    """Square roots of masses (given as bytes), the matrix that spreads each over four grid masses, and its first k."""
    mass = np.frombuffer(mass)
    x = np.log(mass) / (2 * h)
    i = np.floor(x).astype(int)
    t = x - i
    parts = (
        -t * (t - 1) * (t - 2) / 6,
        (t + 1) * (t - 1) * (t - 2) / 2,
        -(t + 1) * t * (t - 2) / 2,
        (t + 1) * t * (t - 1) / 6,
    )
    first = int(i.min()) - 1
    matrix = np.zeros((mass.size, int(i.max()) + 3 - first))
    for j, a in enumerate(parts):
        matrix[np.arange(mass.size), i - 1 + j - first] = a
    return np.sqrt(mass), matrix, first


def timescale_grid(grid):
    """Return t_E [d] of 1 Msun lenses for each anti-diagonal of the isogrid, shape (P + K - 1,)."""
    P, K = grid.pi.size, grid.mu.size
    i = np.arange(P + K - 1) - (K - 1)
    return DAYS_PER_YEAR * np.sqrt(KAPPA * grid.pi[0]) / grid.mu[0] * np.exp(grid.h * i)


def unit_timescales(grid, T):
    """Return the rate per ln t_E of 1 Msun lenses by element, (E, P + K - 1), on `timescale_grid`."""
    out = np.empty((T.shape[0], grid.pi.size + grid.mu.size - 1))
    kernels.shear_timescale(T, grid.mu.size - 1, out)
    return out * 2 * grid.h


def timescales(grid, unit, masses, by_element=True):
    """Return t_E [d] (n,) and the rate per ln t_E by class (classes, n) and by element (E, n).

    Parameters
    ----------
    grid : Isogrid
        The grid of `unit`.
    unit : ndarray, shape (E, m)
        From `unit_timescales`.
    masses : MassGrid
        Mass spectra.
    by_element : bool
        Whether the distribution of each element is wanted too.

    Returns
    -------
    t_E, by_class, by_element : ndarray
        Days; events per source, year and unit ln t_E.
    """
    weight = masses.weight
    n, m = weight.shape[2], unit.shape[1]
    t = timescale_grid(grid)[0] * np.exp(grid.h * (np.arange(m + n - 1) + masses.k0))
    by_class, elements = np.zeros((weight.shape[0], t.size)), np.zeros((unit.shape[0] if by_element else 0, t.size))
    for c in range(weight.shape[0]):
        riding, shifts = (np.flatnonzero(np.any(weight[c], axis=axis)) for axis in (1, 0))
        if riding.size:
            rows, few = unit[riding], max(1, _SMALL // (riding.size * m))
            for some in (shifts[i : i + few] for i in range(0, shifts.size, few)):
                for k, row in zip(some, weight[c][np.ix_(riding, some)].T @ rows):
                    by_class[c, k : k + m] += row
    if by_element:
        together = weight.sum(axis=0)
        for k in range(n):
            elements[:, k : k + m] += together[:, k, None] * unit
    # positive but for the Lagrange weights' undershoot at sharp mass edges
    return t, np.maximum(by_class, 0.0), np.maximum(elements, 0.0)


def joint(grid, T, masses, which):
    """Return a two-dimensional rate density by class.

    Parameters
    ----------
    grid : Isogrid
        The grid of T.
    T : ndarray, shape (E, P, K)
        Mass-free rate density.
    masses : MassGrid
        Mass spectra.
    which : str
        "pi_E" for (t_E, pi_E), "theta_E" for (t_E, theta_E).

    Returns
    -------
    t_E, y, density : ndarray, (n,), (m,), (classes, n, m)
        Days, the other observable (pure number or mas), events per source, year, unit ln t_E and unit ln y.
    """
    P, K = grid.pi.size, grid.mu.size
    n = masses.weight.shape[2]
    n_t, n_y = P + K - 1 + n - 1, P + n - 1
    t = timescale_grid(grid)[0] * np.exp(grid.h * (np.arange(n_t) + masses.k0))
    out = np.empty((masses.weight.shape[0], n_y, n_t))
    kernels.shear_joint(np.ascontiguousarray(T), np.ascontiguousarray(masses.weight), K - 1, which == "pi_E", out)
    out = out.swapaxes(1, 2)
    if which == "theta_E":
        y = np.sqrt(KAPPA * grid.pi[0]) * np.exp(grid.h * (np.arange(n_y) + masses.k0))
    else:
        y = np.sqrt(grid.pi[0] / KAPPA) * np.exp(grid.h * (np.arange(n_y) - (n - 1) - masses.k0))
    # d ln pi d ln mu = 2 d ln t_E d ln y at fixed mass; where Lagrange weights undershoot, a class keeps its total rate
    total = out.sum(axis=(1, 2))
    out = np.maximum(out, 0.0)
    kept = out.sum(axis=(1, 2))
    out *= np.divide(2.0 * total, kept, out=np.zeros_like(kept), where=kept > 0)[:, None, None]
    return t, y, out


@lru_cache(maxsize=16)
def _refined(t, fine):
    """Step of the logarithm of even timescales (given as bytes), and both refined: ln t_E and t_E [d]."""
    x = np.log(np.frombuffer(t))
    h = x[1] - x[0]
    finer = np.append((x[:-1, None] + np.arange(fine) / fine * h).ravel(), x[-1])
    return h, finer, np.exp(finer)


class Quantiles:
    """Cumulative distribution of a rate per ln t_E, for quantiles, means and rates inside a range.

    Parameters
    ----------
    t : ndarray, shape (n,)
        t_E [d], uniform in the logarithm.
    pdf : ndarray, shape (n,)
        Rate per ln t_E.
    fine : int
        Refinement by cubic interpolation.
    """

    def __init__(self, t, pdf, fine=8):
        h, self._x, self._t = _refined(np.ascontiguousarray(t, dtype=float).tobytes(), fine)
        padded = np.concatenate([[0.0], pdf, [0.0]])
        slope = 0.5 * (padded[2:] - padded[:-2])
        s = np.arange(fine) / fine
        f0, f1, d0, d1 = pdf[:-1, None], pdf[1:, None], slope[:-1, None], slope[1:, None]
        f = f0 + s * (d0 + s * (3 * (f1 - f0) - 2 * d0 - d1 + s * (2 * (f0 - f1) + d0 + d1)))
        self._f = np.maximum(np.append(f.ravel(), pdf[-1]), 0.0)
        self._step = h / fine
        self._cum = self._summed(self._f)

    def _summed(self, f):
        return np.concatenate([[0.0], np.cumsum(0.5 * self._step * (f[1:] + f[:-1]))])

    @cached_property
    def _cum_t(self):
        return self._summed(self._t * self._f)

    def below(self, t):
        """Return the rate of events with a t_E below each of `t` [d], of its shape."""
        return np.interp(np.log(t), self._x, self._cum)

    def rate(self, low=None, high=None):
        """Return the rate between two timescales [d]."""
        a, b = self._range(low, high)
        return float(np.interp(b, self._x, self._cum) - np.interp(a, self._x, self._cum))

    def mean(self, low=None, high=None):
        """Return the mean t_E [d] between two timescales, NaN where there are no events."""
        a, b = self._range(low, high)
        rate = self.rate(low, high)
        return (
            float((np.interp(b, self._x, self._cum_t) - np.interp(a, self._x, self._cum_t)) / rate)
            if rate > 0
            else np.nan
        )

    def quantile(self, q, low=None, high=None):
        """Return t_E [d] below which the share q of the events lies, NaN where there are no events."""
        a, b = self._range(low, high)
        ca, cb = np.interp(a, self._x, self._cum), np.interp(b, self._x, self._cum)
        if not cb > ca:
            return np.nan
        # the cumulative may have flat ends: keep its rising part
        keep = np.concatenate([[True], np.diff(self._cum) > 0])
        return float(np.exp(np.interp(ca + q * (cb - ca), self._cum[keep], self._x[keep])))

    def _range(self, low, high):
        a = self._x[0] if low is None else np.log(max(low, 1e-300))
        b = self._x[-1] if high is None else np.log(high)
        return a, b
