"""Campaigns: what they equal in simple cases, that nothing is counted twice, what is refused."""

import copy

import astropy.units as u
import numpy as np
import pytest
from astropy.table import Table
from scipy.stats import poisson

import lensrate
from lensrate import InputError, Scenario
from lensrate.surveys import report
from lensrate.surveys.bibliography import bibtex
from lensrate.surveys.campaign import Campaign
from lensrate.surveys.campaign_spread import campaign_spread
from lensrate.surveys.family import Family
from lensrate.surveys.kick_yield import kick_yield
from lensrate.surveys.yields import campaign, poisson_68

UNKICKED = Scenario.read("default").replace(kicks="none")
PLAIN = {
    "season": [{"start": "2031-01-01", "end": "2031-12-31"}],
    "field": [
        {"name": "A", "l": 1.0, "b": -2.9, "area_deg2": 1.0, "limit": "I=20", "extinction": {"I": 1.2},
         "monitored_stars": 1e6}
    ],
}  # fmt: skip


def plain(**field):
    table = copy.deepcopy(PLAIN)
    table["field"][0].update(field)
    table["field"][0] = {k: v for k, v in table["field"][0].items() if v is not None}
    return table


@pytest.fixture(scope="module")
def simple():
    return campaign(Campaign.from_dict(plain()), UNKICKED)


def test_one_field_all_year_is_sightline_times_stars_times_time(simple):
    one = lensrate.sightline(1 * u.deg, -2.9 * u.deg, UNKICKED, sources="limit:I=20", extinction={"I": 1.2})
    for name, events in zip(simple.classes, simple.by_class()):
        assert events == pytest.approx(one.lenses[name].rate * 1e6 * 365 / 365.25, rel=1e-12)
    assert simple.by_class()[-1] == pytest.approx(simple.expected.sum())


def test_stars_from_the_source_model_are_density_times_area(simple):
    counted = campaign(Campaign.from_dict(plain(monitored_stars=None)), UNKICKED).fields[0]
    density = simple.fields[0].sightline.sources["source_density_per_arcmin2"]
    assert counted.sources == pytest.approx(3600 * density, rel=1e-9) and counted.counted == "source model"
    stated = campaign(Campaign.from_dict(plain(monitored_stars=None, star_density_per_arcmin2=density)), UNKICKED)
    np.testing.assert_allclose(stated.fields[0].expected, counted.expected, rtol=1e-9)


def test_short_seasons_gaps_and_a_small_u_0_scale_as_they_must(simple):
    table = plain()
    table["u_0_limit"] = 0.25
    table["season"] = [
        {"start": "2031-03-01", "end": "2031-03-01"},
        {"start": "2031-04-01", "end": "2031-04-30", "gaps": [["2031-04-01", "2031-04-10"]]},
    ]
    short = campaign(Campaign.from_dict(table), UNKICKED)
    whole = simple.expected[0, :, 0]
    np.testing.assert_allclose(short.expected[0], np.outer(0.25 * whole, [1 / 365, 20 / 365]), rtol=1e-12)
    assert poisson_68(1e-9) == (0, 0)


def test_gaps_inside_the_efficiency_are_not_applied_again(tmp_path, simple):
    curve = Table({"t_E": [1e-5, 1e6], "efficiency": [0.5, 0.5]})
    sums = {}
    for includes in ((), ("gaps",), ("seasons", "gaps")):
        curve.meta = {"per": "source", "includes": list(includes)}
        curve.write(tmp_path / "curve.ecsv", format="ascii.ecsv", overwrite=True)
        table = plain()
        table["season"] = [
            {"start": "2031-01-01", "end": "2031-05-10", "gaps": [["2031-02-01", "2031-02-10"]]},
            {"start": "2031-09-01", "end": "2031-12-31"},
        ]
        table["efficiency"] = {"file": "curve.ecsv"}
        made = campaign(Campaign.from_dict(table, tmp_path / "c.toml"), UNKICKED)
        sums[includes] = made.by_class()[-1] / simple.by_class()[-1]
    days = {(): 130 - 10 + 122, ("gaps",): 130 + 122, ("seasons", "gaps"): 365}
    for includes, ratio in sums.items():
        assert ratio == pytest.approx(0.5 * days[includes] / 365, rel=1e-9)


