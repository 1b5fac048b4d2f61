"""Families of assumptions and the spread of a forecast over them: laws, shared integrals, weights, complaints."""

import math

import astropy.units as u
import matplotlib
import numpy as np
import pytest
from matplotlib.figure import Figure
from mocks import Posted

import lensrate
from lensrate.datafiles import names
from lensrate.errors import InputError
from lensrate.io import dump_json
from lensrate.plots import spread_overview
from lensrate.scenario import Scenario
from lensrate.surveys.axis import Alternative, Axis
from lensrate.surveys.family import Family
from lensrate.surveys.shared import forecasts_under, integral_key
from lensrate.surveys.spread import Outcome, SightlineForecast, sightline_spread, spread

L, B = 1 * u.deg, -3.9 * u.deg
DEFAULT = Scenario.read("default")
PLAIN = DEFAULT.replace(kicks="none", sources="distance:8")
NUMBERS = ("optical_depth", "rate", "mean_t_E", "median_t_E", "share_of_events")


def family(**axes):
    """A family of axes, each a list of changes."""
    return Family.from_dict({"axis": {name: {"alternatives": rows} for name, rows in axes.items()}})


def plain(result):
    return {name: {n: getattr(x, n) for n in NUMBERS} for name, x in result.lenses.items()}


def bar(angle):
    return {"name": f"{angle} deg", "change": {"bulge": {"density": {"angle": float(angle)}}}}


def score(scenario):
    """A stand-in forecast: something of every assumption, added up."""
    kick = {"igoshev2020": 1.0, "hobbs2005": 2.5, "verbunt2017": 0.5}[scenario.kicks]
    mass = {"default": 10.0, "raithel2018": 12.0, "gould2000": 7.0}[scenario.ifmr]
    return {"all": {"score": kick + mass, "kick": kick, "mass": mass}}


def scores(scenarios):
    return [score(s) for s in scenarios]


TWO = {"kicks": [{"kicks": "hobbs2005"}, {"kicks": "verbunt2017"}], "ifmr": [{"ifmr": "raithel2018"}]}


def test_a_family_without_alternatives_spreads_nothing():
    result = sightline_spread(L, B, Family("empty"), PLAIN, combinations=True)
    assert result.rows[0].values == plain(lensrate.sightline(L, B, PLAIN)) and len(result.rows) == 1
    for lens in result.lenses:
        for n in NUMBERS:
            one = result.range(n, lens)
            assert one.base == one.low == one.high and one.low_by == "base" and result.moves(n, lens) == {}
            assert result.combined_range(n, lens) == one and result.weighted(n, lens) == {}
    # an alternative that says what the base says is no alternative
    same = sightline_spread(L, B, family(kicks=[{"kicks": "none"}]), PLAIN)
    assert len(same.rows) == 1 and same.moves("rate") == {"kicks": 0.0}


def test_one_axis_is_its_separate_forecasts():
    result = sightline_spread(L, B, family(bar_angle=[bar(20), bar(35)]), PLAIN)
    fresh = [plain(lensrate.sightline(L, B, s)) for _, s in result.family.one_at_a_time(PLAIN)]
    assert [r.values for r in result.rows] == fresh
    rates = [f["all"]["rate"] for f in fresh]
    found = result.range("rate")
    assert (found.base, found.low, found.high) == (rates[0], min(rates), max(rates))
    assert result.moves("rate") == {"bar_angle": max(abs(math.log(r / rates[0])) for r in rates)}
    assert result.rows[1].scenario_hash == PLAIN.replace(change=bar(20)["change"]).hash


@pytest.fixture(scope="module")
def kicked():
    """Two axes that are linear, from one set of integrals, beside a base without kicks."""
    axes = family(kicks=[{"kicks": "hobbs2005"}, {"kicks": "maxwell:80"}], holes=[{"bh_kicks": "same"}])
    return sightline_spread(L, B, axes, DEFAULT.replace(sources="distance:8"), combinations=True)


