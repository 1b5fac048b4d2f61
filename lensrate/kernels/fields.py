"""Kick-resolved fields: deposit orbits on a grid, and read density and velocity of a point back from it.

Grid: cells even in asinh(R / a_R), in asinh(|z| / a_z) and in azimuth over half a turn from the bar's major axis.
Orbits are folded by the two exact symmetries only, half a turn about the axis and z -> -z. Velocities are inertial,
along R, along the disc's rotation (clockwise seen from +z) and along z. A cell of the first `n_four` radii holds four
Gaussians, of what moves about the cell's mean into each of four equal cones around the corners of a tetrahedron; the
cells beyond hold two, of what moves faster and what moves slower along the rotation. One Gaussian would reach beyond
the speeds that are bound. Below z = 0 stands the mirror image, which swaps the first two cones.
"""

import math

import numpy as np

from ._jit import kernel
from .kinematics import project
from .orbits import PX, PY, PZ, ROWS, TIME, WEIGHT, load, release, take_steps
from .potential import LANES, potential_at

__all__ = ["EMPTY", "PARTS", "Q", "deposit_orbits", "field_profile", "field_rows"]

#: numbers of a Gaussian: share of the cell; mean v_R, v_rot, v_z; dispersions R, rot, z; correlations R-rot, R-z, rot-z
Q = 10
#: Gaussians of a cell at most
PARTS = 4
#: stored ln density of a cell that no orbit visited, and what it is read as
EMPTY = -32768
_LN_NOTHING = -60.0
_CHECKS = 16  # notes between looks at the energy
_SQRT2 = math.sqrt(2.0)


@kernel
def _cell(value, scale, n_per_unit, n):
    """Return the cell of asinh(value / scale), n or more if beyond."""
    r = value / scale
    return int(math.log(r + math.sqrt(r * r + 1.0)) * n_per_unit) if r < 1e6 else n


@kernel
def _part(inner, x_r, x_t, x_z):
    """Return the part of a cell that a velocity belongs to, given from the mean in units of the dispersions.

    Corners of the tetrahedron: (R, rot, z) = (0, 1, +-sqrt 2), (+-sqrt 2, -1, 0); two parts are numbers 0 and 2.
    """
    if not inner:
        return 0 if x_t > 0.0 else 2
    if _SQRT2 * (abs(x_z) - abs(x_r)) + 2.0 * x_t > 0.0:
        return 0 if x_z > 0.0 else 1
    return 2 if x_r > 0.0 else 3


@kernel
def _add_moments(row, w, v_r, v_t, v_z):
    row[0] += w
    row[1] += w * v_r
    row[2] += w * v_t
    row[3] += w * v_z
    row[4] += w * v_r * v_r
    row[5] += w * v_t * v_t
    row[6] += w * v_z * v_z
    row[7] += w * v_r * v_t
    row[8] += w * v_r * v_z
    row[9] += w * v_t * v_z


