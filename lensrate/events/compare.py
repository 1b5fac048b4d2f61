"""An observed sample against what a scenario says the survey finds: the forecast is folded, the data are left alone."""

from dataclasses import dataclass

import numpy as np
from scipy.special import gammaln, xlogy
from scipy.stats import poisson

from ..errors import InputError, one_of
from ..lensing.sampler import seeds
from ..parallel import run_map
from ..units import DAYS_PER_YEAR
from .comparison import OUTLIER, Comparison, Estimate, FieldCount
from .fold import LN_T, STEP, Errors, assign, heliocentric
from .goodness import Simulated, anderson_darling, deviance, kolmogorov_smirnov, p_value, tail_test
from .shapes import Parallaxes, Shapes

__all__ = ["COUNTS", "Comparison", "Estimate", "compare", "differences"]

COUNTS = ("auto", "absolute", "shape")
_BIN = 0.2 * np.log(10.0)
_MAGNITUDES = np.arange(13.0, 25.01, 0.5)
_FEW = 5  # events with a parallax or magnitude from which these are tested
_CHUNK = 50  # simulated samples that share one stream of random numbers; part of what a seed means
_LN_PI = np.log(1e6)  # span of ln pi_E of such events
_ENDS = 5e-4  # of the predicted distribution, left out at either end of the bins


def compare(
    sample, folded, field=None, *, counts="auto", fit=False, tail=100.0, simulations=500, seed=1, executor=None
):
    """Compare observed events with a folded forecast.

    Parameters
    ----------
    sample : Sample
    folded : Folded
        From `fold.fold_campaign` (events go to fields by position) or `fold.fold_groups`.
    field : ndarray of int, optional
        Each event's group, for `fold_groups`.
    counts : str
        "absolute": expected numbers count, which every field must anchor by its stated stars; "shape": only how events
        are spread, each field scaled to its observed number; "auto": absolute where anchored.
    fit : bool
        Fit a shift and a stretch of ln t_E to the sample before testing; the simulated samples are fitted likewise.
    tail : float
        Events longer than this [d] are the long tail.
    simulations : int
        Samples drawn from the forecast for the null distributions; 0 for none (p is then NaN).
    seed : int
    executor : object with ``map``, optional
        For the simulations.

    Returns
    -------
    Comparison

    Raises
    ------
    InputError
        No event in any field; absolute counts without stated stars; impossible tail.

    Notes
    -----
    Each event's t_E becomes the share of its own field's predicted events that are shorter, evenly spread under the
    truth whatever the fields' numbers. In ln L a share `OUTLIER` of events is none of the forecast's: even in ln t_E
    and ln pi_E, so that a strange event costs what it must and not everything. Event-weighted optical depth
    pi / (2 N T u_0) sum t_E / efficiency and its variance, the sum of squares: the only places where data are divided
    by efficiency.
    """
    one_of("counts", counts, COUNTS)
    if not 0 < tail < 1e5:
        raise InputError(f"tail: {tail:g} d given, must be above 0 and below 1e5")
    events, field, outside = _placed(sample, folded, field)
    anchored = _anchored(folded, counts)
    x, sigma, parallax, notes = heliocentric(events)
    notes = [*sample.notes, *_said(outside), *notes]
    errors = Errors.of(x, sigma)
    shapes = Shapes(folded, errors, fit)
    g = shapes.best(x, field) if fit else 0
    if shapes.at_the_edge(g):
        notes.append(
            f"the fit ends at the farthest that is tried: t_E times {np.exp(shapes.places[g][0]):.2f}, spread times "
            f"{shapes.places[g][1]:.2f}"
        )
    n = np.bincount(field, minlength=len(folded.names))
    mean = np.where(anchored, shapes.expected[g], n)
    own, second = seeds(seed).spawn(2)
    rng = np.random.default_rng(second)

    edges = _edges(x, shapes, g, mean)
    bins = shapes.in_bins(g, edges)
    observed = np.histogram(x, edges)[0]
    predicted = _by_class(folded, errors, edges, bins, mean)
    density = shapes.density(g, x, field)
    notes += _impossible(events, ~(density > 0), "a t_E of which the forecast finds none")
    null = _Null(shapes, None if fit else g, shapes.expected[g], n, anchored, edges)
    tests = null.tests(g, x, field, simulations, own, executor)
    shares, ln_pi, strange = _parallax_shares(Parallaxes(folded), field, x, sigma, parallax)
    notes += _impossible(events, strange, "a pi_E that the forecast does not know at their t_E")
    if shares.size >= _FEW:
        tests.update(_uniform_tests("pi_E_", shares, simulations, rng))
    if folded.survey is not None and anchored.any():
        tests["sky"] = _sky_test(mean[anchored], n[anchored], simulations, rng)
    magnitudes, test = _magnitudes(folded, events, field, simulations, rng)
    if test is not None:
        tests["magnitude"] = test

    whole = _by_class(folded, errors, np.log([tail, 1e5]), shapes.in_bins(g, np.log([tail, 1e5])), mean)[:, 0]
    total = None if anchored.all() else len(events)
    expected = float(whole.sum())
    if total is not None and anchored.any():
        # a shape's share of the events there are
        scale = total / mean.sum()
        expected, whole = expected * scale, whole * scale
    record = tail_test(tail, expected, int(np.sum(np.exp(x) > tail)), total)
    tau, rate, said = _estimates(folded, events, field, x)
    ln = {
        "t_E": float(np.sum(np.log((1 - OUTLIER) * density + OUTLIER / (LN_T[-1] - LN_T[0])))),
        "pi_E": float(np.sum(ln_pi)),
        "counts": float(np.sum(_ln_poisson(n[anchored], mean[anchored]))),
    }
    ln["total"] = sum(ln.values())
    lost = np.array(folded.names)[anchored & (n > 0) & ~(mean > 0)]
    if lost.size:
        notes.append(
            f"{int(n[anchored & ~(mean > 0)].sum())} events lie where the forecast expects none ({', '.join(lost)}): "
            "ln L of the counts is minus infinity"
        )
    kind = "absolute" if anchored.all() else "mixed" if anchored.any() else "shape"
    if kind == "mixed":
        names = ", ".join(np.array(folded.names)[~anchored])
        notes.append(f"no stated number of stars in {names}: scaled to the events observed there")
    return Comparison(
        sample, folded, events, field, x, sigma, errors, kind, np.exp(edges), observed, predicted, tests, record, whole,
        tau, rate, _field_counts(folded, n, mean, anchored), magnitudes, shares,
        tuple(map(float, shapes.places[g])) if fit else None, ln, tuple(e.name for e in outside),
        tuple([*notes, *said]), seed,
    )  # fmt: skip


