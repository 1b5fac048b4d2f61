"""Rates by lens mass at points, and class rates given planned measurements whose outcome is known."""

import math

import numpy as np

from ._jit import kernel
from .odds import at_row, sizes, weighed

_ROOT = math.sqrt(2.0 * math.pi)
_FAR = 60.0  # squared distances beyond count as nothing


@kernel
def by_mass(
    h, summed, motion, ln_pi0, step, ln_kappa, on_theta, ln_X, ln_t, W, bases, number, ln_M, width, n_sub, terms,
    vector, toward, magnitude, spread, threshold, rate, first,
):  # fmt: skip
    """Fill rate (Q, J), and rate times ln M: the integrand of `odds.sum_masses`, whose arguments these are."""
    P = h.shape[1]
    light = magnitude.size > 0
    sharp = 1.0 / (math.sqrt(2.0) * spread) if light else 0.0
    for q in range(ln_X.size):
        if W[q] == 0.0:
            continue
        for j in range(ln_M.size):
            parts = n_sub if width[j] > 0.0 else 1
            for k in range(parts):
                lm = ln_M[j] + ((k + 0.5) / parts - 0.5) * width[j]
                ln_pi, ln_theta, ln_par = sizes(on_theta, ln_X[q], ln_kappa, lm)
                x = (ln_pi - ln_pi0) / step
                i = int(math.floor(x))
                if i < 1 or i > P - 3:
                    continue
                like = weighed(q, ln_theta, ln_par, ln_theta - ln_t[q], terms, vector, toward)
                like *= W[q] * 2.0 * math.exp(0.5 * lm) / parts
                if like <= 0.0:
                    continue
                of_light = magnitude[j] if light else 0.0
                r = like * at_row(h, summed, motion[q], i, x - i, bases, number[j], of_light, sharp, threshold)
                if r > 0.0:
                    rate[q, j] += r
                    first[q, j] += r * lm


@kernel
def judged(weight, ln_t, pi, theta, sharp, y, out):
    """Add up, for each outcome, the latents that could have given it.

    weight (N, J): rates of one class at N points and J masses; ln_t, pi (N,) and theta (N, J) there; sharp (3, N, J):
    inverse errors of the planned measurement of each, 0 where there is none, of ln t_E the same for all masses;
    y (K, 3): outcomes, NaN for not measured. Fills out (K,): the class's rate times the density of the outcome.
    """
    N, J = weight.shape
    least, some = np.empty(N), np.zeros(N, dtype=np.bool_)
    for n in range(N):
        least[n] = math.inf
        for j in range(J):
            if weight[n, j] > 0.0:
                some[n] = True
                least[n] = min(least[n], sharp[1, n, j])
    for k in range(y.shape[0]):
        t, p, r = y[k, 0], y[k, 1], y[k, 2]
        no_t, no_p, no_r = math.isnan(t), math.isnan(p), math.isnan(r)
        total = 0.0
        for n in range(N):
            if not some[n] or (sharp[0, n, 0] > 0.0) == no_t:
                continue
            z_t, s_t = 0.0, 1.0
            if not no_t:
                s_t = sharp[0, n, 0] / _ROOT
                z_t = (t - ln_t[n]) * sharp[0, n, 0]
                z_t *= z_t
                if z_t > _FAR:
                    continue
            off = 0.0
            if not no_p:
                off = p - pi[n]
                if least[n] * abs(off) > 1e-300 and (least[n] * off) ** 2 > _FAR:
                    continue
            part = 0.0
            for j in range(J):
                w = weight[n, j]
                if not w > 0.0 or (sharp[1, n, j] > 0.0) == no_p or (sharp[2, n, j] > 0.0) == no_r:
                    continue
                z = z_t
                if not no_p:
                    a = off * sharp[1, n, j]
                    z += a * a
                    w *= sharp[1, n, j] / _ROOT
                if not no_r:
                    a = (r - theta[n, j]) * sharp[2, n, j]
                    z += a * a
                    w *= sharp[2, n, j] / _ROOT
                if z < _FAR:
                    part += w * math.exp(-0.5 * z)
            total += s_t * part
        out[k] = total
