"""Sky maps: time of a pixel with gathered sources and with a sightline's integrals, and memory against pixels.

    python tests/benchmarks/bench_skymap.py [quick]

One thread. Processor time, so that other work on the machine counts little; ratios come from this one run.
"""

import os

os.environ.setdefault("OMP_NUM_THREADS", "1")
os.environ.setdefault("NUMBA_NUM_THREADS", "1")

import subprocess
import sys
import time

import numpy as np
from report import duration, heading, row

PLACES = [(l, b) for b in (-6.0, -4.0, -3.0, -2.0, -1.0, 0.0, 2.0, 5.0) for l in (-4.0, 0.0, 3.0)]
MEMORY = """
import resource, sys
import astropy.units as u, lensrate
columns = int(sys.argv[1]) // 10
lensrate.skymap((0, 0.1 * (columns - 1)) * u.deg, (-3.9, -3) * u.deg, step=0.1 * u.deg)
print(resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024)
"""


def pixel_times():
    """Processor seconds of each place, gathered and precise."""
    from lensrate.scenario import Scenario
    from lensrate.surveys.pixels import PixelWork

    out = []
    for precise in (False, True):
        work = PixelWork(Scenario.read("default"), precise=precise)
        work((1.0, -3.9, {}))
        times = []
        for place in PLACES:
            start = time.thread_time()
            work((*place, {}))
            times.append(time.thread_time() - start)
        out.append(np.array(times))
    return out


def peak(n):
    """Peak memory [MB] of a process that makes a map of n pixels."""
    done = subprocess.run([sys.executable, "-c", MEMORY, str(n)], capture_output=True, text=True, check=True)
    return float(done.stdout)


def main():
    heading("Sky map", "one thread")
    fast, slow = pixel_times()
    row(f"a pixel, sources gathered, mean of {len(PLACES)}", duration(fast.mean()),
        f"as a sightline {duration(slow.mean())}", slow.mean() / fast.mean())  # fmt: skip
    row("    its largest", duration(fast.max()), duration(slow.max()))
    row("2,000 pixels on two cores, worked out", f"{2000 * fast.mean() / 2 / 60:.1f} min")
    sizes = (20, 80) if "quick" in sys.argv else (100, 400)
    few, many = (peak(n) for n in sizes)
    row(f"peak memory, {sizes[1]} pixels", f"{many:.0f} MB", f"{sizes[0]} pixels: {few:.0f} MB")


if __name__ == "__main__":
    main()
