"""Facilities: shipped ones, plans of epochs, complaints."""

import numpy as np
import pytest

from lensrate.datafiles import parse_toml
from lensrate.errors import InputError
from lensrate.surveys.calendar import Calendar, Season
from lensrate.surveys.facilities import Facility, LightCurve, facility_names
from lensrate.surveys.photometry import Photometry

ROW = """
[[facility]]
name = "mine"
band = "I"
precision = [[14.0, 0.1], [20.0, 0.5]]
hours_per_epoch = 1.0
epochs = {number = 4, spacing = 30}
"""


def written(tmp_path, text):
    path = tmp_path / "mine.toml"
    path.write_text(text)
    return str(path)


def test_shipped_facilities_are_invented_and_say_so():
    for name in facility_names():
        facility = Facility.read(name)
        assert facility.invented and "invented" in facility.reference
        assert facility.noise()[3:].min() > 0
    assert {Facility.read(n).measures for n in facility_names()} == {"centroid", "images"}


def test_noise_follows_the_table():
    one = Facility("a", "I", [14, 18, 20], [0.1, 0.2, 0.8], 1.0, floor=0.3, saturation=15, faint_limit=19.5)
    noise = one.noise()
    grid = noise[0] + noise[2] * np.arange(noise.size - 3)
    assert noise[0] == 15 and noise[1] == 19.5 and grid[-1] >= 19.5
    assert np.interp([16.0, 18.0, 19.0], grid, noise[3:]) == pytest.approx(
        [1 / (s**2 + 0.09) for s in (np.sqrt(0.02), 0.2, 0.4)], rel=1e-3
    )


def test_plans():
    t_0, u_0, t_E = np.array([60000.0, 60500.0]), np.array([0.6, 1.5]), np.array([50.0, 20.0])
    alert = np.array([60000 - 50 * 0.8, 60500.0])
    row = dict(name="a", band="I", mag=[14, 20], sigma=[1, 1], hours_per_epoch=1.0, first_epoch=10.0)
    series = Facility(**row, number=3, spacing=7.0).schedule(t_0, u_0, t_E)
    assert series == pytest.approx(alert[:, None] + 10 + 7.0 * np.arange(3))
    at = Facility(**row, at=(-1.0, -0.5, 1.0)).schedule(t_0, u_0, t_E)
    assert np.array_equal(np.isnan(at), [[True, False, False], [True, True, False]])
    assert at[:, 2] == pytest.approx(t_0 + t_E)
    assert Facility(**row, days=(5.0, 40.0)).schedule(t_0, u_0, t_E)[0] == pytest.approx([60005, 60040])

    def from_next_hundred(t):
        return np.where(t % 100 < 50, t, t - t % 100 + 100)

    series = Facility(**row, number=4, spacing=30.0).schedule(t_0, u_0, t_E, from_next_hundred)
    assert series[1] == pytest.approx([60510, 60540, 60600, 60630])
    lost = Facility(**row, days=(20.0, 80.0, 120.0)).schedule(t_0, u_0, t_E, from_next_hundred)
    assert np.array_equal(np.isnan(lost[0]), [False, True, False])


@pytest.mark.parametrize(
    "old, new, word",
    [
        ("hours_per_epoch", "hours_per_epochs", "did you mean 'hours_per_epoch'"),
        ('band = "I"', 'band = "i"', "did you mean 'I'"),
        ("hours_per_epoch = 1.0", "hours_per_epoch = {value = 1, unit = 'mas'}", "converted"),
        ("hours_per_epoch = 1.0", "hours_per_epoch = -1", "at least 0"),
        ("[20.0, 0.5]", "[13.0, 0.5]", "must rise"),
        ("[20.0, 0.5]", "[20.0, 0.0]", "precision"),
        ("[20.0, 0.5]", "20.0", "pairs"),
        ("number = 4, spacing = 30", "number = 4", "spacing"),
        ("number = 4, spacing = 30", "number = 4.5, spacing = 30", "whole number"),
        ("number = 4, spacing = 30", "number = 4, spacing = 30, at = [1]", "number and spacing, or days"),
        ("number = 4, spacing = 30", "at = [1, 1]", "rising"),
        ("number = 4, spacing = 30", "tims = [1, 1]", "not a key"),
        ('band = "I"', 'band = "I"\nleast_separation = 1', "images"),
        ('band = "I"', 'band = "I"\nmeasures = "centroids"', "did you mean 'centroid'"),
        ('band = "I"', 'band = "I"\nsaturation = 20\nfaint_limit = 19', "brighter"),
        ('band = "I"', 'band = "I"\ninvented = "yes"', "true or false"),
        ("[[facility]]", "[facility]", "at least one"),
    ],
)
def test_complaints(tmp_path, old, new, word):
    path = written(tmp_path, ROW)
    assert Facility.read("mine", path).spacing == 30
    assert old in ROW
    with pytest.raises(InputError, match=word):
        Facility.read("mine", written(tmp_path, ROW.replace(old, new)))


def test_names_are_one_of_the_file(tmp_path):
    with pytest.raises(InputError, match="did you mean 'marram_interferometer'"):
        Facility.read("maram_interferometer")
    with pytest.raises(InputError, match="two facilities"):
        facility_names(written(tmp_path, ROW + ROW))
    assert "reference" in parse_toml(written(tmp_path, 'reference = "none"'))


def test_light_curves():
    spans = [[60000, 60010], [60020, 60025]]
    survey = LightCurve(spans, 2.0, [14, 20], [0.01, 0.1])
    assert survey.epochs() == pytest.approx([60001, 60003, 60005, 60007, 60009, 60021, 60023])
    calendar = Calendar((Season(60000, 60030, ((60010, 60020), (60025, 60030))),))
    same = LightCurve.of(Photometry("I", 1.0, np.array([14.0, 20.0]), np.array([0.01, 0.1])), calendar, cadence=2.0)
    assert same.epochs() == pytest.approx(survey.epochs()) and np.array_equal(same.noise(), survey.noise())
    with pytest.raises(InputError, match="states no precision"):
        LightCurve.of(Photometry(), calendar)
    for bad in ([[60010, 60000]], [[60000, 60010], [60005, 60025]], [], [[1, 2]]):
        with pytest.raises(InputError, match="open"):
            LightCurve(bad, 2.0, [14, 20], [0.01, 0.1])
    with pytest.raises(InputError, match="cadence"):
        LightCurve(spans, 0.0, [14, 20], [0.01, 0.1])
    with pytest.raises(InputError, match="saturation"):
        LightCurve(spans, 1.0, [14, 20], [0.01, 0.1], saturation=21).noise()
