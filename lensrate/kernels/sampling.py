"""Events drawn from the rate of one sightline, given random numbers: alias tables, envelope, the draw itself.

A draw is a proposal under an envelope that is nowhere below the rate, and the ratio p <= 1 of the two. Taken with
probability p the events follow the rate; kept with weight p they do too. The envelope is made of pieces: a lens row, a
source row, a cell of source distance and a band of lens distances in front of it.

Distances kpc, angles mas, proper motions mas/yr, masses Msun. A table (rows, n, 8) holds at its nodes of distance the
density to draw from, its running integral up to there, the scale of speeds of the cell that begins there, and the
motion v_l, v_b, C_ll, C_lb, C_bb of D mu (mas/yr kpc and its square). Density and motion are linear in D between nodes.
"""

import math

import numpy as np

from ._jit import kernel

UNIFORMS = 9  # of one proposal, beside two normal numbers and an exponential one
FLOATS = 10  # of an event: M, D_L, D_S, mu_l, mu_b, t_E, theta_E, pi_rel, pi_E, weight
WORDS = 4  # class, element, lens row, source row
COLUMNS = 8


@kernel
def alias_table(weight, share, other):
    """Fill share and other (n,) for constant-time choice among n weights (Walker 1977; Vose 1991); return their sum.

    Column i keeps i with probability share[i], else gives other[i].
    """
    n = weight.size
    total = 0.0
    for i in range(n):
        total += weight[i]
        share[i] = 1.0
        other[i] = i
    if not total > 0.0:
        return 0.0
    small = np.empty(n, dtype=np.int64)
    large = np.empty(n, dtype=np.int64)
    n_small = n_large = 0
    for i in range(n):
        share[i] = weight[i] * n / total
        if share[i] < 1.0:
            small[n_small] = i
            n_small += 1
        else:
            large[n_large] = i
            n_large += 1
    while n_small > 0 and n_large > 0:
        n_small -= 1
        i, j = small[n_small], large[n_large - 1]
        other[i] = j
        share[j] -= 1.0 - share[i]
        if share[j] < 1.0:
            n_large -= 1
            small[n_small] = j
            n_small += 1
    # what is left differs from one by rounding; a weight of zero must never be drawn
    for k in range(n_small):
        i = small[k]
        if weight[i] > 0.0:
            share[i] = 1.0
    return total


@kernel(inline="always")
def _choose(u, share, other, first, n):
    """Index in [first, first + n) that a uniform number picks from an alias table."""
    x = u * n
    i = min(int(x), n - 1)
    return first + (i if x - i < share[first + i] else other[first + i])


@kernel
def motion_bounds(D, table, c_l, c_b, speed, square):
    """Largest |mu - c| at a node or between it and the next, and |mu - c|^2 plus both variances: (rows, n - 1) each.

    Between nodes mu is a mean of its ends; a variance may exceed theirs by (1 + h^2 / 4 D0 D1).
    """
    for r in range(table.shape[0]):
        for i in range(D.size - 1):
            most = 0.0
            spread = 0.0
            for k in range(i, i + 2):
                ml, mb = table[r, k, 3] / D[k] - c_l, table[r, k, 4] / D[k] - c_b
                most = max(most, ml * ml + mb * mb)
                spread = max(spread, (table[r, k, 5] + table[r, k, 7]) / (D[k] * D[k]))
            h = D[i + 1] - D[i]
            speed[r, i] = math.sqrt(most)
            square[r, i] = most + spread * (1.0 + 0.25 * h * h / (D[i] * D[i + 1]))


