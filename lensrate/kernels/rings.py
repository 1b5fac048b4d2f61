"""Speed distributions of Gaussians as sums of round ones, which a table of one parameter holds.

A Gaussian of dispersions s_min <= s_max is a Gauss-Hermite sum of round ones of dispersion s_min along its major axis.
The speed of a round one depends on kappa = |mean| / s_min alone, but for the scale s_min. Weights are laid on nodes
even in ln s and kappa with 4-point Lagrange weights, which keep moments up to the third, and the table is applied once
to a whole row of nodes. Profiles as in rates.py.
"""

import math

import numpy as np

from ._jit import kernel


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
    """Add one Gaussian to W (scales, kappas); return first and last scale used, (1, 0) if beyond the grid."""
    small, ax, ay, beyond = major_axis(cxx, cxy, cyy)
    order = order_for(small, beyond, accuracy, orders)
    log_s = 0.5 * math.log(small)
    per_s = 1.0 / math.sqrt(small)
    f = (log_s - log_mu) * per_log
    top = (W.shape[1] - 3) / per_kappa
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
        # the table is even in kappa
        before = k - 1 if k > 0 else 1
        for r in range(4):
            a = a0 if r == 0 else (a1 if r == 1 else (a2 if r == 2 else a3))
            row = W[jj - 1 + r]
            row[before] += a * b0
            row[k] += a * b1
            row[k + 1] += a * b2
            row[k + 2] += a * b3
    return low, high


@kernel
def rate_density(row, geometry, src, lens, element, mu, table, ends, orders, x, x_w, accuracy, per_kappa, w_cut, T):
    """Mass-free rate density per ln pi_rel and ln mu_rel.

    row (N,): index of the pi row of each node, rising; geometry (N,) from rates.node_weights; src (6, S, N) with
    weights that sum to one over the nodes of a row; lens (6, L, N); element (L,), rising; mu (K,) uniform in the
    logarithm, step h. table (m, kappas, J), ends (kappas,): speed distribution per ln mu of round Gaussians at
    kappa = i / per_kappa and ln(mu / s) = h (j - K - sub / m), and the last j that counts. orders (n,), x, x_w
    (n, most): Gauss-Hermite rules.
    Fills T (E, P, K). Nodes below w_cut of an element's largest weight (of a thousandth of the
    largest of all, if that is more) are dropped.
    """
    T[:] = 0.0
    K, m = mu.size, table.shape[0]
    h = math.log(mu[1] / mu[0])
    per_log, log_mu = m / h, math.log(mu[0])
    peak = np.zeros(T.shape[0])
    for r in range(element.size):
        for p in range(row.size):
            w_s = 0.0
            for s in range(src.shape[1]):
                w_s += src[0, s, p]
            w = geometry[p] * lens[0, r, p] * w_s
            if w > peak[element[r]]:
                peak[element[r]] = w
    # an element a thousand times fainter than the brightest one needs no finer cut of its own
    peak = np.maximum(peak, 1e-3 * peak.max())
    W = np.zeros((K * m, table.shape[1]))
    start = 0
    while start < row.size:
        stop = start + 1
        while stop < row.size and row[stop] == row[start]:
            stop += 1
        r = 0
        while r < element.size:
            e = element[r]
            low, high = W.shape[0], 0
            while r < element.size and element[r] == e:
                for p in range(start, stop):
                    g = geometry[p] * lens[0, r, p]
                    if g <= 0.0:
                        continue
                    for s in range(src.shape[1]):
                        w = g * src[0, s, p]
                        if w > w_cut * peak[e]:
                            a, b = lay(
                                w,
                                lens[1, r, p] - src[1, s, p],
                                lens[2, r, p] - src[2, s, p],
                                lens[3, r, p] + src[3, s, p],
                                lens[4, r, p] + src[4, s, p],
                                lens[5, r, p] + src[5, s, p],
                                accuracy, orders, x, x_w, per_kappa, per_log, log_mu, W,
                            )  # fmt: skip
                            low, high = min(low, a), max(high, b)
                r += 1
            apply_table(W, low, high, table, ends, T[e, row[start]], 0, K)
        start = stop
    for e in range(T.shape[0]):
        for i in range(T.shape[1]):
            out = T[e, i]
            for k in range(K):
                # Lagrange weights may undershoot in the far wings
                out[k] = max(out[k], 0.0) * mu[k]


@kernel
def apply_table(W, low, high, table, ends, out, k0, k1):
    """Add the table's rows to out[k0:k1], out (K,), with the weights of scales low:high, and clear these."""
    m = table.shape[0]
    for f in range(low, high):
        sub = f % m
        shift = f // m - out.size
        for i in range(W.shape[1]):
            w = W[f, i]
            if w == 0.0:
                continue
            W[f, i] = 0.0
            # columns j with k0 <= j + shift < k1
            j0, j1 = max(0, k0 - shift), min(ends[i], k1 - shift)
            if j1 > j0:
                source = table[sub, i, j0:j1]
                target = out[j0 + shift : j1 + shift]
                for k in range(target.size):
                    target[k] += w * source[k]
