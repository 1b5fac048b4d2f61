"""A comparison as it is reported: numbers by bin, field, test and event, tables, plain dictionaries."""

from dataclasses import dataclass
from typing import NamedTuple

import numpy as np

from .._version import __version__
from ..errors import one_of
from .fold import Errors

__all__ = ["OUTLIER", "Comparison", "Estimate", "FieldCount"]

#: share of events in ln L that may be none of the forecast's, spread evenly over ln t_E and ln pi_E; our choice
OUTLIER = 1e-3


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
        t_E, pi_E, counts, total; minus infinity where the forecast expects no event and there are some.
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
            "outlier_share": OUTLIER,
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
            "fitted": self.meta()["fitted"], "ln_likelihood": self.ln_likelihood, "outlier_share": OUTLIER,
            "seed": self.seed,
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
