"""One sightline: against nested adaptive quadrature, all kicks and components, other kick laws.

    python tests/benchmarks/bench_sightline.py

One thread, seconds of CPU time, so that what else the machine does weighs little. Medians of several runs after a
warm-up; ratios come from this one run.
"""

# ruff: noqa: E402  (one thread is set before the imports)
import os

os.environ.setdefault("OMP_NUM_THREADS", "1")
os.environ.setdefault("NUMBA_NUM_THREADS", "1")

import sys
import time
from dataclasses import replace
from pathlib import Path

import astropy.units as u
import numpy as np
from report import duration, heading, median, row

sys.path[:0] = [str(Path(__file__).parents[1] / "lensing")]

from test_reference import LENSES, mean_speed, nested, ready

import lensrate
from lensrate.kernels import rates as kernels
from lensrate.lensing import rates
from lensrate.lensing.quadrature import lens_pairs, panel_nodes
from lensrate.lensing.rates import _source_rows
from lensrate.units import FOUR_G_C2, KAPPA, MAS

#: accuracy asked of scipy, nodes a panel and directions of ours that reach it, aim
ACCURACIES = ((1e-4, 4, 8, "1000"), (1e-6, 6, 8, "3000"))


def against_quad():
    """The same integrals, one lens and one source component, both ways, at two accuracies.

    The optical depth comes along with the rate here; the nested quadrature does it again.
    """
    line = ready(1.0, -3.9, "clump")
    i = LENSES["bulge"]
    galaxy = line.model.galaxy
    alone = replace(galaxy, components=(galaxy.components[i],))
    element = np.zeros(1, dtype=np.int64)
    out = np.zeros((1, 1)), np.zeros((1, 1)), np.zeros(1)

    def fast(nodes, directions):
        D_S, w = panel_nodes(line.edges, nodes)
        rows = _source_rows(line.model, line.line, line.sources, D_S)
        src = np.ascontiguousarray(rows[:, 5:6])
        src[0] *= w / line.norm
        outer, D_L, w_L = lens_pairs(D_S, line.edges, nodes)
        lens = alone.profile(line.line, D_L)
        for array in out:
            array[:] = 0.0
        kernels.moments(outer, D_S, src, D_L, w_L, lens, element, FOUR_G_C2, KAPPA, MAS, directions, *out)
        return out[1][0, 0], out[0][0, 0]

    best = fast(14, 32)
    for rel, nodes, directions, aim in ACCURACIES:
        start = time.process_time()
        gamma = nested(line, i, [5], lambda theta_E, lens, src: mean_speed(lens, src), rel)
        slow = time.process_time() - start
        # pi theta_E^2 n_L D_L^2 is the optical depth's integrand: nested() has 2 theta_E n_L D_L^2 before the term
        tau = nested(line, i, [5], lambda theta_E, lens, src: 0.5 * np.pi * theta_E, rel)
        took = median(lambda n=nodes, d=directions: fast(n, d), 25)
        row(f"rate and optical depth of one pair to {rel:g}", duration(took), f"nested scipy quad {duration(slow)}",
            slow / took, aim)  # fmt: skip
        pairs = fast(nodes, directions), (gamma, tau)
        ours, theirs = ([abs(x / y - 1) for x, y in zip(pair, best)] for pair in pairs)
        row("    off the best value", "{:.1e} {:.1e}".format(*ours), "{:.1e} {:.1e}".format(*theirs))


def main():
    heading("One sightline", "one thread")
    against_quad()
    place = {"l": 1 * u.deg, "b": -3 * u.deg}
    result = lensrate.sightline(**place)
    whole = median(lambda: lensrate.sightline(**place))
    stars = median(lambda: lensrate.sightline(**place, kicks="none"))
    row("all kicks, components and classes", duration(whole), f"without kicks {duration(stars)}", aim="1.5 s")
    line = result._integrals.ready
    for name, run in (
        ("optical depth and rate, stars", lambda: rates.moments(line)),
        ("the same of all kicks", lambda: rates.kicked_moments(line)),
        ("rate density, stars", lambda: rates.rate_density(line)),
        ("rate density, all kicks", lambda: rates.kicked_rate_density(line, result._integrals.grid)),
    ):
        row(f"    {name}", duration(median(run)))
    laws = iter(np.linspace(100, 300, 60))
    other = median(lambda: result.reforecast(kicks=f"maxwell:{next(laws):.3f}"), 40)
    row("another kick law, same integrals", duration(other), f"whole {duration(whole)}", whole / other, "5 ms")
    row("density over (t_E, pi_E), all classes", duration(median(lambda: result.joint("pi_E"))), aim="20 ms")


if __name__ == "__main__":
    main()
