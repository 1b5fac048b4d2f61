"""The posterior of a few parameters on a grid, nuisances integrated inside; what the sample taught, in words."""

from dataclasses import dataclass, field
from functools import cached_property
from typing import NamedTuple

import numpy as np
from scipy.special import logsumexp

from .._version import __version__
from ..errors import InputError

__all__ = ["LEVELS", "Learned", "Posterior", "grid_posterior"]

#: shares below which values are reported
LEVELS = (0.025, 0.16, 0.5, 0.84, 0.975)
GRID = {1: 81, 2: 31, 3: 15}  # points a parameter, by their number
_SILENT = 0.1  # bits below which a parameter counts as not constrained
_END = 0.05  # share of a prior that counts as its end
_BINS = 25  # of the prior's shares, where there are samples only


class Learned(NamedTuple):
    """What a sample says of one parameter."""

    quantiles: tuple  # at `LEVELS`
    prior_quantiles: tuple
    bits: float  # Kullback-Leibler divergence of posterior from prior
    shift: float  # of the mean, in standard deviations of the prior (of the logarithm where the prior is one of it)
    shrinkage: float  # 1 - variance over the prior's
    constrained: bool


@dataclass(frozen=True, eq=False)
class Posterior:
    """Posterior of the parameters asked for.

    Attributes
    ----------
    parameters : tuple of Parameter
    grid : tuple of ndarray
        Values along each parameter; empty where there are samples only.
    weight : ndarray
        Posterior weights on the grid, summing to one.
    prior_weight : tuple of ndarray
        Prior weights along each parameter.
    nuisances : dict
        Width of each nuisance's prior, and where it is likeliest at the best grid point.
    cases : dict of str to float
        Posterior share of each Galaxy set of the family.
    ln_evidence : float
    events, expected : int, float
        Events used, and those expected at the scenario's own values.
    made : dict
        How it was made.
    notes : tuple of str
    draws : ndarray or None, shape (n, P)
        Of a sampler, where there is no grid.
    kick_bins : tuple or None
        Edges [km/s] and the law's shares of neutron stars, the unkicked first, where kick bins are free.
    """

    parameters: tuple
    grid: tuple
    weight: np.ndarray
    prior_weight: tuple
    nuisances: dict
    cases: dict
    ln_evidence: float
    events: int
    expected: float
    made: dict
    notes: tuple = ()
    draws: np.ndarray | None = None
    kick_bins: tuple | None = None
    version: str = __version__
    _kept: dict = field(default_factory=dict, repr=False)

    @property
    def names(self):
        """Names of the parameters."""
        return [p.name for p in self.parameters]

    def marginal(self, i):
        """Return the values and weights of one parameter."""
        if self.draws is not None:
            return self.draws[:, i], np.full(len(self.draws), 1.0 / len(self.draws))
        axes = tuple(j for j in range(len(self.parameters)) if j != i)
        return self.grid[i], self.weight.sum(axis=axes)

    def quantile(self, i, q):
        """Return values of a parameter below which shares q of the posterior lie."""
        if self.draws is not None:
            return np.quantile(self.draws[:, i], q)
        values, weight = self.marginal(i)
        prior = self.parameters[i].prior
        # inside a cell of the grid the posterior follows the prior
        edges = _cell_edges(values, prior)
        cum = np.concatenate([[0.0], np.cumsum(weight)])
        keep = np.concatenate([[True], np.diff(cum) > 0])
        return prior.quantile(np.interp(np.asarray(q) * cum[-1], cum[keep], prior.share(edges)[keep]))

    @cached_property
    def learned(self):
        """What each parameter's posterior says beside its prior, dict of name to Learned."""
        out = {}
        for i, p in enumerate(self.parameters):
            values, weight = self.marginal(i)
            if self.draws is not None:
                share = np.histogram(p.prior.share(values), np.linspace(0, 1, _BINS + 1))[0] / len(values)
                prior = np.full(_BINS, 1.0 / _BINS)
            else:
                share, prior = weight, self.prior_weight[i]
            some = share > 0
            bits = float(np.sum(share[some] * np.log2(share[some] / prior[some])))
            if self.draws is not None:
                # what so few independent draws of the prior itself would seem to say
                bits -= (_BINS - 1) * self.made.get("autocorrelation", 1.0) / (2 * np.log(2) * len(values))
            x = np.log(values) if p.prior.logarithmic else values
            grid, w = p.prior.grid(401)
            y = np.log(grid) if p.prior.logarithmic else grid
            mean, variance = w @ y, w @ y**2 - (w @ y) ** 2
            mine = weight @ x
            shrink = 1 - (weight @ x**2 - mine**2) / variance
            out[p.name] = Learned(
                tuple(map(float, self.quantile(i, LEVELS))), tuple(map(float, p.prior.quantile(LEVELS))),
                max(bits, 0.0),
                float((mine - mean) / np.sqrt(variance)), float(shrink), bits >= _SILENT,
            )  # fmt: skip
        return out

    def cautions(self):
        """Return the notes, and which bounds are the prior's: where the posterior does not fall toward its end."""
        out = list(self.notes)
        for i, p in enumerate(self.parameters):
            if "uniform" not in p.prior.kind or not self.learned[p.name].constrained:
                continue
            values, weight = self.marginal(i)
            share = p.prior.share(values)
            for end, bound, at in (("lower", p.prior.a, share < _END), ("upper", p.prior.b, share > 1 - _END)):
                before = self.prior_weight[i][at].sum() if self.draws is None else _END
                if weight[at].sum() > before:
                    out.append(
                        f"{p.name}: the posterior does not fall toward the {end} end of its prior, {bound:g}: its "
                        f"{end} bound is the prior's"
                    )
        return out

    def upper_limit(self, name, level=0.95):
        """Return the value of a parameter below which a share of the posterior lies."""
        from ..errors import one_of

        return float(self.quantile(self.names.index(one_of("parameter", name, self.names)), level))

    def verdict(self, name):
        """Return a sentence on one parameter."""
        got, p = self.learned[name], next(p for p in self.parameters if p.name == name)
        if not got.constrained:
            return (
                f"{name}: not constrained ({got.bits:.2f} bits beyond its prior, {p.prior.text}: what is quoted is "
                "the prior)"
            )
        low, _, middle, _, high = got.quantiles
        return (
            f"{name}: {middle:.3g} ({low:.3g} to {high:.3g} at 95 %), {got.bits:.2f} bits beyond its prior "
            f"{p.prior.text}; spread {np.sqrt(max(1 - got.shrinkage, 0.0)):.2f} of the prior's"
        )

    def kick_shares(self):
        """Return the shares of neutron stars by kick speed where kick bins are free, see `speeds.kick_shares`."""
        from .speeds import kick_shares

        return kick_shares(self)

    def samples(self, n=10_000, seed=1):
        """Return draws of the parameters, (n, P), spread within the grid's cells as the prior is."""
        rng = np.random.default_rng(seed)
        if self.draws is not None:
            return self.draws[rng.integers(len(self.draws), size=n)]
        flat = np.cumsum(self.weight.ravel())
        at = np.unravel_index(np.searchsorted(flat, rng.random(n) * flat[-1]), self.weight.shape)
        out = np.empty((n, len(self.parameters)))
        for i, (p, k) in enumerate(zip(self.parameters, at)):
            edges = p.prior.share(_cell_edges(self.grid[i], p.prior))
            out[:, i] = p.prior.quantile(edges[k] + rng.random(n) * (edges[k + 1] - edges[k]))
        return out

    def samples_table(self, n=10_000, seed=1):
        """Return `samples` as a QTable with its provenance."""
        from astropy.table import QTable

        table = QTable(self.samples(n, seed), names=self.names)
        table.meta.update({**self.meta(), "seed_of_samples": seed})
        return table

    def meta(self):
        """Return how this was made."""
        return {
            **self.made,
            "parameters": {p.name: {"meaning": p.meaning, "prior": p.prior.text} for p in self.parameters},
            "nuisances": self.nuisances,
            "cases": self.cases,
            "events": self.events,
            "expected": self.expected,
            "notes": self.cautions(),
        }

    def to_table(self):
        """Return a QTable, a row per parameter: percentiles, prior, what was learned."""
        from astropy.table import QTable

        table = QTable()
        table["parameter"] = self.names
        table["prior"] = [p.prior.text for p in self.parameters]
        for j, level in enumerate(LEVELS):
            table[f"q{100 * level:g}".replace(".", "_")] = [self.learned[n].quantiles[j] for n in self.names]
        for key in ("bits", "shift", "shrinkage", "constrained"):
            table[key] = [getattr(self.learned[n], key) for n in self.names]
        for name in table.colnames[2:-1]:
            table[name].info.format = ".4g"
        table.meta.update(self.meta())
        return table

    def to_pandas(self):
        """Return `to_table` as a pandas DataFrame."""
        return self.to_table().to_pandas()

    def to_dict(self):
        """Return plain numbers under the keys of ``lensrate constrain --json``."""
        rows = {}
        for p in self.parameters:
            got = self.learned[p.name]
            rows[p.name] = {
                "meaning": p.meaning, "prior": p.prior.text,
                **{f"p{100 * level:g}": q for level, q in zip(LEVELS, got.quantiles)},
                "upper_95": self.upper_limit(p.name), "bits": got.bits, "shift_in_prior_sigma": got.shift,
                "shrinkage": got.shrinkage, "constrained": got.constrained, "verdict": self.verdict(p.name),
            }  # fmt: skip
        speeds = self.kick_shares()
        return {
            "parameters": rows, "nuisances": self.nuisances, "galaxies": self.cases, "ln_evidence": self.ln_evidence,
            **({} if speeds is None else {"kick_shares": speeds.to_rows()}),
            "events": self.events, "expected": self.expected, "notes": self.cautions(), **self.made,
            "version": self.version,
        }  # fmt: skip

    def plot(self, ax=None, **style):
        """Draw marginals and pairs (one parameter: into `ax`); returns the Axes."""
        import importlib

        return importlib.import_module("lensrate.plots").posterior(self, ax=ax, **style)

    def _repr_html_(self):
        return self.to_table()._repr_html_()


