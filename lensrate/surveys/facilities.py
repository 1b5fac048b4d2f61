"""What measures an event: a survey's light curve, and a facility that follows it up with places on the sky.

A facility is a record read from a TOML file, `data/facilities/` or the user's own.
"""

from dataclasses import dataclass, field

import numpy as np

from ..datafiles import read_set
from ..errors import InputError, one_of
from ..remnants.tables import check_keys, number, numbers
from ..sources.bands import check_band
from ..units import check_range

__all__ = ["MEASURES", "Facility", "LightCurve", "facility_names"]

MEASURES = ("centroid", "images")
_STEP = 0.01  # mag, of the kernels' noise table
_NEEDED = ("name", "band", "precision", "epochs", "hours_per_epoch")
_OPTIONAL = (
    "measures", "saturation", "faint_limit", "floor", "first_epoch", "alert_u", "least_sun_angle", "blend_error",
    "least_separation", "least_flux_ratio", "invented", "reference",
)  # fmt: skip
_EPOCH_KEYS = ("number", "spacing", "days", "at")


@dataclass(frozen=True, eq=False)
class LightCurve:
    """A survey's light curve of one field: when, and how well against magnitude.

    Attributes
    ----------
    open : ndarray, shape (n, 2)
        Open time, start and end [MJD].
    cadence : float
        [d]
    mag, sigma : ndarray, shape (m,)
        Rising magnitudes of all light and the error of one epoch [mag]; ln sigma is straight between them. Brighter
        than the first the first holds, up to ten magnitudes; fainter than the last there is no measurement.
    floor : float
        Added in quadrature to each epoch [mag]; independent between epochs, so it averages down.
    saturation : float
        Brighter epochs are lost [mag].
    usable : float
        Share of epochs that give a measurement (weather): their information counts so much.
    """

    open: np.ndarray
    cadence: float
    mag: np.ndarray
    sigma: np.ndarray
    floor: float = 0.0
    saturation: float = -np.inf
    usable: float = 1.0

    def __post_init__(self):
        try:
            spans = np.asarray(self.open, dtype=float).reshape(-1, 2)
        except (TypeError, ValueError):
            raise InputError("open: pairs of start and end (MJD) are needed") from None
        check_range("open", spans, "MJD", 15020.0, 88069.0)
        if not spans.size or np.any(spans[:, 1] <= spans[:, 0]) or np.any(spans[1:, 0] < spans[:-1, 1]):
            raise InputError("open: intervals must end after they start, in order and apart")
        mag, sigma = _curve("precision", self.mag, self.sigma)
        for key, low, high in (("cadence", 1e-4, 1e4), ("floor", 0.0, 10.0), ("usable", 0.0, 1.0)):
            check_range(key, np.asarray(getattr(self, key), dtype=float), "", low, high)
        for key, value in (("open", spans), ("mag", mag), ("sigma", sigma)):
            object.__setattr__(self, key, value)

    @classmethod
    def of(cls, photometry, calendar, cadence=None, **kwargs):
        """Build from a campaign's photometry and calendar.

        Parameters
        ----------
        photometry : lensrate.surveys.photometry.Photometry
        calendar : Calendar
        cadence : float, optional
            The field's own [d], where it differs from the campaign's.
        **kwargs
            saturation, usable.

        Returns
        -------
        LightCurve

        Raises
        ------
        InputError
            The campaign states no precision, or a value cannot be used.
        """
        if photometry.magnitude.size == 0:
            raise InputError("photometry: the campaign states no precision; name a file with columns mag, sigma")
        step = photometry.cadence_d if cadence is None else cadence
        return cls(calendar.open(), step, photometry.magnitude, photometry.sigma, photometry.floor, **kwargs)

    def epochs(self):
        """Return the times of observation [MJD], ndarray."""
        return np.concatenate([np.arange(a + 0.5 * self.cadence, b, self.cadence) for a, b in self.open])

    def noise(self):
        """Return the kernels' table of 1/sigma^2 against magnitude."""
        return _noise(self.mag, self.sigma, self.floor, self.saturation, self.mag[-1], self.usable)


