"""Detection efficiency: a curve against timescale, and the statements without which it means nothing.

The one place for efficiency and selection: campaigns, maps, mock events, odds and samples all ask here.
"""

import os
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np

from ..errors import InputError, did_you_mean, one_of
from ..io import header_of, read_rows
from ..lensing.distributions import Quantiles
from ..sources.rules import LimitRule, PeakRule, parse_rule

__all__ = ["INCLUDES", "PER", "SECOND", "Efficiency", "locate"]

PER = ("source", "catalogued_object")
INCLUDES = ("seasons", "gaps", "blending", "parallax")
SECOND = ("I_S", "u_0")  # what an efficiency may depend on beside t_E
_STATEMENTS = ("per", "includes", "u_0_limit", "source_limit")
_IMPACTS = 400  # points of an average over u_0
_CELLS = 4  # of a quadrature over t_E, per point of the distribution
_FAR = 1e6  # d, longer than any timescale of the forecasts


@dataclass(frozen=True, eq=False)
class Efficiency:
    """Chance that an event of given timescale is found and kept.

    Attributes
    ----------
    t_E : ndarray
        Points of the curve (n,), or edges of its bins (n + 1,) [d], rising.
    values : ndarray
        Efficiency 0-1, (n,), or (m, n) where it also depends on `second`.
    binned : bool
        Whether `t_E` holds edges: constant inside a bin; else straight lines in ln t_E between points.
    per : str
        "source": of the events of each real star; "catalogued_object": of those of each entry of a catalogue, several
        stars blended.
    includes : tuple of str
        What is already in it: "seasons" (events that peak while the field is not observed), "gaps" inside seasons,
        "blending", "parallax" (annual parallax in the simulated events).
    u_0_limit : float
        Largest impact parameter of the events it is an efficiency of.
    source_limit : str
        Rule that says which stars it is an efficiency of, for example "limit:I=21"; empty where not stated.
    second : str
        "", "I_S" (source magnitude) or "u_0"; `grid` (m,) holds its points.
    """

    t_E: np.ndarray
    values: np.ndarray
    binned: bool = False
    per: str = "source"
    includes: tuple = ()
    u_0_limit: float = 1.0
    source_limit: str = ""
    second: str = ""
    grid: np.ndarray = field(default_factory=lambda: np.zeros(0))
    name: str = ""

    @classmethod
    def complete(cls, u_0_limit=1.0):
        """Return the efficiency of a survey that finds every event."""
        return cls(np.array([1.0 / _FAR, _FAR]), np.ones(2), u_0_limit=u_0_limit, name="complete")

    @classmethod
    def read(cls, path, *, per=None, includes=None, u_0_limit=None, source_limit=None):
        """Read a curve from a table whose header makes the statements, or with the statements given here.

        Parameters
        ----------
        path : str or Path
            Columns t_E (points) or t_E_low, t_E_high (bins) in days unless they carry a unit, efficiency, and
            optionally I_S (mag) or u_0. The header (``meta`` of an ECSV file, ``# key: value`` lines of a CSV file)
            may hold per, includes, u_0_limit, source_limit.
        per, includes, u_0_limit, source_limit : optional
            The statements, where the header does not make them; one that contradicts the header is refused.

        Returns
        -------
        Efficiency

        Raises
        ------
        InputError
            A statement is missing or contradicted, or the table cannot be used; rows are named.
        """
        where = f"efficiency '{path}'"
        table = read_rows(path, "efficiency")
        given = {"per": per, "includes": includes, "u_0_limit": u_0_limit, "source_limit": source_limit}
        stated = _statements(where, header_of(table), given)
        second = next((name for name in SECOND if name in table.colnames), "")
        known = ("t_E", "t_E_low", "t_E_high", "efficiency", *SECOND)
        for name in table.colnames:
            if name not in known:
                near = did_you_mean(name, known)
                raise InputError(f"{where}: column '{name}' is not known{near} (known: {', '.join(known)})")
        value = _column(where, table, "efficiency", "")
        _rows_in_range(where, "efficiency", value, 0.0, 1.0)
        binned = "t_E" not in table.colnames
        if binned:
            low, high = (_column(where, table, c, "d") for c in ("t_E_low", "t_E_high"))
        else:
            low = high = _column(where, table, "t_E", "d")
        _rows_in_range(where, "t_E" if not binned else "t_E_low", low, 0.0, _FAR, open_low=True)
        if second:
            axis = _column(where, table, second, "mag" if second == "I_S" else "")
            grid, row = np.unique(axis, return_inverse=True)
        else:
            grid, row = np.zeros(1), np.zeros(low.size, dtype=int)
        points, column = np.unique(low, return_inverse=True)
        values = np.zeros((0, 0))
        if low.size == grid.size * points.size:
            values = np.full((grid.size, points.size), np.nan)
            values[row, column] = value
        if values.size == 0 or np.isnan(values).any():
            raise InputError(
                f"{where}: {low.size} rows for {points.size} values of t_E and {grid.size} of "
                f"{second or 'nothing else'}; every pair must be there once"
            )
        t_E = points
        if binned:
            ends = np.empty(points.size)
            ends[column] = high
            if np.any(ends <= points) or np.any(np.abs(ends[:-1] / points[1:] - 1) > 1e-6):
                bad = int(np.argmax(np.append(np.abs(ends[:-1] / points[1:] - 1) > 1e-6, True)))
                raise InputError(f"{where}: bins must join; the one from {points[bad]:g} d ends at {ends[bad]:g} d")
            t_E = np.append(points, ends[-1])
        if points.size < 2 and not binned:
            raise InputError(f"{where}: one timescale is no curve; give at least two")
        return cls(
            t_E, values if second else values[0], binned, second=second, grid=grid if second else np.zeros(0),
            name=Path(path).name, **stated,
        )  # fmt: skip

    def of(self, t_E, second=None):
        """Return the efficiency of timescales.

        Parameters
        ----------
        t_E : ndarray
            [d]
        second : ndarray, optional
            Source magnitude or u_0, of the shape of `t_E`, where the curve depends on it; without it a dependence on
            u_0 is averaged from 0 to the limit, and one on source magnitude over its points evenly.

        Returns
        -------
        ndarray
            0 outside the curve's timescales, where nothing is known: see `inside`.
        """
        t_E = np.asarray(t_E, dtype=float)
        if not self.second:
            return self._along(self.values, t_E)
        rows = np.array([self._along(v, t_E) for v in self.values])
        if second is None:
            return np.tensordot(self.weights(), rows, axes=1)
        x = np.clip(np.asarray(second, dtype=float), self.grid[0], self.grid[-1])
        k = np.clip(np.searchsorted(self.grid, x) - 1, 0, max(self.grid.size - 2, 0))
        if self.grid.size == 1:
            return rows[0] * np.ones_like(x)
        s = (x - self.grid[k]) / (self.grid[k + 1] - self.grid[k])
        pick = np.indices(k.shape)
        at = (lambda j: rows[(j, *pick)]) if rows.shape[1:] == k.shape else (lambda j: rows[j])
        return (1 - s) * at(k) + s * at(k + 1)

    def weights(self, edges_weight=None):
        """Return the weights of the second variable's points, summing to one.

        Parameters
        ----------
        edges_weight : callable, optional
            Cumulative share of events below a value of the second variable; each point stands for the values nearer
            to it than to any other.

        Returns
        -------
        ndarray, shape (m,)
        """
        between = 0.5 * (self.grid[1:] + self.grid[:-1])
        if self.second == "u_0":
            edges = np.concatenate([[0.0], np.minimum(between, self.u_0_limit), [self.u_0_limit]])
            share = np.diff(edges)
        elif edges_weight is None:
            share = np.ones(self.grid.size)
        else:
            share = np.diff(np.concatenate([[0.0], edges_weight(between), [1.0]]))
        return share / share.sum()

    def averaged(self, share):
        """Return the curve against t_E alone, averaged over source magnitude.

        Parameters
        ----------
        share : callable
            Cumulative share of source stars brighter than a magnitude.

        Returns
        -------
        Efficiency
        """
        if self.second != "I_S":
            return self
        return self._reduced(self.weights(share), self.u_0_limit)

    def mean(self, t_E, pdf):
        """Return the mean efficiency of a distribution of timescales, and the share of it that the curve reaches.

        Parameters
        ----------
        t_E : ndarray, shape (n,)
            [d], even in the logarithm.
        pdf : ndarray, shape (n,)
            Rate per ln t_E, in any unit.

        Returns
        -------
        mean, inside : float
            Both 0 where there are no events.
        """
        shape = Quantiles(t_E, pdf)
        total = shape.rate()
        if not total > 0:
            return 0.0, 0.0
        cells = np.geomspace(t_E[0], t_E[-1], _CELLS * t_E.size)
        # steps and ends of the curve fall between cells
        cells = np.unique(np.concatenate([cells, self.t_E[(self.t_E > t_E[0]) & (self.t_E < t_E[-1])]]))
        share = np.diff(shape.below(cells)) / total
        middle = np.sqrt(cells[1:] * cells[:-1])
        return float(share @ self.of(middle)), float(share @ self.inside(middle))

    def up_to(self, u_0_limit):
        """Return the curve against t_E alone, averaged over impact parameters from 0 to a limit.

        Parameters
        ----------
        u_0_limit : float
            At most the curve's own.

        Returns
        -------
        Efficiency
        """
        if self.second != "u_0":
            return self
        u = (np.arange(_IMPACTS) + 0.5) / _IMPACTS * u_0_limit
        weights = np.array([np.interp(u, self.grid, row).mean() for row in np.eye(self.grid.size)])
        return self._reduced(weights, u_0_limit)

    def _reduced(self, weights, u_0_limit):
        stated = {key: getattr(self, key) for key in ("binned", "per", "includes", "source_limit", "name")}
        return Efficiency(self.t_E, weights @ self.values, u_0_limit=u_0_limit, **stated)

    def check_limit(self, where, u_0_limit):
        """Raise InputError unless this is an efficiency of events within an impact parameter."""
        own = min(self.u_0_limit, self.grid[-1]) if self.second == "u_0" else self.u_0_limit
        if self.second == "u_0" and u_0_limit > own + 1e-9:
            raise InputError(
                f"{where}: u_0_limit is {u_0_limit:g} and the efficiency reaches to u_0 = {own:g}; lower the limit or "
                "extend the curve"
            )
        if self.name != "complete" and self.second != "u_0" and abs(own - u_0_limit) > 1e-9:
            raise InputError(
                f"{where}: u_0_limit is {u_0_limit:g} and the efficiency is one of events with u_0 below {own:g}; set "
                f"u_0_limit = {own:g}"
            )

    def check_sources(self, where, sources):
        """Raise InputError unless this is an efficiency of events on the sources of a rule, given as text."""
        rule = parse_rule(sources)
        if self.second == "I_S" and not (isinstance(rule, LimitRule) and rule.band == "I"):
            raise InputError(
                f"{where}: the efficiency depends on I_S, so its sources need a limit in I at baseline, not '{sources}'"
            )
        if self.second == "u_0" and isinstance(rule, PeakRule):
            raise InputError(
                f"{where}: a limit at peak goes with the impact parameter, and so does the efficiency; average the "
                "curve over u_0, or set the limit at baseline"
            )
        if self.source_limit and rule.text != self.source_limit:
            raise InputError(
                f"{where}: its sources are {sources} and the efficiency is one of {self.source_limit}; make them agree"
            )

    def inside(self, t_E):
        """Return whether the curve says anything of these timescales [d]."""
        t_E = np.asarray(t_E, dtype=float)
        return (t_E >= self.t_E[0]) & (t_E <= self.t_E[-1])

    def describe(self):
        """Return the statements in one line, for headers."""
        if self.name == "complete":
            return "every event found"
        has = ", ".join(self.includes) or f"none of {', '.join(INCLUDES)}"
        low, high = self.t_E[0], self.t_E[-1]
        return f"efficiency '{self.name}' per {self.per.replace('_', ' ')}, {low:g}-{high:g} d, includes {has}"

    def _along(self, values, t_E):
        inside = self.inside(t_E)
        if self.binned:
            k = np.clip(np.searchsorted(self.t_E, t_E, side="right") - 1, 0, values.size - 1)
            return np.where(inside, values[k], 0.0)
        with np.errstate(divide="ignore"):
            return np.where(inside, np.interp(np.log(t_E), np.log(self.t_E), values), 0.0)


