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
from report import duration, exponent, heading, median, row

import lensrate
from lensrate.kernels import rates as kernels
from lensrate.lensing import rates
from lensrate.lensing.sampler import Sampler
from lensrate.units import FOUR_G_C2, KAPPA, MAS


def grown(what, sizes, cost):
    """Measure the cost of each size and print its power."""
    costs = [cost(n) for n in sizes]
    power, fixed = exponent(sizes, costs)
    span = f"{what}, {sizes[0]:,} to {sizes[-1]:,}"
    row(span, f"n^{power:.2f}", f"fixed {duration(fixed)}, last {duration(costs[-1])}")


def sightlines(n):
    l = (1 + 0.01 * np.arange(n)) * u.deg
    return median(lambda: [lensrate.sightline(x, -3 * u.deg, kicks="none") for x in l], 5)


def elements(line, every):
    """Optical depth and rate of one in so many kicked Gaussians, as `rates.kicked_moments` has them; seconds."""
    kicked = line.model.kicked
    D_L, w_L = rates.panel_nodes(rates._lens_edges(line, line.kicked_table.end), rates._LENS_NODES)
    first, D_S, src = rates._behind(line, D_L, rates._joined(line.edges), rates._KICKED_NODES)
    out = np.zeros((2, len(kicked.host), D_L.size))
    depth, bundles = np.empty(D_L.size), np.empty(src.shape)
    counts = kernels.gather_behind(D_L, first, D_S, src, rates._BUNDLE, depth, bundles)
    lens = np.ascontiguousarray(line.kicked_table.at(D_L)[:, ::every])
    element = np.ascontiguousarray(kicked.element_of_row[::every])

    def run():
        kernels.lens_moments(
            D_L, w_L, lens, element, first, counts, depth, bundles, FOUR_G_C2, KAPPA, MAS, rates._KICKED_DIRECTIONS,
            *out,
        )  # fmt: skip

    return median(run)


def main():
    heading("Growth of cost", "one thread")
    grown("sightlines, stars", (1, 2, 4, 8), sightlines)
    result = lensrate.sightline(1 * u.deg, -3 * u.deg)
    line = result._integrals.ready
    n = line.model.kicked.element_of_row.size
    grown("Gaussians of kicked elements, rate", (n // 8, n // 4, n // 2, n), lambda k: elements(line, n // k))
    sampler = Sampler.of(result)
    grown(
        "mock events, core columns", (20_000, 80_000, 320_000, 1_280_000), lambda k: median(lambda: sampler.draw(k, 1))
    )


if __name__ == "__main__":
    main()
