"""How many lens masses a campaign would measure: mock events, its light curves, facilities that follow up."""

from dataclasses import dataclass, field, replace

import astropy.units as u
import numpy as np

from ..datafiles import set_checksum
from ..errors import InputError, kind_of
from ..galaxy.frames import icrs_from_galactic
from ..scenario import resolve
from ..surveys.facilities import Facility, LightCurve, facility_names
from ..surveys.fisher import mass_errors, measured, measured_against_hours
from ..surveys.yields import CampaignForecast, poisson_68
from . import light
from .mock import mock_events

__all__ = ["HOURS", "FacilityYield", "MassForecast", "image_magnitudes", "mass_forecast"]

_DEEP = 35.0  # mag, of a limit that leaves no star out
HOURS = (10.0, 30.0, 100.0, 300.0, 1000.0)


@dataclass(frozen=True, eq=False)
class FacilityYield:
    """What one facility measures of a campaign's events.

    Attributes
    ----------
    facility : Facility or None
        None: the campaign's light curves alone, which give no theta_E and so no mass.
    counts : dict
        Class, and "all", to events, measured, share, standard_error; see `surveys.fisher.measured`.
    follow : FollowUp
        Measured against hours, longest timescale first.
    median_sigma_pi_E : dict
        Weighted median of sigma(pi_E)/pi_E by class, from the light curves alone.
    """

    facility: object
    counts: dict
    follow: object
    median_sigma_pi_E: dict


@dataclass(frozen=True, eq=False)
class MassForecast:
    """Masses that a campaign and its facilities measure.

    Attributes
    ----------
    limit : float
        Largest sigma(M)/M that counts as measured.
    facilities : tuple of FacilityYield
    number, seed : int
        Mock events behind it.
    notes : tuple of str
    made : dict
        How the campaign's forecast was made, and the facilities' names and the checksum of their file.
    """

    limit: float
    facilities: tuple
    number: int
    seed: int
    notes: tuple = ()
    made: dict = field(default_factory=dict)

    def to_dict(self):
        """Return plain numbers: class to facility to what it measures."""
        out = {}
        for lens in self.facilities[0].counts:
            out[lens] = {}
            for f in self.facilities:
                row = f.counts[lens]
                out[lens][f.facility.name] = {
                    "events": row["events"],
                    "measured": row["measured"],
                    "poisson_68": list(poisson_68(row["measured"])),
                    "standard_error": row["standard_error"],
                    "p_at_least_one": float(-np.expm1(-row["measured"])),
                    "median_sigma_pi_E": f.median_sigma_pi_E.get(lens),
                    "against_hours": {f"{h:g}": f.follow.at(h)[lens] for h in HOURS},
                    "hours_for_all": float(f.follow.hours[-1]),
                    "invented_facility": f.facility.invented,
                }
        return out

    def settings(self):
        """Return what the numbers of `to_dict` were made with."""
        return {
            "mass_error_limit": self.limit,
            "mock_events": self.number,
            "seed": self.seed,
            "notes": list(self.notes),
        }

    def meta(self):
        """Return how this was made."""
        return {**self.made, **self.settings()}

    def to_table(self):
        """Return a QTable, a row per facility and class."""
        from astropy.table import QTable

        rows = [
            (f.facility.name, lens, row["events"], row["measured"], row["standard_error"],
             f.median_sigma_pi_E.get(lens, np.nan), f.follow.hours[-1])
            for f in self.facilities for lens, row in f.counts.items()
        ]  # fmt: skip
        names = ("facility", "lens", "events", "measured", "standard_error", "median_sigma_pi_E", "hours")
        table = QTable(rows=rows, names=names)
        table["hours"].unit = u.hour
        described = {
            "events": "events found by the campaign",
            "measured": f"of these with sigma(M)/M below {self.limit:g}",
            "standard_error": "of the number measured, from the finite number of mock events",
            "median_sigma_pi_E": "median sigma(pi_E)/pi_E of the light curves alone",
            "hours": "telescope time to follow all events of all classes",
        }
        for name, text in described.items():
            table[name].info.description = text
        table.meta.update(self.meta())
        return table

    def plot(self, ax=None, lens="black_hole"):
        """Draw masses measured against hours; returns matplotlib Axes."""
        import importlib

        return importlib.import_module("lensrate.plots").masses(self, ax=ax, lens=lens)