def test_a_step_in_efficiency_counts_the_events_of_its_timescales(tmp_path):
    t_E = 20.0
    curve = Table({"t_E_low": [1e-5, t_E], "t_E_high": [t_E, 1e6], "efficiency": [0.0, 1.0]})
    curve.meta = {"per": "source", "includes": []}
    curve.write(tmp_path / "step.ecsv", format="ascii.ecsv")
    table = plain()
    table["efficiency"] = {"file": "step.ecsv"}
    made = campaign(Campaign.from_dict(table, tmp_path / "c.toml"), UNKICKED)
    one = lensrate.sightline(
        1 * u.deg, -2.9 * u.deg, UNKICKED, sources="limit:I=20", extinction={"I": 1.2}, t_E_range=(t_E, 1e5) * u.day
    )
    assert made.by_class()[-1] == pytest.approx(one.lenses["all"].rate * 1e6 * 365 / 365.25, rel=1e-3)


def test_efficiency_by_magnitude_weighs_the_sources(tmp_path, simple):
    t, m = np.meshgrid([1e-5, 1e6], [17.0, 19.0])
    curve = Table({"t_E": t.ravel(), "I_S": m.ravel(), "efficiency": np.where(m < 18, 1.0, 0.0).ravel()})
    curve.meta = {"per": "source", "includes": []}
    curve.write(tmp_path / "mag.ecsv", format="ascii.ecsv")
    table = plain()
    table["efficiency"] = {"file": "mag.ecsv"}
    part = campaign(Campaign.from_dict(table, tmp_path / "c.toml"), UNKICKED).fields[0]
    density = [
        lensrate.sightline(1 * u.deg, -2.9 * u.deg, UNKICKED, sources=f"limit:I={limit}", extinction={"I": 1.2})
        .sources["source_density_per_arcmin2"] for limit in (18, 20)
    ]  # fmt: skip
    np.testing.assert_allclose(part.efficiency[part.efficiency > 0], density[0] / density[1], rtol=2e-3)


def test_a_wide_field_is_the_sum_of_its_quarters():
    wide = plain(area_deg2=None, width_deg=3.0, height_deg=3.0, monitored_stars=None, b=-4.0)
    whole = campaign(Campaign.from_dict(wide), UNKICKED).by_class()[-1]
    table = copy.deepcopy(wide)
    table["field"] = [
        {**wide["field"][0], "name": f"{i}{j}", "l": 1.0 + i, "b": -4.0 + j, "width_deg": 1.0, "height_deg": 1.0}
        for i in (-1, 0, 1) for j in (-1, 0, 1)
    ]  # fmt: skip
    # squares on the sky do not tile: they overlap and gape by a few hundredths of a per cent
    table["overlaps"] = "separate"
    parts = campaign(Campaign.from_dict(table), UNKICKED).by_class()[-1]
    assert whole == pytest.approx(parts, rel=5e-3)


def test_overlapping_fields_are_counted_once_only_when_told():
    table = plain(area_deg2=None, radius_deg=0.5, monitored_stars=None)
    twin = {**table["field"][0], "name": "B"}
    table["field"].append(twin)
    with pytest.raises(InputError, match="overlaps = 'count_once'"):
        Campaign.from_dict(table)
    once = Campaign.from_dict({**table, "overlaps": "count_once"})
    assert once.kept_share(0) == 1.0 and once.kept_share(1) == pytest.approx(0.0, abs=1e-12)
    assert Campaign.from_dict({**table, "overlaps": "separate"}).kept_share(1) == 1.0


def test_a_small_field_inside_a_wide_one_overlaps_and_so_do_equal_patches():
    for other in ({"radius_deg": 0.2}, {"area_deg2": 0.2}):
        wide = plain(area_deg2=None, radius_deg=3.0, b=-6.0, monitored_stars=None)
        small = {**plain(monitored_stars=None, b=-6.0, **{"area_deg2": None, **other})["field"][0], "name": "B"}
        with pytest.raises(InputError, match="overlaps"):
            Campaign.from_dict({**wide, "field": [*wide["field"], small]})
    twice = plain()
    with pytest.raises(InputError, match="overlaps"):
        Campaign.from_dict({**twice, "field": [*twice["field"], {**twice["field"][0], "name": "B"}]})


