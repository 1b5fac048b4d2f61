"""What free kick bins say of speeds: the share of neutron stars in each bin, beside the law's and the prior's."""

from dataclasses import dataclass

import numpy as np

from .parameters import from_shares
from .posterior import LEVELS

__all__ = ["KickShares", "kick_shares"]

_PRIOR_DRAWS = 20_000


@dataclass(frozen=True, eq=False)
class KickShares:
    """Shares of neutron stars by the speed of their kicks.

    Attributes
    ----------
    edges : ndarray, shape (n + 1,)
        Of the bins [km/s].
    law : ndarray, shape (n,)
        Shares under the scenario's kick law.
    quantiles, prior_quantiles : ndarray, shape (5, n)
        At `posterior.LEVELS`.
    """

    edges: np.ndarray
    law: np.ndarray
    quantiles: np.ndarray
    prior_quantiles: np.ndarray

    def to_rows(self):
        """Return a dict per bin, as in ``lensrate constrain --json``."""
        names = [f"p{100 * level:g}" for level in LEVELS]
        return [
            {"low_kms": float(a), "high_kms": float(b), "law": float(s),
             **{n: float(q) for n, q in zip(names, mine)}, **{f"prior_{n}": float(q) for n, q in zip(names, prior)}}
            for a, b, s, mine, prior in zip(self.edges[:-1], self.edges[1:], self.law, self.quantiles.T,
                                            self.prior_quantiles.T)
        ]  # fmt: skip


def kick_shares(posterior, seed=1):
    """Return the shares of neutron stars in each kick bin.

    Parameters
    ----------
    posterior : Posterior
        With ``kick_bins`` among its parameters.
    seed : int
        Of the draws from the prior.

    Returns
    -------
    KickShares or None
        None where the bins are not free.
    """
    if posterior.kick_bins is None:
        return None
    edges, law = posterior.kick_bins
    mine = np.array([n.startswith("kick_bin_") for n in posterior.names])
    prior = from_shares(posterior.parameters, np.random.default_rng(seed).random((_PRIOR_DRAWS, mine.size)))
    found, before = (np.quantile(_shares(law, x[:, mine]), LEVELS, axis=0) for x in (posterior.draws, prior))
    return KickShares(np.asarray(edges), law[1:] / law.sum(), found, before)


def _shares(law, change):
    """Shares of the kicked bins at changes (..., n) of their ln; the first of `law` are those not kicked."""
    raw = law[1:] * np.exp(change)
    return raw / (law[0] + raw.sum(axis=-1, keepdims=True))
