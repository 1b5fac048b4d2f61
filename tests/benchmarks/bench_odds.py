"""Odds of many events of one sightline: events per second by level of data, one thread and two.

    python tests/benchmarks/bench_odds.py [number]

Ratios come from this one run; the sightline is made beforehand, and said how long that took.
"""

import sys
import time

import astropy.units as u
import bench_calibration as bench
import numpy as np

from lensrate.events.odds import class_probabilities, event_rates


def main(number):
    start = time.perf_counter()
    event_rates(*bench.PLACE).rates()
    print(f"sightline {time.perf_counter() - start:.1f} s, {number} events a row")
    draws = bench.sampler("the same scenario").draw(number, 1, weighted=False)
    for level, names in bench.LEVELS.items():
        rng = np.random.default_rng(1)
        measured = {}
        for name in names:
            value = getattr(draws, name)
            # a tenth of the value or the smallest error that surveys reach
            error = np.maximum(0.1 * value, {"t_E": 0.5, "pi_E": 0.01, "theta_E": 0.03}[name])
            measured[name] = np.maximum(value + error * rng.standard_normal(number), 0.3 * error), error
        took, same = [], []
        for jobs in (1, 2):
            start = time.perf_counter()
            same.append(class_probabilities(bench.PLACE[0] * u.deg, bench.PLACE[1] * u.deg, measured, jobs=jobs)[1])
            took.append(time.perf_counter() - start)
        # one thread first: it fills what is kept by timescale
        print(f"{level:10s} {number / took[0]:6.1f} and {number / took[1]:6.1f} per s, ratio {took[0] / took[1]:.2f}, "
              f"largest difference {np.nanmax(np.abs(same[0] - same[1])):.1e}")  # fmt: skip


if __name__ == "__main__":
    main(int(sys.argv[1]) if len(sys.argv) > 1 else 1000)
