"""Start-up: `--help` and the first forecast, against a bare interpreter that imports the same libraries.

    python tests/benchmarks/bench_startup.py

Seconds of the processor, in turns, so that what else the machine does weighs on all alike; the first forecast by the
clock too, since two threads share its integrals. "Cold" has no compiled kernels and no unpacked copy of the fields: the
first run after an installation.
"""

import os
import subprocess
import sys
import tempfile
import time

import numpy as np
from report import duration, heading, row

LIBRARIES = "import numpy, numba, astropy.units, scipy.special, click"


def seconds(*args, **more):
    """Processor time and time by the clock of a process."""
    before, start = os.times(), time.perf_counter()
    # as a user has it: compiled modules are kept
    env = {k: v for k, v in os.environ.items() if k != "PYTHONDONTWRITEBYTECODE"}
    subprocess.run([sys.executable, *args], capture_output=True, check=True, env={**env, **more})
    after, end = os.times(), time.perf_counter()
    return after.children_user + after.children_system - before.children_user - before.children_system, end - start


def main():
    heading("Start-up", "processor time of whole processes")
    runs = {
        "empty": ("-c", ""), "click": ("-c", "import click"), "help": ("-m", "lensrate", "--help"),
        "libraries": ("-c", LIBRARIES), "first": ("-m", "lensrate", "sightline", "1.0", "-3.9"),
        "unkicked": ("-m", "lensrate", "sightline", "1.0", "-3.9", "--kicks", "none"),
    }  # fmt: skip
    times = {name: [] for name in runs}
    for _ in range(8):
        for name, args in runs.items():
            times[name].append(seconds(*args))
    # the first round fills caches
    t, clock = ({name: float(np.median([x[i] for x in xs[1:]])) for name, xs in times.items()} for i in (0, 1))
    row("lensrate --help", duration(t["help"]), f"python, import click: {duration(t['click'])}", t["click"] / t["help"],
        "0.15 s")  # fmt: skip
    libraries = f"the libraries alone: {duration(t['libraries'])}"
    row("first forecast, warm", duration(t["first"]), libraries, t["libraries"] / t["first"], "1.5 s")
    row("first forecast, warm, --kicks none", duration(t["unkicked"]), libraries, t["libraries"] / t["unkicked"])
    row("    by the clock", duration(clock["first"]), f"the libraries alone: {duration(clock['libraries'])}",
        clock["libraries"] / clock["first"], "1.5 s")  # fmt: skip
    with tempfile.TemporaryDirectory() as folder:
        cold, _ = seconds(*runs["first"], NUMBA_CACHE_DIR=folder, XDG_CACHE_HOME=folder)
    row("first forecast, cold (compiles)", duration(cold), libraries, t["libraries"] / cold)


if __name__ == "__main__":
    main()
