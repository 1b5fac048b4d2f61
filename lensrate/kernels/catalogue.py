"""Columns of mock events that follow from others: the sky frame, the geocentric frame, magnitudes."""

import math

from ._jit import kernel


@kernel
def sky(
    mu_l, mu_b, theta_E, pi_E, t_0, cosine, sine, first, earth, days, mu_N, mu_E, pi_N, pi_E_out, t_geo, pi_N_geo,
    pi_E_geo,
):  # fmt: skip
    """Fill North and East parts of motion and parallax, and t_E and parallax geocentric at t_0, all (n,).

    cosine, sine: of the angle from North to the direction of rising b; earth (m, 4): Earth's place and velocity on the
    sky, North and East, at the days first, first + 1, ... [au, au/d]; days: in a year. Between days Earth follows the
    cubic through places and velocities.
    """
    for n in range(t_0.size):
        north, east = cosine * mu_b[n] - sine * mu_l[n], sine * mu_b[n] + cosine * mu_l[n]
        x = t_0[n] - first
        i = min(max(int(x), 0), earth.shape[0] - 2)
        t = x - i
        # v0 + t (2 a + 3 t b), with a = 3 rise - 2 v0 - v1, b = v0 + v1 - 2 rise
        rise = earth[i + 1, 0] - earth[i, 0]
        v0, v1 = earth[i, 2], earth[i + 1, 2]
        v_N = v0 + t * (2.0 * (3.0 * rise - 2.0 * v0 - v1) + 3.0 * t * (v0 + v1 - 2.0 * rise))
        rise = earth[i + 1, 1] - earth[i, 1]
        v0, v1 = earth[i, 3], earth[i + 1, 3]
        v_E = v0 + t * (2.0 * (3.0 * rise - 2.0 * v0 - v1) + 3.0 * t * (v0 + v1 - 2.0 * rise))
        pi_rel = pi_E[n] * theta_E[n] * days
        geo_N, geo_E = north - pi_rel * v_N, east - pi_rel * v_E
        size = pi_E[n] / math.sqrt(north * north + east * east)
        mu_N[n], mu_E[n] = north, east
        pi_N[n], pi_E_out[n] = size * north, size * east
        mu = math.sqrt(geo_N * geo_N + geo_E * geo_E)
        t_geo[n] = days * theta_E[n] / mu
        size = pi_E[n] / mu
        pi_N_geo[n], pi_E_geo[n] = size * geo_N, size * geo_E


@kernel
def magnitude_below(u, faintest, magnitude, cumulative, out):
    """Magnitudes out (n,) at the share u of the stars brighter than `faintest`, from a table that rises in both."""
    m = magnitude.size
    step = (magnitude[m - 1] - magnitude[0]) / (m - 1)
    for n in range(u.size):
        x = faintest[n]
        if x >= magnitude[m - 1]:
            top, hi = cumulative[m - 1], m - 1
        else:
            # mostly an even table: a guess, then steps
            i = min(max(int((x - magnitude[0]) / step), 0), m - 2)
            while i > 0 and magnitude[i] > x:
                i -= 1
            while i < m - 2 and magnitude[i + 1] <= x:
                i += 1
            part = max(x - magnitude[i], 0.0) / (magnitude[i + 1] - magnitude[i])
            top, hi = cumulative[i] + part * (cumulative[i + 1] - cumulative[i]), i + 1
        y = u[n] * top
        lo = 0
        while hi - lo > 1:
            mid = (lo + hi) >> 1
            if cumulative[mid] <= y:
                lo = mid
            else:
                hi = mid
        rise = cumulative[lo + 1] - cumulative[lo]
        part = min(max((y - cumulative[lo]) / rise, 0.0), 1.0) if rise > 0.0 else 1.0
        out[n] = magnitude[lo] + part * (magnitude[lo + 1] - magnitude[lo])


@kernel
def interpolate(x, at, values, out):
    """Straight lines between values (m,) at rising places (m,), about evenly spaced; the ends hold beyond them."""
    m = at.size
    step = (at[m - 1] - at[0]) / (m - 1)
    for n in range(x.size):
        i = min(max(int((x[n] - at[0]) / step), 0), m - 2)
        while i > 0 and at[i] > x[n]:
            i -= 1
        while i < m - 2 and at[i + 1] <= x[n]:
            i += 1
        part = min(max((x[n] - at[i]) / (at[i + 1] - at[i]), 0.0), 1.0)
        out[n] = values[i] + part * (values[i + 1] - values[i])


@kernel
def together(source, lens, blend, u_0, base, peak):
    """Fill the magnitudes (n,) of source, lens and blend (a number) together, at baseline and at a point source's peak.

    Infinite magnitudes give no light; what is unknown (nan) stays so.
    """
    to_flux = -0.4 * math.log(10.0)
    to_magnitude = -2.5 / math.log(10.0)
    other = math.exp(to_flux * blend)
    for n in range(source.size):
        star = math.exp(to_flux * source[n])
        rest = other + (math.exp(to_flux * lens[n]) if lens[n] < math.inf else 0.0)
        u2 = u_0[n] * u_0[n]
        gain = (u2 + 2.0) / math.sqrt(u2 * (u2 + 4.0))
        base[n] = to_magnitude * math.log(star + rest)
        peak[n] = to_magnitude * math.log(gain * star + rest)
