"""Stated probabilities against the classes of mock events whose errors are those the odds are told."""

import sys
from pathlib import Path

import numpy as np
import pytest

sys.path.insert(0, str(Path(__file__).parents[1] / "benchmarks"))

import bench_calibration as bench


def agree(level, number, seed):
    true, weight, p, classes = bench.mocks(level, number, seed)
    assert true.size > 0.7 * number
    for low, high, n, stated, share, error in bench.reliability(true, weight, p):
        # pairs of one event are not independent: at most two in a bin count
        assert share == pytest.approx(stated, abs=3.5 * np.sqrt(2) * error + 1.5 / n), f"{level} {low}-{high}"
    found, expected, error = bench.log_score(true, weight, p)
    assert found == pytest.approx(expected, abs=3.5 * error)
    for k in range(len(classes)):
        stated, share, error = bench.top(true, weight, p, k, number // 8)
        assert share == pytest.approx(stated, abs=3.5 * error + 1.5 / (number // 8)), classes[k]


@pytest.mark.parametrize("level", ["t_E", "+ pi_E", "+ theta_E"])
def test_of_those_given_80_percent_80_percent_are(level):
    agree(level, 80, 3)


@pytest.mark.slow
@pytest.mark.parametrize("level", list(bench.LEVELS))
def test_the_same_with_many(level):
    agree(level, 1000, 5)


def test_a_wrong_scenario_shows():
    """The score tells: with truth from unkicked black holes of other masses it falls below what is expected."""
    rng = np.random.default_rng(1)
    p = rng.dirichlet(np.ones(5), 4000)
    true = np.array([rng.choice(5, p=q) for q in p])
    found, expected, error = bench.log_score(true, np.ones(4000), p)
    assert found == pytest.approx(expected, abs=4 * error)
    flat = np.sqrt(p) / np.sqrt(p).sum(axis=1, keepdims=True)
    found, expected, error = bench.log_score(true, np.ones(4000), flat**3 / (flat**3).sum(axis=1, keepdims=True))
    assert found < expected - 10 * error