def _statements(where, header, given):
    """The statements of the header and of the caller, complete and not contradicting each other."""
    out = {}
    for key in _STATEMENTS:
        head = header.get(key)
        mine = given[key]
        head, mine = (_plain(where, key, v) for v in (head, mine))
        if head is not None and mine is not None and head != mine:
            raise InputError(f"{where}: {key} is {head!r} in its header and {mine!r} where it is named; correct one")
        out[key] = head if head is not None else mine
    missing = [key for key in ("per", "includes") if out[key] is None]
    if missing:
        raise InputError(
            f"{where}: does not say {' and '.join(missing)}; state per = 'source' or 'catalogued_object', and "
            f"includes = a list of {', '.join(INCLUDES)} (or [] for none), in its header (in a CSV file lines like "
            "'# per: source' and '# includes: gaps, blending' or '# includes: none') or where a campaign names it"
        )
    out["u_0_limit"] = 1.0 if out["u_0_limit"] is None else out["u_0_limit"]
    out["source_limit"] = out["source_limit"] or ""
    return out


def _plain(where, key, value):
    if value is None:
        return None
    if key == "per":
        return one_of(f"{where}: per", str(value), PER)
    if key == "includes":
        if isinstance(value, str):
            value = [w for w in value.replace(",", " ").split() if w != "none"]
        if not isinstance(value, (list, tuple)):
            raise InputError(f"{where}: includes: {value!r} given, must be a list of {', '.join(INCLUDES)}")
        return tuple(one_of(f"{where}: includes", str(w), INCLUDES) for w in dict.fromkeys(value))
    if key == "u_0_limit":
        if isinstance(value, bool) or not isinstance(value, (int, float)) or not 0 < value <= 3:
            raise InputError(f"{where}: u_0_limit: {value!r} given, must be above 0 and at most 3 Einstein radii")
        return float(value)
    text = str(value)
    rule = parse_rule(text if ":" in text or text.startswith("clump") else f"limit:{text}")
    if not isinstance(rule, LimitRule) and not text.startswith(("clump", "peak")):
        raise InputError(f"{where}: source_limit: '{text}' given, must be a limit like I=21")
    return rule.text


