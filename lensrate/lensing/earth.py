"""Earth's yearly motion as a lens sees it: annual parallax, and the way between heliocentric and geocentric events.

Vectors on the sky are pairs (North, East). Separations are lens minus source. A geocentric event is the straight line
that an observer who kept Earth's velocity of the epoch t_0par would see (Gould 2004, ApJ 606, 319).

Epochs are MJD. The scale is TDB, but UTC or heliocentric dates may be given as they are: one or eight minutes move
Earth by less than 1e-4 au.
"""

from functools import lru_cache

import astropy.units as u
import erfa
import numpy as np

from ..errors import InputError
from ..galaxy.frames import sky_angle
from ..units import DAYS_PER_YEAR, check_range, strip

__all__ = [
    "EPOCHS",
    "earth_offset",
    "earth_on_sky",
    "earth_velocity",
    "from_north_east",
    "motion_to_geocentric",
    "motion_to_heliocentric",
    "parallax_offset",
    "path_to_geocentric",
    "path_to_heliocentric",
    "sky_angle",
    "sun_angle",
    "to_geocentric",
    "to_heliocentric",
    "to_north_east",
]

_MJD_ZERO = 2400000.5
#: 1900 to 2100, the span of the ephemeris [MJD]
EPOCHS = _FIRST, _LAST = 15020.0, 88069.0
_BLOCK = 256  # d, one day between nodes


def earth_on_sky(mjd, ra, dec):
    """Return Earth's heliocentric place and velocity, projected on the sky; arrays in internal form.

    Parameters
    ----------
    mjd : float or ndarray
        Epochs [MJD], 1900 to 2100; not checked.
    ra, dec : float or ndarray
        Target, ICRS [rad]; the shapes broadcast.

    Returns
    -------
    x_N, x_E, v_N, v_E : ndarray
        [au, au, au/day, au/day], of the broadcast shape.

    Notes
    -----
    Heliocentric ephemeris of `erfa.epv00` (Bretagnon & Francou 1988, A&A 202, 309, simplified), good to 1e-7 au, with
    cubics between days that follow it to 1e-9 au.
    """
    (x, y, z), (v_x, v_y, v_z) = _heliocentric(mjd)
    ca, sa, cd, sd = np.cos(ra), np.sin(ra), np.cos(dec), np.sin(dec)
    return (
        cd * z - sd * (ca * x + sa * y),
        ca * y - sa * x,
        cd * v_z - sd * (ca * v_x + sa * v_y),
        ca * v_y - sa * v_x,
    )


def earth_offset(mjd, ra, dec):
    """Return Earth's place relative to the Sun, projected on the sky.

    Parameters
    ----------
    mjd : float, ndarray or Time
        Epochs [MJD], 1900 to 2100.
    ra, dec : Quantity
        Target, ICRS; all shapes broadcast.

    Returns
    -------
    N, E : Quantity [au]

    Raises
    ------
    InputError
        No unit, |dec| > 90 deg, or an epoch outside the ephemeris.
    """
    x_N, x_E, _, _ = earth_on_sky(_epoch("mjd", mjd), *_target(ra, dec))
    return x_N << u.au, x_E << u.au


def earth_velocity(mjd, ra, dec):
    """Return Earth's velocity relative to the Sun, projected on the sky.

    Parameters
    ----------
    mjd : float, ndarray or Time
        Epochs [MJD], 1900 to 2100.
    ra, dec : Quantity
        Target, ICRS; all shapes broadcast.

    Returns
    -------
    N, E : Quantity [au/yr]
        In this unit, times a relative parallax in mas it is a proper motion in mas/yr.

    Raises
    ------
    InputError
        As `earth_offset`.
    """
    _, _, v_N, v_E = earth_on_sky(_epoch("mjd", mjd), *_target(ra, dec))
    return v_N * DAYS_PER_YEAR << u.au / u.yr, v_E * DAYS_PER_YEAR << u.au / u.yr


