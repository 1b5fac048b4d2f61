"""Which running event deserves which measurement: bits per hour, a list under a time budget, a nightly table."""

from dataclasses import replace

import numpy as np

from ..datafiles import set_checksum
from ..errors import ConvergenceError, InputError, LensrateError, one_of
from ..lensing.geometry import magnification
from ..scenario import Scenario
from ..surveys.calendar import mjd_of
from ..surveys.campaign import Campaign
from ..surveys.facilities import Facility, facility_names
from . import plans, worth
from .followup_result import EventPlan, FollowUpPlan, Option
from .latent import latent
from .light import add
from .odds import OUTLIER, _shared_sightlines, event_rates

__all__ = ["follow_up", "greedy"]

_HALF = 0.5  # of the gain, what a start may lose and still be called useful
_QUICK = 48  # outcomes of each class where only a start is judged
_AFTER = 3.0  # t_E after the peak within which a start may still be useful
_SHOWN_SURE = 0.01
_LEAST = 0.005  # bits; less is not worth a visit, our choice


def follow_up(
    sample, scenario="default", *, as_of, hours, target=None, facilities="marram", campaign="marram", outlier=OUTLIER,
    seed=1, number=128, tolerance=0.05, since=None, keep=None, jobs=1, progress=None,
):  # fmt: skip
    """Say which further measurement of which running event is worth the telescope time.

    Parameters
    ----------
    sample : Sample or iterable of Observed
        With t_0, u_0 and I_S.
    scenario : Scenario or str
    as_of : float, str or date
        Night; MJD or a calendar day. Measurements start then at the earliest.
    hours : float
        Telescope time there is [h].
    target : str, optional
        Lens class whose presence is asked for; by default all classes' odds count.
    facilities : str
        File of facilities and measurements, or a shipped one's name.
    campaign : str or Campaign
        The survey that the light curves belong to.
    outlier : float
        As in `odds`.
    seed, number : int
        Of the simulated outcomes, and how many of each class.
    tolerance : float
        Events so near [deg] share a sightline.
    since : list of dict, optional
        Events as an earlier run printed with --json; what changed is told.
    keep : str or Path, optional
        Folder that keeps the sightlines' rate densities for later runs, as in `odds.event_rates`.
    jobs : int
        Threads over the events of a sightline; the numbers are the same.
    progress : str, optional
        Label of a progress bar.

    Returns
    -------
    FollowUpPlan

    Raises
    ------
    InputError
        Unknown class or facility, a budget not above zero, or no event that can be planned.

    Notes
    -----
    The expected posterior probability equals the present one and is no score: options are ranked by mutual information
    between class and outcome, per hour. The list is greedy, see `greedy`. An event caught running at a date is one of
    many that could have been, with a chance that goes with the time it runs: rates are weighted by t_E.
    """
    from ..parallel import run_map

    if not isinstance(scenario, Scenario):
        scenario = Scenario.read(scenario)
    day = float(as_of) if isinstance(as_of, (int, float)) else float(mjd_of(as_of, "as_of"))
    if not (np.isfinite(hours) and hours > 0):
        raise InputError(f"hours: {hours:g} given, must be above 0")
    survey = campaign if isinstance(campaign, Campaign) else Campaign.read(campaign)
    tools = [Facility.read(name, facilities) for name in facility_names(facilities)], plans.extras(facilities)
    before = {row["event"]: row for row in since or () if isinstance(row, dict) and "event" in row}
    events = list(sample)
    made, failed, notes = {}, {}, []

    def one(group):
        place, members = group
        line = event_rates(*place, scenario, keep)
        notes.extend(n for n in line.notes if n not in notes)
        if target is not None:
            one_of("rank", target, [c.name for c in line.classes])

        def planned(i):
            root = np.random.SeedSequence([seed, *(ord(ch) for ch in events[i].name)])
            try:
                args = (events[i], line, survey, tools, day, target, outlier, root, number)
                return i, _event(*args, before.get(events[i].name))
            except (InputError, ConvergenceError) as error:
                return i, error

        return run_map(planned, members, jobs)

    for out in run_map(one, _shared_sightlines(events, tolerance), progress=progress):
        for i, found in out:
            if isinstance(found, LensrateError):
                failed[i] = str(found)
            else:
                made[i], outside = found
                if outside:
                    notes.append(
                        f"{events[i].name}: outside the seasons of {survey.name}; its light curve is taken as watched "
                        "without gaps"
                    )
    if not made:
        raise InputError(f"follow-up: no event can be planned: {failed[min(failed)] if failed else 'none given'}")
    rows = sorted(made.values(), key=lambda e: -(e.best.per_hour if e.best else 0.0))
    chosen = greedy(rows, hours)
    order = {e.name: k + 1 for k, e in enumerate(chosen)}
    rows = [replace(e, order=order.get(e.name)) for e in rows]
    gone = sorted(set(before) - {e.name for e in events})
    if gone:
        notes.append(f"in the last run but not in this one: {', '.join(gone)}")
    invented = any(f.invented for f in tools[0]) or any(x.invented for x in tools[1])
    return FollowUpPlan(
        events=tuple(rows),
        chosen=tuple(replace(e, order=order[e.name]) for e in chosen),
        target=target,
        as_of=day,
        budget=float(hours),
        facilities=str(facilities),
        facilities_sha256=set_checksum("facilities", facilities),
        campaign=survey.name,
        campaign_hash=survey.hash,
        outlier=float(outlier),
        tolerance=float(tolerance),
        scenario=scenario,
        seed=seed,
        number=number,
        invented=invented,
        notes=tuple(notes),
        failed=tuple(failed[i] for i in sorted(failed)),
        references=("Gould 2004, ApJ 606, 319", "Dominik & Sahu 2000, ApJ 534, 213"),
    )


