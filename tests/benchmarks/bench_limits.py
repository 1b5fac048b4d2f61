"""How far the kernels are from the hardware: operations counted against what this machine does at its best.

    python tests/benchmarks/bench_limits.py

First the best of this core: multiply-adds, the kernels' own exponential, divisions and roots over numbers in the
innermost cache, a look-up in the table of mean absolute values, random numbers, memory. Then each kernel: its costly
operations are counted (from its nodes, or stated by hand from its text), their times added as if nothing overlapped,
and held against the measured time. A ratio of one: the time is that of the operations, in full vector units. Below one
lies what a kernel spends on branches, gathering and loops too short for the vector units.
"""

# ruff: noqa: E402  (one thread is set before the imports)
import os

os.environ.setdefault("OMP_NUM_THREADS", "1")
os.environ.setdefault("NUMBA_NUM_THREADS", "1")

import math

import astropy.units as u
import numba
import numpy as np
from report import duration, heading, median, row

import lensrate
from lensrate.galaxy.potential import Potential
from lensrate.kernels import rates as kernels
from lensrate.kernels.maths import fexp, mean_abs
from lensrate.kernels.orbits import follow
from lensrate.kernels.potential import HOMEOIDS, LANES, MIYAMOTO_NAGAI, NFW
from lensrate.kernels.rings import lay, major_axis, order_for
from lensrate.kernels.speeds import ROUND, SLOW
from lensrate.lensing import rates, rings
from lensrate.lensing.sampler import Sampler
from lensrate.remnants.orbits import step
from lensrate.units import FOUR_G_C2, KAPPA, KPC_PER_MYR, MAS

N, TIMES = 1024, 2000


@numba.njit(error_model="numpy")
def _add(x, y):
    for _ in range(TIMES):
        for i in range(N):
            # eight in a chain, so that loading and storing do not decide
            a = x[i]
            for _ in range(8):
                a = a * 0.999 + 1e-3
            y[i] = a


@numba.njit(error_model="numpy")
def _exp(x, y):
    for _ in range(TIMES):
        for i in range(N):
            y[i] = fexp(-x[i])


@numba.njit(error_model="numpy")
def _divide(x, y):
    for _ in range(TIMES):
        for i in range(N):
            y[i] = 1.3 / x[i]


@numba.njit(error_model="numpy")
def _root(x, y):
    for _ in range(TIMES):
        for i in range(N):
            y[i] = math.sqrt(x[i])


@numba.njit(error_model="numpy")
def _look(x, y):
    for _ in range(TIMES):
        for i in range(N):
            y[i] = mean_abs(x[i])


@numba.njit(error_model="numpy")
def _copy(x, y):
    for i in range(x.size):
        y[i] = x[i]


def peaks():
    """Seconds of one operation at this core's best, by name."""
    x, y = np.random.default_rng(1).uniform(0.5, 4.0, N), np.empty(N)
    best = {}
    for name, run, each in (("add", _add, 8), ("exp", _exp, 1), ("divide", _divide, 1), ("root", _root, 1),
                            ("look", _look, 1)):  # fmt: skip
        best[name] = median(lambda run=run: run(x, y), 9) / (N * TIMES * each)
    rng = np.random.default_rng(1)
    best["uniform"] = median(lambda: rng.random(10**6), 9) / 1e6
    best["normal"] = median(lambda: rng.standard_normal(10**6), 9) / 1e6
    big = np.ones(2 * 10**7), np.empty(2 * 10**7)
    best["memory"] = median(lambda: _copy(*big), 5) / (16 * big[0].size)
    return best


def least(best, **counts):
    """Seconds that so many operations take at their best."""
    return sum(n * best[name] for name, n in counts.items())