@kernel
def deposit_orbits(
    kinds, pars, omega, ds, states, young, old, growth, stride, grid, n_four, frame, ring,
    moments, fourth, heights, ends,
):  # fmt: skip
    """Follow tracers from birth and add what they are at every age of a window to the grid.

    Parameters
    ----------
    kinds, pars, omega, ds
        As for `orbits.take_steps`.
    states : ndarray, shape (n, 6)
        At birth; changed to the states at age `old` (escapers: where they were dropped).
    young, old : float  [kpc/(km/s)]
        Ages that count, in weight as exp(growth * age).
    growth : float
        Inverse of the time.
    stride : int
        Steps between deposits.
    grid : ndarray, shape (7,)
        a_R, cells per unit of asinh, number of them; the same for |z|; cells in azimuth.
    n_four : int
        Radii whose cells are divided in four.
    frame : ndarray, shape (n_R, n_z, n_phi, 6)
        Velocity about which a cell is divided, and the inverse of its dispersions.
    ring : ndarray, shape (4,)
        Radii [kpc] between which heights are counted; logarithm of the least height, bins per unit of logarithm.
    moments : ndarray, shape (4, n_R, n_z, n_phi, 10)
        Added to, by part: weight, sums of v, of their squares and products.
    fourth : ndarray, shape (n_R, n_z, n_phi)
        Added to: (x_R^2 + x_rot^2 + x_z^2)^2, with x from the frame's velocity in units of its dispersions.
    heights : ndarray, shape (h,)
        Added to: weight of bound bodies in the ring by |z|; first and last take what lies beyond.
    ends : ndarray, shape (4,)
        Added to: number of tracers, number unbound at the end, number within 20 kpc of the centre, whole weight.
    """
    s = np.zeros(ROWS * LANES)
    n_r, n_z, n_phi = int(grid[2]), int(grid[5]), int(grid[6])
    unbound = np.zeros(LANES, dtype=np.bool_)
    gone = np.zeros(LANES, dtype=np.bool_)
    for first in range(0, states.shape[0], LANES):
        used = load(states, first, s)
        unbound[:] = False
        gone[:] = False
        gone[used:] = True
        note = 0
        running = used
        while running > 0:
            take_steps(kinds, pars, omega, ds, s, stride)
            look = note % _CHECKS == 0
            note += 1
            for i in range(LANES):
                if gone[i]:
                    continue
                x, y, z = s[i], s[LANES + i], s[2 * LANES + i]
                px, py, pz = s[PX + i], s[PY + i], s[PZ + i]
                age = s[TIME + i]
                over = age >= old
                if look or over:
                    unbound[i] = 0.5 * (px * px + py * py + pz * pz) + potential_at(kinds, pars, x, y, z) > 0.0
                    r2 = x * x + y * y + z * z
                    if over or (unbound[i] and r2 > 1e4):
                        gone[i] = True
                        running -= 1
                        release(s, i, states[first + i])
                        ends[0] += 1.0
                        ends[1] += 1.0 if unbound[i] else 0.0
                        ends[2] += 1.0 if r2 < 400.0 else 0.0
                if over or age < young:
                    continue
                w = math.exp(growth * age) / s[WEIGHT + i]
                ends[3] += w
                radius = math.sqrt(x * x + y * y)
                height = abs(z)
                if not unbound[i] and ring[0] < radius < ring[1]:
                    h = int((math.log(height + 1e-9) - ring[2]) * ring[3]) + 1
                    heights[min(max(h, 0), heights.size - 1)] += w
                ir = _cell(radius, grid[0], grid[1], n_r)
                iz = _cell(height, grid[3], grid[4], n_z)
                if ir >= n_r or iz >= n_z:
                    continue
                ip = int(math.atan2(y, x) / math.pi * n_phi + 2 * n_phi) % n_phi
                per_r = 1.0 / max(radius, 1e-12)
                v_r, v_t = (x * px + y * py) * per_r, (y * px - x * py) * per_r
                v_z = pz if z >= 0.0 else -pz
                f = frame[ir, iz, ip]
                x_r, x_t, x_z = (v_r - f[0]) * f[3], (v_t - f[1]) * f[4], (v_z - f[2]) * f[5]
                _add_moments(moments[_part(ir < n_four, x_r, x_t, x_z), ir, iz, ip], w, v_r, v_t, v_z)
                fourth[ir, iz, ip] += w * (x_r * x_r + x_t * x_t + x_z * x_z) ** 2


