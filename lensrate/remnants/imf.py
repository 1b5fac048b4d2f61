"""How many stars of each mass are born: broken power laws and log-normals, with their integrals in closed form."""

import math
from dataclasses import dataclass
from functools import cache, cached_property

import numpy as np
from scipy.special import erf

from ..datafiles import names, read_set
from ..errors import InputError, one_of
from .tables import check_keys, number, numbers

__all__ = ["Imf", "gauss_legendre"]

_KINDS = {"power": set(), "lognormal+power": {"median", "sigma_dex"}}


@cache
def gauss_legendre(n):
    """Return nodes and weights of the n-point Gauss-Legendre rule on (0, 1)."""
    x, w = np.polynomial.legendre.leggauss(n)
    return 0.5 * (x + 1), 0.5 * w


@dataclass(frozen=True)
class Imf:
    """Continuous initial mass function, normalised to one solar mass formed over its whole range.

    Parameters
    ----------
    name : str
        Published or own name.
    breaks : tuple of float
        Ends and joins of the segments, rising [Msun].
    slopes : tuple of float
        dN/dM goes as M^-slope, one for each segment that is a power law.
    references : tuple of str
        Papers.
    lognormal : (float, float), optional
        Median [Msun] and standard deviation [dex] of a log-normal dN/dlog M which takes the first segment;
        `slopes` then starts with the second.
    """

    name: str
    breaks: tuple
    slopes: tuple
    references: tuple = ()
    lognormal: tuple | None = None

    def __post_init__(self):
        for key in ("breaks", "slopes", "references"):
            object.__setattr__(self, key, tuple(getattr(self, key)))
        where = f"imf '{self.name}'"
        if len(self.breaks) < 2 or not all(math.isfinite(b) and b > 0 for b in self.breaks):
            raise InputError(f"{where}: breaks {self.breaks} given, at least two positive masses needed")
        if any(b <= a for a, b in zip(self.breaks, self.breaks[1:])):
            raise InputError(f"{where}: breaks {self.breaks} must rise")
        wanted = len(self.breaks) - 1 - (self.lognormal is not None)
        if len(self.slopes) != wanted or not all(math.isfinite(s) for s in self.slopes):
            raise InputError(
                f"{where}: {wanted} finite slopes needed for {len(self.breaks)} breaks, {self.slopes} given"
            )
        if self.lognormal is not None:
            object.__setattr__(self, "lognormal", tuple(self.lognormal))
            if len(self.lognormal) != 2 or not all(math.isfinite(x) and x > 0 for x in self.lognormal):
                raise InputError(f"{where}: lognormal {self.lognormal} given, must be a positive median and sigma_dex")

    @classmethod
    def read(cls, name):
        """Read a shipped function by name, or a user's ``.toml`` file of the same form.

        Parameters
        ----------
        name : str
            One of ``Imf.names()``, or a path.

        Returns
        -------
        Imf

        Raises
        ------
        InputError
            Unknown name or key, or numbers that make no mass function.
        """
        table, where = read_set("imf", name), f"imf '{name}'"
        check_keys(
            where,
            table,
            ["kind", "reference", "breaks", "slopes", "median", "sigma_dex"],
            ["kind", "reference", "breaks"],
        )
        kind = one_of(f"{where}.kind", table["kind"], _KINDS)
        check_keys(where, table, {"kind", "reference", "breaks", "slopes"} | _KINDS[kind], _KINDS[kind])
        shape = None
        if kind == "lognormal+power":
            shape = (number(where, table, "median", "Msun", low=0), number(where, table, "sigma_dex", "", low=0))
        slopes = numbers(where, table, "slopes", "") if "slopes" in table else ()
        return cls(str(name), numbers(where, table, "breaks", "Msun"), slopes, (table["reference"],), shape)

    @staticmethod
    def names():
        """Return the names of the shipped functions."""
        return names("imf")

    def between(self, m_lo, m_hi):
        """Return the same shape cut to [m_lo, m_hi] Msun and normalised anew.

        Raises
        ------
        InputError
            If nothing of the function lies there.
        """
        lo, hi = max(m_lo, self.breaks[0]), min(m_hi, self.breaks[-1])
        keep = [i for i in range(len(self.breaks) - 1) if self.breaks[i] < hi and self.breaks[i + 1] > lo]
        if not keep:
            raise InputError(
                f"imf '{self.name}': nothing between {m_lo:g} and {m_hi:g} Msun "
                f"(range {self.breaks[0]:g}-{self.breaks[-1]:g})"
            )
        inner = [self.breaks[i] for i in keep[1:]]
        shift = 0 if self.lognormal is None else 1
        return Imf(
            self.name,
            (lo, *inner, hi),
            [self.slopes[i - shift] for i in keep if i >= shift],
            self.references,
            self.lognormal if keep[0] < shift else None,
        )

    def _shape(self, segment, m):
        """Unnormalised dN/dM of one segment, equal to one at its lower end (power) or with unit factor (log-normal)."""
        if self.lognormal is None:
            return (m / self.breaks[segment]) ** -self.slopes[segment]
        if segment == 0:
            return np.exp(-0.5 * (np.log10(m / self.lognormal[0]) / self.lognormal[1]) ** 2) / m
        return (m / self.breaks[segment]) ** -self.slopes[segment - 1]

    def _primitive(self, segment, power, m):
        """Integral of M^power times the unnormalised segment, up to a constant."""
        if self.lognormal is not None and segment == 0:
            s, centre = self.lognormal[1] * math.log(10), math.log(self.lognormal[0])
            scale = math.exp(power * centre + 0.5 * (power * s) ** 2) * s * math.sqrt(0.5 * math.pi)
            return scale * erf((np.log(m) - centre - power * s * s) / (s * math.sqrt(2)))
        slope = self.slopes[segment - (self.lognormal is not None)]
        start, k = self.breaks[segment], power + 1 - slope
        grown = np.log(m / start) if abs(k) < 1e-12 else np.expm1(k * np.log(m / start)) / k
        return start ** (power + 1) * grown

    @cached_property
    def _factors(self):
        """Factor of every segment, so that they join and one solar mass is formed."""
        factors = [1.0]
        for i in range(1, len(self.breaks) - 1):
            factors.append(factors[-1] * self._shape(i - 1, self.breaks[i]) / self._shape(i, self.breaks[i]))
        formed = sum(
            f * (self._primitive(i, 1, self.breaks[i + 1]) - self._primitive(i, 1, self.breaks[i]))
            for i, f in enumerate(factors)
        )
        return tuple(f / formed for f in factors)

    def moment(self, power, m_lo, m_hi):
        """Return the integral of M^power dN between two masses, per solar mass formed.

        Parameters
        ----------
        power : float
            0 for numbers, 1 for mass.
        m_lo, m_hi : float or ndarray
            Limits [Msun]; what lies outside the function's range adds nothing.

        Returns
        -------
        ndarray or float
            [Msun^(power-1)]
        """
        return self._below(power, m_hi) - self._below(power, m_lo)

    def _below(self, power, m):
        m, total = np.asarray(m, dtype=float), 0.0
        for i, factor in enumerate(self._factors):
            end = np.clip(m, self.breaks[i], self.breaks[i + 1])
            total = total + factor * (self._primitive(i, power, end) - self._primitive(i, power, self.breaks[i]))
        return total

    def number(self, m_lo, m_hi):
        """Return the stars born between two masses per solar mass formed [1/Msun]; limits as for `moment`."""
        return self.moment(0, m_lo, m_hi)

    def mass(self, m_lo, m_hi):
        """Return the share of the mass formed that goes into stars between two masses; limits as for `moment`."""
        return self.moment(1, m_lo, m_hi)

    def density(self, m):
        """Return dN/dM per solar mass formed [1/Msun^2], zero outside the range; `m` a float or array [Msun]."""
        m = np.asarray(m, dtype=float)
        segment = np.clip(np.searchsorted(self.breaks, m, side="right") - 1, 0, len(self._factors) - 1)
        inside = (m >= self.breaks[0]) & (m <= self.breaks[-1])
        safe = np.where(inside, m, self.breaks[0])
        values = np.zeros(m.shape)
        for i, factor in enumerate(self._factors):
            values = np.where(segment == i, factor * self._shape(i, safe), values)
        return np.where(inside, values, 0.0)

    def nodes(self, edges, n):
        """Return masses and numbers of a Gauss-Legendre rule in ln M on every piece between edges and breaks.

        Parameters
        ----------
        edges : array_like, shape (k,)
            Where an integrand may jump or bend; the first and last bound the rule [Msun].
        n : int
            Nodes in each piece.

        Returns
        -------
        m, dn : ndarray, shape (pieces * n,)
            Masses [Msun] and stars born per solar mass formed that each stands for [1/Msun].
        """
        lo, hi = max(min(edges), self.breaks[0]), min(max(edges), self.breaks[-1])
        if hi <= lo:
            return np.zeros(0), np.zeros(0)
        inner = [x for x in (*edges, *self.breaks) if lo < x < hi]
        x = np.log(np.unique([lo, *inner, hi]))
        t, w = gauss_legendre(n)
        width = np.diff(x)[:, None]
        m = np.exp(x[:-1, None] + width * t).ravel()
        return m, (width * w).ravel() * m * self.density(m)
