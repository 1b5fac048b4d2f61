"""Natal-kick speed laws: Maxwellians, log-normals and published sets, with density, shares and samples."""

import math
from dataclasses import dataclass, replace
from typing import NamedTuple

import numpy as np
from scipy.special import gammainc, gammaincc, gammaincinv, ndtr, ndtri

from ..datafiles import names, read_set
from ..errors import InputError, did_you_mean, one_of
from .tables import check_keys, number

__all__ = ["BinWeights", "KickLaw", "parse_kick"]

#: explicit forms and the numbers that follow the colon
FORMS = {
    "maxwell": ("SIGMA",),
    "two-maxwell": ("SIGMA1", "SIGMA2", "WEIGHT1"),
    "lognormal": ("MU", "SIGMA"),
    "fixed": ("SPEED",),
    "none": (),
}
_MEAN_TO_SIGMA = math.sqrt(math.pi / 8)
_NARROWEST = 1e-6  # of a width, in km/s or of a logarithm: less is a fixed speed
_FASTEST = 1e5  # km/s; a slip of units rather than a kick


class BinWeights(NamedTuple):
    """Shares `unkicked`, `inside` each bin (ndarray, shape (n,)) and `above` the last edge; they sum to one."""

    unkicked: float
    inside: np.ndarray
    above: float


