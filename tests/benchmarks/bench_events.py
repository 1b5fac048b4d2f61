"""Mock events: the sampler against a plain vectorised Monte Carlo in numpy of the same sightline.

    python tests/benchmarks/bench_events.py

One thread, processor time, best of several runs after a warm-up; ratios come from this one run.
"""

# ruff: noqa: E402  (one thread is set before the imports)
import os

os.environ.setdefault("OMP_NUM_THREADS", "1")
os.environ.setdefault("NUMBA_NUM_THREADS", "1")

import time

import astropy.units as u
import numpy as np
from report import duration, heading, row

import lensrate
from lensrate.lensing import rates
from lensrate.lensing.sampler import Sampler
from lensrate.units import DAYS_PER_YEAR, KAPPA, MAS

N = 500_000


def best(run, n=7):
    run()
    times = []
    for _ in range(n):
        start = time.thread_time()
        run()
        times.append(time.thread_time() - start)
    return min(times)


def plain(sampler, n, seed):
    """Weighted events: row, source and both distances by inverse cumulative, Gaussian motions, numpy only."""
    rng = np.random.default_rng(seed)
    D, lens, _, D_src, src, *_ = sampler._tables
    pairs = sampler._pairs["words"]
    f = lens[..., 0]
    cum = np.concatenate([np.zeros((len(f), 1)), np.cumsum(0.5 * (f[:, 1:] + f[:, :-1]) * np.diff(D), axis=1)], axis=1)
    root = np.array([[0.0 if s is None else s.moment(0.5) for s in row] for row in sampler.model.spectra()])
    weight = root[pairs[:, 0], pairs[:, 1]] * cum[pairs[:, 2], -1]
    pair = rng.choice(weight.size, n, p=weight / weight.sum())
    s = rng.choice(len(src), n, p=src[:, -1, 1] / src[:, -1, 1].sum())
    r = pairs[pair, 2]
    D_L, D_S, M = np.empty(n), np.empty(n), np.empty(n)
    x, y = np.empty(n), np.empty(n)
    for i in np.unique(r):
        at = r == i
        D_L[at] = np.interp(rng.random(at.sum()) * cum[i, -1], cum[i], D)
    for i in np.unique(s):
        at = s == i
        D_S[at] = np.interp(rng.random(at.sum()) * src[i, -1, 1], src[i, :, 1], D_src)
    spectra = sampler.model.spectra()
    for q in np.unique(pairs[pair, 3]):
        at = pairs[pair, 3] == q
        c, e = pairs[np.flatnonzero(pairs[:, 3] == q)[0], :2]
        p = spectra[c][e].number * np.sqrt(spectra[c][e].mass)
        M[at] = rng.choice(spectra[c][e].mass, at.sum(), p=p / p.sum())
    p = np.clip(np.searchsorted(D, D_L) - 1, 0, D.size - 2)
    i = np.clip(np.searchsorted(D_src, D_S) - 1, 0, D_src.size - 2)
    eta = ((D_L - D[p]) / (D[p + 1] - D[p]))[:, None]
    tau = ((D_S - D_src[i]) / (D_src[i + 1] - D_src[i]))[:, None]
    a = (1 - eta) * lens[r, p, 3:] + eta * lens[r, p + 1, 3:]
    b = (1 - tau) * src[s, i, 3:] + tau * src[s, i + 1, 3:]
    m = a[:, :2] / D_L[:, None] - b[:, :2] / D_S[:, None]
    C = a[:, 2:] / D_L[:, None] ** 2 + b[:, 2:] / D_S[:, None] ** 2
    z = rng.standard_normal((2, n))
    first = np.sqrt(C[:, 0])
    x = m[:, 0] + first * z[0]
    y = m[:, 1] + C[:, 1] / first * z[0] + np.sqrt(np.maximum(C[:, 2] - C[:, 1] ** 2 / C[:, 0], 0)) * z[1]
    mu = np.hypot(x, y)
    pi_rel = np.maximum(1 / D_L - 1 / D_S, 0)
    theta = np.sqrt(KAPPA * M * pi_rel)
    with np.errstate(invalid="ignore"):
        out = theta, pi_rel / theta, DAYS_PER_YEAR * theta / mu
    u_0 = sampler.model.scenario.u_0_limit
    unit = 2 * u_0 * np.sqrt(KAPPA) * MAS**2 * weight.sum() * src[:, -1, 1].sum() / n
    return *out, unit * np.sqrt(np.maximum(1 - D_L / D_S, 0)) * mu


def main():
    heading("Mock events", "one thread, (1, -3.9), best of several")
    forecast = lensrate.sightline(1 * u.deg, -3.9 * u.deg)
    sampler = Sampler.of(forecast)
    ready = forecast._integrals.ready
    tables = best(lambda: Sampler.of(forecast), 3)
    row("tables of a sightline", duration(tables))
    w = plain(sampler, N, 1)[-1]
    share = w.sum() ** 2 / (w.size * np.sum(w**2))
    error = np.sqrt(w.size * np.var(w))
    grown = (error / sampler.rate / 1e-3) ** 2
    slow = N / best(lambda: plain(sampler, N, 1), 3)
    row("plain vectorised numpy", millions(slow), f"effective share {share:.2f}")
    row("    its rate against ours", f"{w.sum() / sampler.rate - 1:+.1e}", f"+- {error / sampler.rate:.1e}")
    # the plain estimate's time to one part in a thousand, against the integrals'
    took = best(lambda: (rates.moments(ready), rates.kicked_moments(ready)), 4)
    row("    rate of all classes by the integrals", duration(took), f"plain numpy to 1e-3 {duration(N / slow * grown)}",
        N / slow * grown / took)  # fmt: skip
    for name, options, aim in (
        ("weighted, core columns", {}, "3"),
        ("unweighted, core columns", {"weighted": False}, ""),
        ("weighted, source motion too", {"full": True}, ""),
        ("unweighted, source motion too", {"full": True, "weighted": False}, ""),
    ):
        d = sampler.draw(N, 2, **options)
        fast = N / best(lambda options=options: sampler.draw(N, 2, **options))
        gain = fast * d.effective_share / slow / share
        row(name, millions(fast), f"{gain:.3g} times in effective events", fast / slow, aim)
    # the tables once per catalogue are stated above
    for weighted in (True, False):
        seconds = best(lambda w=weighted: lensrate.mock_events(forecast, number=N, seed=3, weighted=w), 4) - tables
        name = f"all columns, {'weighted' if weighted else 'unweighted'}"
        row(name, millions(N / seconds), ratio=N / seconds / slow, aim="1")


def millions(rate):
    return f"{rate / 1e6:.2f} M/s"


if __name__ == "__main__":
    main()
