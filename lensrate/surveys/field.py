"""One field of a survey: place, shape, which stars are its sources and how many."""

from dataclasses import dataclass, field

import astropy.units as u
import numpy as np

from ..errors import InputError, one_of
from ..galaxy.frames import galactic_from_icrs
from ..remnants.tables import check_keys
from ..sources.bands import BANDS
from ..sources.rules import parse_rule
from .efficiency import locate
from .photometry import positive
from .sky import from_plane, parse_shape

__all__ = ["Field"]

_KEYS = (
    "name", "l", "b", "ra", "dec", "radius_deg", "width_deg", "height_deg", "angle_deg", "polygon", "area_deg2",
    "limit", "limit_on", "sources", "extinction", "sky_map_of_extinction", "monitored_stars",
    "star_density_per_arcmin2", "observed_events", "cadence_d",
)  # fmt: skip
_NEAR_PLANE = 2.0  # deg, inside which the smooth dust disc is not credible for one field


@dataclass(frozen=True, eq=False)
class Field:
    """One survey field.

    Attributes
    ----------
    name : str
    l_deg, b_deg : float
        Centre.
    shape : Circle, Rectangle, Polygon or Patch
    sources : str
        Source rule.
    extinction : dict
        Measured A by band [mag]; empty: the smooth dust disc.
    extinction_map : str
        FITS image of A in the rule's band, instead of one number.
    monitored_stars : float or None
        Sources that pass the rule, as the user counts them.
    star_density : float or None
        The same per square arcminute.
    observed_events : float or None
        Events actually found in this field, that the forecast may be scaled to.
    cadence_d : float or None
        Where it differs from the campaign's.
    """

    name: str
    l_deg: float
    b_deg: float
    shape: object
    sources: str = "limit:I=21"
    extinction: dict = field(default_factory=dict)
    extinction_map: str = ""
    monitored_stars: float | None = None
    star_density: float | None = None
    observed_events: float | None = None
    cadence_d: float | None = None

    @classmethod
    def from_dict(cls, table, where, beside):
        """Build from one [[field]] of a campaign.

        Raises
        ------
        InputError
            Unknown key, missing place or shape, impossible number.
        """
        check_keys(where, table, _KEYS, ())
        name = str(table.get("name", where))
        where = f"field '{name}'"
        l, b, turn = _centre(where, table)
        shape = parse_shape(where, table, l, b, turn)
        sources = _rule(where, table)
        extinction = table.get("extinction", {})
        if not isinstance(extinction, dict):
            raise InputError(f"{where}.extinction: {extinction!r} given, must be a table like {{I = 1.25}}")
        for band, a in extinction.items():
            one_of(f"{where}.extinction", band, BANDS)
            if isinstance(a, bool) or not isinstance(a, (int, float)) or not 0 <= a <= 60:
                raise InputError(f"{where}.extinction.{band}: {a!r} given, must be between 0 and 60 mag")
        mapped = table.get("sky_map_of_extinction", "")
        if mapped and extinction:
            raise InputError(f"{where}: extinction and sky_map_of_extinction are both given; keep one")
        out = cls(
            name, l, b, shape, sources, {k: float(v) for k, v in extinction.items()},
            str(locate(mapped, beside)) if mapped else "",
            positive(where, table, "monitored_stars", 1e12, optional=True),
            positive(where, table, "star_density_per_arcmin2", 1e9, optional=True),
            _counted(where, table, "observed_events"),
            positive(where, table, "cadence_d", 1000.0, optional=True),
        )  # fmt: skip
        if out.monitored_stars is not None and out.star_density is not None:
            raise InputError(f"{where}: monitored_stars and star_density_per_arcmin2 are both given; keep one")
        rule = parse_rule(sources)
        if mapped and not hasattr(rule, "band"):
            raise InputError(f"{where}: sky_map_of_extinction needs sources with a magnitude limit, not '{sources}'")
        if hasattr(rule, "band") and not out.extinction and not mapped:
            edge = np.append(out.outline()[1], out.b_deg)
            lowest = 0.0 if edge.min() < 0 < edge.max() else float(np.abs(edge).min())
            if lowest < _NEAR_PLANE:
                raise InputError(
                    f"{where}: comes within {lowest:.2f} deg of the plane, where the smooth dust disc is not credible; "
                    f"state its extinction, for example extinction = {{{rule.band} = 2.5}}, or a map of it"
                )
        return out

    @property
    def area_deg2(self):
        """Solid angle [deg2]."""
        return self.shape.area_deg2()

    def directions(self):
        """Return l, b [deg] and weights of the points that stand for the field."""
        x, y, w = self.shape.nodes()
        l, b = from_plane(*np.radians([self.l_deg, self.b_deg]), x, y)
        return np.degrees(l), np.degrees(b), w

    def outline(self):
        """Return l, b [deg] along the field's edge."""
        l, b = from_plane(*np.radians([self.l_deg, self.b_deg]), *self.shape.outline().T)
        return np.degrees(l), np.degrees(b)


