"""From a sample and a campaign to a posterior; limits on a lens class of the user's own against its mass."""

from dataclasses import dataclass, replace

import numpy as np

from ..errors import InputError, kind_of, one_of
from ..events.observed import Sample
from ..parallel import run_map
from ..scenario import Scenario
from ..surveys.campaign import Campaign
from ..surveys.family import Family
from ..surveys.reweighted import reweighed, reweighted
from ..surveys.yields import campaign as forecast_of
from .data import observed_data
from .likelihood import Likelihood, Nuisances, anchors, check_kicks
from .parameters import BINS, bin_parameters, parse_parameters
from .posterior import grid_posterior
from .selection import Selection
from .templates import Templates, need_kicks

__all__ = ["METHODS", "MassLimits", "averaged", "constrain", "mass_limits"]

METHODS = ("auto", "grid", "sample")
_MOST_SETS = 200  # of a family; each costs a grid of its own


def constrain(sample, parameters=("kick_scale",), survey=None, scenario=None, *, priors=(), nuisances=None,
              selection=None, counts="auto", galaxies=(), family=None, axes=None, method="auto", points=None,
              steps=2000, seed=1, only_t_E=False, forecast=None, jobs=1, executor=None, progress=None):  # fmt: skip
    """Return the posterior of parameters from an observed sample.

    Parameters
    ----------
    sample : Sample
    parameters : sequence of str
        Of `parameters.PARAMETERS`, ``kick_bins`` (free shares of the kick bins under a smoothness prior; a sampler is
        needed), or ``class:NAME``.
    survey : Campaign or str
        Whose fields, stars and efficiency apply.
    scenario : Scenario or str, optional
        Default the campaign's own.
    priors : sequence of str
        ``NAME=FORM:A,B``.
    nuisances : Nuisances, optional
        Widths; on by default.
    selection : Selection, optional
        Declared probabilities of the stages of a sample.
    counts : str
        "auto", "shape" or "absolute".
    galaxies : sequence of Scenario or str
        Further Galaxy sets, as likely beforehand as the scenario, over which the posterior is averaged.
    family : Family or str, optional
        Instead: all combinations of its axes (those that combine), as likely beforehand as its weights say, evenly
        where it has none.
    axes : list of str, optional
        Only these axes of the family.
    method : str
        "auto": a grid up to three parameters, else the sampler; "grid"; "sample".
    points, steps, seed : int
        Grid points a parameter; steps and seed of the sampler.
    only_t_E : bool
        Leave the values of parallaxes and angular radii out; which stage of `selection` an event reached still counts.
    forecast : CampaignForecast, optional
        One already made.
    jobs : int
        Threads over fields.
    executor : object with ``map``, optional
        Instead of threads; also for events with measured parallaxes or radii.
    progress : callable or str, optional

    Returns
    -------
    Posterior

    Raises
    ------
    InputError
        Unknown parameter, impossible prior, no events in the fields, nothing that anchors counts that are asked for;
        a family of too many combinations, or of none besides the scenario.
    """
    one_of("method", method, METHODS)
    kind_of("sample", sample, Sample, "a Sample, from `Sample.read`,")
    if not len(sample):
        raise InputError(f"sample '{sample.name}': no events")
    if forecast is None and survey is None:
        raise InputError("survey: a campaign is needed, whose fields, stars and efficiency apply; give --campaign FILE")
    if forecast is None and not isinstance(survey, Campaign):
        survey = Campaign.read(survey)
    base = scenario if scenario is not None else (forecast.scenario if forecast else survey.scenario)
    base = base if isinstance(base, Scenario) else Scenario.read(base)
    asked = parse_parameters(list(parameters), priors, base.lens_class)
    label = progress if isinstance(progress, str) else None
    if forecast is None:
        forecast = forecast_of(survey, base, jobs=jobs, executor=executor, progress=label)
    else:
        forecast = reweighted(forecast, base, jobs, label, executor)
    if (galaxies or family) and (method == "sample" or (method == "auto" and (BINS in parameters or len(asked) > 3))):
        raise InputError(
            "galaxies, family: the sampler takes one Galaxy set; use three parameters or fewer, without kick_bins"
        )
    sets, weights, words = averaged(base, galaxies, family, axes)
    every = {}
    for name, scenario in sets.items():
        # many differ in what integrals do not know
        f = next((r for r in (reweighed(k, scenario) for k in every.values()) if r is not None), None)
        every[name] = f or reweighted(forecast, scenario, jobs, label, executor)
    likelihoods = {}
    for name, f in every.items():
        templates = Templates.of(f)
        anchors(templates, counts)
        check_kicks([p.name for p in asked], templates, _law(f))
        if BINS in parameters and not likelihoods:
            need_kicks(templates, BINS)
            asked = (*asked, *bin_parameters(templates.edges))
        data = observed_data(sample, templates, selection, executor, only_t_E)
        likelihoods[name] = Likelihood(templates, data, asked, nuisances, selection, counts)
    call = progress if callable(progress) else None
    if method == "sample" or (method == "auto" and len(asked) > 3):
        from .sampler import sampled_posterior

        out = sampled_posterior(next(iter(likelihoods.values())), steps, seed, call)
    else:
        out = grid_posterior(likelihoods, weights, points, call)
    made = {**out.made, "sample": sample.name, "sample_invented": sample.invented, "seed": seed, **words}
    return replace(out, made=made)