def mass_forecast(forecast, facilities="marram", limit=0.2, number=2000, seed=1, jobs=1):
    """Add to a campaign's forecast how many masses would be measured.

    Parameters
    ----------
    forecast : CampaignForecast
        Of a campaign that states its photometric precision.
    facilities : str or list of Facility
        A file, or a shipped one's name.
    limit : float
        Largest sigma(M)/M that counts as measured.
    number : int
        Mock events a field; classes get equal shares.
    seed : int
        Of the mock events.
    jobs : int
        Threads.

    Returns
    -------
    CampaignForecast
        With `masses`, a MassForecast.

    Raises
    ------
    InputError
        A campaign without photometric precision, an unusable facility, or sources without magnitudes.

    Notes
    -----
    Fisher matrix of the light curve and the follow-up together, see `surveys.fisher`. Events are those that the
    campaign finds; a facility follows them longest timescale first, which an observer can know.
    """
    kind_of("forecast", forecast, CampaignForecast, "a CampaignForecast, from `campaign`,")
    if not (np.isfinite(limit) and limit > 0):
        raise InputError(f"limit: {limit:g} given, must be above 0")
    made = {"facilities_file": None, "facilities_sha256": None}
    if isinstance(facilities, str):
        file = facilities
        facilities = [Facility.read(name, file) for name in facility_names(file)]
        made = {"facilities_file": file, "facilities_sha256": set_checksum("facilities", file)}
    survey = forecast.campaign
    draws, notes = [], []
    for f, seed_of_field in zip(forecast.fields, np.random.SeedSequence(seed).spawn(len(forecast.fields))):
        one = replace(forecast, fields=(f,))
        events = mock_events(one, number=number, seed=seed_of_field, weighted=True, tilt="equal", jobs=jobs)
        if events.band != survey.photometry.band:
            raise InputError(
                f"photometry.band: {survey.photometry.band}, and the sources of field '{f.field.name}' are limited in "
                f"{events.band}; make them agree"
            )
        weight, lost = _expected_weights(f, events.columns)
        if lost:
            notes.append(
                f"masses: field {f.field.name} drew no {', '.join(forecast.classes[k] for k in lost)} to measure"
            )
        rows = np.flatnonzero(np.isfinite(events.columns[f"{events.band}_S"]) & (weight > 0))
        if rows.size:
            draws.append((f, events, rows, weight[rows]))
    if not draws:
        raise InputError("masses: nothing is known of the sources' magnitudes; use a source rule with a limit")
    out = [_yield(facility, [_measured(facility, survey, *d, jobs) for d in draws], draws, limit, forecast.classes)
           for facility in facilities]  # fmt: skip
    made |= {"facilities": [f.name for f in facilities], "invented_facilities": any(f.invented for f in facilities)}
    made = {**forecast.meta(), **made}
    masses = MassForecast(float(limit), tuple(out), number * len(forecast.fields), int(seed), tuple(notes), made)
    return replace(forecast, masses=masses, seed=int(seed), warnings=(*forecast.warnings, *notes))


def _measured(facility, survey, f, events, rows, _, jobs):
    """Errors of one field's events with one facility."""
    c, band = events.columns, events.band
    light_curve = LightCurve.of(survey.photometry, survey.calendar, f.field.cadence_d)
    place = icrs_from_galactic(f.field.l_deg * u.deg, f.field.b_deg * u.deg)
    source, lens = image_magnitudes(f.sightline, facility.band, events, rows)
    columns = {"t_0": "t_0", "u_0": "u_0", "t_E": "t_E_geo", "pi_EN": "pi_EN_geo", "pi_EE": "pi_EE_geo",
               "theta_E": "theta_E", "source_mag": f"{band}_S", "blend_mag": f"{band}_L"}  # fmt: skip
    data = {key: c[name][rows] for key, name in columns.items()}
    data |= {"image_source_mag": source, "image_blend_mag": lens}
    return mass_errors(data, light_curve, facility, place, frame="geocentric", jobs=jobs)


