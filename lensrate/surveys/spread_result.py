"""What `spread` returns: numbers under every assumption, their ranges, and which assumption moves what."""

import importlib
import math
from dataclasses import dataclass, field
from typing import NamedTuple

import astropy.units as u
import numpy as np

from .._version import __version__
from ..errors import one_of
from ..scenario import Scenario
from .family import Family

__all__ = ["Range", "Row", "Spread", "Weighted"]

_JSON = {"rate": "rate_per_star_per_yr", "mean_t_E": "mean_t_E_d", "median_t_E": "median_t_E_d"}


@dataclass(frozen=True)
class Row:
    """One alternative alone: its numbers, where it comes from."""

    axis: str
    alternative: str
    values: dict
    scenario_hash: str
    changes: dict = field(default_factory=dict)
    source: str = ""
    weight: float | None = None

    @property
    def label(self):
        """Axis and alternative in words, or "base"."""
        return f"{self.axis}: {self.alternative}" if self.alternative else self.axis


class Range(NamedTuple):
    """Smallest and largest value, and the assumptions that give them."""

    base: float
    low: float
    high: float
    low_by: str
    high_by: str


class Weighted(NamedTuple):
    """Weighted mean and standard deviation of a number, with the weights."""

    mean: float
    sd: float
    weights: dict


