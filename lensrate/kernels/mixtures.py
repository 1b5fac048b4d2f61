"""The density of relative motion on each row of relative parallax as a sum of few Gaussians.

A row's integral over source distances, source rows and lens rows is a sum of thousands of Gaussians, most of them
alike. Alike ones are joined with their weight, mean and covariance kept. Where motions of lens and source stay apart,
what is measured of the source itself can be put in later.
"""

import math

import numpy as np

from ._jit import kernel
from .rings import apply_table, lay

_TWO_PI = 2.0 * math.pi
_ROOT = math.sqrt(0.5 * math.pi)
_LOOSE = (1e-3, 1e-5, 0.0)  # shares of a row's rate down to which Gaussians are gathered in turn
_LOOSEST = 8.0
_LITTLE = 1e-6  # share of a row's density below which a Gaussian is left out once something is known
_FINEST = 1e-9  # squared dispersion [(mas/yr)^2] below which all motions are alike


@kernel(inline="always")
def _apart(dx, dy, d_ll, d_lb, d_bb, c_ll, c_lb, c_bb):
    """Squared distance of two means in dispersions, and squared relative difference of two covariances."""
    det = max(c_ll * c_bb - c_lb * c_lb, _FINEST * (c_ll + c_bb) + _FINEST * _FINEST)
    z = (c_bb * dx * dx - 2.0 * c_lb * dx * dy + c_ll * dy * dy) / det
    # trace of (C^-1 dC)^2, whatever the axes
    a, b = c_bb * d_ll - c_lb * d_lb, c_bb * d_lb - c_lb * d_bb
    c, d = c_ll * d_lb - c_lb * d_ll, c_ll * d_bb - c_lb * d_lb
    return z, (a * a + 2.0 * b * c + d * d) / (det * det)


