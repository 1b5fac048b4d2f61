"""What kind of lens an observed event had: probabilities, mass and distance, and what they rest on.

P(class | data) goes with the integral of the class's event rate times the likelihood over everything not measured;
detection efficiency at given data is the same for all classes and drops out.
"""

from collections import OrderedDict
from dataclasses import asdict
from threading import Lock

import astropy.units as u
import numpy as np

from ..errors import ConvergenceError, InputError
from ..lensing import rates
from ..lensing.kept import Kept, folder_for
from ..lensing.points import LAYOUT, Axes, EventRates, Points
from ..parallel import run_map
from ..scenario import Scenario, resolve
from ..scenario.numerics import Numerics
from ..units import strip
from .lens_limit import LensLimit
from .likelihood import likelihood
from .odds_result import EventOdds, Odds, SolutionOdds

__all__ = ["OUTLIER", "class_probabilities", "densities", "event_odds", "event_rates", "odds"]

#: share of events whose fit is wrong in everything but t_E; our choice
OUTLIER = 0.01
_FEWEST = 100  # effective samples below which no odds are given
_KEEP = 2  # sightlines held in memory at a time
_held = OrderedDict()
_holding = Lock()


def event_rates(l, b, scenario="default", keep=None):
    """Return the event rate density of a sightline, held for the next call.

    Parameters
    ----------
    l, b : float
        Galactic coordinates [deg].
    scenario : Scenario or str
    keep : str or Path, optional
        Folder of files that hold it for later runs: taken from there where it was made under the same assumptions by
        the same version, else made and written. The numbers are the same.

    Returns
    -------
    EventRates

    Raises
    ------
    InputError, ConvergenceError
        Unknown scenario; no star passes the source rule; the folder cannot be made.
    DataFileError
        A file could not be written.
    """
    if not isinstance(scenario, Scenario):
        scenario = Scenario.read(scenario)
    key = (scenario.hash, round(float(l), 9), round(float(b), 9))
    with _holding:
        if key not in _held or keep is not None and not _held[key].is_kept(keep):
            made = _event_rates(l, b, scenario, keep)
            while len(_held) >= _KEEP:
                _held.popitem(last=False)
            _held[key] = made
        _held.move_to_end(key)
        return _held[key]


def _event_rates(l, b, scenario, keep=None):
    model = resolve(scenario)
    x, y = np.radians(float(l)), np.radians(float(b))
    toward = model.sources.toward(x, y, model.galaxy)
    numerics = Numerics(**scenario.numerics)
    ready = rates.prepare(model, model.galaxy.sightline(x, y), toward, numerics)
    kept = None
    if keep is not None:
        place = {"l_deg": round(float(l), 9), "b_deg": round(float(b), 9)}
        kept = Kept(keep, {"scenario_hash": scenario.hash, **place, "numerics": asdict(numerics), "layout": LAYOUT})
    return EventRates(ready, kept=kept)


