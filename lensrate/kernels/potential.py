"""Gravitational potential, acceleration and density of each kind of member, and their sums.

Members stand in the frame whose x axis is the bar's major axis. A potential is a list of integer
kind codes and one row of numbers per member; masses come multiplied by G, in kpc (km/s)^2.
`add_lane_accelerations` does the same for 16 points at a time and is what the orbits use.
"""

import math

from ._jit import kernel
from .elementary import gamma_upper, log, regularised_gamma
from .maths import fexp

__all__ = [
    "CUTOFF_POWER",
    "HOMEOIDS",
    "LANES",
    "MIYAMOTO_NAGAI",
    "NEEDLE_BAR",
    "NFW",
    "PLUMMER",
    "acceleration_at",
    "add_lane_accelerations",
    "potential_at",
    "source_at",
]

#: kind codes; the row of numbers that each takes stands behind it
MIYAMOTO_NAGAI = 1  # GM, a, b
NFW = 2  # G 4 pi rho_s a^3, a
CUTOFF_POWER = 3  # G times total mass, alpha, cut-off radius
PLUMMER = 4  # GM, b
NEEDLE_BAR = 5  # GM, a, b, c
HOMEOIDS = 6  # GM, three lengths, K, then K times (weight, 1/(a1^2+u), 1/(a2^2+u), 1/(a3^2+u))
_LEAST = -690.0  # exponents that the fast exponential takes
_HEAD = 5  # where the homeoids' K groups of four begin

#: points handled at once by the lane kernels
LANES = 16
_X, _Y, _Z, _AX, _AY, _AZ, _T1, _T2, _T3 = (row * LANES for row in range(9))


@kernel
def miyamoto_nagai_potential(x, y, z, gm, a, b):
    """Return Phi [(km/s)^2] of a Miyamoto & Nagai (1975) disc."""
    s = a + math.sqrt(z * z + b * b)
    return -gm / math.sqrt(x * x + y * y + s * s)


@kernel
def miyamoto_nagai_acceleration(x, y, z, gm, a, b):
    """Return the three components of -grad Phi [(km/s)^2/kpc]."""
    zb = math.sqrt(z * z + b * b)
    s = a + zb
    d2 = x * x + y * y + s * s
    f = -gm / (d2 * math.sqrt(d2))
    return f * x, f * y, f * z * s / zb


@kernel
def miyamoto_nagai_source(x, y, z, gm, a, b):
    """Return 4 pi G rho (Miyamoto & Nagai 1975, eq. 5)."""
    r2 = x * x + y * y
    zb = math.sqrt(z * z + b * b)
    s = a + zb
    return gm * b * b * (a * r2 + (a + 3.0 * zb) * s * s) / ((r2 + s * s) ** 2.5 * zb**3)


@kernel
def nfw_potential(x, y, z, gm, a):
    """Return Phi [(km/s)^2] of a Navarro, Frenk & White (1997) halo."""
    r = math.sqrt(x * x + y * y + z * z)
    if r < 1e-9 * a:
        return -gm / a
    return -gm * math.log1p(r / a) / r


@kernel
def nfw_acceleration(x, y, z, gm, a):
    """Return the three components of -grad Phi [(km/s)^2/kpc]; the centre's cusp is rounded below 1e-6 kpc."""
    r2 = x * x + y * y + z * z + 1e-12
    r = math.sqrt(r2)
    f = -gm * (log(1.0 + r / a) - r / (a + r)) / (r2 * r)
    return f * x, f * y, f * z


@kernel
def nfw_source(x, y, z, gm, a):
    """Return 4 pi G rho; infinite at the centre."""
    r = math.sqrt(x * x + y * y + z * z)
    return gm / (r * (a + r) ** 2)


@kernel
def cutoff_power_potential(x, y, z, gm, alpha, cut):
    """Return Phi [(km/s)^2] of rho ~ r^-alpha exp[-(r/cut)^2], alpha < 2, of total mass gm / G."""
    r = math.sqrt(x * x + y * y + z * z)
    t = (r / cut) ** 2
    outside = gamma_upper(1.0 - 0.5 * alpha, t) / (cut * math.gamma(1.5 - 0.5 * alpha))
    if r < 1e-9 * cut:
        return -gm * outside
    return -gm * (regularised_gamma(1.5 - 0.5 * alpha, t) / r + outside)


@kernel
def cutoff_power_acceleration(x, y, z, gm, alpha, cut):
    """Return the three components of -grad Phi [(km/s)^2/kpc]; the centre's cusp is rounded below 1e-6 kpc."""
    r2 = x * x + y * y + z * z + 1e-12
    f = -gm * regularised_gamma(1.5 - 0.5 * alpha, r2 / (cut * cut)) / (r2 * math.sqrt(r2))
    return f * x, f * y, f * z