def _centre(where, table):
    """Centre l, b [deg] of a field, and how its polygon's corners become Galactic (None: they are)."""

    def icrs(lon, lat):
        l, b = galactic_from_icrs(np.asarray(lon) * u.deg, np.asarray(lat) * u.deg)
        return l.value, b.value

    pairs = {("l", "b"): None, ("ra", "dec"): icrs}
    given = [p for p in pairs if any(k in table for k in p)]
    if len(given) != 1 and not (not given and "polygon" in table):
        raise InputError(f"{where}: its place is needed as l and b, or as ra and dec, in degrees")
    if not given:
        corners = table["polygon"]
        if (
            not isinstance(corners, list)
            or not corners
            or not all(isinstance(c, list) and len(c) == 2 for c in corners)
        ):
            raise InputError(f"{where}.polygon: a list of [l, b] pairs in degrees is needed")
        lon, lat = np.radians(np.array(corners, dtype=float)).T
        v = np.array([np.cos(lat) * np.cos(lon), np.cos(lat) * np.sin(lon), np.sin(lat)]).mean(axis=1)
        return (
            float(np.degrees(np.arctan2(v[1], v[0])) % 360),
            float(np.degrees(np.arctan2(v[2], np.hypot(*v[:2])))),
            None,
        )
    values = []
    for key, (low, high) in zip(given[0], ((-360.0, 360.0), (-90.0, 90.0))):
        value = table.get(key)
        if isinstance(value, bool) or not isinstance(value, (int, float)) or not low <= value <= high:
            raise InputError(f"{where}.{key}: {value!r} given, must be a number of degrees, {low:g} to {high:g}")
        values.append(float(value))
    turn = pairs[given[0]]
    if turn is not None:
        values = [float(x) for x in turn(*values)]
    return values[0], values[1], turn


def _rule(where, table):
    """Source rule of a field: `sources`, or `limit` at baseline or at peak."""
    if "sources" in table:
        if "limit" in table or "limit_on" in table:
            raise InputError(f"{where}: sources and limit are both given; keep one")
        return parse_rule(table["sources"]).text
    if "limit" not in table:
        raise InputError(f'{where}: needs limit, for example limit = "I=21", or sources = "clump"')
    on = one_of(f"{where}.limit_on", table.get("limit_on", "baseline"), ("baseline", "peak"))
    return parse_rule(f"{'limit' if on == 'baseline' else 'peak'}:{table['limit']}").text


def _counted(where, table, key):
    value = table.get(key)
    if value is None:
        return None
    if isinstance(value, bool) or not isinstance(value, (int, float)) or not 0 <= value <= 1e9:
        raise InputError(f"{where}.{key}: {value!r} given, must be a number of events, 0 or more")
    return float(value)