@kernel
def gather(
    start, geometry, src, lens, lens_row, factor, D, cell, n_cells, cut, mean_tol, shape_tol, D_tol, src_tol, full
):  # fmt: skip
    """Gather the Gaussians of one base into a few on every row.

    start (P + 1,): first node of each row; geometry (N,) of `rates.node_weights`; src (6, S, N), lens (6, L, N);
    lens_row, factor (R,): lens rows of the base and their factors; D, cell (N,): source distance and its cell.
    Gaussians below `cut` of the row's rate are left out. Of those alike a heavy one leads; the others are no further
    from it than mean_tol in dispersions and shape_tol in relative covariance, both for the source's own motion src_tol,
    and D_tol [kpc]. Tolerances of motions hold for Gaussians of a share `full` of the row's rate, those of less may be
    moved further: as the fourth root of the share, since errors go with the square or more of the distance.

    Returns first (P + 1,), the cell of each Gaussian, and (13, G): weight; mean and covariance of the lens (5) and of
    the source (5); mean and variance of the source's distance. With src_tol infinite the first five are those of the
    relative motion, and the source's are 0. Gaussians of a row are in order of their cells.
    """
    P, S, R = start.size - 1, src.shape[1], lens_row.size
    apart = src_tol < math.inf
    first = np.zeros(P + 1, dtype=np.int64)
    most = 0
    for i in range(P):
        most = max(most, start[i + 1] - start[i])
    share = np.empty((most, R, S))
    out, out_cell = np.empty((13, 1024)), np.empty(1024, dtype=np.int32)
    lead, after = np.empty((14, most * R * S)), np.empty(most * R * S, dtype=np.int64)
    head = np.empty(n_cells, dtype=np.int64)
    sums = np.empty((15, most * R * S))
    count = 0
    for i in range(P):
        first[i] = count
        total = 0.0
        for p in range(start[i], start[i + 1]):
            for r in range(R):
                g = geometry[p] * lens[0, lens_row[r], p] * factor[r]
                for s in range(S):
                    w = g * src[0, s, p]
                    v = 0.0
                    if w > 0.0:
                        x, y = lens[1, lens_row[r], p] - src[1, s, p], lens[2, lens_row[r], p] - src[2, s, p]
                        v = w * math.sqrt(
                            x * x + y * y + lens[3, lens_row[r], p] + src[3, s, p] + lens[5, lens_row[r], p]
                            + src[5, s, p]
                        )  # fmt: skip
                    share[p - start[i], r, s] = v
                    total += v
        if not total > 0.0:
            continue
        head[:] = -1
        n = 0
        above = math.inf
        for tier in range(3):
            below = max(_LOOSE[tier], cut) * total
            for p in range(start[i], start[i + 1]):
                for r in range(R):
                    k = lens_row[r]
                    for s in range(S):
                        v = share[p - start[i], r, s]
                        if not (below < v <= above):
                            continue
                        w = geometry[p] * lens[0, k, p] * factor[r] * src[0, s, p]
                        lx, ly, sx, sy = lens[1, k, p], lens[2, k, p], src[1, s, p], src[2, s, p]
                        l_ll, l_lb, l_bb = lens[3, k, p], lens[4, k, p], lens[5, k, p]
                        s_ll, s_lb, s_bb = src[3, s, p], src[4, s, p], src[5, s, p]
                        c_ll, c_lb, c_bb = l_ll + s_ll, l_lb + s_lb, l_bb + s_bb
                        loose = min(max((full * total / v) ** 0.25, 1.0), _LOOSEST)
                        j = head[cell[p]]
                        while j >= 0:
                            if abs(D[p] - lead[10, j]) < D_tol:
                                z, q = _apart(
                                    lx - sx - lead[0, j], ly - sy - lead[1, j], c_ll - lead[2, j], c_lb - lead[3, j],
                                    c_bb - lead[4, j], lead[2, j], lead[3, j], lead[4, j],
                                )  # fmt: skip
                                if z < (mean_tol * loose) ** 2 and q < (shape_tol * loose) ** 2:
                                    if not apart:
                                        break
                                    z, q = _apart(
                                        sx - lead[5, j], sy - lead[6, j], s_ll - lead[7, j], s_lb - lead[8, j],
                                        s_bb - lead[9, j], lead[7, j], lead[8, j], lead[9, j],
                                    )  # fmt: skip
                                    if z < (src_tol * loose) ** 2 and q < (src_tol * loose) ** 2:
                                        break
                            j = after[j]
                        if j < 0:
                            j = n
                            n += 1
                            lead[0, j], lead[1, j] = lx - sx, ly - sy
                            lead[2, j], lead[3, j], lead[4, j] = c_ll, c_lb, c_bb
                            lead[5, j], lead[6, j], lead[7, j], lead[8, j], lead[9, j] = sx, sy, s_ll, s_lb, s_bb
                            lead[10, j] = D[p]
                            lead[11, j], lead[12, j] = (lx, ly) if apart else (lx - sx, ly - sy)
                            after[j] = head[cell[p]]
                            head[cell[p]] = j
                            sums[:, j] = 0.0
                        # offsets from the leader: no digits are lost to large means
                        mx, my = lx - lead[11, j], ly - lead[12, j]
                        if not apart:
                            mx, my, l_ll, l_lb, l_bb = mx - sx, my - sy, c_ll, c_lb, c_bb
                        ax, ay, d = sx - lead[5, j], sy - lead[6, j], D[p] - lead[10, j]
                        sums[0, j] += w
                        sums[1, j] += w * mx
                        sums[2, j] += w * my
                        sums[3, j] += w * (l_ll + mx * mx)
                        sums[4, j] += w * (l_lb + mx * my)
                        sums[5, j] += w * (l_bb + my * my)
                        sums[6, j] += w * ax
                        sums[7, j] += w * ay
                        sums[8, j] += w * (s_ll + ax * ax)
                        sums[9, j] += w * (s_lb + ax * ay)
                        sums[10, j] += w * (s_bb + ay * ay)
                        sums[11, j] += w * d
                        sums[12, j] += w * d * d
            above = below
        if count + n > out.shape[1]:
            size = 2 * (count + n)
            more, more_cell = np.empty((13, size)), np.empty(size, dtype=np.int32)
            more[:, :count], more_cell[:count] = out[:, :count], out_cell[:count]
            out, out_cell = more, more_cell
        for c in range(n_cells):
            j = head[c]
            while j >= 0:
                w = sums[0, j]
                mx, my, ax, ay, d = sums[1, j] / w, sums[2, j] / w, sums[6, j] / w, sums[7, j] / w, sums[11, j] / w
                out[0, count], out[1, count], out[2, count] = w, lead[11, j] + mx, lead[12, j] + my
                out[3, count] = sums[3, j] / w - mx * mx
                out[4, count] = sums[4, j] / w - mx * my
                out[5, count] = sums[5, j] / w - my * my
                out[6:11, count] = 0.0
                if apart:
                    out[6, count], out[7, count] = lead[5, j] + ax, lead[6, j] + ay
                    out[8, count] = sums[8, j] / w - ax * ax
                    out[9, count] = sums[9, j] / w - ax * ay
                    out[10, count] = sums[10, j] / w - ay * ay
                out[11, count] = lead[10, j] + d
                out[12, count] = max(sums[12, j] / w - d * d, 0.0)
                out_cell[count] = c
                count += 1
                j = after[j]
    first[P] = count
    return first, out_cell[:count].copy(), out[:, :count].copy()


