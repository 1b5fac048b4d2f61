"""Shapes of survey fields on the sky: area, what lies inside, points that stand for the whole field."""

import math
from dataclasses import dataclass

import numpy as np

from ..errors import InputError

__all__ = [
    "Circle",
    "Patch",
    "Polygon",
    "Rectangle",
    "even_points",
    "from_plane",
    "overlap_share",
    "parse_shape",
    "to_plane",
]

_SQUARE_DEGREE = (math.pi / 180) ** 2
_WIDEST = 60.0  # deg; the tangent plane serves no wider field


def to_plane(l0, b0, l, b):
    """Project directions [rad] onto the plane that touches the sky at (l0, b0); (x, y, front).

    x grows with l, y with b; great circles become straight lines. `front` says which are on the near half.
    """
    dl = l - l0
    c = np.sin(b0) * np.sin(b) + np.cos(b0) * np.cos(b) * np.cos(dl)
    front = c > 1e-6
    c = np.where(front, c, 1.0)
    x = np.cos(b) * np.sin(dl) / c
    y = (np.cos(b0) * np.sin(b) - np.sin(b0) * np.cos(b) * np.cos(dl)) / c
    return x, y, front


def from_plane(l0, b0, x, y):
    """Undo `to_plane`; l in [0, 2 pi)."""
    x, y = np.asarray(x, dtype=float), np.asarray(y, dtype=float)
    b = np.arcsin((np.sin(b0) + y * np.cos(b0)) / np.sqrt(1 + x * x + y * y))
    l = l0 + np.arctan2(x, np.cos(b0) - y * np.sin(b0))
    return l % (2 * np.pi), b


@dataclass(frozen=True)
class Circle:
    """All directions within a radius of the centre."""

    radius_deg: float

    def area_deg2(self):
        """Return the solid angle [deg2]."""
        return 2 * math.pi * (1 - math.cos(math.radians(self.radius_deg))) / _SQUARE_DEGREE

    def inside(self, x, y):
        """Whether points of the tangent plane are inside."""
        return np.hypot(x, y) <= math.tan(math.radians(self.radius_deg))

    def outline(self, n=72):
        """Corners of the outline in the tangent plane, (n, 2)."""
        a = np.linspace(0, 2 * np.pi, n, endpoint=False)
        return math.tan(math.radians(self.radius_deg)) * np.column_stack([np.cos(a), np.sin(a)])

    def nodes(self):
        """Return x, y and weights of the seven-point rule of degree 5 on a disc (Abramowitz & Stegun 25.4.61)."""
        r = math.tan(math.radians(self.radius_deg)) * math.sqrt(2 / 3)
        a = np.arange(6) * np.pi / 3
        x = np.concatenate([[0.0], r * np.cos(a)])
        y = np.concatenate([[0.0], r * np.sin(a)])
        return x, y, np.concatenate([[0.25], np.full(6, 0.125)])


@dataclass(frozen=True)
class Rectangle:
    """A rectangle around the centre, its width along l and its height along b, turned by an angle from +l toward +b."""

    width_deg: float
    height_deg: float
    angle_deg: float = 0.0

    def _half(self):
        return math.tan(math.radians(self.width_deg / 2)), math.tan(math.radians(self.height_deg / 2))

    def area_deg2(self):
        """Return the solid angle [deg2]."""
        a, b = self._half()
        return 4 * math.atan(a * b / math.sqrt(1 + a * a + b * b)) / _SQUARE_DEGREE

    def _turned(self, x, y, sign):
        t = sign * math.radians(self.angle_deg)
        return x * math.cos(t) - y * math.sin(t), x * math.sin(t) + y * math.cos(t)

    def inside(self, x, y):
        """Whether points of the tangent plane are inside."""
        a, b = self._half()
        x, y = self._turned(x, y, -1)
        return (np.abs(x) <= a) & (np.abs(y) <= b)

    def outline(self):
        """Corners in the tangent plane, (4, 2)."""
        a, b = self._half()
        x, y = self._turned(np.array([a, -a, -a, a]), np.array([b, b, -b, -b]), 1)
        return np.column_stack([x, y])

    def nodes(self):
        """Return x, y and weights of the three-by-three Gauss-Legendre rule."""
        a, b = self._half()
        s, w = np.polynomial.legendre.leggauss(3)
        x, y = (g.ravel() for g in np.meshgrid(a * s, b * s))
        x, y = self._turned(x, y, 1)
        return x, y, np.outer(w, w).ravel() / 4