@kernel
def _corners(grid, radius, phi, z, index, weight, mirrored):
    """Find the eight cells around a point, their weights, which of them lie beyond z = 0; return False outside."""
    n_r, n_z, n_phi = int(grid[2]), int(grid[5]), int(grid[6])
    u = radius / grid[0]
    v = abs(z) / grid[3]
    u = math.log(u + math.sqrt(u * u + 1.0)) * grid[1]
    v = math.log(v + math.sqrt(v * v + 1.0)) * grid[4]
    if u >= n_r or v >= n_z:
        return False
    u = min(max(u - 0.5, 0.0), n_r - 1.0)
    v = min(v - 0.5, n_z - 1.0)
    p = (phi / math.pi * n_phi) % n_phi - 0.5
    iu = min(int(u), n_r - 2)
    iv = min(int(math.floor(v)), n_z - 2)
    ip = int(math.floor(p))
    fu, fv, fp = u - iu, v - iv, p - ip
    c = 0
    for a in range(2):
        for b in range(2):
            for d in range(2):
                # below the lowest cell stands its mirror image
                iz = iv + b
                index[c, 0] = iu + a
                index[c, 1] = max(iz, 0)
                index[c, 2] = (ip + d + n_phi) % n_phi
                mirrored[c] = iz < 0
                weight[c] = (fu if a else 1.0 - fu) * (fv if b else 1.0 - fv) * (fp if d else 1.0 - fp)
                c += 1
    return True


@kernel
def _density(ln_rho, step, index, weight):
    """Interpolate ln of the density of one element; nothing where most of the cells around are empty."""
    ln = 0.0
    for c in range(8):
        code = ln_rho[index[c, 0], index[c, 1], index[c, 2]]
        ln += weight[c] * (_LN_NOTHING if code == EMPTY else code * step)
    return math.exp(ln) if ln > 0.5 * _LN_NOTHING else 0.0


