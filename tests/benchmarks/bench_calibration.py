"""Calibration of lens-class odds on mock events: of those given 80 %, about 80 % are; and what a wrong scenario costs.

    python tests/benchmarks/bench_calibration.py [number] > tests/benchmarks/calibration.txt

Classes are drawn equally often, and the stated probabilities are those of that prior, so that rare classes are tested
as well as stars. Measured values are the true ones with Gaussian errors of the size that the odds are told; the size
does not depend on the truth.
"""

import sys
import time
from functools import cache

import astropy.units as u
import numpy as np

from lensrate.events.odds import class_probabilities, event_rates
from lensrate.lensing import rates
from lensrate.lensing.quadrature import Numerics
from lensrate.lensing.sampler import Sampler
from lensrate.scenario import Scenario, resolve

PLACE = (359.8613, -1.6210)
ERRORS = {"t_E": 2.0, "pi_E": 0.02, "theta_E": 0.06}
LEVELS = {"t_E": ("t_E",), "+ pi_E": ("t_E", "pi_E"), "+ theta_E": ("t_E", "pi_E", "theta_E")}
BINS = (0.0, 0.05, 0.2, 0.4, 0.6, 0.8, 0.95, 1.0)
TRUTHS = {
    "the same scenario": {},
    "kicks hobbs2005": {"kicks": "hobbs2005"},
    "ifmr raithel2018": {"ifmr": "raithel2018"},
    "bh_kicks none": {"bh_kicks": "none"},
}


@cache
def sampler(truth):
    scenario = Scenario.read("default").replace(**TRUTHS[truth])
    model = resolve(scenario)
    l, b = np.radians(PLACE)
    ready = rates.prepare(model, model.galaxy.sightline(l, b), model.sources.toward(l, b, model.galaxy), Numerics())
    return Sampler.of(ready)


def mocks(level, number, seed, truth="the same scenario"):
    """Return true classes, weights and probabilities (n, classes) of mock events, every class as likely before."""
    made = sampler(truth)
    draws = made.draw(number, seed, weighted=False, tilt="equal")
    rng = np.random.default_rng(seed + 1)
    measured = {}
    for name in LEVELS[level]:
        value = getattr(draws, name) + ERRORS[name] * rng.standard_normal(number)
        measured[name] = (value, np.full(number, ERRORS[name]))
    # what was measured below zero is no event; that is a fact about the data, the same for all classes
    good = np.all([v > 0.3 * e for v, e in measured.values()], axis=0)
    measured = {k: (v[good], e[good]) for k, (v, e) in measured.items()}
    classes, p = class_probabilities(PLACE[0] * u.deg, PLACE[1] * u.deg, measured, outlier=0.0)
    prior = event_rates(*PLACE).rates()
    p = p / prior
    p /= p.sum(axis=1, keepdims=True)
    # a scenario of another number of black holes has more or fewer of them among the mocks
    weight = (made.class_rate / prior)[draws.lens_class[good]]
    some = np.isfinite(p).all(axis=1)
    return draws.lens_class[good][some], (weight / weight.mean())[some], p[some], classes


def reliability(true, weight, p):
    """Return for each bin of stated probability: number, mean stated, true share, binomial error of the share."""
    hit = np.arange(p.shape[1]) == true[:, None]
    w = np.repeat(weight[:, None], p.shape[1], axis=1)
    rows = []
    for low, high in zip(BINS, BINS[1:]):
        mine = (p >= low) & (p < high + (high == 1.0))
        if mine.sum() < 5:
            continue
        stated, share = np.average(p[mine], weights=w[mine]), np.average(hit[mine], weights=w[mine])
        error = np.sqrt(np.sum(w[mine] ** 2 * p[mine] * (1 - p[mine]))) / w[mine].sum()
        rows.append((low, high, int(mine.sum()), stated, share, error))
    return rows


def log_score(true, weight, p):
    """Return the mean log2 of the true class's probability, what the probabilities expect of it, and its error."""
    q = np.maximum(p, 1e-12)
    found = np.log2(q[np.arange(true.size), true])
    expected = np.sum(p * np.log2(q), axis=1)
    spread = np.sum(p * np.log2(q) ** 2, axis=1) - expected**2
    total = weight.sum()
    return weight @ found / total, weight @ expected / total, np.sqrt(np.sum(weight**2 * spread)) / total


def top(true, weight, p, k, count):
    """Return mean stated probability of class k, true share and binomial error of the `count` ranked highest."""
    first = np.argsort(-p[:, k])[:count]
    w, q = weight[first], p[first, k]
    share = np.average(true[first] == k, weights=w)
    return np.average(q, weights=w), share, np.sqrt(np.sum(w**2 * np.maximum(q * (1 - q), 1e-12))) / w.sum()


def main(number):
    print(f"Calibration at l = {PLACE[0]}, b = {PLACE[1]} deg, odds of scenario default; {number} mocks a level,")
    print("classes equally likely; errors " + ", ".join(f"{k} {v:g}" for k, v in ERRORS.items()) + "; seed 1")
    event_rates(*PLACE).rates()
    for truth in TRUTHS:
        for level in LEVELS:
            if truth != "the same scenario" and level == "t_E":
                continue
            start = time.perf_counter()
            true, weight, p, classes = mocks(level, number, 1, truth)
            took = time.perf_counter() - start
            what = f"measured: {', '.join(LEVELS[level])}"
            print(f"\ntruth: {truth}; {what}; {true.size} events, {true.size / took:.1f}/s")
            print("  stated       pairs   mean   true share")
            for low, high, n, stated, share, error in reliability(true, weight, p):
                print(f"  {low:.2f}-{high:.2f}  {n:7d}  {stated:.3f}  {share:.3f} +- {error:.3f}")
            found, expected, error = log_score(true, weight, p)
            print(f"  log score {found:.3f} bits, expected {expected:.3f} +- {error:.3f}")
            for name in ("neutron_star", "black_hole"):
                stated, share, error = top(true, weight, p, classes.index(name), number // 10)
                print(f"  top {number // 10} as {name}: stated {stated:.3f}, true {share:.3f} +- {error:.3f}")


if __name__ == "__main__":
    main(int(sys.argv[1]) if len(sys.argv) > 1 else 1000)