def sun_angle(mjd, ra, dec):
    """Return the angle between the Sun and a target as seen from Earth.

    Parameters
    ----------
    mjd : float, ndarray or Time
        Epochs [MJD], 1900 to 2100.
    ra, dec : Quantity
        Target, ICRS; all shapes broadcast.

    Returns
    -------
    Quantity [deg]

    Raises
    ------
    InputError
        As `earth_offset`.
    """
    (x, y, z), _ = _heliocentric(_epoch("mjd", mjd))
    a, d = _target(ra, dec)
    toward = np.cos(d) * (np.cos(a) * x + np.sin(a) * y) + np.sin(d) * z
    return np.degrees(np.arccos(np.clip(-toward / np.sqrt(x * x + y * y + z * z), -1.0, 1.0))) << u.deg


def parallax_offset(mjd, t_0par, ra, dec):
    """Return the Sun's apparent displacement, less its place and linear motion at t_0par.

    Parameters
    ----------
    mjd : float, ndarray or Time
        Epochs [MJD], 1900 to 2100.
    t_0par : float, ndarray or Time
        Reference epoch [MJD].
    ra, dec : Quantity
        Target, ICRS; all shapes broadcast.

    Returns
    -------
    N, E : Quantity [au]
        With ds = (N, E) the separation has the components tau = (t - t_0)/t_E + pi_EN ds_N + pi_EE ds_E along the
        motion and beta = u_0 + pi_EN ds_E - pi_EE ds_N to its left on the sky (from North through East), in which
        u_0 > 0 means that the lens has the source to its right (Gould 2004, ApJ 606, 319).

    Raises
    ------
    InputError
        As `earth_offset`.
    """
    t, t_ref, target = _epoch("mjd", mjd), _epoch("t_0par", t_0par), _target(ra, dec)
    x_N, x_E, _, _ = earth_on_sky(t, *target)
    r_N, r_E, v_N, v_E = earth_on_sky(t_ref, *target)
    return r_N + v_N * (t - t_ref) - x_N << u.au, r_E + v_E * (t - t_ref) - x_E << u.au


def motion_to_geocentric(mu_N, mu_E, pi_rel, t_0par, ra, dec):
    """Turn a heliocentric relative proper motion into the geocentric one at t_0par.

    Parameters
    ----------
    mu_N, mu_E : Quantity
        Heliocentric proper motion, lens minus source.
    pi_rel : Quantity
        Relative parallax.
    t_0par : float, ndarray or Time
        Reference epoch [MJD].
    ra, dec : Quantity
        Target, ICRS; all shapes broadcast.

    Returns
    -------
    mu_N, mu_E : Quantity [mas/yr]
        mu_geo = mu_hel - v_Earth pi_rel / au.

    Raises
    ------
    InputError
        No unit, or as `earth_offset`.
    """
    return _move(mu_N, mu_E, pi_rel, t_0par, ra, dec, -1.0)


def motion_to_heliocentric(mu_N, mu_E, pi_rel, t_0par, ra, dec):
    """Turn a geocentric relative proper motion at t_0par into the heliocentric one; see `motion_to_geocentric`."""
    return _move(mu_N, mu_E, pi_rel, t_0par, ra, dec, 1.0)


def to_geocentric(t_E, pi_EN, pi_EE, t_0par, ra, dec):
    """Turn heliocentric timescales and microlens parallaxes into geocentric ones at t_0par.

    Parameters
    ----------
    t_E : Quantity
        Heliocentric Einstein timescale.
    pi_EN, pi_EE : float or ndarray
        Microlens parallax along the heliocentric relative motion of the lens.
    t_0par : float, ndarray or Time
        Reference epoch [MJD].
    ra, dec : Quantity
        Target, ICRS; all shapes broadcast.

    Returns
    -------
    t_E : Quantity [day]
        Geocentric; infinite where the lens keeps pace with the source.
    pi_EN, pi_EE : ndarray
        Same size as given, along the geocentric motion. Where both are 0 nothing changes.

    Raises
    ------
    InputError
        No unit, t_E not above zero, or as `earth_offset`.

    See Also
    --------
    path_to_geocentric : with t_0 and u_0.

    Notes
    -----
    The motion per Einstein radius is w = pi_E_vec/(|pi_E| t_E), and w_geo = w_hel - |pi_E| v_Earth / au: exact, and
    theta_E is not needed (Gould 2004, ApJ 606, 319; Skowron+ 2011, ApJ 738, 87).
    """
    return _turn(t_E, pi_EN, pi_EE, t_0par, ra, dec, -1.0)