def test_shared_integrals_give_what_fresh_ones_give(kicked):
    base = kicked.base
    assert len({integral_key(s) for _, s in kicked.family.combinations(base)}) == 1
    for row, change in zip(kicked.rows[1:], ({"kicks": "hobbs2005"}, {"kicks": "maxwell:80"}, {"bh_kicks": "same"})):
        fresh = lensrate.sightline(L, B, base.replace(**change))
        assert row.scenario_hash == fresh.scenario.hash
        for lens, values in plain(fresh).items():
            for n, x in values.items():
                assert row.values[lens][n] == pytest.approx(x, rel=1e-9), (lens, n)


def test_combinations_contain_single_changes_and_add_what_is_independent(kicked):
    labels = list(kicked.combined_labels)
    assert len(labels) == 3 * 2 and labels[0] == "base"
    for row in kicked.rows:
        i = labels.index(row.label)
        for (lens, n), x in kicked.combined.items():
            assert x[i] == row.values[lens][n]
            single, both = kicked.range(n, lens), kicked.combined_range(n, lens)
            assert both.low <= single.low <= single.base <= single.high <= both.high
    # neutron stars feel their own law, black holes both: 'same' follows the neutron stars' law
    both = labels.index("kicks: maxwell:80; holes: same")
    rate = {lens: kicked.combined[lens, "rate"] for lens in ("neutron_star", "black_hole", "star")}
    assert rate["neutron_star"][both] == rate["neutron_star"][labels.index("kicks: maxwell:80")]
    assert np.all(rate["star"] == rate["star"][0])
    assert rate["black_hole"][both] > 1.2 * rate["black_hole"][labels.index("holes: same")]


def test_a_base_without_kicks_shares_with_kicked_alternatives(kicked):
    """The group is integrated with fields though its first scenario needs none."""
    base = kicked.base.replace(kicks="none")
    none, fast = forecasts_under(L, B, [base, kicked.base.replace(kicks="hobbs2005")])
    assert none.scenario.hash == base.hash and none.lenses["neutron_star"].kinematics == "unkicked"
    assert plain(fast)["neutron_star"] == kicked.rows[1].values["neutron_star"]
    alone = lensrate.sightline(L, B, base).lenses["neutron_star"]
    assert none.lenses["neutron_star"].rate == pytest.approx(alone.rate, rel=1e-12)


def test_other_masses_keep_the_sources_unless_exact():
    base = DEFAULT.replace(kicks="none")
    other = base.replace(imf="chabrier2005_single")
    quick = forecasts_under(L, B, [base, other])
    exact = forecasts_under(L, B, [base, other], exact=True)
    kept, fresh = quick[0].reforecast(imf="chabrier2005_single"), lensrate.sightline(L, B, other)
    assert plain(quick[1]) == plain(kept) and plain(exact[1]) == plain(fresh)
    assert plain(exact[0]) == plain(quick[0])
    key = "source_density_per_arcmin2"
    assert quick[1].sources[key] == quick[0].sources[key] != exact[1].sources[key]
    assert any("source stars are still" in w for w in quick[1].warnings) and quick[1].warnings != exact[1].warnings
    # what the sources change is small beside what the masses change
    quick, exact = plain(quick[1])["all"]["rate"], plain(exact[1])["all"]["rate"]
    assert quick == pytest.approx(exact, rel=0.03) and quick != exact
    # a group that agrees on its stars is integrated with them
    alone = forecasts_under(L, B, [base, other.replace(sources="limit:I=20")])[1]
    assert plain(alone) == plain(lensrate.sightline(L, B, other.replace(sources="limit:I=20")))


def test_threads_and_order_change_nothing():
    scenarios = [PLAIN, *(PLAIN.replace(change=bar(a)["change"]) for a in (20, 30)), PLAIN.replace(u_0_limit=0.5)]
    shares = []
    one = forecasts_under(L, B, scenarios, plain, progress=shares.append)
    assert one == forecasts_under(L, B, scenarios, plain, jobs=2)
    assert shares[-1] == 1.0 and shares == sorted(shares) and one[3]["all"]["rate"] == 0.5 * one[0]["all"]["rate"]
    assert forecasts_under(L, B, []) == []
    # of other processes only what is returned comes back
    assert one == forecasts_under(L, B, scenarios, plain, executor=Posted())


