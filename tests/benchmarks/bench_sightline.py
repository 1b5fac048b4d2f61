"""One sightline: against nested adaptive quadrature, all kicks and components, other kick laws, start-up.

    python tests/benchmarks/bench_sightline.py

One thread, seconds of CPU time, so that what else the machine does weighs little. Medians of several runs after a
warm-up; ratios come from this one run.
"""

# ruff: noqa: E402  (one thread is set before the imports)
import os

os.environ.setdefault("OMP_NUM_THREADS", "1")
os.environ.setdefault("NUMBA_NUM_THREADS", "1")

import platform
import subprocess
import sys
import time
from dataclasses import replace
from pathlib import Path

import astropy.units as u
import numpy as np

sys.path[:0] = [str(Path(__file__).parents[1] / "lensing")]

from test_reference import LENSES, mean_speed, nested, ready

import lensrate
from lensrate.kernels import rates as kernels
from lensrate.lensing import rates
from lensrate.lensing.quadrature import lens_pairs
from lensrate.units import FOUR_G_C2, KAPPA, MAS


def median(run, n=5):
    run()
    times = []
    for _ in range(n):
        start = time.process_time()
        run()
        times.append(time.process_time() - start)
    return float(np.median(times))


def against_quad():
    """The same integrals, one lens and one source component, both ways; seconds, seconds, differences of rate and tau.

    The optical depth comes along with the rate here; the nested quadrature does it again.
    """
    line = ready(1.0, -3.9, "clump")
    i = LENSES["bulge"]
    galaxy = line.model.galaxy
    alone = replace(galaxy, components=(galaxy.components[i],))
    start = time.process_time()
    exact = nested(line, i, [5], lambda theta_E, lens, src: mean_speed(lens, src))
    slow = time.process_time() - start
    # pi theta_E^2 n_L D_L^2 is the optical depth's integrand: nested() has 2 theta_E n_L D_L^2 before the term
    depth = nested(line, i, [5], lambda theta_E, lens, src: 0.5 * np.pi * theta_E)
    src = np.ascontiguousarray(line.src[:, 5:6])
    element = np.zeros(1, dtype=np.int64)
    out = np.zeros((1, 1)), np.zeros((1, 1)), np.zeros(1)

    def fast():
        outer, D_L, w_L = lens_pairs(line.D_S, line.edges, line.numerics.nodes + 2)
        lens = alone.profile(line.line, D_L)
        for array in out:
            array[:] = 0.0
        kernels.moments(outer, line.D_S, src, D_L, w_L, lens, element, FOUR_G_C2, KAPPA, MAS, 16, *out)

    return slow, median(fast, 25), abs(out[1][0, 0] / exact - 1), abs(out[0][0, 0] / depth - 1)


def seconds(*args):
    before = os.times()
    subprocess.run([sys.executable, *args], capture_output=True, check=True)
    after = os.times()
    return after.children_user + after.children_system - before.children_user - before.children_system


def main():
    print(f"{platform.processor() or platform.machine()}, Python {platform.python_version()}, one thread")
    slow, fast, *errors = against_quad()
    print(f"rate of one lens and source component: nested scipy quad {slow:.2f} s, with tau here {1e3 * fast:.2f} ms:")
    print(f"    {slow / fast:.0f} times faster; differences of rate {errors[0]:.1e} and tau {errors[1]:.1e}")
    print("    (quad asked for 3e-6 inside, 1e-5 outside)")
    place = {"l": 1 * u.deg, "b": -3 * u.deg}
    result = lensrate.sightline(**place)
    whole = median(lambda: lensrate.sightline(**place))
    stars = median(lambda: lensrate.sightline(**place, kicks="none"))
    print(f"all kicks, components and classes of a sightline: {whole:.2f} s; without kicks {stars:.2f} s")
    line = result._integrals.ready
    for name, run in (
        ("optical depth and rate, stars", lambda: rates.moments(line)),
        ("the same of all kicks", lambda: rates.kicked_moments(line)),
        ("rate density, stars", lambda: rates.rate_density(line)),
        ("rate density, all kicks", lambda: rates.kicked_rate_density(line, result._integrals.grid)),
    ):
        print(f"    {name:32s} {1e3 * median(run):7.1f} ms")
    laws = iter(np.linspace(100, 300, 60))
    other = median(lambda: result.reforecast(kicks=f"maxwell:{next(laws):.3f}"), 40)
    print(f"another kick law from the same integrals: {1e3 * other:.1f} ms, {whole / other:.0f} times faster")
    libraries = "import numpy, numba, astropy.units, scipy.special, click"
    bare, first, start = [], [], []
    # in turns, so that what else the machine does weighs on all alike
    for _ in range(7):
        bare.append(seconds("-c", libraries))
        start.append(seconds("-m", "lensrate", "--help"))
        first.append(seconds("-m", "lensrate", "sightline", "1.0", "-3.9"))
    bare, first, start = (float(np.median(x[1:])) for x in (bare, first, start))
    print(f"first forecast, warm cache {first:.2f} s: {first / bare:.2f} times an interpreter")
    print(f"that imports the same libraries ({bare:.2f} s); --help {start:.2f} s")


if __name__ == "__main__":
    main()
