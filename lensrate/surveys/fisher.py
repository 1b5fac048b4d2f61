"""How well lens masses would be measured: expected errors from light curves and astrometric follow-up together.

The errors are those of the Fisher matrix: what the best unbiased fit reaches where it is well constrained, with one
solution. Degenerate solutions, finite sources, binaries and red noise are not in it.
"""

from dataclasses import dataclass, field

import astropy.units as u
import numpy as np

from .._version import __version__
from ..errors import InputError, one_of
from ..kernels import fisher as kernels
from ..lensing import earth
from ..parallel import run_map
from ..units import DAYS_PER_YEAR, check_range, strip

__all__ = ["FollowUp", "MassErrors", "mass_errors", "measured", "measured_against_hours"]

_IMAGE = "image_source_mag"  # needed with a facility only
_COLUMNS = {  # name: unit, least, largest
    "t_0": ("d", *earth.EPOCHS),
    "u_0": ("", -100.0, 100.0),
    "t_E": ("d", 1e-6, 1e6),
    "pi_EN": ("", -1e4, 1e4),
    "pi_EE": ("", -1e4, 1e4),
    "theta_E": ("mas", 0.0, 1e6),
    "source_mag": ("mag", -30.0, 60.0),
    _IMAGE: ("mag", -30.0, 60.0),
}
_BLENDS = ("blend_mag", "image_blend_mag")
_PLACES = ("lens", "source")  # in the order of the kernel's AT_LENS, AT_SOURCE
_KNOWN = 1e-9  # a flux ratio stated without error
_USELESS = 1e3  # a larger relative error says nothing
_CHUNK = 256
_ORDERS = ("sigma_M", "t_E")


@dataclass(frozen=True, eq=False)
class MassErrors:
    """Expected relative errors of n events; infinite where there is no measurement.

    Attributes
    ----------
    sigma_t_E, sigma_pi_E, sigma_theta_E, sigma_M : ndarray, shape (n,)
        Standard error over value, joint fit; t_E is geocentric at t_0.
    sigma_pi_E_photometry : ndarray, shape (n,)
        Of pi_E from the light curve alone.
    t_E : ndarray, shape (n,)
        As given [d].
    photometric_epochs, epochs : ndarray of int, shape (n,)
        Measurements in the light curve and on the sky.
    hours : ndarray, shape (n,)
        Telescope time of the facility [h]: epochs at which the event is alerted, away from the Sun and neither too
        bright nor too faint, whether or not the images are then told apart.
    meta : dict
        How this was made.
    """

    sigma_t_E: np.ndarray
    sigma_pi_E: np.ndarray
    sigma_theta_E: np.ndarray
    sigma_M: np.ndarray
    sigma_pi_E_photometry: np.ndarray
    t_E: np.ndarray
    photometric_epochs: np.ndarray
    epochs: np.ndarray
    hours: np.ndarray
    meta: dict = field(default_factory=dict, repr=False)

    def to_table(self):
        """Return an astropy QTable with one row an event; `meta` says how it was made."""
        from astropy.table import QTable

        names = [f for f in self.__dataclass_fields__ if f != "meta"]
        table = QTable({name: getattr(self, name) for name in names})
        table["t_E"] = self.t_E * u.day
        table["hours"] = self.hours * u.hour
        table.meta.update(self.meta)
        return table


