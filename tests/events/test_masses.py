"""Masses that a campaign measures: counts, hours, magnitudes in another band."""

import numpy as np
import pytest
from astropy.table import QTable

from lensrate import InputError, Scenario
from lensrate.events.masses import image_magnitudes, mass_forecast
from lensrate.events.mock import mock_events
from lensrate.io import write_table
from lensrate.sources.luminosity import clump_magnitude
from lensrate.surveys.campaign import Campaign
from lensrate.surveys.facilities import Facility
from lensrate.surveys.yields import campaign

PLAIN = {
    "season": [{"start": "2031-02-01", "end": "2031-10-31"}, {"start": "2032-02-01", "end": "2032-10-31"}],
    "photometry": {"band": "I", "cadence_d": 0.5},
    "field": [
        {"name": "A", "l": 1.0, "b": -2.9, "area_deg2": 1.0, "limit": "I=19", "extinction": {"I": 1.2},
         "monitored_stars": 1e6},
        {"name": "B", "l": 4.0, "b": -6.0, "area_deg2": 1.0, "limit": "I=19", "extinction": {"I": 0.7},
         "monitored_stars": 2e4},
    ],
}  # fmt: skip
SHARP = {
    "name": "sharp", "band": "Ks", "precision": [[8.0, 0.003], [22.0, 0.004]], "hours_per_epoch": 0.5,
    "epochs": {"number": 20, "spacing": 40.0}, "invented": True,
}  # fmt: skip


@pytest.fixture(scope="module")
def forecast(tmp_path_factory):
    folder = tmp_path_factory.mktemp("masses")
    (folder / "precision.csv").write_text("mag,sigma\n12,0.001\n20,0.004\n")
    table = {**PLAIN, "photometry": {**PLAIN["photometry"], "precision": "precision.csv"}}
    survey = Campaign.from_dict(table, folder / "c.toml")
    return campaign(survey, Scenario.read("default").replace(kicks="none"))


@pytest.fixture(scope="module")
def masses(forecast):
    return {x: mass_forecast(forecast, [Facility.from_dict(SHARP)], x, number=300).masses for x in (0.05, 0.2)}


def test_counts_are_parts_of_what_is_found_and_grow_with_the_limit(forecast, masses):
    loose, strict = masses[0.2].facilities[0].counts, masses[0.05].facilities[0].counts
    for name, events in zip([*forecast.classes, "all"], forecast.by_class()):
        assert loose[name]["events"] == pytest.approx(events, rel=1e-9)
        assert 0 <= strict[name]["measured"] <= loose[name]["measured"] <= events
    assert loose["black_hole"]["measured"] > 0.05 * loose["black_hole"]["events"]
    assert list(loose) == [*forecast.classes, "all"]


def test_hours_buy_what_is_measured(masses):
    f = masses[0.2].facilities[0]
    assert f.follow.measured["all"][-1] == pytest.approx(f.counts["all"]["measured"])
    assert f.follow.at(0.0)["black_hole"] == 0.0
    rows = masses[0.2].to_dict()["black_hole"]["sharp"]
    assert rows["invented_facility"] and rows["against_hours"]["1000"] <= rows["measured"] * (1 + 1e-12)
    assert len(masses[0.2].to_table()) == 6


def test_the_same_seed_gives_the_same_masses(forecast, masses):
    again = mass_forecast(forecast, [Facility.from_dict(SHARP)], 0.2, number=300, jobs=2)
    made = again.to_dict()
    assert again.masses.to_dict() == masses[0.2].to_dict() == made["mass_measured"]
    assert set(made["mass_measured"]) == {*forecast.classes, "all"} and made["mass_settings"]["seed"] == 1


def test_a_table_says_how_it_was_made(forecast, masses, tmp_path):
    table = masses[0.2].to_table()
    for key in ("version", "scenario_hash", "scenario_text", "campaign_hash", "references"):
        assert table.meta[key] == forecast.meta()[key]
    assert table.meta["facilities"] == ["sharp"] and table.meta["invented_facilities"]
    assert (table.meta["seed"], table.meta["mass_error_limit"], table.meta["mock_events"]) == (1, 0.2, 600)
    write_table(table, tmp_path / "masses.ecsv")
    assert QTable.read(tmp_path / "masses.ecsv").meta["scenario_hash"] == forecast.scenario.hash


def test_a_source_keeps_its_rank_in_another_band(forecast):
    events = mock_events(forecast, number=4000, seed=3, weighted=True)
    rows = np.arange(len(events))
    line = forecast.fields[0].sightline
    rows = rows[events["field"] == "A"]
    events = events.select(rows)
    rows = np.arange(len(events))
    assert np.array_equal(image_magnitudes(line, "I", events, rows)[0], events["I_S"])
    K, lens = image_magnitudes(line, "Ks", events, rows)
    bulge = np.char.equal(events["source_component"].astype(str), "bulge")
    there = line._integrals.ready.sources
    absolute = events["I_S"] - 5 * np.log10(events["D_S"]) - 10 - there.dust(events["D_S"])
    clump = bulge & (np.abs(absolute - clump_magnitude("I")) < 0.03)
    assert clump.sum() > 5
    modulus = 5 * np.log10(events["D_S"][clump]) + 10
    # clump giants of the bulge, Nataf+ 2013 in I and Hawkins+ 2017 in Ks, with a third of A_I or less as dust
    assert np.median(K[clump] - modulus) == pytest.approx(clump_magnitude("Ks") + 0.3, abs=0.3)
    assert np.all(np.isinf(lens[np.isin(events["lens"], ["neutron_star", "black_hole"])]))
    # a white dwarf is as old in one band as in the other: its age read off I gives its Ks
    from lensrate.sources.extinction import band_ratio
    from lensrate.sources.lens_light import white_dwarf_magnitude

    wd = np.flatnonzero(events["lens"] == "white_dwarf")
    assert wd.size > 100
    ages = np.geomspace(1e-3, 10.5, 4000)
    for i in wd[:100]:
        D, M, A = events["D_L"][i], events["M_L"][i], float(there.dust(events["D_L"][i : i + 1])[0])
        away = 5 * np.log10(D) + 10
        age = np.interp(events["I_L"][i] - away - A, white_dwarf_magnitude("I", M, ages), ages)
        wanted = white_dwarf_magnitude("Ks", M, age) + away + A * band_ratio("Ks")
        assert lens[i] == pytest.approx(wanted, abs=0.02)


def test_what_cannot_be_measured_is_named(forecast):
    bare = campaign(Campaign.from_dict(PLAIN), forecast.scenario)
    with pytest.raises(InputError, match="precision"):
        mass_forecast(bare, [Facility.from_dict(SHARP)], number=50)
    with pytest.raises(InputError, match="limit"):
        mass_forecast(forecast, [Facility.from_dict(SHARP)], 0.0)
    with pytest.raises(InputError, match="did you mean|known"):
        mass_forecast(forecast, "maram")
