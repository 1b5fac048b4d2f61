"""A campaign's forecast under assumptions that only re-weight the integrals already done."""

from dataclasses import replace

from .notes import campaign_warnings
from .shared import integral_key
from .yields import assembled, campaign

__all__ = ["reweighed", "reweighted"]


def reweighed(forecast, scenario):
    """Return a campaign's forecast under a scenario that needs no new integrals, None where it does.

    Parameters
    ----------
    forecast : CampaignForecast
    scenario : Scenario

    Returns
    -------
    CampaignForecast or None
        The source stars stay those of the old masses.
    """
    old = forecast.scenario
    # an unkicked forecast holds no fields to weigh
    unkicked = forecast.fields[0].sightline._model.kicked is None
    if integral_key(scenario) != integral_key(old) or (unkicked and not scenario.unkicked and scenario.fields):
        return None
    keys = ("kicks", "bh_kicks", "ifmr", "imf", "lens_class")
    changes = {k: getattr(scenario, k) for k in keys if getattr(scenario, k) != getattr(old, k)}
    if not changes:
        return replace(forecast, scenario=scenario)  # its name may be another
    rows = [
        assembled(forecast.campaign, f.field, f.sightline.reforecast(**changes), f.sources, f.counted, f.rate_factor)
        for f in forecast.fields
    ]
    classes = rows[0].sightline.classes
    return replace(
        forecast, scenario=scenario, classes=classes, fields=tuple(rows), family="", family_hash="",
        range_over=(), range_without=(), ranges=None, range_cases=(), masses=None,
        warnings=campaign_warnings(forecast.campaign, rows, classes),
        references=tuple(dict.fromkeys(r for f in rows for r in f.sightline.references)),
    )  # fmt: skip


def reweighted(forecast, scenario, jobs=1, progress=None, executor=None):
    """Return the forecast of the same campaign under another scenario, cheaply where that can be.

    Parameters
    ----------
    forecast : CampaignForecast
    scenario : Scenario
        One that differs in kick laws, masses or lens classes shares the integrals; any other is forecast anew.
    jobs, progress, executor
        As in `yields.campaign`.

    Returns
    -------
    CampaignForecast

    Raises
    ------
    InputError, ConvergenceError
        As `yields.campaign`.
    """
    made = reweighed(forecast, scenario)
    if made is not None:
        return made
    return campaign(forecast.campaign, scenario, jobs=jobs, executor=executor, progress=progress)
