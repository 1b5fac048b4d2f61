"""Orbits against galpy's compiled integrators, one thread each: `python tests/benchmarks/bench_orbits.py`.

Both integrate the same bodies in the same needle-bar potential for 2 Gyr; errors are of Jacobi's integral over
(233 km/s)^2. Times are the best of three after a warm-up.
"""

# ruff: noqa: E402  (one thread and the path of the tests are set before the imports)
import os

os.environ.setdefault("OMP_NUM_THREADS", "1")

import platform
import sys
import tempfile
import time
import warnings
from pathlib import Path

import astropy.units as u
import numpy as np

sys.path[:0] = [str(Path(__file__).parents[1] / "remnants"), str(Path(__file__).parents[1])]
warnings.simplefilter("ignore")

# galpy writes a settings file into the home folder when first imported
os.environ["HOME"] = tempfile.mkdtemp()
from galpy.orbit import Orbit
from galpy.potential import MiyamotoNagaiPotential, NFWPotential, PlummerPotential, SoftenedNeedleBarPotential
from test_orbits import population

from lensrate.galaxy.potential import Potential
from lensrate.kernels.orbits import follow
from lensrate.remnants.orbits import bar_states, states_energies, step
from lensrate.units import KPC_PER_MYR, G

BODIES, GYR = 256, 2.0


def best_of_three(run):
    run()
    times = []
    for _ in range(3):
        start = time.perf_counter()
        result = run()
        times.append(time.perf_counter() - start)
    return min(times) / BODIES / GYR * 1e6, result


def errors(potential, before, after):
    change = (states_energies(potential, after) - states_energies(potential, before))[:, 1]
    return np.percentile(np.abs(change) / 233**2, [50, 90, 99])


def ours(potential, states, eta):
    order = np.argsort(states_energies(potential, states)[:, 0])

    def run():
        end = np.ascontiguousarray(states[order])
        follow(*potential.packed, potential.omega, step(eta), end, GYR * 1e3 * KPC_PER_MYR)
        return end

    cost, end = best_of_three(run)
    return cost, errors(potential, states[order], end)


def theirs(potential, place, velocity, states, **options):
    gm = {m.name: G * m.model.mass.value for m in potential.members}
    field = (
        PlummerPotential(amp=gm["nucleus"], b=0.3)
        + SoftenedNeedleBarPotential(
            amp=gm["bar"], a=3.5, b=0.4, c=0.3, pa=np.pi - np.radians(27), omegab=potential.omega
        )
        + MiyamotoNagaiPotential(amp=gm["disc"], a=2.8, b=0.28)
        + NFWPotential(amp=gm["halo"], a=11.13)
    )
    radius, phi = np.hypot(place[:, 0], place[:, 1]), np.arctan2(place[:, 1], place[:, 0])
    c, s = np.cos(phi), np.sin(phi)
    v_r, v_t = c * velocity[:, 0] + s * velocity[:, 1], c * velocity[:, 1] - s * velocity[:, 0]
    start = np.column_stack([radius, v_r, v_t, place[:, 2], velocity[:, 2], phi])
    t = GYR * 1e3 * KPC_PER_MYR

    def run():
        orbits = Orbit(start)
        orbits.integrate(np.array([0.0, t]), field, progressbar=False, numcores=1, **options)
        return orbits

    cost, o = best_of_three(run)
    c, s = np.cos(potential.omega * t), np.sin(potential.omega * t)
    x, y, vx, vy = o.x(t), o.y(t), o.vx(t), o.vy(t)
    x, y, vx, vy = c * x + s * y, c * y - s * x, c * vx + s * vy, c * vy - s * vx
    end = bar_states(potential, np.column_stack([x, y, o.z(t)]), np.column_stack([vx, vy, o.vz(t)]))
    return cost, errors(potential, states, end)


def main():
    needle, default = Potential.read("needle"), Potential.read("default").for_orbits()
    place, velocity = (q.value for q in population(needle, BODIES, 1))
    states = bar_states(needle, place, velocity)
    print(platform.processor() or platform.machine(), f"{BODIES} bodies, {GYR} Gyr, microseconds per body and Gyr")
    rows = [(f"lensrate eta {eta}", *ours(needle, states, eta)) for eta in (0.1, 0.05, 0.025)]
    for method, options in (
        ("dop853_c", {"rtol": 1e-4, "atol": 1e-4}),
        ("dop853_c", {"rtol": 1e-5, "atol": 1e-5}),
        ("dop853_c", {"rtol": 1e-6, "atol": 1e-6}),
        ("dopr54_c", {"rtol": 1e-6, "atol": 1e-6}),
        ("leapfrog_c", {"dt": 0.25 * KPC_PER_MYR}),
    ):
        label = " ".join([method, *(f"{k} {v:.2g}" for k, v in options.items())])
        rows.append((label, *theirs(needle, place, velocity, states, method=method, **options)))
    place, velocity = (q.to(w) for q, w in zip(population(default, BODIES, 1), (u.kpc, u.km / u.s)))
    rows.append(("lensrate eta 0.1, default", *ours(default, bar_states(default, place.value, velocity.value), 0.1)))
    print(f"{'':40s}{'us':>8s}{'median':>10s}{'p90':>10s}{'p99':>10s}")
    for label, cost, (median, p90, p99) in rows:
        print(f"{label:40s}{cost:8.1f}{median:10.1e}{p90:10.1e}{p99:10.1e}")


if __name__ == "__main__":
    main()