def test_an_efficiency_against_u_0_is_averaged_to_the_campaigns_limit(tmp_path):
    x = np.linspace(0, 1, 5)
    t, x = (g.ravel() for g in np.meshgrid([1e-5, 1e6], x))
    curve = Table({"t_E": t, "u_0": x, "efficiency": 1 - x})
    curve.meta = {"per": "source", "includes": []}
    curve.write(tmp_path / "u.ecsv", format="ascii.ecsv")
    for limit, mean in ((1.0, 0.5), (0.4, 0.8)):
        table = {**plain(), "u_0_limit": limit, "efficiency": {"file": "u.ecsv"}}
        made = campaign(Campaign.from_dict(table, tmp_path / "c.toml"), UNKICKED).fields[0]
        np.testing.assert_allclose(made.efficiency[made.efficiency > 0], mean, rtol=1e-4)
    for change, words in (({"u_0_limit": 2.0}, "reaches to"), ({"limit_on": "peak"}, "average the curve")):
        table = {**plain(**{k: v for k, v in change.items() if k == "limit_on"}), "efficiency": {"file": "u.ecsv"}}
        table |= {k: v for k, v in change.items() if k == "u_0_limit"}
        with pytest.raises(InputError, match=words):
            Campaign.from_dict(table, tmp_path / "c.toml")


def test_scaled_numbers_are_shares_of_the_observed(simple):
    made = campaign(Campaign.from_dict(plain(observed_events=50)), UNKICKED)
    share = made.by_class() / made.by_class()[-1]
    np.testing.assert_allclose(made.scaled_by_class(), 50 * share)
    assert simple.scaled_by_class() is None
    row = made.to_dict()["expected"]["white_dwarf"]
    assert row["p_at_least_one"] == pytest.approx(1 - poisson.pmf(0, row["events"]))


def test_sources_limited_at_peak_lie_between_the_limit_and_its_brightest_reach():
    def at(text):
        return campaign(Campaign.from_dict(plain(limit=None, sources=text, monitored_stars=None)), UNKICKED).fields[0]

    baseline, peak, deep = at("limit:I=18"), at("peak:I=18"), at("limit:I=23")
    assert baseline.sources < peak.sources < deep.sources
    assert at("peak:I=18").sightline.sources["rule"] == Campaign.from_dict(
        plain(limit="I=18", limit_on="peak")
    ).fields[0].sources  # fmt: skip


@pytest.fixture(scope="module")
def kicked():
    return campaign(Campaign.from_dict(plain()), family=Family.read("kicks"))


def test_the_kick_yield_summed_over_a_law_is_the_forecast(kicked):
    curve = kick_yield(kicked)
    for law in ("hobbs2005", "maxwell:100"):
        own = kicked.fields[0].sightline.reforecast(kicks=law).lenses["neutron_star"].rate
        assert curve.events(law) == pytest.approx(own * 1e6 * 365 / 365.25, rel=1e-3)
    assert curve.per_born[0] > curve.per_born[-3] > 0
    with pytest.raises(InputError, match="unkicked"):
        kick_yield(campaign(Campaign.from_dict(plain()), UNKICKED))


def test_the_range_holds_the_forecast_and_names_its_ends(kicked):
    low, high = kicked.ranges.T
    events = kicked.by_class()
    assert np.all(low <= events * (1 + 1e-12)) and np.all(high >= events * (1 - 1e-12))
    i = kicked.classes.index("neutron_star")
    assert high[i] / low[i] > 1.2 and "kicks" in kicked.range_cases[i]
    assert kicked.fields[0].sampling[i] > 0


def test_what_a_range_goes_over_and_where_dust_comes_from_is_said(kicked):
    over = ("kicks of neutron stars", "kicks of black holes")
    assert kicked.range_over == over and f"the range over {' and '.join(over)}" in report.headline(kicked)
    table = plain()
    smooth = {k: v for k, v in table["field"][0].items() if k != "extinction"}
    table["field"].append({**smooth, "name": "B", "l": 4.0})
    made = campaign(Campaign.from_dict(table), UNKICKED, family=Family.read("default").only(["kicks", "ifmr"]))
    assert made.range_over == ("remnant masses",) and made.to_dict()["range_over"] == ["remnant masses"]
    # an axis of which some alternatives need new integrals is named as such, and these are listed
    made = campaign(Campaign.from_dict(plain()), UNKICKED, family=Family.read("default").only(["imf"]))
    assert made.range_over == ("mass function (in part)",)
    assert any("flat in the bulge" in w for w in made.range_without) and "flat in the bulge" in report.methods(made)


def test_what_contradicts_the_forecast_or_is_taken_on_trust_is_said():
    table = plain()
    table["field"][0]["observed_events"] = 3
    told = [w for w in campaign(Campaign.from_dict(table), UNKICKED).warnings if "far beyond chance" in w]
    assert len(told) == 1 and "3 events observed" in told[0]


