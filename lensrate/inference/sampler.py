"""More than three parameters: an ensemble sampler over parameters and nuisances together (emcee, an optional extra)."""

import numpy as np
from scipy.special import ndtri

from ..errors import ConvergenceError, InputError
from .posterior import Posterior, described, made_of, notes_of, own_values

__all__ = ["sampled_posterior"]

_EDGE = 1e-9
_ENOUGH = 30.0  # autocorrelation times that a chain should be long


def sampled_posterior(likelihood, steps=2000, seed=1, progress=None):
    """Return the posterior of any number of parameters.

    Parameters
    ----------
    likelihood : Likelihood
    steps : int
        Of every walker; the first third is dropped.
    seed : int
    progress : callable, optional
        Called with the share of the work done.

    Returns
    -------
    Posterior

    Raises
    ------
    InputError
        The library is not installed.
    ConvergenceError
        The chains are too short to mean anything.

    Notes
    -----
    Affine-invariant ensemble (Goodman & Weare 2010, CAMCoS 5, 65; Foreman-Mackey+ 2013, PASP 125, 306). Parameters are
    sampled as shares of their priors, nuisances in widths of theirs, so that both priors are simple.
    """
    try:
        import emcee
    except ImportError:
        raise InputError(
            "more than three parameters need a sampler, which is not installed: pip install 'lensrate[sample]'"
        ) from None
    parameters, active = likelihood.parameters, likelihood.active
    P, widths = len(parameters), likelihood.nuisances.widths
    bins = np.array([i for i, p in enumerate(parameters) if p.name.startswith("kick_bin_")], dtype=int)
    run = smooth_bins(bins.size)

    def values(share):
        """Parameters at shares of their priors, (..., P); bins of kick speed alike to their neighbours."""
        out = np.stack([p.prior.quantile(share[..., i]) for i, p in enumerate(parameters)], axis=-1)
        if bins.size:
            out[..., bins] = ndtri(np.clip(share[..., bins], _EDGE, 1 - _EDGE)) @ run.T
        return out

    def ln(u):
        share, z = u[:P], u[P:]
        if np.any((share <= _EDGE) | (share >= 1 - _EDGE)):
            return -np.inf
        nu = np.zeros(4)
        nu[active] = z * widths[active]
        if abs(nu[2]) > 0.5 or abs(nu[3]) > 0.9:
            return -np.inf
        return likelihood.ln([float(v) for v in values(share)], nu) - 0.5 * float(z @ z)

    rng = np.random.default_rng(seed)
    size = P + active.size
    walkers = max(4 * size, 16) // 2 * 2
    first = rng.uniform(0.2, 0.8, (walkers, P)), 0.3 * rng.standard_normal((walkers, active.size))
    start = np.concatenate(first, axis=1)
    ensemble = emcee.EnsembleSampler(walkers, size, ln)
    ensemble._random = np.random.RandomState(seed)
    for k, _ in enumerate(ensemble.sample(start, iterations=steps)):
        if progress is not None and k % 50 == 0:
            progress((k + 1) / steps)
    chain = ensemble.get_chain(discard=steps // 3)
    length = emcee.autocorr.integrated_time(chain, quiet=True, tol=0)
    notes = list(notes_of(likelihood))
    worst = float(np.max(length[:P]))
    if not np.isfinite(worst) or len(chain) < 5 * worst:
        raise ConvergenceError(f"sampler: {steps} steps are {len(chain) / worst:.1f} autocorrelation times; take more")
    if len(chain) < _ENOUGH * worst:
        notes.append(f"the chains are {len(chain) / worst:.0f} autocorrelation times long; more steps are safer")
    flat = chain.reshape(-1, size)
    draws = values(flat[:, :P])
    nu = np.zeros(4)
    nu[active] = np.median(flat[:, P:], axis=0) * widths[active]
    expected = float(likelihood.terms(likelihood.remnants(own_values(likelihood)), np.zeros(4))[1].sum())
    made = {**made_of({"base": likelihood}), "seed": seed, "sampler": f"emcee {emcee.__version__}",
            "steps": steps, "walkers": walkers, "autocorrelation": worst,
            "acceptance": float(np.mean(ensemble.acceptance_fraction))}  # fmt: skip
    return Posterior(
        parameters, (), np.zeros(0), (), described(likelihood.nuisances, nu, likelihood), {}, float("nan"),
        len(likelihood.data), expected, made, tuple(notes), draws,
    )  # fmt: skip


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