@dataclass(frozen=True, eq=False)
class Facility:
    """One instrument and its plan for each event.

    Attributes
    ----------
    name, band : str
    measures : str
        "centroid": the place of all unresolved light, source, images and blend; "images": the separation of the two
        images, as an interferometer does.
    mag, sigma : ndarray, shape (m,)
        Rising magnitudes of all light and the error of one epoch along each axis [mas]; ln sigma is straight between.
    saturation, faint_limit : float
        Epochs outside are lost [mag].
    floor : float
        Systematic error of one epoch and axis, in quadrature [mas]; independent between epochs, so it averages down.
    number, spacing : int, float
        Epochs one after another [d] from the first on; where the Sun is too near, the next is taken as soon after as
        can be. 0 where `days` or `at` say when.
    days, at : tuple of float
        Epochs from the peak t_0 [d], and from the peak in units of t_E. Those before the alert, or too near the Sun,
        are lost.
    first_epoch : float
        Least delay after the alert [d].
    alert_u : float
        The alert comes when the lens nears the source to this many Einstein radii, or at the peak if it never does.
    hours_per_epoch : float
        Telescope time, overheads included [h].
    least_sun_angle : float
        Nearer to the Sun nothing can be observed [deg].
    blend_error : float
        How well the blend's flux over the source's is known from the images.
    least_separation, least_flux_ratio : float
        "images" only: nearer together [mas], or with a minor image fainter than this share of the major one, the two
        are not told apart.
    invented : bool
    reference : str
    """

    name: str
    band: str
    mag: np.ndarray
    sigma: np.ndarray
    hours_per_epoch: float
    measures: str = "centroid"
    saturation: float = -np.inf
    faint_limit: float = np.inf
    floor: float = 0.0
    number: int = 0
    spacing: float = 0.0
    days: tuple = ()
    at: tuple = ()
    first_epoch: float = 0.0
    alert_u: float = 1.0
    least_sun_angle: float = 0.0
    blend_error: float = 0.02
    least_separation: float = 0.0
    least_flux_ratio: float = 0.0
    invented: bool = False
    reference: str = field(default="", repr=False)

    def __post_init__(self):
        mag, sigma = _curve(f"facility '{self.name}'.precision", self.mag, self.sigma)
        object.__setattr__(self, "mag", mag)
        object.__setattr__(self, "sigma", sigma)

    @classmethod
    def read(cls, name, file="marram"):
        """Read one facility.

        Parameters
        ----------
        name : str
            Name of a facility in the file.
        file : str
            Name of a shipped file, or a path ending in ``.toml``.

        Returns
        -------
        Facility

        Raises
        ------
        InputError
            Unknown file, facility or key (with the nearest known one), missing key, or an impossible value.
        """
        known = _read(file)
        return known[one_of(f"facility in '{file}'", name, known)]

    @classmethod
    def from_dict(cls, table, where="facility", invented=False, reference=""):
        """Build from one ``[[facility]]`` table; arguments named in `where`, errors as `read`."""
        check_keys(where, table, (*_NEEDED, *_OPTIONAL), _NEEDED)
        if not isinstance(table["name"], str) or not table["name"]:
            raise InputError(f"{where}.name: {table['name']!r} given, a word is needed")
        where = f"{where} '{table['name']}'"
        measures = one_of(f"{where}.measures", table.get("measures", "centroid"), MEASURES)
        for key in ("least_separation", "least_flux_ratio"):
            if key in table and measures != "images":
                raise InputError(f'{where}.{key}: has a meaning for measures = "images" only; leave it out')
        if "blend_error" in table and measures == "images":
            raise InputError(f'{where}.blend_error: has a meaning for measures = "centroid" only; leave it out')
        if not isinstance(table.get("invented", invented), bool):
            raise InputError(f"{where}.invented: {table.get('invented', invented)!r} given, true or false is needed")
        ranges = {
            "hours_per_epoch": ("h", 0.0, 1e4), "saturation": ("mag", -30.0, 50.0), "faint_limit": ("mag", -30.0, 50.0),
            "floor": ("mas", 0.0, 1e3), "first_epoch": ("d", 0.0, 1e4), "alert_u": ("", 0.0, 100.0),
            "least_sun_angle": ("deg", 0.0, 179.0), "blend_error": ("", 0.0, 1e3),
            "least_separation": ("mas", 0.0, 1e3), "least_flux_ratio": ("", 0.0, 1.0),
        }  # fmt: skip
        values = {key: number(where, table, key, *ranges[key]) for key in ranges if key in table}
        if values.get("saturation", -np.inf) >= values.get("faint_limit", np.inf):
            raise InputError(f"{where}: saturation {values['saturation']:g} must be brighter than the faint_limit")
        rows = table["precision"]
        if not isinstance(rows, list) or not all(isinstance(r, list) and len(r) == 2 for r in rows):
            raise InputError(f"{where}.precision: a list of [magnitude, mas] pairs is needed")
        flat = numbers(where, {"precision": [x for row in rows for x in row]}, "precision", "")
        return cls(
            name=table["name"], band=check_band(f"{where}.band", table["band"]), mag=flat[::2], sigma=flat[1::2],
            measures=measures, invented=table.get("invented", invented),
            reference=str(table.get("reference", reference)), **values, **_plan(f"{where}.epochs", table["epochs"]),
        )  # fmt: skip

    def noise(self):
        """Return the kernels' table of 1/sigma^2 against magnitude; it holds between the ends of `mag` at most."""
        bright, faint = max(self.saturation, self.mag[0] - 10.0), min(self.faint_limit, self.mag[-1])
        return _noise(self.mag, self.sigma, self.floor, bright, faint, 1.0)

    def schedule(self, t_0, u_0, t_E, next_open=None):
        """Return when each event would be observed.

        Parameters
        ----------
        t_0, u_0, t_E : ndarray, shape (n,)
            [MJD, -, d], as seen from Earth.
        next_open : callable, optional
            Takes times [MJD] to the first ones at or after them at which the target can be observed; default always.

        Returns
        -------
        ndarray, shape (n, m)
            MJD, NaN for an epoch that is lost.
        """
        reach = np.sqrt(np.maximum(self.alert_u**2 - np.asarray(u_0) ** 2, 0.0))
        first = t_0 - t_E * reach + self.first_epoch
        if self.number:
            times = np.empty((first.size, self.number))
            when = first
            for k in range(self.number):
                when = when if next_open is None else next_open(when)
                times[:, k] = when
                when = when + self.spacing
            return times
        if self.days:
            times = np.asarray(t_0)[:, None] + np.array(self.days)
        else:
            times = np.asarray(t_0)[:, None] + np.asarray(t_E)[:, None] * np.array(self.at)
        lost = times < first[:, None]
        if next_open is not None:
            lost |= next_open(times) > times
        return np.where(lost, np.nan, times)

    def hours(self, epochs):
        """Return the telescope time [h] of a number of epochs, int or ndarray."""
        return self.hours_per_epoch * epochs