@dataclass(frozen=True)
class Polygon:
    """A polygon of great-circle edges, corners in the tangent plane of its centre."""

    corners: tuple  # of (x, y)

    def area_deg2(self):
        """Return the solid angle [deg2], by the angles at its corners (Girard)."""
        v = np.array([(x, y, 1.0) for x, y in self.corners])
        v /= np.linalg.norm(v, axis=1)[:, None]
        if _signed(np.array(self.corners)) < 0:
            v = v[::-1]
        n = np.cross(v, np.roll(v, -1, axis=0))
        n /= np.linalg.norm(n, axis=1)[:, None]
        before = np.roll(n, 1, axis=0)
        # angle between neighbouring edges, past a half turn where the corner points inward
        turn = np.arctan2(np.sum(v * np.cross(before, n), axis=1), np.sum(before * n, axis=1))
        return (2 * math.pi - turn.sum()) / _SQUARE_DEGREE

    def inside(self, x, y):
        """Whether points of the tangent plane are inside."""
        x, y = np.asarray(x, dtype=float), np.asarray(y, dtype=float)
        c = np.array(self.corners)
        odd = np.zeros(np.broadcast(x, y).shape, dtype=bool)
        for (xa, ya), (xb, yb) in zip(c, np.roll(c, -1, axis=0)):
            if ya == yb:
                continue
            crosses = (ya > y) != (yb > y)
            odd ^= crosses & (x < (xb - xa) * (y - ya) / (yb - ya) + xa)
        return odd

    def outline(self):
        """Corners in the tangent plane, (n, 2)."""
        return np.array(self.corners)

    def nodes(self):
        """Return x, y and weights of an even grid of some twenty points inside."""
        return even_points(self)


@dataclass(frozen=True)
class Patch:
    """A field of which only the area is known: its centre stands for all of it, a circle for where it overlaps."""

    area: float  # deg2

    def area_deg2(self):
        """Return the solid angle [deg2]."""
        return self.area

    def _circle(self):
        return Circle(math.degrees(math.acos(1 - self.area * _SQUARE_DEGREE / (2 * math.pi))))

    def inside(self, x, y):
        """Whether points of the tangent plane are inside the circle of the same area."""
        return self._circle().inside(x, y)

    def outline(self):
        """The circle of the same area."""
        return self._circle().outline()

    def nodes(self):
        """Return the centre."""
        return np.zeros(1), np.zeros(1), np.ones(1)


def _signed(c):
    n = np.roll(c, -1, axis=0)
    return 0.5 * np.sum(c[:, 0] * n[:, 1] - n[:, 0] * c[:, 1])


def even_points(shape, wanted=20):
    """Points of a square grid inside a shape, about `wanted` of them, with equal weights."""
    c = shape.outline()
    low, high = c.min(axis=0), c.max(axis=0)
    n = wanted
    for _ in range(12):
        step = math.sqrt(float(np.prod(high - low)) / n)
        x, y = (
            (np.arange(math.ceil((b - a) / step)) + 0.5) * (b - a) / math.ceil((b - a) / step) + a
            for a, b in zip(low, high)
        )
        x, y = (g.ravel() for g in np.meshgrid(x, y))
        keep = shape.inside(x, y)
        if keep.sum() >= 0.6 * wanted:
            break
        n *= 2
    x, y = x[keep], y[keep]
    return x, y, np.full(x.size, 1.0 / max(x.size, 1))