def odds(sample, scenario="default", *, outlier=OUTLIER, tolerance=0.05, spread=(), jobs=1, progress=None, keep=None):
    """Return the odds of lens classes of every event of a sample.

    Parameters
    ----------
    sample : Sample or iterable of Observed
    scenario : Scenario or str
        Every assumption.
    outlier : float
        Probability that everything in a fit but its t_E is wrong and says nothing: each measured pi_E, theta_E and
        mu_rel is then spread evenly in the logarithm over four decades. That branch takes a geocentric t_E as
        heliocentric.
    tolerance : float
        Events within this angle [deg] of an earlier one share its sightline.
    spread : iterable of (str, Scenario)
        Further scenarios, whose probabilities are shown as a range.
    jobs : int
        Threads over the events of a sightline.
    progress : str, optional
        Label of a progress bar.
    keep : str or Path, optional
        Folder that keeps the sightlines' rate densities for later runs, as in `event_rates`.

    Returns
    -------
    Odds

    Raises
    ------
    InputError
        Outlier share or tolerance out of range; unknown scenario; the folder cannot be made.
    DataFileError
        A sightline could not be written to the folder.
    """
    if not isinstance(scenario, Scenario):
        scenario = Scenario.read(scenario)
    if not 0.0 <= outlier <= 0.5:
        raise InputError(f"outlier: {outlier:g} given, must be between 0 and 0.5")
    if not 0.0 <= tolerance <= 5.0:
        raise InputError(f"tolerance: {tolerance:g} deg given, must be between 0 and 5")
    if keep is not None:
        # not after minutes of work
        folder_for(keep)
    events = list(sample)
    groups = _shared_sightlines(events, tolerance)
    results, failed, told = {}, {}, {}

    def one(group):
        place, members = group
        out = run_map(judge, [(i, place, scenario) for i in members], jobs)
        ranges = {i: [] for i in members}
        for _, other in spread:
            for i, found in zip(members, run_map(judge, [(i, place, other) for i in members], jobs)):
                if not isinstance(found, str):
                    ranges[i].append(found.probability)
        return list(zip(members, out)), ranges

    def judge(job):
        """Odds of one event, or why there are none."""
        i, place, assumed = job
        try:
            line = event_rates(*place, assumed, keep)
            found = event_odds(events[i], line, outlier)
            told.update(dict.fromkeys(line.notes))
            return found
        except (InputError, ConvergenceError) as error:
            return f"{events[i].name}: {error}" if events[i].name not in str(error) else str(error)

    for out, ranges in run_map(one, groups, progress=progress):
        for i, result in out:
            if isinstance(result, str):
                failed[i] = result
            else:
                results[i] = result.with_range(ranges[i]) if ranges[i] else result
    model = resolve(scenario)
    notes = [*getattr(sample, "notes", ()), *model.warnings, *told]
    notes += [failed[i] for i in sorted(failed)]
    return Odds(
        events=tuple(results[i] for i in sorted(results)),
        scenario=scenario,
        outlier=outlier,
        notes=tuple(notes),
        failed=tuple(failed[i] for i in sorted(failed)),
        references=model.references,
        sample=getattr(sample, "name", ""),
        invented=getattr(sample, "invented", False),
        spread=tuple(label for label, _ in spread),
    )


def _shared_sightlines(events, tolerance):
    """Places and the events near each, in order of first appearance."""
    places, members = [], []
    for i, event in enumerate(events):
        if places:
            at = np.array(places)
            away = np.hypot(
                ((at[:, 0] - event.l + 180.0) % 360.0 - 180.0) * np.cos(np.radians(event.b)), at[:, 1] - event.b
            )
            k = int(np.argmin(away))
            if away[k] <= tolerance:
                members[k].append(i)
                continue
        places.append((event.l, event.b))
        members.append([i])
    return list(zip(places, members))