def test_a_spread_of_a_campaign_is_its_forecasts():
    survey = Campaign.from_dict(plain(observed_events=30))
    result = campaign_spread(survey, Family.read("default"), UNKICKED, axes=["ifmr"])
    rows = {r.alternative: r.values for r in result.rows}
    own = campaign(survey, UNKICKED.replace(ifmr="raithel2018"))
    # the spread keeps the base's source stars, which hardly know the remnants' masses
    for lens, events in zip([*own.classes, "all"], own.by_class()):
        assert rows["raithel2018"][lens]["events"] == pytest.approx(events, rel=5e-3)
    assert rows["raithel2018"]["all"]["scaled_to_observed"] == pytest.approx(30)
    low, high = result.range("events", "black_hole")[1:3]
    assert low < result.rows[0].values["black_hole"]["events"] < high


def test_a_proposal_can_quote_it(kicked):
    text = report.methods(kicked)
    assert kicked.scenario.hash in text and "limit:I=20" in text and "u_0 < 1" in text
    assert report.latex(kicked).count(r"\\") == len(kicked.classes) + 2
    entries = bibtex(kicked.references, kicked.meta())
    assert "@article{Kroupa2001" in entries and entries.count("{") == entries.count("}")
    assert f"({kicked.scenario.hash}), campaign {kicked.campaign.hash}" in entries.split("@article")[0]
    # words beside the authors are none of them; laws of the family and numbers of arXiv are there
    for authors in ("Cummings and others", "Ozel and others", "Stanek", "Kroupa and Tout and Gilmore",
                    "{GRAVITY Collaboration}", "Verbunt and Igoshev and Cator", "Disberg and Mandel"):  # fmt: skip
        assert f"author = {{{authors}}}" in entries, authors
    assert "eprint = {2505.22102}" in entries and "On the variation of the initial mass function" in entries
    assert report._short(30.0) == "30.0" and report._short(0.5) == "0.500" and report._short(251.2) == "251"
    assert "neutron stars" in report.headline(kicked)
    header = kicked.header()
    for word in ("limit:I=20", "u_0 < 1", "heliocentric", "all t_E", "luminous"):
        assert word in header
    for by in ("class", "field"):
        assert kicked.to_table(by).meta["scenario_hash"] == kicked.scenario.hash


BAD = [
    (plain(l=None), "l"),
    (plain(l=None, b=None), "place is needed"),
    (plain(area_deg2=-1.0), "area_deg2"),
    (plain(limit="R=20"), "did you mean|known"),
    (plain(limit="I=abc"), "finite number"),
    (plain(extinction={"Q": 1.0}), "extinction"),
    (plain(extinction={"I": -1.0}), "between 0 and 60"),
    (plain(extinction=None, b=-1.2), "state its extinction"),
    (plain(extinction=None, area_deg2=None, radius_deg=1.5, b=-2.9), "1.40 deg of the plane"),
    (plain(monitored_stars=-5), "above 0 and at most 1e.12 stars"),
    (plain(monitored_stars="7e6"), "'7e6' given, must be a number of stars, without quotes"),
    (plain(cadence_d="15 min"), "'15 min' given, must be a number of days, without quotes or a unit"),
    (plain(area_deg2="1"), "must be a number of square degrees"),
    (plain(star_density_per_arcmin2=5.0), "both given"),
    (plain(observed_events=-1), "observed_events"),
    (plain(radius=0.6), "did you mean 'radius_deg'"),
    ({**plain(), "u_0_limit": 0.0}, "u_0_limit"),
    ({**plain(), "overlaps": "once"}, "overlaps"),
    ({**plain(), "photometry": {"band": "R", "cadence_d": 1.0}}, "photometry.band"),
    ({**plain(), "photometry": {"band": "I", "cadence_d": 0.0}}, "cadence_d"),
    ({**plain(), "efficiency": {"file": "none.ecsv"}}, "no file"),
    ({**plain(), "season": []}, r"\[\[season\]\]"),
    ({**plain(), "field": 3}, r"\[\[field\]\]"),
    ({**plain(), "seasons": []}, "did you mean 'season'"),
]


@pytest.mark.parametrize("table, words", BAD)
def test_campaigns_that_cannot_be(table, words):
    with pytest.raises(InputError, match=words):
        Campaign.from_dict(table)


