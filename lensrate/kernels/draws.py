"""Events drawn from the tables and the envelope of one sightline, given random numbers.

A few hundred proposals are worked on at a time, in passes. Passes that look up have branches and indices; what they
find goes into rows of one scratch array. Passes that calculate run over the whole length of a row, without branches, so
that the compiler does several proposals at once: the scratch is one flat array with rows of fixed length, which shows
it that no two rows overlap.

Units and tables as in sampling.
"""

import math

import numpy as np

from ._jit import kernel

UNIFORMS = 9  # of one proposal, beside normal numbers and an exponential one
NORMALS = 4  # the last two for the source's own motion
FLOATS = 10  # of an event: M, D_L, D_S, mu_l, mu_b, t_E, theta_E, pi_rel, pi_E, weight
WORDS = 4  # class, element, lens row, source row

_N = 256  # proposals of a pass
_LINE = _N + 8  # numbers of a scratch row: a power of two would put all rows into the same few cache lines
# rows of the scratch array
_Y, _STEP, _F0, _F1, _X0, _DX, _TOP, _WHOLE = (_LINE * k for k in range(8))
_TAU, _D_S, _ETA, _D_L, _FRONT, _HEIGHT = (_LINE * k for k in range(8, 14))
_L0, _L1, _L2, _L3, _L4, _S0, _S1, _S2, _S3, _S4 = (_LINE * k for k in range(14, 24))
_Z0, _Z1, _Z2, _Z3, _E, _U4, _U5 = (_LINE * k for k in range(24, 31))
_MU_L, _MU_B, _PI, _CHANCE, _OWN_L, _OWN_B = (_LINE * k for k in range(31, 37))
_M0, _LEFT, _RIGHT, _V, _M, _T_E, _THETA, _PI_E = (_LINE * k for k in range(37, 45))
_ROWS = 45


@kernel(inline="always")
def _choose(u, alias, first, n):
    """Index in [first, first + n) that a uniform number picks from an alias table (share, other)."""
    x = u * n
    i = min(int(x), n - 1)
    # arithmetic instead of a branch that nothing foretells
    other = int(alias[first + i, 1])
    return first + other + (i - other) * int(x - i < alias[first + i, 0])


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
def _place(w, k):
    """Place in [0, 1] of a cell below which the share Y / STEP of a density linear from F0 to F1 lies."""
    step, f0, f1 = w[_STEP + k], w[_F0 + k], w[_F1 + k]
    y = min(max(w[_Y + k] / (step if step > 0.0 else 1.0), 0.0), 1.0)
    below = f0 + math.sqrt(max(f0 * f0 + y * (f1 * f1 - f0 * f0), 0.0))
    x = y * (f0 + f1) / (below if below > 0.0 else 1.0)
    x = x if below > 0.0 else y
    return x if step > 0.0 else 0.0


@kernel(inline="always")
def _cell(w, k, row, D, i, y):
    """Put down what `_place` needs of cell i."""
    w[_Y + k] = y - row[i, 1]
    w[_STEP + k] = row[i + 1, 1] - row[i, 1]
    w[_F0 + k], w[_F1 + k] = row[i, 0], row[i + 1, 0]
    w[_X0 + k], w[_DX + k] = D[i], D[i + 1] - D[i]


@kernel
def _sources(w, at, many, block, u, pair_alias, pair_words, height, alias, pieces, D, src, guide):
    """Choose pair, piece of the envelope and source distance."""
    for k in range(many):
        pair = _choose(u[0, block + k], pair_alias, 0, pair_alias.shape[0])
        r = pair_words[pair, 2]
        piece = _choose(u[1, block + k], alias[r], 0, alias.shape[1])
        at[0, k], at[1, k] = pair, piece
        w[_HEIGHT + k] = height[r, piece]
    for k in range(many):
        piece = at[1, k]
        c0, c1 = pieces[piece, 1], pieces[piece, 2]
        row = src[pieces[piece, 0]]
        y = row[c0, 1] + u[2, block + k] * (row[c1, 1] - row[c0, 1])
        i = _seek(row, guide[pieces[piece, 0]], c0, c1, y)
        at[3, k] = i
        _cell(w, k, row, D, i, y)
    for k in range(_N):
        tau = _place(w, k)
        w[_TAU + k] = tau
        w[_D_S + k] = w[_X0 + k] + tau * w[_DX + k]


