"""Sky maps: pixels against sightlines, the sky's coordinates, work that is broken off, pointings."""

import pickle
import threading
from concurrent.futures import ThreadPoolExecutor

import astropy.units as u
import numpy as np
import pytest
from astropy.io import fits
from astropy.table import QTable
from astropy.wcs import WCS
from hypothesis import given, settings
from hypothesis import strategies as st

import lensrate
from lensrate.errors import ConvergenceError, InputError
from lensrate.lensing import rates
from lensrate.scenario import Scenario
from lensrate.surveys.efficiency import Efficiency
from lensrate.surveys.mapfiles import PartFile
from lensrate.surveys.pixels import Pixel, PixelWork
from lensrate.surveys.pointings import rank
from lensrate.surveys.skygrid import MOST_PIXELS, SkyGrid
from lensrate.surveys.skyrecord import known_names

QUICK = Scenario.read("default").replace(kicks="none", bh_kicks="none", sources="clump")
CORNER = {"l": (0, 2) * u.deg, "b": (-4, -3) * u.deg, "step": 1 * u.deg}


@pytest.fixture(scope="module")
def small():
    """Kicked remnants over six pixels."""
    return lensrate.skymap(**CORNER)


def test_a_pixel_is_the_sightline_there(small):
    i = 4
    there = lensrate.sightline(small.l[i], small.b[i])
    precise = lensrate.skymap(small.l[i : i + 1], small.b[i : i + 1], precise=True)
    for c, name in enumerate(small.classes):
        lens = there.lenses[name]
        for result, k, most in ((small, i, 1e-3), (precise, 0, 1e-12)):
            assert result.optical_depth[c, k] == pytest.approx(lens.optical_depth, rel=most)
            assert result.rate[c, k] == pytest.approx(lens.rate, rel=most)
            assert result.mean_t_E(name)[k] == pytest.approx(lens.mean_t_E, rel=2 * most)
            assert result.share(name)[k] == pytest.approx(lens.share_of_events, rel=2 * most)
    errors = [there.lenses[n].rate_standard_error for n in ("neutron_star", "black_hole", "all")]
    np.testing.assert_allclose(small.rate_standard_error[3:, i], errors, rtol=0.02)
    assert np.isnan(small.rate_standard_error[:3]).all()
    assert small.source_density[i] == there.sources["source_density_per_arcmin2"]
    assert small.mean_source_distance[i] == there.sources["mean_distance_kpc"]
    assert small.extinction[i] == there.sources["extinction"]["I"] and small.extinction_band == "I"


def test_derived_numbers(small):
    known = small.quantities()
    per_deg2 = known["rate_black_hole"].values * known["source_density"].values * 3600
    np.testing.assert_allclose(known["rate_per_deg2_black_hole"].values, per_deg2, rtol=1e-14)
    tau_over_rate = 2 / np.pi * small.optical_depth[-1] / small.rate[-1] * 365.25
    np.testing.assert_allclose(known["mean_t_E_all"].values, tau_over_rate, rtol=1e-14)
    np.testing.assert_allclose(sum(small.share(c) for c in small.classes[:-1]), 1.0, rtol=1e-14)
    assert set(known) <= set(known_names(small.classes, small.scenario))
    assert known["rate_per_deg2_all"].unit == 1 / (u.yr * u.deg**2)


def test_threads_and_executors_change_nothing(small):
    directions = small.l[:4], small.b[:4]
    with ThreadPoolExecutor(2) as pool:
        others = [lensrate.skymap(*directions, jobs=2), lensrate.skymap(*directions, executor=pool)]
    for other in others:
        np.testing.assert_array_equal(other.rate, small.rate[:, :4])
        np.testing.assert_array_equal(other.optical_depth, small.optical_depth[:, :4])


def test_work_can_be_sent_to_other_processes(small):
    work = PixelWork(Scenario.read("default"))
    work(next(iter([(1.0, -3.0, {})])))  # what is computed along the way stays here
    sent = pickle.loads(pickle.dumps(work))
    assert not {"model", "masses"} & set(vars(sent))
    assert sent((0.0, -4.0, {})).rate == tuple(small.rate[:-1, 0])