@kernel
def relative(parts, first, n_rows, rows, motion, distance, out):
    """Fill out (6, G) with weight, mean and covariance of the relative motion, once something is known of the source.

    parts (13, G), first (bases * n_rows + 1,) of `gather`; rows (bases, 2): first and last row wanted of each base.
    motion (5,): the source's proper motion along l and b, and the covariance of its error, ll, lb, bb; distance (3,):
    value, lower and upper error [kpc]; empty where not known. What adds little to a row gets weight 0.
    """
    for b in range(rows.shape[0]):
        for i in range(rows[b, 0], rows[b, 1]):
            total = 0.0
            g0, g1 = first[b * n_rows + i], first[b * n_rows + i + 1]
            for g in range(g0, g1):
                w = parts[0, g]
                if distance.size > 0:
                    # a Gaussian stands for sources as spread out as this
                    lo = math.sqrt(distance[1] * distance[1] + parts[12, g])
                    hi = math.sqrt(distance[2] * distance[2] + parts[12, g])
                    z = (parts[11, g] - distance[0]) / (hi if parts[11, g] > distance[0] else lo)
                    w *= math.exp(-0.5 * z * z) / (_ROOT * (lo + hi))
                s_l, s_b, s_ll, s_lb, s_bb = parts[6, g], parts[7, g], parts[8, g], parts[9, g], parts[10, g]
                if motion.size > 0 and w > 0.0:
                    c_ll, c_lb, c_bb = s_ll + motion[2], s_lb + motion[3], s_bb + motion[4]
                    det = c_ll * c_bb - c_lb * c_lb
                    i_ll, i_lb, i_bb = c_bb / det, -c_lb / det, c_ll / det
                    dx, dy = motion[0] - s_l, motion[1] - s_b
                    q = i_ll * dx * dx + 2.0 * i_lb * dx * dy + i_bb * dy * dy
                    w *= math.exp(-0.5 * q) / (_TWO_PI * math.sqrt(det))
                    # gain C (C + E)^-1
                    k_ll, k_lb = s_ll * i_ll + s_lb * i_lb, s_ll * i_lb + s_lb * i_bb
                    k_bl, k_bb = s_lb * i_ll + s_bb * i_lb, s_lb * i_lb + s_bb * i_bb
                    s_l, s_b = s_l + k_ll * dx + k_lb * dy, s_b + k_bl * dx + k_bb * dy
                    s_ll = k_ll * motion[2] + k_lb * motion[3]
                    s_lb = 0.5 * (k_ll * motion[3] + k_lb * motion[4] + k_bl * motion[2] + k_bb * motion[3])
                    s_bb = k_bl * motion[3] + k_bb * motion[4]
                total += w
                out[0, g], out[1, g], out[2, g] = w, parts[1, g] - s_l, parts[2, g] - s_b
                out[3, g], out[4, g], out[5, g] = parts[3, g] + s_ll, parts[4, g] + s_lb, parts[5, g] + s_bb
            kept = 0.0
            for g in range(g0, g1):
                if out[0, g] < _LITTLE * total:
                    out[0, g] = 0.0
                kept += out[0, g]
            for g in range(g0, g1):
                # those left out are made up for by the others
                out[0, g] *= total / kept if kept > 0.0 else 0.0