def _cell_edges(values, prior):
    """Edges of a grid's cells, halfway between points in the prior's own measure, out to its ends."""
    share = prior.share(values)
    inner = 0.5 * (share[1:] + share[:-1])
    first, last = max(share[0] - (inner[0] - share[0]), 0.0), min(share[-1] + (share[-1] - inner[-1]), 1.0)
    return prior.quantile(np.concatenate([[first], inner, [last]]))


def grid_posterior(likelihoods, weights=None, points=None, progress=None):
    """Return the posterior of one to three parameters.

    Parameters
    ----------
    likelihoods : dict of str to Likelihood
        One, or one for each Galaxy set of a family, all of the same parameters and events.
    weights : list of float, optional
        Prior shares of the sets; default even.
    points : int, optional
        Grid points a parameter.
    progress : callable, optional
        Called with the share of the work done.

    Returns
    -------
    Posterior

    Raises
    ------
    InputError
        More than three parameters.
    """
    first = next(iter(likelihoods.values()))
    parameters = first.parameters
    if len(parameters) > 3:
        raise InputError(f"parameters: {len(parameters)} given, a grid takes up to three; use a sampler")
    n = points or GRID[len(parameters)]
    grid, prior = zip(*(p.prior.grid(n) for p in parameters))
    ln_prior = sum(np.log(w).reshape([-1 if j == i else 1 for j in range(len(prior))]) for i, w in enumerate(prior))
    shape, surfaces, best, done = (n,) * len(parameters), [], {}, 0
    for name, likelihood in likelihoods.items():
        ln, start, top = np.empty(shape), {}, -np.inf
        for at in np.ndindex(shape):
            # the neighbour's nuisances are a good guess
            before = at[:-1] + (at[-1] - 1,) if at[-1] else at[:-1][:-1] + (at[-2] - 1, 0) if len(at) > 1 else None
            theta = [g[k] for g, k in zip(grid, at)]
            ln[at], nu = likelihood.marginal(theta, start.get(before))
            start[at] = nu
            if ln[at] + ln_prior[at] > top:
                top, best[name] = ln[at] + ln_prior[at], nu
            done += 1
            if progress is not None and done % 50 == 0:
                progress(done / (ln.size * len(likelihoods)))
        surfaces.append(ln + ln_prior)
    share = np.full(len(surfaces), 1 / len(surfaces)) if weights is None else np.asarray(weights, dtype=float)
    before = dict(zip(likelihoods, map(float, share))) if len(likelihoods) > 1 else {}
    with np.errstate(divide="ignore"):  # a set without weight takes no part
        share = np.log(share)
    each = np.array([logsumexp(s) for s in surfaces]) + share
    total = logsumexp(each)
    weight = np.exp(logsumexp(np.array(surfaces) + share.reshape([-1] + [1] * len(parameters)), axis=0) - total)
    cases = dict(zip(likelihoods, map(float, np.exp(each - total)))) if len(likelihoods) > 1 else {}
    likeliest = max(likelihoods, key=lambda k: each[list(likelihoods).index(k)])
    expected = float(first.terms(first.remnants(own_values(first)), np.zeros(4))[1].sum())
    return Posterior(
        parameters, grid, weight, prior, described(first.nuisances, best[likeliest], first), cases, float(total),
        len(first.data), expected, {**made_of(likelihoods), "galaxies_prior": before}, notes_of(first),
    )  # fmt: skip


