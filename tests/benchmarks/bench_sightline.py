"""One sightline: against nested adaptive quadrature, all kicks and components, other kick laws, start-up.

    python tests/benchmarks/bench_sightline.py

One thread. Times are medians of several runs after a warm-up; ratios come from this one run.
"""

# ruff: noqa: E402  (one thread is set before the imports)
import os

os.environ.setdefault("OMP_NUM_THREADS", "1")
os.environ.setdefault("NUMBA_NUM_THREADS", "1")

import platform
import subprocess
import sys
import time
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
        start = time.perf_counter()
        run()
        times.append(time.perf_counter() - start)
    return float(np.median(times))


def against_quad():
    """The same integral, one lens and one source component, both ways; returns seconds, seconds, difference."""
    line = ready(1.0, -3.9, "clump")
    i = LENSES["bulge"]
    start = time.perf_counter()
    exact = nested(line, i, [5], lambda theta_E, lens, src: mean_speed(lens, src))
    slow = time.perf_counter() - start
    src = np.ascontiguousarray(line.src[:, 5:6])
    element = np.zeros(1, dtype=np.int64)
    out = np.zeros((1, 1)), np.zeros((1, 1)), np.zeros(1)

    def fast():
        outer, D_L, w_L = lens_pairs(line.D_S, line.edges, line.numerics.nodes + 2)
        lens = np.ascontiguousarray(line.model.galaxy.profile(line.line, D_L)[:, i : i + 1])
        for array in out:
            array[:] = 0.0
        kernels.moments(outer, line.D_S, src, D_L, w_L, lens, element, FOUR_G_C2, KAPPA, MAS, 16, *out)

    return slow, median(fast), abs(out[1][0, 0] / exact - 1)


def command(*args):
    return lambda: subprocess.run([sys.executable, *args], capture_output=True, check=True)


def main():
    print(f"{platform.processor() or platform.machine()}, Python {platform.python_version()}, one thread")
    slow, fast, error = against_quad()
    print(f"rate of one lens and source component: nested scipy quad {slow:.2f} s, here {1e3 * fast:.2f} ms:")
    print(f"    {slow / fast:.0f} times faster, difference {error:.1e} (quad asked for 3e-6 inside, 1e-5 outside)")
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
    print(f"another kick law: {1e3 * median(lambda: result.reforecast(kicks=f'maxwell:{next(laws):.3f}'), 40):.1f} ms")
    bare = median(command("-c", "import numpy, numba, astropy.units, scipy.special, click"))
    print(f"start-up: --help {median(command('-m', 'lensrate', '--help')):.2f} s, ", end="")
    print(f"bare import of the libraries {bare:.2f} s, ", end="")
    print(f"first forecast, warm cache {median(command('-m', 'lensrate', 'sightline', '1.0', '-3.9')):.2f} s")


if __name__ == "__main__":
    main()
