"""Odds of many events of one sightline by level of data, against weighing mock events; two threads against one.

    python tests/benchmarks/bench_odds.py [number]

One thread, processor time; the sightline is made beforehand. Mock events, every class as often, are weighed by the
Gaussians of an event's errors, in numpy. Their time is scaled to an effective number of a thousand neutron stars and as
many black holes, which makes their odds good to three per cent.
"""

# ruff: noqa: E402  (one thread is set before the imports)
import os

os.environ.setdefault("OMP_NUM_THREADS", "1")

import sys
import time

import astropy.units as u
import bench_calibration as bench
import numpy as np
from report import duration, heading, row

from lensrate.events.odds import class_probabilities, event_rates
from lensrate.lensing import earth

PLACE = bench.PLACE[0] * u.deg, bench.PLACE[1] * u.deg
MOCKS = 1_000_000
WEIGHED = 20  # events
#: what is measured: error of t_E as a factor; of the others, a part of the value and at least an amount
LEVELS = {
    "t_E": (0.1, {}),
    "t_E, pi_E": (0.1, {"pi_E": (0.1, 0.01)}),
    "t_E, pi_E, theta_E": (0.1, {"pi_E": (0.1, 0.01), "theta_E": (0.1, 0.03)}),
    "t_E to 5 %, parallax vector to 25 %": (0.05, {"pi_EN": (0.25, 0.01), "pi_EE": (0.25, 0.01)}),
    "t_E to 20 %, wide parallax vector": (0.2, {"pi_EN": (0.3, 0.1), "pi_EE": (0.3, 0.1)}),
    "t_E, pi_E, source motion": (0.1, {"pi_E": (0.1, 0.01), "mu_S_N": (0.0, 0.3), "mu_S_E": (0.0, 0.3)}),
    "t_E, pi_E, source distance": (0.1, {"pi_E": (0.1, 0.01), "D_S": (0.1, 0.5)}),
}


def columns(draws):
    """What can be measured of mock events, by the names of `observed.MEASURED`."""
    out = {name: getattr(draws, name) for name in ("t_E", "pi_E", "theta_E", "D_S")}
    north, east = earth.to_north_east(draws.mu_rel_l, draws.mu_rel_b, *PLACE)
    mu = np.hypot(north, east)
    out["pi_EN"], out["pi_EE"] = draws.pi_E * north / mu, draws.pi_E * east / mu
    out["mu_S_N"], out["mu_S_E"] = earth.to_north_east(draws.mu_S_l, draws.mu_S_b, *PLACE)
    return out


def measured(true, factor, errors):
    """Values with errors, and the errors."""
    rng = np.random.default_rng(1)
    out = {}
    for name, (part, least) in {"t_E": (factor, 0.0), **errors}.items():
        error = np.maximum(part * np.abs(true[name]), least)
        value = true[name] + error * rng.standard_normal(error.size)
        if name in ("t_E", "pi_E", "theta_E", "D_S"):
            value = np.maximum(value, 0.3 * error)
        out[name] = value, error
    return out


def weighing(mocks, draws, dark, data):
    """Seconds of processor time an event to an effective number of a thousand of each dark class, the median."""
    costs = []
    for i in range(WEIGHED):
        start = time.process_time()
        chi2 = sum(((mocks[name] - value[i]) / error[i]) ** 2 for name, (value, error) in data.items())
        # each class about its own best, so that nothing underflows
        w = [draws.weight[mine] * np.exp(-0.5 * (chi2[mine] - chi2[mine].min())) for mine in dark]
        took = time.process_time() - start
        costs.append(took * 1e3 / min(x.sum() ** 2 / np.sum(x * x) for x in w))
    return float(np.median(costs))


def main(number):
    heading("Odds of lens classes", f"one thread, {number} events of one sightline; per event")
    start = time.process_time()
    event_rates(*bench.PLACE).rates()
    row("rate densities of the sightline", duration(time.process_time() - start))
    sampler = bench.sampler("the same scenario")
    true = columns(sampler.draw(number, 1, weighted=False, full=True))
    draws = sampler.draw(MOCKS, 2, full=True, tilt="equal")
    mocks = columns(draws)
    names = [c.name for c in event_rates(*bench.PLACE).classes]
    dark = [draws.lens_class == names.index(name) for name in ("neutron_star", "black_hole")]
    for level, (factor, errors) in LEVELS.items():
        data = measured(true, factor, errors)
        start = time.process_time()
        class_probabilities(*PLACE, data)
        took = (time.process_time() - start) / number
        slow = weighing(mocks, draws, dark, data)
        row(level, duration(took), f"mock events {duration(slow)}", slow / took)
        if level == "t_E, pi_E, theta_E":
            clock, found = [], []
            for jobs in (1, 2):
                start = time.perf_counter()
                found.append(class_probabilities(*PLACE, data, jobs=jobs)[1])
                clock.append((time.perf_counter() - start) / number)
            same = np.array_equal(*found, equal_nan=True)
            row("    by the clock, two threads", duration(clock[1]), f"one thread {duration(clock[0])}",
                clock[0] / clock[1], "2" if same else "differs")  # fmt: skip


if __name__ == "__main__":
    main(int(sys.argv[1]) if len(sys.argv) > 1 else 60)
