"""More than three parameters: an ensemble sampler over parameters and nuisances together (emcee, an optional extra)."""

import numpy as np
from scipy.special import ndtr

from ..errors import ConvergenceError, InputError
from .parameters import from_shares
from .posterior import Posterior, described, made_of, notes_of, own_values

__all__ = ["sampled_posterior"]

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
    Ensemble of differential evolution, every tenth step a whole difference (ter Braak 2006, Stat. Comput. 16, 239), by
    emcee (Foreman-Mackey+ 2013, PASP 125, 306). Its stretch moves need two to three times the steps in 15 dimensions.
    Everything is sampled as the normal number whose share its own prior's is, so that a posterior like the prior is a
    round one.
    """
    try:
        import emcee
    except ImportError:
        raise InputError(
            "more than three parameters need a sampler, which is not installed: pip install 'lensrate[sample]'"
        ) from None
    parameters, active = likelihood.parameters, likelihood.active
    P, widths = len(parameters), likelihood.nuisances.widths

    def ln(u):
        nu = np.zeros(4)
        nu[active] = u[P:] * widths[active]
        if abs(nu[2]) > 0.5 or abs(nu[3]) > 0.9:
            return -np.inf
        return likelihood.ln(from_shares(parameters, ndtr(u[:P])), nu) - 0.5 * float(u @ u)

    rng = np.random.default_rng(seed)
    size = P + active.size
    walkers = max(4 * size, 16) // 2 * 2
    start = 0.5 * rng.standard_normal((walkers, size))  # walkers far out would not come back
    moves = [(emcee.moves.DEMove(), 0.9), (emcee.moves.DEMove(gamma0=1.0), 0.1)]
    ensemble = emcee.EnsembleSampler(walkers, size, ln, moves=moves)
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
    draws = from_shares(parameters, ndtr(flat[:, :P]))
    nu = np.zeros(4)
    nu[active] = np.median(flat[:, P:], axis=0) * widths[active]
    expected = float(likelihood.terms(likelihood.remnants(own_values(likelihood)), np.zeros(4))[1].sum())
    made = {**made_of({"base": likelihood}), "seed": seed, "sampler": f"emcee {emcee.__version__}",
            "steps": steps, "walkers": walkers, "autocorrelation": worst,
            "acceptance": float(np.mean(ensemble.acceptance_fraction))}  # fmt: skip
    return Posterior(
        parameters, (), np.zeros(0), (), described(likelihood.nuisances, nu, likelihood), {}, float("nan"),
        len(likelihood.data), expected, made, tuple(notes), draws, likelihood.kick_bins(),
    )  # fmt: skip