def mass_errors(
    events, light_curve, facility, position, *, frame="heliocentric", blend_at="lens", source_parallax_error=None,
    jobs=1,
):  # fmt: skip
    """Return the errors with which a plan would measure t_E, pi_E, theta_E and the mass of each event.

    Parameters
    ----------
    events : mapping, table or record of arrays, shape (n,)
        t_0 [MJD] and u_0 (signed) as seen from Earth, in the frame of the epoch t_0; t_E [d], pi_EN, pi_EE, theta_E
        [mas]; source_mag [mag], the source in the light curve's band; image_source_mag [mag], the source in the
        facility's; and optionally blend_mag and image_blend_mag [mag], all other light in the light curve and in the
        facility's images, NaN or infinite for none. Columns may carry units.
    light_curve : LightCurve
    facility : Facility or None
        None for the light curve alone.
    position : SkyCoord or (ra, dec)
        Of all events; Quantities.
    frame : str
        "heliocentric" or "geocentric" (at t_0): of t_E, pi_EN and pi_EE.
    blend_at : str
        Whose place the light of image_blend_mag has: "lens" or "source" (a companion). The blend of the light curve
        has no place.
    source_parallax_error : Quantity, optional
        How well the source's parallax is known beforehand; default not at all.
    jobs : int
        Threads.

    Returns
    -------
    MassErrors

    Raises
    ------
    InputError
        A column is missing, of another shape, not finite or out of range; an unknown word.

    Notes
    -----
    Free in the fit: t_0, u_0, t_E, pi_EN, pi_EE (geocentric at t_0), source and blend flux of the light curve,
    theta_E, the source's place, proper motion and parallax on the sky, and the blend's flux over the source's in the
    images within the facility's `blend_error`. Separation of the centroid from the source u theta_E/(u^2 + 2) for a
    dark lens (Dominik & Sahu 2000, ApJ 534, 213); annual parallax as in Gould (2004, ApJ 606, 319); M =
    theta_E/(kappa pi_E) with the covariance of both.
    """
    one_of("frame", frame, ("heliocentric", "geocentric"))
    one_of("blend_at", blend_at, _PLACES)
    data = _events(events, facility is not None)
    ra, dec = _position(position)
    t_0, t_E, p_N, p_E = (data[name] for name in ("t_0", "t_E", "pi_EN", "pi_EE"))
    if frame == "heliocentric":
        t_E, p_N, p_E = earth.to_geocentric(t_E * u.day, p_N, p_E, t_0, ra * u.rad, dec * u.rad)
        t_E = t_E.to_value(u.day)
    path = np.column_stack([t_0, data["u_0"], t_E, p_N, p_E])
    earth_then = np.column_stack(earth.earth_on_sky(t_0, ra, dec))
    light = 10 ** (-0.4 * data["source_mag"])
    total = light + data["blend_mag"]
    curve = (light_curve.epochs(), *_sun(light_curve.epochs(), ra, dec), light_curve.noise())
    places, *instrument = _instrument(facility, path, ra, dec, blend_at, source_parallax_error)
    at = places, *_sun(np.where(np.isfinite(places), places, t_0[:, None]), ra, dec)
    per_event = (data["theta_E"], data["image_blend_mag"] * 10 ** (0.4 * data["image_source_mag"]),
                 data["image_source_mag"], *at)  # fmt: skip
    out, used = np.empty((t_0.size, 5)), np.empty((t_0.size, 3), dtype=np.int64)

    def run(rows):
        kernels.events_errors(
            path[rows], earth_then[rows], (light / total)[rows], (-2.5 * np.log10(total))[rows], *curve,
            *(x[rows] for x in per_event), *instrument, out[rows], used[rows],
        )  # fmt: skip

    run_map(run, [slice(i, i + _CHUNK) for i in range(0, t_0.size, _CHUNK)], jobs)
    out[~(out < _USELESS)] = np.inf
    hours = facility.hours(used[:, 2]) if facility is not None else np.zeros(t_0.size)
    references = ["Gould 2004, ApJ 606, 319", "Dominik & Sahu 2000, ApJ 534, 213", "Gould 2000, ApJ 542, 785"]
    if facility is not None and facility.reference:
        references.append(f"{facility.name}: {facility.reference}")
    meta = {
        "program": "lensrate",
        "version": __version__,
        "frame": "geocentric at t_0",
        "facility": facility.name if facility else "none",
        "invented_facility": bool(facility and facility.invented),
        "blend_at": blend_at,
        "references": references,
    }
    return MassErrors(*(c.copy() for c in out.T), data["t_E"], used[:, 0].copy(), used[:, 1].copy(), hours, meta)