def test_sources_seen_at_peak_are_weighed_for_their_u_0_limit():
    wide = DEFAULT.replace(kicks="none", sources="peak:I=19")
    narrow = wide.replace(u_0_limit=0.1)
    many, few = forecasts_under(L, B, [wide, narrow])
    alone = lensrate.sightline(L, B, narrow)
    assert plain(few) == plain(alone) and few.sources == alone.sources
    # the fainter stars that only a near passage brings up are farther away
    assert few.sources["mean_distance_kpc"] > many.sources["mean_distance_kpc"] + 0.1
    with pytest.raises(InputError, match="u_0_limit 0.1 given.*run a new sightline"):
        many.reforecast(u_0_limit=0.1)
    assert plain(many.reforecast(u_0_limit=1.0)) == plain(many)
    assert integral_key(PLAIN) == integral_key(PLAIN.replace(u_0_limit=0.1))


def test_weights_give_mean_and_deviation_of_independent_axes():
    """Of a sum of two independent terms, means and variances add."""
    table = {
        "kicks": {"base_weight": 0.5, "alternatives": [{"kicks": "hobbs2005", "weight": 0.3},
                                                       {"kicks": "verbunt2017", "weight": 0.2}]},
        "ifmr": {"alternatives": [{"ifmr": "raithel2018", "weight": 0.25}, {"ifmr": "default", "weight": 0.6},
                                  {"ifmr": "gould2000", "weight": 0.15}]},
    }  # fmt: skip
    result = spread(scores, Family.from_dict({"axis": table}), combinations=True)
    kick, mass, both = (result.weighted("score")[k] for k in ("kicks", "ifmr", "combinations"))
    assert kick.mean == pytest.approx(10 + 0.5 * 1 + 0.3 * 2.5 + 0.2 * 0.5) and kick.weights["base"] == 0.5
    # the alternative that is the base's own gives the base its weight
    assert mass.mean == pytest.approx(1 + 0.6 * 10 + 0.25 * 12 + 0.15 * 7) and mass.weights["base"] == 0.6
    assert both.mean == pytest.approx(kick.mean + mass.mean - 11) and both.sd == pytest.approx(
        math.hypot(kick.sd, mass.sd)
    )
    assert sum(result.combined_weights) == pytest.approx(1) and result.combined["all", "score"].size == 9
    assert "weighted" in dump_json(result.to_dict())
    # one axis without weights: no mean over combinations
    table["ifmr"]["alternatives"] = [{"ifmr": "raithel2018"}]
    half = spread(scores, Family.from_dict({"axis": table}), combinations=True)
    assert list(half.weighted("score")) == ["kicks"]
    assert spread(scores, family(**TWO)).weighted("score") == {}


def test_alternatives_that_do_not_fit_leave_their_weight_to_the_others():
    rows = [
        {"kicks": "hobbs2005", "weight": 0.2},
        {"kicks": "verbunt2017", "weight": 0.2},
        {"name": "bar", "when": {"galaxy": "griest*"}, "kicks": "none", "weight": 0.4},
    ]
    here = Family.from_dict({"axis": {"kicks": {"base_weight": 0.2, "alternatives": rows}}}).for_base(DEFAULT)
    assert {a.name: a.weight for a in here.axes[0].alternatives} == pytest.approx(
        {"hobbs2005": 0.4, "verbunt2017": 0.4}
    )
    assert here.axes[0].base_weight == 0.2 and here.for_base(DEFAULT).hash == here.hash
    with pytest.raises(InputError, match="no alternative with a weight"):
        Family.from_dict({"axis": {"a": {"alternatives": [{**rows[2], "weight": 1.0}]}}}).for_base(DEFAULT)