@kernel
def cutoff_power_source(x, y, z, gm, alpha, cut):
    """Return 4 pi G rho; infinite at the centre."""
    r = math.sqrt(x * x + y * y + z * z)
    return 2.0 * gm * (r / cut) ** -alpha * math.exp(-((r / cut) ** 2)) / (cut**3 * math.gamma(1.5 - 0.5 * alpha))


@kernel
def plummer_potential(x, y, z, gm, b):
    """Return Phi [(km/s)^2] of a Plummer (1911) sphere."""
    return -gm / math.sqrt(x * x + y * y + z * z + b * b)


@kernel
def plummer_acceleration(x, y, z, gm, b):
    """Return the three components of -grad Phi [(km/s)^2/kpc]."""
    d2 = x * x + y * y + z * z + b * b
    f = -gm / (d2 * math.sqrt(d2))
    return f * x, f * y, f * z


@kernel
def plummer_source(x, y, z, gm, b):
    """Return 4 pi G rho."""
    return 3.0 * gm * b * b / (x * x + y * y + z * z + b * b) ** 2.5


@kernel
def needle_bar_potential(x, y, z, gm, a, b, c):
    """Return Phi [(km/s)^2] of a softened needle of half length a along x (Long & Murali 1992, eq. 8)."""
    h = b + math.sqrt(c * c + z * z)
    w = y * y + h * h
    near = math.sqrt((a - x) ** 2 + w)
    far = math.sqrt((a + x) ** 2 + w)
    return gm / (2.0 * a) * math.log((x - a + near) / (x + a + far))


@kernel
def needle_bar_acceleration(x, y, z, gm, a, b, c):
    """Return the three components of -grad Phi [(km/s)^2/kpc]."""
    zc = math.sqrt(c * c + z * z)
    h = b + zc
    w = y * y + h * h
    near = math.sqrt((a - x) ** 2 + w)
    far = math.sqrt((a + x) ** 2 + w)
    total = near + far
    f = -gm / (near * far)
    across = 0.5 * f * (total - 4.0 * x * x / total) / w
    return 2.0 * f * x / total, across * y, across * z * h / zc


@kernel
def needle_bar_source(x, y, z, gm, a, b, c):
    """Return 4 pi G rho, by central differences of the acceleration over 1e-4 kpc."""
    d = 1e-4
    ax1, _, _ = needle_bar_acceleration(x + d, y, z, gm, a, b, c)
    ax0, _, _ = needle_bar_acceleration(x - d, y, z, gm, a, b, c)
    _, ay1, _ = needle_bar_acceleration(x, y + d, z, gm, a, b, c)
    _, ay0, _ = needle_bar_acceleration(x, y - d, z, gm, a, b, c)
    _, _, az1 = needle_bar_acceleration(x, y, z + d, gm, a, b, c)
    _, _, az0 = needle_bar_acceleration(x, y, z - d, gm, a, b, c)
    return -(ax1 - ax0 + ay1 - ay0 + az1 - az0) / (2.0 * d)


@kernel
def homeoids_potential(x, y, z, p):
    """Return Phi [(km/s)^2] of a body of density exp(-m), m^2 = sum (x_i/a_i)^2, as a sum over confocal shells.

    The integral over u of Binney & Tremaine (2008), eq. 2.140, for this density, taken at K values of u.
    """
    total = 0.0
    for k in range(int(p[4])):
        j = _HEAD + 4 * k
        m = math.sqrt(x * x * p[j + 1] + y * y * p[j + 2] + z * z * p[j + 3])
        total += p[j] * (1.0 + m) * fexp(max(-m, _LEAST))
    return -total


@kernel
def homeoids_acceleration(x, y, z, p):
    """Return the three components of -grad Phi [(km/s)^2/kpc]."""
    fx, fy, fz = 0.0, 0.0, 0.0
    for k in range(int(p[4])):
        j = _HEAD + 4 * k
        m = math.sqrt(x * x * p[j + 1] + y * y * p[j + 2] + z * z * p[j + 3])
        w = p[j] * fexp(max(-m, _LEAST))
        fx += w * p[j + 1]
        fy += w * p[j + 2]
        fz += w * p[j + 3]
    return -x * fx, -y * fy, -z * fz


