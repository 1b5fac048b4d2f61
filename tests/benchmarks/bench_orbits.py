"""Orbits against galpy's compiled integrators, one thread each: `python tests/benchmarks/bench_orbits.py`.

Both integrate the same bodies in the same needle-bar potential for 2 Gyr; errors are of Jacobi's integral over
(233 km/s)^2. Times are the best of three after a warm-up, of the processor, since other work may share it. Steps are
those of a body in a Gyr, one force each; adaptive methods do not say theirs. Ratios hold every method of galpy
against the time-transformed leapfrog at the same error, and its leapfrog for the same number of steps too.
"""

# ruff: noqa: E402  (one thread and the path of the tests are set before the imports)
import os

os.environ.setdefault("OMP_NUM_THREADS", "1")

import sys
import tempfile
import time
import warnings
from pathlib import Path

import astropy.units as u
import numpy as np
from report import duration, heading, row

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
        start = time.process_time()
        result = run()
        times.append(time.process_time() - start)
    return min(times) / BODIES / GYR * 1e6, result


def errors(potential, before, after):
    change = (states_energies(potential, after) - states_energies(potential, before))[:, 1]
    return np.percentile(np.abs(change) / 233**2, [50, 90, 99])


def ours(potential, states, eta):
    order = np.argsort(states_energies(potential, states)[:, 0])

    def run():
        end = np.ascontiguousarray(states[order])
        return end, follow(*potential.packed, potential.omega, step(eta), end, GYR * 1e3 * KPC_PER_MYR)

    cost, (end, steps) = best_of_three(run)
    return cost, steps / BODIES / GYR, errors(potential, states[order], end)


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
    steps = GYR * 1e3 * KPC_PER_MYR / options["dt"] / GYR if "dt" in options else np.nan
    return cost, steps, errors(potential, states, end)


def at_error(rows, p90):
    """Cost at an error, by power laws between the steps measured; beyond them by second order (error over four, cost
    twice)."""
    log = np.log([[cost, error[1]] for _, cost, _, error in rows])
    log = log[np.argsort(log[:, 1])]
    wanted = np.log(p90)
    beyond = 0.5 * (max(0.0, log[0, 1] - wanted) - max(0.0, wanted - log[-1, 1]))
    return np.exp(np.interp(wanted, log[:, 1], log[:, 0]) + beyond)


def main():
    needle, default = Potential.read("needle"), Potential.read("default").for_orbits()
    place, velocity = (q.value for q in population(needle, BODIES, 1))
    states = bar_states(needle, place, velocity)
    heading("Orbits", f"one thread, {BODIES} bodies, {GYR} Gyr; per body and Gyr; error: p90 of Jacobi's integral")
    mine = [(f"eta {eta}", *ours(needle, states, eta)) for eta in (0.2, 0.1, 0.05, 0.025)]
    for label, cost, steps, error in mine:
        row(f"lensrate {label}", duration(1e-6 * cost), f"{error[1]:.1e}, {steps:.0f} steps")
    rows = []
    for method, options in (
        ("dop853_c", {"rtol": 1e-4, "atol": 1e-4}),
        ("dop853_c", {"rtol": 1e-5, "atol": 1e-5}),
        ("dop853_c", {"rtol": 1e-6, "atol": 1e-6}),
        ("dopr54_c", {"rtol": 1e-6, "atol": 1e-6}),
        *(("leapfrog_c", {"dt": myr * KPC_PER_MYR}) for myr in (1.0, 0.5, 0.25, 0.125)),
    ):
        shown = {"dt": "dt {:.3g} Myr".format(options["dt"] / KPC_PER_MYR)} if "dt" in options else options
        label = " ".join([method, *(v if k == "dt" else f"{k} {v:.2g}" for k, v in shown.items())])
        rows.append((label, *theirs(needle, place, velocity, states, method=method, **options)))
    for label, cost, steps, error in rows:
        fixed = f", {steps:.0f} steps" if np.isfinite(steps) else ""
        aim = "15" if label.startswith("dop") else ""
        row(f"galpy {label}", duration(1e-6 * cost), f"{error[1]:.1e}{fixed}", cost / at_error(mine, error[1]), aim)
    print("    ratio: its time over lensrate's at the same error")
    leapfrogs = [r for r in rows if r[0].startswith("leapfrog_c")]
    for label, cost, _, error in mine[1:3]:
        row(f"lensrate {label} against galpy's leapfrog", duration(1e-6 * cost), f"{error[1]:.1e}",
            at_error(leapfrogs, error[1]) / cost)  # fmt: skip
    same = np.median([c / n for _, c, n, _ in leapfrogs]) / (mine[1][1] / mine[1][2])
    row("    the same for one step of each", duration(1e-6 * mine[1][1] / mine[1][2]), "", same, "25")
    place, velocity = (q.to(w) for q, w in zip(population(default, BODIES, 1), (u.kpc, u.km / u.s)))
    _, cost, steps, error = "", *ours(default, bar_states(default, place.value, velocity.value), 0.1)
    step_ratio = (mine[1][1] / mine[1][2]) / (cost / steps)
    row("default potential, eta 0.1, a step", duration(1e-6 * cost / steps), f"{error[1]:.1e}", step_ratio, "0.4")


if __name__ == "__main__":
    main()