def averaged(base, galaxies=(), family=None, axes=None):
    """Return the scenarios that a posterior is averaged over, the base first.

    Parameters
    ----------
    base, galaxies, family, axes
        As in `constrain`.

    Returns
    -------
    scenarios : dict of str to Scenario
    weights : list of float
        Prior shares, summing to one.
    words : dict
        What a record of it says of the family; empty without one.

    Raises
    ------
    InputError
        Both given; axes without a family; nothing besides the base; too many combinations.
    """
    if galaxies and family:
        raise InputError("galaxies, family: both given; write the sets as alternatives of an axis of the family")
    if axes and not family:
        raise InputError("axes: they belong to a family, and none is given; give family (--family)")
    if not family:
        out = {base.name: base}
        for other in galaxies:
            other = other if isinstance(other, Scenario) else Scenario.read(other)
            out[other.name if other.name not in out else f"{other.name}-{other.hash}"] = other
        return out, [1 / len(out)] * len(out), {}
    family = family if isinstance(family, Family) else Family.read(family)
    family = family.only(axes) if axes else family
    cases = family.cases(base, combine=True)
    if len(cases) == 1:
        raise InputError(f"family '{family.name}': nothing in it differs from scenario '{base.name}'")
    if len(cases) > _MOST_SETS:
        each = ", ".join(f"{a.name} {1 + len(a.alternatives)}" for a in family.for_base(base).axes if a.combine)
        raise InputError(
            f"family '{family.name}': {len(cases)} combinations ({each}), at most {_MOST_SETS} are averaged over; "
            "choose axes (--axis)"
        )
    stated = cases[0].weight is not None
    weights = [c.weight if stated else 1 / len(cases) for c in cases]
    words = {"family": family.name, "family_hash": family.hash, "family_weights": "stated" if stated else "even"}
    return {c.label: c.scenario for c in cases}, weights, words


def _law(forecast):
    from ..remnants.kicks import parse_kick

    return parse_kick(forecast.scenario.kicks)


@dataclass(frozen=True, eq=False)
class MassLimits:
    """Upper limits on a lens class against its mass.

    Attributes
    ----------
    lens : str
    mass : ndarray, shape (n,)
        Msun, every object of the class having it.
    limit : ndarray, shape (n,)
        Largest amount at `level`, in units of what the scenario states (for a mass fraction: the fraction).
    expected : ndarray, shape (n,)
        Events of the class found, at the scenario's amount.
    constrained : ndarray of bool, shape (n,)
        Where not, the limit is that of the prior alone.
    amount : float
        The scenario's own.
    norm : str
        What the amount is: mass_fraction, number_per_msun or number_per_star.
    level : float
    made : dict
    """

    lens: str
    mass: np.ndarray
    limit: np.ndarray
    expected: np.ndarray
    constrained: np.ndarray
    amount: float
    norm: str
    level: float
    made: dict

    def to_table(self):
        """Return a QTable, a row per mass."""
        import astropy.units as u
        from astropy.table import QTable

        table = QTable()
        table["mass"] = self.mass * u.Msun
        table["upper_limit"], table["expected_events"] = self.limit, self.expected
        table["constrained"] = self.constrained
        table["upper_limit"].info.description = f"{self.norm} at {self.level:.0%}"
        table.meta.update({**self.made, "lens": self.lens, "level": self.level})
        return table

    def to_dict(self):
        """Return plain numbers."""
        return {"lens": self.lens, "norm": self.norm, "level": self.level, "mass_msun": list(map(float, self.mass)),
                "upper_limit": list(map(float, self.limit)), "expected_events": list(map(float, self.expected)),
                "constrained": list(map(bool, self.constrained)), **self.made}  # fmt: skip

    def plot(self, ax=None, **style):
        """Draw the limits against mass; returns matplotlib Axes."""
        import importlib

        return importlib.import_module("lensrate.plots").mass_limits(self, ax=ax, **style)


