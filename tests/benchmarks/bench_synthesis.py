"""Synthesis: time and peak memory against tracers and threads, and how time grows with tracers.

    python tests/benchmarks/bench_synthesis.py

Two components (the oldest thin disc and the bulge) of the default Galaxy with all kick bins and a small equilibrium,
whose cost does not depend on the tracers. Each run is a process of its own; wall-clock time for threads, of the
processor for growth.
"""

import json
import subprocess
import sys

from report import duration, exponent, fixed_part, heading, row

RUN = """
import json, os, resource, sys, time
from dataclasses import replace
from lensrate.galaxy.potential import Potential
from lensrate.remnants.synthesis import Settings, synthesize
from lensrate.scenario import Scenario
tracers, jobs, which = int(sys.argv[1]), int(sys.argv[2]), sys.argv[3].split(",")
galaxy = Scenario.read("default").build_galaxy()
found = {c.element: c for c in galaxy.components}
galaxy = replace(galaxy, components=tuple(found[name] for name in which))
potential = Potential.read(galaxy.potential)
settings = Settings(tracers=tracers, bundles=512, iterations=50)
synthesize(galaxy, potential, replace(settings, tracers=256, kick_edges=(0.0, 50.0)), jobs=jobs)
before = os.times()
wall = time.perf_counter()
synthesize(galaxy, potential, settings, jobs=jobs)
wall = time.perf_counter() - wall
after = os.times()
peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
print(json.dumps({"wall": wall, "cpu": after.user + after.system - before.user - before.system, "MB": peak}))
"""
SIZES = (500, 1000, 2000, 4000)


def run(tracers, jobs, components):
    done = subprocess.run(
        [sys.executable, "-c", RUN, str(tracers), str(jobs), ",".join(components)], capture_output=True, text=True,
        check=True,
    )  # fmt: skip
    return json.loads(done.stdout)


def main():
    from lensrate.remnants.synthesis import stellar_components
    from lensrate.scenario import Scenario

    heading("Synthesis", "two components, all kick bins, 512 bundles")
    names = [c.element for c in stellar_components(Scenario.read("default").build_galaxy())]
    pair = [[n for n in names if n.startswith("thin_disc")][-1], "bulge"]
    one = [run(n, 1, pair) for n in SIZES]
    for n, r in zip(SIZES, one):
        row(f"{n:,} tracers an element, one thread", duration(r["cpu"]), f"peak {r['MB']:.0f} MB")
    costs = [r["cpu"] for r in one]
    power, fixed = exponent(SIZES, costs)
    row("growth with tracers", f"n^{power:.2f}", f"fixed {fixed_part(fixed, costs)}")
    two = run(SIZES[-1], 2, pair)
    ratio = one[-1]["wall"] / two["wall"]
    wall = f"one thread {duration(one[-1]['wall'])}"
    row(f"{SIZES[-1]:,} tracers, two threads", duration(two["wall"]), wall, ratio, "2")
    row("memory of the second thread", f"{two['MB'] - one[-1]['MB']:.0f} MB", f"peak {two['MB']:.0f} MB")


if __name__ == "__main__":
    main()