@kernel
def _lenses(w, at, many, block, u, pair_words, pieces, D, lens, guide):
    """Choose the lens distance."""
    for k in range(many):
        r, piece, D_S = pair_words[at[0, k], 2], at[1, k], w[_D_S + k]
        b0, b1 = pieces[piece, 3], pieces[piece, 4]
        row = lens[r]
        bottom, top = row[b0, 1], row[b1, 1]
        w[_WHOLE + k] = top - bottom
        if D[b1] > D_S:
            # the part of this band that lies in front of the source
            p = b1 - 1
            while p > b0 and D[p] > D_S:
                p -= 1
            eta = min((D_S - D[p]) / (D[p + 1] - D[p]), 1.0)
            f0, f1 = row[p, 0], row[p + 1, 0]
            top = row[p, 1] + (row[p + 1, 1] - row[p, 1]) * eta * (2.0 * f0 + eta * (f1 - f0)) / max(f0 + f1, 1e-300)
        top = max(top, bottom)
        w[_TOP + k] = top - bottom
        y = bottom + u[3, block + k] * (top - bottom)
        p = _seek(row, guide[r], b0, b1, y)
        at[2, k] = p
        _cell(w, k, row, D, p, y)
    for k in range(_N):
        eta = _place(w, k)
        w[_ETA + k] = eta
        w[_D_L + k] = min(w[_X0 + k] + eta * w[_DX + k], w[_D_S + k] * (1.0 - 1e-12))
        w[_FRONT + k] = w[_TOP + k] / w[_WHOLE + k]


@kernel
def _look_up(w, at, many, block, u, z, e, both, pair_words, pieces, lens, src):
    """D mu of lens and source, mean and covariance, and the random numbers of the motion."""
    for k in range(many):
        p, i = at[2, k], at[3, k]
        row, source = lens[pair_words[at[0, k], 2]], src[pieces[at[1, k], 0]]
        eta, tau = w[_ETA + k], w[_TAU + k]
        w[_HEIGHT + k] *= row[p, 2]
        w[_L0 + k] = row[p, 3] + eta * (row[p + 1, 3] - row[p, 3])
        w[_L1 + k] = row[p, 4] + eta * (row[p + 1, 4] - row[p, 4])
        w[_L2 + k] = row[p, 5] + eta * (row[p + 1, 5] - row[p, 5])
        w[_L3 + k] = row[p, 6] + eta * (row[p + 1, 6] - row[p, 6])
        w[_L4 + k] = row[p, 7] + eta * (row[p + 1, 7] - row[p, 7])
        w[_S0 + k] = source[i, 3] + tau * (source[i + 1, 3] - source[i, 3])
        w[_S1 + k] = source[i, 4] + tau * (source[i + 1, 4] - source[i, 4])
        w[_S2 + k] = source[i, 5] + tau * (source[i + 1, 5] - source[i, 5])
        w[_S3 + k] = source[i, 6] + tau * (source[i + 1, 6] - source[i, 6])
        w[_S4 + k] = source[i, 7] + tau * (source[i + 1, 7] - source[i, 7])
    for k in range(many):
        w[_Z0 + k], w[_Z1 + k], w[_E + k] = z[0, block + k], z[1, block + k], e[block + k]
        w[_U4 + k], w[_U5 + k] = u[4, block + k], u[5, block + k]
    if both:
        for k in range(many):
            w[_Z2 + k], w[_Z3 + k] = z[2, block + k], z[3, block + k]


