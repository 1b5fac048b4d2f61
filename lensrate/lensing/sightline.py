"""One sightline, end to end: the function `sightline`; what it returns is in sightline_result.py."""

import astropy.units as u
import numpy as np

from ..errors import InputError, kind_of
from ..scenario import Scenario, resolve
from ..units import check_range, strip
from . import rates
from .forecast import Lens, integrate
from .quadrature import Numerics
from .sightline_result import Sightline

__all__ = ["Lens", "Sightline", "sightline"]


def sightline(l, b=None, scenario="default", *, sources=None, extinction=None, kicks=None, t_E_range=None):
    """Forecast optical depth, event rate and timescales toward one direction.

    Parameters
    ----------
    l, b : Quantity
        Galactic longitude and latitude; or one SkyCoord instead of both.
    scenario : Scenario or str
        Every assumption; a name or file is read.
    sources, extinction, kicks : optional
        Shorthand for ``scenario.replace``: source rule, {band: A in mag or Quantity}, kick law of neutron stars.
    t_E_range : (Quantity, Quantity), optional
        Limit every reported mean, median, rate and share to these timescales; optical depths too, by the share of
        t_E-weighted events.

    Returns
    -------
    Sightline

    Raises
    ------
    InputError
        Argument without unit, out of range, or unknown name.
    ConvergenceError
        No star passes the source rule, or a rate came out negative or not finite.

    Notes
    -----
    Optical depth and rate by a product rule in source and lens distance, Gamma = 2 u_0 int n_L D_L^2 <theta_E mu_rel>;
    distributions from the mass-free rate density; mean t_E = (2/pi) tau/Gamma, exact for u_0 < 1. Two threads at
    most share the integrals, one where NUMBA_NUM_THREADS is 1; the numbers are the same.
    """
    l, b = _direction(l, b)
    l_rad, b_rad = np.radians(l), np.radians(b)
    if not isinstance(scenario, Scenario):
        scenario = Scenario.read(scenario)
    if extinction is not None:
        kind_of("extinction", extinction, dict, "a table of bands, for example {'I': 1.25},")
        extinction = {
            k: strip(f"extinction.{k}", a, u.mag, shape=()) if isinstance(a, u.Quantity) else a
            for k, a in extinction.items()
        }
    changes = {"sources": sources, "extinction": extinction, "kicks": kicks}
    changes = {k: v for k, v in changes.items() if v is not None}
    if changes:
        scenario = scenario.replace(**changes)
    limits = _t_E_range(t_E_range)
    model = resolve(scenario)
    line = model.galaxy.sightline(l_rad, b_rad)
    toward = model.sources.toward(l_rad, b_rad, model.galaxy)
    integrals = integrate(rates.prepare(model, line, toward, Numerics(**scenario.numerics)))
    return Sightline.of(l * u.deg, b * u.deg, scenario, model, integrals, limits)


def _direction(l, b):
    if hasattr(l, "galactic") and b is None:
        l, b = l.galactic.l, l.galactic.b
    elif b is None:
        raise InputError("b: missing; give l and b as Quantities, or one SkyCoord")
    l, b = strip("l", l, u.deg, shape=()), strip("b", b, u.deg, shape=())
    check_range("b", np.array(b), "deg", -90.0, 90.0)
    return l, b


def _t_E_range(given):
    if given is None:
        return None
    try:
        low, high = given
    except (TypeError, ValueError):
        raise InputError(
            f"t_E_range: {given!r} given, two timescales are needed, for example (0.5, 300) * u.day"
        ) from None
    low, high = (strip("t_E_range", q, u.day, low=0.0, shape=()) for q in (low, high))
    if not low < high:
        raise InputError(f"t_E_range: {low:g} to {high:g} d given, the first must be below the second")
    return low, high
