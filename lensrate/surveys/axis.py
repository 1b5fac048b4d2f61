"""One open assumption of a family: its alternatives, and how a family file states them."""

import os
from dataclasses import dataclass, field
from dataclasses import fields as declared
from pathlib import Path

from ..errors import InputError, did_you_mean, one_of
from ..scenario import Scenario

__all__ = ["Alternative", "Axis", "check_keys", "parse_axis", "refuse_conflicts"]

_SCENARIO = {f.name: f.type for f in declared(Scenario) if f.name not in ("name", "title")}
_ROUNDING = 1e-6  # of a sum of weights


@dataclass(frozen=True)
class Alternative:
    """What an axis may say instead of the base.

    Attributes
    ----------
    name : str
        For tables and pictures.
    changes : dict
        Fields of `Scenario`; tables among them are laid over the base's key by key.
    source : str
        Paper, or 'our choice'.
    weight : float or None
        Degree of belief, within its axis.
    when : dict of str to str
        Left out unless these text fields of the base match (shell patterns).
    """

    name: str
    changes: dict
    source: str = ""
    weight: float | None = None
    when: dict = field(default_factory=dict)


@dataclass(frozen=True)
class Axis:
    """One assumption and its alternatives.

    Attributes
    ----------
    name, label : str
        Its key, and words for people.
    alternatives : tuple of Alternative
    when : dict of str to str
        The axis is left out unless these text fields of the base match (shell patterns).
    combine : bool
        Whether combinations vary it.
    base_weight : float
        Weight of the base itself, where the alternatives have weights.
    """

    name: str
    alternatives: tuple = ()
    label: str = ""
    when: dict = field(default_factory=dict)
    combine: bool = True
    base_weight: float = 0.0

    @property
    def weighted(self):
        """Whether its alternatives carry weights."""
        return any(a.weight is not None for a in self.alternatives)


def check_keys(where, table, known):
    """Raise unless `table` holds only known keys, of the right kind."""
    if not isinstance(table, dict):
        raise InputError(f"{where}: {table!r} given, must be a table")
    for key, value in table.items():
        if key not in known:
            raise InputError(f"{where}: unknown key '{key}'{did_you_mean(key, known)} (known: {', '.join(known)})")
        kind = known[key]
        if not isinstance(value, kind) or (isinstance(value, bool) and kind is not bool):
            words = {str: "text", dict: "a table", list: "a list", bool: "true or false"}.get(kind, "a number")
            raise InputError(f"{where}: {key}: {value!r} given, must be {words}")


def parse_axis(where, name, row, folder=None):
    """Build an Axis from its table in a family file.

    Parameters
    ----------
    where : str
        Named in complaints.
    name : str
        The axis' key.
    row : dict
        label, alternatives, when, combine, base_weight.
    folder : Path, optional
        Where relative file names are looked for first.

    Returns
    -------
    Axis

    Raises
    ------
    InputError
        Unknown key, value of the wrong kind, weights that do not sum to one.
    """
    number = (int, float)
    known = {"label": str, "when": dict, "combine": bool, "base_weight": number, "alternatives": list}
    check_keys(where, row, known)
    _check_when(where, row)
    made = [_alternative(f"{where}: alternative {i + 1}", a, folder) for i, a in enumerate(row.get("alternatives", ()))]
    names = [a.name for a in made]
    for n in names:
        if names.count(n) > 1:
            raise InputError(f"{where}: two alternatives are named '{n}'; give each its own name")
    base_weight = float(row.get("base_weight", 0.0))
    axis = Axis(name, tuple(made), row.get("label") or name.replace("_", " "), row.get("when", {}),
                row.get("combine", True), base_weight)  # fmt: skip
    if axis.weighted or "base_weight" in row:
        without = [a.name for a in made if a.weight is None]
        if without:
            raise InputError(f"{where}: '{without[0]}' has no weight; weigh every alternative of an axis, or none")
        total = base_weight + sum(a.weight for a in made)
        if not (0 <= base_weight <= 1 and abs(total - 1) <= _ROUNDING):
            raise InputError(
                f"{where}: weights sum to {total:g} (base_weight {base_weight:g} included), they must sum to 1"
            )
    return axis


def _check_when(where, row):
    for key, pattern in row.get("when", {}).items():
        one_of(f"{where}: when", key, [k for k, t in _SCENARIO.items() if t is str])
        if not isinstance(pattern, str):
            raise InputError(f"{where}: when.{key}: {pattern!r} given, must be text")


def _alternative(where, row, folder):
    own = {"name": str, "source": str, "weight": (int, float), "when": dict}
    check_keys(where, row, {**own, **dict.fromkeys(_SCENARIO, object)})
    _check_when(where, row)
    changes = {k: _beside(v, folder) for k, v in row.items() if k in _SCENARIO}
    if not changes:
        raise InputError(f'{where}: changes nothing; set fields of a scenario, for example kicks = "hobbs2005"')
    weight = row.get("weight")
    if weight is not None and not 0 <= weight <= 1:
        raise InputError(f"{where}: weight: {weight!r} given, must be between 0 and 1")
    name = row.get("name")
    if name is None:
        if len(changes) > 1 or not isinstance(next(iter(changes.values())), (str, int, float)):
            raise InputError(f"{where}: needs a name")
        name = str(next(iter(changes.values()))) or "none"
    return Alternative(name, changes, row.get("source", ""), None if weight is None else float(weight),
                       row.get("when", {}))  # fmt: skip


def _beside(value, folder):
    """A file beside the family's own, where the text names one."""
    if folder is not None and isinstance(value, str) and Path(value).suffix and os.path.isfile(Path(folder) / value):
        return str(Path(folder) / value)
    return value


def refuse_conflicts(where, axes):
    """Two axes may not set the same number: a combination of them would have no meaning."""
    seen = {}
    for axis in axes:
        for path in {p for a in axis.alternatives for p in _paths(a.changes)}:
            for old, other in seen.items():
                n = min(len(old), len(path))
                if other != axis.name and old[:n] == path[:n]:
                    raise InputError(
                        f"{where}: axes {other} and {axis.name} both set {'.'.join(path)}; put them into one axis"
                    )
            seen[path] = axis.name


def _paths(table, prefix=()):
    for key, value in table.items():
        if isinstance(value, dict) and value and "value" not in value:
            yield from _paths(value, (*prefix, key))
        else:
            yield (*prefix, key)
