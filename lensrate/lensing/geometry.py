"""One lens and one source: Einstein radius, crossing time, relative parallax, magnification, image shift."""

import astropy.units as u
import numpy as np

from ..errors import InputError
from ..units import DAYS_PER_YEAR, KAPPA, check_range, strip

__all__ = ["centroid_shift", "einstein_radius", "magnification", "mass_from", "pi_E", "pi_rel", "t_E", "theta_E"]


def pi_rel(D_L, D_S):
    """Return the relative parallax of lens and source, au (1/D_L - 1/D_S).

    Parameters
    ----------
    D_L, D_S : Quantity, shapes that broadcast
        Distances of lens and source.

    Returns
    -------
    Quantity [mas]

    Raises
    ------
    InputError
        No unit, not above zero, or a lens that is not in front of its source.
    """
    near, far = strip("D_L", D_L, u.kpc), strip("D_S", D_S, u.kpc)
    _above_zero("D_L", near, "kpc")
    if np.any(np.asarray(near) >= np.asarray(far)):
        raise InputError("D_L: the lens must be nearer than the source, D_L < D_S")
    # au / kpc is one mas
    return (1.0 / near - 1.0 / far) * u.mas


def theta_E(mass, pi_rel):
    """Return the angular Einstein radius, sqrt(kappa M pi_rel).

    Parameters
    ----------
    mass : Quantity
        Lens mass.
    pi_rel : Quantity
        Relative parallax; the shapes broadcast.

    Returns
    -------
    Quantity [mas]

    Raises
    ------
    InputError
        No unit or below zero.

    See Also
    --------
    mass_from

    Notes
    -----
    kappa = 4 G / (c^2 au) = 8.144 mas/Msun (Gould 2000, ApJ 542, 785).
    """
    return np.sqrt(KAPPA * strip("mass", mass, u.Msun, low=0.0) * strip("pi_rel", pi_rel, u.mas, low=0.0)) * u.mas


def einstein_radius(mass, D_L, D_S):
    """Return the Einstein radius in the lens plane, D_L theta_E.

    Parameters
    ----------
    mass : Quantity
        Lens mass.
    D_L, D_S : Quantity
        Distances of lens and source; the shapes broadcast.

    Returns
    -------
    Quantity [au]

    Raises
    ------
    InputError
        As `theta_E` and `pi_rel`.
    """
    # mas times kpc is one au
    return theta_E(mass, pi_rel(D_L, D_S)).value * strip("D_L", D_L, u.kpc) * u.au


def t_E(theta_E, mu_rel):
    """Return the time in which the source crosses one Einstein radius.

    Parameters
    ----------
    theta_E : Quantity
        Angular Einstein radius.
    mu_rel : Quantity
        Relative proper motion of lens and source, its size; the shapes broadcast.

    Returns
    -------
    Quantity [day]

    Raises
    ------
    InputError
        No unit, below zero, or no motion at all.
    """
    radius, motion = strip("theta_E", theta_E, u.mas, low=0.0), strip("mu_rel", mu_rel, u.mas / u.yr)
    _above_zero("mu_rel", motion, "mas/yr")
    return DAYS_PER_YEAR * radius / motion * u.day


def pi_E(mass, pi_rel):
    """Return the microlens parallax, pi_rel / theta_E.

    Parameters
    ----------
    mass : Quantity
        Lens mass.
    pi_rel : Quantity
        Relative parallax; the shapes broadcast.

    Returns
    -------
    Quantity
        Pure number.

    Raises
    ------
    InputError
        No unit, mass not above zero, or parallax below zero.
    """
    m = strip("mass", mass, u.Msun)
    _above_zero("mass", m, "Msun")
    return np.sqrt(strip("pi_rel", pi_rel, u.mas, low=0.0) / (KAPPA * m)) << u.one


def mass_from(theta_E, pi_E):
    """Return the lens mass that an Einstein radius and a microlens parallax state together.

    Parameters
    ----------
    theta_E : Quantity
        Angular Einstein radius.
    pi_E : Quantity or float
        Microlens parallax, its size; the shapes broadcast.

    Returns
    -------
    Quantity [Msun]

    Raises
    ------
    InputError
        No unit, below zero, or no parallax at all.

    See Also
    --------
    theta_E, pi_E

    Notes
    -----
    M = theta_E / (kappa pi_E) (Gould 2000, ApJ 542, 785).
    """
    parallax = _number("pi_E", pi_E)
    _above_zero("pi_E", parallax, "")
    return strip("theta_E", theta_E, u.mas, low=0.0) / (KAPPA * parallax) * u.Msun


def magnification(separation):
    """Return the magnification of a point source by a point lens.

    Parameters
    ----------
    separation : Quantity or float
        Lens-source separation u in Einstein radii; any shape.

    Returns
    -------
    float or ndarray
        (u^2 + 2) / (u sqrt(u^2 + 4)); infinite at u = 0.

    Raises
    ------
    InputError
        Below zero or not finite.

    Notes
    -----
    Paczynski 1986, ApJ 304, 1.
    """
    s = _number("separation", separation)
    with np.errstate(divide="ignore"):
        return np.divide(s * s + 2.0, s * np.sqrt(s * s + 4.0))[()]


def centroid_shift(separation, theta_E):
    """Return how far the light's centroid is from the unlensed source, for a lens without light of its own.

    Parameters
    ----------
    separation : Quantity or float
        Lens-source separation u in Einstein radii.
    theta_E : Quantity
        Angular Einstein radius; the shapes broadcast.

    Returns
    -------
    Quantity [mas]
        u theta_E / (u^2 + 2), at most theta_E / sqrt(8), away from the lens.

    Raises
    ------
    InputError
        No unit, below zero or not finite.

    Notes
    -----
    Walker 1995, ApJ 453, 37; Dominik & Sahu 2000, ApJ 534, 213.
    """
    s = _number("separation", separation)
    return s / (s * s + 2.0) * strip("theta_E", theta_E, u.mas, low=0.0) * u.mas


def _number(name, value):
    """Take a pure number, zero or more, to float64."""
    quantity = value if isinstance(value, u.Quantity) else np.asarray(value, dtype=float) * u.one
    return strip(name, quantity, u.one, low=0.0)


def _above_zero(name, array, unit):
    check_range(name, np.asarray(array), unit, low=0.0)
    if np.any(np.asarray(array) == 0.0):
        raise InputError(f"{name}: 0 {unit} given, must be above 0")