def test_the_hook_takes_anything_that_a_scenario_decides():
    asked = []

    def forecast(scenarios):
        asked.append(len(scenarios))
        return [
            Outcome(score(s), (f"kicked at {100 + i} km/s",) if s.kicks == "hobbs2005" else ("said of all",))
            for i, s in enumerate(scenarios)
        ]

    result = spread(forecast, family(**TWO), combinations=True, units={"score": "d"})
    # what a combination repeats is asked once
    assert asked == [3 * 2] and len(result.combined_labels) == 6
    assert result.to_table()["score"].unit == u.day
    assert list(result.moves("score")) == ["ifmr", "kicks"] and result.moves("mass")["kicks"] == 0
    assert result.range("score") == (11.0, 10.5, 13.0, "kicks: verbunt2017", "ifmr: raithel2018")
    assert result.combined_range("score").high_by == "kicks: hobbs2005; ifmr: raithel2018"
    # a warning stands once, with the alternatives that have it
    assert sorted(result.warnings) == ["kicked at 101 km/s (under kicks: hobbs2005)", "said of all"]
    with pytest.raises(InputError, match="results for"):
        spread(lambda s: scores(s)[1:], family(**TWO))
    with pytest.raises(InputError, match="'kicks: hobbs2005' gives other"):
        spread(lambda s: [score(s[0]), *({"all": {"other": 1.0}} for _ in s[1:])], family(**TWO))


def test_numbers_that_vanish_or_are_undefined():
    def forecast(scenarios):
        kinds = {"igoshev2020": (0.0, math.nan), "hobbs2005": (1.0, 3.0), "verbunt2017": (0.0, math.nan)}
        return [{"black_hole": dict(zip(("rate", "median_t_E"), kinds[s.kicks]))} for s in scenarios]

    result = spread(forecast, family(kicks=TWO["kicks"]))
    assert result.moves("rate", "black_hole") == {"kicks": math.inf}
    found = result.range("median_t_E", "black_hole")
    assert math.isnan(found.base) and (found.low, found.high) == (3.0, 3.0)
    text = dump_json(result.to_dict())
    assert "NaN" not in text and "Infinity" not in text
    assert isinstance(spread_overview(result), Figure)


def test_results_know_how_they_were_made(kicked):
    table, ranges = kicked.to_table(), kicked.to_table("range")
    assert len(table) == len(kicked.rows) * 6 and table["rate"].unit == 1 / u.yr and table["median_t_E"].unit == u.day
    assert len(ranges) == 6 * 5 and np.all(ranges["low"] <= ranges["base"])
    assert np.all(ranges["combined_high"] >= ranges["high"])
    for meta in (table.meta, ranges.meta, kicked.meta()):
        kept = {k: v for k, v in meta["family"].items() if k not in ("hash", "left_out")}
        assert meta["scenario_hash"] == kicked.base.hash and "igoshev2020" in meta["scenario_text"]
        assert Family.from_dict(kept).hash == meta["family"]["hash"]
        assert "distance:8" in meta["header"] and meta["frame"] == "heliocentric"
        assert any("Hobbs" in r for r in meta["references"])
    frame = kicked.to_pandas()
    assert frame[(frame.axis == "base") & (frame.lens == "all")].rate.item() == kicked.rows[0].values["all"]["rate"]
    assert "neutron_star" in kicked._repr_html_() and kicked.base.hash in repr(kicked)


def test_pictures_show_the_widest_axis_on_top(kicked):
    with matplotlib.rc_context({"figure.max_open_warning": 0}):
        figure = Figure()
        ax = kicked.plot(ax=figure.add_subplot(), number="share_of_events", lens="black_hole")
    words = [t.get_text() for t in ax.get_yticklabels()]
    assert words == ["holes", "kicks", "all combinations"] and ax.yaxis_inverted()
    assert "%" in ax.get_xlabel() and "black holes" in ax.get_xlabel()
    shares = [100 * x for x in kicked.values("share_of_events", "black_hole").values()]
    low, high = ax.get_xlim()
    assert low < min(shares) and max(shares) < high
    assert len(spread_overview(kicked).axes) == 4
    # three decades: every tick says a number of its own
    wide = spread(lambda rows: [{"all": {"share_of_events": 4e-5 * 20.0**i}} for i in range(len(rows))], family(**TWO))
    ax = wide.plot(ax=Figure().add_subplot(), number="share_of_events")
    ax.figure.draw_without_rendering()
    shown = [t.get_text() for t in ax.get_xticklabels()]
    assert ax.get_xscale() == "log" and len(shown) > 2
    assert [float(t) for t in shown] == pytest.approx(ax.get_xticks())
    for wrong in ({"number": "rates"}, {"lens": "neutron_stars"}):
        with pytest.raises(InputError, match="did you mean"):
            kicked.plot(ax=ax, **wrong)