def _placed(sample, folded, field):
    """Events inside the fields, their fields, and those outside."""
    if not len(sample):
        raise InputError(f"sample '{sample.name}': no events")
    if folded.survey is None:
        if field is None or len(field) != len(sample):
            raise InputError("field: the group of every event is needed, as `fold.grouped` returns it")
        return tuple(sample.events), np.asarray(field), ()
    index = assign(sample.events, folded.survey.fields)
    inside = tuple(e for e, i in zip(sample.events, index) if i >= 0)
    outside = tuple(e for e, i in zip(sample.events, index) if i < 0)
    if not inside:
        shown = ", ".join(f"{e.name} (l = {e.l:.2f}, b = {e.b:.2f})" for e in outside[:3])
        raise InputError(
            f"sample '{sample.name}': none of its {len(outside)} events lies in a field of campaign "
            f"'{folded.survey.name}'; the first: {shown}"
        )
    return inside, index[index >= 0], outside


def _said(outside):
    if not outside:
        return []
    names = ", ".join(f"{e.name} ({e.l:.2f}, {e.b:.2f})" for e in outside[:8])
    more = f" and {len(outside) - 8} more" if len(outside) > 8 else ""
    return [f"{len(outside)} events outside all fields are left out: {names}{more}"]


def _impossible(events, which, what):
    """What is said of events that the forecast calls impossible."""
    rows = np.flatnonzero(which)
    if not rows.size:
        return []
    names = ", ".join(events[i].name for i in rows[:5]) + (" and others" if rows.size > 5 else "")
    return [
        f"{rows.size} events have {what}: {names}; in ln L a share of {OUTLIER:g} of events may be anything, evenly in "
        "the logarithm"
    ]


def _ln_poisson(n, mean):
    """Logarithm of the chance of counts; minus infinity where events are and none can be."""
    return xlogy(n, mean) - mean - gammaln(n + 1)