@kernel
def finish(first, gauss, peak, out):
    """Fill out (6, G), single precision, of weight, mean and covariance: mean, half the inverse covariance (ll, 2 lb,
    bb), log of its own peak over the highest of its base and row; peak (bases * P,): the log of that.
    """
    for k in range(peak.size):
        peak[k] = -1e30
        for g in range(first[k], first[k + 1]):
            if gauss[0, g] > 0.0:
                det = max(gauss[3, g] * gauss[5, g] - gauss[4, g] * gauss[4, g], 1e-60)
                peak[k] = max(peak[k], math.log(gauss[0, g] / (_TWO_PI * math.sqrt(det))))
        for g in range(first[k], first[k + 1]):
            w, c_ll, c_lb, c_bb = gauss[0, g], gauss[3, g], gauss[4, g], gauss[5, g]
            det = max(c_ll * c_bb - c_lb * c_lb, 1e-60)
            out[0, g] = gauss[1, g]
            out[1, g] = gauss[2, g]
            out[2, g] = 0.5 * c_bb / det
            out[3, g] = -c_lb / det
            out[4, g] = 0.5 * c_ll / det
            out[5, g] = math.log(w / (_TWO_PI * math.sqrt(det))) - peak[k] if w > 0.0 else -1000.0


@kernel
def speeds(
    first, n_rows, base, window, cell, gauss, log_mu, mu, h, table, ends, orders, x, x_w, accuracy, per_kappa, out
):
    """Fill out (P, C, K) with one base's density summed over directions, per ln mu, times mu.

    From motion window[i, 0] on, up to window[i, 1], on each row. gauss (6, G): weight, mean, covariance; Gaussians of a
    cell follow one another. mu (P, K): motions of each row, even in the logarithm with step h from exp(log_mu) (P,);
    the rest as in `rings`.
    """
    K, m = mu.shape[1], table.shape[0]
    per_log = m / h
    W = np.zeros((K * m, table.shape[1] + 1))
    for i in range(n_rows):
        k0, k1 = window[i, 0], window[i, 1]
        g, stop = first[base * n_rows + i], first[base * n_rows + i + 1]
        if k1 <= k0:
            continue
        while g < stop:
            c = cell[g]
            low, high = W.shape[0], 0
            while g < stop and cell[g] == c:
                if gauss[0, g] > 0.0:
                    a, b = lay(
                        gauss[0, g], gauss[1, g], gauss[2, g], gauss[3, g], gauss[4, g], gauss[5, g], accuracy, orders,
                        x, x_w, per_kappa, per_log, log_mu[i], W,
                    )  # fmt: skip
                    low, high = min(low, a), max(high, b)
                g += 1
            apply_table(W, low, high, table, ends, out[i, c], k0, k1)
            for k in range(k0, k1):
                # Lagrange weights may undershoot in the far wings
                out[i, c, k] = max(out[i, c, k], 0.0) * mu[i, k]
