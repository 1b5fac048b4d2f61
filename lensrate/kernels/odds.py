"""Rate density at given points of relative parallax and motion, and its sums over lens masses against measurements.

A row is one relative parallax. On it the density of relative motion is a sum of Gaussians, each of one lens row, one
source row and one source distance; a base is a sum of lens rows that only ever enter together.
"""

import math

import numpy as np

from ._jit import kernel
from .maths import fexp

_TWO_PI = 2.0 * math.pi


@kernel(inline="always")
def _speed(lens, src, r, s, p):
    """Root mean square of the relative motion of lens row r and source row s."""
    x, y = lens[1, r, p] - src[1, s, p], lens[2, r, p] - src[2, s, p]
    return math.sqrt(x * x + y * y + lens[3, r, p] + src[3, s, p] + lens[5, r, p] + src[5, s, p])


@kernel
def pick_gaussians(
    row, n_rows, geometry, src, lens, lens_row, base, factor, n_base, cut, first, node, out_lens, out_src, weight
):
    """Choose the Gaussians that matter and say where they are; call with empty `node` to count only.

    row (N,): row of each node, rising; geometry (N,) of `rates.node_weights`; src (6, S, N), lens (6, L, N); lens_row,
    base, factor (R,): lens rows, their base and factor, sorted by base. Those whose part of the rate is below `cut` of
    that of the base and the source row are left out and the others raised to keep the sum. Fills first
    (n_base * n_rows + 1), and the node, lens row, source row and weight of each Gaussian.
    Returns their number.
    """
    N, S = row.size, src.shape[1]
    start = np.zeros(n_rows + 1, dtype=np.int64)
    for p in range(N):
        start[row[p] + 1] += 1
    for i in range(n_rows):
        start[i + 1] += start[i]
    total, kept = np.zeros(S), np.zeros(S)
    count = 0
    r0 = 0
    for b in range(n_base):
        r1 = r0
        while r1 < base.size and base[r1] == b:
            r1 += 1
        for i in range(n_rows):
            first[b * n_rows + i] = count
            total[:] = 0.0
            kept[:] = 0.0
            for p in range(start[i], start[i + 1]):
                for r in range(r0, r1):
                    g = geometry[p] * lens[0, lens_row[r], p] * factor[r]
                    for s in range(S):
                        total[s] += g * src[0, s, p] * _speed(lens, src, lens_row[r], s, p)
            every = total.sum()
            if not every > 0.0:
                continue
            for p in range(start[i], start[i + 1]):
                for r in range(r0, r1):
                    g = geometry[p] * lens[0, lens_row[r], p] * factor[r]
                    for s in range(S):
                        w = g * src[0, s, p]
                        v = w * _speed(lens, src, lens_row[r], s, p)
                        if v > cut * max(total[s], 0.03 * every):
                            kept[s] += v
                            if node.size > 0:
                                node[count] = p
                                out_lens[count] = lens_row[r]
                                out_src[count] = s
                                weight[count] = w
                            count += 1
            if node.size > 0:
                # those left out are made up for by the others
                for g in range(first[b * n_rows + i], count):
                    weight[g] *= total[out_src[g]] / kept[out_src[g]]
        r0 = r1
    first[n_base * n_rows] = count
    return count


@kernel
def finish_gaussians(node, src_row, weight, motion, src, factor, out):
    """Fill out (6, G): mean along l and b, half the inverse covariance (ll, 2 lb, bb), log of the peak.

    motion (5, G): mean and covariance of each Gaussian's lens; src (6, S, N): the sources' own, whose row 0 is not
    used; factor (S, N): further weight of each source row and node.
    """
    for g in range(node.size):
        p, s = node[g], src_row[g]
        w = weight[g] * factor[s, p]
        cxx = motion[2, g] + src[3, s, p]
        cxy = motion[3, g] + src[4, s, p]
        cyy = motion[4, g] + src[5, s, p]
        det = max(cxx * cyy - cxy * cxy, 1e-60)
        out[0, g] = motion[0, g] - src[1, s, p]
        out[1, g] = motion[1, g] - src[2, s, p]
        out[2, g] = 0.5 * cyy / det
        out[3, g] = -cxy / det
        out[4, g] = 0.5 * cxx / det
        out[5, g] = math.log(w / (_TWO_PI * math.sqrt(det))) if w > 0.0 else -700.0