def test_kick_bins_that_no_class_uses_are_left_out():
    scenario = Scenario.read("default").replace(kicks="fixed:150", bh_kicks="fixed:150")
    live, model = PixelWork(scenario)._live
    # two bins on either side of the speed, in each of eight components
    assert len(model.kicked.host) == live.size == 16
    found = lensrate.skymap([1.0] * u.deg, [-3.9] * u.deg, scenario)
    there = lensrate.sightline(1 * u.deg, -3.9 * u.deg, scenario)
    for c, name in enumerate(found.classes):
        assert found.rate[c, 0] == pytest.approx(there.lenses[name].rate, rel=1e-3)


def test_images_have_the_sky_coordinates_of_their_pixels(small, tmp_path):
    path = small.write(tmp_path / "map.fits")
    with fits.open(path) as hdus:
        assert hdus[0].header["SCENHASH"] == small.scenario.hash and '"references"' in hdus[0].header["MADE"]
        assert [h.name for h in hdus[1:]] == [n.upper() for n in small.quantities()]
        for name, q in small.quantities().items():
            hdu = hdus[name.upper()]
            wcs = WCS(hdu.header)
            assert u.Unit(hdu.header["BUNIT"]) == q.unit
            for l, b, value in zip(small.l, small.b, q.values):
                i, j = (round(float(x)) for x in wcs.world_to_pixel_values(l, b))
                assert hdu.data[j, i] == value or np.isnan(value)
        assert hdus["RATE_ALL"].data[0, 0] == small.rate[-1, 2]  # the largest l is on the left


@settings(max_examples=60, deadline=None)
@given(
    st.floats(-359, 359), st.floats(-89, 89), st.floats(0.01, 20), st.integers(1, 9), st.integers(1, 9)
)  # fmt: skip
def test_wcs_reads_back(l, b, step, n_l, n_b):
    # at the very pole rounding puts a pixel beyond it, of which nothing is said
    b = min(b, 89.999 - (n_b - 1) * step)
    if b < -89.999 or (n_l - 1) * step >= 360:
        return
    # half a step past the last pixel, so that rounding does not decide
    ends = l + (n_l - 0.5) * step, min(b + (n_b - 0.5) * step, 90)
    grid = SkyGrid(l, min(ends[0], l + 360), b, ends[1], step)
    header = fits.Header()
    for key, card in grid.header().items():
        header[key] = card
    n_rows, n_columns = grid.shape
    header["NAXIS"], header["NAXIS1"], header["NAXIS2"] = 2, n_columns, n_rows
    wcs = WCS(header)
    l_pixels, b_pixels = grid.centres()
    numbers = grid.image(np.arange(grid.size))
    j, i = np.unravel_index(np.argsort(numbers.ravel()), numbers.shape)
    found_l, found_b = wcs.pixel_to_world_values(i, j)
    away = np.cos(np.radians(b_pixels))
    np.testing.assert_allclose(found_b, b_pixels, atol=1e-7)
    np.testing.assert_allclose(away * ((found_l - l_pixels + 180) % 360 - 180), 0, atol=1e-7)
    back = wcs.pixel_to_world(int(i[0]), int(j[0]))
    assert back.frame.name == "galactic"


def test_a_grid_through_zero_is_one_piece():
    grid = SkyGrid(355, 5, -1, 1, 2.5)
    assert grid.shape == (1, 5)
    np.testing.assert_array_equal(grid.centres()[0], [355, 357.5, 0, 2.5, 5])
    np.testing.assert_array_equal(grid.image(np.arange(5))[0], [4, 3, 2, 1, 0])
    np.testing.assert_array_equal(SkyGrid(-0.3, 0.3, 0, 0, 0.1).centres()[0], [-0.3, -0.2, -0.1, 0, 0.1, 0.2, 0.3])
    assert SkyGrid(0, 360, -90, 90, 30).shape == (7, 12)  # once around, no pixel twice
    whole = SkyGrid(-180, 180, -90, 90, 0.5)
    assert whole.areas().sum() == pytest.approx(4 * np.pi * np.degrees(1) ** 2, rel=1e-12)


