"""Mean velocity and dispersion of one stellar component at a point; km/s, Galactocentric frame of density.py.

v_phi is positive along the disc's rotation (clockwise seen from +z).
"""

import math

from ._jit import kernel

DISC, BAR, REST = range(3)
LINEAR, TABLE = range(2)


@kernel
def circular_speed(R, rot):
    """Circular speed at R [kpc]; rot = (LINEAR, v0, slope, R0, soft) or (TABLE, dR, v(0), v(dR), ...)."""
    if rot[0] == LINEAR:
        return (rot[1] + rot[2] * (R - rot[3])) * R / math.sqrt(R * R + rot[4] * rot[4])
    n = rot.size - 2
    t = R / rot[1]
    i = min(int(t), n - 2)
    t -= i
    v0, v1 = rot[2 + i], rot[3 + i]
    # Catmull-Rom slopes; one-sided at the ends
    d0 = 0.5 * (v1 - rot[1 + i]) if i > 0 else v1 - v0
    d1 = 0.5 * (rot[4 + i] - v0) if i < n - 2 else v1 - v0
    if t > 1.0:
        return v1
    return v0 + t * (d0 + t * (3.0 * (v1 - v0) - 2.0 * d0 - d1 + t * (2.0 * (v0 - v1) + d0 + d1)))


@kernel
def _onset(R, R_start):
    """0 inside R_start, 1 beyond 1.25 R_start, smooth between."""
    if R_start <= 0.0:
        return 1.0
    t = min(max((R / R_start - 1.0) / 0.25, 0.0), 1.0)
    return t * t * (3.0 - 2.0 * t)


@kernel
def disc_motion(R, rot, s_R, s_phi, s_z, fall, R_frozen, R0, drift, h_R, R_flat):
    """(v_phi, s_R, s_phi, s_z): dispersions fall as exp(-fall (R - R0)), frozen inside R_frozen.

    drift >= 0: lag behind v_c at R0, scaled with v_c; drift < 0: asymmetric drift from Jeans' equation
    (Binney & Tremaine 2008, eq. 4.228, without the tilt term) for surface density scale h_R, flat inside R_flat.
    """
    f = math.exp(-fall * (max(R, R_frozen) - R0))
    s_R, s_phi, s_z = s_R * f, s_phi * f, s_z * f
    v_c = circular_speed(R, rot)
    if drift >= 0.0:
        return v_c - drift * v_c / circular_speed(R0, rot) if drift > 0.0 else v_c, s_R, s_phi, s_z
    # the slopes set in gradually over a quarter of the radius, so that the mean motion has no step
    slope = _onset(R, R_flat) / h_R + 2.0 * fall * _onset(R, R_frozen)
    lag = s_R * s_R / (2.0 * max(v_c, 1.0)) * (s_phi * s_phi / (s_R * s_R) - 1.0 + R * slope)
    return max(v_c - lag, 0.0), s_R, s_phi, s_z


@kernel
def velocity_at(kind, p, rot, x, y, z, out):
    """Fill out[0:3] with the mean velocity and out[3:9] with the dispersion tensor xx yy zz xy xz yz."""
    R = math.sqrt(x * x + y * y)
    # unit vector of rotation: +y at the Sun's place (x < 0, y = 0)
    ex, ey = (y / R, -x / R) if R > 1e-12 else (0.0, 1.0)
    for i in range(9):
        out[i] = 0.0
    if kind == DISC:
        v, s_R, s_phi, s_z = disc_motion(R, rot, p[0], p[1], p[2], p[3], p[4], p[5], p[6], p[7], p[8])
        out[0], out[1] = v * ex, v * ey
        r2, t2 = s_R * s_R, s_phi * s_phi
        # radial unit vector is (-ey, ex) up to sign
        out[3] = r2 * ey * ey + t2 * ex * ex
        out[4] = r2 * ex * ex + t2 * ey * ey
        out[5] = s_z * s_z
        out[6] = (t2 - r2) * ex * ey
    elif kind == BAR:
        # p: s_x, s_y, s_z along the bar's axes, falls per kpc in R and |z|, |z| of reference, angle, v_rot, R_rot
        f = math.exp(-p[3] * R - p[4] * (abs(z) - p[5]))
        ca, sa = math.cos(p[6]), math.sin(p[6])
        a2, b2, c2 = (p[0] * f) ** 2, (p[1] * f) ** 2, (p[2] * f) ** 2
        v = p[7] * R / math.sqrt(R * R + p[8] * p[8]) if p[7] != 0.0 else 0.0
        out[0], out[1] = v * ex, v * ey
        out[3] = a2 * ca * ca + b2 * sa * sa
        out[4] = a2 * sa * sa + b2 * ca * ca
        out[5] = c2
        out[6] = (b2 - a2) * sa * ca


@kernel
def velocity_many(kind, p, rot, x, y, z, out):
    """Fill out (n, 9) at n points."""
    for i in range(x.size):
        velocity_at(kind, p, rot, x[i], y[i], z[i], out[i])


@kernel
def project(D, axes, v_sun, k, vel, out):
    """Turn a Galactocentric velocity (mean and tensor, 9) into proper motion seen from the Sun.

    axes: unit vectors of l and b in the Galactocentric frame (2, 3); k: km/s per (mas/yr kpc);
    out: mu_l, mu_b, C_ll, C_lb, C_bb in mas/yr and (mas/yr)^2.
    """
    s = 1.0 / (k * D)
    vx, vy, vz = vel[0] - v_sun[0], vel[1] - v_sun[1], vel[2] - v_sun[2]
    u0, u1, u2 = axes[0, 0], axes[0, 1], axes[0, 2]
    w0, w1, w2 = axes[1, 0], axes[1, 1], axes[1, 2]
    out[0] = s * (u0 * vx + u1 * vy + u2 * vz)
    out[1] = s * (w0 * vx + w1 * vy + w2 * vz)
    s2 = s * s
    xx, yy, zz, xy, xz, yz = vel[3], vel[4], vel[5], vel[6], vel[7], vel[8]
    ux, uy, uz = xx * u0 + xy * u1 + xz * u2, xy * u0 + yy * u1 + yz * u2, xz * u0 + yz * u1 + zz * u2
    wx, wy, wz = xx * w0 + xy * w1 + xz * w2, xy * w0 + yy * w1 + yz * w2, xz * w0 + yz * w1 + zz * w2
    out[2] = s2 * (ux * u0 + uy * u1 + uz * u2)
    out[3] = s2 * (wx * u0 + wy * u1 + wz * u2)
    out[4] = s2 * (wx * w0 + wy * w1 + wz * w2)
