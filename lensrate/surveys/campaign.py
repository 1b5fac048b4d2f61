"""The Campaign: fields, seasons, photometry and efficiency of a survey, read from TOML and checked key by key."""

import hashlib
import json
import os
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path

import numpy as np

from ..datafiles import data_folder, find, names, parse_toml
from ..errors import InputError, kind_of, one_of
from ..remnants.tables import check_keys
from ..sources.rules import parse_rule
from .calendar import Calendar, Season
from .efficiency import Efficiency, locate
from .field import Field
from .photometry import Photometry
from .sky import from_plane, overlap_share, to_plane

__all__ = ["Campaign"]

_KEYS = (
    "name",
    "reference",
    "scenario",
    "u_0_limit",
    "luminosity",
    "overlaps",
    "season",
    "photometry",
    "efficiency",
    "field",
)
_OVERLAPS = ("refuse", "count_once", "separate")
_SHARED = 5e-3  # share of a field's area that is no matter of rounding
_MOST_FIELDS = 5000


@dataclass(frozen=True, eq=False)
class Campaign:
    """A survey: where, when, how often, how well, and what it finds.

    Examples
    --------
    >>> import lensrate
    >>> survey = lensrate.Campaign.read("examples/marram.toml")  # doctest: +SKIP
    """

    name: str
    fields: tuple
    calendar: Calendar
    photometry: Photometry
    efficiency: Efficiency
    u_0_limit: float = 1.0
    scenario: str = "default"
    luminosity: str = ""
    overlaps: str = "refuse"
    text: str = ""
    files: tuple = ()  # every file that its text names, in the order of the keys

    @classmethod
    def read(cls, path):
        """Read a campaign file.

        Parameters
        ----------
        path : str or Path
            TOML; files it names lie beside it. Or the name of a shipped one, "marram" (invented).

        Returns
        -------
        Campaign

        Raises
        ------
        InputError
            Not TOML, an unknown key (with the nearest known one), or a statement that is missing or impossible.
        """
        kind_of("campaign", path, (str, os.PathLike), "a file or a shipped name")
        if str(path) in names("campaigns"):
            for sibling in data_folder().joinpath("campaigns").iterdir():
                find(f"campaigns/{sibling.name}")
            path = find(f"campaigns/{path}.toml")
        table = parse_toml(path)
        return cls.from_dict(table, path, Path(path).read_text(encoding="utf-8"))

    @classmethod
    def from_dict(cls, table, where="campaign.toml", text=""):
        """Build from parsed TOML; `where` is the path that file names are relative to.

        Raises
        ------
        InputError
            See `read`.
        """
        check_keys("campaign", table, _KEYS, ("season", "field"))
        for key in ("season", "field"):
            if not isinstance(table[key], list) or not table[key] or not all(isinstance(t, dict) for t in table[key]):
                raise InputError(f"campaign.{key}: a list of tables is needed, [[{key}]]")
        if len(table["field"]) > _MOST_FIELDS:
            raise InputError(f"campaign.field: {len(table['field'])} fields, at most {_MOST_FIELDS} are read")
        u_0 = table.get("u_0_limit", 1.0)
        if isinstance(u_0, bool) or not isinstance(u_0, (int, float)) or not 0 < u_0 <= 3:
            raise InputError(f"campaign.u_0_limit: {u_0!r} given, must be above 0 and at most 3 Einstein radii")
        rows = enumerate(table["season"])
        seasons = tuple(Season.from_dict(t, f"season {i + 1}") for i, t in rows)
        names = [s.name for s in seasons]
        seasons = tuple(
            s if names.count(s.name) == 1 else Season(s.start, s.end, s.gaps, f"{s.name}-{i + 1}")
            for i, s in enumerate(seasons)
        )
        fields = tuple(Field.from_dict(t, f"field {i + 1}", where) for i, t in enumerate(table["field"]))
        twice = [f.name for f in fields if sum(g.name == f.name for g in fields) > 1]
        if twice:
            raise InputError(f"campaign.field: the name '{twice[0]}' is given to two fields")
        photometry = Photometry.from_dict(table["photometry"], where) if "photometry" in table else Photometry()
        efficiency, curve = _efficiency(table.get("efficiency"), where, float(u_0))
        luminosity, scenario = table.get("luminosity", ""), table.get("scenario", "default")
        for key, value in (("luminosity", luminosity), ("scenario", scenario)):
            if not isinstance(value, str):
                raise InputError(f"campaign.{key}: {value!r} given, must be text")
        luminosity = str(locate(luminosity, where)) if luminosity else ""
        if scenario.endswith(".toml"):
            scenario = str(locate(scenario, where))
        files = [curve, photometry.file, luminosity, scenario if scenario.endswith(".toml") else ""]
        files = [name for name in (*files, *(f.extinction_map for f in fields)) if name]
        for name in files:
            if not Path(name).is_file():
                raise InputError(f"campaign: no such file '{name}'; files are looked for beside the campaign's own")
        out = cls(
            str(table.get("name") or Path(where).stem), fields, Calendar(seasons), photometry, efficiency, float(u_0),
            scenario, luminosity, one_of("campaign.overlaps", table.get("overlaps", "refuse"), _OVERLAPS),
            text or json.dumps(table, default=str), tuple(files),
        )  # fmt: skip
        out._check_together()
        return out

    def _check_together(self):
        """What fields, efficiency and stars must agree on."""
        eff = self.efficiency
        eff.check_limit("campaign", self.u_0_limit)
        for f in self.fields:
            if eff.per == "catalogued_object" and f.monitored_stars is None and f.star_density is None:
                raise InputError(
                    f"field '{f.name}': the efficiency is one per catalogued object, so the number of catalogued "
                    "objects must be stated: monitored_stars or star_density_per_arcmin2"
                )
            eff.check_sources(f"field '{f.name}'", f.sources)
            if not hasattr(parse_rule(f.sources), "band") and "distance" in f.sources and f.monitored_stars is None:
                raise InputError(f"field '{f.name}': sources at one distance have no number; state monitored_stars")
        if self.overlaps == "refuse":
            for i, j, share in self.shared:
                raise InputError(
                    f"fields '{self.fields[i].name}', '{self.fields[j].name}' share {share:.1%} of the former's area; "
                    "say overlaps = 'count_once' (the later field loses what it shares) or 'separate' "
                    "(the stars stated are different ones)"
                )

    @cached_property
    def shared(self):
        """Pairs of fields that overlap: (i, j, share of i's area in j), i before j in the file."""
        out = []
        reach = [np.hypot(*f.shape.outline().T).max() for f in self.fields]
        centre = np.radians([[f.l_deg, f.b_deg] for f in self.fields])
        for i, one in enumerate(self.fields):
            for j in range(i + 1, len(self.fields)):
                dl = centre[i, 0] - centre[j, 0]
                cosine = np.sin(centre[i, 1]) * np.sin(centre[j, 1])
                cosine += np.cos(centre[i, 1]) * np.cos(centre[j, 1]) * np.cos(dl)
                if np.arccos(np.clip(cosine, -1, 1)) > np.arctan(reach[i]) + np.arctan(reach[j]):
                    continue
                share = overlap_share(one, self.fields[j])
                # a small field inside a wide one is a small share of the wide one only
                if max(share, overlap_share(self.fields[j], one)) > _SHARED:
                    out.append((i, j, share))
        return out

    def kept_share(self, i):
        """Return the share of field i's area that counts: without what an earlier field has where asked so."""
        if self.overlaps != "count_once":
            return 1.0
        before = [self.fields[a] for a, b, _ in self.shared if b == i]
        if not before:
            return 1.0
        return 1.0 - overlap_share(self.fields[i], _Union(before), n=10000)

    @cached_property
    def hash(self):
        """First 12 digits of the sha256 of the file and of every file that it names."""
        h = hashlib.sha256(self.text.encode())
        for name in self.files:
            # one after the other, each whole: moving a line from one file to the next is another campaign
            h.update(hashlib.sha256(Path(name).read_bytes()).digest())
        return h.hexdigest()[:12]

    def header(self):
        """Return what stands above every table: source rules, u_0 limit, seasons, efficiency."""
        rules = ", ".join(dict.fromkeys(f.sources for f in self.fields))
        return f"sources {rules}; u_0 < {self.u_0_limit:g}; {self.calendar.describe()}; {self.efficiency.describe()}"


class _Union:
    """Several fields seen as one shape, around the first one's centre."""

    def __init__(self, fields):
        self.l_deg, self.b_deg = fields[0].l_deg, fields[0].b_deg
        self._fields = fields
        self.shape = self

    def inside(self, x, y):
        l, b = from_plane(*np.radians([self.l_deg, self.b_deg]), x, y)
        out = np.zeros(np.broadcast(x, y).shape, dtype=bool)
        for f in self._fields:
            px, py, front = to_plane(*np.radians([f.l_deg, f.b_deg]), l, b)
            out |= front & f.shape.inside(px, py)
        return out


def _efficiency(table, where, u_0):
    if table is None:
        return Efficiency.complete(u_0), ""
    check_keys("efficiency", table, ("file", "per", "includes", "u_0_limit", "source_limit"), ("file",))
    path = locate(str(table["file"]), where)
    stated = {k: v for k, v in table.items() if k != "file"}
    return Efficiency.read(path, **stated), str(path)
