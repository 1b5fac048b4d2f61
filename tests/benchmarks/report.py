"""Rows of the benchmark table, the same in every file here: what, here, against what, how many times faster, aim."""

import platform
import time

import numpy as np

WIDTHS = (50, 12, 30, 8, 7)


def processor():
    """Name of the processor, where the system tells it."""
    try:
        with open("/proc/cpuinfo") as file:
            return next(line.split(":", 1)[1].strip() for line in file if line.startswith("model name"))
    except (OSError, StopIteration):
        return platform.processor() or platform.machine()


def heading(title, note=""):
    """Print a part's title with the machine and the names of the columns."""
    print(f"\n{title}\n{processor()}, Python {platform.python_version()}{', ' if note else ''}{note}")
    _line("", "here", "against", "ratio", "aim")


def row(what, here, against="", ratio=None, aim=""):
    """Print a row. ratio: of `against` over `here`, above one where lensrate takes less."""
    _line(what, here, against, "" if ratio is None else f"{ratio:.3g}", aim)


def _line(*cells):
    first, *rest = (f"{cell:{'<' if i in (0, 2) else '>'}{w}s}" for i, (cell, w) in enumerate(zip(cells, WIDTHS)))
    print("  ".join([first, *rest]).rstrip(), flush=True)


def duration(seconds):
    """Seconds as text with three digits."""
    if seconds >= 1000:
        return f"{seconds:.0f} s"
    for unit, size in (("s", 1.0), ("ms", 1e-3), ("us", 1e-6)):
        if seconds >= size:
            return f"{seconds / size:.3g} {unit}"
    return f"{1e9 * seconds:.3g} ns"


def median(run, n=5, clock=time.process_time):
    """Median time of n runs after a warm-up [s]; of the processor, so that other work weighs little."""
    run()
    times = []
    for _ in range(n):
        start = clock()
        run()
        times.append(clock() - start)
    return float(np.median(times))


def fixed_part(fixed, costs):
    """The fixed cost as text, none where it is below a hundredth of the first."""
    return duration(fixed) if fixed > 0.01 * costs[0] else "none"


def exponent(sizes, costs):
    """Power with which cost grows with size, and the fixed cost beside it: cost = fixed + c size^p, least squares of
    the relative errors."""
    from scipy.optimize import least_squares

    sizes, costs = np.asarray(sizes, float), np.asarray(costs, float)
    low = np.log(costs[-1] / sizes[-1])
    fit = least_squares(
        lambda x: (x[0] + np.exp(x[1]) * sizes ** x[2]) / costs - 1,
        [0.3 * costs[0], low, 1.0],
        bounds=([0.0, -np.inf, 0.0], [costs.min(), np.inf, 3.0]),
        x_scale=[costs[0], 1.0, 1.0],
    )
    return fit.x[2], fit.x[0]
