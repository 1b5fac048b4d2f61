"""Tables from which the events of one sightline are drawn: alias tables, bounds on motions, the envelope.

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
def envelope(lens, speed, square, src, speed_S, square_S, cell, band, root, height, total, alias, pieces):
    """Height and alias table of the pieces of every lens row.

    lens, src: tables; speed, square (rows, n - 1) of either from motion_bounds; cell (J + 1,): source nodes between
    cells; band (J, K + 1): lens nodes between bands; root (J, K): largest sqrt(1 - D_L / D_S). Fills in single
    precision height (R, S J K) and alias (R, S J K, 2: share and other, side by side since they are read together);
    total (R,); pieces (S J K, 5): source row, its first and last node, first and last lens node. A piece's height times
    what is under it is its weight.
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
            alias[r, n, 0] = np.float32(full_share[n])
            alias[r, n, 1] = np.float32(full_other[n])


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
