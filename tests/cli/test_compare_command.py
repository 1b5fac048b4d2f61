"""``lensrate compare`` as a user meets it: tables, JSON, files, picture, complaints."""

import json

import pytest
from astropy.table import Table
from mocks import FIELDS, draw_table, survey
from test_cli import run

from lensrate import Scenario
from lensrate.surveys.yields import campaign


@pytest.fixture(scope="module")
def files(tmp_path_factory):
    folder = tmp_path_factory.mktemp("compare")
    made = survey(folder, FIELDS[:1])
    table = draw_table(campaign(made, Scenario.read("default").replace(kicks="none")), 3, parallax=True)
    table.write(folder / "sample.ecsv")
    return folder


def test_json_and_files(files):
    args = ["compare", files / "sample.ecsv", "--campaign", files / "survey.toml", "--kicks", "none", "--simulations",
            50, "-q"]  # fmt: skip
    code, out, err = run(*args, "--json", "--save", files / "a.ecsv", "--by", "test", "--plot", files / "a.png")
    assert code == 0 and err == "", err
    made = json.loads(out)
    assert made["counts"] == "absolute" and made["invented"] and made["frame"] == "heliocentric"
    assert made["events"] == sum(b["observed"] for b in made["bins"])
    assert made["expected"]["all"] == pytest.approx(sum(v for k, v in made["expected"].items() if k != "all"))
    assert {"ks", "anderson_darling", "deviance", "pi_E_ks", "sky"} <= set(made["tests"])
    assert made["tail"]["absolute"] and made["optical_depth"]["largest_share"] < 1
    table = Table.read(files / "a.ecsv")
    assert list(table["test"]) == list(made["tests"]) and table.meta["scenario_hash"] == made["scenario_hash"]
    assert b"scenario_hash" in (files / "a.png").read_bytes()
    assert run(*args, "--json")[1] == out
    assert run(*args, "--save", files / "a.ecsv")[0] == 2


def test_people_get_tables_with_their_conditions(files):
    args = ["--kicks", "none", "--sources", "limit:I=20", "--simulations", 10]
    code, out, err = run("compare", files / "sample.ecsv", *args)
    assert code == 0, err
    for word in ("sample.ecsv (invented)", "limit:I=20", "counts: shape", "t_E [d]", "Anderson-Darling", "heliocentric",
                 "binomial among the events seen", "kicks none", "seed 1"):  # fmt: skip
        assert word in out, word
    assert "shapes only" in " ".join(err.split())
    assert max(map(len, out.splitlines() + err.splitlines())) <= 100


@pytest.mark.parametrize(
    "args, word",
    [
        (["--counts", "absolut"], "did you mean 'absolute'"),
        (["--counts", "absolute"], "--campaign"),
        (["--campaign", "nowhere.toml"], "no such file"),
        (["--campaign", "marram", "--sources", "clump"], "no effect with --campaign"),
        (["--kicks", "hobs2005"], "hobbs2005"),
        (["--tail", "-5", "--simulations", "0"], "tail: -5 d"),
        (["--frame", "barycentric"], "known: geocentric, heliocentric"),
        (["--efficiency", "none.ecsv"], "no file"),
        (["--by", "field"], "--save"),
        (["--plot", "a.gif"], ".png"),
    ],
)
def test_bad_input_is_one_clear_line(files, args, word, monkeypatch, tmp_path):
    monkeypatch.chdir(tmp_path)
    sample = files / "sample.ecsv"
    if "--frame" in args:
        table = Table.read(sample)
        del table.meta["frame"]
        sample = tmp_path / "s.ecsv"
        table.write(sample)
    code, out, err = run("compare", sample, "--kicks", "none", *args)
    assert code == 2 and out == "" and word in err and "Traceback" not in err, err
    assert run("compare", tmp_path / "no.ecsv")[0] == 2
