"""Sums over tables of ln t_E that are shifted, stretched and re-weighted, with their slopes: one likelihood's work."""

import math

from ._jit import kernel


@kernel
def shifted_sums(table, row, x, weight, first, step, pivot, shift, ln_stretch, mix, mix_slope, out):
    """Sum interpolated tables over nodes, and the sum's slopes in shift, ln stretch and the mixture.

    Parameters
    ----------
    table : ndarray, shape (R, n, 3)
        Rows of three variants each, on an even grid.
    row : ndarray of int, shape (m,)
        The row of each sum.
    x : ndarray, shape (m, q)
        Nodes.
    weight : ndarray, shape (w, q)
        Of the nodes; one line for all sums, or one each.
    first, step : float
        The grid.
    pivot, shift, ln_stretch : float
        A row f becomes f(pivot + (x - pivot - shift) / stretch) / stretch.
    mix, mix_slope : ndarray, shape (3,)
        Weights of the variants, and their slopes in the third parameter.
    out : ndarray, shape (4, m)
        Filled: the sum; its slopes in shift, ln stretch and the third parameter.
    """
    stretch = math.exp(ln_stretch)
    last = table.shape[1] - 1.001
    for e in range(row.size):
        rows = table[row[e]]
        nodes = x[e]
        own = weight[e] if weight.shape[0] > 1 else weight[0]
        total, by_shift, by_stretch, by_mix = 0.0, 0.0, 0.0, 0.0
        for k in range(nodes.size):
            if own[k] == 0.0:
                continue
            away = (nodes[k] - pivot - shift) / stretch
            place = (pivot + away - first) / step
            inside = place > 0.0 and place < last
            place = min(max(place, 0.0), last)
            i = int(place)
            s = place - i
            low = mix[0] * rows[i, 0] + mix[1] * rows[i, 1] + mix[2] * rows[i, 2]
            high = mix[0] * rows[i + 1, 0] + mix[1] * rows[i + 1, 1] + mix[2] * rows[i + 1, 2]
            value = (1.0 - s) * low + s * high
            if value <= 0.0:
                continue
            w = own[k] / stretch
            total += w * value
            by_stretch -= w * value
            if inside:
                slope = w * (high - low) / step
                by_shift -= slope / stretch
                by_stretch -= slope * away
            low = mix_slope[0] * rows[i, 0] + mix_slope[1] * rows[i, 1] + mix_slope[2] * rows[i, 2]
            high = mix_slope[0] * rows[i + 1, 0] + mix_slope[1] * rows[i + 1, 1] + mix_slope[2] * rows[i + 1, 2]
            by_mix += w * ((1.0 - s) * low + s * high)
        out[0, e], out[1, e], out[2, e], out[3, e] = total, by_shift, by_stretch, by_mix
