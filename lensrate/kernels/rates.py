"""Optical depth, event rate and rate densities of one sightline, for lenses of 1 Msun and density in Msun/kpc^3.

Everything here takes profiles (see profile.py): `lens` (6, rows, ...) and `src` (6, rows, ...), where src[0]
already carries the normalised source weight. `element` (lens rows,) tells which element a Gaussian row adds to.
Distances kpc, angles mas, proper motions mas/yr, rates per source and year. A mass M multiplies rates by sqrt(M)
per lens (number, not mass, of lenses) and shifts the logarithms of t_E, theta_E and pi_E.
"""

import math

import numpy as np

from ._jit import kernel
from .maths import fexp
from .speeds import BLOCK, gather, half_circle, mean_lengths


@kernel
def moments(outer, D_S, src, D_L, w_L, lens, element, four_g_c2, kappa, mas, n_dir, tau, gamma, distance):
    """Optical depth and rate by element and source row.

    D_S (J,), src (6, S, J); pairs: outer (N,) index into D_S, D_L and w_L (N,) nodes and quadrature weights [kpc],
    lens (6, L, N). Adds to tau (E, S), gamma (E, S) [1/yr] and distance (E,), the rate-weighted sum of D_L.
    """
    directions = half_circle(n_dir)
    vectors, fill = np.empty((2, 5, BLOCK)), np.zeros(2, dtype=np.int64)
    weight, far, length = np.empty((2, BLOCK)), np.empty((2, BLOCK)), np.empty(BLOCK)
    place = np.empty((2, BLOCK, 2), dtype=np.int64)
    for p in range(outer.size):
        j = outer[p]
        d = D_L[p]
        pi_rel = 1.0 / d - 1.0 / D_S[j]
        if pi_rel <= 0.0:
            continue
        g_tau = w_L[p] * math.pi * four_g_c2 * d * d * pi_rel
        g_rate = w_L[p] * 2.0 * d * d * math.sqrt(kappa * pi_rel) * mas * mas
        for r in range(element.size):
            n = lens[0, r, p]
            if n <= 0.0:
                continue
            e = element[r]
            for s in range(src.shape[1]):
                w = src[0, s, j]
                if w <= 0.0:
                    continue
                tau[e, s] += g_tau * w * n
                kind = gather(
                    lens[1, r, p] - src[1, s, j],
                    lens[2, r, p] - src[2, s, j],
                    lens[3, r, p] + src[3, s, j],
                    lens[4, r, p] + src[4, s, j],
                    lens[5, r, p] + src[5, s, j],
                    n_dir, vectors, fill,
                )  # fmt: skip
                k = fill[kind] - 1
                weight[kind, k], far[kind, k] = g_rate * w * n, d
                place[kind, k, 0], place[kind, k, 1] = e, s
                if fill[kind] == BLOCK:
                    _add(kind, vectors, fill, directions, length, weight, place, gamma)
                    _add_distance(kind, length, weight, far, place, BLOCK, distance)
    for kind in range(2):
        n_left = fill[kind]
        _add(kind, vectors, fill, directions, length, weight, place, gamma)
        _add_distance(kind, length, weight, far, place, n_left, distance)


@kernel
def _add(kind, vectors, fill, directions, length, weight, place, gamma):
    """Add the rates of a block's vectors to gamma (E, S) at their places, leave their mean lengths, empty the block."""
    mean_lengths(vectors, kind, fill[kind], directions, length)
    for k in range(fill[kind]):
        gamma[place[kind, k, 0], place[kind, k, 1]] += weight[kind, k] * length[k]
    fill[kind] = 0


@kernel
def _add_distance(kind, length, weight, far, place, n, distance):
    for k in range(n):
        distance[place[kind, k, 0]] += weight[kind, k] * length[k] * far[kind, k]