@kernel
def envelope(lens, speed, square, src, speed_S, square_S, cell, band, root, height, total, share, other, pieces):
    """Height and alias table of the pieces of every lens row.

    lens, src: tables; speed, square (rows, n - 1) of either from motion_bounds; cell (J + 1,): source nodes between
    cells; band (J, K + 1): lens nodes between bands; root (J, K): largest sqrt(1 - D_L / D_S). Fills height, share
    (float32) and other (int16), all (R, S J K); total (R,); pieces (S J K, 5): source row, its first and last node,
    first and last lens node. A piece's height times what is under it is its weight.
    """
    S, J, K = src.shape[0], band.shape[0], band.shape[1] - 1
    fast = np.zeros((S, J))
    wide = np.zeros((S, J))
    weight = np.empty(S * J * K)
    full_share = np.empty(S * J * K)
    full_other = np.empty(S * J * K, dtype=np.int64)
    for s in range(S):
        for j in range(J):
            for i in range(cell[j], cell[j + 1]):
                fast[s, j] = max(fast[s, j], speed_S[s, i])
                wide[s, j] = max(wide[s, j], square_S[s, i])
            for k in range(K):
                n = (s * J + j) * K + k
                pieces[n, 0] = s
                pieces[n, 1], pieces[n, 2] = cell[j], cell[j + 1]
                pieces[n, 3], pieces[n, 4] = band[j, k], band[j, k + 1]
    inverse = np.empty(speed.shape[1])
    for r in range(lens.shape[0]):
        for i in range(inverse.size):
            inverse[i] = 1.0 / (lens[r, i, 2] * lens[r, i, 2])
        for j in range(J):
            for k in range(K):
                b0, b1 = band[j, k], band[j, k + 1]
                lenses = lens[r, b1, 1] - lens[r, b0, 1] if b1 > b0 else 0.0
                a0 = a1 = a2 = 0.0
                if lenses > 0.0:
                    for i in range(b0, b1):
                        a0 = max(a0, inverse[i])
                        a1 = max(a1, speed[r, i] * inverse[i])
                        a2 = max(a2, square[r, i] * inverse[i])
                for s in range(S):
                    sources = src[s, cell[j + 1], 1] - src[s, cell[j], 1]
                    # |mu_L - mu_S| <= |mu_L - c| + |mu_S - c|
                    bound = math.sqrt(a2 + 2.0 * fast[s, j] * a1 + wide[s, j] * a0)
                    n = (s * J + j) * K + k
                    # a single-precision number above the bound
                    height[r, n] = np.float32(root[j, k] * bound * 1.000001)
                    weight[n] = lenses * sources * height[r, n]
        total[r] = alias_table(weight, full_share, full_other)
        for n in range(weight.size):
            share[r, n] = np.float32(full_share[n])
            other[r, n] = np.int16(full_other[n])


@kernel
def guides(table, out):
    """Fill out (rows, G) int16: the last node whose running integral is not above the share g / G of the whole."""
    G = out.shape[1]
    for r in range(table.shape[0]):
        i = 0
        for g in range(G):
            y = table[r, table.shape[1] - 1, 1] * g / G
            while i < table.shape[1] - 2 and table[r, i + 1, 1] <= y:
                i += 1
            out[r, g] = i


@kernel(inline="always")
def _locate(D, x):
    """Cell i with D[i] <= x < D[i + 1]."""
    lo, hi = 0, D.size - 1
    while hi - lo > 1:
        mid = (lo + hi) >> 1
        if D[mid] <= x:
            lo = mid
        else:
            hi = mid
    return lo


@kernel(inline="always")
def _seek(row, guide, lo, hi, y):
    """Cell i in [lo, hi) whose running integrals enclose y."""
    whole = row[row.shape[0] - 1, 1]
    i = min(max(int(guide[min(int(y / whole * guide.size), guide.size - 1)]), lo), hi - 1)
    while i + 1 < hi and row[i + 1, 1] <= y:
        i += 1
    while i > lo and row[i, 1] > y:
        i -= 1
    return i


@kernel(inline="always")
def _within(y, f0, f1):
    """Place in [0, 1] below which the share y of a density linear from f0 to f1 lies."""
    below = f0 + math.sqrt(max(f0 * f0 + y * (f1 * f1 - f0 * f0), 0.0))
    return y * (f0 + f1) / below if below > 0.0 else y


@kernel(inline="always")
def _weighted_normal(m, sigma, z, e, u, plain):
    """x with density (m + x)^2 N(x; sigma) up to its norm.

    x has (m^2 + x^2) N, by a mixture, and then the sign that (m + x)^2 and (m - x)^2 bid for. z normal,
    e exponential, u uniform; plain: the mixture's part m^2 N was picked.
    """
    x = sigma * z if plain else sigma * math.copysign(math.sqrt(z * z + 2.0 * e), z)
    up, down = (m + x) * (m + x), (m - x) * (m - x)
    return x if u * (up + down) < up else -x