@kernel
def condition_sources(src, m_l, m_b, e_ll, e_lb, e_bb, out, factor):
    """Sources of measured proper motion m, covariance e: fills out as src, and factor (S, N), the density there."""
    for s in range(src.shape[1]):
        for p in range(src.shape[2]):
            cxx, cxy, cyy = src[3, s, p] + e_ll, src[4, s, p] + e_lb, src[5, s, p] + e_bb
            det = cxx * cyy - cxy * cxy
            ixx, ixy, iyy = cyy / det, -cxy / det, cxx / det
            dx, dy = m_l - src[1, s, p], m_b - src[2, s, p]
            q = ixx * dx * dx + 2.0 * ixy * dx * dy + iyy * dy * dy
            factor[s, p] = math.exp(-0.5 * q) / (_TWO_PI * math.sqrt(det))
            # gain C (C + E)^-1
            kxx = src[3, s, p] * ixx + src[4, s, p] * ixy
            kxy = src[3, s, p] * ixy + src[4, s, p] * iyy
            kyx = src[4, s, p] * ixx + src[5, s, p] * ixy
            kyy = src[4, s, p] * ixy + src[5, s, p] * iyy
            out[0, s, p] = src[0, s, p]
            out[1, s, p] = src[1, s, p] + kxx * dx + kxy * dy
            out[2, s, p] = src[2, s, p] + kyx * dx + kyy * dy
            out[3, s, p] = kxx * e_ll + kxy * e_lb
            out[4, s, p] = 0.5 * (kxx * e_lb + kxy * e_bb + kyx * e_ll + kyy * e_lb)
            out[5, s, p] = kyx * e_lb + kyy * e_bb


@kernel
def at_motions(first, n_rows, base, i_lo, i_hi, cell, gauss, mu_l, mu_b, out):
    """Add the Gaussians of one base at motions mu_l, mu_b (P, Q) on rows i_lo <= i < i_hi to out (P, C, Q)."""
    for i in range(i_lo, i_hi):
        x, y = mu_l[i], mu_b[i]
        for g in range(first[base * n_rows + i], first[base * n_rows + i + 1]):
            target = out[i, cell[g]]
            ml, mb = gauss[0, g], gauss[1, g]
            a, b2, c, top = gauss[2, g], gauss[3, g], gauss[4, g], gauss[5, g]
            for q in range(x.size):
                dx, dy = x[q] - ml, y[q] - mb
                target[q] += fexp(top - a * dx * dx - b2 * dx * dy - c * dy * dy)