def _column(where, table, name, unit):
    import astropy.units as u

    if name not in table.colnames:
        near = did_you_mean(name, table.colnames)
        raise InputError(f"{where}: no column '{name}'{near} (columns: {', '.join(table.colnames)})")
    column = table[name]
    mask = np.asarray(getattr(column, "mask", np.zeros(len(table), dtype=bool)))
    if np.any(mask):
        raise InputError(f"{where}: row {int(np.argmax(mask)) + 1}, column {name}: no value")
    try:
        value = np.asarray(u.Quantity(column, column.unit or unit).to_value(unit), dtype=float)
    except (TypeError, ValueError, u.UnitConversionError):
        raise InputError(f"{where}: column {name} must hold numbers{' in ' + unit if unit else ''}") from None
    _rows_in_range(where, name, value, -np.inf, np.inf)
    return value


def _rows_in_range(where, name, value, low, high, open_low=False):
    bad = ~np.isfinite(value) | (value < low) | (value > high) | (open_low & (value <= low))
    if np.any(bad):
        i = int(np.argmax(bad))
        wanted = f"{'above' if open_low else 'at least'} {low:g} and at most {high:g}"
        if not np.isfinite(value[i]):
            wanted = "a finite number"
        raise InputError(f"{where}: row {i + 1}, column {name}: {value[i]:g} given, must be {wanted}")


def locate(name, beside):
    """Return the path of a file named in another file: beside that one unless it is absolute."""
    return Path(os.path.expanduser(name)) if Path(name).is_absolute() else Path(beside).parent / name
