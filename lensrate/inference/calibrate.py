"""Is the inference calibrated? Truths from the prior, samples from the truth, the posterior's share below the truth.

Simulation-based calibration (Talts+ 2018, arXiv:1804.06788): under the prior these shares are evenly spread. It shows
the code right, not the model: `truth` draws the samples from another scenario's templates.
"""

from dataclasses import dataclass

import numpy as np

from .data import made, mock
from .likelihood import Likelihood
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


def calibrate(templates, parameters, n, seed=1, *, nuisances=None, truth=None, points=None, fix_truth=None,
              fixed_nuisances=False, **options):  # fmt: skip
    """Run a calibration.

    Parameters
    ----------
    templates : Templates
        Of the inference.
    parameters : tuple of Parameter
    n : int
        Samples.
    seed : int
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
    **options
        As `data.mock`: sigma, mass_error, measured.

    Returns
    -------
    Calibration
    """
    true = truth if truth is not None else templates
    rng = np.random.default_rng(seed)
    probe = Likelihood(true, _no_events(true), parameters, nuisances)
    names = [p.name for p in parameters]
    rows, shares, bits, events = [], [], [], []
    widths, F = probe.nuisances.widths, len(true.names)
    for _ in range(n):
        theta = [float(p.prior.quantile(rng.random())) for p in parameters] if fix_truth is None else list(fix_truth)
        nu = np.zeros(4)
        field = np.ones(F)
        if not fixed_nuisances:
            nu = widths * rng.standard_normal(4)
            w = probe.nuisances.field_rate
            field = rng.gamma(w**-2, w**2, F) if w > 0 else field
        data, _ = mock(
            true, probe.part_weights(theta), rng, slope=float(np.clip(nu[3], -0.9, 0.9)), shift=nu[1],
            stretch=float(np.exp(nu[2])), rate=field * np.exp(nu[0]), seen=templates, **options,
        )  # fmt: skip
        found = grid_posterior({"mock": Likelihood(templates, data, parameters, nuisances)}, points=points)
        rows.append(theta)
        shares.append([_share_below(found, i, t) for i, t in enumerate(theta)])
        bits.append([found.learned[name].bits for name in names])
        events.append(len(data))
    return Calibration(names, np.array(rows), np.array(shares), np.array(bits), np.array(events))


def _share_below(posterior, i, value):
    """Posterior share below a value, inside cells as the prior is."""
    q = np.linspace(0, 1, 2001)
    return float(np.interp(value, posterior.quantile(i, q), q))


def _no_events(templates):
    return made(templates, np.zeros(0, dtype=int), np.zeros(0), np.zeros(0))

