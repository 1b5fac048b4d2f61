"""Field shapes: areas against closed forms, points inside, overlaps, polygons that cannot be."""

from types import SimpleNamespace

import numpy as np
import pytest

from lensrate import InputError
from lensrate.surveys.sky import Circle, Patch, Rectangle, from_plane, overlap_share, parse_shape, to_plane

SQUARE_DEGREE = np.radians(1) ** 2


def place(l, b, shape):
    return SimpleNamespace(l_deg=l, b_deg=b, shape=shape)


def test_areas_are_solid_angles():
    assert Circle(10.0).area_deg2() == pytest.approx(2 * np.pi * (1 - np.cos(np.radians(10))) / SQUARE_DEGREE)
    # an octant of the sphere is one with three right angles; a polygon of a tenth of it by its great circles
    corners = [[0.0, 0.0], [20.0, 0.0], [10.0, 15.0]]
    triangle = parse_shape("f", {"polygon": corners}, 10.0, 5.0)
    lon, lat = np.radians(np.array(corners)).T
    v = np.array([np.cos(lat) * np.cos(lon), np.cos(lat) * np.sin(lon), np.sin(lat)]).T
    # Van Oosterom & Strackee 1983, IEEE Trans. Biomed. Eng. 30, 125
    top = abs(np.linalg.det(v))
    bottom = 1 + v[0] @ v[1] + v[1] @ v[2] + v[2] @ v[0]
    assert triangle.area_deg2() == pytest.approx(2 * np.arctan2(top, bottom) / SQUARE_DEGREE, rel=1e-10)
    backwards = parse_shape("f", {"polygon": corners[::-1]}, 10.0, 5.0)
    assert backwards.area_deg2() == pytest.approx(triangle.area_deg2(), rel=1e-12)


def test_a_rectangle_is_its_polygon_and_a_dent_takes_area_away():
    box = Rectangle(4.0, 2.0, 30.0)
    l, b = np.degrees(from_plane(*np.radians([100.0, 40.0]), *box.outline().T))
    polygon = parse_shape("f", {"polygon": np.column_stack([l, b]).tolist()}, 100.0, 40.0)
    assert polygon.area_deg2() == pytest.approx(box.area_deg2(), rel=1e-9)
    dented = parse_shape("f", {"polygon": [[0, 0], [1, 0], [0.5, 0.3], [1, 1], [0, 1]]}, 0.5, 0.5)
    assert dented.area_deg2() == pytest.approx(1 - 0.25, rel=1e-3)
    assert not dented.inside(*to_plane(*np.radians([0.5, 0.5, 0.9, 0.4]))[:2])


@pytest.mark.parametrize("shape", [Circle(2.0), Rectangle(3.0, 1.0, 20.0)], ids=["circle", "rectangle"])
def test_nodes_integrate_second_moments(shape):
    x, y, w = shape.nodes()
    rng = np.random.default_rng(1)
    reach = np.hypot(*shape.outline().T).max()
    px, py = rng.uniform(-reach, reach, (2, 400_000))
    keep = shape.inside(px, py)
    for f in (lambda a, b: a * a, lambda a, b: b * b, lambda a, b: a * b):
        assert np.sum(w * f(x, y)) == pytest.approx(f(px[keep], py[keep]).mean(), abs=4e-3 * reach**2)
    assert shape.inside(x, y).all() and w.sum() == pytest.approx(1)


def test_plane_and_back_across_the_origin_of_longitude():
    l, b = np.radians([359.9, 0.1, 0.0]), np.radians([-2.9, -3.1, 5.0])
    back = from_plane(0.0, np.radians(-3.0), *to_plane(0.0, np.radians(-3.0), l, b)[:2])
    np.testing.assert_allclose(back, (l % (2 * np.pi), b), atol=1e-12)


def test_overlap_of_two_circles_is_their_lens():
    share = overlap_share(place(1.0, -3.0, Circle(0.5)), place(1.5, -3.0, Circle(0.5)))
    d = 0.5 * np.cos(np.radians(3.0)) / 0.5 / 2
    assert share == pytest.approx((2 * np.arccos(d) - 2 * d * np.sqrt(1 - d * d)) / np.pi, abs=0.01)
    assert overlap_share(place(1.0, -3.0, Circle(0.5)), place(3.0, -3.0, Circle(0.5))) == 0.0
    # a field of which only the area is known counts as a circle
    share = overlap_share(place(1.0, -3.0, Circle(0.5)), place(1.0, -3.0, Patch(0.25 * Circle(0.5).area_deg2())))
    assert share == pytest.approx(0.25, abs=0.01)


@pytest.mark.parametrize(
    "table, words",
    [
        ({"polygon": [[0, 0], [1, 1], [1, 0], [0, 1]]}, "edges cross"),
        ({"polygon": [[0, 0], [1, 1]]}, "at least three"),
        ({"polygon": [[0, 0], [1, 0], [2, 0]]}, "polygon"),
        ({"polygon": [[0, 0], [1, 0], [0, 95]]}, "latitude"),
        ({"polygon": [[0, 0], [1, 0], [180, 1]]}, "30 degrees"),
        ({"polygon": [[0, 0], [1, 0], ["a", 1]]}, "at least three"),
        ({"radius_deg": -0.5}, "radius_deg: -0.5"),
        ({"radius_deg": float("nan")}, "radius_deg: nan"),
        ({"area_deg2": -1.0}, "area_deg2: -1"),
        ({"width_deg": 1.0}, "height_deg"),
        ({"radius_deg": 1.0, "area_deg2": 1.0}, "one shape"),
        ({}, "none of them"),
    ],
)
def test_shapes_that_cannot_be(table, words):
    with pytest.raises(InputError, match=words):
        parse_shape("field 'M01'", table, 0.5, 0.5)
