"""Rate density at given points of relative parallax and motion, and its sums over lens masses against measurements.

A row is one relative parallax. On it the density of relative motion is a sum of Gaussians, each of one lens row, one
source row and one source distance; a base is a sum of lens rows that only ever enter together.
"""

import math

import numpy as np

from ._jit import kernel
from .maths import fexp32

_TWO_PI = 2.0 * math.pi
NOTHING = -640.0  # of a logarithm
_EMPTY, _BEYOND, _ZERO = np.float32(-800.0), np.float32(40.0), np.float32(0.0)
_FINER = 8  # steps of a row in which lens distances are gathered
_HALF, _QUARTER = np.float32(0.5), np.float32(0.25)


@kernel(inline="always")
def least_curvature(a, b2, c):
    """Least of a x^2 + b2 x y + c y^2 on the unit circle."""
    return _HALF * (a + c) - math.sqrt(_QUARTER * ((a - c) * (a - c) + b2 * b2))


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
    """Add the Gaussians of one base at motions mu_l, mu_b (i_hi - i_lo, Q) on rows i_lo <= i < i_hi to out, a row each.

    In single precision, out (rows, C, Q) too; gauss (6, G) from `mixtures.finish`.
    """
    Q = mu_l.shape[1]
    for i in range(i_lo, i_hi):
        x, y = mu_l[i - i_lo], mu_b[i - i_lo]
        slow, fast = np.float32(1e30), np.float32(0.0)
        for q in range(Q):
            v = math.sqrt(x[q] * x[q] + y[q] * y[q])
            slow, fast = min(slow, v), max(fast, v)
        for g in range(first[base * n_rows + i], first[base * n_rows + i + 1]):
            ml, mb = gauss[0, g], gauss[1, g]
            a, b2, c, top = gauss[2, g], gauss[3, g], gauss[4, g], gauss[5, g]
            # nothing where every motion is further off than this along the major axis
            m = math.sqrt(ml * ml + mb * mb)
            off = max(slow - m, m - fast)
            if top < _EMPTY or (off > _ZERO and least_curvature(a, b2, c) * off * off > _BEYOND):
                continue
            target = out[i - i_lo, cell[g]]
            for q in range(Q):
                dx, dy = x[q] - ml, y[q] - mb
                target[q] += fexp32(top - a * dx * dx - b2 * dx * dy - c * dy * dy)


@kernel
def between_motions(ln_table, k_first, i_lo, i_hi, x0, h, ln_mu, out):
    """Interpolate a table of logarithms (P, C, K) in ln mu, cubic, at ln_mu (P, Q): out (P, Q, C).

    Row i of the table starts at x0 + h * k_first[i]; what is below -640 is nothing.
    """
    K = ln_table.shape[2]
    for i in range(i_lo, i_hi):
        for q in range(ln_mu.shape[1]):
            x = (ln_mu[i, q] - x0) / h - k_first[i]
            k = int(math.floor(x))
            if k < 0 or k >= K - 1:
                continue
            k = min(max(k, 1), K - 3)
            t = x - k
            w0 = -t * (t - 1.0) * (t - 2.0) / 6.0
            w1 = (t + 1.0) * (t - 1.0) * (t - 2.0) / 2.0
            w2 = -(t + 1.0) * t * (t - 2.0) / 2.0
            w3 = (t + 1.0) * t * (t - 1.0) / 6.0
            for c in range(ln_table.shape[1]):
                f = ln_table[i, c, k - 1 : k + 3]
                if min(f[0], f[1], f[2], f[3]) > NOTHING:
                    out[i, q, c] = math.exp(w0 * f[0] + w1 * f[1] + w2 * f[2] + w3 * f[3])


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
def weighed(q, ln_theta, ln_par, ln_mu, terms, vector, toward):
    """Likelihood of what is measured beside the size that points run over, at point q.

    terms (3, Q, 3): value, lower and upper error of theta_E, pi_E, mu_rel; errors of 0: not measured. vector (7,):
    value, lower and upper error of pi_EN, of pi_EE, and their correlation, with toward (2, Q) the direction of motion
    of each point toward north and east; nothing where toward is (2, 0).
    """
    like = 1.0
    if terms[0, q, 1] > 0.0:
        like *= _split_gauss(math.exp(ln_theta), terms[0, q, 0], terms[0, q, 1], terms[0, q, 2])
    if terms[1, q, 1] > 0.0:
        like *= _split_gauss(math.exp(ln_par), terms[1, q, 0], terms[1, q, 1], terms[1, q, 2])
    if terms[2, q, 1] > 0.0:
        like *= _split_gauss(math.exp(ln_mu), terms[2, q, 0], terms[2, q, 1], terms[2, q, 2])
    if toward.shape[1] > 0 and like > 0.0:
        par = math.exp(ln_par)
        n, e = par * toward[0, q] - vector[0], par * toward[1, q] - vector[3]
        n /= vector[2] if n > 0.0 else vector[1]
        e /= vector[5] if e > 0.0 else vector[4]
        z = (n * n - 2.0 * vector[6] * n * e + e * e) / (1.0 - vector[6] * vector[6])
        like *= math.exp(-0.5 * z) if z < 1400.0 else 0.0
    return like


