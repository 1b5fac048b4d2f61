"""Speed distributions of Gaussians as sums of round ones, which a table of one parameter holds.

A Gaussian of dispersions s_min <= s_max is a Gauss-Hermite sum of round ones of dispersion s_min along its major axis.
The speed of a round one depends on kappa = |mean| / s_min alone, but for the scale s_min. Weights are laid on nodes
even in ln s and kappa with 4-point Lagrange weights, which keep moments up to the third, and the table is applied once
to a whole row of nodes. Profiles as in rates.py.
"""

import math

import numpy as np

from ._jit import kernel
from .profile import density_between, motion_between


@kernel(inline="always")
def major_axis(cxx, cxy, cyy):
    """Return the smallest variance, and the vector whose square the covariance has beyond a round one of it."""
    half = 0.5 * (cxx - cyy)
    spread = math.sqrt(half * half + cxy * cxy)
    small = max(0.5 * (cxx + cyy) - spread, 1e-30)
    # (ax, ay) has length sqrt(2 spread) and lies along the eigenvector of the larger variance
    ax = math.sqrt(max(spread + half, 0.0))
    ay = math.sqrt(max(spread - half, 0.0))
    return small, ax, ay if cxy >= 0.0 else -ay, 2.0 * spread


@kernel(inline="always")
def order_for(small, beyond, accuracy, orders):
    """Return the index of the Gauss-Hermite rule whose error, (beyond / large)^n, is exp(-accuracy)."""
    if beyond <= 1e-9 * small:
        return 0
    wanted = accuracy / math.log1p(small / beyond)
    i = 0
    while i < orders.size - 1 and orders[i] < wanted:
        i += 1
    return i


@kernel(inline="always")
def _lagrange(t):
    """Weights of nodes -1, 0, 1, 2 for a point at 0 <= t <= 1."""
    a, b, c = t + 1.0, t - 1.0, t - 2.0
    return -t * b * c / 6.0, 0.5 * a * b * c, -0.5 * a * t * c, a * t * b / 6.0


@kernel
def lay(w, ml, mb, cxx, cxy, cyy, accuracy, orders, x, x_w, per_kappa, per_log, log_mu, W):
    """Add one Gaussian to W (scales, kappas + 1); return first and last scale used, (1, 0) if beyond the grid.

    The first column of W is kappa one step below 0: `apply_table` folds it over, the table being even in kappa.
    """
    small, ax, ay, beyond = major_axis(cxx, cxy, cyy)
    order = order_for(small, beyond, accuracy, orders)
    log_s = 0.5 * math.log(small)
    per_s = 1.0 / math.sqrt(small)
    f = (log_s - log_mu) * per_log
    top = (W.shape[1] - 4) / per_kappa
    low, high = W.shape[0], 0
    j = int(math.floor(f))
    s0, s1, s2, s3 = _lagrange(f - j)
    for i in range(orders[order]):
        u, v = ml + x[order, i] * ax, mb + x[order, i] * ay
        kappa = math.sqrt(u * u + v * v) * per_s
        jj, a0, a1, a2, a3 = j, s0, s1, s2, s3
        if kappa > top:
            # narrower than a step of ln mu: as wide as the table's last
            g = f + math.log(kappa / top) * per_log
            kappa = top
            jj = int(math.floor(g))
            a0, a1, a2, a3 = _lagrange(g - jj)
        if jj < 1 or jj + 2 >= W.shape[0]:
            continue
        low, high = min(low, jj - 1), max(high, jj + 3)
        y = kappa * per_kappa
        k = int(y)
        b0, b1, b2, b3 = _lagrange(y - k)
        weight = w * x_w[order, i]
        b0, b1, b2, b3 = weight * b0, weight * b1, weight * b2, weight * b3
        for r in range(4):
            a = a0 if r == 0 else (a1 if r == 1 else (a2 if r == 2 else a3))
            to = W[jj - 1 + r]
            to[k] += a * b0
            to[k + 1] += a * b1
            to[k + 2] += a * b2
            to[k + 3] += a * b3
    return low, high


