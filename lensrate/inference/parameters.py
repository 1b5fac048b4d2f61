"""Parameters that a sample may constrain, and priors: stated, checked, drawn from."""

import math
from dataclasses import dataclass

import numpy as np
from scipy.special import ndtr, ndtri

from ..errors import InputError, did_you_mean, one_of

__all__ = ["BINS", "PARAMETERS", "Parameter", "Prior", "bin_parameters", "from_shares", "parse_parameters"]

#: what can be asked for: meaning, prior where none is given
PARAMETERS = {
    "kick_scale": ("factor on the speeds of the neutron stars' kick law", "log-uniform:0.2,5"),
    "slow_weight": ("share of the slow component of a two-component kick law", "uniform:0,1"),
    "neutron_stars": ("number of neutron stars over the scenario's", "log-uniform:0.05,20"),
    "black_holes": ("number of black holes over the scenario's", "log-uniform:0.05,20"),
    "remnant_mass": ("masses of neutron stars and black holes over the scenario's", "log-uniform:0.6,1.7"),
}
#: free shares of the kick bins: many parameters under one name
BINS = "kick_bins"
#: where they are defined, if not from 0 on; masses as far as `likelihood` tabulates them
_POSSIBLE = {"slow_weight": (0.0, 1.0), "remnant_mass": (0.5, 2.0)}
_FORMS = {"uniform": ("LOW", "HIGH"), "log-uniform": ("LOW", "HIGH"), "normal": ("MEAN", "SIGMA"),
          "lognormal": ("MEDIAN", "DEX")}  # fmt: skip
_EDGE = 1e-9
_REACH = 4.0  # standard deviations of a normal prior that a grid spans


@dataclass(frozen=True)
class Prior:
    """Prior of one parameter.

    Attributes
    ----------
    kind : str
        "uniform", "log-uniform", "normal" or "lognormal" (median, width in dex).
    a, b : float
        Its two numbers.
    low, high : float
        What is possible at all; normal priors are cut there.
    """

    kind: str
    a: float
    b: float
    low: float = -np.inf
    high: float = np.inf

    @classmethod
    def parse(cls, text, low=-np.inf, high=np.inf, what="prior"):
        """Read ``uniform:LOW,HIGH``, ``log-uniform:LOW,HIGH``, ``normal:MEAN,SIGMA`` or ``lognormal:MEDIAN,DEX``.

        Raises
        ------
        InputError
            Unknown form, wrong numbers, or a prior that allows nothing possible.
        """
        kind, _, rest = str(text).partition(":")
        one_of(what, kind, _FORMS)
        usage = f"{kind}:{','.join(_FORMS[kind])}"
        try:
            a, b = (float(x) for x in rest.split(","))
        except ValueError:
            raise InputError(f"{what}: '{text}' is not understood; write {usage}") from None
        if not (math.isfinite(a) and math.isfinite(b)):
            raise InputError(f"{what}: '{text}': finite numbers are needed, {usage}")
        if "uniform" in kind:
            if not a < b:
                raise InputError(f"{what}: '{text}': {a:g} must be below {b:g}")
            if kind == "log-uniform" and a <= 0:
                raise InputError(f"{what}: '{text}': a log-uniform prior begins above 0")
            if a < low or b > high:
                raise InputError(f"{what}: '{text}' reaches outside {low:g} to {high:g}, where it is defined")
        elif not b > 0 or (kind == "lognormal" and not a > 0):
            raise InputError(f"{what}: '{text}': {usage} needs a width above 0 and a median above 0")
        out = cls(kind, a, b, low, high)
        if not out._mass > 0:
            raise InputError(f"{what}: '{text}' allows nothing between {low:g} and {high:g}")
        return out

    @property
    def text(self):
        """What `parse` reads back."""
        return f"{self.kind}:{self.a:g},{self.b:g}"

    @property
    def logarithmic(self):
        """Whether it is a prior of the logarithm."""
        return self.kind.startswith("log")

    @property
    def _cut(self):
        """Shares of an uncut normal below the two limits."""
        if self.kind == "normal":
            return tuple(float(ndtr((x - self.a) / self.b)) for x in (self.low, self.high))
        width = self.b * math.log(10)
        ends = (math.log(max(x, 1e-300)) if x < np.inf else np.inf for x in (self.low, self.high))
        return tuple(float(ndtr((x - math.log(self.a)) / width)) for x in ends)

    @property
    def _mass(self):
        return 1.0 if "uniform" in self.kind else self._cut[1] - self._cut[0]

    def quantile(self, share):
        """Return values below which shares of the prior lie."""
        share = np.asarray(share, dtype=float)
        if self.kind == "uniform":
            return self.a + (self.b - self.a) * share
        if self.kind == "log-uniform":
            return self.a * (self.b / self.a) ** share
        low, high = self._cut
        z = ndtri(np.clip(low + (high - low) * share, 1e-300, 1 - 1e-16))
        return self.a + self.b * z if self.kind == "normal" else self.a * 10 ** (self.b * z)

    def share(self, value):
        """Return the share of the prior below values, the inverse of `quantile`."""
        value = np.asarray(value, dtype=float)
        if self.kind == "uniform":
            return np.clip((value - self.a) / (self.b - self.a), 0, 1)
        positive = np.log(np.maximum(value, 1e-300))
        if self.kind == "log-uniform":
            return np.clip((positive - math.log(self.a)) / math.log(self.b / self.a), 0, 1)
        low, high = self._cut
        if self.kind == "normal":
            z = (value - self.a) / self.b
        else:
            z = (positive - math.log(self.a)) / (self.b * math.log(10))
        return np.clip((ndtr(z) - low) / (high - low), 0, 1)

    def grid(self, n):
        """Return n values over the prior, with their prior weights (summing to one)."""
        if "uniform" in self.kind:
            edges = np.linspace(0, 1, n + 1)
            return self.quantile(0.5 * (edges[1:] + edges[:-1])), np.full(n, 1.0 / n)
        ends = self.share(self.quantile([ndtr(-_REACH), ndtr(_REACH)]))
        edges = self.quantile(ends)
        inner = np.geomspace(*edges, n + 1) if self.kind == "lognormal" else np.linspace(*edges, n + 1)
        middle = np.sqrt(inner[1:] * inner[:-1]) if self.kind == "lognormal" else 0.5 * (inner[1:] + inner[:-1])
        weight = np.diff(self.share(inner))
        return middle, weight / weight.sum()