@pytest.mark.parametrize(
    "grid, words",
    [
        ((5, -5, -1, 1, 1), "before the start"),
        ((-5, 5, 1, -1, 1), "exchange them"),
        ((-5, 5, -1, 1, 0), "above 0"),
        ((-5, 5, -1, 1, -0.5), "above 0"),
        ((-5, 5, -1, 1, float("nan")), "above 0"),
        ((-5, 5, -91, 1, 1), "at least -90"),
        ((-5, 5, -1, 91, 1), "at most 90"),
        ((-5, float("inf"), -1, 1, 1), "finite"),
        ((-360, 359, -1, 1, 1), "once around"),
        ((-180, 180, -90, 90, 0.01), "larger|smaller|take a step"),
    ],
)
def test_grids_that_are_none(grid, words):
    with pytest.raises(InputError, match=words):
        SkyGrid(*grid)


def test_the_way_out_of_too_many_pixels_works():
    with pytest.raises(InputError, match=f"at most {MOST_PIXELS}") as told:
        SkyGrid(-10, 10, -10, 10, 1e-3)
    step = float(str(told.value).split("a step of ")[1].split()[0])
    assert 0.9 * MOST_PIXELS < SkyGrid(-10, 10, -10, 10, step).size <= MOST_PIXELS


def test_arguments_that_do_not_go_together():
    one = [1.0] * u.deg
    for wrong, words in (
        ({"l": 1.0, "b": -3 * u.deg}, "unit"),
        ({"l": [1, 2] * u.deg, "b": one}, "as many"),
        ({"l": [1, 2, 3] * u.deg, "b": [1, 2] * u.deg, "step": 1 * u.deg}, "two"),
        ({"l": one, "b": one, "names": ["a", "b"]}, "equal numbers"),
        ({"l": one, "b": one, "extinction": [{}, {}]}, "equal numbers"),
        ({"l": one, "b": one, "efficiency": Efficiency.complete(0.5)}, "--u-0-limit 0.5"),
        ({"l": one, "b": [100.0] * u.deg}, "at most 90"),
    ):
        with pytest.raises(InputError, match=words):
            lensrate.skymap(scenario=QUICK, **wrong)


def test_dark_pixels_do_not_end_the_map(tmp_path, monkeypatch):
    prepare = rates.prepare

    def dark_on_the_right(model, line, *rest):
        # behind enough dust of a short luminosity function there is nothing
        if line.axes[0, 1] > np.sin(np.radians(1.5)):
            raise ConvergenceError("sources: no star passes")
        return prepare(model, line, *rest)

    monkeypatch.setattr(rates, "prepare", dark_on_the_right)
    result = lensrate.skymap([1, 2] * u.deg, [-3, -3] * u.deg, QUICK, names=["A", "B"])
    assert result.source_density[0] > 0 and result.source_density[1] == 0
    assert np.isnan(result.rate[:, 1]).all() and result.per_deg2()[1] == 0
    assert any("no star passes" in w and "field B" in w for w in result.warnings)
    assert np.isnan(result.to_table()["rate_all"][1]) and '"rate_all": null' in _written(result, tmp_path / "m.json")
    assert list(rank(result)["name"]) == ["A"]


def _written(result, path):
    return result.write(path).read_text()


def test_warnings_are_gathered():
    result = lensrate.skymap((0, 4) * u.deg, (-1, 1) * u.deg, QUICK.replace(sources="limit:I=20"), step=1 * u.deg)
    about = [w for w in result.warnings if "smooth dust disc" in w]
    assert len(about) == 1 and "14 more pixels" in about[0]


def test_tables_say_how_they_were_made(small, tmp_path):
    for ending in ("ecsv", "vot"):
        table = QTable.read(small.write(tmp_path / f"map.{ending}"))
        np.testing.assert_array_equal(table["rate_neutron_star"].value, small.rate[3])
        assert table["source_density"].unit == 1 / u.arcmin**2
    assert QTable.read(tmp_path / "map.ecsv").meta["scenario_hash"] == small.scenario.hash
    frame = small.to_pandas()
    assert list(frame.columns[:2]) == ["l", "b"] and len(frame) == 6
    with pytest.raises(InputError, match="exists"):
        small.write(tmp_path / "map.ecsv")


