"""An observed sample against what a scenario says the survey finds: the forecast is folded, the data are left alone."""

from dataclasses import dataclass, replace
from typing import NamedTuple

import numpy as np
from scipy.special import gammaln
from scipy.stats import poisson

from .._version import __version__
from ..errors import InputError, one_of
from ..units import DAYS_PER_YEAR
from .fold import LN_T, STEP, Errors, assign, heliocentric
from .goodness import Simulated, anderson_darling, deviance, kolmogorov_smirnov, p_value, tail_test
from .shapes import Parallaxes, Shapes

__all__ = ["COUNTS", "Comparison", "Estimate", "compare"]

COUNTS = ("auto", "absolute", "shape")
_BIN = 0.2 * np.log(10.0)
_MAGNITUDES = np.arange(13.0, 25.01, 0.5)
_FEW = 5  # events with a parallax or magnitude from which these are tested
_ENDS = 5e-4  # of the predicted distribution, left out at either end of the bins


class Estimate(NamedTuple):
    """An event-weighted estimate of the data, and the forecast of the same inside the efficiency curve."""

    value: float
    error: float
    largest_share: float
    predicted: float
    events: int


class FieldCount(NamedTuple):
    """Events of one field: observed, expected, and exact Poisson chances of so few and so many (NaN unanchored)."""

    name: str
    observed: int
    expected: float
    anchored: bool
    p_at_most: float
    p_at_least: float