@dataclass(frozen=True)
class KickLaw:
    """Distribution of kick speeds, directions being isotropic.

    Parameters
    ----------
    name : str
        Published name, or the text.
    text : str
        What `parse_kick` reads back as the same law.
    kind : str
        "maxwell" (one or more summed), "lognormal", "fixed" or "none".
    values : tuple of float
        Sigmas of the Maxwellians [km/s]; mean and standard deviation of ln(v / km/s); the speed [km/s]; nothing.
    weights : tuple of float
        Shares of the Maxwellians.
    references : tuple of str
        Papers.
    """

    name: str
    text: str
    kind: str
    values: tuple
    weights: tuple = ()
    references: tuple = ()

    def pdf(self, v):
        """Return the density [1/(km/s)] at speeds `v` [km/s].

        Raises
        ------
        InputError
            For `fixed` and `none`, which have all their kicks at one speed.
        """
        v = np.asarray(v, dtype=float)
        if self.kind == "maxwell":
            total = np.zeros(v.shape)
            for sigma, weight in zip(self.values, self.weights):
                x = np.maximum(v, 0) / sigma
                total = total + weight * math.sqrt(2 / math.pi) / sigma * x**2 * np.exp(-0.5 * x**2)
            return total
        if self.kind == "lognormal":
            mu, sigma = self.values
            x = (np.log(np.where(v > 0, v, 1.0)) - mu) / sigma
            return np.where(
                v > 0, np.exp(-0.5 * x**2) / (math.sqrt(2 * math.pi) * sigma * np.where(v > 0, v, 1.0)), 0.0
            )
        raise InputError(f"kicks '{self.text}': one speed has no density; use cdf or bin_weights")

    def cdf(self, v):
        """Return the share of kicks not faster than `v` [km/s], float or array."""
        v = np.asarray(v, dtype=float)
        if self.kind == "maxwell":
            return sum(w * gammainc(1.5, 0.5 * (np.maximum(v, 0) / s) ** 2) for s, w in zip(self.values, self.weights))
        if self.kind == "lognormal":
            return np.where(v > 0, ndtr((np.log(np.where(v > 0, v, 1.0)) - self.values[0]) / self.values[1]), 0.0)
        return np.where(v >= self._speed, 1.0, 0.0)

    def above(self, v):
        """Return the share of kicks faster than `v` [km/s], to full precision in the tail."""
        if self.kind == "maxwell":
            return float(sum(w * gammaincc(1.5, 0.5 * (max(v, 0) / s) ** 2) for s, w in zip(self.values, self.weights)))
        if self.kind == "lognormal":
            return float(ndtr((self.values[0] - math.log(v)) / self.values[1])) if v > 0 else 1.0
        return float(self._speed > v)

    @property
    def _speed(self):
        return self.values[0] if self.kind == "fixed" else 0.0

    def quantile(self, p):
        """Return the speed [km/s] not exceeded by the share `p` (float or array, 0-1): the inverse of `cdf`."""
        p = np.asarray(p, dtype=float)
        if np.any(~((p >= 0) & (p <= 1))):
            raise InputError("p: shares must lie within 0-1")
        if self.kind == "lognormal":
            return np.exp(self.values[0] + self.values[1] * ndtri(p))
        if self.kind != "maxwell":
            return np.full(p.shape, self._speed)
        one = np.sqrt(2 * gammaincinv(1.5, p))
        if len(self.values) == 1 or not np.any((p > 0) & (p < 1)):
            return one * max(self.values)
        lo, hi = one * min(self.values), one * max(self.values)
        finite = np.isfinite(one)
        lo, hi = np.where(finite, lo, 0.0), np.where(finite, hi, 0.0)
        for _ in range(60):  # halves the bracket to the last digit
            middle = 0.5 * (lo + hi)
            below = self.cdf(middle) < p
            lo, hi = np.where(below, middle, lo), np.where(below, hi, middle)
        return np.where(finite, hi, np.inf)

    def mean(self):
        """Return the mean speed [km/s]."""
        if self.kind == "maxwell":
            return sum(w * s for s, w in zip(self.values, self.weights)) / _MEAN_TO_SIGMA
        if self.kind == "lognormal":
            return math.exp(self.values[0] + 0.5 * self.values[1] ** 2)
        return self._speed

    def median(self):
        """Return the median speed [km/s]."""
        return float(self.quantile(0.5))

    def sample(self, n, rng):
        """Draw `n` speeds [km/s] from a numpy Generator; ndarray, shape (n,)."""
        if self.kind == "maxwell":
            which = np.searchsorted(np.cumsum(self.weights)[:-1], rng.random(n), side="right")
            return np.array(self.values)[which] * np.linalg.norm(rng.standard_normal((n, 3)), axis=1)
        if self.kind == "lognormal":
            return np.exp(self.values[0] + self.values[1] * rng.standard_normal(n))
        return np.full(n, self._speed)

    def bin_weights(self, edges):
        """Return the shares of kicks in bins of speed.

        A fixed speed is shared between the two bins whose middles enclose it (below the first middle with the unkicked
        objects, beyond the last middle all in the last bin), so that the mean speed is kept.

        Parameters
        ----------
        edges : array_like, shape (n + 1,)
            Rising, from 0 or more [km/s].

        Returns
        -------
        BinWeights
            ``unkicked`` is 1 for `none` and also takes kicks below a first edge above 0.
        """
        edges = np.asarray(edges, dtype=float)
        if edges.ndim != 1 or edges.size < 2 or edges[0] < 0 or not np.all(np.diff(edges) > 0):
            raise InputError("edges: two or more rising speeds from 0 km/s up are needed")
        inside = np.zeros(edges.size - 1)
        if self._speed == 0 and self.kind in ("fixed", "none"):
            return BinWeights(1.0, inside, 0.0)
        if self.kind == "fixed":
            if self._speed > edges[-1]:
                return BinWeights(0.0, inside, 1.0)
            places = np.concatenate([[0.0], 0.5 * (edges[1:] + edges[:-1])])
            i = min(int(np.searchsorted(places, self._speed)), places.size - 1)
            share = min(1.0, (self._speed - places[i - 1]) / (places[i] - places[i - 1]))
            all_bins = np.zeros(places.size)
            all_bins[i - 1], all_bins[i] = 1 - share, share
            return BinWeights(float(all_bins[0]), all_bins[1:], 0.0)
        share = self.cdf(edges)
        return BinWeights(float(share[0]), np.diff(share), self.above(float(edges[-1])))

    def scaled(self, factor):
        """Return the law of speeds times `factor`, as for equal momenta with factor M_NS / M_BH.

        Raises
        ------
        InputError
            `factor` not a positive finite number.
        """
        if not (math.isfinite(factor) and factor > 0):
            raise InputError(f"factor: {factor} given, must be a positive number")
        if factor == 1 or self.kind == "none":
            return self
        if self.kind == "lognormal":
            values = (self.values[0] + math.log(factor), self.values[1])
        else:
            values = tuple(v * factor for v in self.values)
        law = replace(self, values=values)
        return replace(law, name=f"{self.name} times {factor:.4g}", text=_explicit(law))