def test_fields_are_a_table_and_no_image(tmp_path):
    result = lensrate.skymap([1, 2] * u.deg, [-3, -3] * u.deg, QUICK, names=["A", "B"])
    with pytest.raises(InputError, match="no image"):
        result.to_fits()
    table = QTable.read(result.write(tmp_path / "fields.fits"))
    assert list(table["name"]) == ["A", "B"] and table["rate_all"].unit == 1 / u.yr


def test_efficiency():
    where = [1.0] * u.deg, [-3.9] * u.deg
    whole = lensrate.skymap(*where, efficiency=Efficiency.complete())
    np.testing.assert_allclose(whole.detected, whole.rate, rtol=1e-9)
    long = Efficiency(np.array([50.0, 1e5]), np.array([0.5]), binned=True, name="long")
    result = lensrate.skymap(*where, efficiency=long)
    there = lensrate.sightline(1 * u.deg, -3.9 * u.deg, t_E_range=(50, 1e5) * u.day)
    for c, name in enumerate(result.classes):
        assert result.detected[c, 0] == pytest.approx(0.5 * there.lenses[name].rate, rel=5e-3)
    np.testing.assert_allclose(result.per_deg2("star", True), result.detected[0] * result.source_density * 3600)
    assert "efficiency 'long'" in result.header()


def test_no_rate_per_area_where_sources_are_not_counted():
    result = lensrate.skymap([1.0] * u.deg, [-3.9] * u.deg, QUICK.replace(sources="distance:8"))
    assert "rate_per_deg2_all" not in result.quantities() and "source_density" not in result.quantities()
    with pytest.raises(InputError, match="does not count stars"):
        rank(result)


# ---- work that is broken off


def test_finished_pixels_are_taken_up_again(tmp_path):
    part, asked = tmp_path / "map.part", {"l": (0, 4) * u.deg, "b": (-4, -3) * u.deg, "step": 1 * u.deg}
    whole = lensrate.skymap(scenario=QUICK, **asked)

    class Enough(Exception):
        pass

    seen = []

    def stop_after_four(done, found):
        seen.append((done, found))
        if len(seen) == 4:
            raise Enough

    with pytest.raises(Enough):
        lensrate.skymap(scenario=QUICK, checkpoint=part, progress=stop_after_four, **asked)
    with open(part, "a") as handle:
        handle.write("[9, [[1.0, 2.")  # the line that was being written
    seen = [(0, 0)] * 10
    result = lensrate.skymap(scenario=QUICK, checkpoint=part, progress=stop_after_four, **asked)
    assert seen[10] == (0.5, 0.4) and seen[-1] == (1.0, 0.4)
    for name, q in whole.quantities().items():
        np.testing.assert_array_equal(result.quantities()[name].values, q.values)
    again = lensrate.skymap(scenario=QUICK, checkpoint=part, progress=lambda *_: 1 / 0, **asked)
    np.testing.assert_array_equal(again.rate, whole.rate)
    # another map is not mixed in
    with pytest.raises(InputError, match="another map.*--overwrite"):
        lensrate.skymap(scenario=QUICK.replace(u_0_limit=0.5), checkpoint=part, **asked)
    other = lensrate.skymap(scenario=QUICK.replace(u_0_limit=0.5), checkpoint=part, restart=True, **asked)
    np.testing.assert_allclose(other.rate, 0.5 * whole.rate, rtol=1e-12)


@pytest.mark.parametrize("text", ["", "no map at all\n", '{"mark": 1}\n', "\x00\x01\n"])
def test_foreign_part_files(tmp_path, text):
    path = tmp_path / "p"
    path.write_text(text)
    if text:
        with pytest.raises(InputError, match="another map"):
            PartFile(path, "key")
        assert path.read_text() == text
    else:
        PartFile(path, "key").close()
        assert "key" in path.read_text()