def test_an_efficiency_must_fit_the_sources(tmp_path):
    curve = Table({"t_E": [1.0, 300.0], "efficiency": [0.1, 0.2]})
    curve.meta = {"per": "catalogued_object", "includes": [], "source_limit": "I=19", "u_0_limit": 0.5}
    curve.write(tmp_path / "curve.ecsv", format="ascii.ecsv")
    for change, words in (({}, "u_0"), ({"u_0_limit": 0.5}, "I=20"), ({"u_0_limit": 0.5, "none": 1}, "objects")):
        table = plain(monitored_stars=None if "none" in change else 1e6)
        table |= {k: v for k, v in change.items() if k != "none"}
        table["efficiency"] = {"file": "curve.ecsv"}
        with pytest.raises(InputError, match=words):
            Campaign.from_dict(table, tmp_path / "c.toml")


def test_the_invented_survey_is_whole_and_marked():
    survey = Campaign.read("marram")
    assert "invented" in survey.name and len(survey.fields) == 4 and survey.hash == Campaign.read("marram").hash
    assert np.isinf(survey.photometry.error(25.0)) and survey.photometry.error(19.0) == pytest.approx(0.0292, abs=2e-4)


def dust_image(path, low, high):
    """A map of A_I around (1, -2.9) deg, one value on either side of the middle."""
    from astropy.io import fits
    from astropy.wcs import WCS

    wcs = WCS(naxis=2)
    wcs.wcs.ctype, wcs.wcs.crval, wcs.wcs.crpix, wcs.wcs.cdelt = ["GLON-CAR", "GLAT-CAR"], [1.0, 0.0], [50.5, 340.5], [
        -0.02, 0.02
    ]  # fmt: skip
    image = np.full((400, 100), low)
    image[:, :50] = high
    fits.PrimaryHDU(image, wcs.to_header()).writeto(path)


def test_a_map_of_extinction_counts_stars_patch_by_patch(tmp_path):
    def stars(name, **extinction):
        table = plain(area_deg2=None, width_deg=0.6, height_deg=0.6, monitored_stars=None, **extinction)
        return campaign(Campaign.from_dict(table, tmp_path / name), UNKICKED).fields[0]

    dust_image(tmp_path / "flat.fits", 1.2, 1.2)
    dust_image(tmp_path / "patchy.fits", 0.6, 2.0)
    number = {a: stars("c.toml", extinction={"I": a}).sources for a in (0.6, 1.2, 2.0)}
    flat = stars("c.toml", extinction=None, sky_map_of_extinction="flat.fits")
    assert flat.sources == pytest.approx(number[1.2], rel=2e-3)
    patchy = stars("c.toml", extinction=None, sky_map_of_extinction="patchy.fits")
    assert patchy.sources == pytest.approx(0.5 * (number[0.6] + number[2.0]), rel=0.02)
    assert patchy.sightline.sources["extinction"]["I"] == pytest.approx(1.3, abs=0.02)
    for extra, words in (
        ({"sky_map_of_extinction": "none.fits"}, "no such file"),
        ({"sky_map_of_extinction": "flat.fits", "l": 5.0}, "says nothing at"),
    ):
        table = plain(area_deg2=None, radius_deg=0.3, extinction=None, **extra)
        with pytest.raises(InputError, match=words):
            campaign(Campaign.from_dict(table, tmp_path / "c.toml"), UNKICKED)
    with pytest.raises(InputError, match="both given"):
        Campaign.from_dict(plain(sky_map_of_extinction="flat.fits"), tmp_path / "c.toml")


def test_a_luminosity_function_of_the_users_own_sets_the_counts(tmp_path):
    for name, factor in (("one.ecsv", 1.0), ("two.ecsv", 2.0)):
        luminosity(tmp_path / name, factor)
    made = [
        campaign(Campaign.from_dict({**plain(monitored_stars=None), "luminosity": name}, tmp_path / "c.toml"), UNKICKED)
        for name in ("one.ecsv", "two.ecsv")
    ]
    assert made[1].fields[0].sources == pytest.approx(2 * made[0].fields[0].sources, rel=1e-6)


def write_curve(path, value):
    curve = Table({"t_E": [1e-5, 1e6], "efficiency": [value, value]})
    curve.meta = {"per": "source", "includes": []}
    curve.write(path, format="ascii.ecsv", overwrite=True)


def luminosity(path, factor=1.0):
    magnitude = np.arange(-3.0, 12.1, 0.5)
    table = Table({"magnitude": magnitude, "cumulative": factor * 10 ** (0.2 * (magnitude - 6.0))})
    table.meta["band"] = "I"
    table.write(path, format="ascii.ecsv", overwrite=True)


