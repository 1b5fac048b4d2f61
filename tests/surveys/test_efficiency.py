"""Efficiency curves and seasons: what they say, what they must state, what is refused."""

import numpy as np
import pytest
from astropy.table import Table

from lensrate import InputError
from lensrate.surveys.calendar import Calendar, Season, mjd_of
from lensrate.surveys.efficiency import Efficiency

SAID = {"per": "source", "includes": ["gaps"]}


def written(tmp_path, columns, meta=SAID, name="curve.ecsv"):
    table = Table(columns)
    table.meta.update(meta)
    table.write(tmp_path / name, format="ascii.ecsv", overwrite=True)
    return tmp_path / name


def test_points_are_straight_in_ln_t_E_and_nothing_is_said_outside(tmp_path):
    curve = Efficiency.read(written(tmp_path, {"t_E": [1.0, 100.0], "efficiency": [0.0, 0.4]}))
    np.testing.assert_allclose(curve.of([1.0, 10.0, 100.0, 100.1, 0.5]), [0.0, 0.2, 0.4, 0.0, 0.0])
    assert list(curve.inside([0.9, 50.0, 1e3])) == [False, True, False]
    assert curve.includes == ("gaps",) and curve.per == "source"


def test_bins_in_any_order_are_constant(tmp_path):
    path = written(tmp_path, {"t_E_low": [10.0, 1.0], "t_E_high": [50.0, 10.0], "efficiency": [0.5, 0.1]})
    np.testing.assert_allclose(Efficiency.read(path).of([1.0, 9.99, 10.0, 50.0, 51.0]), [0.1, 0.1, 0.5, 0.5, 0.0])


def test_dependence_on_u_0_is_averaged_up_to_the_limit(tmp_path):
    rows = [(t, x, 0.5 * (1 - x)) for t in (1.0, 300.0) for x in (0.0, 0.25, 0.5, 0.75, 1.0)]
    t, x, e = np.array(rows).T
    curve = Efficiency.read(written(tmp_path, {"t_E": t, "u_0": x, "efficiency": e}))
    assert curve.of(np.array([20.0]))[0] == pytest.approx(0.25)
    np.testing.assert_allclose(curve.of(np.full(3, 20.0), np.array([0.0, 0.1, 1.0])), [0.5, 0.45, 0.0])


def test_dependence_on_magnitude_is_averaged_over_the_sources(tmp_path):
    t, m = np.meshgrid([1.0, 300.0], [16.0, 20.0])
    e = np.where(m < 18, 0.8, 0.2)
    path = written(tmp_path, {"t_E": t.ravel(), "I_S": m.ravel(), "efficiency": e.ravel()})
    curve = Efficiency.read(path).averaged(lambda mag: np.where(np.asarray(mag) >= 18.0, 0.25, 0.0))
    assert curve.second == "" and curve.of(np.array([20.0]))[0] == pytest.approx(0.25 * 0.8 + 0.75 * 0.2)


@pytest.mark.parametrize(
    "columns, meta, words",
    [
        ({"t_E": [1.0, 9.0], "efficiency": [0.1, 1.2]}, SAID, "row 2, column efficiency: 1.2"),
        ({"t_E": [0.0, 9.0], "efficiency": [0.1, 0.2]}, SAID, "row 1, column t_E: 0"),
        ({"t_E": [1.0, 9.0], "efficiency": [0.1, np.nan]}, SAID, "row 2, column efficiency"),
        ({"t_E": [1.0, 1.0], "efficiency": [0.1, 0.2]}, SAID, "every pair"),
        ({"t_E": [1.0, 9.0], "eficiency": [0.1, 0.2]}, SAID, "efficiency"),
        ({"t_E": [1.0, 9.0], "efficiency": [0.1, 0.2]}, {}, "does not say per and includes"),
        ({"t_E": [1.0, 9.0], "efficiency": [0.1, 0.2]}, {"per": "star", "includes": []}, "per"),
        ({"t_E": [1.0, 9.0], "efficiency": [0.1, 0.2]}, {"per": "source", "includes": ["gap"]}, "did you mean 'gaps'"),
        ({"t_E_low": [1.0, 9.0], "t_E_high": [8.0, 20.0], "efficiency": [0.1, 0.2]}, SAID, "bins must join"),
    ],
)
def test_curves_that_cannot_be(tmp_path, columns, meta, words):
    with pytest.raises(InputError, match=words):
        Efficiency.read(written(tmp_path, columns, meta))