@kernel
def _gaussian(four, two, steps, g, index, weight, mirrored, side, out):
    """Interpolate a Gaussian of one element: out gets share, means (3), dispersion tensor R rot z Rrot Rz rotz."""
    n_four = four.shape[0]
    inner = index[0, 0] < n_four
    # where cells with four stand beside cells with two, displacements halve and second moments must not
    border = 1.0 if inner and index[7, 0] >= n_four else 0.0
    out[:] = 0.0
    for c in range(8):
        i, j, k = index[c, 0], index[c, 1], index[c, 2]
        w, odd = weight[c], side
        if i < n_four:
            row = four[i, j, k, 1 - g if mirrored[c] and g < 2 else g]
            out[0] += w * row[0] * steps[3]
        else:  # the halves of the cells beyond stand for two cones each
            row = two[i - n_four, j, k, g // 2]
            out[0] += w * row[0] * steps[3] * (0.5 if inner else 1.0)
        if mirrored[c]:
            odd = -odd
        m_r, m_t, m_z = row[1] * steps[1], row[2] * steps[1], odd * row[3] * steps[1]
        s_r, s_t, s_z = row[4] * steps[1], row[5] * steps[1], row[6] * steps[1]
        out[1] += w * m_r
        out[2] += w * m_t
        out[3] += w * m_z
        out[4] += w * (s_r * s_r + border * m_r * m_r)
        out[5] += w * (s_t * s_t + border * m_t * m_t)
        out[6] += w * (s_z * s_z + border * m_z * m_z)
        out[7] += w * (s_r * s_t * row[7] * steps[2] + border * m_r * m_t)
        out[8] += w * (odd * s_r * s_z * row[8] * steps[2] + border * m_r * m_z)
        out[9] += w * (odd * s_t * s_z * row[9] * steps[2] + border * m_t * m_z)
    out[4] -= border * out[1] * out[1]
    out[5] -= border * out[2] * out[2]
    out[6] -= border * out[3] * out[3]
    out[7] -= border * out[1] * out[2]
    out[8] -= border * out[1] * out[3]
    out[9] -= border * out[2] * out[3]


@kernel
def _to_cartesian(v, ex, ey, out):
    """Turn means and tensor along (R, rot, z) into Galactocentric x, y, z; (ex, ey) points outward."""
    tx, ty = ey, -ex
    out[0] = v[1] * ex + v[2] * tx
    out[1] = v[1] * ey + v[2] * ty
    out[2] = v[3]
    rr, tt, rt = v[4], v[5], v[7]
    out[3] = rr * ex * ex + tt * tx * tx + 2.0 * rt * ex * tx
    out[4] = rr * ey * ey + tt * ty * ty + 2.0 * rt * ey * ty
    out[5] = v[6]
    out[6] = rr * ex * ey + tt * tx * ty + rt * (ex * ty + ey * tx)
    out[7] = v[8] * ex + v[9] * tx
    out[8] = v[8] * ey + v[9] * ty


@kernel
def field_rows(points, axis_angle, grid, steps, ln_rho, four, two, out):
    """Read density and velocity of every element at points.

    Parameters
    ----------
    points : ndarray, shape (n, 3)  [kpc]
        Galactocentric.
    axis_angle : float  [rad]
        Azimuth of the bar's major axis in the Galactocentric frame.
    grid : ndarray, shape (7,)
        As for `deposit_orbits`.
    steps : ndarray, shape (4,)
        What one unit stands for: of ln density, of velocity [km/s], of correlation, of share.
    ln_rho : ndarray of int16, shape (e, n_R, n_z, n_phi)
    four, two : ndarray of int16, shape (e, n_four, n_z, n_phi, 4, 10) and (e, n_R - n_four, n_z, n_phi, 2, 10)
    out : ndarray, shape (4 e, n, 10)
        Gets density [1/kpc^3 per remnant born], mean velocity (3), tensor xx yy zz xy xz yz; rows 4 e to 4 e + 3
        are the Gaussians of element e, of which the second and fourth are empty where cells hold two.
    """
    index = np.empty((8, 3), dtype=np.int64)
    weight, mirrored = np.empty(8), np.empty(8, dtype=np.bool_)
    local = np.empty((PARTS, Q))
    for i in range(points.shape[0]):
        x, y, z = points[i, 0], points[i, 1], points[i, 2]
        radius = math.sqrt(x * x + y * y)
        ex, ey = (x / radius, y / radius) if radius > 1e-12 else (1.0, 0.0)
        inside = _corners(grid, radius, math.atan2(y, x) - axis_angle, z, index, weight, mirrored)
        side = 1.0 if z >= 0.0 else -1.0
        step = 1 if inside and index[0, 0] < four.shape[1] else 2
        for e in range(ln_rho.shape[0]):
            rho = _density(ln_rho[e], steps[0], index, weight) if inside else 0.0
            out[PARTS * e : PARTS * (e + 1), i] = 0.0
            if rho > 0.0:
                shares = 0.0
                for g in range(0, PARTS, step):
                    _gaussian(four[e], two[e], steps, g, index, weight, mirrored, side, local[g])
                    shares += local[g, 0]
                for g in range(0, PARTS, step):
                    if local[g, 0] > 0.0:
                        row = out[PARTS * e + g, i]
                        row[0] = rho * local[g, 0] / shares
                        _to_cartesian(local[g], ex, ey, row[1:])


@kernel
def field_profile(D, origin, axes, v_sun, k, axis_angle, grid, steps, ln_rho, four, two, out):
    """Fill out (6, 4 e, n) along a sightline: density [1/kpc^3], mu_l, mu_b [mas/yr], C_ll, C_lb, C_bb [(mas/yr)^2].

    D: distances [kpc], (n,); origin, axes, v_sun, k as for `profile.stellar_profile`; the rest as for `field_rows`.
    """
    point = np.empty((1, 3))
    rows = np.empty((out.shape[1], 1, Q))
    mu = np.empty(5)
    for i in range(D.size):
        for j in range(3):
            point[0, j] = origin[j] + D[i] * axes[0, j]
        field_rows(point, axis_angle, grid, steps, ln_rho, four, two, rows)
        for r in range(out.shape[1]):
            out[:, r, i] = 0.0
            if rows[r, 0, 0] > 0.0:
                project(D[i], axes[1:], v_sun, k, rows[r, 0, 1:], mu)
                out[0, r, i] = rows[r, 0, 0]
                for j in range(5):
                    out[1 + j, r, i] = mu[j]
