"""Follow-up as it is reported: options and plans of events, the list under a budget, tables and dictionaries."""

from dataclasses import dataclass, field

import numpy as np

from .._version import __version__

__all__ = ["EventPlan", "FollowUpPlan", "Option", "date_of"]


@dataclass(frozen=True, eq=False)
class Option:
    """One measurement of one event.

    Attributes
    ----------
    name : str
    measures : str
        "centroid", "images", "lens_light", "source_motion"; "light curve" for what the survey measures anyhow.
    hours : float
        Telescope time, the mean over what the event may be.
    worth : Worth
        Bits gained over the survey's own light curve, chances and false alarms after both. Of the source's motion: over
        the data so far.
    per_hour : float
        Bits on the target class per hour, or on the class where there is no target.
    sigma_theta_E : float or None
        Median sigma(theta_E)/theta_E, infinite where theta_E is not measured.
    invented : bool
    """

    name: str
    measures: str
    hours: float
    worth: object
    per_hour: float
    sigma_theta_E: float | None = None
    invented: bool = False

    def to_dict(self):
        """Return plain numbers."""
        out = {"measures": self.measures, "hours": self.hours, **self.worth.to_dict(), "bits_per_hour": self.per_hour}
        s = self.sigma_theta_E
        known = s is not None and np.isfinite(s)
        return out | {"sigma_theta_E_relative": s if known else None, "invented": self.invented}


@dataclass(frozen=True, eq=False)
class EventPlan:
    """A running event and what may be done about it.

    Attributes
    ----------
    name : str
    classes : tuple of str
    probability : ndarray
        Given the data and that it was caught running.
    theta_E : dict
        Class, and "all", to p16, p50, p84 [mas], or None.
    t_0, u_0 : float
        [MJD, -]
    shift_dates : tuple of float
        MJD of largest centroid shift, u = sqrt 2, before and after the peak; empty where the path stays outside.
    magnitudes : dict
        At "peak", "now" and at the later date of largest shift.
    base : Option
        The survey's own light curve.
    options : tuple of Option
        Best first.
    last_start : float or None
        MJD until which the best option keeps half its gain; None if it gains nothing, infinite if there is no hurry.
    reason : str
    changed : str
        Since the last run.
    order : int or None
        Place in the list under the budget, from 1.
    """

    name: str
    classes: tuple
    probability: np.ndarray
    theta_E: dict
    t_0: float
    u_0: float
    shift_dates: tuple
    magnitudes: dict
    base: Option
    options: tuple
    last_start: float | None
    reason: str
    changed: str = ""
    order: int | None = None

    @property
    def best(self):
        """The option of most bits per hour, None where there is none."""
        return self.options[0] if self.options else None

    def p(self, name):
        """Return the probability of a class."""
        return float(self.probability[self.classes.index(name)])

    def to_dict(self):
        """Return plain numbers."""
        shift = {c: None if q is None else {k: v / np.sqrt(8.0) for k, v in q.items()} for c, q in self.theta_E.items()}
        last = self.last_start
        return {
            "probability_running": dict(zip(self.classes, self.probability.tolist())),
            "theta_E_mas": self.theta_E,
            "largest_centroid_shift_mas": shift,
            "largest_centroid_shift_mjd": list(self.shift_dates),
            "t_0_mjd": self.t_0,
            "magnitudes": self.magnitudes,
            "light_curve_alone": self.base.to_dict(),
            "options": {o.name: o.to_dict() for o in self.options},
            "best": self.best.name if self.best else None,
            "score_per_hour": self.best.per_hour if self.best else 0.0,
            "last_useful_start_mjd": None if last is None or not np.isfinite(last) else last,
            "reason": self.reason,
            "changed": self.changed,
            "order": self.order,
        }