def test_a_statement_may_be_made_where_the_file_is_named_but_not_contradict_it(tmp_path):
    path = written(tmp_path, {"t_E": [1.0, 9.0], "efficiency": [0.1, 0.2]}, {"per": "source"})
    assert Efficiency.read(path, includes=["blending"]).includes == ("blending",)
    with pytest.raises(InputError, match="in its header"):
        Efficiency.read(path, includes=["blending"], per="catalogued_object")


def season(start="2031-02-01", end="2031-10-31", gaps=()):
    return Season.from_dict({"start": start, "end": end, "gaps": [list(g) for g in gaps]})


def test_days_count_both_ends():
    assert mjd_of("2000-01-01") == 51544.0
    one = season("2031-03-01", "2031-03-10", [("2031-03-04", "2031-03-05")])
    assert one.length == 10 and one.gap_days == 2
    np.testing.assert_array_equal(one.open() - one.start, [[0, 3], [5, 10]])


def test_gaps_and_winters_are_taken_off_once():
    two = Calendar((season(gaps=[("2031-06-01", "2031-06-10")]), season("2032-02-01", "2032-10-31")))
    lengths = np.array([s.length for s in two.seasons])
    assert two.exposure().sum() == lengths.sum() - 10
    assert two.exposure({"gaps"}).sum() == lengths.sum()
    assert two.exposure({"seasons", "gaps"}).sum() == two.span
    assert two.exposure({"seasons"}).sum() == two.span - 10


def test_times_of_peak_are_even_over_the_exposure():
    two = Calendar((season(gaps=[("2031-06-01", "2031-06-10")]), season("2032-02-01", "2032-10-31")))
    t = two.draw(np.linspace(0, 1, 20_001)[:-1])
    inside = ((t[:, None] >= two.open()[:, 0]) & (t[:, None] <= two.open()[:, 1])).any(axis=1)
    assert inside.all()
    share = np.array([np.mean((t >= s.start) & (t <= s.end)) for s in two.seasons])
    np.testing.assert_allclose(share, two.exposure() / two.exposure().sum(), atol=1e-3)


@pytest.mark.parametrize(
    "table, words",
    [
        ({"start": "2031-10-01", "end": "2031-02-01"}, "before it starts"),
        ({"start": "2031-13-01", "end": "2031-02-01"}, "not a date"),
        ({"start": "0031-01-01", "end": "2031-02-01"}, "between"),
        ({"start": "2031-01-01"}, "needs end"),
        ({"start": "2031-01-01", "end": "2031-03-01", "gaps": [["2031-02-01", "2031-04-01"]]}, "not inside"),
        ({"start": "2031-01-01", "end": "2031-03-01", "gap": []}, "did you mean 'gaps'"),
        (
            {"start": "2031-01-01", "end": "2031-03-01",
             "gaps": [["2031-02-01", "2031-02-05"], ["2031-02-03", "2031-02-09"]]},
            "overlap",
        ),
    ],
)  # fmt: skip
def test_seasons_that_cannot_be(table, words):
    with pytest.raises(InputError, match=words):
        Season.from_dict(table)


def test_seasons_in_the_wrong_order():
    with pytest.raises(InputError, match="in order"):
        Calendar((season("2032-02-01", "2032-10-31"), season()))


def test_the_statements_of_a_plain_csv_file(tmp_path):
    path = tmp_path / "curve.csv"
    rows = "t_E,efficiency\n1,0.1\n10,0.4\n"
    path.write_text("# per: source\n# includes: gaps, blending\n# u_0_limit: 0.8\n# source_limit: I=20\n" + rows)
    read = Efficiency.read(path)
    assert read.per == "source" and set(read.includes) == {"gaps", "blending"}
    assert read.u_0_limit == 0.8 and read.source_limit == "limit:I=20"
    path.write_text("# per: catalogued_object\n# includes: none\n" + rows)
    assert Efficiency.read(path).includes == ()
    path.write_text("# per = source\n" + rows)
    with pytest.raises(InputError, match="# per: source"):
        Efficiency.read(path)