@kernel
def draw(
    u, z, e, pair_share, pair_other, pair_words, pair_tilt, mass_first, mass_share, mass_other, mass, mass_left,
    mass_right, D, lens, guide, D_src, src, guide_S, height, share, other, pieces, kappa, days_per_year, unit, accept,
    start, floats, words,
):  # fmt: skip
    """Turn random numbers into events from column `start` on; return the column after the last one.

    u (n, UNIFORMS) uniform, z (n, 2) normal, e (n,) exponential; pair_*: alias table of (class, lens row), with words
    class, element, lens row, mass table (pairs, 4), and tilt; mass_*: alias tables of mass nodes and the spacing to
    either side; D, lens, D_src, src: nodes and tables; guide, guide_S: from guides; height, share, other, pieces: from
    envelope; unit: the envelope's whole rate per proposal. With `accept` an event is kept with probability p and
    weight unit / tilt, else all are, with weight unit p / tilt. Fills floats (FLOATS, m), words (WORDS, m).
    """
    out = start
    for n in range(u.shape[0]):
        pair = _choose(u[n, 0], pair_share, pair_other, 0, pair_share.size)
        r = pair_words[pair, 2]
        piece = _choose(u[n, 1], share[r], other[r], 0, share.shape[1])
        s, c0, c1, b0, b1 = pieces[piece, 0], pieces[piece, 1], pieces[piece, 2], pieces[piece, 3], pieces[piece, 4]
        # distances
        row = src[s]
        y = row[c0, 1] + u[n, 2] * (row[c1, 1] - row[c0, 1])
        i = _seek(row, guide_S[s], c0, c1, y)
        c, d = row[i], row[i + 1]
        step = d[1] - c[1]
        tau = _within(min(max((y - c[1]) / step, 0.0), 1.0), c[0], d[0]) if step > 0.0 else 0.0
        D_S = D_src[i] + tau * (D_src[i + 1] - D_src[i])
        row = lens[r]
        bottom, top = row[b0, 1], row[b1, 1]
        whole = top - bottom
        if D[b1] > D_S:
            # the part of this band that lies in front of the source
            p = b1 - 1
            while p > b0 and D[p] > D_S:
                p -= 1
            eta = min((D_S - D[p]) / (D[p + 1] - D[p]), 1.0)
            f0, f1 = row[p, 0], row[p + 1, 0]
            top = row[p, 1] + (row[p + 1, 1] - row[p, 1]) * eta * (2.0 * f0 + eta * (f1 - f0)) / max(f0 + f1, 1e-300)
        top = max(top, bottom)
        front = (top - bottom) / whole
        y = bottom + u[n, 3] * (top - bottom)
        p = _seek(row, guide[r], b0, b1, y)
        a, b = row[p], row[p + 1]
        step = b[1] - a[1]
        eta = _within(min(max((y - a[1]) / step, 0.0), 1.0), a[0], b[0]) if step > 0.0 else 0.0
        D_L = min(D[p] + eta * (D[p + 1] - D[p]), D_S * (1.0 - 1e-12))
        # relative motion, mean and covariance
        to_L, to_S = 1.0 / D_L, 1.0 / D_S
        pi_rel = (D_S - D_L) * to_L * to_S
        ml = to_L * (a[3] + eta * (b[3] - a[3])) - to_S * (c[3] + tau * (d[3] - c[3]))
        mb = to_L * (a[4] + eta * (b[4] - a[4])) - to_S * (c[4] + tau * (d[4] - c[4]))
        to_L *= to_L
        to_S *= to_S
        cll = to_L * (a[5] + eta * (b[5] - a[5])) + to_S * (c[5] + tau * (d[5] - c[5]))
        clb = to_L * (a[6] + eta * (b[6] - a[6])) + to_S * (c[6] + tau * (d[6] - c[6]))
        cbb = to_L * (a[7] + eta * (b[7] - a[7])) + to_S * (c[7] + tau * (d[7] - c[7]))
        # proposed with density (mu^2 + t^2) N(mu) / 2 t, which is nowhere below mu N(mu) and integrates to t
        t2 = ml * ml + mb * mb + cll + cbb
        pick = 2.0 * t2 * u[n, 4] - t2
        if pick < ml * ml + cll:
            if pick < 0.0:
                x = math.sqrt(cll) * z[n, 0]
            else:
                x = _weighted_normal(ml, math.sqrt(cll), z[n, 0], e[n], u[n, 5], pick < ml * ml)
            tilt = clb / cll if cll > 0.0 else 0.0
            y = tilt * x + math.sqrt(max(cbb - tilt * clb, 0.0)) * z[n, 1]
        else:
            y = _weighted_normal(mb, math.sqrt(cbb), z[n, 0], e[n], u[n, 5], pick < ml * ml + cll + mb * mb)
            tilt = clb / cbb if cbb > 0.0 else 0.0
            x = tilt * y + math.sqrt(max(cll - tilt * clb, 0.0)) * z[n, 1]
        x += ml
        y += mb
        mu2 = x * x + y * y
        mu = math.sqrt(mu2)
        chance = front * math.sqrt(pi_rel * D_L) * 2.0 * t2 * mu / ((mu2 + t2) * a[2] * height[r, piece])
        if accept and not u[n, 6] < chance:
            continue
        # mass: a node, spread to half the way to its neighbours so that its mean stays
        q = pair_words[pair, 3]
        first = mass_first[q]
        node = _choose(u[n, 7], mass_share, mass_other, first, mass_first[q + 1] - first)
        M, left, right = mass[node], mass_left[node], mass_right[node]
        v = u[n, 8] * (left + right)
        if v < left:
            M += 0.5 * right * v / left
        elif right > 0.0:
            M -= 0.5 * left * (v - left) / right
        theta = math.sqrt(kappa * M * pi_rel)
        floats[0, out] = M
        floats[1, out] = D_L
        floats[2, out] = D_S
        floats[3, out] = x
        floats[4, out] = y
        floats[5, out] = days_per_year * theta / mu
        floats[6, out] = theta
        floats[7, out] = pi_rel
        floats[8, out] = pi_rel / theta
        floats[9, out] = unit * (1.0 if accept else chance) / pair_tilt[pair]
        words[0, out] = pair_words[pair, 0]
        words[1, out] = pair_words[pair, 1]
        words[2, out] = r
        words[3, out] = s
        out += 1
    return out


