"""Lists of fields: directions with names, sizes and outlines, from a table or a campaign file."""

from dataclasses import dataclass, replace
from pathlib import Path

import astropy.units as u
import numpy as np

from ..datafiles import names as shipped
from ..errors import InputError
from ..io import read_rows
from ..lensing.many import directions_of
from . import sky

__all__ = ["FieldList"]

_SHAPES = ("radius_deg", "width_deg", "height_deg", "angle_deg", "area_deg2")
_NAMES = ("name", "field")


@dataclass(frozen=True, eq=False)
class FieldList:
    """Fields of a survey.

    Attributes
    ----------
    l, b : Quantity, shape (n,)
    names : tuple of str
    extinction : list of dict
        Measured A by band [mag].
    area : Quantity, shape (n,), or None
        None where a field has no stated size.
    visit : Quantity, shape (n,), or None
        Time of a visit.
    outlines : list of (str, ndarray (m, 2))
        Name and corners (l, b) [deg]; one point for a field without a size.
    survey : Campaign or None
        Where the fields are those of a campaign, which states more of them; see `skymap.campaign_skymap`.
    """

    l: u.Quantity
    b: u.Quantity
    names: tuple
    extinction: list
    area: u.Quantity | None
    visit: u.Quantity | None
    outlines: list
    survey: object = None

    @classmethod
    def read(cls, path, icrs=False, what="--fields"):
        """Read a table, or a campaign: a file ending in ``.toml``, or a shipped name.

        Parameters
        ----------
        path : str or Path
            Columns l, b (or ra, dec); optionally name, A_V to A_Ks, one of radius_deg, width_deg with height_deg (and
            angle_deg) or area_deg2, and visit_s.
        icrs : bool
            Take ra, dec.
        what : str
            Option named in complaints.

        Returns
        -------
        FieldList

        Raises
        ------
        InputError
            The file cannot be read, or a row cannot be used.
        """
        if Path(path).suffix.lower() == ".toml" or str(path) in shipped("campaigns"):
            return cls._campaign(path)
        table = read_rows(path, what)
        l, b, extinction, carried = directions_of(table, icrs, f"{what} '{path}'", (*_SHAPES, "visit_s"))
        n = l.size
        column = next((c for c in carried.colnames if c.lower() in _NAMES), None)
        names = [str(v) for v in carried[column]] if column else [str(i + 1) for i in range(n)]
        shapes = None
        if any(c in carried.colnames for c in _SHAPES):
            shapes = []
            for i in range(n):
                size = {c: _number(carried, c, i, u.deg**2 if c == "area_deg2" else u.deg) for c in _SHAPES}
                size = {c: v for c, v in size.items() if v is not None}
                where = f"{what}: row {i + 1}"
                shapes.append(sky.parse_shape(where, size, float(l[i].value), float(b[i].value)))
        visit = None
        if "visit_s" in carried.colnames:
            rows = [_number(carried, "visit_s", i, u.s) for i in range(n)]
            if any(v is None or not v > 0 for v in rows):
                raise InputError(f"{what}: column visit_s must hold a time above 0 in every row")
            visit = np.array(rows) * u.s
        return cls._make(l, b, names, extinction, shapes, visit)

    @classmethod
    def _campaign(cls, path):
        from .campaign import Campaign

        survey = Campaign.read(path)
        fields = survey.fields
        l, b = (np.array([getattr(f, k) for f in fields]) * u.deg for k in ("l_deg", "b_deg"))
        extinction = [dict(f.extinction) for f in fields]
        made = cls._make(l, b, [f.name for f in fields], extinction, [f.shape for f in fields], None)
        return replace(made, survey=survey)

    @classmethod
    def _make(cls, l, b, names, extinction, shapes, visit):
        outlines, area = [], None
        for i, name in enumerate(names):
            here = np.array([[l[i].to_value(u.deg), b[i].to_value(u.deg)]])
            if shapes is not None:
                corners = shapes[i].outline()
                here = np.degrees(np.column_stack(sky.from_plane(*np.radians(here[0]), *corners.T)))
            outlines.append((name, here))
        if shapes is not None:
            area = np.array([s.area_deg2() for s in shapes]) * u.deg**2
        return cls(l, b, tuple(names), extinction, area, visit, outlines)


def _number(table, name, i, unit):
    """A cell as a plain number in a unit, None where there is none."""
    if name not in table.colnames or np.ma.is_masked(table[name][i]):
        return None
    column = table[name]
    try:
        value = float(u.Quantity(column[i], column.unit or unit).to_value(unit))
    except (TypeError, ValueError, u.UnitConversionError):
        raise InputError(f"fields: row {i + 1}, column {name}: '{column[i]}' is not a number in {unit}") from None
    return value if np.isfinite(value) else None