@kernel
def _motions(w):
    """Relative motion, and the ratio of rate to envelope.

    Proposed is (mu^2 + t^2) N(mu) / 2 t, which is nowhere below mu N(mu) and integrates to t. By (mu^2 + t^2) N =
    t^2 N + (sum of m_k^2 + x_k^2) N it is a mixture: one coordinate k carries m_k^2 N or x_k^2 N and then the sign that
    (m_k + x)^2 and (m_k - x)^2 bid for, or none does.
    """
    for k in range(_N):
        D_L, D_S = w[_D_L + k], w[_D_S + k]
        to_L, to_S = 1.0 / D_L, 1.0 / D_S
        pi_rel = (D_S - D_L) * to_L * to_S
        ml, mb = to_L * w[_L0 + k] - to_S * w[_S0 + k], to_L * w[_L1 + k] - to_S * w[_S1 + k]
        to_L *= to_L
        to_S *= to_S
        cll = to_L * w[_L2 + k] + to_S * w[_S2 + k]
        clb = to_L * w[_L3 + k] + to_S * w[_S3 + k]
        cbb = to_L * w[_L4 + k] + to_S * w[_S4 + k]
        t2 = ml * ml + mb * mb + cll + cbb
        pick = 2.0 * t2 * w[_U4 + k] - t2
        along_l = pick < ml * ml + cll
        pick = pick if along_l else pick - (ml * ml + cll)
        mean = ml if along_l else mb
        mean = mean if pick >= 0.0 else 0.0
        own = cll if along_l else cbb
        rest = cbb if along_l else cll
        z0, e = w[_Z0 + k], w[_E + k]
        bent = math.copysign(math.sqrt(z0 * z0 + 2.0 * e), z0)
        x = math.sqrt(own) * (z0 if pick < mean * mean or pick < 0.0 else bent)
        up, down = (mean + x) * (mean + x), (mean - x) * (mean - x)
        x = x if w[_U5 + k] * (up + down) < up else -x
        tilt = clb / (own if own > 0.0 else 1.0)
        tilt = tilt if own > 0.0 else 0.0
        y = tilt * x + math.sqrt(max(rest - tilt * clb, 0.0)) * w[_Z1 + k]
        mu_l, mu_b = ml + (x if along_l else y), mb + (y if along_l else x)
        mu2 = mu_l * mu_l + mu_b * mu_b
        w[_MU_L + k], w[_MU_B + k], w[_PI + k] = mu_l, mu_b, pi_rel
        scale = math.sqrt(pi_rel * D_L * mu2)
        w[_CHANCE + k] = w[_FRONT + k] * scale * 2.0 * t2 / ((mu2 + t2) * w[_HEIGHT + k])


@kernel
def _own_motions(w):
    """Proper motion of the source given the relative one: a Gaussian.

    The source takes its share of the deviation x with the opposite sign: mean -S T^-1 x, covariance S - S T^-1 S.
    """
    for k in range(_N):
        to_L, to_S = 1.0 / w[_D_L + k], 1.0 / w[_D_S + k]
        sl, sb = to_S * w[_S0 + k], to_S * w[_S1 + k]
        xl = w[_MU_L + k] - (to_L * w[_L0 + k] - sl)
        xb = w[_MU_B + k] - (to_L * w[_L1 + k] - sb)
        to_L *= to_L
        to_S *= to_S
        s0, s1, s2 = to_S * w[_S2 + k], to_S * w[_S3 + k], to_S * w[_S4 + k]
        t0, t1, t2 = s0 + to_L * w[_L2 + k], s1 + to_L * w[_L3 + k], s2 + to_L * w[_L4 + k]
        det = t0 * t2 - t1 * t1
        inverse = 1.0 / (det if det > 0.0 else 1.0)
        inverse = inverse if det > 0.0 else 0.0
        k00, k01 = (s0 * t2 - s1 * t1) * inverse, (s1 * t0 - s0 * t1) * inverse
        k10, k11 = (s1 * t2 - s2 * t1) * inverse, (s2 * t0 - s1 * t1) * inverse
        v0 = max(s0 - k00 * s0 - k01 * s1, 0.0)
        v1 = s1 - k00 * s1 - k01 * s2
        v2 = s2 - k10 * s1 - k11 * s2
        first = math.sqrt(v0)
        tilt = v1 / (first if first > 0.0 else 1.0)
        tilt = tilt if first > 0.0 else 0.0
        z2, z3 = w[_Z2 + k], w[_Z3 + k]
        w[_OWN_L + k] = sl - k00 * xl - k01 * xb + first * z2
        w[_OWN_B + k] = sb - k10 * xl - k11 * xb + tilt * z2 + math.sqrt(max(v2 - tilt * tilt, 0.0)) * z3


