"""Observed events: rows of a table, degenerate solutions of one event, posterior samples of a fit, made one record.

Numbers are floats in internal units (d, mas, mas/yr, kpc, deg, MJD). Errors are kept as given, lower and upper; nothing
is turned from one frame into another here, since errors would not survive it: who computes turns the model instead.
"""

import os
from dataclasses import dataclass, field
from pathlib import Path

import astropy.units as u
import numpy as np

from ..datafiles import find, sample_names
from ..errors import InputError, did_you_mean, kind_of, one_of
from ..galaxy.frames import galactic_from_icrs
from ..io import header_of, read_rows
from .posterior import Draws, is_posterior, read_draws, reference_epoch

__all__ = ["FRAMES", "MEASURED", "Measure", "Observed", "Problems", "Sample", "Solution", "size_of_vector"]

FRAMES = ("heliocentric", "geocentric")
#: what may be measured: unit, allowed range, meaning
MEASURED = {
    "t_E": ("d", (1e-3, 1e5), "Einstein timescale"),
    "pi_E": ("", (0.0, 1e3), "microlens parallax, its size"),
    "pi_EN": ("", (-1e3, 1e3), "its part toward North"),
    "pi_EE": ("", (-1e3, 1e3), "its part toward East"),
    "theta_E": ("mas", (1e-6, 1e4), "angular Einstein radius"),
    "mu_rel": ("mas/yr", (1e-6, 1e5), "relative proper motion, its size, in the frame of t_E"),
    "mu_S_N": ("mas/yr", (-1e4, 1e4), "proper motion of the source toward North, heliocentric"),
    "mu_S_E": ("mas/yr", (-1e4, 1e4), "the same toward East (with cos dec)"),
    "D_S": ("kpc", (1e-3, 1e3), "source distance"),
}
_POSITIVE = ("t_E", "theta_E", "mu_rel", "D_S")
#: numbers without an error: unit, range, meaning
PLAIN = {
    "delta_chi2": ("", (0.0, 1e9), "chi2 above the best solution's"),
    "pi_E_corr": ("", (-0.9999, 0.9999), "correlation of pi_EN and pi_EE"),
    "I_S": ("mag", (0.0, 35.0), "source magnitude"),
    "I_lens_limit": ("mag", (-5.0, 40.0), "the lens is fainter than this in I"),
    "source_fraction": ("", (0.0, 2.0), "source's share of the light, for light curves of follow-up"),
    "u_0": ("", (-10.0, 10.0), "impact parameter, for efficiencies and light curves"),
    "t_0": ("d", (-1e6, 1e7), "time of closest approach, MJD or JD, for light curves"),
}
LABELS = ("event", "name", "id", "ID", "Name")  # columns that may name an event, the first of them
_WORDS = ("event", "solution", "frame", "samples")
_PLACES = {"l": (-720.0, 720.0), "b": (-90.0, 90.0), "ra": (0.0, 360.0), "dec": (-90.0, 90.0)}
_SHOWN = 5  # complaints told in full
_LISTED = 20  # further rows told by number


@dataclass(frozen=True)
class Measure:
    """A measured number with its lower and upper one-sigma errors."""

    value: float
    lo: float
    hi: float

    @property
    def err(self):
        """The mean of both errors."""
        return 0.5 * (self.lo + self.hi)


def size_of_vector(north, east, var_n, var_e, cov):
    """Return the size of a vector and the error of that size, to first order along the vector.

    Parameters
    ----------
    north, east : float
    var_n, var_e, cov : float
        Variances of the parts and their covariance. A vector of no size has the mean of both variances.
    """
    size = float(np.hypot(north, east))
    if size > 0:
        along = (var_n * north**2 + var_e * east**2 + 2 * cov * north * east) / size**2
    else:
        along = 0.5 * (var_n + var_e)
    return size, float(np.sqrt(max(along, 1e-12)))


@dataclass(frozen=True, eq=False)
class Solution:
    """One solution of an event: what it measures, or the draws of its posterior.

    Attributes
    ----------
    name : str
    measured : dict of str to Measure
        Keys of `MEASURED`.
    delta_chi2 : float
        Above the best solution of the event.
    pi_E_corr : float
        Correlation of pi_EN and pi_EE.
    draws : Draws or None
        Posterior samples instead of Gaussians.
    plain : dict of str to float
        I_S, I_lens_limit, source_fraction, u_0, t_0 where given.
    """

    name: str
    measured: dict
    delta_chi2: float = 0.0
    pi_E_corr: float = 0.0
    draws: Draws | None = None
    plain: dict = field(default_factory=dict)

    def has(self, *names):
        """Return whether all of these are measured, as numbers or draws."""
        drawn = self.draws.columns if self.draws is not None else ()
        return all(name in self.measured or name in drawn for name in names)

    def parallax(self):
        """Return the size of the measured vector pi_EN, pi_EE and its error."""
        n, e = self.measured["pi_EN"], self.measured["pi_EE"]
        return size_of_vector(n.value, e.value, n.err**2, e.err**2, self.pi_E_corr * n.err * e.err)


