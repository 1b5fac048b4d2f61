"""Is the inference calibrated? Truths from the prior, samples from the truth, the posterior's share below the truth.

Simulation-based calibration (Talts+ 2018, arXiv:1804.06788): under the prior these shares are evenly spread. It shows
the code right, not the model: `truth` draws the samples from another scenario's templates.
"""

from dataclasses import dataclass

import numpy as np
from scipy import stats

from ..parallel import run_map
from .data import made
from .likelihood import Likelihood
from .mocks import mass_shift, mock
from .parameters import from_shares
from .posterior import grid_posterior

__all__ = ["Calibration", "calibrate"]


@dataclass(frozen=True, eq=False)
class Calibration:
    """Shares of the posterior below the truth.

    Attributes
    ----------
    names : list of str
    truth : ndarray, shape (n, P)
    share : ndarray, shape (n, P)
    bits : ndarray, shape (n, P)
        What each sample said beyond the prior.
    events : ndarray, shape (n,)
    """

    names: list
    truth: np.ndarray
    share: np.ndarray
    bits: np.ndarray
    events: np.ndarray

    def coverage(self, level):
        """Return the share of truths inside central regions of a level, and its binomial error, by parameter."""
        inside = np.mean(np.abs(self.share - 0.5) < 0.5 * level, axis=0)
        return inside, np.sqrt(level * (1 - level) / len(self.share)) * np.ones(inside.size)

    def even(self, bins=10):
        """Return p-values, by parameter, of the shares being evenly spread: Kolmogorov-Smirnov, and chi2 of bins."""
        counts = np.array([np.histogram(s, bins, (0, 1))[0] for s in self.share.T])
        chi2 = np.sum((counts - len(self.share) / bins) ** 2, axis=1) * bins / len(self.share)
        ks = [stats.kstest(s, "uniform").pvalue for s in self.share.T]
        return np.array(ks), stats.chi2.sf(chi2, bins - 1)


def calibrate(templates, parameters, n, seed=1, *, nuisances=None, truth=None, points=None, fix_truth=None,
              fixed_nuisances=False, selection=None, counts="auto", steps=None, executor=None, progress=None,
              **options):  # fmt: skip
    """Run a calibration.

    Parameters
    ----------
    templates : Templates
        Of the inference.
    parameters : tuple of Parameter
    n : int
        Samples.
    seed : int
        Every sample has a stream of its own.
    nuisances : Nuisances, optional
        Their true values are drawn from these priors, and they are marginalised over.
    truth : Templates, optional
        Of the samples, where another scenario is true.
    points : int, optional
        Grid points a parameter.
    fix_truth : sequence of float, optional
        True parameters, instead of draws from the prior.
    fixed_nuisances : bool
        True nuisances at their centre instead of drawn.
    selection : Selection, optional
        Stages of the samples, of which the inference is told.
    counts : str
        As `Likelihood`.
    steps : int, optional
        Of the sampler, which then takes the grid's place.
    executor, progress : optional
        As `parallel.run_map`, over samples.
    **options
        As `mocks.mock`: sigma, mass_error, measured.

    Returns
    -------
    Calibration
    """
    one = _Sample(templates, truth if truth is not None else templates, parameters, nuisances, points, fix_truth,
                  fixed_nuisances, selection, counts, steps, options)  # fmt: skip
    rows = run_map(one, np.random.SeedSequence(seed).spawn(n), executor=executor, progress=progress)
    theta, shares, bits, events = (np.array(v) for v in zip(*rows))
    return Calibration([p.name for p in parameters], theta, shares, bits, events)


@dataclass(frozen=True)
class _Sample:
    """One sample of a calibration, from its stream of random numbers."""

    templates: object
    true: object
    parameters: tuple
    nuisances: object
    points: int | None
    fix_truth: tuple | None
    fixed_nuisances: bool
    selection: object
    counts: str
    steps: int | None
    options: dict

    def __call__(self, seed):
        rng = np.random.default_rng(seed)
        true, F = self.true, len(self.true.names)
        probe = Likelihood(true, no_events(true), self.parameters, self.nuisances)
        if self.fix_truth is None:
            theta = from_shares(self.parameters, rng.random(len(self.parameters)))
        else:
            theta = np.array(self.fix_truth, dtype=float)
        nu, field = np.zeros(4), np.ones(F)
        if not self.fixed_nuisances:
            nu = probe.nuisances.widths * rng.standard_normal(4)
            w = probe.nuisances.field_rate
            field = rng.gamma(w**-2, w**2, F) if w > 0 else field
        data, _ = mock(
            true, probe.part_weights(theta), rng, slope=float(np.clip(nu[3], -0.9, 0.9)), shift=nu[1],
            stretch=float(np.exp(nu[2])), rate=field * np.exp(nu[0]), selection=self.selection, seen=self.templates,
            ln_mass=mass_shift(self.parameters, theta), **self.options,
        )  # fmt: skip
        L = Likelihood(self.templates, data, self.parameters, self.nuisances, self.selection, self.counts)
        if self.steps:
            from .sampler import sampled_posterior

            found = sampled_posterior(L, self.steps, int(rng.integers(2**31)))
            shares = [float(np.mean(found.draws[:, i] < t)) for i, t in enumerate(theta)]
        else:
            found = grid_posterior({"mock": L}, points=self.points)
            shares = [_share_below(found, i, t) for i, t in enumerate(theta)]
        return list(theta), shares, [found.learned[p.name].bits for p in self.parameters], len(data)


def _share_below(posterior, i, value):
    """Posterior share below a value, inside cells as the prior is."""
    q = np.linspace(0, 1, 2001)
    return float(np.interp(value, posterior.quantile(i, q), q))


def no_events(templates):
    """Return the data of a sample without any."""
    return made(templates, np.zeros(0, dtype=int), np.zeros(0), np.zeros(0))
