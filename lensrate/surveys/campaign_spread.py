"""A campaign under a family of assumptions: those that only re-weigh share the integrals of its fields."""

from dataclasses import dataclass, replace

import numpy as np

from .campaign import Campaign
from .reweighted import reweighed
from .spread import Outcome, spread
from .yields import campaign

__all__ = ["CampaignForecasts", "campaign_spread", "with_range"]


def with_range(forecast, family, exact=False, jobs=1, executor=None):
    """Return a forecast with the least and most events over a family, varied one assumption at a time.

    Parameters
    ----------
    forecast : CampaignForecast
    family : Family
    exact : bool
        Take alternatives that need new integrals too.
    jobs, executor
        As `campaign`.

    Returns
    -------
    CampaignForecast
    """
    rows, labels, skipped, over = [], [], {}, {}
    words = {axis.name: axis.label or axis.name for axis in family.axes}
    for case in family.cases(forecast.scenario):
        made = reweighed(forecast, case.scenario)
        if made is None and exact:
            made = campaign(forecast.campaign, case.scenario, jobs=jobs, executor=executor)
        if made is None:
            axis, alternative = case.choices[0]
            skipped.setdefault(words[axis], []).append(f"{words[axis]} ({alternative})")
            continue
        rows.append(made.by_class())
        labels.append(case.label)
        if not np.allclose(rows[-1], forecast.by_class(), rtol=1e-12, atol=0.0):
            over.update((words[axis], None) for axis, _ in case.choices)
    over = [f"{word} (in part)" if word in skipped else word for word in over]
    without = tuple(label for each in skipped.values() for label in each)
    table = np.array(rows)
    ranges = np.column_stack([table.min(axis=0), table.max(axis=0)])
    cases = tuple(f"{labels[i]} to {labels[j]}" for i, j in zip(table.argmin(axis=0), table.argmax(axis=0)))
    notes = list(forecast.warnings)
    if skipped:
        notes.append(
            f"the range leaves out {len(without)} alternatives of family '{family.name}' that need new integrals "
            f"({', '.join(without)}); --exact (exact=True) takes them in"
        )
    return replace(
        forecast, family=family.name, family_hash=family.hash, range_over=tuple(over), range_without=without,
        ranges=ranges, range_cases=cases, warnings=tuple(notes),
        references=tuple(dict.fromkeys([*forecast.references, *family.references])),
    )  # fmt: skip


@dataclass(frozen=True)
class CampaignForecasts:
    """What `spread` calls to forecast a campaign: scenarios in, an Outcome each.

    Attributes
    ----------
    survey : Campaign
        Its fields state their own source rules, which a family cannot change.
    jobs : int
        Threads over fields.
    progress : callable, optional
        Called with the share of the work done.
    """

    survey: Campaign
    jobs: int = 1
    progress: object = None

    units = {"events": "", "share_of_events": "", "scaled_to_observed": ""}

    def __call__(self, scenarios):
        """Return an Outcome of each scenario, the base first."""
        made, kept = [], []
        for i, scenario in enumerate(scenarios):
            result = next((r for r in (reweighed(k, scenario) for k in kept) if r is not None), None)
            if result is None:
                result = campaign(self.survey, scenario, jobs=self.jobs)
                # others of the same integrals stand close by: two sets are enough to keep
                kept = [*kept[-1:], result] if kept else [result]
            made.append(self._outcome(result))
            if self.progress is not None:
                self.progress((i + 1) / len(scenarios))
        return made

    def _outcome(self, result):
        names, events = [*result.classes, "all"], result.by_class()
        scaled = result.scaled_by_class()
        values = {}
        for i, name in enumerate(names):
            values[name] = {"events": float(events[i]), "share_of_events": float(events[i] / events[-1])}
            if scaled is not None:
                values[name]["scaled_to_observed"] = float(scaled[i])
        about = {"campaign": self.survey.name, "campaign_hash": self.survey.hash, "header": result.header()}
        return Outcome(values, result.warnings, result.references, about)


def campaign_spread(
    survey, family="default", scenario=None, *, combinations=False, axes=None, jobs=1, progress=None
):  # fmt: skip
    """Forecast a campaign over a family of assumptions.

    Parameters
    ----------
    survey : Campaign or str
        A file or shipped name is read.
    family : Family or str
        A name or file is read.
    scenario : Scenario or str, optional
        The base; default the campaign's own.
    combinations : bool
        All combinations besides one change at a time.
    axes : list of str, optional
        Only these axes.
    jobs, progress
        As in `CampaignForecasts`.

    Returns
    -------
    Spread
        Of expected events, shares, and events scaled to observed counts where the campaign states some.

    Raises
    ------
    InputError, ConvergenceError
        As `spread` and `campaign`.
    """
    if not isinstance(survey, Campaign):
        survey = Campaign.read(survey)
    base = survey.scenario if scenario is None else scenario
    return spread(CampaignForecasts(survey, jobs, progress), family, base, combinations=combinations, axes=axes)
