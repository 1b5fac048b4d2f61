"""Growth of cost with sightlines, kicked elements and events, as the power p of a fit of fixed + c n^p.

    python tests/benchmarks/bench_growth.py

One thread, processor time; tracers are in bench_synthesis.py. A power of one is the best that can be had; the fixed
part is what the first costs more.
"""

# ruff: noqa: E402  (one thread is set before the imports)
import os

os.environ.setdefault("OMP_NUM_THREADS", "1")
os.environ.setdefault("NUMBA_NUM_THREADS", "1")

import astropy.units as u
import numpy as np
from bench_limits import kicked_integral
from report import duration, exponent, fixed_part, heading, median, row

import lensrate
from lensrate.lensing.sampler import Sampler


def grown(what, sizes, cost):
    """Measure the cost of each size and print its power."""
    costs = [cost(n) for n in sizes]
    power, fixed = exponent(sizes, costs)
    span = f"{what}, {sizes[0]:,} to {sizes[-1]:,}"
    row(span, f"n^{power:.2f}", f"fixed {fixed_part(fixed, costs)}, last {duration(costs[-1])}")


def sightlines(n):
    l = (1 + 0.01 * np.arange(n)) * u.deg
    return median(lambda: [lensrate.sightline(x, -3 * u.deg, kicks="none") for x in l], 5)


def main():
    heading("Growth of cost", "one thread")
    grown("sightlines, stars", (1, 2, 4, 8), sightlines)
    result = lensrate.sightline(1 * u.deg, -3 * u.deg)
    line = result._integrals.ready
    n = line.model.kicked.element_of_row.size
    sizes = (n // 8, n // 4, n // 2, n)
    grown("Gaussians of kicked elements, rate", sizes, lambda k: median(kicked_integral(line, n // k)[0]))
    sampler = Sampler.of(result)
    grown(
        "mock events, core columns", (20_000, 80_000, 320_000, 1_280_000), lambda k: median(lambda: sampler.draw(k, 1))
    )


if __name__ == "__main__":
    main()