def measured(errors, classes, weights=None, threshold=0.2):
    """Count the events whose mass would be measured.

    Parameters
    ----------
    errors : MassErrors
    classes : array_like of str, shape (n,)
        Lens class of each event.
    weights : array_like, shape (n,), optional
        Expected number that each event stands for; default one each.
    threshold : float
        Largest sigma(M)/M that counts.

    Returns
    -------
    dict
        Class to {"events", "measured", "share", "standard_error"}, and "all"; the error is that of `measured` from the
        finite number of events, sqrt(sum w^2).

    Raises
    ------
    InputError
        Arguments of different shapes, a weight below zero, or a threshold not above zero.
    """
    classes, weights = _labels(errors, classes, weights)
    if not threshold > 0:
        raise InputError(f"threshold: {threshold} given, must be above 0")
    good = errors.sigma_M <= threshold
    counts = {}
    for name in [*dict.fromkeys(classes.tolist()), "all"]:
        here = (classes == name) | (name == "all")
        events, hits = weights[here].sum(), weights[here & good]
        counts[name] = {
            "events": float(events),
            "measured": float(hits.sum()),
            "share": float(hits.sum() / events) if events > 0 else float("nan"),
            "standard_error": float(np.sqrt((hits**2).sum())),
        }
    return counts


@dataclass(frozen=True, eq=False)
class FollowUp:
    """Masses measured against telescope time, when events are followed one after another in a stated order.

    Attributes
    ----------
    hours : ndarray, shape (n + 1,)
        Cumulative time [h], from 0.
    measured : dict of str to ndarray, shape (n + 1,)
        Cumulative expected number by class, and "all".
    order : str
    threshold : float
    """

    hours: np.ndarray
    measured: dict
    order: str
    threshold: float

    def at(self, hours):
        """Return {class: expected number measured} within `hours`; between two events the curve is straight."""
        return {name: float(np.interp(hours, self.hours, curve)) for name, curve in self.measured.items()}


def measured_against_hours(errors, classes, weights=None, threshold=0.2, order="t_E"):
    """Return how many masses each telescope time buys.

    Parameters
    ----------
    errors : MassErrors
    classes, weights, threshold
        As `measured`.
    order : str or array_like, shape (n,)
        "t_E": longest first, which an observer can know. "sigma_M": smallest expected error first, which needs the
        true parameters: a best case, not a plan. Or numbers, smallest first.

    Returns
    -------
    FollowUp
        Events without an epoch cost nothing and are not in it.

    Raises
    ------
    InputError
        As `measured`; an unknown order.
    """
    classes, weights = _labels(errors, classes, weights)
    if isinstance(order, str):
        key = -errors.t_E if one_of("order", order, _ORDERS) == "t_E" else errors.sigma_M
    else:
        key, order = np.asarray(order, dtype=float), "given"
        if key.shape != weights.shape:
            raise InputError(f"order: shape {key.shape} given, {weights.shape} needed")
    rows = np.argsort(key, kind="stable")
    rows = rows[errors.hours[rows] > 0]
    good = np.where(errors.sigma_M <= threshold, weights, 0.0)[rows]
    names = [*dict.fromkeys(classes.tolist()), "all"]
    curves = {
        name: np.concatenate([[0.0], np.cumsum(np.where((classes[rows] == name) | (name == "all"), good, 0.0))])
        for name in names
    }
    hours = np.concatenate([[0.0], np.cumsum(weights[rows] * errors.hours[rows])])
    return FollowUp(hours, curves, order, float(threshold))


def _events(events, images):
    """Read the columns: name to (n,) floats, the blends as fluxes."""
    data = {name: _column(events, name, *limits) for name, limits in _COLUMNS.items() if images or name != _IMAGE}
    n = data["t_0"].size
    data.setdefault(_IMAGE, np.zeros(n))
    data |= {name: _blend(events, name, n) for name in _BLENDS}
    for name, column in data.items():
        if column.shape != (n,):
            raise InputError(f"events.{name}: shape {column.shape} given, t_0 has {n} rows")
    return data


def _sun(times, ra, dec):
    """Return the Sun's place seen from Earth [au], N and E."""
    x_N, x_E, _, _ = earth.earth_on_sky(times, ra, dec)
    return np.ascontiguousarray(-x_N), np.ascontiguousarray(-x_E)