def parse_shape(where, table, l_deg, b_deg, to_galactic=None):
    """Read a field's shape from its table.

    Parameters
    ----------
    where : str
        Named in complaints.
    table : dict
        Holds one of radius_deg; width_deg and height_deg (and angle_deg); polygon (a list of [l, b], or of [ra, dec]
        where the field is given so); area_deg2.
    l_deg, b_deg : float
        Centre.
    to_galactic : callable, optional
        Turns the polygon's corners (lon, lat arrays in degrees) into l, b degrees.

    Returns
    -------
    Circle, Rectangle, Polygon or Patch

    Raises
    ------
    InputError
        None or several given, a size that is not above zero, too large, or a polygon that crosses itself.
    """
    for key in ("height_deg", "angle_deg"):
        if key in table and "width_deg" not in table:
            raise InputError(f"{where}: {key} is one of a rectangle and needs width_deg beside it")
    kinds = {"radius_deg": "circle", "width_deg": "rectangle", "polygon": "polygon", "area_deg2": "patch"}
    given = [k for k in kinds if k in table]
    if len(given) != 1:
        said = ", ".join(given) if given else "none of them"
        raise InputError(
            f"{where}: {said} given; one shape is needed: radius_deg, width_deg and height_deg, polygon, or area_deg2"
        )
    if given[0] == "polygon":
        return _polygon(where, table["polygon"], l_deg, b_deg, to_galactic)

    def size(key, largest):
        value = table.get(key)
        if value is None:
            raise InputError(f"{where}: width_deg needs {key} beside it")
        if isinstance(value, bool) or not isinstance(value, (int, float)) or not 0 < value <= largest:
            unit = "square degrees" if key == "area_deg2" else "degrees"
            raise InputError(
                f"{where}.{key}: {value!r} given, must be a number of {unit} above 0 and at most {largest:g}"
            )
        return float(value)

    if given[0] == "radius_deg":
        return Circle(size("radius_deg", _WIDEST / 2))
    if given[0] == "area_deg2":
        return Patch(size("area_deg2", 1000.0))
    angle = table.get("angle_deg", 0.0)
    if isinstance(angle, bool) or not isinstance(angle, (int, float)) or not abs(angle) <= 360:
        raise InputError(f"{where}.angle_deg: {angle!r} given, must be between -360 and 360")
    return Rectangle(size("width_deg", _WIDEST), size("height_deg", _WIDEST), float(angle))


def _polygon(where, rows, l_deg, b_deg, to_galactic):
    try:
        corners = np.array(rows, dtype=float)
    except (TypeError, ValueError):
        corners = np.zeros(0)
    if corners.ndim != 2 or corners.shape[1] != 2 or len(corners) < 3 or not np.all(np.isfinite(corners)):
        raise InputError(f"{where}.polygon: a list of at least three [longitude, latitude] pairs in degrees is needed")
    if len(corners) > 2000:
        raise InputError(f"{where}.polygon: {len(corners)} corners given, at most 2000 are read")
    if np.allclose(corners[0], corners[-1]):
        corners = corners[:-1]
    if len(corners) < 3:
        raise InputError(f"{where}.polygon: the first corner repeated at the end leaves fewer than three")
    if np.any(np.abs(corners[:, 1]) > 90):
        raise InputError(f"{where}.polygon: a latitude beyond 90 degrees")
    lon, lat = corners.T if to_galactic is None else to_galactic(*corners.T)
    x, y, front = to_plane(*np.radians([l_deg, b_deg]), np.radians(lon), np.radians(lat))
    if not front.all() or np.hypot(x, y).max() > math.tan(math.radians(_WIDEST / 2)):
        raise InputError(f"{where}.polygon: a corner is more than {_WIDEST / 2:g} degrees from the field's centre")
    plane = np.column_stack([x, y])
    if _crosses_itself(plane):
        raise InputError(f"{where}.polygon: its edges cross; list the corners in order around the field")
    shape = Polygon(tuple(map(tuple, plane.tolist())))
    if not shape.area_deg2() > 1e-8:
        raise InputError(f"{where}.polygon: its area is zero")
    return shape


def _crosses_itself(c):
    n = len(c)
    nxt = np.roll(c, -1, axis=0)

    def side(p, q, r):
        return (q[0] - p[0]) * (r[..., 1] - p[1]) - (q[1] - p[1]) * (r[..., 0] - p[0])

    for i in range(n):
        others = [j for j in range(i + 1, n) if j != i and (j + 1) % n != i and (i + 1) % n != j]
        if not others:
            continue
        a, b, p, q = c[i], nxt[i], c[others], nxt[others]
        first = side(a, b, p) * side(a, b, q)
        second = np.array([side(pp, qq, np.array([a]))[0] * side(pp, qq, np.array([b]))[0] for pp, qq in zip(p, q)])
        if np.any((first <= 0) & (second <= 0)):
            return True
    return False


def overlap_share(one, other, n=4000):
    """Return the share of one field's area that lies in another, from an even grid of points.

    Parameters
    ----------
    one, other : objects with l_deg, b_deg and shape
        Fields.
    n : int
        Points; the answer is good to about 1/sqrt(n) of the share's edge.

    Returns
    -------
    float
    """
    x, y, w = even_points(one.shape, n)
    l, b = from_plane(*np.radians([one.l_deg, one.b_deg]), x, y)
    x, y, front = to_plane(*np.radians([other.l_deg, other.b_deg]), l, b)
    return float(np.sum(w * (front & other.shape.inside(x, y))))
