"""A family of assumptions: named axes, each a list of alternatives to what a base scenario says."""

import hashlib
import itertools
import json
import math
import os
from dataclasses import dataclass, replace
from fnmatch import fnmatchcase
from pathlib import Path
from typing import NamedTuple

from ..datafiles import parse_toml, read_set
from ..errors import InputError, one_of
from ..scenario import Scenario
from .axis import check_keys, parse_axis, refuse_conflicts

__all__ = ["Case", "Family"]

_GALACTIC = ("change", "galaxy", "component")
_MOST = 50_000  # combinations; more are a slip


class Case(NamedTuple):
    """One scenario of a family and how it was made."""

    choices: tuple  # ((axis, alternative), ...) away from the base; empty: the base itself
    scenario: Scenario
    weight: float | None  # product over its axes; None where an axis has no weights

    @property
    def label(self):
        """The choices in words, "base" where there are none."""
        return "; ".join(f"{axis}: {alternative}" for axis, alternative in self.choices) or "base"


@dataclass(frozen=True)
class Family:
    """Assumptions that are open, with what each of them might be.

    Without weights a family is a range and nothing more: it has no standard deviation.

    Examples
    --------
    >>> import lensrate
    >>> base = lensrate.Scenario.read("default")
    >>> kicks = lensrate.Family.read("kicks")
    >>> [label for label, scenario in kicks.one_at_a_time(base)][:2]
    ['base', 'kicks: hobbs2005']
    """

    name: str
    axes: tuple = ()
    title: str = ""
    references: tuple = ()

    @classmethod
    def read(cls, name="default"):
        """Read a shipped family by name, or a user's TOML file by path.

        Parameters
        ----------
        name : str or Path
            For example "default" or "kicks", or a path ending in ``.toml``.

        Returns
        -------
        Family

        Raises
        ------
        InputError
            Unknown name or key (with the nearest known one), weights that do not sum to one, two axes that change
            the same number.
        """
        text = str(name)
        if text.endswith(".toml") or "/" in text or os.path.isfile(text):
            return cls.from_dict(parse_toml(text), text, Path(text).stem, Path(text).parent)
        return cls.from_dict(read_set("families", text), f"family '{text}'", text)

    @classmethod
    def from_dict(cls, table, where="family", stem="unnamed", folder=None):
        """Build from nested tables as a family file holds them.

        Parameters
        ----------
        table : dict
            Parsed TOML: title, references and ``axis``, a table of axes by name.
        where : str
            Named in complaints.
        stem : str
            Name where the table states none.
        folder : Path, optional
            Where relative file names in alternatives are looked for first.

        Returns
        -------
        Family

        Raises
        ------
        InputError
            See `read`.
        """
        check_keys(where, table, {"name": str, "title": str, "references": list, "axis": dict})
        axes = tuple(parse_axis(f"{where}: axis.{key}", key, row, folder) for key, row in table.get("axis", {}).items())
        refuse_conflicts(where, axes)
        references = tuple(map(str, table.get("references", ())))
        return cls(table.get("name", stem), axes, table.get("title", ""), references)

    def only(self, names):
        """Return the family with some axes only, in the order named.

        Parameters
        ----------
        names : list of str
            Axes to keep; every one then takes part in combinations.

        Returns
        -------
        Family

        Raises
        ------
        InputError
            Unknown axis.
        """
        known = {a.name: a for a in self.axes}
        kept = [known[one_of("axis", n, known)] for n in dict.fromkeys(names)]
        return replace(self, axes=tuple(replace(a, combine=True) for a in kept))

    def for_base(self, base):
        """Return the family as it stands beside a base scenario.

        Axes and alternatives that do not fit the base are left out (weights of the other alternatives are raised, so
        that the sum is still one), alternatives that say the same as the base are dropped (their weight goes to the
        base), and every alternative is checked.

        Parameters
        ----------
        base : Scenario

        Returns
        -------
        Family

        Raises
        ------
        InputError
            An alternative that makes no scenario, with its axis and name.
        """
        axes = []
        for axis in self.axes:
            if not _fits(base, axis.when):
                continue
            kept, weight = [], axis.base_weight
            for a in _fitting(axis, base, self.name):
                where = f"family '{self.name}': axis {axis.name}, '{a.name}'"
                if _checked(base, a.changes, where).hash == base.hash:
                    weight += a.weight or 0.0
                else:
                    kept.append(a)
            axes.append(replace(axis, alternatives=tuple(kept), base_weight=weight))
        return replace(self, axes=tuple(axes))

    def left_out(self, base):
        """Return the names of axes that do not fit a base scenario."""
        fits = {a.name for a in self.for_base(base).axes}
        return [a.name for a in self.axes if a.name not in fits]

    def cases(self, base, combine=False):
        """Return every case, the base first.

        Parameters
        ----------
        base : Scenario
        combine : bool
            All combinations of the axes that combine, instead of one change at a time.

        Returns
        -------
        list of Case

        Raises
        ------
        InputError
            As `for_base`; or too many combinations, with the number of each axis.
        """
        family = self.for_base(base)
        if not combine:
            rows = [Case((), base, None)]
            for axis in family.axes:
                rows += [Case(((axis.name, a.name),), _changed(base, a.changes), a.weight) for a in axis.alternatives]
            return rows
        axes = [a for a in family.axes if a.combine]
        counts = [1 + len(a.alternatives) for a in axes]
        if math.prod(counts) > _MOST:
            each = ", ".join(f"{a.name} {n}" for a, n in zip(axes, counts))
            raise InputError(
                f"family '{self.name}': {math.prod(counts)} combinations ({each}), at most {_MOST} are made; "
                "choose fewer axes (--axis), or set combine = false for some"
            )
        weighted = all(a.weighted for a in axes)
        out = []
        for chosen in itertools.product(*([None, *a.alternatives] for a in axes)):
            away = [(axis, a) for axis, a in zip(axes, chosen) if a is not None]
            scenario = base
            for _, a in away:
                scenario = _changed(scenario, a.changes)
            shares = [axis.base_weight if a is None else a.weight for axis, a in zip(axes, chosen)]
            weight = math.prod(shares) if weighted else None
            out.append(Case(tuple((axis.name, a.name) for axis, a in away), scenario, weight))
        return out

    def one_at_a_time(self, base):
        """Yield (label, scenario): the base, then each alternative alone.

        Parameters
        ----------
        base : Scenario

        Yields
        ------
        str, Scenario

        Raises
        ------
        InputError
            See `for_base`.
        """
        for case in self.cases(base):
            yield case.label, case.scenario

    def combinations(self, base):
        """Yield (label, scenario) of every combination of base and alternatives, the base first.

        Parameters
        ----------
        base : Scenario

        Yields
        ------
        str, Scenario

        Raises
        ------
        InputError
            See `cases`.
        """
        for case in self.cases(base, combine=True):
            yield case.label, case.scenario

    def to_dict(self):
        """Return the family as plain tables that `from_dict` takes."""
        axes = {}
        for a in self.axes:
            row = {"label": a.label, "combine": a.combine, "when": a.when}
            if a.weighted:
                row["base_weight"] = a.base_weight
            row["alternatives"] = [
                {
                    "name": x.name,
                    "source": x.source,
                    **({} if x.weight is None else {"weight": x.weight}),
                    **({"when": x.when} if x.when else {}),
                    **x.changes,
                }
                for x in a.alternatives
            ]
            axes[a.name] = row
        return {"name": self.name, "title": self.title, "references": list(self.references), "axis": axes}

    @property
    def hash(self):
        """First 12 digits of the sha256 of the axes and their alternatives."""
        text = json.dumps(self.to_dict()["axis"], sort_keys=True, default=str)
        return hashlib.sha256(text.encode()).hexdigest()[:12]