def own_values(likelihood):
    """Return the parameters at which the model is the scenario itself."""
    law = likelihood._law
    own = {"slow_weight": law.weights[int(np.argmin(law.values))]} if len(law.weights) == 2 else {}
    return [own.get(n, 0.0 if n.startswith("kick_bin_") else 1.0) for n in likelihood.names]


def described(nuisances, nu, likelihood):
    """Return widths of the nuisances' priors and their likeliest values."""
    names = ("rate", "shift", "stretch", "slope")
    found = {n: float(v) for n, v in zip(names, nu)}
    return {"prior_widths": nuisances.to_dict(), "likeliest": found, "free": [names[i] for i in likelihood.active]}


def made_of(likelihoods):
    """Return provenance."""
    first = next(iter(likelihoods.values()))
    meta = first.templates.forecast.meta()
    kept = {k: v for k, v in meta.items() if k not in ("warnings", "seed", "family")}
    return {
        **kept,
        "counts": ["absolute" if a else "shape" for a in first.anchored],
        "selection": first.selection.to_dict(),
        "galaxies_used": {k: v.templates.forecast.scenario.hash for k, v in likelihoods.items()},
        "warnings": list(dict.fromkeys(w for v in likelihoods.values() for w in v.templates.forecast.warnings)),
    }


def notes_of(likelihood):
    """Return what is to be said."""
    notes = list(likelihood.data.notes)
    t = likelihood.templates
    if not likelihood.anchored.all():
        names = ", ".join(np.array(t.names)[~likelihood.anchored][:6])
        notes.append(f"nothing anchors the number of events in {names}: only shapes count there")
    if not likelihood.active.size:
        notes.append("all nuisances are held fixed: the result is narrower than what is known")
    return tuple(notes)