@kernel
def homeoids_source(x, y, z, p):
    """Return 4 pi G rho of the body itself: G M exp(-m) / (2 a1 a2 a3)."""
    m = math.sqrt((x / p[1]) ** 2 + (y / p[2]) ** 2 + (z / p[3]) ** 2)
    return p[0] * math.exp(-m) / (2.0 * p[1] * p[2] * p[3])


@kernel
def potential_at(kinds, pars, x, y, z):
    """Return the summed potential at a point of the bar's frame.

    Parameters
    ----------
    kinds : ndarray of int64, shape (n,)
        Kind codes.
    pars : ndarray, shape (n, m)
        A row of numbers per member, unused ones ignored.
    x, y, z : float  [kpc]

    Returns
    -------
    float  [(km/s)^2]
    """
    total = 0.0
    for j in range(kinds.size):
        kind = kinds[j]
        p = pars[j]
        if kind == MIYAMOTO_NAGAI:
            total += miyamoto_nagai_potential(x, y, z, p[0], p[1], p[2])
        elif kind == NFW:
            total += nfw_potential(x, y, z, p[0], p[1])
        elif kind == CUTOFF_POWER:
            total += cutoff_power_potential(x, y, z, p[0], p[1], p[2])
        elif kind == PLUMMER:
            total += plummer_potential(x, y, z, p[0], p[1])
        elif kind == NEEDLE_BAR:
            total += needle_bar_potential(x, y, z, p[0], p[1], p[2], p[3])
        elif kind == HOMEOIDS:
            total += homeoids_potential(x, y, z, p)
    return total


@kernel
def acceleration_at(kinds, pars, x, y, z):
    """Return the summed acceleration at a point of the bar's frame.

    Parameters
    ----------
    kinds, pars
        As for `potential_at`.
    x, y, z : float  [kpc]

    Returns
    -------
    tuple of float  [(km/s)^2/kpc]
    """
    ax, ay, az = 0.0, 0.0, 0.0
    for j in range(kinds.size):
        kind = kinds[j]
        p = pars[j]
        fx, fy, fz = 0.0, 0.0, 0.0
        if kind == MIYAMOTO_NAGAI:
            fx, fy, fz = miyamoto_nagai_acceleration(x, y, z, p[0], p[1], p[2])
        elif kind == NFW:
            fx, fy, fz = nfw_acceleration(x, y, z, p[0], p[1])
        elif kind == CUTOFF_POWER:
            fx, fy, fz = cutoff_power_acceleration(x, y, z, p[0], p[1], p[2])
        elif kind == PLUMMER:
            fx, fy, fz = plummer_acceleration(x, y, z, p[0], p[1])
        elif kind == NEEDLE_BAR:
            fx, fy, fz = needle_bar_acceleration(x, y, z, p[0], p[1], p[2], p[3])
        elif kind == HOMEOIDS:
            fx, fy, fz = homeoids_acceleration(x, y, z, p)
        ax += fx
        ay += fy
        az += fz
    return ax, ay, az


@kernel
def source_at(kinds, pars, x, y, z):
    """Return 4 pi G times the summed density at a point of the bar's frame.

    Parameters
    ----------
    kinds, pars
        As for `potential_at`.
    x, y, z : float  [kpc]

    Returns
    -------
    float  [(km/s/kpc)^2]
    """
    total = 0.0
    for j in range(kinds.size):
        kind = kinds[j]
        p = pars[j]
        if kind == MIYAMOTO_NAGAI:
            total += miyamoto_nagai_source(x, y, z, p[0], p[1], p[2])
        elif kind == NFW:
            total += nfw_source(x, y, z, p[0], p[1])
        elif kind == CUTOFF_POWER:
            total += cutoff_power_source(x, y, z, p[0], p[1], p[2])
        elif kind == PLUMMER:
            total += plummer_source(x, y, z, p[0], p[1])
        elif kind == NEEDLE_BAR:
            total += needle_bar_source(x, y, z, p[0], p[1], p[2], p[3])
        elif kind == HOMEOIDS:
            total += homeoids_source(x, y, z, p)
    return total


@kernel
def _add_homeoids(p, s):
    """Add the homeoids' acceleration to lanes; K outside, lanes inside, so that each K vectorises."""
    for i in range(LANES):
        s[_T1 + i] = 0.0
        s[_T2 + i] = 0.0
        s[_T3 + i] = 0.0
    for k in range(int(p[4])):
        j = _HEAD + 4 * k
        w, i1, i2, i3 = p[j], p[j + 1], p[j + 2], p[j + 3]
        for i in range(LANES):
            x, y, z = s[_X + i], s[_Y + i], s[_Z + i]
            e = w * fexp(max(-math.sqrt(x * x * i1 + y * y * i2 + z * z * i3), _LEAST))
            s[_T1 + i] += e * i1
            s[_T2 + i] += e * i2
            s[_T3 + i] += e * i3
    for i in range(LANES):
        s[_AX + i] -= s[_X + i] * s[_T1 + i]
        s[_AY + i] -= s[_Y + i] * s[_T2 + i]
        s[_AZ + i] -= s[_Z + i] * s[_T3 + i]


