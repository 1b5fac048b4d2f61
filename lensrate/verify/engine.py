"""The checks: rows of ``data/published`` beside what this package computes, and their verdicts.

Each group has a table ``published/GROUP.toml`` and a module here with ``COMPUTE``, a function for each row's id.
"""

import hashlib
import math
from dataclasses import dataclass
from importlib import import_module

from .._version import __version__
from ..datafiles import checksums, data_folder, find, parse_toml
from ..errors import LensrateError, one_of
from ..remnants.unpacked import damaged_copies

__all__ = ["GROUPS", "Check", "checks", "rows_of", "to_table"]

#: in the order of the report; "files" has no table, it is about the tables
GROUPS = ("lensing", "galaxy", "remnants", "sources", "surveys", "events", "files")


@dataclass(frozen=True)
class Check:
    """One published value beside the computed one.

    Attributes
    ----------
    id, group : str
        Name of the row and of its table.
    quantity, unit, source : str
        What it is, its unit ("" for a pure number), and who published it.
    published : float
        The value; the middle of the band where two sources span one.
    error : float or None
        Published error, on the computed value's side if it has two; half the width of a band.
    tolerance : float or str
        Largest accepted difference, in `unit`; or in words where it is not the same on both sides.
    accepted : (float, float)
        The range of computed values that agree.
    computed : float
        NaN where the computation failed.
    status : str
        How the published value is known: "seen" in print, from "memory", or "computed" from stated ingredients.
    used_in_tuning : bool
        Whether the value was in view when the default Galaxy was chosen: agreement is then no test of it.
    expected_to_differ : bool
        A known disagreement, explained by `why`.
    note, why : str
        Conditions; reason of a known disagreement.
    """

    id: str
    group: str
    quantity: str
    published: float
    error: float | None
    tolerance: float | str
    accepted: tuple
    computed: float
    unit: str
    source: str
    status: str
    used_in_tuning: bool
    note: str = ""
    expected_to_differ: bool = False
    why: str = ""

    @property
    def agrees(self):
        """Whether the computed value lies in the accepted range."""
        return bool(self.accepted[0] <= self.computed <= self.accepted[1])

    @property
    def failed(self):
        """Whether it should agree and does not, or could not be computed."""
        return not self.agrees and (not self.expected_to_differ or math.isnan(self.computed))

    @property
    def verdict(self):
        """The outcome in a word or two; a star marks values that were in view in tuning."""
        word = "agrees" if self.agrees else "FAILS" if self.failed else "differs: known"
        return word + (" *" if self.used_in_tuning else "")

    def to_dict(self):
        """Return plain numbers under the keys of ``lensrate verify --json``.

        Returns
        -------
        dict
            `status` says in words whether the values agree, why not where that is known, and how the published one
            is known; `note` holds the conditions, and the tolerance where it is a rule.
        """
        word = "agrees" if self.agrees else "differs" if self.failed else f"differs, known: {self.why}"
        known = {"memory": "published value from memory", "seen": "published value seen in print"}
        known = known.get(self.status, f"published value: {self.status}")
        return {
            "id": self.id,
            "group": self.group,
            "quantity": self.quantity,
            "published": self.published,
            "error": self.error,
            "computed": self.computed if math.isfinite(self.computed) else None,
            "unit": self.unit,
            "source": self.source,
            "status": f"{word}; {known}{'; in view in tuning, no test' if self.used_in_tuning else ''}",
            "used_in_tuning": self.used_in_tuning,
            "verdict": self.verdict,
            "note": "; ".join(t for t in (self.note, self.tolerance) if t and isinstance(t, str)),
        }


def rows_of(group):
    """Return the rows of one group's table as they stand in the file.

    Parameters
    ----------
    group : str
        One of `GROUPS` that has a table.

    Returns
    -------
    list of dict

    Notes
    -----
    A row states ``published`` with ``tolerance`` (absolute, in its unit) or ``sigmas`` (of its ``error``, a number or
    [plus, minus]); or a band ``low``, ``high``, which may be left by ``slack`` (share of the nearer edge) or
    ``tolerance``.
    """
    return parse_toml(find(f"published/{group}.toml"))["check"]