def _fits(base, when):
    return all(fnmatchcase(getattr(base, key), pattern) for key, pattern in when.items())


def _fitting(axis, base, name):
    """Alternatives of an axis that fit a base; the base keeps its weight, theirs are raised for those left out."""
    kept = [a for a in axis.alternatives if _fits(base, a.when)]
    if len(kept) == len(axis.alternatives) or not axis.weighted:
        return kept
    total = sum(a.weight for a in kept)
    if not total > 0:
        raise InputError(
            f"family '{name}': axis {axis.name}: no alternative with a weight fits this base; "
            "set when for the whole axis"
        )
    return [replace(a, weight=a.weight * (1 - axis.base_weight) / total) for a in kept]


def _changed(scenario, changes):
    return scenario.replace(**{k: _over(getattr(scenario, k), v) for k, v in changes.items()})


def _over(old, new):
    """Return `new` laid over `old`, tables key by key; a number with its unit is replaced whole."""
    if isinstance(old, dict) and isinstance(new, dict) and "value" not in new:
        return {**old, **{k: _over(old.get(k), v) for k, v in new.items()}}
    return new


def _checked(base, changes, where):
    try:
        scenario = _changed(base, changes)
        if any(key in _GALACTIC for key in changes):
            scenario.build_galaxy()
    except InputError as error:
        raise InputError(f"{where}: {error}") from None
    return scenario