def _anchored(folded, counts):
    if counts == "absolute" and not folded.anchored.all():
        names = ", ".join(np.array(folded.names)[~folded.anchored][:5])
        raise InputError(
            f"counts: nothing anchors the number of events in {names}; state monitored_stars there in a campaign "
            "(--campaign), or compare shapes (counts = 'shape')"
        )
    return np.zeros(len(folded.names), dtype=bool) if counts == "shape" else folded.anchored.copy()


def _edges(x, shapes, g, mean):
    """Edges of ln t_E bins, 0.2 dex each, over the events and all but the ends of the prediction."""
    below = mean @ shapes.below[g] / max(mean.sum(), 1e-300)
    low = min(x.min(), np.interp(_ENDS, below, LN_T))
    high = max(x.max(), np.interp(1 - _ENDS, below, LN_T))
    return _BIN * np.arange(np.floor(low / _BIN), np.floor(high / _BIN) + 2)


def _by_class(folded, errors, edges, bins, mean):
    """Expected events by class and bin: each class's share of what its field finds there."""
    observed = folded.observed(errors)
    running = np.concatenate([np.zeros((*observed.shape[:2], 1)), np.cumsum(observed, axis=2)], axis=2) * STEP
    cell = np.append(LN_T - 0.5 * STEP, LN_T[-1] + 0.5 * STEP)
    part = np.array([[np.diff(np.interp(edges, cell, row)) for row in rows] for rows in running])  # (F, C, m)
    total = part.sum(axis=1, keepdims=True)
    share = np.divide(part, total, out=np.zeros_like(part), where=total > 0)
    return np.einsum("f,fm,fcm->cm", mean, bins, share)


@dataclass(frozen=True)
class _Null:
    """Tests of timescales: statistics of a sample, and of simulated ones, fitted likewise where `place` is None."""

    shapes: Shapes
    place: int | None
    expected: np.ndarray  # events found by field
    n: np.ndarray  # events seen, where nothing anchors them
    anchored: np.ndarray
    edges: np.ndarray

    def statistics(self, g, x, field, n):
        share = self.shapes.shares(g, x, field)
        mean = np.where(self.anchored, self.shapes.expected[g], n)
        value = deviance(np.histogram(x, self.edges)[0], mean @ self.shapes.in_bins(g, self.edges))
        if x.size == 0:
            return 0.0, 0.0, value
        return kolmogorov_smirnov(share), anderson_darling(share), value

    def __call__(self, job):
        """Statistics of some simulated samples, (n, 3)."""
        g, seed, n = job
        rng, made = np.random.default_rng(seed), []
        for _ in range(n):
            counts = np.where(self.anchored, rng.poisson(self.expected), self.n)
            drawn, where = self.shapes.draw(g, counts, rng)
            # what falls outside the bins is as good as at their ends
            drawn = np.clip(drawn, self.edges[0], self.edges[-1])
            at = self.shapes.best(drawn, where) if self.place is None else self.place
            made.append(self.statistics(at, drawn, where, counts))
        return made

    def tests(self, g, x, field, simulations, seed, executor):
        mine = self.statistics(g, x, field, self.n)
        sizes = [min(_CHUNK, simulations - k) for k in range(0, simulations, _CHUNK)]
        jobs = [(g, s, m) for s, m in zip(seed.spawn(len(sizes)), sizes)]
        columns = np.array([row for rows in run_map(self, jobs, executor=executor) for row in rows]).reshape(-1, 3).T
        names = ("ks", "anderson_darling", "deviance")
        return {
            k: Simulated(v, p_value(v, s) if s.size else np.nan, simulations) for k, v, s in zip(names, mine, columns)
        }


def _uniform_tests(prefix, shares, simulations, rng):
    drawn = rng.random((simulations, shares.size))
    out = {}
    for name, test in (("ks", kolmogorov_smirnov), ("anderson_darling", anderson_darling)):
        value = test(shares)
        p = p_value(value, [test(row) for row in drawn]) if simulations else np.nan
        out[prefix + name] = Simulated(value, p, simulations)
    return out


def _parallax_shares(parallaxes, field, x, sigma, parallax):
    """Shares and ln densities of the parallaxes that there are, and which events have an impossible one."""
    shares, ln, strange = [], [], np.zeros(len(parallax), dtype=bool)
    for i, p in enumerate(parallax):
        if p is None:
            continue
        share, density = parallaxes.given(int(field[i]), float(x[i]), float(sigma[i]), *p)
        anything = OUTLIER / (_LN_PI * max(p[0], p[1]))
        strange[i] = not density > 0
        ln.append(np.log((1 - OUTLIER) * density + anything))
        if np.isfinite(share):
            shares.append(share)
    return np.array(shares), np.array(ln), strange