@kernel
def add_lane_accelerations(kinds, pars, s):
    """Add the summed acceleration at 16 points of the bar's frame.

    Parameters
    ----------
    kinds, pars
        As for `potential_at`.
    s : ndarray, at least 9 * LANES long
        Rows of LANES numbers: x, y, z [kpc], the three sums to add to [(km/s)^2/kpc], three of scratch.
        One flat array with rows at fixed places, so that the compiler knows that they do not overlap.
    """
    for j in range(kinds.size):
        kind = kinds[j]
        p = pars[j]
        p0, p1, p2, p3 = p[0], p[1], p[2], p[3]
        if kind == MIYAMOTO_NAGAI:
            for i in range(LANES):
                fx, fy, fz = miyamoto_nagai_acceleration(s[_X + i], s[_Y + i], s[_Z + i], p0, p1, p2)
                s[_AX + i] += fx
                s[_AY + i] += fy
                s[_AZ + i] += fz
        elif kind == NFW:
            for i in range(LANES):
                fx, fy, fz = nfw_acceleration(s[_X + i], s[_Y + i], s[_Z + i], p0, p1)
                s[_AX + i] += fx
                s[_AY + i] += fy
                s[_AZ + i] += fz
        elif kind == PLUMMER:
            for i in range(LANES):
                fx, fy, fz = plummer_acceleration(s[_X + i], s[_Y + i], s[_Z + i], p0, p1)
                s[_AX + i] += fx
                s[_AY + i] += fy
                s[_AZ + i] += fz
        elif kind == NEEDLE_BAR:
            for i in range(LANES):
                fx, fy, fz = needle_bar_acceleration(s[_X + i], s[_Y + i], s[_Z + i], p0, p1, p2, p3)
                s[_AX + i] += fx
                s[_AY + i] += fy
                s[_AZ + i] += fz
        elif kind == HOMEOIDS:
            _add_homeoids(p, s)
        elif kind == CUTOFF_POWER:
            for i in range(LANES):
                fx, fy, fz = cutoff_power_acceleration(s[_X + i], s[_Y + i], s[_Z + i], p0, p1, p2)
                s[_AX + i] += fx
                s[_AY + i] += fy
                s[_AZ + i] += fz


@kernel
def fill(kinds, pars, points, out):
    """Write the potential, the acceleration and 4 pi G rho at many points of the bar's frame.

    Parameters
    ----------
    kinds, pars
        As for `potential_at`.
    points : ndarray, shape (n, 3)  [kpc]
    out : ndarray, shape (n, 5)
        Gets potential, three components of acceleration, 4 pi G rho.
    """
    for i in range(points.shape[0]):
        x, y, z = points[i, 0], points[i, 1], points[i, 2]
        out[i, 0] = potential_at(kinds, pars, x, y, z)
        out[i, 1], out[i, 2], out[i, 3] = acceleration_at(kinds, pars, x, y, z)
        out[i, 4] = source_at(kinds, pars, x, y, z)


@kernel
def fill_ring_means(kinds, pars, radius, z, directions, out):
    """Write means over azimuth of the potential, the inward acceleration and 4 pi G rho.

    Parameters
    ----------
    kinds, pars
        As for `potential_at`.
    radius, z : ndarray, shape (n,)  [kpc]
        Cylindrical radius and height.
    directions : int
        Midpoints on the half circle; the other half is alike in every bar.
    out : ndarray, shape (n, 3)
    """
    for i in range(radius.size):
        phi_sum, pull_sum, source_sum = 0.0, 0.0, 0.0
        for j in range(directions):
            angle = math.pi * (j + 0.5) / directions
            c, s = math.cos(angle), math.sin(angle)
            x, y = radius[i] * c, radius[i] * s
            ax, ay, _ = acceleration_at(kinds, pars, x, y, z[i])
            phi_sum += potential_at(kinds, pars, x, y, z[i])
            pull_sum -= ax * c + ay * s
            source_sum += source_at(kinds, pars, x, y, z[i])
        out[i, 0] = phi_sum / directions
        out[i, 1] = pull_sum / directions
        out[i, 2] = source_sum / directions