def _instrument(facility, path, ra, dec, blend_at, source_parallax_error):
    """Return what the kernel takes of a facility: epochs (n, m), noise, kind, limits, priors."""
    kind = np.array([kernels.CENTROID, _PLACES.index(blend_at)])
    if facility is None:
        return np.empty((len(path), 0)), np.array([0.0, 1.0, 1.0, 0.0, 0.0]), kind, np.zeros(2), np.zeros(2)
    known = np.inf
    if source_parallax_error is not None:
        known = strip("source_parallax_error", source_parallax_error, u.mas, shape=())
        if not known > 0:
            raise InputError(f"source_parallax_error: {source_parallax_error} given, must be above 0")
    if facility.measures == "images":
        kind[0] = kernels.IMAGES
    times = facility.schedule(path[:, 0], path[:, 1], path[:, 2], _next_open(facility, ra, dec))
    times[(times < earth.EPOCHS[0]) | (times > earth.EPOCHS[1])] = np.nan
    limits = np.array([facility.least_separation, facility.least_flux_ratio])
    priors = np.array([known**-2.0, max(facility.blend_error, _KNOWN) ** -2.0])
    return times, facility.noise(), kind, limits, priors


def _get(events, name):
    try:
        return events[name] if hasattr(events, "__getitem__") else getattr(events, name)
    except (KeyError, AttributeError):
        return None


def _plain(name, value, unit):
    if isinstance(value, u.Quantity):
        return np.atleast_1d(strip(f"events.{name}", value, unit or u.one))
    try:
        return np.atleast_1d(np.ascontiguousarray(value, dtype=float))
    except (TypeError, ValueError):
        raise InputError(f"events.{name}: numbers are needed") from None


def _column(events, name, unit, low, high):
    value = _get(events, name)
    if value is None:
        raise InputError(f"events: no column '{name}' (needed: {', '.join(_COLUMNS)}; optional: {', '.join(_BLENDS)})")
    column = _plain(name, value, unit)
    check_range(f"events.{name}", column, unit, low, high)
    return column


def _blend(events, name, n):
    """Flux of other light, 0 where there is none."""
    value = _get(events, name)
    if value is None:
        return np.zeros(n)
    mag = np.array(value.value if isinstance(value, u.Quantity) else value, dtype=float).reshape(-1)
    none = np.isnan(mag) | (mag == np.inf)
    check_range(f"events.{name}", mag[~none], "mag", -30.0, 60.0)
    return np.where(none, 0.0, 10 ** (-0.4 * np.where(none, 0.0, mag)))


def _labels(errors, classes, weights):
    classes = np.asarray(classes)
    weights = np.ones(classes.size) if weights is None else np.asarray(weights, dtype=float)
    for name, array in (("classes", classes), ("weights", weights)):
        if array.shape != errors.sigma_M.shape:
            raise InputError(f"{name}: shape {array.shape} given, there are {errors.sigma_M.size} events")
    check_range("weights", weights, "", low=0.0)
    return classes, weights


def _position(position):
    if hasattr(position, "icrs"):
        position = position.icrs.ra, position.icrs.dec
    try:
        ra, dec = position
    except (TypeError, ValueError):
        raise InputError("position: a SkyCoord or a pair (ra, dec) is needed") from None
    return strip("ra", ra, u.rad, shape=()), strip("dec", dec, u.rad, low=-0.5 * np.pi, high=0.5 * np.pi, shape=())


def _next_open(facility, ra, dec):
    """Return a function from MJD to the next day on which the target is far enough from the Sun, or None."""
    if not facility.least_sun_angle:
        return None
    # one year serves for all: the Sun is back within half a day
    start = 51544.5
    wait = np.arange(2 * 365.0)
    up = earth.sun_angle(start + wait[:365], ra * u.rad, dec * u.rad).to_value(u.deg) >= facility.least_sun_angle
    if not up.any():
        return lambda t: np.full_like(t, np.nan)
    following = np.minimum.accumulate(np.where(np.tile(up, 2), wait, np.inf)[::-1])[::-1][:365]
    wait = np.where(up, 0.0, following - wait[:365])

    def next_open(t):
        return t + wait[np.minimum(((t - start) % DAYS_PER_YEAR).astype(int), 364)]

    return next_open