@dataclass(frozen=True, eq=False)
class Comparison:
    """A sample beside one scenario's forecast.

    Attributes
    ----------
    sample : Sample
    folded : Folded
    events : tuple of Observed
        Those inside the fields.
    field : ndarray of int, shape (n,)
    x, sigma : ndarray, shape (n,)
        ln t_E (heliocentric where that can be had) and its error.
    counts : str
        "absolute" (every field's expected number counts), "shape" (all scaled to the observed numbers), or "mixed".
    edges : ndarray, shape (m + 1,)
        Bins of t_E [d].
    observed : ndarray, shape (m,)
    predicted : ndarray, shape (C, m)
        Expected in the bins by class, errors of measurement and efficiency folded in.
    tests : dict of str to Simulated
        ks, anderson_darling, deviance of t_E; pi_E_ks, pi_E_anderson_darling given t_E; sky; magnitude.
    tail : Tail
    tail_by_class : ndarray, shape (C,)
    optical_depth, rate : Estimate or None
        Event-weighted; None without stated stars.
    fields : tuple of FieldCount
    magnitudes : dict or None
        edges, observed, predicted.
    parallax_shares : ndarray
        Share of pi_E given t_E of each event that has one.
    fitted : (float, float) or None
        Shift of ln t_E and stretch, where they were fitted.
    ln_likelihood : dict of str to float
        t_E, pi_E, counts, total.
    outside : tuple of str
        Events in no field.
    notes : tuple of str
    seed : int
    """

    sample: object
    folded: object
    events: tuple
    field: np.ndarray
    x: np.ndarray
    sigma: np.ndarray
    errors: Errors
    counts: str
    edges: np.ndarray
    observed: np.ndarray
    predicted: np.ndarray
    tests: dict
    tail: object
    tail_by_class: np.ndarray
    optical_depth: Estimate | None
    rate: Estimate | None
    fields: tuple
    magnitudes: dict | None
    parallax_shares: np.ndarray
    fitted: tuple | None
    ln_likelihood: dict
    outside: tuple
    notes: tuple
    seed: int
    version: str = __version__

    @property
    def classes(self):
        """Lens classes in the order of `predicted`."""
        return self.folded.classes

    def header(self):
        """Return the line above every table."""
        f = self.folded
        if f.survey is not None:
            where = f.meta["header"]
        else:
            where = f"{f.sightlines[0].header()}; {len(f.names)} sightlines; {f.curves[0].describe()}"
        return f"{where}; counts: {self.counts}"

    def meta(self):
        """Return how this was made."""
        kept = {k: v for k, v in self.folded.meta.items() if k not in ("header", "warnings", "seed")}
        return {
            **kept,
            "header": self.header(),
            "sample": self.sample.name,
            "sample_invented": self.sample.invented,
            "events": len(self.events),
            "counts": self.counts,
            "fitted": None if self.fitted is None else dict(zip(("shift_ln_t_E", "stretch"), self.fitted)),
            "seed": self.seed,
            "notes": list(self.notes),
            "warnings": list(self.folded.warnings),
        }

    def to_table(self, by="bin"):
        """Return a QTable.

        Parameters
        ----------
        by : str
            "bin": a row per bin of t_E, observed and expected by class; "field": a row per field; "test": a row per
            test; "event": a row per event, with the share of its field's events that are shorter.

        Raises
        ------
        InputError
            Unknown `by`.
        """
        import astropy.units as u
        from astropy.table import QTable

        one_of("by", by, ("bin", "field", "test", "event"))
        table = QTable()
        if by == "bin":
            table["t_E_low"], table["t_E_high"] = self.edges[:-1] * u.day, self.edges[1:] * u.day
            table["observed"], table["expected"] = self.observed, self.predicted.sum(axis=0)
            for name, row in zip(self.classes, self.predicted):
                table[f"expected_{name}"] = row
        elif by == "field":
            for key in FieldCount._fields:
                table[key] = [getattr(f, key) for f in self.fields]
        elif by == "test":
            table["test"] = list(self.tests)
            table["value"] = [t.value for t in self.tests.values()]
            table["p"] = [t.p for t in self.tests.values()]
            table["simulations"] = [t.n for t in self.tests.values()]
        else:
            table["event"] = [e.name for e in self.events]
            table["field"] = [self.folded.names[i] for i in self.field]
            table["t_E"], table["sigma_ln_t_E"] = np.exp(self.x) * u.day, self.sigma
        for name in table.colnames:
            if getattr(table[name], "dtype", None) is not None and table[name].dtype.kind == "f":
                table[name].info.format = ".5g"
        table.meta.update(self.meta())
        return table

    def to_pandas(self, by="bin"):
        """Return `to_table` as a pandas DataFrame, units dropped."""
        return self.to_table(by).to_pandas()

    def to_dict(self):
        """Return plain numbers under the keys of ``lensrate compare --json``."""

        def plain(x):
            return None if x is None else x._asdict()

        bins = [
            {"t_E_low_d": float(a), "t_E_high_d": float(b), "observed": int(n), "expected": float(p.sum()),
             "by_class": dict(zip(self.classes, map(float, p)))}
            for a, b, n, p in zip(self.edges[:-1], self.edges[1:], self.observed, self.predicted.T)
        ]  # fmt: skip
        return {
            "sample": self.sample.name, "invented": self.sample.invented, "frame": "heliocentric",
            "header": self.header(), "events": len(self.events), "counts": self.counts,
            "expected": {**dict(zip(self.classes, map(float, self.predicted.sum(axis=1)))),
                         "all": float(self.predicted.sum())},
            "bins": bins, "fields": [f._asdict() for f in self.fields], "outside": list(self.outside),
            "tests": {k: t._asdict() for k, t in self.tests.items()},
            "tail": {**self.tail._asdict(), "by_class": dict(zip(self.classes, map(float, self.tail_by_class)))},
            "optical_depth": plain(self.optical_depth), "rate_per_star_per_yr": plain(self.rate),
            "magnitudes": self.magnitudes and {k: list(map(float, v)) for k, v in self.magnitudes.items()},
            "fitted": self.meta()["fitted"], "ln_likelihood": self.ln_likelihood, "seed": self.seed,
            **self.folded.scenario.made(),
            "notes": list(self.notes), "warnings": list(self.folded.warnings),
            "references": list(self.folded.references), "version": self.version,
        }  # fmt: skip

    def plot(self, ax=None, **style):
        """Draw histogram and prediction; returns the Axes (and that of the ratio, where `ax` is not given)."""
        import importlib

        return importlib.import_module("lensrate.plots").comparison(self, ax=ax, **style)

    def _repr_html_(self):
        from html import escape

        return f"<p>{escape(self.sample.name)}<br>{escape(self.header())}</p>" + self.to_table()._repr_html_()


