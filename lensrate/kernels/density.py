"""Mass density of one stellar component at a point; Msun / kpc^3 at Galactocentric x, y, z in kpc.

Frame: right-handed, the Sun at x = -R0, y = 0, moving toward +y. A bar at angle alpha has its near
end at l > 0, so its major axis runs along (-cos alpha, sin alpha).
"""

import math

from ._jit import kernel

EXP_DISC, ISOTHERMAL_DISC, SECH_EXP_DISC, BAR, CORED_HALO, POWER_HALO, UNIFORM = range(7)


@kernel
def radial_profile(R, h_R, R_flat, R0):
    """Surface density relative to the Sun's place: exponential, flat inside R_flat."""
    return math.exp(-(max(R, R_flat) - R0) / h_R)


@kernel
def exp_disc(R, z, rho0, h_R, h_z, R_flat, R0):
    """Double exponential disc, rho0 in the plane at R0."""
    return rho0 * radial_profile(R, h_R, R_flat, R0) * math.exp(-abs(z) / h_z)


@kernel
def isothermal_disc(R, z, rho0, h_R, R_flat, R0, a_sheet, depth, b_halo, stretch):
    """Exponential disc whose vertical profile is exp(-Phi(z)/sigma_W^2).

    a_sheet, b_halo: the sheet's and the dark matter's part of Phi/sigma_W^2 [1/kpc, 1/kpc^2].
    """
    s = abs(z) / stretch
    q = a_sheet * (math.sqrt(s * s + depth * depth) - depth) + b_halo * s * s
    return rho0 * radial_profile(R, h_R, R_flat, R0) * math.exp(-q)


@kernel
def sech_exp_disc(R, z, rho0, h_R, h_sech, h_exp, share_sech, R0):
    """Radial exponential with a sech^2 and an exponential vertical part."""
    c = math.cosh(min(abs(z) / h_sech, 300.0))
    return rho0 * math.exp(-(R - R0) / h_R) * (share_sech / (c * c) + (1.0 - share_sech) * math.exp(-abs(z) / h_exp))


@kernel
def bar(x, y, z, rho0, a, b, c, alpha, c_plane, c_vertical, profile):
    """Bar of ellipsoidal, boxy or G2 surfaces.

    m = {[|x'/a|^p + |y'/b|^p]^(q/p) + |z/c|^q}^(1/q), p = c_plane, q = c_vertical;
    profile 0: exp(-m), 1: exp(-m^2/2), 2: sech^2(m).
    """
    ca, sa = math.cos(alpha), math.sin(alpha)
    u = abs(-ca * x + sa * y) / a
    v = abs(sa * x + ca * y) / b
    w = abs(z) / c
    if c_plane == 2.0:
        plane2 = u * u + v * v
    else:
        plane2 = (u**c_plane + v**c_plane) ** (2.0 / c_plane)
    if c_vertical == 2.0:
        m2 = plane2 + w * w
    elif c_vertical == 4.0:
        m2 = math.sqrt(plane2 * plane2 + (w * w) * (w * w))
    else:
        m2 = (plane2 ** (0.5 * c_vertical) + w**c_vertical) ** (2.0 / c_vertical)
    if profile == 0.0:
        return rho0 * math.exp(-math.sqrt(m2))
    if profile == 1.0:
        return rho0 * math.exp(-0.5 * m2)
    s = math.cosh(min(math.sqrt(m2), 300.0))
    return rho0 / (s * s)


@kernel
def cored_halo(r2, rho0, core, R0):
    """Cored isothermal halo, rho0 at the Sun's radius."""
    return rho0 * (R0 * R0 + core * core) / (r2 + core * core)


@kernel
def power_halo(R, z, rho0, n, q, core, R0):
    """Oblate power law, rho0 at (R0, 0), softened inside `core`."""
    m2 = R * R + (z / q) ** 2
    return rho0 * ((m2 + core * core) / (R0 * R0 + core * core)) ** (-0.5 * n)


@kernel
def density_at(kind, p, x, y, z):
    """Density of the component with code `kind` and parameters `p` (field order of its record)."""
    R = math.sqrt(x * x + y * y)
    if kind == EXP_DISC:
        return exp_disc(R, z, p[0], p[1], p[2], p[3], p[4])
    if kind == ISOTHERMAL_DISC:
        return isothermal_disc(R, z, p[0], p[1], p[2], p[3], p[4], p[5], p[6], p[7])
    if kind == SECH_EXP_DISC:
        return sech_exp_disc(R, z, p[0], p[1], p[2], p[3], p[4], p[5])
    if kind == BAR:
        return bar(x, y, z, p[0], p[1], p[2], p[3], p[4], p[5], p[6], p[7])
    if kind == CORED_HALO:
        return cored_halo(R * R + z * z, p[0], p[1], p[2])
    if kind == POWER_HALO:
        return power_halo(R, z, p[0], p[1], p[2], p[3], p[4])
    if kind == UNIFORM:
        return p[0]
    return math.nan


@kernel
def density_many(kind, p, x, y, z, out):
    """Fill `out` (n,) with the density at n points."""
    for i in range(x.size):
        out[i] = density_at(kind, p, x[i], y[i], z[i])
