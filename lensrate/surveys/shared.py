"""One sightline under many scenarios: those that differ only in what is linear share their integrals."""

import json
from functools import partial

from ..lensing.sightline import sightline
from ..lensing.sightline_result import LINEAR
from ..parallel import run_map
from ..sources.rules import PeakRule, parse_rule

__all__ = ["forecasts_under", "integral_key"]

_STARS = ("imf", "ifmr")  # also make the source stars, which a re-weighted forecast keeps


def integral_key(scenario, exact=False):
    """Return text that two scenarios have in common if one set of integrals serves both.

    Parameters
    ----------
    scenario : Scenario
    exact : bool
        Whether mass functions and remnant masses may change the source stars too, so that they need integrals of
        their own.

    Returns
    -------
    str
    """
    free = {"name", "title", *LINEAR} - ({*_STARS} if exact else set())
    if isinstance(parse_rule(scenario.sources), PeakRule):
        free -= {"u_0_limit"}  # decides which stars are magnified enough
    kept = {k: v for k, v in scenario.to_dict().items() if k not in free}
    return json.dumps(kept, sort_keys=True, default=str)


def forecasts_under(
    l, b, scenarios, each=None, *, exact=False, t_E_range=None, jobs=1, executor=None, progress=None
):  # fmt: skip
    """Forecast one direction under many scenarios, with one `sightline` for each set of integrals.

    Parameters
    ----------
    l, b : Quantity
        Galactic direction.
    scenarios : sequence of Scenario
        The first is the base: where mass functions differ, its stars are the sources of all that share integrals.
    each : callable, optional
        Applied to every Sightline; only what it returns is kept, so that integrals can be freed.
    exact : bool
        Let mass functions and remnant masses change the source stars as well; slower.
    t_E_range : (Quantity, Quantity), optional
        As in `sightline`.
    jobs : int
        Local threads, over sets of integrals.
    executor : object with ``map``, optional
        Instead of local threads; what works in other processes sends `each` there and its results back.
    progress : callable, optional
        Called with the share of the work done.

    Returns
    -------
    list
        Of Sightline, or of what `each` returned, in the order of `scenarios`.

    Raises
    ------
    InputError, ConvergenceError
        As `sightline`.
    """
    scenarios = list(scenarios)
    groups = {}
    for i, s in enumerate(scenarios):
        groups.setdefault(integral_key(s, exact), []).append(i)
    out, done = [None] * len(scenarios), 0

    if not scenarios:
        return out
    places = list(groups.values())
    order = iter(places)

    def keep(_, results):
        nonlocal done
        for i, result in zip(next(order), results, strict=True):
            out[i] = result
        done += len(results)
        if progress is not None:
            progress(done / len(scenarios))

    todo = [[scenarios[i] for i in members] for members in places]
    run = partial(_group, l=l, b=b, base=scenarios[0], each=each, t_E_range=t_E_range)
    # the first alone, so that threads do not compile the same kernels at once
    run_map(run, todo[:1], progress=keep)
    run_map(run, todo[1:], jobs, executor, progress=keep)
    return out


def _group(members, l, b, base, each, t_E_range):
    """What `each` makes of every scenario of one set of integrals; a function of its own, so that it can be sent."""
    whole = sightline(l, b, _anchor(members, base), t_E_range=t_E_range)
    results = (_reweighted(whole, s, t_E_range) for s in members)
    return list(results) if each is None else [each(r) for r in results]


def _anchor(members, base):
    """The scenario to integrate for a group: kicked if any member is, with the base's stars unless all agree."""
    anchor = next((s for s in members if not s.unkicked), members[0])
    if len({(s.imf, s.ifmr) for s in members}) > 1:
        anchor = anchor.replace(imf=base.imf, ifmr=base.ifmr)
    return anchor


def _reweighted(whole, scenario, t_E_range):
    old = whole.scenario
    changes = {k: getattr(scenario, k) for k in LINEAR if getattr(scenario, k) != getattr(old, k)}
    if not changes:
        return whole
    if whole.to_dict()["fields"] is None and not scenario.unkicked and scenario.fields:
        # fields that hold nothing of this Galaxy: there is nothing to re-weight
        return sightline(whole.l, whole.b, scenario, t_E_range=t_E_range)
    return whole.reforecast(**changes)