@dataclass(frozen=True, eq=False)
class Spread:
    """A forecast over a family of assumptions.

    Ranges are what the family spans, no standard deviations. Means and deviations exist only where the family states
    weights.

    Attributes
    ----------
    family : Family
        As it stands beside the base.
    base : Scenario
    rows : tuple of Row
        The base, then each alternative alone.
    units : dict of str to str
        Unit of each number.
    combined : dict of (lens, number) to ndarray, or None
        Values of all combinations, the base first.
    combined_labels, combined_weights : tuple
        Of each combination.
    left_out : tuple of str
        Axes that do not fit the base.
    about : dict
        What the forecast is of.
    warnings, references : tuple of str
    """

    family: Family
    base: Scenario
    rows: tuple
    units: dict
    combined: dict | None = None
    combined_labels: tuple = ()
    combined_weights: tuple = ()
    left_out: tuple = ()
    about: dict = field(default_factory=dict)
    warnings: tuple = ()
    references: tuple = ()
    version: str = __version__

    @property
    def lenses(self):
        """Lens classes, or other things counted."""
        return list(self.rows[0].values)

    @property
    def numbers(self):
        """Names of the numbers that each lens class has."""
        return list(next(iter(self.rows[0].values.values()), {}))

    def _one(self, lens, number):
        return one_of("lens", lens, self.lenses), one_of("number", number, self.numbers)

    def values(self, number, lens="all", axis=None):
        """Return one number of the base and of the alternatives of one axis, or of all.

        Parameters
        ----------
        number, lens : str
        axis : str, optional

        Returns
        -------
        dict of str to float
            By alternative ("base" first), or by label where all axes are asked.

        Raises
        ------
        InputError
            Unknown number, lens or axis.
        """
        lens, number = self._one(lens, number)
        if axis is not None:
            one_of("axis", axis, [a.name for a in self.family.axes])
        rows = [r for r in self.rows if axis is None or r.axis in ("base", axis)]
        return {(r.label if axis is None or r is self.rows[0] else r.alternative): r.values[lens][number] for r in rows}

    def range(self, number, lens="all"):
        """Return the Range of a number over one change at a time."""
        return _range(list(self.values(number, lens).items()))

    def combined_range(self, number, lens="all"):
        """Return the Range of a number over all combinations and single changes, or None where none were made."""
        lens, number = self._one(lens, number)
        if self.combined is None:
            return None
        pairs = list(zip(self.combined_labels, self.combined[lens, number].tolist()))
        # axes that do not combine widen the range by themselves
        return _range([*pairs, *self.values(number, lens).items()])

    def moves(self, number, lens="all"):
        """Return how far each axis moves a number: max |ln(value / base)|, largest first.

        Parameters
        ----------
        number, lens : str

        Returns
        -------
        dict of str to float
            By axis; inf where a number appears or vanishes, 0 where nothing changes.

        Raises
        ------
        InputError
            Unknown number or lens.
        """
        lens, number = self._one(lens, number)
        base, out = self.rows[0].values[lens][number], {}
        for axis in self.family.axes:
            others = list(self.values(number, lens, axis.name).values())[1:]
            out[axis.name] = max((_ln_ratio(x, base) for x in others), default=0.0)
        return dict(sorted(out.items(), key=lambda pair: -pair[1]))

    def weighted(self, number, lens="all"):
        """Return weighted means where the family states weights.

        Parameters
        ----------
        number, lens : str

        Returns
        -------
        dict of str to Weighted
            By weighted axis, one change at a time; "combinations" over all of them if every axis that combines has
            weights. Empty for a family without weights.

        Raises
        ------
        InputError
            Unknown number or lens.
        """
        lens, number = self._one(lens, number)
        out = {}
        for axis in self.family.axes:
            if axis.weighted or axis.base_weight > 0:
                rows = [r for r in self.rows if r.axis == axis.name]
                weights = {"base": axis.base_weight, **{r.alternative: r.weight for r in rows}}
                out[axis.name] = _weighted(list(self.values(number, lens, axis.name).values()), weights)
        if self.combined is not None and out and all(w is not None for w in self.combined_weights):
            axes = {a.name: out[a.name].weights for a in self.family.axes if a.combine}
            mean, sd, _ = _weighted(self.combined[lens, number], dict(enumerate(self.combined_weights)))
            out["combinations"] = Weighted(mean, sd, axes)
        return out

    def header(self):
        """Return the line that stands above every table."""
        return self.about.get("header", "")

    def meta(self):
        """Return how this was made, for the metadata of tables and pictures.

        Returns
        -------
        dict
        """
        return {
            "program": "lensrate",
            "version": self.version,
            **self.about,
            **self.base.made(),
            "family": {**self.family.to_dict(), "hash": self.family.hash, "left_out": list(self.left_out)},
            "combinations": len(self.combined_labels) or None,
            "seed": None,
            "warnings": list(self.warnings),
            "references": list(self.references),
        }

    def to_dict(self):
        """Return plain numbers under the keys of ``lensrate spread --json``.

        Returns
        -------
        dict
        """
        family = self.family
        alternatives = [
            {
                "axis": r.axis, "alternative": r.alternative, "source": r.source, "weight": r.weight,
                "scenario_hash": r.scenario_hash, "changes": r.changes, "lenses": self._json(r.values),
            }
            for r in self.rows[1:]
        ]  # fmt: skip
        return {
            **self.about,
            **self.base.made(),
            "family": {"name": family.name, "title": family.title, "hash": family.hash,
                       "axes": {a.name: a.label for a in family.axes}, "left_out": list(self.left_out)},
            "base": {"lenses": self._json(self.rows[0].values)},
            "alternatives": alternatives,
            "ranges": self._each(lambda n, lens: {**self.range(n, lens)._asdict(), "moved_by": self.moves(n, lens)}),
            "combinations": None
            if self.combined is None
            else {
                "count": len(self.combined_labels),
                "axes": [a.name for a in family.axes if a.combine],
                "ranges": self._each(lambda n, lens: self.combined_range(n, lens)._asdict()),
            },
            "weighted": self._each(lambda n, lens: {k: w._asdict() for k, w in self.weighted(n, lens).items()})
            if any(a.weighted for a in family.axes)
            else None,
            "warnings": list(self.warnings),
            "references": list(self.references),
            "version": self.version,
        }  # fmt: skip

    def _each(self, function):
        return {lens: {_JSON.get(n, n): function(n, lens) for n in self.numbers} for lens in self.lenses}

    @staticmethod
    def _json(values):
        return {lens: {_JSON.get(n, n): x for n, x in row.items()} for lens, row in values.items()}

    def to_table(self, by="alternative"):
        """Return a table of the numbers, or of their ranges.

        Parameters
        ----------
        by : str
            "alternative": a row per alternative and lens class, the base first. "range": a row per lens class and
            number.

        Returns
        -------
        astropy.table.QTable

        Raises
        ------
        InputError
            Unknown `by`.
        """
        from astropy.table import QTable

        one_of("by", by, ("alternative", "range"))
        table = QTable()
        if by == "alternative":
            pairs = [(r, lens) for r in self.rows for lens in self.lenses]
            table["axis"] = [r.axis for r, _ in pairs]
            table["alternative"] = [r.alternative for r, _ in pairs]
            table["lens"] = [lens for _, lens in pairs]
            for n in self.numbers:
                column = np.array([r.values[lens][n] for r, lens in pairs], dtype=float)
                unit = self.units.get(n, "")
                table[n] = column * u.Unit(unit) if unit else column
            table["weight"] = np.array([np.nan if r.weight is None else r.weight for r, _ in pairs])
            table["source"] = [r.source for r, _ in pairs]
            table["scenario_hash"] = [r.scenario_hash for r, _ in pairs]
        else:
            pairs = [(lens, n) for lens in self.lenses for n in self.numbers]
            found = [self.range(n, lens) for lens, n in pairs]
            table["lens"], table["number"] = [lens for lens, _ in pairs], [n for _, n in pairs]
            table["unit"] = [self.units.get(n, "") for _, n in pairs]
            for key in Range._fields:
                table[key] = [getattr(f, key) for f in found]
            moved = [self.moves(n, lens) for lens, n in pairs]
            table["moved_most_by"] = [next(iter(m), "") if any(m.values()) else "" for m in moved]
            table["max_ln_ratio"] = [max(m.values(), default=0.0) for m in moved]
            if self.combined is not None:
                both = [self.combined_range(n, lens) for lens, n in pairs]
                table["combined_low"], table["combined_high"] = [f.low for f in both], [f.high for f in both]
        table.meta.update(self.meta())
        return table

    def to_pandas(self, by="alternative"):
        """Return `to_table` as a pandas DataFrame, units dropped.

        Parameters
        ----------
        by : str
            "alternative" or "range".

        Returns
        -------
        pandas.DataFrame
        """
        import pandas as pd

        table = self.to_table(by)
        return pd.DataFrame({c: getattr(table[c], "value", np.asarray(table[c])) for c in table.colnames})

    def plot(self, ax=None, number="rate", lens="all", **style):
        """Draw one number of one lens class: a bar per axis, the widest on top.

        Parameters
        ----------
        ax : matplotlib Axes, optional
            Made if not given.
        number, lens : str
            Which number.
        **style
            Passed on to the bars.

        Returns
        -------
        matplotlib Axes
        """
        # plots stands above this module, and only a drawing needs it
        return importlib.import_module("lensrate.plots").tornado(self, ax=ax, number=number, lens=lens, **style)

    def _repr_html_(self):
        from html import escape

        head = f"lensrate: spread over family {self.family.name} ({self.family.hash}), scenario {self.base.name} "
        table = self.to_table("range")
        for name in table.colnames:
            if table[name].dtype.kind == "f":
                table[name].info.format = ".4g"
        return f"<p>{escape(head)}({self.base.hash})<br>{escape(self.header())}</p>" + "\n".join(
            table.pformat(html=True, max_lines=-1, max_width=-1)
        )

    def __repr__(self):
        axes = ", ".join(a.name for a in self.family.axes)
        return f"<Spread of family '{self.family.name}' ({axes}), base {self.base.hash}: {self.header()}>"


def _range(pairs):
    """Range of (label, value) pairs of which the first is the base; what is undefined is passed over."""
    known = [(x, label) for label, x in pairs if not math.isnan(x)]
    if not known:
        return Range(math.nan, math.nan, math.nan, "", "")
    low, high = min(known, key=lambda k: k[0]), max(known, key=lambda k: k[0])
    return Range(pairs[0][1], low[0], high[0], low[1], high[1])


def _ln_ratio(x, base):
    if math.isnan(x) or math.isnan(base) or x == base:
        return 0.0
    return abs(math.log(x / base)) if x > 0 and base > 0 else math.inf


def _weighted(values, weights):
    """Weighted mean and standard deviation; not a number where a value with a weight is undefined."""
    x, w = np.asarray(values, dtype=float), np.array(list(weights.values()), dtype=float)
    x, w = x[w > 0], w[w > 0]
    mean = float(np.sum(w * x) / np.sum(w))
    return Weighted(mean, float(np.sqrt(np.sum(w * (x - mean) ** 2) / np.sum(w))), weights)
