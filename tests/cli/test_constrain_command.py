"""``lensrate constrain`` as a user meets it: tables, JSON, files, pictures, a plan's sentence, complaints."""

import json

import pytest
from astropy.table import Table
from mocks import FIELDS, draw_table, survey
from test_cli import run

from lensrate import Scenario
from lensrate.surveys.yields import campaign

FAST = ["--kicks", "none", "--bh-kicks", "none"]


@pytest.fixture(scope="module")
def files(tmp_path_factory):
    folder = tmp_path_factory.mktemp("constrain")
    field = {**FIELDS[0], "area_deg2": 1.0}
    del field["radius_deg"]
    made = survey(folder, [field])
    draw_table(campaign(made, Scenario.read("default").replace(kicks="none", bh_kicks="none")), 3).write(
        folder / "sample.ecsv"
    )
    return folder


def test_json_and_files(files):
    args = ["constrain", files / "sample.ecsv", "--campaign", files / "survey.toml", *FAST, "-p", "neutron_stars", "-p",
            "black_holes", "--points", 7, "-q"]  # fmt: skip
    code, out, err = run(*args, "--json", "--save", files / "a.ecsv", "--samples", files / "s.csv", "--plot",
                         files / "a.png")  # fmt: skip
    assert code == 0 and err == "", err
    made = json.loads(out)
    assert set(made["parameters"]) == {"neutron_stars", "black_holes"} and made["sample_invented"]
    row = made["parameters"]["neutron_stars"]
    assert row["p2.5"] < row["p50"] < row["p97.5"] and "not constrained" in row["verdict"]
    assert set(made["nuisances"]["free"]) == {"rate", "shift", "stretch", "slope"}
    table = Table.read(files / "a.ecsv")
    assert table.meta["scenario_hash"] == made["scenario_hash"] and len(table) == 2
    assert len((files / "s.csv").read_text().splitlines()) > 10_000
    assert b"scenario_hash" in (files / "a.png").read_bytes()
    assert run(*args, "--json")[1] == out


def test_people_and_proposals_get_sentences(files):
    code, out, err = run("constrain", files / "sample.ecsv", "--campaign", files / "survey.toml", *FAST, "-p",
                         "black_holes", "--points", 9, "--fix-nuisances")  # fmt: skip
    assert code == 0, err
    words = ("sample.ecsv (invented)", "black_holes", "shrinkage", "log-uniform:0.05,20", "nuisances", "limit:I=20")
    for word in words:
        assert word in out, word
    assert "held fixed" in " ".join(err.split())
    assert max(map(len, out.splitlines() + err.splitlines())) <= 100
    code, out, err = run("constrain", "--from", files / "survey.toml", *FAST, "-p", "black_holes", "--seasons", "4",
                         "--measured", "all=0.1")  # fmt: skip
    assert code == 0, err
    assert "after 4 seasons" in out and "measured masses" in out and "seasons for a factor 2" in out
    code, out, _ = run("constrain", "--from", files / "survey.toml", *FAST, "-p", "black_holes", "--json", "-q")
    made = json.loads(out)["parameters"]["black_holes"]
    assert code == 0 and made["sigma"] >= made["sigma_nuisances_fixed"] > 0 and "words" in made


@pytest.mark.parametrize(
    "args, word",
    [
        (["SAMPLE"], "--campaign FILE is needed"),
        ([], "give a SAMPLE, or --from"),
        (["SAMPLE", "--from", "marram"], "give a SAMPLE, or --from"),
        (["--from", "marram", "--plot", "a.png"], "--from goes with none"),
        (["SAMPLE", "--campaign", "marram", "-p", "kick_scal"], "did you mean 'kick_scale'"),
        (["SAMPLE", "--campaign", "marram", "--prior", "kick_scale=uniform:5,1"], "5 must be below 1"),
        (["SAMPLE", "--campaign", "marram", "--nuisance", "shif=0.1"], "did you mean 'shift'"),
        (["SAMPLE", "--campaign", "marram", "--nuisance", "shift=-1"], "a width from 0"),
        (["SAMPLE", "--campaign", "marram", "--selection", "mass:star=1.5"], "from 0 to 1"),
        (["--from", "marram", "--measured", "star=2"], "from 0 to 1"),
        (["--from", "marram", "--measured", "stars=0.2"], "did you mean 'star'"),
        (["SAMPLE", "--campaign", "marram", "--limit-class", "dark"], "go together"),
        (["SAMPLE", "--campaign", "marram", "--mocks", "3"], "--mocks has no effect here: it goes with --from"),
        (["SAMPLE", "--campaign", "marram", "--steps", "300"], "--steps has no effect here: up to three"),
        (["SAMPLE", "--campaign", "marram", "-p", "kick_bins", "--points", "9"], "--points has no effect here"),
        (["--from", "marram", "--listed", "mass"], "--listed has no effect here: it goes with a SAMPLE"),
        (["--from", "marram", "--points", "9"], "--points has no effect here: with --from it goes with --mocks"),
        (["SAMPLE", "--campaign", "marram", "--limit-class", "dark", "--masses", "1", "-p", "kick_scale"],
         "--parameter has no effect here"),
        (["SAMPLE", "--campaign", "marram", "--fix-nuisances", "--nuisance", "rate=0.1"], "--nuisance has no effect"),
        (["SAMPLE", "--campaign", "SURVEY", *FAST, "-p", "black_holes", "--axis", "imf"], "none is given"),
        (["SAMPLE", "--campaign", "marram", "--limit-class", "dark", "--masses", "1"], "no lens class of its own"),
        (["SAMPLE", "--campaign", "SURVEY", *FAST, "-p", "kick_scale"], "kick_scale: the forecast is unkicked"),
        (["SAMPLE", "--campaign", "SURVEY", *FAST, "-p", "black_holes", "--counts", "absolut"], "'absolute'"),
    ],
)
def test_bad_input_is_one_clear_line(files, args, word, monkeypatch, tmp_path):
    monkeypatch.chdir(tmp_path)
    places = {"SAMPLE": files / "sample.ecsv", "SURVEY": files / "survey.toml"}
    code, out, err = run("constrain", *(places.get(a, a) for a in args))
    assert code == 2 and out == "" and word in " ".join(err.split()) and "Traceback" not in err, err
    assert not list(tmp_path.iterdir())