@pytest.mark.parametrize("name", names("families"))
def test_shipped_families_fit_every_shipped_scenario_and_say_their_sources(name):
    shipped = Family.read(name)
    assert shipped.title and shipped.references
    assert all(a.source for axis in shipped.axes for a in axis.alternatives)
    for base in map(Scenario.read, names("scenarios")):
        labels = [label for label, _ in shipped.one_at_a_time(base)]
        assert len(labels) == len(set(labels)) > 5 and labels[0] == "base"
    assert Family.from_dict(shipped.to_dict()).hash == shipped.hash


def test_the_default_family_is_complete_and_cheap():
    shipped = Family.read()
    law = {a.changes["kicks"] for axis in shipped.axes if axis.name == "kicks" for a in axis.alternatives}
    assert law == set(names("kicks"))
    assert shipped.left_out(DEFAULT) == []
    assert set(shipped.left_out(Scenario.read("griest1991"))) >= {"bar_mass", "bar_angle"}
    assert shipped.left_out(DEFAULT.replace(sources="clump")) == ["source_limit"]
    singles, every = shipped.cases(DEFAULT), shipped.cases(DEFAULT, combine=True)
    # integrals: the base, two each of bar mass, bar angle, Sun, source limit, and the bulge's own mass function
    assert len({integral_key(c.scenario) for c in singles}) == 10
    assert len({integral_key(c.scenario) for c in singles[:8]}) == 1
    # base and kicks, two kinds of kicks; then three remnant masses and four mass functions to be exact
    assert len({integral_key(c.scenario, exact=True) for c in singles[:16]}) == 1 + 3 + 4
    assert len(every) == 7 * 3 * 4 * 6 * 3 * 3 and len({c.choices for c in every}) == len(every)
    single = {c.choices for c in singles if not c.choices or c.choices[0][0] not in ("sun", "source_limit")}
    assert single <= {c.choices for c in every}
    only = shipped.only(["sun", "kicks"])
    assert [a.name for a in only.axes] == ["sun", "kicks"] and len(only.cases(DEFAULT, combine=True)) == 3 * 7


def test_changes_are_laid_over_the_base():
    mine = PLAIN.replace(change={"bulge": {"density": {"mass": 1.2e10}}}, extinction={"I": 1.0})
    both = family(angle=[bar(20)], dust=[{"name": "more", "extinction": {"V": 2.0}}])
    scenario = both.cases(mine, combine=True)[-1].scenario
    assert scenario.change == {"bulge": {"density": {"mass": 1.2e10, "angle": 20.0}}}
    assert scenario.extinction == {"I": 1.0, "V": 2.0} and mine.extinction == {"I": 1.0}


def test_a_users_file_names_files_beside_itself(tmp_path, monkeypatch):
    (tmp_path / "mine.toml").write_text(
        'title = "mine"\n[axis.imf]\nalternatives = [{ name = "my own", imf = "steep.toml" }]\n'
    )
    (tmp_path / "steep.toml").write_text(
        'kind = "power"\nreference = "ours"\nbreaks = {value = [0.08, 100.0], unit = "Msun"}\n'
        'slopes = {value = [2.5], unit = ""}\n'
    )
    monkeypatch.chdir("/")
    mine = Family.read(tmp_path / "mine.toml")
    assert mine.name == "mine"
    assert [s.imf for _, s in mine.one_at_a_time(PLAIN)] == ["", str(tmp_path / "steep.toml")]