def greedy(rows, hours):
    """Choose events under a budget: most bits per hour first, then whatever still fits; each event once.

    What time is left goes into costlier options of chosen events, most further bits per further hour first. Options
    that gain less than 0.005 bits are left out.

    Parameters
    ----------
    rows : list of EventPlan
    hours : float
        [h]

    Returns
    -------
    list of EventPlan
        Most bits per hour first, the option to take first among their options.
    """
    every = [(o.per_hour, e, o) for e in rows for o in e.options if o.hours > 0 and _bits(o) > _LEAST]
    every.sort(key=lambda x: -x[0])
    left, taken = hours, {}
    for _, e, o in every:
        if e.name not in taken and o.hours <= left * (1 + 1e-12):
            taken[e.name] = e, o
            left -= o.hours
    while True:
        better = [
            ((_bits(o) - _bits(now)) / (o.hours - now.hours), e, o)
            for e, now in taken.values()
            for o in e.options
            if now.hours < o.hours <= (now.hours + left) * (1 + 1e-12) and _bits(o) > _bits(now) + _LEAST
        ]
        if not better:
            break
        _, e, o = max(better, key=lambda x: x[0])
        left -= o.hours - taken[e.name][1].hours
        taken[e.name] = e, o
    chosen = sorted(taken.values(), key=lambda x: -x[1].per_hour)
    return [replace(e, options=(o, *(x for x in e.options if x is not o))) for e, o in chosen]


def _bits(option):
    return option.per_hour * option.hours


def _event(event, line, survey, tools, day, target, outlier, root, number, before):
    """The EventPlan of one event, and whether it lies outside the survey's seasons."""
    place_seed, outcome_seed = root.spawn(2)
    goal = plans.Target.of(event)
    what = latent(event, line, np.random.default_rng(place_seed), outlier=outlier, running=True)
    curve, inside = plans.light_curve_of(survey, goal, event.t_E.value)
    aim = target or what.classes[int(np.argmax(what.probability))]
    base_sharp, _ = plans.sharpness(what, goal, curve, None, line)
    base = worth.of_widths(what, base_sharp, np.random.default_rng(outcome_seed), number)
    survey_alone = Option("light curve", "light curve", 0.0, worth.worth(what, base, aim), 0.0)
    options = []
    for facility in tools[0]:
        sharp, spent = plans.sharpness(what, goal, curve, plans.Started.at(facility, day), line)
        if spent <= 0:
            continue
        seen = worth.of_widths(what, sharp, np.random.default_rng(outcome_seed), number)
        found = worth.worth(what, seen, aim, base)
        options.append(
            Option(facility.name, facility.measures, spent, found, _score(found, target) / spent,
                   _typical(what, sharp), facility.invented)
        )  # fmt: skip
    for extra in tools[1]:
        if extra.measures == "lens_light":
            rng = np.random.default_rng(outcome_seed)
            seen = worth.of_widths(what, base_sharp, rng, number, worth.unseen(what, line, extra.limit))
            found = worth.worth(what, seen, aim, base)
        else:
            found = worth.of_source_motion(what, line, extra.error, aim, np.random.default_rng(outcome_seed))
        options.append(
            Option(extra.name, extra.measures, extra.hours, found, _score(found, target) / extra.hours, None,
                   extra.invented)
        )  # fmt: skip
    options.sort(key=lambda o: -o.per_hour)
    theta = {c: _named(what.quantiles(name=c)) for c in what.classes} | {"all": _named(what.quantiles())}
    dates = _shift_dates(goal, event.t_E.value)
    last = None
    if options and options[0].per_hour > 0:
        last = np.inf
        by_name = {f.name: f for f in tools[0]}
        if options[0].name in by_name:
            last = _last_start(what, goal, curve, by_name[options[0].name], line, day, event, aim, target, outcome_seed)
    plan = EventPlan(
        event.name, what.classes, what.probability, theta, goal.t_0, goal.u_0, dates,
        _magnitudes(goal, event.t_E.value, day, dates), survey_alone, tuple(options), last, "",
    )  # fmt: skip
    return replace(plan, reason=_reason(plan, aim), changed=_changed(plan, before)), not inside


