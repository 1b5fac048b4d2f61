"""Optical depth and rate with the sources behind each lens gathered into a few Gaussians, for maps.

Conventions are those of rates.py. Behind a lens at D_L, sources are gathered by kind (row group) and by D_L / D_S,
since the relative motion varies with it evenly; each bin keeps weight, mean motion and covariance.
"""

import math

import numpy as np

from ._jit import kernel
from .maths import mean_abs


@kernel
def gather_sources(D_L, first, D_S, src, group, bins, cuts, kappa, depth, sky):
    """Gather the source nodes first[m]:first[m + 1] behind lens node m.

    D_L (M,), D_S (N,) [kpc]; src (6, S, N), whose weights carry the source quadrature; group (S,) of each row;
    bins even ones in D_L / D_S, cut further at the distances cuts (c,) [kpc]. Fills depth (M,), the sum of weight times
    pi_rel, and sky (M, groups * (bins + c), 6): sum of weight times sqrt(kappa pi_rel), mean mu_l, mu_b, covariance
    ll, lb, bb, matched for these weights.
    """
    n = bins + cuts.size
    sky[:] = 0.0
    depth[:] = 0.0
    for m in range(D_L.size):
        for p in range(first[m], first[m + 1]):
            x = D_L[m] / D_S[p]
            pi_rel = (1.0 - x) / D_L[m]
            if pi_rel <= 0.0:
                continue
            root = math.sqrt(kappa * pi_rel)
            # both terms rise with distance, so that every piece between two edges has a number of its own
            k = bins - 1 - min(int(x * bins), bins - 1)
            for cut in cuts:
                if D_S[p] > cut:
                    k += 1
            for s in range(src.shape[1]):
                w = src[0, s, p]
                if w <= 0.0:
                    continue
                depth[m] += w * pi_rel
                w *= root
                ml, mb = src[1, s, p], src[2, s, p]
                row = sky[m, group[s] * n + k]
                row[0] += w
                row[1] += w * ml
                row[2] += w * mb
                row[3] += w * (src[3, s, p] + ml * ml)
                row[4] += w * (src[4, s, p] + ml * mb)
                row[5] += w * (src[5, s, p] + mb * mb)
        for g in range(sky.shape[1]):
            row = sky[m, g]
            # a weight so small that its inverse overflows counts for nothing
            if row[0] < 1e-290:
                row[:] = 0.0
                continue
            for j in range(1, 6):
                row[j] /= row[0]
            row[3] -= row[1] * row[1]
            row[4] -= row[1] * row[2]
            row[5] -= row[2] * row[2]


@kernel
def gathered_moments(D_L, w_L, lens, element, depth, sky, four_g_c2, mas, cut, cos, sin, tau, gamma):
    """Optical depth and rate by element and lens node.

    D_L, w_L (M,) nodes and weights [kpc], lens (6, L, M), element (L,); depth and sky from `gather_sources`; bins
    below `cut` of their node's weight are dropped; cos, sin (n,) of directions over half a circle. Adds to tau and
    gamma (E, M).
    """
    n, G = cos.size, sky.shape[1]
    mean, var, weight = np.empty((G, n)), np.empty((G, n)), np.empty(G)
    for m in range(D_L.size):
        d = D_L[m]
        total = 0.0
        for g in range(G):
            total += sky[m, g, 0]
        if total <= 0.0:
            continue
        # bins that count, projected on every direction; their weights scaled so that no light is lost
        used, kept = 0, 0.0
        for g in range(G):
            row = sky[m, g]
            if row[0] <= cut * total:
                continue
            weight[used] = row[0]
            kept += row[0]
            for i in range(n):
                c, s = cos[i], sin[i]
                mean[used, i] = row[1] * c + row[2] * s
                var[used, i] = row[3] * c * c + 2.0 * row[4] * c * s + row[5] * s * s
            used += 1
        g_tau = w_L[m] * math.pi * four_g_c2 * d * d * depth[m]
        # the mean length is half a circle's mean |projection| times pi / 2
        g_rate = w_L[m] * 2.0 * d * d * mas * mas * (total / kept) * 0.5 * math.pi / n
        for r in range(element.size):
            rho = lens[0, r, m]
            if rho <= 0.0:
                continue
            e = element[r]
            tau[e, m] += g_tau * rho
            speed = 0.0
            for i in range(n):
                c, s = cos[i], sin[i]
                mu = lens[1, r, m] * c + lens[2, r, m] * s
                v = lens[3, r, m] * c * c + 2.0 * lens[4, r, m] * c * s + lens[5, r, m] * s * s
                for g in range(used):
                    sig = math.sqrt(max(v + var[g, i], 1e-30))
                    speed += weight[g] * sig * mean_abs((mu - mean[g, i]) / sig)
            gamma[e, m] += g_rate * rho * speed