WRONG = [
    ({"axes": {}}, "did you mean 'axis'"),
    ({"axis": []}, "must be a table"),
    ({"axis": {"kicks": {"alternative": []}}}, "did you mean 'alternatives'"),
    ({"axis": {"kicks": {"alternatives": [{"kick": "hobbs2005"}]}}}, "did you mean 'kicks'"),
    ({"axis": {"kicks": {"alternatives": [{"kicks": "hobbs2005", "wieght": 1.0}]}}}, "did you mean 'weight'"),
    ({"axis": {"kicks": {"alternatives": [{"source": "nobody"}]}}}, "changes nothing"),
    ({"axis": {"bar": {"alternatives": [{"change": {"bulge": {}}}]}}}, "needs a name"),
    ({"axis": {"a": {"alternatives": [{"kicks": "none"}, {"kicks": "none"}]}}}, "two alternatives are named 'none'"),
    ({"axis": {"a": {"combine": 1}}}, "combine: 1 given, must be true or false"),
    ({"axis": {"a": {"when": {"source": "clump"}}}}, "did you mean 'sources'"),
    ({"axis": {"a": {"alternatives": [{"kicks": "none"}]}, "b": {"alternatives": [{"kicks": "hobbs2005"}]}}},
     "axes a and b both set kicks"),
    ({"axis": {"a": {"alternatives": [{"kicks": "none", "weight": 0.5}]}}}, "sum to 0.5"),
    ({"axis": {"a": {"base_weight": 0.7, "alternatives": [{"kicks": "none", "weight": 0.5}]}}}, "sum to 1.2"),
    ({"axis": {"a": {"alternatives": [{"kicks": "none", "weight": 1.0}, {"kicks": "hobbs2005"}]}}}, "has no weight"),
    ({"axis": {"a": {"base_weight": 1.5, "alternatives": [{"kicks": "none", "weight": -0.5}]}}}, "between 0 and 1"),
    ({"axis": {"a": {"alternatives": [{"kicks": "none", "weight": float("nan")}]}}}, "between 0 and 1"),
    ({"axis": {"a": {"alternatives": ["none"]}}}, "must be a table"),
]  # fmt: skip


@pytest.mark.parametrize("table, word", WRONG)
def test_bad_families_name_the_key(table, word):
    with pytest.raises(InputError, match=word):
        Family.from_dict(table)


def test_alternatives_that_make_no_scenario_are_named_before_any_work():
    def never(scenarios):
        raise AssertionError("asked to forecast")

    for changes, words in (
        ({"kicks": "hobs2005"}, ("axis a, 'x'", "did you mean 'hobbs2005'")),
        ({"change": {"bulge": {"density": {"angel": 3.0}}}}, ("axis a, 'x'", "did you mean 'angle'")),
        ({"change": {"buldge": {"imf": "kroupa2001"}}}, ("axis a, 'x'", "did you mean 'bulge'")),
    ):
        with pytest.raises(InputError) as caught:
            spread(never, family(a=[{"name": "x", **changes}]), PLAIN)
        assert all(w in str(caught.value) for w in words)
    many = [Axis(f"a{i}", tuple(Alternative(f"{k}", {"u_0_limit": 0.1 + k / 99}) for k in range(9))) for i in range(5)]
    with pytest.raises(InputError, match="100000 combinations.*a0 10.*--axis"):
        spread(never, Family("big", tuple(many)), PLAIN, combinations=True)
    with pytest.raises(InputError, match="did you mean 'kicks'"):
        spread(never, "default", PLAIN, axes=["kick"])
    with pytest.raises(InputError, match="did you mean 'default'"):
        spread(never, "defalt", PLAIN)


def test_a_range_of_timescales_is_kept_to():
    forecast = SightlineForecast(L, B, (20, 100) * u.day)
    inside, whole = forecast([PLAIN])[0], SightlineForecast(L, B)([PLAIN])[0]
    assert inside.about["t_E_range_d"] == [20.0, 100.0] and "20 < t_E < 100 d" in inside.about["header"]
    assert 0 < inside.values["all"]["rate"] < whole.values["all"]["rate"] and whole.about["t_E_range_d"] is None