def compare(sample, folded, field=None, *, counts="auto", fit=False, tail=100.0, simulations=500, seed=1):
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
    truth whatever the fields' numbers. Event-weighted optical depth pi / (2 N T u_0) sum t_E / efficiency and its
    variance, the sum of squares: the only places where data are divided by efficiency.
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
    n = np.bincount(field, minlength=len(folded.names))
    mean = np.where(anchored, shapes.expected[g], n)
    rng = np.random.default_rng(seed)

    edges = _edges(x, shapes, g, mean)
    bins = shapes.in_bins(g, edges)
    observed = np.histogram(x, edges)[0]
    predicted = _by_class(folded, errors, edges, bins, mean)
    impossible = [events[i].name for i in np.flatnonzero(~(shapes.density(g, x, field) > 0))]
    if impossible:
        notes.append(
            f"{len(impossible)} events have a t_E of which the forecast finds none: {', '.join(impossible[:5])}"
        )
    tests = _timescale_tests(shapes, g, x, field, n, anchored, edges, fit, simulations, rng)
    shares, ln_pi = _parallax_shares(Parallaxes(folded), field, x, sigma, parallax)
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
        expected *= total / mean.sum()
    record = tail_test(tail, expected, int(np.sum(np.exp(x) > tail)), total)
    tau, rate, said = _estimates(folded, events, field, x)
    density = shapes.density(g, x, field)
    ln = {
        "t_E": float(np.sum(np.log(density[density > 0]))),
        "pi_E": float(np.sum(ln_pi[np.isfinite(ln_pi)])),
        "counts": float(np.sum((n * np.log(mean) - mean - gammaln(n + 1))[anchored])) if anchored.any() else 0.0,
    }
    ln["total"] = sum(ln.values())
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


def _timescale_tests(shapes, g, x, field, n, anchored, edges, fit, simulations, rng):
    def statistics(g, x, field, n):
        share = shapes.shares(g, x, field)
        mean = np.where(anchored, shapes.expected[g], n)
        value = deviance(np.histogram(x, edges)[0], mean @ shapes.in_bins(g, edges))
        if x.size == 0:
            return 0.0, 0.0, value
        return kolmogorov_smirnov(share), anderson_darling(share), value

    mine, made = statistics(g, x, field, n), []
    for _ in range(simulations):
        counts = np.where(anchored, rng.poisson(shapes.expected[g]), n)
        drawn, where = shapes.draw(g, counts, rng)
        # what falls outside the bins is as good as at their ends
        drawn = np.clip(drawn, edges[0], edges[-1])
        made.append(statistics(shapes.best(drawn, where) if fit else g, drawn, where, counts))
    names = ("ks", "anderson_darling", "deviance")
    columns = np.array(made).reshape(-1, 3).T
    return {k: Simulated(v, p_value(v, s) if s.size else np.nan, simulations) for k, v, s in zip(names, mine, columns)}


def _uniform_tests(prefix, shares, simulations, rng):
    drawn = rng.random((simulations, shares.size))
    out = {}
    for name, test in (("ks", kolmogorov_smirnov), ("anderson_darling", anderson_darling)):
        value = test(shares)
        p = p_value(value, [test(row) for row in drawn]) if simulations else np.nan
        out[prefix + name] = Simulated(value, p, simulations)
    return out


def _parallax_shares(parallaxes, field, x, sigma, parallax):
    """Shares and ln densities of the parallaxes that there are."""
    rows = [
        parallaxes.given(int(f), float(a), float(s), *p)
        for f, a, s, p in zip(field, x, sigma, parallax)
        if p is not None
    ]
    shares, ln = np.array(rows).reshape(-1, 2).T
    return shares[np.isfinite(shares)], ln


def _sky_test(mean, n, simulations, rng):
    value = deviance(n, mean)
    made = [deviance(rng.poisson(mean), mean) for _ in range(simulations)]
    return Simulated(value, p_value(value, made) if made else np.nan, simulations)


def _magnitudes(folded, events, field, simulations, rng):
    """Source magnitudes observed and expected, and the test of them."""
    seen = [(int(f), e.solutions[0].plain["I_S"]) for f, e in zip(field, events) if "I_S" in e.solutions[0].plain]
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
    t = np.exp(x)
    if curve.second:
        plain = [e.solutions[0].plain.get(curve.second, np.nan) for e in events]
        second = np.abs(np.array(plain))
        efficiency = np.where(np.isfinite(second), curve.of(t, np.nan_to_num(second)), curve.of(t))
    else:
        efficiency = curve.of(t)
    use = efficiency > 0
    said = []
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
    return [{k: c.ln_likelihood[k] - best[k] for k in best} for c in comparisons]


def with_notes(comparison, *more):
    """Return a comparison with further notes."""
    return replace(comparison, notes=(*comparison.notes, *more))