@kernel
def apply_table(W, low, high, table, ends, out, k0, k1):
    """Add the table's rows to out[k0:k1], out (K,), with the weights of scales low:high, and clear these."""
    m, n = table.shape[0], table.shape[1]
    for f in range(low, high):
        sub = f % m
        shift = f // m - out.size
        w = W[f]
        w[2] += w[0]
        j0 = max(0, k0 - shift)
        # four rows at a time; beyond its end a row is zero, and later ones end later
        for i in range(0, n, 4):
            last = min(i + 4, n)
            w0, w1 = w[i + 1], w[i + 2] if i + 1 < n else 0.0
            w2, w3 = w[i + 3] if i + 2 < n else 0.0, w[i + 4] if i + 3 < n else 0.0
            if w0 == 0.0 and w1 == 0.0 and w2 == 0.0 and w3 == 0.0:
                continue
            j1 = min(ends[last - 1], k1 - shift)
            if j1 > j0:
                target = out[j0 + shift : j1 + shift]
                t0, t1 = table[sub, i, j0:j1], table[sub, min(i + 1, n - 1), j0:j1]
                t2, t3 = table[sub, min(i + 2, n - 1), j0:j1], table[sub, min(i + 3, n - 1), j0:j1]
                for k in range(target.size):
                    target[k] += (w0 * t0[k] + w1 * t1[k]) + (w2 * t2[k] + w3 * t3[k])
        w[:] = 0.0


@kernel
def rate_density(
    row, geometry, src, lens, cell, part, here, beyond, element, mu, table, ends, orders, x, x_w, accuracy, per_kappa,
    w_cut, T,
):  # fmt: skip
    """Mass-free rate density per ln pi_rel and ln mu_rel.

    row (N,): index of the pi row of each node, rising; geometry (N,) from rates.node_weights; src (6, S, N) with
    weights that sum to one over the nodes of a row; lens (6, L, N), or a table along the sightline, (6, L, n), and the
    nodes' places in it, (N,) each, from profile.places, which else are empty; element (L,), rising; mu (K,) uniform in
    the logarithm, step h. table (m, kappas, J), ends (kappas,), rising: speed distribution per ln mu of round Gaussians
    at kappa = i / per_kappa and ln(mu / s) = h (j - K - sub / m), and the last j that counts, zero from there on.
    orders (n,), x, x_w (n, most): Gauss-Hermite rules.
    Fills T (E, P, K). Nodes below w_cut of an element's largest weight (of a thousandth of the
    largest of all, if that is more) are dropped.
    """
    T[:] = 0.0
    K, m = mu.size, table.shape[0]
    h = math.log(mu[1] / mu[0])
    per_log, log_mu = m / h, math.log(mu[0])
    tabled = cell.size > 0
    peak = np.zeros(T.shape[0])
    # of the sources behind a node, together and at most
    light, most = np.zeros(row.size), np.zeros(row.size)
    for s in range(src.shape[1]):
        for p in range(row.size):
            light[p] += src[0, s, p]
            most[p] = max(most[p], src[0, s, p])
    for p in range(row.size):
        light[p] *= geometry[p]
        most[p] *= geometry[p]
    for r in range(element.size):
        for p in range(row.size):
            n = density_between(lens[0, r], cell[p], part[p]) if tabled else lens[0, r, p]
            peak[element[r]] = max(peak[element[r]], light[p] * n)
    # an element a thousand times fainter than the brightest one needs no finer cut of its own
    peak = np.maximum(peak, 1e-3 * peak.max())
    W = np.zeros((K * m, table.shape[1] + 1))
    motion = np.empty(5)
    r = 0
    while r < element.size:
        e = element[r]
        after = r + 1
        while after < element.size and element[after] == e:
            after += 1
        cut = w_cut * peak[e]
        start = 0
        while start < row.size:
            stop = start + 1
            while stop < row.size and row[stop] == row[start]:
                stop += 1
            low, high = W.shape[0], 0
            for i in range(r, after):
                for p in range(start, stop):
                    n = density_between(lens[0, i], cell[p], part[p]) if tabled else lens[0, i, p]
                    if n <= 0.0 or n * most[p] <= cut:
                        continue
                    if tabled:
                        motion_between(lens[:, i], cell[p], part[p], here[p], beyond[p], motion)
                    else:
                        for q in range(5):
                            motion[q] = lens[q + 1, i, p]
                    for s in range(src.shape[1]):
                        w = geometry[p] * n * src[0, s, p]
                        if w > cut:
                            a, b = lay(
                                w,
                                motion[0] - src[1, s, p],
                                motion[1] - src[2, s, p],
                                motion[2] + src[3, s, p],
                                motion[3] + src[4, s, p],
                                motion[4] + src[5, s, p],
                                accuracy, orders, x, x_w, per_kappa, per_log, log_mu, W,
                            )  # fmt: skip
                            low, high = min(low, a), max(high, b)
            apply_table(W, low, high, table, ends, T[e, row[start]], 0, K)
            start = stop
        r = after
    for e in range(T.shape[0]):
        for i in range(T.shape[1]):
            out = T[e, i]
            for k in range(K):
                # Lagrange weights may undershoot in the far wings
                out[k] = max(out[k], 0.0) * mu[k]
