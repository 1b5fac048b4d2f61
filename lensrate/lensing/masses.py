"""Mass spectra on an even grid in ln M, and which elements of a model always enter together."""

from dataclasses import dataclass

import numpy as np
from scipy.interpolate import CubicSpline, PchipInterpolator

__all__ = ["ClassMasses", "bases_of", "fine_masses"]

_STEP = 0.02 * np.log(10.0)
_DISCRETE = 4  # a spectrum of fewer nodes is one of so many masses
_NOTHING = 1e-9  # share of a class's rate below which a mass node is dropped
_SAME = 1e-6
_BELL = 0.02  # both ends of a spectrum below this share of its peak: it fades out
_RARE = 3e-5  # share of a class below which a kick bin is left out


@dataclass(frozen=True, eq=False)
class ClassMasses:
    """One class of lenses: its masses and how many of each ride on each base.

    Attributes
    ----------
    name : str
    bases : ndarray of int, shape (n,)
    ln_M : ndarray, shape (J,)
        Centres of mass bins, or single masses.
    width : ndarray, shape (J,)
        Of the bins in ln M, 0 for a single mass.
    number : ndarray, shape (J, n)
        Lenses in each bin, per stated Msun of the base.
    """

    name: str
    bases: np.ndarray
    ln_M: np.ndarray
    width: np.ndarray
    number: np.ndarray


def bases_of(model):
    """Group the elements of a model into bases: each Galactic component; kick bins with proportional mass spectra.

    Parameters
    ----------
    model : Model

    Returns
    -------
    list of list of (int, float)
        Elements of each base with their factors.
    spectra : dict of str to list of (int, ndarray, ndarray)
        For each class: base, masses and numbers per unit of the base.
    """
    m = model.n_stellar
    bases = [[(i, 1.0)] for i in range(m)]
    spectra = {}
    for name in model.classes:
        rows, groups = [], []
        for e in range(len(model.component_of)):
            s = model.spectrum(name, e)
            if s is None or not s.mass.size or not s.number.sum() > 0:
                continue
            if e < m:
                rows.append((e, s.mass, s.number))
                continue
            total = s.number.sum()
            shape = s.number / total
            for group in groups:
                mass, other, members = group
                if mass.size == s.mass.size and np.allclose(mass, s.mass, rtol=_SAME):
                    if np.allclose(other, shape, rtol=_SAME, atol=_SAME * shape.max()):
                        members.append((e, float(total)))
                        break
            else:
                groups.append((s.mass, shape, [(e, float(total))]))
        number = sum(f for *_, members in groups for _, f in members)
        for mass, shape, members in groups:
            if sum(f for _, f in members) < _RARE * number:
                continue
            rows.append((len(bases), mass, shape))
            bases.append(members)
        spectra[name] = rows
    return bases, spectra


def fine_masses(name, rows):
    """Lay the spectra of one class on an even grid in ln M.

    Parameters
    ----------
    name : str
        Name of the class.
    rows : list of (int, ndarray, ndarray)
        Base, masses, numbers; from `bases_of`.

    Returns
    -------
    ClassMasses

    Notes
    -----
    The cumulative number at a node is that of all nodes below and half its own, as for a Gauss rule; between nodes it
    is a monotone cubic (Fritsch & Butland 1984) in ln M, so numbers are kept exactly. For a
    spectrum that fades out at both ends see `_Bell`.
    """
    bases = np.array([b for b, _, _ in rows], dtype=np.int64)
    smooth = [k for k, (_, mass, _) in enumerate(rows) if mass.size >= _DISCRETE]
    ln_M, width, number = [], [], []
    if smooth:
        curves = {k: _cumulative(rows[k][1], rows[k][2]) for k in smooth}
        low = min(c.x[0] for c in curves.values())
        high = max(c.x[-1] for c in curves.values())
        edges = np.arange(np.floor(low / _STEP), np.ceil(high / _STEP) + 1) * _STEP
        block = np.zeros((edges.size - 1, len(rows)))
        for k, curve in curves.items():
            block[:, k] = np.diff(curve(np.clip(edges, curve.x[0], curve.x[-1])))
        number.append(np.maximum(block, 0.0))
        ln_M.append(0.5 * (edges[1:] + edges[:-1]))
        width.append(np.full(edges.size - 1, _STEP))
    single = {}
    for k, (_, mass, n) in enumerate(rows):
        if k in smooth:
            continue
        for x, y in zip(np.log(mass), n):
            key = round(float(x), 6)
            single.setdefault(key, np.zeros(len(rows)))[k] += y
    if single:
        ln_M.append(np.array(list(single)))
        width.append(np.zeros(len(single)))
        number.append(np.array(list(single.values())))
    if not ln_M:
        empty = np.zeros(0)
        return ClassMasses(name, bases, empty, empty, np.zeros((0, bases.size)))
    ln_M, width, number = np.concatenate(ln_M), np.concatenate(width), np.concatenate(number)
    weight = number.sum(axis=1) * np.exp(0.5 * ln_M)
    keep = weight > _NOTHING * weight.sum()
    return ClassMasses(name, bases, ln_M[keep], width[keep], np.ascontiguousarray(number[keep]))


class _Bell:
    """Cumulative number of a spectrum that fades out at both ends.

    The logarithm of its density, number over spacing of the nodes, is a cubic spline in mass, so a Gaussian stays one;
    a factor quadratic in the exponent gives it back its number, mean and variance.
    """

    def __init__(self, mass, number):
        spacing = np.gradient(mass)
        curve = CubicSpline(mass, np.log(number / spacing))
        reach = spacing[0], spacing[-1]
        m = np.linspace(max(mass[0] - reach[0], 0.3 * mass[0]), mass[-1] + reach[1], 4000)
        inside = np.clip(m, mass[0], mass[-1])
        # straight beyond the last nodes
        ln = curve(inside) + curve(inside, 1) * (m - inside)
        total = number.sum()
        mean = number @ mass / total
        sigma = np.sqrt(number @ (mass - mean) ** 2 / total)
        z, wanted = (m - mean) / sigma, np.array([total, 0.0, total])
        powers = np.array([np.ones(m.size), z, z * z])
        for _ in range(20):
            f = np.exp(ln) * (m[1] - m[0])
            found = powers @ f
            step = np.linalg.solve((powers * f) @ powers.T, wanted - found)
            ln = ln + np.clip(step, -0.5, 0.5) @ powers
            if np.abs(step).max() < 1e-10:
                break
        self.x = np.log(m)
        self.sum = np.concatenate([[0.0], np.cumsum(0.5 * (np.exp(ln[1:]) + np.exp(ln[:-1])) * (m[1] - m[0]))])

    def __call__(self, x):
        return np.interp(x, self.x, self.sum)


def _cumulative(mass, number):
    order = np.argsort(mass)
    x, n = np.log(mass[order]), number[order]
    some = n > 0
    x, n = x[some], n[some]
    if n.size > 4 and max(n[0], n[-1]) < _BELL * n.max():
        return _Bell(np.exp(x), n)
    middle = np.cumsum(n) - 0.5 * n
    # the ends of the spectrum lie beyond the first and last node, as far as their own halves reach
    first = x[0] - min(0.5 * n[0] * (x[1] - x[0]) / (0.5 * (n[0] + n[1])), x[1] - x[0])
    last = x[-1] + min(0.5 * n[-1] * (x[-1] - x[-2]) / (0.5 * (n[-1] + n[-2])), x[-1] - x[-2])
    return PchipInterpolator(
        np.concatenate([[first], x, [last]]), np.concatenate([[0.0], middle, [n.sum()]]), extrapolate=False
    )