@dataclass(frozen=True, eq=False)
class FollowUpPlan:
    """Follow-up of a sample of running events.

    Attributes
    ----------
    events : tuple of EventPlan
        Most bits per hour first.
    chosen : tuple of EventPlan
        The list under the budget, in order.
    target : str or None
    as_of : float
        MJD.
    budget : float
        [h]
    seed, number : int
        Of the simulated outcomes; outcomes of each class.
    notes, failed : tuple of str
    outlier, tolerance : float
        As given to `follow_up`.
    facilities_sha256, campaign_hash : str
        Checksums of the file of facilities, and of the campaign's with all that it names.
    """

    events: tuple
    chosen: tuple
    target: str | None
    as_of: float
    budget: float
    facilities: str
    campaign: str
    scenario: object
    seed: int
    number: int
    invented: bool
    notes: tuple = ()
    failed: tuple = ()
    references: tuple = ()
    version: str = field(default=__version__)
    outlier: float | None = None
    tolerance: float | None = None
    facilities_sha256: str = ""
    campaign_hash: str = ""

    def to_dict(self):
        """Return plain numbers by name of event; `taken` names the option in the list under the budget."""
        taken = {e.name: e.best.name for e in self.chosen}
        return {e.name: {**e.to_dict(), "taken": taken.get(e.name)} for e in self.events}

    @property
    def hours(self):
        """Time that the list takes [h]."""
        return sum(e.best.hours for e in self.chosen)

    @property
    def bits(self):
        """Bits that the list is expected to gain, on the question that it was ranked by."""
        return sum(e.best.per_hour * e.best.hours for e in self.chosen)

    def header(self):
        """Return the line above the table."""
        what = f"whether a lens is a {self.target.replace('_', ' ')}" if self.target else "the lens's class"
        return (
            f"follow-up as of {date_of(self.as_of)}, budget {self.budget:g} h: bits on {what} per hour, gained over "
            f"the light curves of {self.campaign}; events caught running weigh with their t_E (length bias)"
        )

    def meta(self):
        """Return how this was made."""
        return {
            "program": "lensrate", "version": self.version, "header": self.header(), "scenario": self.scenario.name,
            "scenario_hash": self.scenario.hash, "scenario_text": self.scenario.to_toml(), "seed": self.seed,
            "outcomes_per_class": self.number, "as_of_mjd": self.as_of, "budget_h": self.budget,
            "outlier": self.outlier, "tolerance_deg": self.tolerance,
            "facilities": self.facilities, "facilities_sha256": self.facilities_sha256,
            "campaign": self.campaign, "campaign_hash": self.campaign_hash, "invented": self.invented,
            "warnings": list(self.notes), "references": list(self.references),
        }  # fmt: skip

    def to_table(self):
        """Return a QTable, a row per event and option."""
        import astropy.units as u
        from astropy.table import QTable

        chosen = {e.name: e.best.name for e in self.chosen}
        taken = [o.name == chosen.get(e.name) for e in self.events for o in e.options]
        rows = [
            (e.name, e.order or 0, o.name, o.measures, o.hours, o.per_hour, o.worth.bits, o.worth.bits_error,
             o.worth.target_bits, o.worth.target_error, o.worth.sure, o.worth.target_sure, o.worth.false_alarm,
             *((e.theta_E["all"] or {}).get(k, np.nan) for k in ("p16", "p50", "p84")),
             np.nan if e.last_start is None else e.last_start, e.reason)
            for e in self.events for o in e.options
        ]  # fmt: skip
        names = (
            "event", "order", "option", "measures", "hours", "bits_per_hour", "bits", "bits_error", "target_bits",
            "target_bits_error", "P_some_class_sure", "P_target_sure", "false_alarm", "theta_E_p16", "theta_E_p50",
            "theta_E_p84", "last_useful_start", "reason",
        )  # fmt: skip
        table = QTable(rows=rows or None, names=names)
        table["hours"].unit = u.hour
        for name in ("theta_E_p16", "theta_E_p50", "theta_E_p84"):
            table[name].unit = u.mas
        table["order"] = np.where(taken, table["order"], 0)
        table["order"].info.description = "place in the list under the budget, 0: not in it"
        table.add_column(np.array(taken, dtype=bool), 2, "taken")
        table["taken"].info.description = "the option that the list takes of this event"
        table["last_useful_start"].info.description = "MJD; infinite: no hurry"
        table.meta.update(self.meta())
        return table

    def plot(self, ax=None):
        """Draw bits against hours of the list; returns matplotlib Axes."""
        import importlib

        return importlib.import_module("lensrate.plots").follow_up(self, ax=ax)


def date_of(mjd):
    """Return a calendar day."""
    from datetime import date

    return date.fromordinal(int(np.floor(mjd)) + 678576).isoformat()
