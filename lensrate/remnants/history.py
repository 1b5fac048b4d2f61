"""When a component's stars were born: one burst, or a star-formation rate exponential in age."""

import math
from dataclasses import dataclass

import numpy as np

from ..errors import InputError
from .imf import gauss_legendre

__all__ = ["History"]


@dataclass(frozen=True)
class History:
    """Star formation between two ages at a rate going as exp(age / efold); a burst where both ages agree.

    Parameters
    ----------
    age_lo, age_hi : float
        Youngest and oldest stars [Gyr].
    efold : float
        Positive: more in the past; infinite: constant; negative: more now [Gyr].
    """

    age_lo: float
    age_hi: float
    efold: float = math.inf

    def __post_init__(self):
        for key in ("age_lo", "age_hi", "efold"):
            value = getattr(self, key)
            if (
                isinstance(value, bool)
                or not isinstance(value, (int, float, np.floating, np.integer))
                or math.isnan(value)
            ):
                raise InputError(f"history.{key}: {value!r} is not a number of Gyr")
            object.__setattr__(self, key, float(value))
        if not 0 <= self.age_lo <= self.age_hi <= 20:
            raise InputError(f"history: ages {self.age_lo:g} to {self.age_hi:g} Gyr given, must rise within 0-20 Gyr")
        if self.age_hi == 0:
            raise InputError(
                "history: a burst of age 0 Gyr has no dead stars and no living population; give an age above 0"
            )
        if self.efold == 0:
            raise InputError("history.efold: 0 Gyr given, must not be 0 (inf for a constant rate)")

    def fraction_younger(self, age):
        """Return the share of stars born younger than `age` [Gyr], float or array."""
        age = np.asarray(age, dtype=float)
        span = self.age_hi - self.age_lo
        if span == 0:
            return np.where(age > self.age_lo, 1.0, 0.0)
        x = np.clip(age - self.age_lo, 0, span)
        if math.isinf(self.efold):
            return x / span
        if self.efold < 0:
            return np.expm1(x / self.efold) / math.expm1(span / self.efold)
        # the same, written so that a short efold does not overflow
        return np.exp((x - span) / self.efold) * np.expm1(-x / self.efold) / math.expm1(-span / self.efold)

    def age_at(self, fraction):
        """Return the age [Gyr] below which a share of the stars lies: the inverse of `fraction_younger`."""
        p, span = np.asarray(fraction, dtype=float), self.age_hi - self.age_lo
        if span == 0 or math.isinf(self.efold):
            return self.age_lo + p * span
        if self.efold < 0:
            return self.age_lo + self.efold * np.log1p(p * math.expm1(span / self.efold))
        floor = math.exp(-span / self.efold)
        with np.errstate(divide="ignore"):
            return self.age_lo + np.maximum(0, span + self.efold * np.log(floor + p * (1 - floor)))

    def nodes(self, n):
        """Return ages [Gyr] and weights that sum to one; a burst has a single node.

        The rule is Gauss-Legendre in the share of stars born, so that any efold is followed.
        """
        if self.age_lo == self.age_hi:
            return np.array([self.age_lo]), np.ones(1)
        p, w = gauss_legendre(n)
        return self.age_at(p), w.copy()
