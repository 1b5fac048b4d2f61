"""Start-up: `--help` and the first forecast, against a bare interpreter that imports the same libraries.

    python tests/benchmarks/bench_startup.py

Seconds of the processor, in turns, so that what else the machine does weighs on all alike. "Cold" has no compiled
kernels and no unpacked copy of the fields: the first run after an installation.
"""

import os
import subprocess
import sys
import tempfile

import numpy as np
from report import duration, heading, row

LIBRARIES = "import numpy, numba, astropy.units, scipy.special, click"


def seconds(*args, **more):
    before = os.times()
    # as a user has it: compiled modules are kept
    env = {k: v for k, v in os.environ.items() if k != "PYTHONDONTWRITEBYTECODE"}
    subprocess.run([sys.executable, *args], capture_output=True, check=True, env={**env, **more})
    after = os.times()
    return after.children_user + after.children_system - before.children_user - before.children_system


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
    t = {name: float(np.median(x[1:])) for name, x in times.items()}
    row("lensrate --help", duration(t["help"]), f"python, import click: {duration(t['click'])}", t["click"] / t["help"],
        "0.15 s")  # fmt: skip
    libraries = f"the libraries alone: {duration(t['libraries'])}"
    row("first forecast, warm", duration(t["first"]), libraries, t["libraries"] / t["first"], "1.5 s")
    row("first forecast, warm, --kicks none", duration(t["unkicked"]), libraries, t["libraries"] / t["unkicked"])
    with tempfile.TemporaryDirectory() as folder:
        cold = seconds(*runs["first"], NUMBA_CACHE_DIR=folder, XDG_CACHE_HOME=folder)
    row("first forecast, cold (compiles)", duration(cold), libraries, t["libraries"] / cold)


if __name__ == "__main__":
    main()