@kernel
def at_row(h, summed, u, i, t, bases, number, magnitude, sharp, threshold):
    """Rate density at motion u of lenses of one mass, `number` (n,) on each base, between rows i and i + 1.

    Cubic in the logarithm. Where sharp is above 0, lenses count with the chance of being fainter than the threshold.
    """
    C = h.shape[3]
    v = np.empty(4)
    for m in range(4):
        s = 0.0
        if sharp > 0.0:
            for c in range(C):
                a = 0.0
                for b in range(bases.size):
                    a += number[b] * h[bases[b], i - 1 + m, u, c]
                s += a * 0.5 * math.erfc((threshold[i - 1 + m, c] - magnitude) * sharp)
        else:
            for b in range(bases.size):
                s += number[b] * summed[u, bases[b], i - 1 + m]
        v[m] = s
    if v[0] > 1e-280 and v[1] > 1e-280 and v[2] > 1e-280 and v[3] > 1e-280:
        y = (
            -t * (t - 1.0) * (t - 2.0) / 6.0 * math.log(v[0])
            + (t + 1.0) * (t - 1.0) * (t - 2.0) / 2.0 * math.log(v[1])
            - (t + 1.0) * t * (t - 2.0) / 2.0 * math.log(v[2])
            + (t + 1.0) * t * (t - 1.0) / 6.0 * math.log(v[3])
        )
        # where the logarithm bends sharply the cubic may overshoot
        return min(math.exp(y), 2.0 * max(v[1], v[2]))
    return (1.0 - t) * v[1] + t * v[2]


@kernel(inline="always")
def sizes(on_theta, ln_X, ln_kappa, lm):
    """Logarithms of relative parallax, theta_E and pi_E of a lens of mass exp(lm) at a point."""
    if on_theta:
        return 2.0 * ln_X - ln_kappa - lm, ln_X, ln_X - ln_kappa - lm
    return 2.0 * ln_X + ln_kappa + lm, ln_X + ln_kappa + lm, ln_X