def checks(group=None):
    """Recompute published values.

    Parameters
    ----------
    group : str, optional
        One of `GROUPS`; all of them if not given.

    Returns
    -------
    list of Check

    Raises
    ------
    InputError
        Unknown group.
    DataFileError
        A table of published values is missing or damaged.
    """
    chosen = GROUPS if group is None else (one_of("group", group, GROUPS),)
    out = []
    for name in chosen:
        if name == "files":
            out.append(_files())
            continue
        compute = import_module(f"lensrate.verify.{name}").COMPUTE
        out += [check(row, compute[row["id"]]) for row in rows_of(name)]
    return out


def check(row, compute):
    """Compute one row.

    Parameters
    ----------
    row : dict
        From `rows_of`.
    compute : callable
        Gives the value in the row's unit.

    Returns
    -------
    Check
        What went wrong stands in its note, with NaN as value.
    """
    note = row.get("note", "")
    try:
        computed = float(compute())
    except LensrateError as error:
        computed, note = math.nan, f"{note}; {error}".strip("; ")
    published, error, tolerance, accepted = _judge(row, computed)
    return Check(
        id=row["id"],
        group=row["group"],
        quantity=row["quantity"],
        published=published,
        error=error,
        tolerance=tolerance,
        accepted=accepted,
        computed=computed,
        unit=row["unit"],
        source=row["source"],
        status=row["status"],
        used_in_tuning=row["used_in_tuning"],
        note=note,
        expected_to_differ=row.get("expected_to_differ", False),
        why=row.get("why", ""),
    )


def _judge(row, computed):
    """Published value, its error, the tolerance and the accepted range of a row."""
    if "low" in row:
        low, high = row["low"], row["high"]
        slack, beyond = row.get("slack", 0.0), row.get("tolerance", 0.0)
        # the slack is a share of an edge's size, so that it widens the band where an edge is negative too
        accepted = (low - slack * abs(low) - beyond, high + slack * abs(high) + beyond)
        if slack:
            words = f"within {100 * slack:g} % of the nearer edge of {low:g} to {high:g}"
        else:
            words = f"within {beyond:g} of {low:g} to {high:g}"
        middle, half = (float(f"{x:.12g}") for x in (0.5 * (low + high), 0.5 * (high - low)))
        return middle, row.get("error", half), words, accepted
    published, error = row["published"], row.get("error")
    plus, minus = error if isinstance(error, list) else (error, error)
    error = plus if computed > published else minus
    if "sigmas" not in row:
        return published, error, row["tolerance"], (published - row["tolerance"], published + row["tolerance"])
    n = row["sigmas"]
    return published, error, f"within {n:g} sigma", (published - n * minus, published + n * plus)


def _files():
    """Shipped files, and unpacked copies of them, whose content is not the one that was shipped."""
    damaged = []
    for name, digest in checksums().items():
        path = data_folder() / name
        if not path.is_file() or hashlib.sha256(path.read_bytes()).hexdigest() != digest:
            damaged.append(name)
    damaged += damaged_copies()
    return Check(
        id="files_damaged",
        group="files",
        quantity="data files missing or changed",
        published=0.0,
        error=None,
        tolerance=0.0,
        accepted=(0.0, 0.0),
        computed=float(len(damaged)),
        unit="",
        source=f"SHA256SUMS of lensrate {__version__}",
        status="computed",
        used_in_tuning=False,
        note=", ".join(damaged),
    )


def to_table(rows):
    """Return the checks as a table.

    Parameters
    ----------
    rows : list of Check
        From `checks`.

    Returns
    -------
    astropy.table.QTable
        A row per check. Units differ by row, so they stand in a column of their own; a missing error is NaN.
    """
    import numpy as np
    from astropy.table import QTable

    described = {
        "id": "name of the check",
        "group": "table of published values",
        "quantity": "what is compared",
        "published": "published value, or the middle of a band",
        "error": "published error, or half the width of a band; nan: none stated",
        "computed": "recomputed; nan: failed",
        "unit": "unit of the three numbers",
        "source": "where it was published",
        "status": "whether they agree, why not, how the published value is known",
        "used_in_tuning": "in view when the default Galaxy was chosen",
        "verdict": "outcome in a word; *: in view in tuning",
        "note": "conditions",
    }
    plain = [row.to_dict() for row in rows]
    table = QTable()
    for name, text in described.items():
        values = [row[name] for row in plain]
        if name in ("published", "error", "computed"):
            values = np.array([np.nan if v is None else v for v in values], dtype=float)
        table[name] = values
        table[name].info.description = text
    table.meta.update({"program": "lensrate", "version": __version__, "failed": sum(row.failed for row in rows)})
    return table
