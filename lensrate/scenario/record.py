"""The Scenario: a frozen record of every assumption, read from TOML, checked key by key, hashed."""

import hashlib
import json
import math
import os
import re
from dataclasses import asdict, dataclass, field, replace
from dataclasses import fields as declared
from functools import cached_property
from html import escape
from pathlib import Path

from ..datafiles import field_checksum, field_names, names, parse_toml, read_set
from ..errors import InputError, did_you_mean, one_of
from ..galaxy.model import Galaxy
from ..remnants.classes import LensClass
from ..remnants.kicks import FORMS, parse_kick
from ..sources.bands import BANDS
from ..sources.rules import parse_rule
from .numerics import Numerics

__all__ = ["Scenario"]

_BH_KICKS = ("same", "momentum")
_FILES = ("galaxy", "dust", "luminosity", "imf", "lifetimes", "ifmr", "fields")  # may name a user's file
_PICKED = {"galaxy": "galaxy", "lifetimes": "lifetimes", "ifmr": "ifmr"}


@dataclass(frozen=True)
class Scenario:
    """Every assumption of a forecast, by name or as explicit forms.

    Examples
    --------
    >>> import lensrate
    >>> lensrate.Scenario.read("default").replace(kicks="maxwell:265").kicks
    'maxwell:265'
    """

    name: str = "default"
    title: str = ""
    galaxy: str = "default"  # Galaxy set, or a path ending in .toml
    sources: str = "limit:I=21"  # source rule
    extinction: dict = field(default_factory=dict)  # measured A by band, mag; empty: the smooth dust disc
    dust: str = "dust_default"
    luminosity: str = ""  # a luminosity function of the user's own (file); empty: from the populations
    imf: str = ""  # one mass function for all components; empty: each component's own
    lifetimes: str = "standard"
    ifmr: str = "default"
    kicks: str = "igoshev2020"  # law of neutron stars
    bh_kicks: str = "momentum"  # same, momentum (speeds scaled by M_NS / M_BH), or a law
    fields: str = "default"  # kick-resolved fields: shipped name or a .fits file; empty: none, all unkicked
    u_0_limit: float = 1.0
    numerics: dict = field(default_factory=dict)
    lens_class: dict = field(default_factory=dict)  # classes of the user's own, by name
    change: dict = field(default_factory=dict)  # changed numbers of the Galaxy set: {component: {density: {...}}}
    component: tuple = ()  # further components, as in a Galaxy set

    def __post_init__(self):
        for f in declared(self):
            value = getattr(self, f.name)
            if f.type is str and not isinstance(value, str):
                raise InputError(f"scenario: {f.name}: {value!r} given, must be text")
            if f.type is dict and not isinstance(value, dict):
                raise InputError(f"scenario: {f.name}: {value!r} given, must be a table")
        if not isinstance(self.component, (list, tuple)) or not all(isinstance(c, dict) for c in self.component):
            raise InputError(f"scenario: component: {self.component!r} given, must be a list of tables, [[component]]")
        object.__setattr__(self, "component", tuple(self.component))
        if self.luminosity and not os.path.isfile(self.luminosity):
            raise InputError(f"scenario: luminosity: no file '{self.luminosity}'")
        self._check_numbers()
        parse_rule(self.sources)
        parse_kick(self.kicks)
        if self.bh_kicks not in _BH_KICKS:
            word = self.bh_kicks.strip().partition(":")[0]
            if not self.bh_kicks.strip().endswith(".toml"):
                one_of("bh_kicks", word, [*_BH_KICKS, *FORMS, *names("kicks")])
            try:
                parse_kick(self.bh_kicks)
            except InputError as error:
                raise InputError(f"bh_kicks: {str(error).removeprefix('kicks: ')}") from None
        for kind, key in _PICKED.items():
            text = getattr(self, key)
            if not text.endswith(".toml"):
                one_of(f"scenario: {key}", text, names(kind))
        if self.imf and not self.imf.endswith(".toml"):
            one_of("scenario: imf", self.imf, names("imf"))
        if self.fields and not self.fields.endswith(".fits"):
            one_of("scenario: fields", self.fields, field_names())
        if not self.dust.endswith(".toml"):
            one_of("scenario: dust", self.dust, [n for n in names("sources") if n.startswith("dust")])
        if not self.lens_class:
            return
        hosts = self._galaxy_table["component"]
        known = {row.get("name") for row in hosts} | {row.get("element") for row in hosts} - {None}
        for name, table in self.lens_class.items():
            for host in LensClass.parse(name, table).rides_on:
                one_of(f"lens_class.{name}.rides_on", host, known)

    def _check_numbers(self):
        u_0 = self.u_0_limit
        if isinstance(u_0, bool) or not isinstance(u_0, (int, float)) or not 0 < u_0 <= 3:
            raise InputError(f"scenario: u_0_limit: {u_0!r} given, must be above 0 and at most 3 Einstein radii")
        for band, a in self.extinction.items():
            one_of("scenario: extinction", band, BANDS)
            if isinstance(a, bool) or not isinstance(a, (int, float)) or not (math.isfinite(a) and 0 <= a <= 60):
                raise InputError(f"scenario: extinction.{band}: {a!r} given, must be between 0 and 60 mag")
        Numerics.from_dict(self.numerics)

    @classmethod
    def read(cls, name="default"):
        """Read a named scenario, or a user's TOML file by path.

        A user's file may start from another one with ``base = "default"`` and state only what differs.

        Parameters
        ----------
        name : str or Path
            Shipped name, or a path ending in ``.toml`` or containing a slash.

        Returns
        -------
        Scenario

        Raises
        ------
        InputError
            Unknown name or key (with the nearest known one), not TOML, or an impossible value.
        """
        text = str(name)
        if text.endswith(".toml") or "/" in text or os.path.isfile(text):
            return cls.from_dict(parse_toml(text), where=text, stem=Path(text).stem)
        one_of("scenario", text, names("scenarios"))
        return cls.from_dict(read_set("scenarios", text), where=text, stem=text)

    @classmethod
    def from_dict(cls, table, where="scenario", stem="unnamed", _depth=0):
        """Build from nested tables as a scenario file holds them.

        Parameters
        ----------
        table : dict
            Parsed TOML.
        where : str
            Named in complaints.
        stem : str
            Name where the table states none.

        Returns
        -------
        Scenario

        Raises
        ------
        InputError
            See `read`.
        """
        known = [f.name for f in declared(cls)]
        for key in table:
            if key not in (*known, "base"):
                raise InputError(
                    f"{where}: unknown key '{key}'{did_you_mean(key, known)} (known: base, {', '.join(known)})"
                )
        if _depth > 8:
            raise InputError(f"{where}: 'base' goes in circles or deeper than 8 files")
        rest = {k: v for k, v in table.items() if k != "base"}
        rest.setdefault("name", stem)
        for key in _FILES:
            if isinstance(rest.get(key), str) and Path(rest[key]).suffix:
                # beside the file that names it, not beside wherever the program was started
                rest[key] = str(Path(where).parent / rest[key])
        for key in ("kicks", "bh_kicks"):
            if isinstance(rest.get(key), str) and rest[key].endswith(".toml"):
                rest[key] = str(Path(where).parent / rest[key])
        if "base" not in table:
            return cls(**rest)
        rest.setdefault("title", "")
        base = table["base"]
        if not isinstance(base, str):
            raise InputError(f"{where}: base: {base!r} given, must be a scenario's name or file")
        if base.endswith(".toml"):
            path = Path(where).parent / base if not Path(base).is_absolute() else Path(base)
            start = cls.from_dict(parse_toml(path), str(path), path.stem, _depth + 1)
        else:
            one_of(f"{where}: base", base, names("scenarios"))
            start = cls.from_dict(read_set("scenarios", base), base, base, _depth + 1)
        merged = {k: _merge(getattr(start, k), v) for k, v in rest.items()}
        return replace(start, **merged)

    def replace(self, **changes):
        """Return a copy with some assumptions exchanged.

        Parameters
        ----------
        **changes
            Fields of `Scenario`, for example ``kicks="hobbs2005"``.

        Returns
        -------
        Scenario

        Raises
        ------
        InputError
            Unknown field or impossible value.
        """
        known = [f.name for f in declared(self)]
        for key in changes:
            one_of("scenario", key, known)
        return replace(self, **changes)

    @cached_property
    def _galaxy_table(self):
        """The Galaxy set with this scenario's changes and further components."""
        table = json.loads(json.dumps(read_set("galaxy", self.galaxy), default=str))
        if not isinstance(table.get("component"), list):
            raise InputError(f"{self.galaxy}: component must be a list of tables, [[component]]")
        for key, changes in self.change.items():
            if not isinstance(changes, dict):
                raise InputError(f"scenario: change.{key}: {changes!r} given, must be a table")
            targets = [c for c in table["component"] if key in (c.get("name"), c.get("element"))]
            if key in ("sun", "rotation"):
                targets = [table.setdefault(key, {})]
            if not targets:
                words = ["sun", "rotation", *dict.fromkeys(c.get("name", "") for c in table["component"])]
                one_of("scenario: change", key, words)
            for target in targets:
                target.update(_merge(target, changes))
        table["component"] = [*table["component"], *self.component]
        return table

    @property
    def unkicked(self):
        """Whether no law of this scenario kicks anything."""
        return self.kicks == "none" and self.bh_kicks in ("same", "momentum", "none")

    def kick_words(self):
        """Return the kick laws in words, for people."""
        if self.unkicked:
            return "no natal kicks"
        holes = {"momentum": "the same momentum", "same": "the same law"}
        return f"kicks: neutron stars {self.kicks}, black holes {holes.get(self.bh_kicks, self.bh_kicks)}"

    def build_galaxy(self):
        """Return the Galaxy of this scenario, its changes included.

        Returns
        -------
        Galaxy
        """
        try:
            return Galaxy.from_dict(self._galaxy_table, self.galaxy)
        except InputError as error:
            raise InputError(self._by_own_key(str(error))) from None

    def _by_own_key(self, text):
        """Complaints of the Galaxy set that this scenario's own numbers cause, by the key that holds them."""
        found = re.match(rf"{re.escape(self.galaxy)}: (?:(sun|rotation)|component (\d+))(?=[.:])", text)
        if not found:
            return text
        rest, key = text[found.end() :], found[1]
        if key is None:
            rows, i = self._galaxy_table["component"], int(found[2]) - 1
            own = len(rows) - len(self.component)
            if i >= own:
                return f"scenario '{self.name}': component {i - own + 1}{rest}"
            key = next((k for k in self.change if k in (rows[i].get("name"), rows[i].get("element"))), None)
        return f"scenario '{self.name}': change.{key}{rest}" if key in self.change else text

    def galaxy_toml(self):
        """Return the Galaxy set with this scenario's changes as TOML that `Galaxy.read` takes.

        Returns
        -------
        str
        """
        return _toml(self._galaxy_table)

    def to_dict(self):
        """Return the full statement as plain tables, fit for JSON or TOML.

        Returns
        -------
        dict
        """
        out = asdict(self)
        out["component"] = list(self.component)
        return out

    @cached_property
    def hash(self):
        """First 12 digits of the sha256 of everything stated here and in the sets it names."""
        full = self.to_dict()
        for key in ("name", "title"):
            full.pop(key)
        for key in ("kicks", "bh_kicks"):
            if full[key] not in _BH_KICKS:
                law = parse_kick(full[key])
                full[key] = [law.kind, law.values, law.weights]
        full["sources"] = parse_rule(self.sources).text
        for key in _FILES:
            if Path(full[key]).suffix:
                full[key] = "file"  # where a user's file lies changes nothing; what is in it follows below
        used = {str(self.imf or row.get("imf", "kroupa2001")) for row in self._galaxy_table["component"]}
        full["sets"] = {
            "galaxy": self._galaxy_table,
            "lifetimes": read_set("lifetimes", self.lifetimes),
            "ifmr": read_set("ifmr", self.ifmr),
            "dust": read_set("sources", self.dust),
            "light": [read_set("sources", n) for n in ("giants", "dwarf_sequence", "extinction_law")],
            "imf": {n: read_set("imf", n) for n in sorted(used)},
        }
        if self._galaxy_table.get("potential"):
            full["sets"]["potential"] = read_set("potential", self._galaxy_table["potential"])
        if self.fields and not self.unkicked:
            full["sets"]["fields"] = field_checksum(self.fields)
        if self.luminosity:
            full["sets"]["luminosity"] = hashlib.sha256(Path(self.luminosity).read_bytes()).hexdigest()
        text = json.dumps(_plain_numbers(full), sort_keys=True, default=str, allow_nan=True)
        return hashlib.sha256(text.encode()).hexdigest()[:12]

    def to_toml(self):
        """Return the scenario as TOML that `read` takes back, from wherever it is then kept.

        Returns
        -------
        str
        """
        table = self.to_dict()
        for key in _FILES:
            if Path(table[key]).suffix:
                table[key] = os.path.abspath(table[key])
        for key in ("kicks", "bh_kicks"):
            if table[key].endswith(".toml"):
                table[key] = os.path.abspath(table[key])
        return _toml(table)

    def made(self):
        """Return what every output states: name, hash and text, and the checksum of the fields it uses.

        Returns
        -------
        dict
        """
        kept = field_checksum(self.fields) if self.fields and not self.unkicked else None
        return {
            "scenario": self.name,
            "scenario_hash": self.hash,
            "scenario_text": self.to_toml(),
            "fields_sha256": kept,
        }

    def __repr__(self):
        chosen = f"galaxy='{self.galaxy}', sources='{self.sources}', kicks='{self.kicks}'"
        return f"Scenario('{self.name}', {chosen}, hash={self.hash})"

    def _repr_html_(self):
        stated = {k: v for k, v in self.to_dict().items() if v not in ("", {}, [])}
        rows = "".join(f"<tr><td>{k}</td><td>{escape(str(v))}</td></tr>" for k, v in stated.items())
        return f"<table><caption>scenario {self.hash}</caption>{rows}</table>"