def _sky_test(mean, n, simulations, rng):
    value = deviance(n, mean)
    made = [deviance(rng.poisson(mean), mean) for _ in range(simulations)]
    return Simulated(value, p_value(value, made) if made else np.nan, simulations)


def _magnitudes(folded, events, field, simulations, rng):
    """Source magnitudes observed and expected, and the test of them."""
    plain = [e.best_solution.plain for e in events]
    seen = [(int(f), p["I_S"]) for f, p in zip(field, plain) if "I_S" in p]
    if len(seen) < _FEW:
        return None, None
    where, magnitude = np.array([f for f, _ in seen]), np.array([m for _, m in seen])
    shares = {f: folded.magnitude_shares(f, _MAGNITUDES) for f in np.unique(where)}
    if any(s is None for s in shares.values()):
        return None, None
    n = np.bincount(where, minlength=len(folded.names))
    mean = sum(n[f] * s for f, s in shares.items())
    observed = np.histogram(np.clip(magnitude, _MAGNITUDES[0], _MAGNITUDES[-1] - 1e-9), _MAGNITUDES)[0]
    value = deviance(observed, mean)
    made = [
        deviance(sum(rng.multinomial(n[f], s) for f, s in shares.items()), mean) for _ in range(simulations)
    ]
    test = Simulated(value, p_value(value, made) if made else np.nan, simulations)
    return {"edges": _MAGNITUDES, "observed": observed, "predicted": mean}, test


def _field_counts(folded, n, mean, anchored):
    out = []
    for name, k, m, a in zip(folded.names, n, mean, anchored):
        low, high = (poisson.cdf(k, m), poisson.sf(k - 1, m)) if a else (np.nan, np.nan)
        out.append(FieldCount(str(name), int(k), float(m), bool(a), float(low), float(high)))
    return tuple(out)


def _estimates(folded, events, field, x):
    """Event-weighted optical depth and rate, where stars are counted."""
    if folded.survey is None:
        return None, None, []
    curve, u_0 = folded.survey.efficiency, folded.survey.u_0_limit
    t, said = np.exp(x), []
    efficiency = np.array([folded.curves[f].of(v) for f, v in zip(field, t)])
    if curve.second:
        plain = [e.best_solution.plain.get(curve.second, np.nan) for e in events]
        second = np.abs(np.array(plain))
        known = np.isfinite(second)
        # the mean over the field's sources where an event's own is not known
        efficiency = np.where(known, curve.of(t, np.where(known, second, curve.grid[0])), efficiency)
        if not known.all():
            missing = int(np.sum(~known))
            said.append(
                f"{missing} events without {curve.second}: the event-weighted estimates take the efficiency averaged "
                "over their field"
            )
    use = efficiency > 0
    if not use.all():
        names = ", ".join(events[i].name for i in np.flatnonzero(~use)[:5])
        said.append(f"{int(np.sum(~use))} events have efficiency 0 and enter no event-weighted estimate: {names}")
    if not use.any():
        return None, None, said
    if not folded.anchored.all():
        said.append("the event-weighted estimates take the number of stars from the source model where none is stated")
    exposure = folded.star_years.sum()
    reach = (folded.efficiency > 0) * folded.rate.sum(axis=1)
    out = []
    for power, factor in ((1.0, 0.5 * np.pi / u_0 / DAYS_PER_YEAR), (0.0, 1.0)):
        terms = t[use] ** power / efficiency[use]
        predicted = factor * float(np.sum(reach * np.exp(power * LN_T))) * STEP / exposure
        out.append(
            Estimate(
                float(factor * terms.sum() / exposure), float(factor * np.sqrt(np.sum(terms**2)) / exposure),
                float(terms.max() / terms.sum()), predicted, int(use.sum()),
            )
        )  # fmt: skip
    return (*out, said)


def differences(comparisons):
    """Return ln L of each of several comparisons of one sample less the best's, by part; the best has 0 in total."""
    best = max(comparisons, key=lambda c: c.ln_likelihood["total"]).ln_likelihood

    def less(a, b):
        # two that are both impossible do not differ
        return 0.0 if a == b else a - b

    return [{k: less(c.ln_likelihood[k], best[k]) for k in best} for c in comparisons]