@kernel
def sum_masses(
    h, summed, motion, ln_pi0, step, ln_kappa, on_theta, ln_X, ln_t, W, bases, number, ln_M, width, n_sub, terms,
    vector, toward, magnitude, spread, threshold, inverse_D_S, x0, dx, hist, by_point,
):  # fmt: skip
    """Sum the event rate of one class over masses at every point, weighed with the likelihood of what is measured.

    h (B, P, U, C): rate density of each base per ln pi_rel, ln mu_rel and, where directions are points, radian, at the
    motions that points have on each row, rows from ln_pi0 in steps; summed (U, B, P): the same, summed over source
    distances; motion (Q,): which of these each point has. A point q is a timescale exp(ln_t) [yr] and a parallax pi_E
    (or with on_theta a theta_E [mas]) exp(ln_X), weight W. bases (n,): rows of h; number (J, n): lenses on each at mass
    exp(ln_M) in a bin of `width` in ln M (0: one mass), cut into n_sub. terms, vector, toward as in `weighed`. Where
    magnitude (J,) is not empty, lenses brighter than the absolute magnitude threshold (P, C) count only with the chance
    of a Gaussian `spread`.

    Adds to hist (4, n, 2) the weight and weight times value of ln M, ln D_L, ln theta_E, ln mu_rel, in bins from
    x0 (4,) of width dx; to by_point (Q,) the rate. Returns the sum.
    """
    P, C = h.shape[1], h.shape[3]
    total = 0.0
    light = magnitude.size > 0
    sharp = 1.0 / (math.sqrt(2.0) * spread) if light else 0.0
    f = np.empty(C)
    # distances are gathered on finer rows first
    parallax, by_cell = np.zeros((_FINER * P, 2)), np.zeros((_FINER * P, C))
    for q in range(ln_X.size):
        if W[q] == 0.0:
            continue
        u = motion[q]
        at_point, shared = 0.0, -1
        for j in range(ln_M.size):
            parts = n_sub if width[j] > 0.0 else 1
            for k in range(parts):
                lm = ln_M[j] + ((k + 0.5) / parts - 0.5) * width[j]
                ln_pi, ln_theta, ln_par = sizes(on_theta, ln_X[q], ln_kappa, lm)
                x = (ln_pi - ln_pi0) / step
                i = int(math.floor(x))
                if i < 1 or i > P - 3:
                    continue
                ln_mu = ln_theta - ln_t[q]
                like = weighed(q, ln_theta, ln_par, ln_mu, terms, vector, toward)
                like *= W[q] * 2.0 * math.exp(0.5 * lm) / parts
                if like <= 0.0:
                    continue
                t = x - i
                of_light = magnitude[j] if light else 0.0
                rate = like * at_row(h, summed, u, i, t, bases, number[j], of_light, sharp, threshold)
                if not rate > 0.0:
                    continue
                at_point += rate
                _add(hist, 0, lm, rate, x0[0], dx)
                _add(hist, 2, ln_theta, rate, x0[2], dx)
                _add(hist, 3, ln_mu, rate, x0[3], dx)
                # distances of what hardly counts are not worth their time
                if hist.shape[1] > 0 and rate > 1e-7 * (total + at_point):
                    near = i if t < 0.5 else i + 1
                    if near != shared or light:
                        # source distances change little within a row
                        shared, s = near, 0.0
                        f[:] = 0.0
                        for b in range(bases.size):
                            a, here = number[j, b], h[bases[b], near, u]
                            for c in range(C):
                                f[c] += a * here[c]
                        for c in range(C):
                            if light:
                                f[c] *= 0.5 * math.erfc((threshold[near, c] - of_light) * sharp)
                            s += f[c]
                        for c in range(C):
                            f[c] = f[c] / s if s > 0.0 else 0.0
                    r = int(_FINER * x)
                    parallax[r, 0] += rate
                    parallax[r, 1] += rate * ln_pi
                    for c in range(C):
                        by_cell[r, c] += rate * f[c]
        by_point[q] += at_point
        total += at_point
    for r in range(by_cell.shape[0]):
        if parallax[r, 0] > 0.0:
            pi = math.exp(parallax[r, 1] / parallax[r, 0])
            for c in range(C):
                if by_cell[r, c] > 1e-12 * total:
                    _add(hist, 1, -math.log(pi + inverse_D_S[c]), by_cell[r, c], x0[1], dx)
    return total
