"""Density and motion of stellar components at given distances along one sightline.

A profile is an array (6, rows, n): density [Msun/kpc^3], mu_l, mu_b [mas/yr], C_ll, C_lb, C_bb [(mas/yr)^2].
Rows are Gaussians of the velocity distribution; several rows may belong to one element. The rate kernels
know nothing else of the Galaxy.
"""

import numpy as np

from ._jit import kernel
from .density import density_at
from .kinematics import project, velocity_at


@kernel
def stellar_profile(D, origin, axes, v_sun, k, d_kind, d_par, v_kind, v_par, rot, out):
    """Fill out (6, n_components, n).

    D: distances [kpc], (n,); origin: the Sun's place (3,); axes: unit vectors of the sightline, of l and of b, (3, 3);
    d_*, v_*: codes (m,) and parameters (m, p) of density and kinematics.
    """
    vel = np.empty(9)
    mu = np.empty(5)
    sky = axes[1:]
    o0, o1, o2 = origin[0], origin[1], origin[2]
    n0, n1, n2 = axes[0, 0], axes[0, 1], axes[0, 2]
    for c in range(d_kind.size):
        dk, vk = d_kind[c], v_kind[c]
        dp, vp = d_par[c], v_par[c]
        for i in range(D.size):
            d = D[i]
            x = o0 + d * n0
            y = o1 + d * n1
            z = o2 + d * n2
            out[0, c, i] = density_at(dk, dp, x, y, z)
            velocity_at(vk, vp, rot, x, y, z, vel)
            project(d, sky, v_sun, k, vel, mu)
            for j in range(5):
                out[1 + j, c, i] = mu[j]


@kernel
def merge_rows(src, group, out):
    """Moment-match rows of a profile into groups: out (6, n_groups, n) keeps weight, mean and covariance."""
    n = src.shape[2]
    n_groups = out.shape[1]
    for i in range(n):
        for g in range(n_groups):
            w = ml = mb = 0.0
            for s in range(src.shape[1]):
                if group[s] == g:
                    w += src[0, s, i]
                    ml += src[0, s, i] * src[1, s, i]
                    mb += src[0, s, i] * src[2, s, i]
            # a weight so small that its inverse overflows counts for nothing
            w = w if w > 1e-290 else 0.0
            out[0, g, i] = w
            if w > 0.0:
                ml /= w
                mb /= w
            c0 = c1 = c2 = 0.0
            for s in range(src.shape[1]):
                if group[s] == g:
                    dl = src[1, s, i] - ml
                    db = src[2, s, i] - mb
                    c0 += src[0, s, i] * (src[3, s, i] + dl * dl)
                    c1 += src[0, s, i] * (src[4, s, i] + dl * db)
                    c2 += src[0, s, i] * (src[5, s, i] + db * db)
            f = 1.0 / w if w > 0.0 else 0.0
            out[1, g, i] = ml
            out[2, g, i] = mb
            out[3, g, i] = c0 * f
            out[4, g, i] = c1 * f
            out[5, g, i] = c2 * f


@kernel
def places(step, n, D, cell, part, here, beyond):
    """Fill the places of distances D in a table at step, 2 step, ... n step, (N,) each.

    cell and part: the point before, and how far toward the next one; here, beyond: distances of both over that of D.
    """
    for i in range(D.size):
        x = D[i] / step - 1.0
        near = x < 0.0
        cell[i] = 0 if near else min(int(x), n - 1)
        part[i] = 0.0 if near else x - cell[i]
        # proper motions of a given velocity go with the inverse of the distance: near the observer they bend,
        # velocities do not
        here[i] = (cell[i] + 1) * step / D[i]
        beyond[i] = (cell[i] + 2) * step / D[i]


@kernel(inline="always")
def density_between(rho, j, t):
    """Density at a place of a table's row, (n,); nothing beyond its end."""
    return (1.0 - t) * rho[j] + t * rho[j + 1] if j < rho.size - 1 else 0.0


@kernel(inline="always")
def motion_between(table, j, t, here, beyond, out):
    """Fill out (5,) with the motion at a place of a table (6, n) where its density is not zero."""
    # where one end is empty its motion means nothing
    u = 0.0 if table[0, j + 1] <= 0.0 else (1.0 if table[0, j] <= 0.0 else t)
    a, b = (1.0 - u) * here, u * beyond
    for q in range(1, 3):
        out[q - 1] = a * table[q, j] + b * table[q, j + 1]
    a, b = a * here, b * beyond
    for q in range(3, 6):
        out[q - 1] = a * table[q, j] + b * table[q, j + 1]


@kernel
def interpolate_rows(step, table, D, out):
    """Fill out (6, rows, N) at distances D from a table (6, rows, n) at step, 2 step, ...; nothing beyond its end.

    Density and velocity are linear in distance; before the first point the first one's hold.
    """
    cell = np.empty(D.size, dtype=np.int64)
    part, here, beyond = np.empty(D.size), np.empty(D.size), np.empty(D.size)
    places(step, table.shape[2], D, cell, part, here, beyond)
    motion = np.empty(5)
    for r in range(table.shape[1]):
        for i in range(D.size):
            out[0, r, i] = density_between(table[0, r], cell[i], part[i])
            if out[0, r, i] <= 0.0:
                if cell[i] >= table.shape[2] - 1:
                    for q in range(1, 6):
                        out[q, r, i] = 0.0
                continue
            motion_between(table[:, r], cell[i], part[i], here[i], beyond[i], motion)
            for q in range(5):
                out[q + 1, r, i] = motion[q]
