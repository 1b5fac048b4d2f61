"""``lensrate spread`` as a user meets it: table, JSON, files, picture, complaints."""

import json

import pytest
from astropy.table import Table
from mocks import survey
from test_cli import run

FAST = ["--sources", "distance:8", "--kicks", "none", "1.0", "-3.9"]
FAMILY = """title = "two bars (invented)"
references = ["nobody"]
[axis.bar_angle]
label = "angle of the bar"
alternatives = [
    { name = "20 deg", change = { bulge = { density = { angle = 20.0 } } }, source = "our choice", weight = 0.25 },
    { name = "40 deg", change = { bulge = { density = { angle = 40.0 } } }, source = "our choice", weight = 0.25 },
]
base_weight = 0.5
[axis.u_0]
alternatives = [{ u_0_limit = 0.5, source = "our choice" }]
[axis.limit]
when = { sources = "limit:*" }
alternatives = [{ sources = "limit:I=20", source = "our choice" }]
"""


@pytest.fixture(scope="module")
def family(tmp_path_factory):
    path = tmp_path_factory.mktemp("family") / "bars.toml"
    path.write_text(FAMILY)
    return str(path)


@pytest.fixture(scope="module")
def result(family):
    code, out, err = run("spread", *FAST, "--family", family, "--combinations", "--json", "-q")
    assert code == 0 and err == "", err
    return json.loads(out)


def test_json(result):
    code, out, _ = run("sightline", *FAST, "--json")
    one = json.loads(out)
    assert code == 0
    for name, lens in result["base"]["lenses"].items():
        assert {k: one["lenses"][name][k] for k in lens} == lens
        assert len(lens) == 5
    same = ("l_deg", "b_deg", "scenario", "scenario_hash", "frame", "u_0_limit", "t_E_range_d", "sources", "version")
    assert {k: result[k] for k in same} == {k: one[k] for k in same}
    assert result["family"]["name"] == "bars" and result["family"]["left_out"] == ["limit"]
    assert [(a["axis"], a["alternative"]) for a in result["alternatives"]] == [
        ("bar_angle", "20 deg"), ("bar_angle", "40 deg"), ("u_0", "0.5")
    ]  # fmt: skip
    rates = [a["lenses"]["all"]["rate_per_star_per_yr"] for a in result["alternatives"]]
    found = result["ranges"]["all"]["rate_per_star_per_yr"]
    assert rates[0] > rates[1] and rates[2] == pytest.approx(0.5 * found["base"])
    assert (found["low"], found["high"]) == (rates[2], rates[0]) and next(iter(found["moved_by"])) == "u_0"
    both = result["combinations"]
    assert both["count"] == 6 and both["ranges"]["all"]["rate_per_star_per_yr"]["low"] == pytest.approx(0.5 * rates[1])
    mean = result["weighted"]["all"]["rate_per_star_per_yr"]["bar_angle"]
    assert mean["mean"] == pytest.approx(0.5 * found["base"] + 0.25 * (rates[0] + rates[1]))
    assert mean["weights"] == {"base": 0.5, "20 deg": 0.25, "40 deg": 0.25}
    assert any("nobody" in r for r in result["references"]) and any("Wegg" in r for r in result["references"])


@pytest.mark.parametrize(
    "more, words",
    [
        ([], ("tau [1e-6]", "NS share", "20 deg", "angle of the bar (bar_angle)", "one at a time")),
        (["--number", "rate"], ("number: rate [1e-6/yr]", "WD", "NS", "BH")),
        (["--lens", "neutron_star"], ("lenses: neutron stars", "mean t_E [d]", "share")),
        (["--number", "share_of_events", "--lens", "neutron_star", "--combinations"],
         ("/ base", "our choice", "6 combinations", "share of neutron stars", "standard deviation", "base 0.5")),
    ],
)  # fmt: skip
def test_people_get_a_table_with_its_conditions(family, result, more, words):
    code, out, err = run("spread", *FAST, "--family", family, *more)
    assert code == 0, err
    for word in (*words, "distance:8", "u_0 < 1", "all t_E", "heliocentric", result["scenario_hash"], "bars", "ranges",
                 "moved most by"):  # fmt: skip
        assert word in out, word
    assert max(map(len, out.splitlines() + err.splitlines())) <= 100
    assert "left out, since they do not fit the base scenario: limit" in " ".join(err.split())


def test_files_and_picture(family, result, tmp_path):
    axis = ["--axis", "u_0", "-q"]
    args = ["spread", *FAST, "--family", family, *axis]
    assert run(*args, "--save", tmp_path / "a.ecsv", "--plot", tmp_path / "a.png")[0] == 0
    assert (
        run(*args, "--save", tmp_path / "r.csv", "--by", "range", "--plot", tmp_path / "b.svg", "--lens", "star")[0]
        == 0
    )
    table = Table.read(tmp_path / "a.ecsv")
    assert set(table["axis"]) == {"base", "u_0"} and table.meta["scenario_hash"] == result["scenario_hash"]
    assert table.meta["family"]["name"] == "bars"
    rates = table["rate"][(table["lens"] == "all")]
    assert rates[1] == 0.5 * rates[0]
    assert "moved_most_by" in (tmp_path / "r.csv").read_text()
    for name in ("a.png", "b.svg"):
        assert b"scenario_hash" in (tmp_path / name).read_bytes()
    assert run(*args, "--save", tmp_path / "a.ecsv")[0] == 2


@pytest.mark.parametrize(
    "args, word",
    [
        (["--family", "defalt"], "did you mean 'default'"),
        (["--family", "nowhere.toml"], "no such file"),
        (["--axis", "kick"], "did you mean 'kicks'"),
        (["--number", "rates"], "share_of_events"),
        (["--lens", "neutronstar"], "did you mean 'neutron_star'"),
        (["--by", "range"], "--save"),
        (["--plot", "a.gif"], ".png"),
        (["--save", "a.xls"], ".ecsv"),
        (["--kicks", "hobs2005"], "hobbs2005"),
        (["4"], "unexpected extra argument"),
    ],
)
def test_bad_input_is_one_clear_line(args, word, tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    code, out, err = run("spread", "1", "-3", *args)
    assert code == 2 and out == "" and word in err and "Traceback" not in err
    assert not list(tmp_path.iterdir())
    assert run("spread", "1")[0] == 2


@pytest.mark.parametrize(
    "place, option, word, known",
    [
        (["1", "-3.9"], "--number", "events", "mean_t_E, median_t_E, optical_depth, rate, share_of_events"),
        (["--campaign", "small.toml"], "--number", "rate", "events, share_of_events"),
        (["--campaign", "small.toml"], "--number", "scaled_to_observed", "events, share_of_events"),
        (["--campaign", "small.toml"], "--lens", "neutronstar", "did you mean 'neutron_star'"),
    ],
)
def test_numbers_that_there_will_not_be_are_refused_before_the_work(place, option, word, known, tmp_path, monkeypatch):
    from lensrate.surveys import campaign_spread
    from lensrate.surveys import spread as module

    survey(tmp_path)
    (tmp_path / "survey.toml").rename(tmp_path / "small.toml")
    monkeypatch.chdir(tmp_path)
    for where, name in ((module, "sightline_spread"), (campaign_spread, "campaign_spread")):
        monkeypatch.setattr(where, name, lambda *_, **__: pytest.fail("the work began"))
    code, out, err = run("spread", *place, option, word)
    assert code == 2 and out == "" and f"'{word}' is not known" in err and known in " ".join(err.split())
