"""Tests of a sample against folded distributions: statistics, and what they are worth by simulation."""

from typing import NamedTuple

import numpy as np
from scipy.special import xlogy
from scipy.stats import binom, poisson

__all__ = ["Simulated", "Tail", "anderson_darling", "deviance", "kolmogorov_smirnov", "p_value", "tail_test"]

_EDGE = 1e-12


def kolmogorov_smirnov(share):
    """Return the largest distance between the shares [0, 1] and evenly spread ones."""
    v = np.sort(share)
    n = v.size
    steps = np.arange(1, n + 1) / n
    return float(max(np.max(steps - v), np.max(v - steps + 1.0 / n)))


def anderson_darling(share):
    """Return A2 of shares against evenly spread ones (Anderson & Darling 1954, JASA 49, 765)."""
    v = np.clip(np.sort(share), _EDGE, 1 - _EDGE)
    n = v.size
    weight = 2 * np.arange(1, n + 1) - 1
    return float(-n - np.sum(weight * (np.log(v) + np.log1p(-v[::-1]))) / n)


def deviance(counts, mean):
    """Return the Poisson deviance 2 sum(mu - n + n ln(n / mu)), infinite where events fall where none can be."""
    counts, mean = np.asarray(counts, dtype=float), np.asarray(mean, dtype=float)
    with np.errstate(divide="ignore", invalid="ignore"):
        term = np.where(counts > 0, xlogy(counts, counts / np.where(mean > 0, mean, np.nan)), 0.0)
    term = np.where((counts > 0) & ~(mean > 0), np.inf, term)
    return float(2 * np.sum(mean - counts + term))


def p_value(value, simulated):
    """Return the share of simulated statistics at least as large, the observed one counted among them."""
    simulated = np.asarray(simulated)
    return float((1 + np.sum(simulated >= value * (1 - 1e-12))) / (1 + simulated.size))


class Simulated(NamedTuple):
    """A statistic and its p-value from `n` simulations."""

    value: float
    p: float
    n: int


class Tail(NamedTuple):
    """Events with a t_E above `beyond` [d]: expected, observed, and exact chances of so few and of so many."""

    beyond: float
    expected: float
    observed: int
    p_at_most: float
    p_at_least: float
    absolute: bool  # Poisson with the expected number; else binomial among the events observed


def tail_test(beyond, expected, observed, total=None):
    """Return the exact test of a count.

    Parameters
    ----------
    beyond : float
        [d], for the record.
    expected : float
        Expected number.
    observed : int
    total : int, optional
        Events of every timescale, where the expected number is a share of them: then the test is binomial.
    """
    if total is None:
        below, above = poisson.cdf(observed, expected), poisson.sf(observed - 1, expected)
    else:
        p = min(expected / total, 1.0)
        below, above = binom.cdf(observed, total, p), binom.sf(observed - 1, total, p)
    return Tail(float(beyond), float(expected), int(observed), float(below), float(above), total is None)
