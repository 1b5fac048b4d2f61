"""More parameters than a grid takes: the sampler against a grid, and against weighted draws of the prior."""

import importlib.util

import numpy as np
import pytest

from lensrate.inference.data import made
from lensrate.inference.likelihood import Likelihood, Nuisances
from lensrate.inference.mocks import mock
from lensrate.inference.parameters import bin_parameters, from_shares, parse_parameters
from lensrate.inference.posterior import grid_posterior
from lensrate.inference.selection import Selection
from lensrate.inference.templates import Templates

pytestmark = [
    pytest.mark.slow,
    pytest.mark.skipif(importlib.util.find_spec("emcee") is None, reason="the optional sampler is not installed"),
]
MEASURED = {"neutron_star": 0.6, "black_hole": 0.8, "white_dwarf": 0.1, "star": 0.05}


def nothing(templates):
    return made(templates, np.zeros(0, dtype=int), np.zeros(0), np.zeros(0))


def test_the_sampler_agrees_with_the_grid(templates):
    from lensrate.inference.sampler import sampled_posterior

    many, numbers = Templates.of(templates.forecast, 4.0), parse_parameters(["neutron_stars"])
    probe = Likelihood(many, nothing(many), numbers)
    data, _ = mock(many, probe.part_weights([1.0]), np.random.default_rng(3), measured=MEASURED)
    L = Likelihood(many, data, numbers)
    grid, drawn = grid_posterior({"a": L}), sampled_posterior(L, steps=1500)
    a, b = (np.log(r.quantile(0, [0.16, 0.5, 0.84])) for r in (grid, drawn))
    np.testing.assert_allclose(a, b, atol=0.12)


def test_free_kick_bins_agree_with_weighted_draws_of_the_prior(templates):
    """Draws of the prior, weighed by the likelihood, against the sampler: medians, spreads and shares by speed."""
    from lensrate.inference.sampler import sampled_posterior

    many = Templates.of(templates.forecast, 60.0)
    chain = Selection(mass={"star": 0.002, "brown_dwarf": 0.0, "white_dwarf": 0.05}, listed="mass")
    bins, rng = bin_parameters(many.edges), np.random.default_rng(8)
    probe = Likelihood(many, nothing(many), bins)
    truth = np.linspace(1.0, -1.0, len(bins))  # slower than the law
    data, _ = mock(many, probe.part_weights(truth), rng, selection=chain)
    L = Likelihood(many, data, bins, Nuisances.fixed(), chain)
    drawn = sampled_posterior(L, 1200, 4)
    theta = from_shares(bins, rng.random((20_000, len(bins))))
    ln = np.array([L.ln(t) for t in theta])
    weight = np.exp(ln - ln.max())
    weight /= weight.sum()
    assert 1 / np.sum(weight**2) > 3000
    mean, sd = weight @ theta, np.sqrt(weight @ theta**2 - (weight @ theta) ** 2)
    independent = len(drawn.draws) / drawn.made["autocorrelation"]
    error = np.hypot(sd / np.sqrt(independent), np.sqrt(weight**2 @ (theta - mean) ** 2))
    assert independent > 500 and np.all(np.abs(drawn.draws.mean(axis=0) - mean) < 4 * error)
    np.testing.assert_allclose(drawn.draws.std(axis=0), sd, rtol=0.1)
    assert drawn.learned["kick_bin_6"].constrained
    # shares by speed are those that the likelihood weighs its parts with
    speeds, rows = drawn.kick_shares(), many.rows("neutron_star")
    parts = np.array([probe.part_weights(t)[rows] for t in theta[:4000]])
    assert parts.sum(axis=1) == pytest.approx(parts[0].sum())
    share, few = parts[:, 1:] / parts[0].sum(), weight[:4000] / weight[:4000].sum()
    order = np.argsort(share, axis=0)
    for k in range(len(bins)):
        cumulative = np.cumsum(few[order[:, k]])
        low, high = np.interp([0.42, 0.58], cumulative, share[order[:, k], k])
        assert low < speeds.quantiles[2][k] < high, k
    assert speeds.law.sum() == pytest.approx(1.0, abs=1e-6) and len(drawn.to_dict()["kick_shares"]) == len(bins)
