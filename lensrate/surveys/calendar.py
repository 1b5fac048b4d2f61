"""When a survey observes: seasons with gaps, open time, epochs. Days are MJD."""

from dataclasses import dataclass
from datetime import date, datetime

import numpy as np

from ..errors import InputError

__all__ = ["Calendar", "Season", "mjd_of"]

_MJD_OF_ORDINAL = 678576  # MJD 0 is 1858-11-17
_EARLIEST, _LATEST = date(1980, 1, 1), date(2099, 12, 30)


def mjd_of(day, where="date"):
    """Return the MJD at which a day begins.

    Parameters
    ----------
    day : str, date or datetime
        "2031-02-10", or a date as TOML writes it without quotes.
    where : str
        Named in complaints.

    Returns
    -------
    float

    Raises
    ------
    InputError
        Not a date, or outside 1980-2099, as far as the Earth's place is known.
    """
    fraction = 0.0
    if isinstance(day, datetime):
        fraction = (day.hour + (day.minute + day.second / 60) / 60) / 24
        day = day.date()
    if isinstance(day, str):
        try:
            day = date.fromisoformat(day)
        except ValueError:
            raise InputError(f"{where}: '{day}' is not a date; write year-month-day, for example 2031-02-10") from None
    if not isinstance(day, date):
        raise InputError(f"{where}: {day!r} is not a date; write year-month-day, for example 2031-02-10")
    if not _EARLIEST <= day <= _LATEST:
        raise InputError(f"{where}: {day} given, must be between {_EARLIEST} and {_LATEST}")
    return day.toordinal() - _MJD_OF_ORDINAL + fraction


@dataclass(frozen=True)
class Season:
    """One season: from the start of its first day to the end of its last, without its gaps.

    Attributes
    ----------
    start, end : float
        MJD.
    gaps : tuple of (float, float)
        Inside the season, rising, not touching each other.
    name : str
    """

    start: float
    end: float
    gaps: tuple = ()
    name: str = ""

    @classmethod
    def from_dict(cls, table, where="season", name=""):
        """Build from a table with start, end and optionally gaps and name.

        Raises
        ------
        InputError
            End before start, or a gap that is outside or overlaps another.
        """
        from ..remnants.tables import check_keys

        check_keys(where, table, ("start", "end", "gaps", "name"), ("start", "end"))
        start, end = mjd_of(table["start"], f"{where}.start"), mjd_of(table["end"], f"{where}.end") + 1.0
        if not start < end:
            raise InputError(f"{where}: ends {table['end']} before it starts {table['start']}")
        rows = table.get("gaps", [])
        if not isinstance(rows, list) or not all(isinstance(r, list) and len(r) == 2 for r in rows):
            raise InputError(f"{where}.gaps: a list of [start, end] pairs is needed")
        gaps = []
        for row in rows:
            a, b = mjd_of(row[0], f"{where}.gaps"), mjd_of(row[1], f"{where}.gaps") + 1.0
            if not a < b:
                raise InputError(f"{where}.gaps: ends {row[1]} before it starts {row[0]}")
            if not (start <= a and b <= end):
                raise InputError(f"{where}.gaps: {row[0]} to {row[1]} is not inside the season")
            gaps.append((a, b))
        gaps.sort()
        for (_, b), (a, _) in zip(gaps, gaps[1:]):
            if a < b:
                raise InputError(f"{where}.gaps: two gaps overlap; join them into one")
        return cls(start, end, tuple(gaps), str(table.get("name") or name or str(table["start"])[:4]))

    @property
    def length(self):
        """Days from start to end, gaps included."""
        return self.end - self.start

    @property
    def gap_days(self):
        """Days in gaps."""
        return sum(b - a for a, b in self.gaps)

    def open(self):
        """Return the (start, end) intervals without gaps, ndarray (n, 2), MJD."""
        marks = [self.start, *(x for gap in self.gaps for x in gap), self.end]
        pairs = np.array(marks, dtype=float).reshape(-1, 2)
        return pairs[pairs[:, 1] > pairs[:, 0]]


@dataclass(frozen=True)
class Calendar:
    """Seasons in order, not overlapping."""

    seasons: tuple

    def __post_init__(self):
        if not self.seasons:
            raise InputError("season: a campaign needs at least one [[season]]")
        for a, b in zip(self.seasons, self.seasons[1:]):
            if b.start < a.end:
                raise InputError(f"season '{b.name}': starts before season '{a.name}' ends; put them in order, apart")

    @property
    def span(self):
        """Days from the start of the first season to the end of the last."""
        return self.seasons[-1].end - self.seasons[0].start

    def exposure(self, includes=()):
        """Return the days that each season counts for, given what an efficiency already includes.

        Parameters
        ----------
        includes : collection of str
            "seasons": the efficiency is that of events at any time between first start and last end, so the time
            between seasons counts and is shared out by length; "gaps": gaps are in it, so they are not taken off.

        Returns
        -------
        ndarray, shape (seasons,)
            [d]
        """
        days = np.array([s.length - (0.0 if "gaps" in includes else s.gap_days) for s in self.seasons])
        if "seasons" in includes:
            between = self.span - sum(s.length for s in self.seasons)
            length = np.array([s.length for s in self.seasons])
            days = days + between * length / length.sum()
        return days

    def open(self):
        """Return all open intervals, ndarray (n, 2), MJD."""
        return np.concatenate([s.open() for s in self.seasons])

    def draw(self, uniform, includes=()):
        """Turn uniform numbers into times of peak [MJD], spread evenly over the days of `exposure`.

        Parameters
        ----------
        uniform : ndarray
            In [0, 1).
        includes : collection of str
            As `exposure`.

        Returns
        -------
        ndarray
        """
        if "seasons" in includes:
            gaps = [] if "gaps" in includes else [g for s in self.seasons for g in s.gaps]
            marks = [self.seasons[0].start, *(x for g in gaps for x in g), self.seasons[-1].end]
            spans = np.array(marks).reshape(-1, 2)
        elif "gaps" in includes:
            spans = np.array([(s.start, s.end) for s in self.seasons])
        else:
            spans = self.open()
        ends = np.concatenate([[0.0], np.cumsum(spans[:, 1] - spans[:, 0])])
        x = np.asarray(uniform) * ends[-1]
        k = np.clip(np.searchsorted(ends, x, side="right") - 1, 0, len(spans) - 1)
        return spans[k, 0] + (x - ends[k])

    def describe(self):
        """Return one line for headers."""
        n = len(self.seasons)
        observed = self.exposure().sum()
        return f"{n} season{'s' if n > 1 else ''}, {observed:.0f} d open in {self.span:.0f} d"
