"""Fisher information of one event: photometry and astrometry of a point lens with annual parallax, joint errors.

Fourteen parameters, in the order in which the matrix holds them:

    0 t_0 / t_E   1 u_0   2 ln t_E   3 pi_EN   4 pi_EE   5 source flux   6 blend flux
    7 ln theta_E   8, 9 source place N, E   10, 11 source proper motion N, E   12 source parallax
    13 blend over source flux in the images

The frame is geocentric at t_0 (Gould 2004, ApJ 606, 319): with ds the Sun's displacement less its linear part,
tau = (t - t_0)/t_E + pi_EN ds_N + pi_EE ds_E, beta = u_0 + pi_EN ds_E - pi_EE ds_N, and the lens is at
(tau e_N - beta e_E, tau e_E + beta e_N) from the source in Einstein radii, e along pi_E.
"""

import math

import numpy as np

from ._jit import kernel
from .elementary import log

PARAMETERS = 14
CENTROID, IMAGES = 0, 1  # what the astrometry measures
AT_LENS, AT_SOURCE = 0, 1  # where the light of the blend is
_LANES = 32
_MAG = 2.5 / math.log(10.0)
_PHOTOMETRIC = 7
_SINGULAR = 1e-12  # least pivot of the matrix scaled to a unit diagonal; rounding makes about 1e-15 of it
_LEAST_U2 = 1e-16


@kernel
def inverse_variance(mag, noise):
    """Return 1/sigma^2 at a magnitude, 0 outside the limits.

    Parameters
    ----------
    mag : float
    noise : ndarray, shape (m + 3,)
        Bright limit, faint limit, step, then m values of 1/sigma^2 from the bright limit on.

    Returns
    -------
    float
    """
    if not (noise[0] <= mag <= noise[1]):
        return 0.0
    x = (mag - noise[0]) / noise[2]
    k = min(int(x), noise.size - 5)
    x -= k
    return noise[3 + k] + x * (noise[4 + k] - noise[3 + k])