def directions(lens, src, n):
    """Directions that `mean_lengths` takes of n, for arrays of lens and source moments."""
    ml, mb, cll, clb, cbb = lens[1] - src[1], lens[2] - src[2], *(lens[i] + src[i] for i in (3, 4, 5))
    trace = cll + cbb
    easy = (trace**2 < ROUND * (cll * cbb - clb**2)) & (ml**2 + mb**2 < SLOW * trace)
    return np.where(easy & (n >= 16), n // 2, n)


def speeds(best, evaluations):
    """A direction of `mean_lengths`: a root, a division, a look-up, and 6 multiply-adds by its text."""
    return least(best, root=evaluations, divide=evaluations, look=evaluations, add=6 * evaluations)


def stars(line, best):
    outer, D_L, w_L = rates.lens_pairs(line.D_S, line.edges, line.numerics.nodes + 2)
    lens = line.model.galaxy.profile(line.line, D_L)
    n = int(line.numerics.half_circle)
    E, S = lens.shape[1], line.src.shape[1]
    out = np.zeros((E, S)), np.zeros((E, S)), np.zeros(E)
    taken = median(lambda: kernels.moments(
        outer, line.D_S, line.src, D_L, w_L, lens, np.arange(E), FOUR_G_C2, KAPPA, MAS, n, *out
    ))  # fmt: skip
    src = line.src[:, :, outer]
    counted = (lens[0][:, None] > 0) & (src[0][None] > 0) & (1 / D_L > 1 / line.D_S[outer])
    evaluations = int(directions(lens[:, :, None], src[:, None], n)[counted].sum())
    return taken, speeds(best, evaluations), evaluations


def kicked_integral(line, every=1):
    """The call that gives optical depth and rate of one in so many kicked Gaussians, as `rates.kicked_moments` makes
    it, and what it sums over: lens nodes, lens rows, sources behind each node."""
    D_L, w_L = rates.panel_nodes(rates._lens_edges(line, line.kicked_table.end), rates._LENS_NODES)
    first, D_S, src = rates._behind(line, D_L, rates._joined(line.edges), rates._KICKED_NODES)
    element = np.ascontiguousarray(line.model.kicked.element_of_row[::every])
    lens = np.ascontiguousarray(line.kicked_table.at(D_L)[:, ::every])
    out = np.zeros((2, len(line.model.kicked.host), D_L.size))
    depth, bundles = np.empty(D_L.size), np.empty(src.shape)
    counts = kernels.gather_behind(D_L, first, D_S, src, rates._BUNDLE, depth, bundles)

    def run():
        kernels.lens_moments(
            D_L, w_L, lens, element, first, counts, depth, bundles, FOUR_G_C2, KAPPA, MAS, rates._KICKED_DIRECTIONS,
            *out,
        )  # fmt: skip

    return run, (D_L, lens, first, counts, bundles)


def kicked(line, best):
    run, (D_L, lens, first, counts, bundles) = kicked_integral(line)
    n, taken, evaluations = rates._KICKED_DIRECTIONS, median(run), 0
    for m in range(D_L.size):
        behind = bundles[:, :, first[m] : first[m] + counts[m]]
        used = (lens[0, :, m] > 0)[:, None, None] & (behind[0] > 0)[None]
        evaluations += int(directions(lens[:, :, m][:, :, None, None], behind[:, None], n)[used].sum())
    return taken, speeds(best, evaluations), evaluations


@numba.njit(error_model="numpy")
def _laid(row, geometry, src, lens, start, stop, K, ends, orders, x, x_w, accuracy, per_kappa, per_log, log_mu, W, cuts,
          n):  # fmt: skip
    """The loop of `rings.rate_density` for one lens row, its table counted instead of applied: adds to n the Gaussians'
    nodes and the table's multiply-adds."""
    m = W.shape[0] // K
    low, high = W.shape[0], 0
    for p in range(start, stop):
        for s in range(src.shape[1]):
            w = geometry[p] * lens[0, p] * src[0, s, p]
            if w > cuts:
                ll, lb, bb = lens[3, p] + src[3, s, p], lens[4, p] + src[4, s, p], lens[5, p] + src[5, s, p]
                small, _, _, beyond = major_axis(ll, lb, bb)
                n[0] += orders[order_for(small, beyond, accuracy, orders)]
                a, b = lay(
                    w, lens[1, p] - src[1, s, p], lens[2, p] - src[2, s, p], ll, lb, bb, accuracy, orders, x, x_w,
                    per_kappa, per_log, log_mu, W,
                )  # fmt: skip
                low, high = min(low, a), max(high, b)
    for f in range(low, high):
        shift = f // m - K
        for i in range(0, ends.size, 4):
            if np.any(W[f, i + 1 : i + 5] != 0.0):
                n[1] += 4 * max(min(ends[min(i + 4, ends.size) - 1], K - shift) - max(0, -shift), 0)
        W[f] = 0.0


def isogrid(line, best):
    """Rate density of the stars; all its Gaussians' nodes and multiply-adds."""
    grid, row_of, D, src, lens = rates._nodes(line)
    n = line.numerics
    element = np.arange(lens.shape[1])
    taken = median(
        lambda: rings.rate_density(grid, row_of, D, src, lens, element, float(n.directions), float(n.weight_cut))
    )
    geometry = np.empty(D.size)
    kernels.node_weights(grid.pi, row_of, D, KAPPA, MAS, geometry)
    made = rings._rings(grid.h, grid.mu.size, float(n.directions))
    K, m = grid.mu.size, made.table.shape[0]
    light = src[0].sum(axis=0) * geometry
    peak = (light * lens[0]).max(axis=1)
    peak = np.maximum(peak, 1e-3 * peak.max())
    W, counts = np.zeros((K * m, made.table.shape[1] + 1)), np.zeros(2, dtype=np.int64)
    edges = np.concatenate([[0], np.flatnonzero(np.diff(row_of)) + 1, [row_of.size]])
    for e in element:
        for start, stop in zip(edges, edges[1:]):
            _laid(row_of, geometry, src, np.ascontiguousarray(lens[:, e]), start, stop, K, made.ends, rings._ORDERS,
                  *rings._rules(), made.accuracy, made.per_kappa, m / grid.h, math.log(grid.mu[0]), W,
                  n.weight_cut * peak[e], counts)  # fmt: skip
    # a node by its text: a root, two divisions and 50 multiply-adds (weights of 4 x 4 places)
    floor = least(best, root=counts[0], divide=2 * counts[0], add=50 * counts[0] + counts[1])
    return taken, floor, counts


def orbits(best):
    potential = Potential.read("default").for_orbits()
    kinds, pars = potential.packed
    rng = np.random.default_rng(1)
    states = np.zeros((64 * LANES, 6))
    states[:, 0], states[:, 2] = rng.uniform(2, 9, len(states)), 0.05
    states[:, 4] = 200.0
    steps = []

    def run():
        steps.append(follow(kinds, pars, potential.omega, step(0.15), states.copy(), 1000 * KPC_PER_MYR))

    taken = median(run) / steps[-1]
    shells = int(sum(p[4] for k, p in zip(kinds, pars) if k == HOMEOIDS))
    discs, halos = (int(np.sum(kinds == k)) for k in (MIYAMOTO_NAGAI, NFW))
    # by the text: a shell has a root, an exponential and 12 multiply-adds; a disc two roots, two divisions; a halo a
    # root, a logarithm (as an exponential), three divisions; the step itself a root, four divisions, 60 multiply-adds
    floor = least(
        best, root=shells + 2 * discs + halos + 1, exp=shells + halos, divide=2 * discs + 3 * halos + 4,
        add=12 * shells + 20 * discs + 20 * halos + 60,
    )  # fmt: skip
    return taken, floor, shells


def draws(result, best):
    sampler, n = Sampler.of(result), 500_000
    taken = median(lambda: sampler.draw(n, 1)) / n
    # by the text of kernels/draws.py, weighted: nine uniform, two normal and an exponential number (as a normal one);
    # 10 roots, 14 divisions, 150 multiply-adds; some 50 numbers looked up, counted as 12 look-ups of four; an event of
    # ten numbers and four words written
    floor = least(best, uniform=9, normal=3, root=10, divide=14, add=150, look=12, memory=14 * 8)
    return taken, floor


def main():
    heading("Hardware", "one thread, double precision")
    best = peaks()
    for name, words in (("add", "multiply-add"), ("exp", "exponential (maths.fexp)"), ("divide", "division"),
                        ("root", "square root"), ("look", "look-up (maths.mean_abs)"), ("uniform", "uniform number"),
                        ("normal", "normal number")):  # fmt: skip
        row(words, duration(best[name]), f"{1e-9 / best[name]:.2f} thousand million a second")
    row("memory, read and write", f"{1e-9 / best['memory']:.1f} GB/s")
    heading("Kernels against it", "ratio: operations at their best over time taken")
    result = lensrate.sightline(1 * u.deg, -3 * u.deg)
    line = result._integrals.ready
    for name, (taken, floor, n) in (
        ("optical depth and rate, stars", stars(line, best)),
        ("optical depth and rate, all kicks", kicked(line, best)),
    ):
        row(name, duration(taken), f"{duration(floor)}, {n / 1e6:.2f} million directions", floor / taken, "1")
    taken, floor, (_, added) = isogrid(line, best)
    words = f"{duration(floor)}, {added / 1e6:.0f} million of its table"
    row("rate density, stars", duration(taken), words, floor / taken, "1")
    taken, floor, shells = orbits(best)
    row("orbit step of one body", duration(taken), f"{duration(floor)}, {shells} shells of the bar", floor / taken, "1")
    taken, floor = draws(result, best)
    row("mock event, core columns", duration(taken), duration(floor), floor / taken, "1")


if __name__ == "__main__":
    main()
