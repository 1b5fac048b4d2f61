"""Expected events of a campaign: by field, class and season, absolute and scaled to what was observed."""

from dataclasses import dataclass

import astropy.units as u
import numpy as np
from scipy.stats import poisson

from .._version import __version__
from ..lensing.sightline import sightline
from ..parallel import run_map
from ..scenario import Scenario
from ..units import DAYS_PER_YEAR
from .campaign import Campaign
from .dust_map import DustMap
from .notes import campaign_warnings
from .stars import field_curve, field_scenario, field_stars

__all__ = [
    "CampaignForecast",
    "FieldForecast",
    "assembled",
    "campaign",
]

_ONE_SIGMA = 0.158655  # tail below one standard deviation of a normal distribution


@dataclass(frozen=True, eq=False)
class FieldForecast:
    """What one field is expected to give.

    Attributes
    ----------
    field : Field
    sightline : Sightline
        Forecast at the field's centre.
    sources : float
        Sources monitored, or objects, where the efficiency is one per catalogued object.
    counted : str
        "stated", or "source model".
    rate_factor : float
        Source-weighted mean rate over the field against that at its centre, from the stars' own fields.
    efficiency : ndarray, shape (classes,)
        Mean efficiency of each class's events.
    outside : ndarray, shape (classes,)
        Share of each class's events whose timescale the efficiency curve does not reach.
    expected : ndarray, shape (classes, seasons)
        Events.
    sampling : ndarray, shape (classes,)
        Sampling error of the kick-resolved fields, in events.
    """

    field: object
    sightline: object
    sources: float
    counted: str
    rate_factor: float
    efficiency: np.ndarray
    outside: np.ndarray
    expected: np.ndarray
    sampling: np.ndarray

    @property
    def dust_from(self):
        """Where the extinction comes from: "stated", "map", "dust disc"; "" where the source rule knows none."""
        if self.field.extinction_map:
            return "map"
        if not self.sightline.sources["extinction"]:
            return ""
        return "stated" if self.sightline.scenario.extinction else "dust disc"

    def scaled(self):
        """Return events by class scaled to the observed number, share times observed; None where none is stated."""
        total = self.expected.sum()
        if self.field.observed_events is None or not total > 0:
            return None
        return self.field.observed_events * self.expected.sum(axis=1) / total