@kernel
def gather_behind(D_L, first, D_S, src, bundle, depth, out):
    """Bundle the sources behind each lens node: a rate is linear in their weight times sqrt(pi_rel).

    Sources of node m are first[m]:first[m + 1] of D_S (N,) and src (6, S, N), whose weights carry the quadrature; of a
    number `bundle` of neighbours only weight, mean and covariance are kept. Fills depth (M,), the sum of weight times
    pi_rel, and out (6, S, N), from first[m] on; return the number of bundles of each node, (M,).
    """
    n_bundles = np.zeros(D_L.size, dtype=np.int64)
    for m in range(D_L.size):
        depth[m] = 0.0
        q = first[m]
        for start in range(first[m], first[m + 1], bundle):
            stop = min(start + bundle, first[m + 1])
            for s in range(src.shape[1]):
                w = ml = mb = c0 = c1 = c2 = 0.0
                for p in range(start, stop):
                    pi_rel = max(1.0 / D_L[m] - 1.0 / D_S[p], 0.0)
                    depth[m] += src[0, s, p] * pi_rel
                    v = src[0, s, p] * math.sqrt(pi_rel)
                    # the products only: means are taken out below
                    x, y = src[1, s, p], src[2, s, p]
                    w += v
                    ml += v * x
                    mb += v * y
                    c0 += v * (src[3, s, p] + x * x)
                    c1 += v * (src[4, s, p] + x * y)
                    c2 += v * (src[5, s, p] + y * y)
                out[:, s, q] = 0.0
                if w > 1e-290:
                    ml /= w
                    mb /= w
                    out[0, s, q] = w
                    out[1, s, q] = ml
                    out[2, s, q] = mb
                    out[3, s, q] = c0 / w - ml * ml
                    out[4, s, q] = c1 / w - ml * mb
                    out[5, s, q] = c2 / w - mb * mb
            q += 1
        n_bundles[m] = q - first[m]
    return n_bundles


@kernel
def lens_moments(D_L, w_L, lens, element, first, n_bundles, depth, src, four_g_c2, kappa, mas, n_dir, tau, gamma):
    """Optical depth and rate by element and lens node, each with bundles of sources of its own behind it.

    D_L, w_L (M,) nodes and weights [kpc], lens (6, L, M); first, n_bundles, depth, src from gather_behind. Adds to tau
    and gamma (E, M).
    """
    directions = half_circle(n_dir)
    vectors, fill = np.empty((2, 5, BLOCK)), np.zeros(2, dtype=np.int64)
    weight, length = np.empty((2, BLOCK)), np.empty(BLOCK)
    place = np.empty((2, BLOCK, 2), dtype=np.int64)
    for m in range(D_L.size):
        d = D_L[m]
        for r in range(element.size):
            n = lens[0, r, m]
            if n <= 0.0:
                continue
            e = element[r]
            tau[e, m] += w_L[m] * math.pi * four_g_c2 * d * d * n * depth[m]
            g_rate = w_L[m] * 2.0 * d * d * math.sqrt(kappa) * mas * mas * n
            for p in range(first[m], first[m] + n_bundles[m]):
                for s in range(src.shape[1]):
                    w = src[0, s, p]
                    if w > 0.0:
                        kind = gather(
                            lens[1, r, m] - src[1, s, p],
                            lens[2, r, m] - src[2, s, p],
                            lens[3, r, m] + src[3, s, p],
                            lens[4, r, m] + src[4, s, p],
                            lens[5, r, m] + src[5, s, p],
                            n_dir, vectors, fill,
                        )  # fmt: skip
                        k = fill[kind] - 1
                        weight[kind, k] = g_rate * w
                        place[kind, k, 0], place[kind, k, 1] = e, m
                        if fill[kind] == BLOCK:
                            _add(kind, vectors, fill, directions, length, weight, place, gamma)
    for kind in range(2):
        _add(kind, vectors, fill, directions, length, weight, place, gamma)


@kernel
def _add_directions(
    weight, ml, mb, ixx, ixy, iyy, log_norm, first, step, n_dir, both, mu, inverse_step, ka, kb, q_max, out
):
    """Add weight * N2(mu e_phi) summed over n_dir directions from angle `first`, for mu[ka:kb].

    With `both` the opposite of each direction is added too, which shares most of the work. inverse_step: 1 over the
    step of ln mu.
    """
    target = out[ka:kb]
    x = mu[ka:kb]
    if x.size == 0:
        return
    lo, hi = x[0], x[x.size - 1]
    c, s = math.cos(first), math.sin(first)
    dc, ds = math.cos(step), math.sin(step)
    hx, hy = ixx * ml + ixy * mb, ixy * ml + iyy * mb
    c0 = 0.5 * (hx * ml + hy * mb)
    shift = c0 - log_norm
    for _ in range(n_dir):
        a = 0.5 * (ixx * c * c + 2.0 * ixy * c * s + iyy * s * s)
        b = hx * c + hy * s
        # mu with a mu^2 - b mu + c0 < q_max
        disc = b * b - 4.0 * a * (c0 - q_max)
        if disc > 0.0:
            root = math.sqrt(disc)
            half = 0.5 / a
            for side in range(2 if both else 1):
                if side == 1:
                    b = -b
                top, bottom = (b + root) * half, (b - root) * half
                if top > lo and bottom < hi:
                    k0, k1 = 0, x.size
                    if bottom > lo:
                        k0 = int(math.log(bottom / lo) * inverse_step)
                    if top < hi:
                        k1 = min(x.size, int(math.log(top / lo) * inverse_step) + 2)
                    t = target[k0:k1]
                    y = x[k0:k1]
                    for k in range(t.size):
                        t[k] += weight * fexp(b * y[k] - a * y[k] * y[k] - shift)
        # the next direction, by turning the last one
        c, s = c * dc - s * ds, s * dc + c * ds