def _score(found, target):
    return max(found.target_bits if target else found.bits, 0.0)


def _named(q):
    return None if q is None else dict(zip(("p16", "p50", "p84"), q))


def _typical(what, sharp):
    """Median relative error of theta_E."""
    x = np.concatenate([(1.0 / np.maximum(s[2] * t, 1e-12)).ravel() for s, t in zip(sharp, what.theta_E)])
    w = np.concatenate([v.ravel() for v in what.weight])
    order = np.argsort(x)
    cum = np.cumsum(w[order])
    value = float(x[order][np.searchsorted(cum, 0.5 * cum[-1])])
    return value if value < 1e6 else float("inf")


def _shift_dates(goal, t_E):
    """MJD of u = sqrt 2 on the straight path."""
    if abs(goal.u_0) >= np.sqrt(2.0):
        return ()
    reach = t_E * np.sqrt(2.0 - goal.u_0**2)
    return goal.t_0 - reach, goal.t_0 + reach


def _magnitudes(goal, t_E, day, dates):
    def at(mjd):
        u = np.hypot(goal.u_0, (mjd - goal.t_0) / t_E)
        return float(add(goal.source - 2.5 * np.log10(magnification(u)), goal.blend))

    out = {"peak": at(goal.t_0), "now": at(day)}
    return out | ({"largest_shift": at(dates[1])} if dates else {})


def _last_start(what, goal, curve, facility, line, day, event, aim, target, seed):
    """Latest start with half the gain of starting now, by halving."""

    def gain(start):
        sharp, spent = plans.sharpness(what, goal, curve, plans.Started.at(facility, start), line, members=24)
        if spent <= 0:
            return 0.0
        found = worth.of_widths(what, sharp, np.random.default_rng(seed), _QUICK)
        return _score(worth.worth(what, found, aim, base), target)

    sharp, _ = plans.sharpness(what, goal, curve, None, line, members=24)
    base = worth.of_widths(what, sharp, np.random.default_rng(seed), _QUICK)
    wanted = _HALF * gain(day)
    early, late = day, max(goal.t_0, day) + _AFTER * event.t_E.value
    if not wanted > 0:
        return None
    if gain(late) >= wanted:
        return float("inf")
    for _ in range(5):
        middle = 0.5 * (early + late)
        early, late = (middle, late) if gain(middle) >= wanted else (early, middle)
    return float(early)


def _reason(plan, aim):
    best = plan.best
    word = aim.replace("_", " ")
    if best is None or best.per_hour <= 0:
        return "nothing that can still be measured tells its classes apart"
    p, then = plan.p(aim), best.worth.target_sure
    lead = f"{word} {p:.2g} now"
    if best.worth.sure < _SHOWN_SURE:
        return f"{lead}; {best.name} says a little, but hardly settles it"
    return f"{lead}; after {best.name} above 0.95 with chance {then:.2g}, some class so with {best.worth.sure:.2g}"


def _changed(plan, before):
    """One line on what is new since the last run."""
    if before is None:
        return "new"
    old = before.get("follow_up") or {}
    was = old.get("probability_running") or before.get("probability") or {}
    parts = []
    moved = [(abs(plan.p(c) - was[c]), c) for c in plan.classes if isinstance(was.get(c), (int, float))]
    if moved and max(moved)[0] >= 0.02:
        c = max(moved)[1]
        parts.append(f"P({c.replace('_', ' ')}) {was[c]:.2f} to {plan.p(c):.2f}")
    best = plan.best.name if plan.best else None
    if old and old.get("best") != best:
        parts.append(f"best option {old.get('best')} to {best}")
    score = plan.best.per_hour if plan.best else 0.0
    past = old.get("score_per_hour")
    if past is not None and abs(score - past) > 0.1 * max(past, score) and max(past, score) > 1e-4:
        parts.append(f"bits per hour {past:.3g} to {score:.3g}")
    return "; ".join(parts) or "no change"