def to_heliocentric(t_E, pi_EN, pi_EE, t_0par, ra, dec):
    """Turn geocentric timescales and microlens parallaxes at t_0par into heliocentric ones; see `to_geocentric`."""
    return _turn(t_E, pi_EN, pi_EE, t_0par, ra, dec, 1.0)


def path_to_geocentric(t_0, u_0, t_E, pi_EN, pi_EE, t_0par, ra, dec):
    """Turn the straight path of an event seen from the Sun into the one of the geocentric frame at t_0par.

    Parameters
    ----------
    t_0 : float, ndarray or Time
        Time of the closest approach seen from the Sun [MJD].
    u_0 : float or ndarray
        Signed: above 0 the lens has the source to its right. Where the parallax is 0 the sign is kept.
    t_E : Quantity
        Heliocentric Einstein timescale.
    pi_EN, pi_EE : float or ndarray
        Microlens parallax along the heliocentric motion.
    t_0par : float, ndarray or Time
        Reference epoch [MJD].
    ra, dec : Quantity
        Target, ICRS; all shapes broadcast.

    Returns
    -------
    t_0, u_0, t_E, pi_EN, pi_EE
        As given, geocentric. t_0 and u_0 are those of the straight line; the real closest approach differs from
        them unless it is near t_0par.

    Raises
    ------
    InputError
        As `to_geocentric`.

    Notes
    -----
    Seen from Earth, lens minus source is u_hel(t) + |pi_E| s(t), with s the Sun's place relative to Earth in au. The
    geocentric line is u_hel(t) + |pi_E| [s(t_0par) + s'(t_0par) (t - t_0par)]; what it leaves is `parallax_offset`, so
    both frames describe one path, exactly.
    """
    return _shift_path(t_0, u_0, t_E, pi_EN, pi_EE, t_0par, ra, dec, -1.0)


def path_to_heliocentric(t_0, u_0, t_E, pi_EN, pi_EE, t_0par, ra, dec):
    """Turn the geocentric straight path at t_0par into the one seen from the Sun; see `path_to_geocentric`."""
    return _shift_path(t_0, u_0, t_E, pi_EN, pi_EE, t_0par, ra, dec, 1.0)


def to_north_east(v_l, v_b, l, b):
    """Turn sky vectors along Galactic l and b into North and East components.

    Parameters
    ----------
    v_l, v_b : Quantity or ndarray
        Components along l (with cos b) and b, of any kind.
    l, b : Quantity
        Where on the sky; all shapes broadcast.

    Returns
    -------
    v_N, v_E : as given

    Raises
    ------
    InputError
        As `lensrate.galaxy.frames.sky_angle`.
    """
    angle = sky_angle(l, b).to_value(u.rad)
    c, s = np.cos(angle), np.sin(angle)
    return c * v_b - s * v_l, s * v_b + c * v_l


def from_north_east(v_N, v_E, l, b):
    """Turn North and East components into those along Galactic l and b; the inverse of `to_north_east`."""
    angle = sky_angle(l, b).to_value(u.rad)
    c, s = np.cos(angle), np.sin(angle)
    return c * v_E - s * v_N, s * v_E + c * v_N


@lru_cache(maxsize=512)
def _nodes(block):
    """Place [au] and velocity [au/d] at the days of one block, its end included: (2, 3, 257)."""
    # the last block reaches past the span; its nodes out there are never used
    days = np.minimum(_FIRST + block * _BLOCK + np.arange(_BLOCK + 1.0), _LAST)
    helio, _ = erfa.epv00(_MJD_ZERO, days)
    return np.array([helio["p"].T, helio["v"].T])