@kernel
def add_photometry(path, earth, source_flux, baseline, times, sun_N, sun_E, noise, info):
    """Add the information of a light curve.

    Parameters
    ----------
    path : ndarray, shape (5,)
        t_0 [MJD], u_0, t_E [d], pi_EN, pi_EE.
    earth : ndarray, shape (4,)
        Earth on the sky at t_0: N, E [au], velocity N, E [au/d].
    source_flux : float
        Share of the source in the baseline flux.
    baseline : float
        Magnitude of source and blend.
    times, sun_N, sun_E : ndarray, shape (n,)
        Epochs [MJD] and the Sun's place seen from Earth [au].
    noise : ndarray
        See `inverse_variance`; sigma in magnitudes.
    info : ndarray, shape (14, 14)
        Changed in place.

    Returns
    -------
    int
        Epochs within the limits.
    """
    t_0, u_0, t_E, p_N, p_E = path[0], path[1], path[2], path[3], path[4]
    J = np.empty((_PHOTOMETRIC, _LANES))
    total = np.zeros((_PHOTOMETRIC * (_PHOTOMETRIC + 1) // 2, _LANES))
    mags = np.empty(_LANES)
    used = 0
    for start in range(0, times.size, _LANES):
        m = min(_LANES, times.size - start)
        t, s_N, s_E = times[start : start + m], sun_N[start : start + m], sun_E[start : start + m]
        J[:, m:] = 0.0
        for k in range(m):
            dt = t[k] - t_0
            d_N = s_N[k] + earth[0] + earth[2] * dt
            d_E = s_E[k] + earth[1] + earth[3] * dt
            x = dt / t_E
            tau = x + p_N * d_N + p_E * d_E
            beta = u_0 + p_N * d_E - p_E * d_N
            u2 = max(tau * tau + beta * beta, _LEAST_U2)
            root = math.sqrt(u2 * (u2 + 4.0))
            A = (u2 + 2.0) / root
            slope = -8.0 * source_flux / (root * u2 * (u2 + 4.0))  # d(flux)/du / u
            flux = source_flux * A + 1.0 - source_flux
            mags[k] = baseline - _MAG * log(flux)
            w = 1.0 / flux
            J[0, k] = -slope * tau * w
            J[1, k] = slope * beta * w
            J[2, k] = -slope * tau * x * w
            J[3, k] = slope * (tau * d_N + beta * d_E) * w
            J[4, k] = slope * (tau * d_E - beta * d_N) * w
            J[5, k] = A * w
            J[6, k] = w
        for k in range(m):
            w = inverse_variance(mags[k], noise)
            used += w > 0.0
            w = math.sqrt(w) * _MAG
            for i in range(_PHOTOMETRIC):
                J[i, k] *= w
        row = 0
        for i in range(_PHOTOMETRIC):
            for j in range(i + 1):
                a, b, c = J[i], J[j], total[row]
                for k in range(_LANES):
                    c[k] += a[k] * b[k]
                row += 1
    row = 0
    for i in range(_PHOTOMETRIC):
        for j in range(i + 1):
            value = total[row].sum()
            info[i, j] += value
            if i != j:
                info[j, i] += value
            row += 1
    return used


@kernel
def lever(u2, q, measures, blend_at):
    """Return (h, dh/du / u, dh/dq): the measured vector is theta_E h(u, q) times the lens-source vector.

    Parameters
    ----------
    u2 : float
        Squared separation.
    q : float
        Blend over source flux.
    measures : int
        CENTROID of all light relative to the source, or separation of the two IMAGES.
    blend_at : int
        AT_LENS or AT_SOURCE.

    Returns
    -------
    tuple of float

    Notes
    -----
    The images' own centroid is u theta_E / (u^2 + 2) away from the lens (Dominik & Sahu 2000, ApJ 534, 213); their
    separation is theta_E sqrt(u^2 + 4), the major image on the side away from the lens.
    """
    if measures == IMAGES:
        root = math.sqrt(u2 + 4.0)
        u = math.sqrt(u2)
        return -root / u, 4.0 / (u2 * u * root), 0.0
    root = math.sqrt(u2 * (u2 + 4.0))
    A = (u2 + 2.0) / root
    w = A / (A + q)
    w_u = -8.0 / (root * u2 * (u2 + 4.0)) * q / (A + q) ** 2
    w_q = -A / (A + q) ** 2
    g = 1.0 / (u2 + 2.0)
    lens = 1.0 if blend_at == AT_LENS else 0.0
    reach = lens + g
    return lens - w * reach, 2.0 * w * g * g - w_u * reach, -w_q * reach


@kernel
def add_astrometry(path, earth, theta_E, q, mag, times, sun_N, sun_E, noise, kind, limits, info):
    """Add the information of places measured on the sky.

    Parameters
    ----------
    path, earth
        As `add_photometry`.
    theta_E : float
        [mas]
    q : float
        Blend over source flux in the images.
    mag : float
        The source's own magnitude in the images, unmagnified.
    times, sun_N, sun_E : ndarray, shape (n,)
        Epochs [MJD], NaN for none, and the Sun's place seen from Earth [au].
    noise : ndarray
        See `inverse_variance`; sigma in mas along each axis.
    kind : ndarray of int, shape (2,)
        What is measured and where the blend is; see `lever`.
    limits : ndarray, shape (2,)
        Least separation of the images [mas] and least flux of the minor over the major one, for IMAGES.
    info : ndarray, shape (14, 14)
        Changed in place.

    Returns
    -------
    tuple of int
        Epochs that measure something, and all within the limits of brightness.
    """
    t_0, u_0, t_E, p_N, p_E = path[0], path[1], path[2], path[3], path[4]
    size = math.hypot(p_N, p_E)
    if size == 0.0:
        e_N, e_E, turn_N, turn_E = 1.0, 0.0, 0.0, 0.0
    else:
        e_N, e_E = p_N / size, p_E / size
        turn_N, turn_E = -e_E / size, e_N / size  # change of the direction's angle with pi_EN, pi_EE
    J = np.zeros((2, PARAMETERS))
    used = tried = 0
    for n in range(times.size):
        if math.isnan(times[n]):
            continue
        dt = times[n] - t_0
        d_N = sun_N[n] + earth[0] + earth[2] * dt
        d_E = sun_E[n] + earth[1] + earth[3] * dt
        x = dt / t_E
        tau = x + p_N * d_N + p_E * d_E
        beta = u_0 + p_N * d_E - p_E * d_N
        u2 = max(tau * tau + beta * beta, _LEAST_U2)
        A = (u2 + 2.0) / math.sqrt(u2 * (u2 + 4.0))
        weight = inverse_variance(mag - _MAG * log(A + q), noise)
        tried += weight > 0.0
        if kind[0] == IMAGES and (theta_E * math.sqrt(u2 + 4.0) < limits[0] or A - 1.0 < limits[1] * (A + 1.0)):
            weight = 0.0
        if weight == 0.0:
            continue
        used += 1
        u_N, u_E = tau * e_N - beta * e_E, tau * e_E + beta * e_N
        h, h_u, h_q = lever(u2, q, kind[0], kind[1])
        for i in range(5):
            if i == 0:
                tau_i, beta_i, angle = -1.0, 0.0, 0.0
            elif i == 1:
                tau_i, beta_i, angle = 0.0, 1.0, 0.0
            elif i == 2:
                tau_i, beta_i, angle = -x, 0.0, 0.0
            elif i == 3:
                tau_i, beta_i, angle = d_N, d_E, turn_N
            else:
                tau_i, beta_i, angle = d_E, -d_N, turn_E
            dh = h_u * (tau * tau_i + beta * beta_i)
            J[0, i] = theta_E * (h * (tau_i * e_N - beta_i * e_E - angle * u_E) + dh * u_N)
            J[1, i] = theta_E * (h * (tau_i * e_E + beta_i * e_N + angle * u_N) + dh * u_E)
        J[0, 7], J[1, 7] = theta_E * h * u_N, theta_E * h * u_E
        if kind[0] == CENTROID:
            J[0, 8] = J[1, 9] = 1.0
            J[0, 10] = J[1, 11] = x
            J[0, 12], J[1, 12] = sun_N[n], sun_E[n]
            J[0, 13], J[1, 13] = theta_E * h_q * u_N, theta_E * h_q * u_E
        for i in range(PARAMETERS):
            for j in range(PARAMETERS):
                info[i, j] += weight * (J[0, i] * J[0, j] + J[1, i] * J[1, j])
    return used, tried


@kernel
def relative_errors(info, p_N, p_E, out):
    """Write the standard errors of ln t_E, ln |pi_E|, ln theta_E and ln M, infinite where there is none.

    Parameters
    ----------
    info : ndarray, shape (14, 14)
        Fisher matrix; a parameter with nothing on the diagonal is left out.
    p_N, p_E : float
        Parallax vector.
    out : ndarray, shape (4,)
        Written.

    Returns
    -------
    bool
        False if the matrix cannot be inverted (then all four are infinite).

    Notes
    -----
    M = theta_E / (kappa pi_E), so ln M has the gradient of ln theta_E less that of ln pi_E.
    """
    n = info.shape[0]
    out[:] = np.inf
    keep = np.empty(n, dtype=np.int64)
    m = 0
    for i in range(n):
        if not (0.0 <= info[i, i] < np.inf):
            return False
        if info[i, i] > 0.0:
            keep[m] = i
            m += 1
    L = np.zeros((m, m))
    for i in range(m):
        for j in range(i + 1):
            value = info[keep[i], keep[j]] / math.sqrt(info[keep[i], keep[i]] * info[keep[j], keep[j]])
            for k in range(j):
                value -= L[i, k] * L[j, k]
            if i > j:
                L[i, j] = value / L[j, j]
            elif value < _SINGULAR:
                return False
            else:
                L[i, i] = math.sqrt(value)
    size2 = p_N * p_N + p_E * p_E
    y = np.zeros((3, m))
    has = np.zeros(4)  # t_E, pi_EN, pi_EE, theta_E
    for i in range(m):
        scale = 1.0 / math.sqrt(info[keep[i], keep[i]])
        if keep[i] == 2:
            y[0, i] = scale
            has[0] = 1.0
        elif keep[i] == 3 or keep[i] == 4:
            y[1, i] = scale * (p_N if keep[i] == 3 else p_E) / size2 if size2 > 0.0 else 0.0
            has[keep[i] - 2] = 1.0
        elif keep[i] == 7:
            y[2, i] = scale
            has[3] = 1.0
        for r in range(3):
            for k in range(i):
                y[r, i] -= L[i, k] * y[r, k]
            y[r, i] /= L[i, i]
    mass = 0.0
    errors = np.zeros(3)
    for i in range(m):
        mass += (y[2, i] - y[1, i]) ** 2
        for r in range(3):
            errors[r] += y[r, i] * y[r, i]
    parallax = size2 > 0.0 and has[1] > 0.0 and has[2] > 0.0
    if has[0] > 0.0:
        out[0] = math.sqrt(errors[0])
    if parallax:
        out[1] = math.sqrt(errors[1])
    if has[3] > 0.0:
        out[2] = math.sqrt(errors[2])
    if parallax and has[3] > 0.0:
        out[3] = math.sqrt(mass)
    return True


@kernel
def events_errors(
    path, earth, source_flux, baseline, times, sun_N, sun_E, noise,
    theta_E, q, mag, places, place_N, place_E, place_noise, kind, limits, priors, out, used,
):  # fmt: skip
    """Write the errors of many events, from their light curves and from their astrometry with them.

    Parameters
    ----------
    path : ndarray, shape (n, 5)
    earth : ndarray, shape (n, 4)
    source_flux, baseline : ndarray, shape (n,)
    times, sun_N, sun_E : ndarray, shape (k,)
        Photometric epochs, common to all events.
    noise : ndarray
    theta_E, q, mag : ndarray, shape (n,)
    places, place_N, place_E : ndarray, shape (n, m)
        Astrometric epochs of each event; m may be 0.
    place_noise, kind, limits : ndarray
    priors : ndarray, shape (2,)
        1/sigma^2 known beforehand of the source's parallax [1/mas^2] and of the blend over source flux.
    out : ndarray, shape (n, 5)
        sigma of ln t_E, ln pi_E, ln theta_E, ln M, and of ln pi_E from the light curve alone.
    used : ndarray of int, shape (n, 3)
        Photometric epochs within the limits; astrometric ones that measure something, and all that were taken.
    """
    alone = np.empty(4)
    joint = np.empty(4)
    for n in range(path.shape[0]):
        info = np.zeros((PARAMETERS, PARAMETERS))
        p_N, p_E = path[n, 3], path[n, 4]
        used[n, 0] = add_photometry(path[n], earth[n], source_flux[n], baseline[n], times, sun_N, sun_E, noise, info)
        relative_errors(info, p_N, p_E, alone)
        used[n, 1], used[n, 2] = add_astrometry(
            path[n], earth[n], theta_E[n], q[n], mag[n], places[n], place_N[n], place_E[n], place_noise, kind, limits,
            info,
        )  # fmt: skip
        if used[n, 1] > 0 and kind[0] == CENTROID:
            info[12, 12] += priors[0]
            info[13, 13] += priors[1]
        # too little astrometry spoils the joint matrix and leaves what the light curve says
        whole = used[n, 1] > 0 and relative_errors(info, p_N, p_E, joint)
        for i in range(4):
            out[n, i] = joint[i] if whole else alone[i]
        out[n, 4] = alone[1]