@kernel
def source_motion(z, start, D, lens, D_src, src, floats, words, out):
    """Proper motion of the source given the relative one, a Gaussian: out (2, m) from `start` on; z (n, 2) normal."""
    for i_z in range(z.shape[0]):
        n = start + i_z
        r, s = words[2, n], words[3, n]
        D_L, D_S = floats[1, n], floats[2, n]
        p = _locate(D, D_L)
        i = _locate(D_src, D_S)
        eta = (D_L - D[p]) / (D[p + 1] - D[p])
        h = D_src[i + 1] - D_src[i]
        tau = (D_S - D_src[i]) / h if h > 0.0 else 0.0
        a, b = lens[r, p], lens[r, p + 1]
        c, d = src[s, i], src[s, i + 1]
        sl = (c[3] + tau * (d[3] - c[3])) / D_S
        sb = (c[4] + tau * (d[4] - c[4])) / D_S
        xl = floats[3, n] - ((a[3] + eta * (b[3] - a[3])) / D_L - sl)
        xb = floats[4, n] - ((a[4] + eta * (b[4] - a[4])) / D_L - sb)
        to_L, to_S = 1.0 / (D_L * D_L), 1.0 / (D_S * D_S)
        s0 = to_S * (c[5] + tau * (d[5] - c[5]))
        s1 = to_S * (c[6] + tau * (d[6] - c[6]))
        s2 = to_S * (c[7] + tau * (d[7] - c[7]))
        t0 = s0 + to_L * (a[5] + eta * (b[5] - a[5]))
        t1 = s1 + to_L * (a[6] + eta * (b[6] - a[6]))
        t2 = s2 + to_L * (a[7] + eta * (b[7] - a[7]))
        # the source takes its share of the deviation with the opposite sign: mean -S T^-1 x, covariance S - S T^-1 S
        det = t0 * t2 - t1 * t1
        if det > 0.0:
            k00, k01 = (s0 * t2 - s1 * t1) / det, (s1 * t0 - s0 * t1) / det
            k10, k11 = (s1 * t2 - s2 * t1) / det, (s2 * t0 - s1 * t1) / det
        else:
            k00 = k01 = k10 = k11 = 0.0
        v0 = max(s0 - k00 * s0 - k01 * s1, 0.0)
        v1 = s1 - k00 * s1 - k01 * s2
        v2 = s2 - k10 * s1 - k11 * s2
        z1, z2 = z[i_z, 0], z[i_z, 1]
        first = math.sqrt(v0)
        tilt = v1 / first if first > 0.0 else 0.0
        out[0, n] = sl - k00 * xl - k01 * xb + first * z1
        out[1, n] = sb - k10 * xl - k11 * xb + tilt * z1 + math.sqrt(max(v2 - tilt * tilt, 0.0)) * z2