@dataclass(frozen=True)
class Parameter:
    """A parameter, what it means, and its prior."""

    name: str
    meaning: str
    prior: Prior


def parse_parameters(names, priors=(), own=()):
    """Return the parameters asked for.

    Parameters
    ----------
    names : list of str
        Of `PARAMETERS`, or ``class:NAME`` for the amount of a lens class of the user's own.
    priors : sequence of str
        ``NAME=FORM:A,B`` for those whose prior is not the default.
    own : sequence of str
        Names of the scenario's own lens classes.

    Returns
    -------
    tuple of Parameter

    Raises
    ------
    InputError
        Unknown name (with the nearest known one), one given twice, a prior of something else, or an impossible one.
    """
    known = [*PARAMETERS, BINS, *(f"class:{name}" for name in own)]
    if not names:
        raise InputError(f"parameters: none given (known: {', '.join(known)})")
    given = {}
    for item in priors:
        name, equals, text = str(item).partition("=")
        if not equals:
            raise InputError(
                f"prior: '{item}' is not understood; write NAME=FORM:A,B, for example kick_scale=log-uniform:0.3,3"
            )
        if name not in names:
            near = did_you_mean(name, names)
            raise InputError(f"prior: '{name}' is none of the parameters asked for{near} ({', '.join(names)})")
        given[name] = text
    out = []
    for name in names:
        one_of("parameter", name, known)
        if any(p.name == name for p in out):
            raise InputError(f"parameter: '{name}' is given twice")
        if name == BINS:
            if {"kick_scale", "slow_weight"} & set(names) or name in given:
                raise InputError(f"parameter: {BINS} takes no prior of its own, and no other parameter of the kick law")
            continue
        if name in PARAMETERS:
            meaning, default = PARAMETERS[name]
        else:
            meaning, default = f"amount of {name[6:]} over the scenario's", "uniform:0,10"
        low, high = _POSSIBLE.get(name, (0.0, np.inf))
        out.append(Parameter(name, meaning, Prior.parse(given.get(name, default), low, high, f"prior of {name}")))
    return tuple(out)


def bin_parameters(edges):
    """Return a parameter for each kick bin: a change of the ln of its share among neutron stars, smooth over bins.

    Parameters
    ----------
    edges : ndarray
        Of the bins [km/s].
    """
    prior = Prior.parse("normal:0,1")
    return tuple(
        Parameter(f"kick_bin_{k + 1}", f"ln of the share kicked with {a:g} to {b:g} km/s over the law's", prior)
        for k, (a, b) in enumerate(zip(edges[:-1], edges[1:]))
    )


def from_shares(parameters, share):
    """Return parameters (..., P) at shares of their priors; bins of kick speed are alike to their neighbours."""
    out = np.stack([p.prior.quantile(share[..., i]) for i, p in enumerate(parameters)], axis=-1)
    bins = np.array([i for i, p in enumerate(parameters) if p.name.startswith("kick_bin_")], dtype=int)
    if bins.size:
        out[..., bins] = ndtri(np.clip(share[..., bins], _EDGE, 1 - _EDGE)) @ smooth_bins(bins.size).T
    return out


def smooth_bins(n, width=1.0, length=2.0):
    """Return the matrix that turns independent normal numbers into a smooth run of n: a Gaussian process.

    Parameters
    ----------
    n : int
    width : float
        Standard deviation of each.
    length : float
        In bins, over which neighbours are alike.
    """
    k = np.arange(n)
    covariance = width**2 * np.exp(-0.5 * ((k[:, None] - k) / length) ** 2)
    return np.linalg.cholesky(covariance + 1e-8 * np.eye(n))