def mass_limits(
    sample, forecast, lens, masses, *, level=0.95, nuisances=None, counts="auto", highest=10.0, executor=None
):
    """Return upper limits on a lens class of the scenario against the mass of its objects.

    Parameters
    ----------
    sample : Sample
        Of which timescales alone count.
    forecast : CampaignForecast
        Of a scenario with the class.
    lens : str
        Its name.
    masses : array_like
        Msun.
    level : float
    nuisances, counts
        As in `constrain`.
    highest : float
        The prior of the amount is uniform from 0 to so many times the scenario's, a mass fraction's at most to 1.
    executor : object with ``map``, optional
        For the masses.

    Returns
    -------
    MassLimits

    Raises
    ------
    InputError
        Unknown class, or masses not above zero.
    """
    scenario = forecast.scenario
    one_of("lens class", lens, scenario.lens_class)
    masses = np.asarray(masses, dtype=float)
    if masses.ndim != 1 or masses.size == 0 or not np.all(np.isfinite(masses) & (masses > 0)):
        raise InputError("masses: numbers above 0 Msun are needed")
    if not 0.5 <= level < 1:
        raise InputError(f"level: {level:g} given, must be at least 0.5 and below 1")
    table = scenario.lens_class[lens]
    norm = next(k for k in ("mass_fraction", "number_per_msun", "number_per_star") if k in table)
    amount = table[norm]
    amount = float(amount["value"] if isinstance(amount, dict) else amount)
    if norm == "mass_fraction":
        highest = min(highest, 1 / amount)
    parameter = parse_parameters([f"class:{lens}"], [f"class:{lens}=uniform:0,{highest!r}"], scenario.lens_class)
    one = _Limit(sample, forecast, lens, parameter, nuisances or Nuisances(), counts, level)
    limits, expected, constrained, notes = zip(*run_map(one, list(map(float, masses)), executor=executor))
    made = {
        **{k: v for k, v in forecast.meta().items() if k != "seed"}, "sample": sample.name,
        "sample_invented": sample.invented, "nuisances": one.nuisances.to_dict(), "counts": counts,
        "prior": parameter[0].prior.text, "notes": list(dict.fromkeys(n for each in notes for n in each)),
    }  # fmt: skip
    return MassLimits(lens, masses, amount * np.array(limits), np.array(expected), np.array(constrained), amount, norm,
                      level, made)  # fmt: skip


@dataclass(frozen=True)
class _Limit:
    """Limit on a class of one mass, its events at the scenario's amount, whether the sample says any of it, notes."""

    sample: object
    forecast: object
    lens: str
    parameter: tuple
    nuisances: object
    counts: str
    level: float

    def __call__(self, m):
        scenario, lens = self.forecast.scenario, self.lens
        table = {**scenario.lens_class[lens], "mass_function": {"kind": "delta", "M": m}}
        own = scenario.replace(lens_class={**scenario.lens_class, lens: table})
        templates = Templates.of(reweighted(self.forecast, own))
        data = observed_data(self.sample, templates, only_t_E=True)
        likelihood = Likelihood(templates, data, self.parameter, self.nuisances, Selection(), self.counts)
        found, name = grid_posterior({"base": likelihood}), f"class:{lens}"
        expected = float(templates.expected[:, templates.rows(lens)].sum())
        return found.upper_limit(name, self.level), expected, found.learned[name].constrained, found.notes