@dataclass(frozen=True, eq=False)
class CampaignForecast:
    """Expected events of a campaign.

    Attributes
    ----------
    campaign : Campaign
    scenario : Scenario
    classes : list of str
    fields : tuple of FieldForecast
    family, family_hash : str
        Name and checksum of the family of assumptions behind `ranges`, "" for none.
    range_over : tuple of str
        Which assumptions `ranges` goes over, in words.
    range_without : tuple of str
        Alternatives that it leaves out, since they need new integrals and were not asked for.
    ranges : ndarray, shape (classes + 1, 2)
        Least and most expected events over the family, the last row for all classes.
    range_cases : list of str
        Which case is least and most, as text, by row.
    warnings, references : tuple of str
    """

    campaign: Campaign
    scenario: Scenario
    classes: list
    fields: tuple
    family: str = ""
    family_hash: str = ""
    range_over: tuple = ()
    range_without: tuple = ()
    ranges: np.ndarray | None = None
    range_cases: tuple = ()
    warnings: tuple = ()
    references: tuple = ()
    masses: object = None  # MassForecast, where facilities were given
    seed: int | None = None
    version: str = __version__

    @property
    def expected(self):
        """Events by field, class and season, ndarray (fields, classes, seasons)."""
        return np.array([f.expected for f in self.fields])

    def by_class(self):
        """Return events by class, the last for all, (classes + 1,)."""
        each = self.expected.sum(axis=(0, 2))
        return np.append(each, each.sum())

    def scaled_by_class(self):
        """Return events by class, and of all, scaled to observed counts; None where no field states any.

        Fields without an observed number are left out, as `scaled_fields` says.
        """
        parts = [s for s in (f.scaled() for f in self.fields) if s is not None]
        if not parts:
            return None
        each = np.sum(parts, axis=0)
        return np.append(each, each.sum())

    def scaled_fields(self):
        """Return the names of fields that state an observed number."""
        return [f.field.name for f in self.fields if f.field.observed_events is not None]

    def header(self, drawn=False):
        """Return what stands above every table; `drawn`: above events that nothing was taken from yet."""
        low = min(f.sightline.t_E[0] for f in self.fields)
        eff = self.campaign.efficiency
        span = "all t_E" if eff.name == "complete" else f"{max(eff.t_E[0], low):g} < t_E < {eff.t_E[-1]:g} d"
        if drawn and eff.name != "complete":
            span = f"every t_E drawn, efficiency of {span}"
        return f"{self.campaign.header()}; {span}; heliocentric; lenses of every class, luminous ones included"

    def meta(self):
        """Return how this was made, for the metadata of tables and pictures."""
        return {
            "program": "lensrate",
            "version": self.version,
            "header": self.header(),
            "campaign": self.campaign.name,
            "campaign_hash": self.campaign.hash,
            "campaign_text": self.campaign.text,
            **self.scenario.made(),
            "seed": self.seed,
            "fields": self.fields[0].sightline._fields(),
            "family": self.family or None,
            "family_hash": self.family_hash or None,
            "range_over": list(self.range_over),
            "range_without": list(self.range_without),
            "warnings": list(self.warnings),
            "references": list(self.references),
        }

    def to_dict(self):
        """Return plain numbers under the keys of ``lensrate campaign --json``."""
        events, scaled = self.by_class(), self.scaled_by_class()
        sampling = np.sum([f.sampling for f in self.fields], axis=0)
        sampling = np.append(sampling, sampling.sum())
        expected = {}
        for i, name in enumerate([*self.classes, "all"]):
            expected[name] = {
                "events": float(events[i]),
                "poisson_68": list(poisson_68(events[i])),
                "assumptions_range": None if self.ranges is None else [float(x) for x in self.ranges[i]],
                "field_sampling": float(sampling[i]),
                "p_at_least_one": float(-np.expm1(-events[i])),
                "scaled_to_observed": None if scaled is None else float(scaled[i]),
            }
        rows = []
        for f in self.fields:
            scaled = f.scaled()
            by_season = {s.name: f.expected[:, j] for j, s in enumerate(self.campaign.calendar.seasons)}
            rows.append(
                {
                    "name": f.field.name, "l_deg": f.field.l_deg, "b_deg": f.field.b_deg,
                    "area_deg2": float(f.field.area_deg2), "sources": f.field.sources,
                    "extinction": f.sightline.sources["extinction"], "extinction_from": f.dust_from,
                    "n_sources": f.sources, "counted": f.counted,
                    "rate_factor": f.rate_factor,
                    "expected": dict(zip(self.classes, map(float, f.expected.sum(axis=1)))),
                    "by_season": {s: dict(zip(self.classes, map(float, e))) for s, e in by_season.items()},
                    "mean_efficiency": dict(zip(self.classes, map(float, f.efficiency))),
                    "outside_efficiency": dict(zip(self.classes, map(float, f.outside))),
                    "observed_events": f.field.observed_events,
                    "scaled_to_observed": None if scaled is None else dict(zip(self.classes, map(float, scaled))),
                }
            )  # fmt: skip
        return {
            "name": self.campaign.name,
            "header": self.header(),
            "fields": rows,
            "expected": expected,
            "family": self.family or None,
            "range_over": list(self.range_over),
            "range_without": list(self.range_without),
            "scaled_fields": self.scaled_fields(),
            "mass_measured": {} if self.masses is None else self.masses.to_dict(),
            "mass_settings": None if self.masses is None else self.masses.settings(),
            **self.scenario.made(),
            "campaign_hash": self.campaign.hash,
            "warnings": list(self.warnings),
            "references": list(self.references),
            "version": self.version,
        }

    def to_table(self, by="class"):
        """Return a table of expected events.

        Parameters
        ----------
        by : str
            "class": a row per lens class; "field": a row per field, class and season.

        Returns
        -------
        astropy.table.QTable

        Raises
        ------
        InputError
            Unknown `by`.
        """
        from ..errors import one_of
        from .report import table_by_class, table_by_field

        made = {"class": table_by_class, "field": table_by_field}[one_of("by", by, ("class", "field"))](self)
        made.meta.update(self.meta())
        return made

    def to_pandas(self, by="class"):
        """Return `to_table` as a pandas DataFrame, units dropped."""
        return self.to_table(by).to_pandas()

    def plot(self, **style):
        """Draw the page of pictures; returns the matplotlib Figure's Axes in an array."""
        import importlib

        return importlib.import_module("lensrate.plots").campaign(self, **style)

    def _repr_html_(self):
        from html import escape

        return f"<p>{escape(self.campaign.name)}<br>{escape(self.header())}</p>" + self.to_table()._repr_html_()


