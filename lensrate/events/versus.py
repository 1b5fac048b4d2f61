"""Several scenarios beside one sample: a comparison each, and the differences of their likelihoods."""

from dataclasses import dataclass, replace

from ..errors import InputError, kind_of
from ..scenario import Scenario
from ..surveys.campaign import Campaign
from ..surveys.reweighted import reweighted
from ..surveys.yields import campaign as forecast_of
from .compare import compare, differences
from .fold import assign, fold_campaign, fold_groups, grouped
from .observed import Sample

__all__ = ["Versus", "compare_sample"]


@dataclass(frozen=True, eq=False)
class Versus:
    """Comparisons of one sample with several scenarios.

    Attributes
    ----------
    comparisons : tuple of Comparison
        In the order of the scenarios.
    """

    comparisons: tuple

    @property
    def differences(self):
        """ln L less the best scenario's, by part, a dict each."""
        return differences(self.comparisons)

    def to_table(self):
        """Return a QTable, a row per scenario."""
        from astropy.table import QTable

        table = QTable()
        table["scenario"] = [c.folded.scenario.name for c in self.comparisons]
        table["kicks"] = [c.folded.scenario.kicks for c in self.comparisons]
        table["expected"] = [float(c.predicted.sum()) for c in self.comparisons]
        table["observed"] = [len(c.events) for c in self.comparisons]
        for key in ("t_E", "pi_E", "counts", "total"):
            table[f"delta_ln_L_{key}"] = [d[key] for d in self.differences]
        for key in self.comparisons[0].tests:
            table[f"p_{key}"] = [c.tests[key].p for c in self.comparisons]
        table.meta.update(self.comparisons[0].meta())
        table.meta["scenarios"] = [c.folded.scenario.made() for c in self.comparisons]
        return table

    def to_dict(self):
        """Return plain numbers: the first scenario's comparison, and all of them side by side."""
        rows = [
            {**c.folded.scenario.made(),
             "kicks": c.folded.scenario.kicks, "bh_kicks": c.folded.scenario.bh_kicks,
             "expected": float(c.predicted.sum()), "tests": {k: t._asdict() for k, t in c.tests.items()},
             "tail": c.tail._asdict(), "delta_ln_likelihood": d}
            for c, d in zip(self.comparisons, self.differences)
        ]  # fmt: skip
        return {**self.comparisons[0].to_dict(), "scenarios": rows}


def compare_sample(
    sample, scenarios=None, survey=None, *, efficiency=None, jobs=1, executor=None, progress=None, forecast=None,
    **options,
):  # fmt: skip
    """Compare a sample with one scenario or several.

    Parameters
    ----------
    sample : Sample
    scenarios : Scenario, str, or list of them, optional
        Default the campaign's, or "default".
    survey : Campaign or str, optional
        Whose sky, sources and efficiency apply. Without one the events' own places make the sightlines, and only shapes
        are compared.
    efficiency : Efficiency, optional
        Without a campaign.
    jobs : int
        Threads over fields.
    progress : str, optional
    forecast : CampaignForecast, optional
        One of the campaign already made, whose integrals serve where they can.
    executor : object with ``map``, optional
        Instead of threads: for fields, and the simulations.
    **options
        As `compare`: counts, fit, tail, simulations, seed.

    Returns
    -------
    Versus

    Raises
    ------
    InputError
        As `compare`; both a campaign and an efficiency; an efficiency of other sources or another u_0 limit than the
        scenario's; absolute counts without a campaign.
    """
    kind_of("sample", sample, Sample, "a Sample, from `Sample.read`,")
    if forecast is not None:
        survey = forecast.campaign
    elif survey is not None and not isinstance(survey, Campaign):
        survey = Campaign.read(survey)
    if survey is not None and efficiency is not None:
        raise InputError("efficiency: the campaign states its own; give one or the other")
    if scenarios is None:
        scenarios = [survey.scenario if survey is not None else "default"]
    if isinstance(scenarios, (str, Scenario)):
        scenarios = [scenarios]
    scenarios = [s if isinstance(s, Scenario) else Scenario.read(s) for s in scenarios]
    if not len(sample):
        raise InputError(f"sample '{sample.name}': no events")
    field, notes = None, ()
    if survey is not None:
        if (assign(sample.events, survey.fields) < 0).all():
            # told before the integrals
            from .compare import _placed

            _placed(sample, _Places(survey), None)
        made = forecast or forecast_of(survey, scenarios[0], jobs=jobs, executor=executor, progress=progress)
        every = [fold_campaign(survey, forecast=reweighted(made, s, jobs, progress, executor)) for s in scenarios]
    else:
        if options.get("counts") == "absolute":
            raise InputError("counts: nothing anchors the number of events without a campaign; give --campaign FILE")
        if efficiency is not None:
            for s in scenarios:
                where = f"scenario '{s.name}'"
                efficiency.check_limit(where, s.u_0_limit)
                efficiency.check_sources(where, s.sources)
        places, field = grouped(sample.events)
        every = [fold_groups(places, s, efficiency, jobs, progress, executor) for s in scenarios]
        notes = (
            f"no campaign: {len(places)} sightlines at the events' own places, shapes only, "
            + ("every event counted as found" if efficiency is None else efficiency.describe()),
        )
    made = [compare(sample, f, field, executor=executor, **options) for f in every]
    return Versus(tuple(replace(c, notes=(*notes, *c.notes)) for c in made))


class _Places:
    """What the assignment of events needs of a forecast."""

    def __init__(self, survey):
        self.survey = survey
