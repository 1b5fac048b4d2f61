"""Internal units and the only conversions between them and astropy's quantities.

length kpc, velocity km/s, mass Msun, orbit time Myr, event time day, small angle mas,
proper motion mas/yr, magnitudes mag, sky position rad. Constants are floats in these units;
kernels get them as arguments.
"""

import astropy.constants as const
import astropy.units as u
import numpy as np

from .errors import InputError

__all__ = [
    "DAYS_PER_YEAR",
    "FOUR_G_C2",
    "KAPPA",
    "KMS_PER_MASYR_KPC",
    "KPC_PER_MYR",
    "MAS",
    "RE2_PER_M_D",
    "G",
    "strip",
]

#: gravitational constant [kpc (km/s)^2 / Msun], from the nominal solar mass parameter
G = float((const.GM_sun / u.Msun).to_value(u.kpc * (u.km / u.s) ** 2 / u.Msun))
#: 4 G / (c^2 au) [mas / Msun]
KAPPA = float((4 * const.GM_sun / const.c**2 / const.au).to_value(u.one) * u.rad.to(u.mas))
#: 4 G / c^2 [kpc / Msun]
FOUR_G_C2 = float((4 * const.GM_sun / const.c**2).to_value(u.kpc))
#: velocity across the line of sight per proper motion and distance [km/s per (mas/yr kpc)]
KMS_PER_MASYR_KPC = float((u.mas / u.yr * u.kpc).to(u.km / u.s, equivalencies=u.dimensionless_angles()))
#: [kpc/Myr per km/s]
KPC_PER_MYR = float((u.km / u.s).to(u.kpc / u.Myr))
#: one milliarcsecond [rad]
MAS = float(u.mas.to(u.rad))
DAYS_PER_YEAR = 365.25
#: squared Einstein radius of a lens per solar mass and kpc of D_L (1 - D_L / D_S) [au^2]
RE2_PER_M_D = float((4 * const.GM_sun / const.c**2 * u.kpc).to_value(u.au**2))


def strip(name, value, unit, *, low=None, high=None, shape=None):
    """Take a Quantity to a float64 array in `unit`, checked.

    Parameters
    ----------
    name : str
        Argument name, for messages.
    value : Quantity
        Bare numbers are refused, since km/s and mas/yr would meet one day.
    unit : Unit or str
        Wanted unit.
    low, high : float, optional
        Allowed closed range, in `unit`.
    shape : tuple, optional
        Demanded shape; ``()`` for a scalar.

    Returns
    -------
    ndarray or float
        float64; a Python float where the input is scalar.

    Raises
    ------
    InputError
        No unit, the wrong kind of unit, not finite, out of range, or of another shape.
    """
    unit = u.Unit(unit)
    if isinstance(value, (list, tuple)) and value and all(isinstance(v, u.Quantity) for v in value):
        try:
            value = u.Quantity(value)
        except u.UnitConversionError:
            raise InputError(f"{name}: its elements have units that do not go together") from None
    if not isinstance(value, u.Quantity):
        raise InputError(f"{name}: {value!r} has no unit; give an astropy Quantity, for example {name} = 1 * u.{unit}")
    try:
        array = np.ascontiguousarray(value.to_value(unit), dtype=np.float64)
    except u.UnitConversionError:
        raise InputError(f"{name}: unit '{value.unit}' cannot be converted to '{unit}'") from None
    except (TypeError, ValueError):
        raise InputError(f"{name}: {value!r} is not a real number") from None
    if value.isscalar:
        array = array.reshape(())
    if shape is not None and array.shape != shape:
        raise InputError(f"{name}: shape {array.shape} given, {shape or 'a scalar'} needed")
    check_range(name, array, unit, low, high)
    return float(array) if array.ndim == 0 else array


def check_range(name, array, unit, low=None, high=None):
    """Raise unless every element is finite and inside [low, high].

    Parameters
    ----------
    name : str
        Argument name, for messages.
    array : ndarray
        Values.
    unit : Unit or str
        For the message.
    low, high : float, optional
        Allowed closed range.

    Raises
    ------
    InputError
        Naming the first offending value.
    """
    array = np.asarray(array)
    for bad, why in (
        (~np.isfinite(array), "a finite number"),
        (array < low if low is not None else None, f"at least {low:g} {unit}" if low is not None else ""),
        (array > high if high is not None else None, f"at most {high:g} {unit}" if high is not None else ""),
    ):
        if bad is not None and np.any(bad):
            raise InputError(f"{name}: {np.ravel(array)[np.argmax(np.ravel(bad))]:g} {unit} given, must be {why}")