def poisson_68(mean):
    """Return the counts between which the central 68 % of Poisson outcomes lie."""
    return int(poisson.ppf(_ONE_SIGMA, mean)), int(poisson.ppf(1 - _ONE_SIGMA, mean))


def campaign(survey, scenario=None, *, family=None, exact=False, jobs=1, executor=None, progress=None):
    """Forecast the events of a campaign.

    Parameters
    ----------
    survey : Campaign or str
        A file or shipped name is read.
    scenario : Scenario or str, optional
        Assumptions; default those that the campaign names.
    family : Family, optional
        Assumptions to vary one at a time for a range.
    exact : bool
        Take all alternatives of the family, also those that need new integrals (seconds a field each); else only those
        that re-weight the integrals done.
    jobs : int
        Local threads over fields.
    executor : object with ``map``, optional
        Instead of local threads.
    progress : str, optional
        Label of a progress bar.

    Returns
    -------
    CampaignForecast

    Raises
    ------
    InputError, ConvergenceError
        As `Campaign.read` and `sightline`.
    """
    if not isinstance(survey, Campaign):
        survey = Campaign.read(survey)
    base = survey.scenario if scenario is None else scenario
    if not isinstance(base, Scenario):
        base = Scenario.read(base)
    dust = [DustMap.read(f.extinction_map) if f.extinction_map else None for f in survey.fields]

    def one(i):
        return _field(survey, base, i, dust[i])

    # the first alone, so that threads do not compile the same kernels at once
    alone = [one(0)] if executor is None else []
    rows = [*alone, *run_map(one, range(len(alone), len(survey.fields)), jobs, executor, progress)]
    classes = rows[0].sightline.classes
    out = CampaignForecast(
        survey, base, classes, tuple(rows), warnings=campaign_warnings(survey, rows, classes),
        references=tuple(dict.fromkeys(r for f in rows for r in f.sightline.references)),
    )  # fmt: skip
    if family is None:
        return out
    from .campaign_spread import with_range

    return with_range(out, family, exact, jobs, executor)


def _field(survey, base, i, dust):
    f = survey.fields[i]
    mine = field_scenario(base, survey, f, dust)
    centre = sightline(f.l_deg * u.deg, f.b_deg * u.deg, mine)
    stars = field_stars(survey, i, mine, dust)
    return assembled(survey, f, centre, stars.number, stars.counted, stars.rate_factor)


def assembled(survey, f, centre, number, counted, factor):
    """Return the FieldForecast of a field from its centre's Sightline, its sources and the factor on the rate."""
    curve = field_curve(survey.efficiency, survey.u_0_limit, centre._integrals.ready)
    mean, inside = np.array([curve.mean(centre.t_E, pdf) for pdf in centre.rate_per_ln_t_E]).T
    lenses = [centre.lenses[name] for name in centre.classes]
    rate = np.array([lens.rate for lens in lenses]) * factor
    error = np.array([lens.rate_standard_error or 0.0 for lens in lenses]) * factor
    years = survey.calendar.exposure(curve.includes) / DAYS_PER_YEAR
    expected = (number * rate * mean)[:, None] * years
    return FieldForecast(
        f,
        centre,
        float(number),
        counted,
        float(factor),
        mean,
        1.0 - inside,
        expected,
        number * error * mean * years.sum(),
    )