@dataclass(frozen=True, eq=False)
class Observed:
    """One event as a survey reports it.

    Attributes
    ----------
    name : str
    l, b : float
        Galactic coordinates [deg].
    frame : str
        Frame of t_E, the parallax and mu_rel: "heliocentric" or "geocentric" at `t_0par`.
    t_0par : float or None
        Reference epoch [MJD].
    solutions : tuple of Solution
    rows : tuple of int
        Rows of the table it came from, counted from 1.
    """

    name: str
    l: float
    b: float
    frame: str
    t_0par: float | None
    solutions: tuple
    rows: tuple = ()

    @property
    def best_solution(self):
        """The solution of least chi2, whichever row of the table it stands in; the first of equal ones."""
        return min(self.solutions, key=lambda s: s.delta_chi2)

    @property
    def t_E(self):
        """Timescale of the best solution, a Measure."""
        best = self.best_solution
        if "t_E" in best.measured:
            return best.measured["t_E"]
        low, middle, high = best.draws.quantiles("t_E")
        return Measure(middle, middle - low, high - middle)


class Problems:
    """Collects what is wrong with rows, and tells it once: a few in full, the rest counted by column."""

    def __init__(self, where):
        self.where = where
        self.found = []
        self.rows = set()

    def add(self, row, column, text):
        """Note that a row (counted from 1) has something wrong in a column."""
        self.found.append((row, column, text))
        self.rows.add(row)

    def text(self):
        """Return one message for all of them."""
        found = sorted(self.found, key=lambda x: x[0])
        first = "; ".join(f"row {r}, column {c}: {t}" for r, c, t in found[:_SHOWN])
        rest = found[_SHOWN:]
        if not rest:
            return f"{self.where}: {first}"
        count = {}
        for _, column, _ in rest:
            count[column] = count.get(column, 0) + 1
        more = ", ".join(f"{n} in column {c}" for c, n in sorted(count.items(), key=lambda x: -x[1])[:6])
        rows = list(dict.fromkeys(str(r) for r, _, _ in rest))
        which = ", ".join(rows[:_LISTED]) + (" and so on" if len(rows) > _LISTED else "")
        return f"{self.where}: {first}; and {len(rest)} more ({more}) in rows {which}; {len(self.rows)} rows in all"


@dataclass(frozen=True, eq=False)
class Sample:
    """Observed events, and what is to be said about how they were read.

    Attributes
    ----------
    events : tuple of Observed
    name : str
        File name.
    notes : tuple of str
        What was assumed or left out.
    left_out : int
        Rows that were bad and left out on request.
    invented : bool
        Whether the file says that its events are invented.
    """

    events: tuple
    name: str = ""
    notes: tuple = ()
    left_out: int = 0
    invented: bool = False

    def __len__(self):
        return len(self.events)

    def __iter__(self):
        return iter(self.events)

    @classmethod
    def read(cls, path, frame=None, t_0par=None, skip_bad=False):
        """Read a table of events, or a file of posterior samples of one event.

        Parameters
        ----------
        path : str or Path
            ECSV, CSV, FITS or VOTable. Columns in the file's units, else days, mas, mas/yr, kpc, degrees, MJD: event
            (or name, id); l, b or ra, dec; any of `MEASURED` with _err, or _lo and _hi (the lower and upper error);
            solution, delta_chi2; frame, t_0par; samples (a file beside the table); and the numbers of `PLAIN`. Empty
            cells mean not measured. Header keys frame, t_0par, invented. Or the name of a shipped one, for example
            "marram_running" (invented).
        frame : str, optional
            Where neither column nor header says it; unsaid means heliocentric, with a note.
        t_0par : float, optional
            Reference epoch [MJD, or JD] of geocentric events that do not say it.
        skip_bad : bool
            Leave bad rows out instead of refusing the file.

        Returns
        -------
        Sample

        Raises
        ------
        InputError
            Unreadable or empty file, missing or unknown column, or bad rows: the first few with row and column, the
            rest counted.
        """
        if frame is not None:
            one_of("frame", frame, FRAMES)
        kind_of("sample", path, (str, os.PathLike), "a file")
        if str(path) in sample_names() and not os.path.exists(path):
            path = find(f"samples/{path}.ecsv")
        table = read_rows(path, "sample")
        where = f"sample '{path}'"
        if is_posterior(table):
            return cls._of_draws(Path(path), table, frame, t_0par)
        return cls.from_table(table, frame, t_0par, skip_bad, where=where, beside=path)

    @classmethod
    def _of_draws(cls, path, table, frame, t_0par):
        head = header_of(table)
        where = f"samples '{path}'"
        draws = read_draws(table, where)
        l, b = _place_of_header(head, where)
        frame, epoch, notes = _frame_of_header(head, frame, t_0par, where)
        name = str(head.get("event", path.stem))
        solution = Solution(str(head.get("solution", "")), {}, draws=draws)
        event = Observed(name, l, b, frame, epoch, (solution,))
        return cls((event,), path.name, tuple(notes), invented=bool(head.get("invented", False)))

    @classmethod
    def from_table(cls, table, frame=None, t_0par=None, skip_bad=False, where="sample", beside="."):
        """Build from an astropy table; see `read`.

        Parameters
        ----------
        table : astropy.table.Table
        frame, t_0par, skip_bad : optional
            As in `read`.
        where : str
            Named in complaints.
        beside : str or Path
            File beside which posterior samples are looked for.

        Returns
        -------
        Sample

        Raises
        ------
        InputError
            As `read`.
        """
        from .rows import read_events

        return cls(**read_events(table, frame, t_0par, skip_bad, where, Path(beside)))

    def summary(self):
        """Return what was read, in a line or two."""
        n = len(self.events)
        best = [e.solutions for e in self.events]
        lines = [f"{n} event{'s' * (n != 1)}" + (" (invented)" if self.invented else "")]
        counted = {
            "pi_E": sum(any(s.has("pi_E") or s.has("pi_EN", "pi_EE") for s in ss) for ss in best),
            "theta_E": sum(any(s.has("theta_E") for s in ss) for ss in best),
            "mu_rel": sum(any(s.has("mu_rel") for s in ss) for ss in best),
            "source motion": sum(any(s.has("mu_S_N", "mu_S_E") for s in ss) for ss in best),
            "source distance": sum(any(s.has("D_S") for s in ss) for ss in best),
            "a limit on lens light": sum(any("I_lens_limit" in s.plain for s in ss) for ss in best),
        }
        lines.append("t_E of all" + "".join(f", {k} of {v}" for k, v in counted.items() if v))
        several = sum(len(ss) > 1 for ss in best)
        drawn = sum(any(s.draws is not None for s in ss) for ss in best)
        frames = sorted({e.frame for e in self.events})
        words = [f"{several} with degenerate solutions"] * bool(several) + [f"{drawn} as samples"] * bool(drawn)
        words += ["frame " + " and ".join(frames)] + [f"{self.left_out} rows left out"] * bool(self.left_out)
        return "; ".join([*lines, *words])