@kernel
def _gaussian(lens, src, r, s, p):
    """Mean, inverse covariance, log of norm, smallest and largest dispersion of lens row r minus source row s."""
    ml = lens[1, r, p] - src[1, s, p]
    mb = lens[2, r, p] - src[2, s, p]
    cxx = lens[3, r, p] + src[3, s, p]
    cxy = lens[4, r, p] + src[4, s, p]
    cyy = lens[5, r, p] + src[5, s, p]
    det = cxx * cyy - cxy * cxy
    half = 0.5 * (cxx + cyy)
    spread = math.sqrt(max(half * half - det, 0.0))
    s_max = math.sqrt(half + spread)
    s_min = math.sqrt(max(det, 1e-60)) / s_max
    return ml, mb, cyy / det, -cxy / det, cxx / det, -math.log(2.0 * math.pi) - 0.5 * math.log(det), s_min, s_max


@kernel
def n_directions(ml, mb, s_min, s_max, density):
    """Directions that resolve the Gaussian on every circle, a multiple of 8."""
    n = 8 * int(math.ceil(density * (math.sqrt(ml * ml + mb * mb) + 3.0 * s_max) / s_min / 8.0))
    return min(max(n, 8), 4096)


@kernel
def node_weights(pi, row, D_S, kappa, mas, out):
    """Fill out (N,) with D_L^4 pi 2 sqrt(kappa pi) mas^2, the mass-free rate weight of a node (per d ln pi)."""
    for p in range(D_S.size):
        x = pi[row[p]]
        d = 1.0 / (x + 1.0 / D_S[p])
        out[p] = d**4 * x * 2.0 * math.sqrt(kappa * x) * mas * mas


@kernel
def rate_density(pi, row, geometry, src, lens, element, mu, directions, q_max, w_cut, T):
    """Mass-free rate density per ln pi_rel and ln mu_rel.

    pi (P,), row (N,): index of the pi row of each node; geometry (N,) from node_weights; src (6, S, N) with
    weights that sum to one over the nodes of a row; lens (6, L, N); mu (K,) uniform in the logarithm.
    Fills T (E, P, K). Nodes below w_cut of an element's largest weight (of a thousandth of the
    largest of all, if that is more) are dropped.
    """
    T[:] = 0.0
    K = mu.size
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
    tmp = np.empty(K)
    inverse_step = 1.0 / math.log(mu[1] / mu[0])
    for r in range(element.size):
        e = element[r]
        for p in range(row.size):
            g = geometry[p] * lens[0, r, p]
            if g <= 0.0:
                continue
            tmp[:] = 0.0
            used = False
            for s in range(src.shape[1]):
                w = g * src[0, s, p]
                if w <= w_cut * peak[e]:
                    continue
                used = True
                ml, mb, ixx, ixy, iyy, log_norm, s_min, s_max = _gaussian(lens, src, r, s, p)
                n = n_directions(ml, mb, s_min, s_max, directions)
                # on small circles the exponent hardly varies: 8 directions are exact below mu_low
                bx, by = ixx * ml + ixy * mb, ixy * ml + iyy * mb
                mu_low = min(1.2 / max(math.sqrt(bx * bx + by * by), 1e-30), s_min)
                k_low = min(max(int(math.log(mu_low / mu[0]) * inverse_step), 0), K)
                dphi = 2.0 * math.pi / 8
                _add_directions(
                    w * dphi, ml, mb, ixx, ixy, iyy, log_norm, 0.0, dphi, 4, True, mu, inverse_step, 0, k_low,
                    q_max, tmp,
                )  # fmt: skip
                dphi = 2.0 * math.pi / n
                _add_directions(
                    w * dphi, ml, mb, ixx, ixy, iyy, log_norm, 0.0, dphi, n // 2, True, mu, inverse_step, k_low, K,
                    q_max, tmp,
                )  # fmt: skip
            if used:
                out = T[e, row[p]]
                for k in range(K):
                    out[k] += tmp[k] * mu[k] * mu[k] * mu[k]