@kernel
def around(first, n_rows, base, cell, gauss, mu, density, q_max, out):
    """Add the Gaussians of one base, integrated over directions, at sizes of motion mu (P, K) to out (P, C, K).

    mu is even in the logarithm on each row; density: directions per dispersion on a circle; exponents beyond q_max are
    left out.
    """
    K = mu.shape[1]
    inverse_step = 1.0 / math.log(mu[0, 1] / mu[0, 0])
    for i in range(n_rows):
        x = mu[i]
        for g in range(first[base * n_rows + i], first[base * n_rows + i + 1]):
            target = out[i, cell[g]]
            ml, mb, a11, a12, a22, top = gauss[0, g], gauss[1, g], gauss[2, g], gauss[3, g], gauss[4, g], gauss[5, g]
            # a11 x^2 + a12 x y + a22 y^2 is the exponent: 1 / (2 s^2) along the principal axes
            half = 0.5 * (a11 + a22)
            spread = math.sqrt(max(0.25 * (a11 - a22) * (a11 - a22) + 0.25 * a12 * a12, 0.0))
            s_min = math.sqrt(0.5 / (half + spread))
            s_max = math.sqrt(0.5 / max(half - spread, 1e-30))
            n = 8 * int(math.ceil(density * (math.sqrt(ml * ml + mb * mb) + 3.0 * s_max) / s_min / 8.0))
            n = min(max(n, 8), 512)
            d_phi = 2.0 * math.pi / n
            hx, hy = 2.0 * a11 * ml + a12 * mb, a12 * ml + 2.0 * a22 * mb
            c0 = 0.5 * (hx * ml + hy * mb)
            shift = top - c0 + math.log(d_phi)
            for d in range(n // 2):
                c, s = math.cos((d + 0.5) * d_phi), math.sin((d + 0.5) * d_phi)
                a = a11 * c * c + a12 * c * s + a22 * s * s
                b = hx * c + hy * s
                disc = b * b - 4.0 * a * (c0 - q_max)
                if disc <= 0.0:
                    continue
                root = math.sqrt(disc)
                for _ in range(2):
                    # this direction and the opposite one
                    upper, lower = (b + root) * 0.5 / a, (b - root) * 0.5 / a
                    if upper > x[0] and lower < x[K - 1]:
                        k0, k1 = 0, K
                        if lower > x[0]:
                            k0 = int(math.log(lower / x[0]) * inverse_step)
                        if upper < x[K - 1]:
                            k1 = min(K, int(math.log(upper / x[0]) * inverse_step) + 2)
                        t, y = target[k0:k1], x[k0:k1]
                        for k in range(t.size):
                            t[k] += fexp(shift + b * y[k] - a * y[k] * y[k])
                    b = -b


@kernel
def between_motions(table, k_first, i_lo, i_hi, ln_mu0, h, ln_mu, out):
    """Interpolate a table (P, C, K) in ln mu, cubic in the logarithm, at ln_mu (P, Q): out (P, C, Q).

    Row i of the table starts at ln_mu0 + h * k_first[i].
    """
    K = table.shape[2]
    for i in range(i_lo, i_hi):
        for q in range(ln_mu.shape[1]):
            x = (ln_mu[i, q] - ln_mu0) / h - k_first[i]
            k = int(math.floor(x))
            if k < 0 or k >= K - 1:
                continue
            k = min(max(k, 1), K - 3)
            t = x - k
            w0 = -t * (t - 1.0) * (t - 2.0) / 6.0
            w1 = (t + 1.0) * (t - 1.0) * (t - 2.0) / 2.0
            w2 = -(t + 1.0) * t * (t - 2.0) / 2.0
            w3 = (t + 1.0) * t * (t - 1.0) / 6.0
            for c in range(table.shape[1]):
                f = table[i, c, k - 1 : k + 3]
                if f[0] > 1e-280 and f[1] > 1e-280 and f[2] > 1e-280 and f[3] > 1e-280:
                    z = w0 * math.log(f[0]) + w1 * math.log(f[1]) + w2 * math.log(f[2]) + w3 * math.log(f[3])
                    out[i, c, q] = math.exp(z)


@kernel
def _split_gauss(x, value, lo, hi):
    z = (x - value) / (hi if x > value else lo)
    return math.exp(-0.5 * z * z) if abs(z) < 37.0 else 0.0


@kernel
def _add(hist, quantity, x, w, x0, step):
    k = int((x - x0) / step)
    if 0 <= k < hist.shape[1]:
        hist[quantity, k, 0] += w
        hist[quantity, k, 1] += w * x


@kernel
def sum_masses(
    h, summed, ln_pi0, step, ln_kappa, on_theta, ln_X, ln_t, W, bases, number, ln_M, width, n_sub, terms,
    magnitude, spread, threshold, inverse_D_S, x0, dx, hist, by_point,
):  # fmt: skip
    """Sum the event rate of one class over masses at every point, weighed with the likelihood of what is measured.

    h (B, P, C, Q): rate density of each base per ln pi_rel, ln mu_rel and, where directions are points, radian, at the
    motions that the points have on each row, rows from ln_pi0 in steps; summed (Q, B, P): the same, summed over source
    distances. A point q is a timescale exp(ln_t) [yr] and a parallax pi_E (or with on_theta a theta_E [mas]) exp(ln_X),
    weight W. bases (n,): rows of h; number (J, n): lenses on each at mass exp(ln_M) in a bin of `width` in ln M (0:
    one mass), cut into n_sub. terms (3, Q, 3): value, lower
    and upper error of theta_E, pi_E, mu_rel; errors of 0: not measured. Where magnitude (J,) is not empty, lenses
    brighter than the absolute magnitude threshold (P, C) count only with the chance of a Gaussian `spread`.

    Adds to hist (4, n, 2) the weight and weight times value of ln M, ln D_L, ln theta_E, ln mu_rel, in bins from
    x0 (4,) of width dx; to by_point (Q,) the rate. Returns the sum.
    """
    P, C = h.shape[1], h.shape[2]
    total = 0.0
    light = magnitude.size > 0
    sharp = 1.0 / (math.sqrt(2.0) * spread)
    v = np.empty(4)
    f = np.empty(C)
    for q in range(ln_X.size):
        if W[q] == 0.0:
            continue
        at_point, shared = 0.0, -1
        for j in range(ln_M.size):
            parts = n_sub if width[j] > 0.0 else 1
            for k in range(parts):
                lm = ln_M[j] + ((k + 0.5) / parts - 0.5) * width[j]
                if on_theta:
                    ln_pi = 2.0 * ln_X[q] - ln_kappa - lm
                    ln_theta = ln_X[q]
                    ln_par = ln_X[q] - ln_kappa - lm
                else:
                    ln_pi = 2.0 * ln_X[q] + ln_kappa + lm
                    ln_theta = ln_X[q] + ln_kappa + lm
                    ln_par = ln_X[q]
                x = (ln_pi - ln_pi0) / step
                i = int(math.floor(x))
                if i < 1 or i > P - 3:
                    continue
                like = W[q] * 2.0 * math.exp(0.5 * lm) / parts
                ln_mu = ln_theta - ln_t[q]
                if terms[0, q, 1] > 0.0:
                    like *= _split_gauss(math.exp(ln_theta), terms[0, q, 0], terms[0, q, 1], terms[0, q, 2])
                if terms[1, q, 1] > 0.0:
                    like *= _split_gauss(math.exp(ln_par), terms[1, q, 0], terms[1, q, 1], terms[1, q, 2])
                if terms[2, q, 1] > 0.0:
                    like *= _split_gauss(math.exp(ln_mu), terms[2, q, 0], terms[2, q, 1], terms[2, q, 2])
                if like <= 0.0:
                    continue
                t = x - i
                near = i if t < 0.5 else i + 1
                for m in range(4):
                    s = 0.0
                    if light:
                        for c in range(C):
                            a = 0.0
                            for b in range(bases.size):
                                a += number[j, b] * h[bases[b], i - 1 + m, c, q]
                            # counts where fainter than the limit
                            s += a * 0.5 * math.erfc((threshold[i - 1 + m, c] - magnitude[j]) * sharp)
                    else:
                        for b in range(bases.size):
                            s += number[j, b] * summed[q, bases[b], i - 1 + m]
                    v[m] = s
                if v[0] > 1e-280 and v[1] > 1e-280 and v[2] > 1e-280 and v[3] > 1e-280:
                    y = (
                        -t * (t - 1.0) * (t - 2.0) / 6.0 * math.log(v[0])
                        + (t + 1.0) * (t - 1.0) * (t - 2.0) / 2.0 * math.log(v[1])
                        - (t + 1.0) * t * (t - 2.0) / 2.0 * math.log(v[2])
                        + (t + 1.0) * t * (t - 1.0) / 6.0 * math.log(v[3])
                    )
                    # where the logarithm bends sharply the cubic may overshoot
                    rate = like * min(math.exp(y), 2.0 * max(v[1], v[2]))
                else:
                    rate = like * ((1.0 - t) * v[1] + t * v[2])
                if not rate > 0.0:
                    continue
                at_point += rate
                _add(hist, 0, lm, rate, x0[0], dx)
                _add(hist, 2, ln_theta, rate, x0[2], dx)
                _add(hist, 3, ln_mu, rate, x0[3], dx)
                # distances of what hardly counts are not worth their time
                if hist.shape[1] > 0 and rate > 1e-7 * (total + at_point):
                    if near != shared or light:
                        # source distances change little within a row
                        shared, s = near, 0.0
                        for c in range(C):
                            a = 0.0
                            for b in range(bases.size):
                                a += number[j, b] * h[bases[b], near, c, q]
                            if light:
                                a *= 0.5 * math.erfc((threshold[near, c] - magnitude[j]) * sharp)
                            f[c] = a
                            s += a
                        for c in range(C):
                            f[c] = f[c] / s if s > 0.0 else 0.0
                    pi = math.exp(ln_pi)
                    for c in range(C):
                        if f[c] > 1e-4:
                            _add(hist, 1, -math.log(pi + inverse_D_S[c]), rate * f[c], x0[1], dx)
        by_point[q] += at_point
        total += at_point
    return total


@kernel
def fill_directions(first, n_rows, base, cell, gauss, mu, cosine, sine, q_max, coarse, out, shares):
    """Fill out (P, K, F) with the log of one base's density at sizes mu (P, K) and F directions of motion.

    A Gaussian is left out where its exponent is beyond q_max at every direction; -800 where none is left. Fills shares
    (P, K, F / coarse, C) with what each cell of source distance has of it, around so many directions at a time.
    """
    K, F, C = mu.shape[1], cosine.size, shares.shape[3]
    here = np.empty(F)
    summed = np.empty((K, F))
    of_cell = np.empty((C, K, F // coarse))
    for i in range(n_rows):
        summed[:] = 0.0
        of_cell[:] = 0.0
        for g in range(first[base * n_rows + i], first[base * n_rows + i + 1]):
            ml, mb, a, b2, c, top = gauss[0, g], gauss[1, g], gauss[2, g], gauss[3, g], gauss[4, g], gauss[5, g]
            least = 0.5 * (a + c) - math.sqrt(0.25 * (a - c) * (a - c) + 0.25 * b2 * b2)
            reach = math.sqrt(q_max / max(least, 1e-30))
            m = math.sqrt(ml * ml + mb * mb)
            mine = of_cell[cell[g]]
            for k in range(K):
                v = mu[i, k]
                if abs(v - m) > reach:
                    continue
                for f in range(F):
                    dx, dy = v * cosine[f] - ml, v * sine[f] - mb
                    here[f] = fexp(top - a * dx * dx - b2 * dx * dy - c * dy * dy)
                target = summed[k]
                for f in range(F):
                    target[f] += here[f]
                for f in range(F // coarse):
                    # the one or two in the middle stand for all of them
                    mine[k, f] += here[f * coarse + (coarse - 1) // 2] + here[f * coarse + coarse // 2]
        for k in range(K):
            for f in range(F):
                out[i, k, f] = math.log(summed[k, f]) if summed[k, f] > 1e-280 else -800.0
            for f in range(F // coarse):
                total = 0.0
                for c in range(C):
                    total += of_cell[c, k, f]
                for c in range(C):
                    shares[i, k, f, c] = of_cell[c, k, f] / total if total > 1e-280 else 0.0


@kernel
def between_directions(table, k_first, i_lo, i_hi, h, ln_mu, turn, coarse, shares, out):
    """Interpolate a table (P, K, F) of logs, cubic in ln mu and direction: out (P, C, Q) at ln_mu, turn (P, Q).

    Row i of the table starts at h * k_first[i]; turn (at least 0) in units of the directions' step, from the first one
    on. What is found is shared out over source distances by the shares (P, K, F / coarse, C), linear between
    their nodes.
    """
    K, F, C, W = table.shape[1], table.shape[2], shares.shape[3], shares.shape[2]
    for i in range(i_lo, i_hi):
        for q in range(ln_mu.shape[1]):
            x = ln_mu[i, q] / h - k_first[i]
            k = int(math.floor(x))
            if k < 0 or k >= K - 1:
                continue
            low, v = k, x - k
            k = min(max(k, 1), K - 3)
            t = x - k
            f = int(math.floor(turn[i, q]))
            s = turn[i, q] - f
            u0, u1 = -s * (s - 1.0) * (s - 2.0) / 6.0, (s + 1.0) * (s - 1.0) * (s - 2.0) / 2.0
            u2, u3 = -(s + 1.0) * s * (s - 2.0) / 2.0, (s + 1.0) * s * (s - 1.0) / 6.0
            f0, f1, f2, f3 = (f + F - 1) % F, f % F, (f + 1) % F, (f + 2) % F
            z, least = 0.0, 0.0
            for j in range(4):
                w = (
                    -t * (t - 1.0) * (t - 2.0) / 6.0 if j == 0
                    else (t + 1.0) * (t - 1.0) * (t - 2.0) / 2.0 if j == 1
                    else -(t + 1.0) * t * (t - 2.0) / 2.0 if j == 2
                    else (t + 1.0) * t * (t - 1.0) / 6.0
                )  # fmt: skip
                row = table[i, k - 1 + j]
                least = min(least, row[f0], row[f1], row[f2], row[f3])
                z += w * (u0 * row[f0] + u1 * row[f1] + u2 * row[f2] + u3 * row[f3])
            if least <= -700.0:
                continue
            value = math.exp(z)
            # the middle of a group of directions is half a step before its middle node
            x = (turn[i, q] - 0.5 * (coarse - 1)) / coarse + W
            f = int(math.floor(x))
            s = x - f
            one, other = shares[i, low, f % W], shares[i, low, (f + 1) % W]
            one_up, other_up = shares[i, low + 1, f % W], shares[i, low + 1, (f + 1) % W]
            for c in range(C):
                below, above = (1.0 - s) * one[c] + s * other[c], (1.0 - s) * one_up[c] + s * other_up[c]
                out[i, c, q] = value * ((1.0 - v) * below + v * above)