def event_odds(event, line, outlier=OUTLIER):
    """Return the odds of one event on a sightline's rates.

    Parameters
    ----------
    event : Observed
    line : EventRates
        Of the event's place.
    outlier : float
        As in `odds`.

    Returns
    -------
    EventOdds

    Raises
    ------
    InputError
        Posterior samples that cover the rates with fewer than 100 effective ones.
    """
    classes = [c.name for c in line.classes]
    n = len(classes)
    rate = line.rates()
    found = []
    for solution in event.solutions:
        found.append(_solution(solution, event, line, n))
    weight = np.exp(-0.5 * np.array([s.delta_chi2 for s in event.solutions]))
    main, wrong = (sum(w * f[k] for w, f in zip(weight, found)) for k in ("main", "wrong"))
    if not (np.all(np.isfinite(main)) and main.sum() + wrong.sum() > 0):
        raise ConvergenceError(f"{event.name}: no lens of this scenario explains the data")
    samples = [f["effective"] for f in found if f["effective"] is not None]
    if samples and min(samples) < _FEWEST:
        raise InputError(
            f"{event.name}: only {min(samples):.0f} effective samples where the rates are, at least {_FEWEST} are "
            "needed; draw more, or from a prior nearer to what the Galaxy makes"
        )
    histogram = sum(w * ((1 - outlier) * f["hist"] + outlier * f["hist_wrong"]) for w, f in zip(weight, found))
    solutions = tuple(
        SolutionOdds(s.name, s.delta_chi2, _mixed(f["main"], f["wrong"], outlier)[0], w * f["main"].sum(), f["rests"])
        for s, w, f in zip(event.solutions, weight, found)
    )
    probability, share = _mixed(main, wrong, outlier)
    floors = {f: _mixed(main, wrong, min(outlier * f, 1.0))[0] for f in (0.1, 10.0)}
    return EventOdds(
        name=event.name,
        l=event.l,
        b=event.b,
        frame=event.frame,
        classes=tuple(classes),
        probability=probability,
        prior=rate / rate.sum(),
        outlier_weight=share,
        floors=floors,
        histogram=histogram,
        solutions=solutions,
        effective_samples=min(samples) if samples else None,
        rests=found[0]["rests"],
        t_E=event.t_E,
        pi_E=_size(event),
        pi_E_range=_reach(event),
    )


def _mixed(main, wrong, outlier):
    """Probabilities with a share of wrong fits, and the weight of that branch."""
    if not wrong.sum() > 0:
        return main / main.sum(), 0.0
    total = (1 - outlier) * main + outlier * wrong
    if not total.sum() > 0:
        raise ConvergenceError("odds: no lens of this model explains the data; allow for a wrong fit with --outlier")
    return total / total.sum(), min(float(outlier * wrong.sum() / total.sum()), 1.0)


def _solution(solution, event, line, n):
    like = likelihood(solution, event)
    hist = np.zeros((n, 4, Axes.n, 2))
    light = LensLimit(solution.plain["I_lens_limit"], line) if "I_lens_limit" in solution.plain else None
    by_point = _main(like, line, light, hist)
    main = by_point.sum(axis=1)
    wrong, hist_wrong = np.zeros(n), np.zeros_like(hist)
    if like.wrong > 0:
        factor = like.wrong
        if like.known is not None:
            factor *= line.source_evidence(like.known)
        wrong = factor * line.timescale_only(*like.t_only, hist_wrong)
        hist_wrong *= factor
    effective = None
    if like.draws:
        each = by_point.sum(axis=0)
        effective = float(each.sum() ** 2 / max((each**2).sum(), 1e-300))
    rests = like.rests_on + (("lens light",) if light is not None else ())
    return {
        "main": main, "wrong": wrong, "hist": hist, "hist_wrong": hist_wrong, "effective": effective, "rests": rests,
    }  # fmt: skip


def _main(like, line, light=None, hist=None):
    """Rates by class and point where the fit is right."""
    if like.rests_on == ("t_E",) and light is None and like.points.earth == (0.0, 0.0):
        return line.timescale_only(*like.t_only, hist)[:, None]
    return line.evaluate(like.points, like.known, light, hist)


def _size(event):
    """Size of the best solution's parallax, or None."""
    best = event.best_solution
    m = best.measured
    if "pi_E" in m:
        return m["pi_E"].value
    if "pi_EN" in m:
        return float(np.hypot(m["pi_EN"].value, m["pi_EE"].value))
    if best.draws is not None:
        c = best.draws.columns
        size = c.get("pi_E", np.hypot(c["pi_EN"], c["pi_EE"]) if "pi_EN" in c else None)
        return None if size is None else float(np.median(size))
    return None


def _reach(event):
    """Lower and upper end of the error bar of that size, or None."""
    best = event.best_solution
    m = best.measured
    if "pi_E" in m:
        return max(m["pi_E"].value - m["pi_E"].lo, 0.0), m["pi_E"].value + m["pi_E"].hi
    if "pi_EN" in m:
        size, along = best.parallax()
        return max(size - along, 0.0), size + along
    if best.draws is not None and _size(event) is not None:
        c = best.draws.columns
        size = c.get("pi_E", np.hypot(c["pi_EN"], c["pi_EE"]) if "pi_EN" in c else None)
        return tuple(float(x) for x in np.quantile(size, [0.16, 0.84]))
    return None