def _heliocentric(mjd):
    """Place [au] and velocity [au/d] of Earth, each (3, ...): cubics through the nodes' places and velocities."""
    day = np.asarray(mjd, dtype=float) - _FIRST
    block = np.floor_divide(day, _BLOCK).astype(int)
    needed, row = np.unique(block, return_inverse=True)
    table = np.array([_nodes(int(b)) for b in needed]).reshape(-1, 2, 3, _BLOCK + 1)
    day = day - block * _BLOCK
    i = np.minimum(day.astype(int), _BLOCK - 1)
    t = day - i
    row = row.reshape(block.shape)
    (x0, v0), (x1, v1) = (np.moveaxis(table[row, :, :, i + k], (-2, -1), (0, 1)) for k in (0, 1))
    rise = x1 - x0
    # x0 + t v0 + t^2 (3 rise - 2 v0 - v1) + t^3 (v0 + v1 - 2 rise)
    a, b = 3.0 * rise - 2.0 * v0 - v1, v0 + v1 - 2.0 * rise
    return x0 + t * (v0 + t * (a + t * b)), v0 + t * (2.0 * a + 3.0 * t * b)


def _epoch(name, value, low=_FIRST, high=_LAST):
    if hasattr(value, "mjd"):
        value = value.mjd
    if isinstance(value, u.Quantity):
        raise InputError(f"{name}: a Quantity given, epochs are plain MJD numbers or an astropy Time")
    array = _numbers(name, value)
    check_range(name, array, "MJD", low, high)
    return array


def _numbers(name, value):
    try:
        array = np.asarray(u.Quantity(value).to_value(u.one), dtype=float)
    except (u.UnitConversionError, TypeError, ValueError):
        raise InputError(f"{name}: {value!r} is not a pure number") from None
    check_range(name, array, "")
    return array


def _target(ra, dec):
    return np.radians(strip("ra", ra, u.deg)), np.radians(strip("dec", dec, u.deg, low=-90.0, high=90.0))


def _timescale(t_E):
    days = np.asarray(strip("t_E", t_E, u.day, low=0.0))
    if np.any(days == 0.0):
        raise InputError("t_E: 0 d given, must be above 0")
    return days


def _move(mu_N, mu_E, pi_rel, t_0par, ra, dec, sign):
    v_N, v_E = earth_velocity(t_0par, ra, dec)
    parallax = strip("pi_rel", pi_rel, u.mas, low=0.0)
    unit = u.mas / u.yr
    return (
        strip("mu_N", mu_N, unit) + sign * parallax * v_N.value << unit,
        strip("mu_E", mu_E, unit) + sign * parallax * v_E.value << unit,
    )


def _turn(t_E, pi_EN, pi_EE, t_0par, ra, dec, sign):
    days, north, east = _timescale(t_E), _numbers("pi_EN", pi_EN), _numbers("pi_EE", pi_EE)
    _, _, v_N, v_E = earth_on_sky(_epoch("t_0par", t_0par), *_target(ra, dec))
    size = np.hypot(north, east)
    still = size == 0.0
    safe = np.where(still, 1.0, size)
    w_N, w_E = north / (safe * days) + sign * size * v_N, east / (safe * days) + sign * size * v_E
    w = np.where(still, 1.0 / days, np.hypot(w_N, w_E))
    with np.errstate(divide="ignore", invalid="ignore"):
        return (1.0 / w)[()] * u.day, (size * w_N / w)[()], (size * w_E / w)[()]


def _shift_path(t_0, u_0, t_E, pi_EN, pi_EE, t_0par, ra, dec, sign):
    days, north, east = _timescale(t_E), _numbers("pi_EN", pi_EN), _numbers("pi_EE", pi_EE)
    start, impact, t_ref = _epoch("t_0", t_0, None, None), _numbers("u_0", u_0), _epoch("t_0par", t_0par)
    x_N, x_E, _, _ = earth_on_sky(t_ref, *_target(ra, dec))
    size = np.hypot(north, east)
    still = size == 0.0
    safe = np.where(still, 1.0, size)
    e_N, e_E = np.where(still, 1.0, north / safe), np.where(still, 0.0, east / safe)
    along = (t_ref - start) / days
    p_N = along * e_N - impact * e_E + sign * size * x_N
    p_E = along * e_E + impact * e_N + sign * size * x_E
    new, new_N, new_E = _turn(t_E, pi_EN, pi_EE, t_ref, ra, dec, sign)
    f_N, f_E = np.where(still, 1.0, new_N / safe), np.where(still, 0.0, new_E / safe)
    t_new = t_ref - (p_N * f_N + p_E * f_E) * new.value
    return t_new[()], (p_E * f_N - p_N * f_E)[()], new, new_N, new_E