def _place_of_header(head, where):
    for names in (("l", "b"), ("ra", "dec")):
        if all(n in head for n in names):
            try:
                lon, lat = (float(head[n]) for n in names)
            except (TypeError, ValueError):
                raise InputError(f"{where}: header {names[0]}, {names[1]} must be numbers of degrees") from None
            if not (np.isfinite(lon) and abs(lat) <= 90.0):
                raise InputError(f"{where}: header {names[1]}: {lat:g} deg given, must be between -90 and 90")
            if names[0] == "ra":
                lon, lat = (x.to_value(u.deg) for x in galactic_from_icrs(lon * u.deg, lat * u.deg))
            return float(lon), float(lat)
    raise InputError(f"{where}: the header says no place; give l and b (or ra and dec) in degrees")


def _frame_of_header(head, frame, t_0par, where):
    """Frame and epoch of a whole file, and what to say about them."""
    said = head.get("frame")
    notes = []
    if said is not None:
        said = one_of(f"{where}: frame", str(said), FRAMES)
        if frame is not None and frame != said:
            raise InputError(f"{where}: its header says {said}, --frame says {frame}; correct one")
    elif frame is None:
        notes.append(f"{where} does not say its frame: taken as heliocentric (published parallax fits are geocentric)")
    chosen = said or frame or "heliocentric"
    from .rows import said_epoch

    epoch = said_epoch(head, t_0par, where)
    if chosen == "geocentric":
        if epoch is None:
            raise InputError(
                f"{where}: geocentric, but no reference epoch; give t_0par [MJD] in its header, or --t-0par"
            )
        epoch = reference_epoch(epoch, where)
    return chosen, epoch if chosen == "geocentric" else None, notes


def check_columns(table, where):
    """Raise unless every column is known and the needed ones are there; return how the place is given."""
    label = next((c for c in LABELS if c in table.colnames), "event")
    known = [*_WORDS, label, *_PLACES, *PLAIN, "t_0par"]
    for name in MEASURED:
        known += [name, f"{name}_err", f"{name}_lo", f"{name}_hi"]
    strangers = []
    for name in table.colnames:
        if name not in known:
            bare = name.split("[")[0].split("(")[0].strip()
            if bare != name and bare in known:
                raise InputError(f"{where}: column '{name}': name it '{bare}'; units belong into the file's header")
            near = did_you_mean(name, known)
            if near and name.lower().replace("_", "") in {k.lower().replace("_", "") for k in known}:
                raise InputError(f"{where}: column '{name}' is not known{near}")
            strangers.append(name)
    place = next((p for p in (("l", "b"), ("ra", "dec")) if all(c in table.colnames for c in p)), None)
    if place is None:
        raise InputError(f"{where}: no columns l, b (or ra, dec); columns: {', '.join(table.colnames)}")
    if "t_E" not in table.colnames and "samples" not in table.colnames:
        raise InputError(
            f"{where}: no column 't_E'{did_you_mean('t_E', table.colnames)} (columns: {', '.join(table.colnames)})"
        )
    return place, strangers