@kernel
def event_rate_density(pi, row, cell, geometry, src, lens, row_weight, mu, n_phi, directions, q_max, w_cut, R):
    """The finer density, before the sums over source distance and direction of motion.

    cell (N,): source-distance cell of each node, negative to skip; row_weight (L,): factor of each lens row
    (kick law and history enter here, linearly). Direction cells are [2 pi j / n_phi, 2 pi (j+1) / n_phi), the angle
    counted from +l toward +b. Nodes below w_cut of the largest weight are dropped. Adds to R (P, C, n_phi, K) float32:
    rate per ln pi_rel, ln mu_rel, integrated over cells.
    """
    K = mu.size
    tmp = np.empty((n_phi, K))
    inverse_step = 1.0 / math.log(mu[1] / mu[0])
    peak = 0.0
    for r in range(row_weight.size):
        for p in range(row.size):
            for s in range(src.shape[1]):
                peak = max(peak, geometry[p] * lens[0, r, p] * row_weight[r] * src[0, s, p])
    for p in range(row.size):
        c = cell[p]
        if c < 0:
            continue
        tmp[:] = 0.0
        used = False
        for r in range(row_weight.size):
            g = geometry[p] * lens[0, r, p] * row_weight[r]
            if g <= 0.0:
                continue
            for s in range(src.shape[1]):
                w = g * src[0, s, p]
                if w <= w_cut * peak:
                    continue
                used = True
                ml, mb, ixx, ixy, iyy, log_norm, s_min, s_max = _gaussian(lens, src, r, s, p)
                n = n_directions(ml, mb, s_min, s_max, directions)
                per_cell = max(2, (n + n_phi - 1) // n_phi)
                dphi = 2.0 * math.pi / (per_cell * n_phi)
                for j in range(n_phi):
                    first = (j * per_cell + 0.5) * dphi
                    _add_directions(
                        w * dphi, ml, mb, ixx, ixy, iyy, log_norm, first, dphi, per_cell, False, mu, inverse_step, 0, K,
                        q_max, tmp[j],
                    )  # fmt: skip
        if used:
            for j in range(n_phi):
                out = R[row[p], c, j]
                for k in range(K):
                    out[k] += np.float32(tmp[j, k] * mu[k] * mu[k] * mu[k])


@kernel
def shear_timescale(T, first, out):
    """Sum T (E, P, K) at constant ln t_E: out (E, n) at index first + i - k, for steps h in ln mu and 2h in ln pi.

    Multiply by the step of ln pi to get the rate per ln t_E of 1 Msun lenses.
    """
    out[:] = 0.0
    for e in range(T.shape[0]):
        for i in range(T.shape[1]):
            for k in range(T.shape[2]):
                j = first + i - k
                if 0 <= j < out.shape[1]:
                    out[e, j] += T[e, i, k]


@kernel
def shear_joint(T, weight, first, back, out):
    """Sum mass-shifted T (E, P, K) at constant ln t_E and ln theta_E or ln pi_E, as `shear_timescale` does.

    weight (C, E, M): of each class, element and mass, zeros skipped. out (C, m, n) gets T[e, i, k] times it at
    (i + mass, first + i - k + mass), or with `back` (pi_E, which falls with mass) at (i - mass + M - 1, ...).
    """
    C, E, M = weight.shape
    K = T.shape[2]
    layer = np.empty(K)
    out[:] = 0.0
    # elements of each class and mass, the used ones first
    used = np.empty((C, M, E), dtype=np.int64)
    many = np.zeros((C, M), dtype=np.int64)
    for c in range(C):
        for e in range(E):
            for m in range(M):
                if weight[c, e, m] != 0.0:
                    used[c, m, many[c, m]] = e
                    many[c, m] += 1
    # a row of all elements stays in the cache
    for i in range(T.shape[1]):
        for c in range(C):
            for m in range(M):
                if many[c, m] == 0:
                    continue
                layer[:] = 0.0
                for n in range(many[c, m]):
                    e = used[c, m, n]
                    w, source = weight[c, e, m], T[e, i]
                    for k in range(K):
                        layer[k] += w * source[k]
                line = out[c, i - m + M - 1 if back else i + m]
                for k in range(K):
                    line[first + i + m - k] += layer[k]