@given(st.lists(st.floats(), min_size=2, max_size=2), st.floats(), st.text(max_size=8))
@settings(max_examples=60, deadline=None)
def test_pixels_are_kept_bit_for_bit(tmp_path_factory, rates, number, text):
    path = tmp_path_factory.mktemp("part") / "p"
    pixel = Pixel(tuple(rates), tuple(rates), tuple(rates), (), number, number, number, (text,))
    part = PartFile(path, "key")
    part.add(3, pixel)
    part.close()
    (found,) = PartFile(path, "key").found.items()
    assert found[0] == 3 and repr(found[1]) == repr(pixel)


def test_a_rate_that_is_not_finite_is_an_error(monkeypatch):
    monkeypatch.setattr(PixelWork, "_moments", lambda *_: np.full((3, 8), np.nan))
    with pytest.raises(ConvergenceError, match="l = 1, b = -3"):
        lensrate.skymap([1.0] * u.deg, [-3.0] * u.deg, QUICK)


def test_threads_are_left_when_a_pixel_fails(monkeypatch):
    before = threading.active_count()

    def fail(self, direction):
        raise ConvergenceError("no")

    monkeypatch.setattr(PixelWork, "__call__", fail)
    with pytest.raises(ConvergenceError):
        lensrate.skymap((0, 9) * u.deg, (-4, -3) * u.deg, QUICK, step=1 * u.deg, jobs=2)
    assert threading.active_count() == before


# ---- pointings


@pytest.fixture(scope="module")
def wide():
    return lensrate.skymap((-3, 3) * u.deg, (-6, -2) * u.deg, QUICK, step=0.5 * u.deg)


def test_ranking_is_area_times_rate_times_density(wide):
    table = rank(wide, "black_hole", area=1e-3 * u.deg**2, top=1)
    best = int(np.argmax(wide.per_deg2("black_hole")))
    assert (table["l"][0], table["b"][0]) == (wide.l[best], wide.b[best])
    assert table["events_per_field_yr"][0].value == pytest.approx(1e-3 * wide.per_deg2("black_hole")[best], rel=1e-9)
    assert table["rate"][0].value == pytest.approx(wide.rate[4, best], rel=1e-9)
    assert "field area" in table.meta["ranked"]["formula"]


def test_time_is_counted(wide):
    quick, slow = (rank(wide, visit=t * u.s, cadence=0.5 * u.day, top=3) for t in (90, 180))
    hours = 90 / 3600 * 365.25 / 0.5
    np.testing.assert_allclose(quick["events_per_hour"].value, quick["events_per_field_yr"].value / hours, rtol=1e-12)
    np.testing.assert_allclose(slow["events_per_hour"].value, 0.5 * quick["events_per_hour"].value, rtol=1e-12)


def test_fields_do_not_overlap_and_average_what_they_cover(wide):
    table = rank(wide, "all", area=2.25 * u.deg**2, top=50)
    l, b = table["l"].value, table["b"].value
    for i in range(len(table)):
        others = np.arange(len(table)) != i
        dl, db = np.abs(l - l[i])[others] * np.cos(np.radians(b[i])), np.abs(b - b[i])[others]
        assert np.all((dl > 1.5 * 0.97) | (db > 1.5 * 0.97))
    # three pixels on a side are one field: the mean over them by hand, cos b nearly one over a degree
    i = 0
    inside = (np.abs(wide.l.value - l[i]) < 0.8) & (np.abs(wide.b.value - b[i]) < 0.8)
    solid = wide.grid.areas()[inside]
    by_hand = 2.25 * np.average(wide.per_deg2()[inside], weights=solid)
    assert table["events_per_field_yr"][i].value == pytest.approx(by_hand, rel=2e-3)
    # a field reaches nowhere beyond the map
    assert np.all(np.abs(b + 4) <= 2.25 - 0.75 + 1e-9)
    merit = table["events_per_field_yr"].value
    assert np.all(np.diff(merit) <= 0)


