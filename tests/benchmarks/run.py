"""All benchmarks with one command, their table on the screen and, where a file is named, in it.

    python tests/benchmarks/run.py [--save tests/benchmarks/results.txt] [NAME ...]

NAME: parts, without "bench_"; all quick ones if none is given. Each runs in a process of its own. Times are of the
processor, ratios of one run; nothing here is asserted.
"""

import subprocess
import sys
import time
from pathlib import Path

HERE = Path(__file__).parent
#: the quick ones, in the order of the table; the others take their time and keep files of
#: their own
PARTS = ("limits", "sightline", "startup", "orbits", "events", "odds", "likelihood", "skymap", "synthesis", "growth")
OWN = ("calibration", "closure", "coverage", "inference")


def main(arguments):
    target = None
    if "--save" in arguments:
        at = arguments.index("--save")
        if at + 1 == len(arguments):
            sys.exit("--save: a file is needed")
        target = Path(arguments[at + 1])
        arguments = arguments[:at] + arguments[at + 2 :]
    unknown = [name for name in arguments if name not in PARTS + OWN]
    if unknown:
        sys.exit(f"{unknown[0]}: not a benchmark; there are {', '.join(PARTS + OWN)}")
    text = [f"Benchmarks of {time.strftime('%d %B %Y')}: python tests/benchmarks/run.py {' '.join(arguments)}".rstrip()]
    print(text[0], flush=True)
    failed = []
    for name in arguments or PARTS:
        run = subprocess.Popen(
            [sys.executable, str(HERE / f"bench_{name}.py")], stdout=subprocess.PIPE, text=True, cwd=HERE.parents[1]
        )
        for line in run.stdout:
            print(line, end="", flush=True)
            text.append(line.rstrip("\n"))
        if run.wait():
            failed.append(name)
            text.append(f"{name}: failed")
    if target is not None:
        target.write_text("\n".join(text) + "\n")
    if failed:
        sys.exit(f"failed: {', '.join(failed)}")


if __name__ == "__main__":
    main(sys.argv[1:])