def facility_names(file="marram"):
    """Return the names of the facilities in a shipped file or a path, in its order; errors as `Facility.read`."""
    return list(_read(file))


def _read(file):
    where = f"facilities '{file}'"
    table = read_set("facilities", file)
    # measurements without a schedule of their own are read by who plans follow-up
    check_keys(where, table, ("reference", "invented", "facility", "measurement"), ("facility",))
    rows = table["facility"]
    if not isinstance(rows, list) or not rows:
        raise InputError(f"{where}: at least one [[facility]] is needed")
    known = {}
    for i, row in enumerate(rows):
        one = Facility.from_dict(
            row, f"{where}, facility {i + 1}", table.get("invented", False), table.get("reference", "")
        )
        if one.name in known:
            raise InputError(f"{where}: two facilities are called '{one.name}'; rename one")
        known[one.name] = one
    return known


def _plan(where, table):
    check_keys(where, table, _EPOCH_KEYS)
    forms = [("number" in table or "spacing" in table), "days" in table, "at" in table]
    if sum(forms) != 1:
        raise InputError(f"{where}: give number and spacing, or days (from the peak), or at (from the peak, in t_E)")
    if forms[0]:
        count = number(where, table, "number", "", 1, 10_000)
        if count != int(count):
            raise InputError(f"{where}.number: {count:g} given, a whole number is needed")
        return {"number": int(count), "spacing": number(where, table, "spacing", "d", 0.0, 1e4)}
    key = "days" if forms[1] else "at"
    values = numbers(where, table, key, "d" if key == "days" else "", -1e5, 1e5)
    if not values or any(b <= a for a, b in zip(values, values[1:])):
        raise InputError(f"{where}.{key}: rising numbers are needed, at least one")
    return {key: values}


def _curve(where, mag, sigma):
    mag, sigma = np.array(mag, dtype=float), np.array(sigma, dtype=float)
    if mag.ndim != 1 or mag.shape != sigma.shape or mag.size < 2:
        raise InputError(f"{where}: at least two magnitudes, each with its error, are needed")
    check_range(where, mag, "mag", -30.0, 50.0)
    check_range(where, sigma, "", 1e-12, 1e6)
    if np.any(np.diff(mag) <= 0):
        k = int(np.argmax(np.diff(mag) <= 0))
        raise InputError(f"{where}: magnitudes must rise, {mag[k + 1]:g} follows {mag[k]:g}")
    return mag, sigma


def _noise(mag, sigma, floor, bright, faint, share):
    """Return [bright, faint, step, 1/sigma^2 ...] on a fine grid, ln sigma straight between the given points."""
    bright = max(bright, mag[0] - 10.0)
    if not bright < faint:
        raise InputError(f"precision: nothing is left between saturation {bright:g} and the faint end {faint:g} mag")
    grid = bright + _STEP * np.arange(int(np.ceil((faint - bright) / _STEP)) + 2)
    error = np.exp(np.interp(grid, mag, np.log(sigma)))
    return np.concatenate([[bright, faint, _STEP], share / (error**2 + floor**2)])