def test_the_hash_holds_every_file_that_is_read(tmp_path):
    write_curve(tmp_path / "curve.ecsv", 0.5)
    luminosity(tmp_path / "stars.ecsv")
    (tmp_path / "precision.csv").write_text("mag,sigma\n14,0.003\n20,0.1\n")
    (tmp_path / "mine.toml").write_text('base = "default"\nkicks = "none"\n')
    dust_image(tmp_path / "dust.fits", 1.2, 1.2)
    table = plain(extinction=None, sky_map_of_extinction="dust.fits")
    table |= {"efficiency": {"file": "curve.ecsv"}, "luminosity": "stars.ecsv", "scenario": "mine.toml"}
    table["photometry"] = {"band": "I", "cadence_d": 1.0, "precision": "precision.csv"}

    def read():
        return Campaign.from_dict(table, tmp_path / "c.toml")

    seen = [read().hash]
    assert read().hash == seen[0] and len(read().files) == 5
    for name in ("curve.ecsv", "stars.ecsv", "precision.csv", "mine.toml", "dust.fits"):
        path = tmp_path / name
        path.write_bytes(path.read_bytes().replace(b"0.5", b"0.6") + b"\n")
        seen.append(read().hash)
    assert len(set(seen)) == 6
    path.unlink()
    with pytest.raises(InputError, match="no such file"):
        read()


def test_a_map_of_a_campaigns_fields_is_the_campaign(tmp_path):
    from lensrate.surveys.pointings import rank
    from lensrate.surveys.skymap import campaign_skymap

    luminosity(tmp_path / "stars.ecsv", 1e-3)
    dust_image(tmp_path / "dust.fits", 0.6, 2.0)
    table = plain(area_deg2=None, width_deg=0.6, height_deg=0.6, monitored_stars=None, extinction=None,
                  sky_map_of_extinction="dust.fits")  # fmt: skip
    first = table["field"][0]
    plainer = {k: v for k, v in first.items() if k != "sky_map_of_extinction"}
    table["field"] += [
        {**first, "name": "B", "l": 1.3},
        {**plainer, "name": "C", "b": -6.0, "extinction": {"I": 0.5}, "monitored_stars": 3e5},
        {**plainer, "name": "D", "b": -8.0, "width_deg": 3.0, "star_density_per_arcmin2": 20.0},
    ]
    table |= {"u_0_limit": 0.5, "luminosity": "stars.ecsv", "overlaps": "count_once"}
    survey = Campaign.from_dict(table, tmp_path / "c.toml")
    own = campaign(survey, UNKICKED)
    seen = campaign_skymap(survey, UNKICKED, precise=True)
    for i, f in enumerate(own.fields):
        for c, name in enumerate(own.classes):
            lens = f.sightline.lenses[name]
            assert seen.rate[c, i] == pytest.approx(lens.rate, rel=1e-12)
            assert seen.optical_depth[c, i] == pytest.approx(lens.optical_depth, rel=1e-12)
        assert seen.source_density[i] * seen.area_deg2[i] * 3600 == pytest.approx(f.sources, rel=1e-12)
    assert seen.rate_factor[3] != 1.0 and seen.area_deg2[1] < seen.area_deg2[0]
    ranked = {row["name"]: row["events_per_field_yr"].value for row in rank(seen, "star")}
    for f in own.fields:
        assert ranked[f.field.name] == pytest.approx(f.expected[0].sum() / (365 / 365.25), rel=1e-9)
    table["field"][2]["limit"] = "I=19"
    with pytest.raises(InputError, match="one rule"):
        campaign_skymap(Campaign.from_dict(table, tmp_path / "c.toml"), UNKICKED)


def test_precision_in_millimagnitudes_is_noticed_or_declared(tmp_path):
    def error(text):
        (tmp_path / "p.csv").write_text(text)
        table = {**plain(), "photometry": {"band": "I", "cadence_d": 1.0, "precision": "p.csv"}}
        return Campaign.from_dict(table, tmp_path / "c.toml").photometry.error(20.0)

    assert error("mag,sigma\n14,0.003\n20,0.1\n") == pytest.approx(0.1)
    assert error("mag,sigma_mmag\n14,3\n20,100\n") == pytest.approx(0.1)
    with pytest.raises(InputError, match="sigma_mmag"):
        error("mag,sigma\n14,3\n20,100\n")