@kernel
def _masses(w, at, many, block, u, pair_words, first, nodes, kappa, days_per_year):
    """Mass: a node, spread to half the way to its neighbours so that its mean stays. What follows from it."""
    for k in range(many):
        q = pair_words[at[0, k], 3]
        node = _choose(u[7, block + k], nodes, first[q], first[q + 1] - first[q])
        w[_M0 + k], w[_LEFT + k], w[_RIGHT + k], w[_V + k] = (
            nodes[node, 2],
            nodes[node, 3],
            nodes[node, 4],
            u[8, block + k],
        )
    for k in range(_N):
        a, b = w[_LEFT + k], w[_RIGHT + k]
        v = w[_V + k] * (a + b)
        up = 0.5 * b * v / (a if a > 0.0 else 1.0)
        down = -0.5 * a * (v - a) / (b if b > 0.0 else 1.0)
        M = w[_M0 + k] + (up if v < a else down)
        pi_rel, mu_l, mu_b = w[_PI + k], w[_MU_L + k], w[_MU_B + k]
        theta = math.sqrt(kappa * M * pi_rel)
        w[_M + k], w[_THETA + k], w[_PI_E + k] = M, theta, pi_rel / theta
        w[_T_E + k] = days_per_year * theta / math.sqrt(mu_l * mu_l + mu_b * mu_b)


@kernel
def draw(
    u, z, e, pair_alias, pair_words, pair_tilt, mass_first, mass_nodes, D, lens, guide, D_src, src, guide_S, height,
    alias, pieces, kappa, days_per_year, unit, accept, start, floats, words, motion,
):  # fmt: skip
    """Turn random numbers into events from column `start` on; return the column after the last one.

    u (UNIFORMS, n) uniform, z (NORMALS, n) normal, e (n,) exponential; pair_*: alias table (pairs, 2) of (class, lens
    row), with words class, element, lens row, mass table (pairs, 4), and tilt; mass_*: where each mass table begins,
    and nodes of share, other, mass and the spacing to either side (all, 5); D, lens, D_src, src: nodes and tables;
    guide, guide_S: from guides; height, alias, pieces: from envelope; unit: the envelope's whole rate per proposal.
    With `accept` an event is kept with probability p and weight unit / tilt, else all are, with weight unit p / tilt.
    Fills floats (FLOATS, m), words (WORDS, m) and motion (2, m; or of no columns: left alone) with the source's own
    proper motion.
    """
    out = start
    both = motion.shape[1] > 0
    at = np.empty((4, _N), dtype=np.int64)  # pair, piece, cell of the lens, cell of the source
    w = np.ones(_LINE * _ROWS)
    for block in range(0, u.shape[1], _N):
        many = min(_N, u.shape[1] - block)
        _sources(w, at, many, block, u, pair_alias, pair_words, height, alias, pieces, D_src, src, guide_S)
        _lenses(w, at, many, block, u, pair_words, pieces, D, lens, guide)
        _look_up(w, at, many, block, u, z, e, both, pair_words, pieces, lens, src)
        _motions(w)
        if both:
            _own_motions(w)
        _masses(w, at, many, block, u, pair_words, mass_first, mass_nodes, kappa, days_per_year)
        for k in range(many):
            if accept and not u[6, block + k] < w[_CHANCE + k]:
                continue
            pair = at[0, k]
            floats[0, out], floats[1, out], floats[2, out] = w[_M + k], w[_D_L + k], w[_D_S + k]
            floats[3, out], floats[4, out] = w[_MU_L + k], w[_MU_B + k]
            floats[5, out], floats[6, out] = w[_T_E + k], w[_THETA + k]
            floats[7, out], floats[8, out] = w[_PI + k], w[_PI_E + k]
            floats[9, out] = unit * (1.0 if accept else w[_CHANCE + k]) / pair_tilt[pair]
            words[0, out], words[1, out] = pair_words[pair, 0], pair_words[pair, 1]
            words[2, out], words[3, out] = pair_words[pair, 2], pieces[at[1, k], 0]
            if both:
                motion[0, out], motion[1, out] = w[_OWN_L + k], w[_OWN_B + k]
            out += 1
    return out