def _expected_weights(f, c):
    """Expected found events that each mock event of a field stands for, and classes of which none was drawn."""
    weight = c["weight"] * c["efficiency"]
    wanted = f.expected.sum(axis=1)
    drawn = np.bincount(c["lens"], weight, minlength=wanted.size)
    factor = np.divide(wanted, drawn, out=np.zeros_like(drawn), where=drawn > 0)
    return weight * factor[c["lens"]], np.flatnonzero((drawn == 0) & (wanted > 0)).tolist()


def _yield(facility, errors, draws, limit, order):
    """One facility's counts over all fields."""
    names = [n for n in errors[0].__dataclass_fields__ if n != "meta"]
    joined = replace(errors[0], **{n: np.concatenate([getattr(e, n) for e in errors]) for n in names})
    mine = np.concatenate([np.array(events.classes)[events.columns["lens"][rows]] for _, events, rows, _ in draws])
    w = np.concatenate([weight for *_, weight in draws])
    medians = {}
    for name in (n for n in order if n in mine):
        here = mine == name
        rank = np.argsort(joined.sigma_pi_E_photometry[here])
        cum = np.cumsum(w[here][rank])
        at = min(np.searchsorted(cum, 0.5 * cum[-1]), rank.size - 1)
        medians[name] = float(joined.sigma_pi_E_photometry[here][rank][at])
    counts = measured(joined, mine, w, limit)
    counts = {name: counts[name] for name in [*order, "all"] if name in counts}
    return FacilityYield(facility, counts, measured_against_hours(joined, mine, w, limit), medians)


def image_magnitudes(forecast, band, events, rows):
    """Return magnitudes of sources and lenses of mock events in another band.

    Parameters
    ----------
    forecast : Sightline
        The events' own.
    band : str
        Wanted band.
    events : MockEvents
    rows : ndarray of int
        Events of this sightline.

    Returns
    -------
    source, lens : ndarray, shape (rows,)

    Raises
    ------
    InputError
        The scenario's luminosity function is the user's own, in one band only.

    Notes
    -----
    A source keeps its rank in the luminosity function of its component: as many stars are brighter than it in one band
    as in the other.
    """
    c = events.columns
    if band == events.band:
        return c[f"{band}_S"][rows], c[f"{band}_L"][rows]
    scenario = forecast.scenario
    if scenario.luminosity:
        raise InputError(
            f"facility: its band is {band}, and the luminosity function '{scenario.luminosity}' knows "
            f"{events.band} only; follow up in {events.band}"
        )
    model = resolve(scenario.replace(sources=f"limit:{band}={_DEEP:g}", kicks="none", bh_kicks="same"))
    l, b = forecast.l.to_value(u.rad), forecast.b.to_value(u.rad)
    here, there = forecast._integrals.ready.sources, model.sources.toward(l, b, model.galaxy)
    D, component = c["D_S"][rows], c["source_component"][rows]
    distance = 5.0 * np.log10(D) + 10.0
    absolute = c[f"{events.band}_S"][rows] - distance - here.dust(D)
    out = np.full(rows.size, np.nan)
    for i, (mine, other) in enumerate(zip(here.shining, there.shining)):
        at = np.flatnonzero(component == i)
        if at.size:
            out[at] = np.interp(mine.brighter(absolute[at]), other.cumulative, other.magnitude)
    lens = light.lens_magnitude(
        forecast._model, there, c["lens"][rows], c["component"][rows], c["M_L"][rows], c["D_L"][rows],
        c["birth"][rows],
    )  # fmt: skip
    return out + distance + there.dust(D), lens