def densities(event, scenario, t_E, pi_E, n=(61, 57)):
    """Return the predicted densities of the classes over t_E and pi_E on an event's sightline.

    Parameters
    ----------
    event : EventOdds or Observed
        Says where.
    scenario : Scenario or str
    t_E, pi_E : (float, float)
        Ranges [d, pure number].
    n : (int, int)
        Points.

    Returns
    -------
    t_E, pi_E, classes, density : ndarray, ndarray, list of str, ndarray (classes, n, m)
        Heliocentric; events per source, year, unit ln t_E and ln pi_E.
    """
    line = event_rates(event.l, event.b, scenario)
    t, pi = np.geomspace(*t_E, n[0]), np.geomspace(*pi_E, n[1])
    T, P = (a.ravel() for a in np.meshgrid(t, pi, indexing="ij"))
    rate = line.evaluate(Points(T, P, np.ones(T.size)))
    return t, pi, [c.name for c in line.classes], rate.reshape(-1, *n)


def class_probabilities(
    l, b, measured, scenario="default", *, outlier=OUTLIER, frame="heliocentric", t_0par=None, jobs=1
):  # fmt: skip
    """Return class probabilities of many events of one sightline, given as arrays.

    Parameters
    ----------
    l, b : Quantity
        Galactic coordinates of the sightline.
    measured : dict of str to (ndarray, ndarray)
        Values and one-sigma errors in d, mas, mas/yr, kpc, by the names of `observed.MEASURED`; NaN: not measured.
    scenario : Scenario or str
    outlier : float
        As in `odds`; 0 for mock events whose errors are what they say.
    frame, t_0par : str, float
        Of all events.
    jobs : int
        Threads.

    Returns
    -------
    classes, probability : list of str, ndarray (n, classes)
        NaN where nothing explains an event.

    Raises
    ------
    InputError
        Unknown quantity, or arrays of unequal length.
    """
    from .observed import MEASURED, Measure, Observed, Solution

    for name in measured:
        if name not in MEASURED:
            from ..errors import one_of

            one_of("measured", name, MEASURED)
    arrays = {k: [np.atleast_1d(np.asarray(x, dtype=float)) for x in v] for k, v in measured.items()}
    n = {a.size for pair in arrays.values() for a in pair}
    if len(n) != 1 or "t_E" not in arrays:
        raise InputError("measured: t_E is needed, and values and errors of equal length")
    place = strip("l", l, u.deg, shape=()), strip("b", b, u.deg, low=-90.0, high=90.0, shape=())
    line = event_rates(*place, scenario)
    out = np.full((n.pop(), len(line.classes)), np.nan)

    def one(i):
        found = {k: Measure(float(v[i]), float(e[i]), float(e[i])) for k, (v, e) in arrays.items() if np.isfinite(v[i])}
        event = Observed(f"event {i + 1}", *place, frame, t_0par, (Solution("", found),))
        try:
            out[i] = _mixed(*_bulk(event, line), outlier)[0]
        except ConvergenceError:
            pass

    run_map(one, range(len(out)), jobs)
    return [c.name for c in line.classes], out


def _bulk(event, line):
    like = likelihood(event.solutions[0], event)
    main = _main(like, line).sum(axis=1)
    wrong = np.zeros(main.size)
    if like.wrong > 0:
        factor = like.wrong * (1.0 if like.known is None else line.source_evidence(like.known))
        wrong = factor * line.timescale_only(*like.t_only)
    if not main.sum() + wrong.sum() > 0:
        raise ConvergenceError(f"{event.name}: no lens of this scenario explains the data")
    return main, wrong