def _plain_numbers(value):
    """Every number as a float, so that 1 and 1.0 are the same assumption."""
    if isinstance(value, dict):
        return {k: _plain_numbers(v) for k, v in value.items()}
    if isinstance(value, (list, tuple)):
        return [_plain_numbers(v) for v in value]
    return float(value) if isinstance(value, int) and not isinstance(value, bool) else value


def _merge(old, new):
    """Return `new` laid over `old`: tables are merged key by key, everything else is replaced."""
    if isinstance(old, dict) and isinstance(new, dict) and "value" not in new:
        return {**old, **{k: _merge(old.get(k), v) for k, v in new.items()}}
    return new


def _toml(table, prefix=()):
    plain, tables, lists = [], [], []
    for key, value in table.items():
        if isinstance(value, dict) and ("value" in value or not value):
            if value or prefix:
                plain.append(f"{_key(key)} = {_value(value)}")
        elif isinstance(value, dict):
            tables.append((key, value))
        elif isinstance(value, list) and value and all(isinstance(v, dict) for v in value):
            lists.append((key, value))
        else:
            plain.append(f"{_key(key)} = {_value(value)}")
    out = "\n".join(plain) + "\n" if plain else ""
    for key, value in tables:
        out += f"\n[{'.'.join(map(_key, (*prefix, key)))}]\n" + _toml(value, (*prefix, key))
    for key, rows in lists:
        for row in rows:
            out += f"\n[[{'.'.join(map(_key, (*prefix, key)))}]]\n" + _toml(row, (*prefix, key))
    return out


def _key(key):
    return (
        key
        if key.replace("_", "").replace("-", "").isalnum() and key.isascii()
        else _text(key)
    )


def _value(value):
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, float) and math.isinf(value):
        return "inf" if value > 0 else "-inf"
    if isinstance(value, (list, tuple)):
        return "[" + ", ".join(_value(v) for v in value) + "]"
    if isinstance(value, (int, float)):
        return repr(value)
    if isinstance(value, dict):
        inner = ", ".join(f"{_key(k)} = {_value(v)}" for k, v in value.items())
        return f"{{ {inner} }}" if inner else "{}"
    return _text(value)


def _text(value):
    """Quoted text; what a terminal would obey, or TOML refuses, is written as an escape."""
    quoted = json.dumps(str(value), ensure_ascii=False)
    return "".join(c if c.isprintable() else f"\\U{ord(c):08x}" for c in quoted)