def test_a_constant_map_ranks_its_constant(wide):
    # whatever the field covers, the mean of a constant is the constant
    from dataclasses import replace

    flat = replace(wide, rate=np.ones_like(wide.rate), source_density=np.full(wide.size, 2.0))
    for area in (0.01, 1.0, 1.7, 9.0):
        table = rank(flat, "all", area=area * u.deg**2, top=3)
        np.testing.assert_allclose(table["events_per_field_yr"].value, area * 7200, rtol=1e-12)
    whole_sky = SkyGrid(0, 359, -80, 80, 20)
    n = whole_sky.size
    ones = np.ones((6, n))
    around = replace(
        flat, grid=whole_sky, l=whole_sky.centres()[0] * u.deg, b=whole_sky.centres()[1] * u.deg, rate=ones,
        optical_depth=ones, rate_standard_error=ones, source_density=np.ones(n), extinction=np.ones(n),
    )  # fmt: skip
    table = rank(around, "all", area=900 * u.deg**2, top=40)
    np.testing.assert_allclose(table["events_per_field_yr"].value, 900 * 3600, rtol=1e-12)


def test_a_weight_for_each_pixel(wide):
    # only what lies at l > 2 counts
    table = rank(wide, weight=lambda m: (m.l.value > 2).astype(float), area=0.2 * u.deg**2, top=4)
    assert np.all(table["l"].value > 2) and table.meta["ranked"]["weighted"]
    twice = rank(wide, weight=np.full(wide.size, 2.0), top=2)
    np.testing.assert_allclose(twice["events_per_field_yr"], 2 * rank(wide, top=2)["events_per_field_yr"], rtol=1e-12)
    with pytest.raises(InputError, match="one a pixel"):
        rank(wide, weight=np.ones(3))


def test_lists_are_ranked_with_their_own_areas_and_times():
    result = lensrate.skymap([1, 1] * u.deg, [-3, -5] * u.deg, QUICK, names=["near", "far"])
    assert list(rank(result)["name"]) == ["near", "far"]
    assert list(rank(result, area=[1, 50] * u.deg**2)["name"]) == ["far", "near"]
    assert list(rank(result, area=[1, 50] * u.deg**2, visit=[60, 6e4] * u.s)["name"]) == ["near", "far"]
    assert list(rank(result, area=[1, 50] * u.deg**2, per="star")["name"]) == ["near", "far"]


@pytest.mark.parametrize(
    "wrong, words",
    [
        ({"lens": "black_holes"}, "did you mean 'black_hole'"),
        ({"per": "hour"}, "known: field, star"),
        ({"top": 0}, "from 1 up"),
        ({"area": 0 * u.deg**2}, "above 0"),
        ({"area": 1 * u.deg}, "cannot be converted"),
        ({"visit": -1 * u.s}, "above 0"),
        ({"area": [1, 2] * u.deg**2}, "one number is needed on a grid"),
    ],
)
def test_rankings_that_are_none(wide, wrong, words):
    with pytest.raises(InputError, match=words):
        rank(wide, **wrong)


# ---- pictures


def test_pictures_have_l_to_the_left(small, tmp_path):
    import matplotlib.pyplot as plt

    from lensrate.plots.maps import save_skymap

    ax = small.plot(quantity="rate_black_hole", overlay=[("M01", np.array([[0.5, -3], [1.5, -3], [1.5, -4]]))])
    left, right = ax.get_xlim()
    assert (left, right) == (2.5, -0.5) and ax.get_ylim() == (-4.5, -2.5)
    image = ax.images[0].get_array()
    assert image[0, 0] / image[0, 2] == pytest.approx(small.rate[4, 2] / small.rate[4, 0], rel=1e-12)
    assert "[deg]" in ax.get_xlabel() and "M01" in [t.get_text() for t in ax.texts]
    plt.close(ax.figure)
    with pytest.raises(InputError, match="did you mean 'rate_black_hole'"):
        small.plot(quantity="rate_black_holes")
    path = save_skymap(small, tmp_path / "m.png")
    assert small.scenario.hash.encode() in path.read_bytes()
    listed = lensrate.skymap([359, 1] * u.deg, [-3, -4] * u.deg, QUICK, names=["A", "B"])
    ax = listed.plot(quantity="optical_depth_all")
    assert ax.get_xlim()[0] - ax.get_xlim()[1] < 10  # one piece, across l = 0
    plt.close(ax.figure)