def _explicit(law):
    """The explicit form that reads back as the same law."""
    values = law.values
    form = law.kind
    if form == "maxwell" and len(values) == 2:
        form, values = "two-maxwell", (*values, law.weights[0])
    return form + (":" + ",".join(repr(float(v)) for v in values) if values else "")


def parse_kick(text):
    """Read a kick law from its text.

    Parameters
    ----------
    text : str
        ``maxwell:SIGMA``, ``two-maxwell:SIGMA1,SIGMA2,WEIGHT1``, ``lognormal:MU,SIGMA`` (of ln v), ``fixed:SPEED``
        (km/s), ``none``, a published set's name such as ``hobbs2005``, or a user's ``.toml`` file.

    Returns
    -------
    KickLaw

    Raises
    ------
    InputError
        Unknown word (with the nearest known one), wrong count of numbers, or impossible values.
    """
    if isinstance(text, KickLaw):
        return text
    text = str(text).strip()
    if text.endswith(".toml") or (":" not in text and text in names("kicks")):
        return _published(text)
    form, _, rest = text.partition(":")
    if form not in FORMS:
        known = [*FORMS, *names("kicks")]
        raise InputError(f"kicks: '{form}' is not known{did_you_mean(form, known)} (known: {', '.join(known)})")
    wanted = FORMS[form]
    given = rest.split(",") if rest else []
    usage = form + (":" + ",".join(wanted) if wanted else "")
    if len(given) != len(wanted):
        raise InputError(f"kicks: '{text}' has {len(given)} numbers, '{usage}' is needed (speeds in km/s)")
    try:
        values = tuple(float(g) for g in given)
    except ValueError:
        raise InputError(f"kicks: '{text}' holds something that is not a number, '{usage}' is needed") from None
    return _law(text, text, form, values, ())


def _law(name, text, form, values, references):
    """Check the numbers and build the record."""
    for key, value in zip(FORMS[form], values):
        low = {"SPEED": 0.0, "MU": -20.0, "WEIGHT1": 0.0}.get(key, 0.0)
        high = {"MU": math.log(_FASTEST), "WEIGHT1": 1.0}.get(key, 20.0 if form == "lognormal" else _FASTEST)
        if key.startswith("SIGMA"):
            low = _NARROWEST
        if not (math.isfinite(value) and low <= value <= high):
            raise InputError(f"kicks: '{text}': {key} is {value:g}, must be at least {low:g} and at most {high:g}")
    if form == "two-maxwell":
        return KickLaw(name, text, "maxwell", values[:2], (values[2], 1 - values[2]), references)
    weights = (1.0,) if form == "maxwell" else ()
    return KickLaw(name, text, form, values, weights, references)


def _published(name):
    table, where = read_set("kicks", name), f"kicks '{name}'"
    check_keys(where, table, ["reference", "sample", "law", *_FILE_KEYS], ["reference", "law"])
    form = one_of(f"{where}.law", table["law"], FORMS)
    values = []
    for key, unit in _IN_FILE[form].items():
        mean = key.replace("sigma", "mean")
        if unit and mean != key and mean in table:
            values.append(number(where, table, mean, unit) * _MEAN_TO_SIGMA)
        else:
            values.append(number(where, table, key, unit))
    return _law(str(name), str(name), form, tuple(values), (table["reference"],))


_IN_FILE = {
    "maxwell": {"sigma": "km/s"},
    "two-maxwell": {"sigma_1": "km/s", "sigma_2": "km/s", "weight_1": ""},
    "lognormal": {"mu": "", "sigma": ""},
    "fixed": {"speed": "km/s"},
    "none": {},
}
_FILE_KEYS = sorted({k for keys in _IN_FILE.values() for k in keys} | {"mean", "mean_1", "mean_2"})
