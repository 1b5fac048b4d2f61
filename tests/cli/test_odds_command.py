"""``lensrate odds``: a typed event, a table, a file of samples, and what it refuses."""

import json
import re

import numpy as np
import pytest
from astropy.table import QTable, Table
from click.testing import CliRunner

from lensrate.cli.odds import odds
from lensrate.datafiles import data_folder
from lensrate.errors import InputError
from lensrate.io import PICTURES

run = CliRunner().invoke
KEYS = {"event", "frame", "probability", "prior", "odds_against_star", "outlier_weight", "most_likely", "mass_msun",
        "distance_kpc", "by_class", "solutions", "effective_samples"}  # fmt: skip
CLASSES = ["star", "brown_dwarf", "white_dwarf", "neutron_star", "black_hole"]
TYPED = ["--t-E", "120", "--pi-E", "0.08", "--at", "1.2", "-2.9", "--kicks", "none"]


def test_typed_event():
    result = run(odds, [*TYPED, "--json"])
    assert result.exit_code == 0, result.output
    (row,) = json.loads(result.stdout)
    assert KEYS <= set(row) and list(row["probability"]) == CLASSES and list(row["by_class"]) == CLASSES
    assert sum(row["probability"].values()) == pytest.approx(1.0, abs=1e-5)
    assert row["odds_against_star"]["star"] == 1.0 and row["frame"] == "heliocentric"
    assert set(row["mass_msun"]) == {"p16", "p50", "p84"} == set(row["by_class"]["star"]["distance_kpc"])
    assert "theta_E is not measured" in row["rests_on"]
    assert "errors assumed: 5% of t_E, 10% of pi_E" in result.stderr
    assert set(row["outlier_floors"]) == {"0.1", "10"}
    text = run(odds, TYPED)
    assert "ordinary stars" in text.stdout and max(map(len, text.stdout.splitlines())) <= 100
    sure = run(odds, [*TYPED, "--theta-E", "0.5", "--theta-E-err", "0.01", "--outlier", "0"])
    assert "< 1e-6" in sure.stdout


def test_sample_of_the_survey(tmp_path):
    path = str(data_folder() / "samples" / "marram_events.ecsv")
    save, picture = tmp_path / "o.ecsv", tmp_path / "o.png"
    args = [path, "--kicks", "none", "--tolerance", "0.2", "--save", str(save), "--plot", str(picture)]
    result = run(odds, args)
    assert result.exit_code == 0, result.output
    assert "13 events (invented)" in " ".join(result.stderr.split()) and "(invented)" in result.stdout
    assert max(map(len, result.stdout.splitlines())) <= 100
    table = QTable.read(save)
    assert len(table) == 13 and table.meta["invented"] and table.meta["sample"] == "marram_events.ecsv"
    assert picture.stat().st_size > 10_000 and picture.suffix in PICTURES


def test_kept_rates_are_taken_and_damage_is_told(tmp_path):
    args = [*TYPED, "--json", "--keep", str(tmp_path / "rates")]
    first, plain = run(odds, args), run(odds, [*TYPED, "--json"])
    assert first.exit_code == 0 and json.loads(first.stdout) == json.loads(plain.stdout)
    (file,) = (tmp_path / "rates").iterdir()
    file.write_bytes(file.read_bytes()[:-7])
    from lensrate.events import odds as module

    module._held.clear()
    told = run(odds, args)
    assert told.exit_code == 0 and "made anew" in " ".join(told.stderr.split())
    rows = [json.loads(x.stdout)[0]["probability"] for x in (first, told)]
    assert rows[0] == rows[1]


def test_spread_over_a_family(tmp_path):
    """The range of each class holds the scenario's own answer and those of every member, and reaches both its ends."""
    family = tmp_path / "mine.toml"
    family.write_text(
        'title = "mine"\nreferences = ["our choice"]\n[axis.sources]\nlabel = "sources"\nalternatives = [\n'
        '{ sources = "limit:I=19", source = "our choice" }, { sources = "distance:8", source = "our choice" } ]\n'
    )
    result = run(odds, [*TYPED, "--spread", str(family), "--json"])
    assert result.exit_code == 0, result.output
    (row,) = json.loads(result.stdout)
    assert list(row["range"]) == CLASSES and len(row["made"]["spread"]) == 2
    members = [[], ["--sources", "limit:I=19"], ["--sources", "distance:8"]]
    alone = [json.loads(run(odds, [*TYPED, *more, "--json"]).stdout)[0]["probability"] for more in members]
    for name, (low, high) in row["range"].items():
        every = [p[name] for p in alone]
        assert low == pytest.approx(min(every), rel=1e-9, abs=1e-6) and high == pytest.approx(max(every), rel=1e-9)
        assert high > low
    assert "over the family" in run(odds, [*TYPED, "--spread", str(family)]).stdout
    # of a sample: a table of its own, and columns of the file
    sample, save = tmp_path / "two.csv", tmp_path / "o.ecsv"
    sample.write_text("event,l,b,t_E,t_E_err,pi_E,pi_E_err\nA,1.2,-2.9,120,6,0.08,0.008\nB,1.2,-2.9,20,1,,\n")
    args = [str(sample), "--spread", str(family), "--kicks", "none", "--save", str(save)]
    lines = run(odds, args).stdout.splitlines()
    assert max(map(len, lines)) <= 100 and "2 others" in " ".join(lines)
    of_a = next(line for line in lines[lines.index("") + 4 :] if line.startswith("A "))
    low, high = row["range"]["star"]
    assert f"{low:.4f}-{high:.4f}" in of_a
    assert QTable.read(save)["P_star_high"][0] == pytest.approx(high, rel=1e-9)


def test_samples_of_a_fit(tmp_path):
    rng = np.random.default_rng(2)
    t = Table({"t_E": rng.normal(120, 4, 800), "pi_E": np.abs(rng.normal(0.08, 0.01, 800))})
    t.meta.update({"l": 1.2, "b": -2.9, "prior": "uniform", "frame": "heliocentric", "event": "M-1"})
    t.write(tmp_path / "s.ecsv")
    result = run(odds, [str(tmp_path / "s.ecsv"), "--kicks", "none", "--json"])
    assert result.exit_code == 0, result.output
    (row,) = json.loads(result.stdout)
    assert row["event"] == "M-1" and row["effective_samples"] > 300


@pytest.mark.parametrize(
    "args, words",
    [
        ([], "either SAMPLE or one event"),
        (["x.csv", "--t-E", "3"], "either SAMPLE or one event"),
        (["x.csv", "--pi-E", "3"], "--pi-E belongs to an event typed"),
        (["--t-E", "3"], "--at L B is needed"),
        (["--t-E", "3", "--at", "1", "-2", "--pi-E-err", "1"], "--pi-E-err without --pi-E"),
        (["x.csv", "--icrs"], "--icrs has no effect here: it goes with --at"),
        (["--t-E", "3", "--at", "1", "-2", "--skip-bad"], "--skip-bad has no effect here"),
        (["x.csv", "--u-0-limit", "0.5"], "--u-0-limit has no effect here"),
        (["x.csv", "--rank", "all", "--seed", "-1"], "-1 is not in the range x>=0"),
        (["x.csv", "--seed", "3"], "--seed has no effect here: it goes with --rank"),
    ],
)
def test_usage(args, words):
    result = run(odds, args)
    assert result.exit_code == 2 and words in " ".join(result.stderr.split())


@pytest.mark.parametrize(
    "args, words",
    [
        (["--t-E", "-3", "--at", "1", "-2"], "t_E: -3 d given, must be above 0"),
        (["--t-E", "3", "--at", "1", "-92"], "b: -92 deg given"),
        (["--t-E", "3", "--pi-EN", "0.1", "--at", "1", "-2"], "pi_EE: no value, but pi_EN has one"),
        (["--t-E", "3", "--at", "1", "-2", "--frame", "geocentric"], "no reference epoch"),
        (["--t-E", "3", "--at", "1", "-2", "--outlier", "2"], "outlier: 2 given"),
        (["nothing.csv"], "no file 'nothing.csv'"),
    ],
)
def test_wrong_input(args, words):
    result = run(odds, args)
    assert isinstance(result.exception, InputError) and words in str(result.exception)


@pytest.mark.parametrize(
    "question, module, name, wanted",
    [
        (["--rank", "all", "--hours", "3", "--as-of", "2031-06-15"], "followup", "follow_up", {"jobs": 2}),
        (["--kick"], "kick", "kick_posterior", {}),
    ],
)
def test_the_second_question_has_the_folder_and_the_threads(tmp_path, monkeypatch, question, module, name, wanted):
    given = {}

    def ask(*args, **kwargs):
        given.update(kwargs)
        raise InputError("asked")

    monkeypatch.setattr(f"lensrate.events.{module}.{name}", ask)
    result = run(odds, [*TYPED, *question, "--keep", str(tmp_path), "--jobs", "2", "--quiet"])
    assert str(result.exception) == "asked"
    assert {k: given[k] for k in ("keep", *wanted)} == {"keep": str(tmp_path), **wanted}


def test_a_night_planned_and_planned_again(tmp_path):
    """The whole command: table, plan under a budget, file, picture; the next night tells what changed."""
    running = Table.read(data_folder() / "samples" / "marram_running.ecsv")
    sample, kept, picture = (tmp_path / name for name in ("two.ecsv", "night.json", "night.png"))
    running[[str(e) in ("M31-126", "M31-140") for e in running["event"]]].write(sample)
    args = [str(sample), "--rank", "black_hole", "--facilities", "marram", "--kicks", "none", "--quiet"]
    args += ["--hours", "12", "--as-of", "2031-06-15", "--seed", "1"]
    first = run(odds, [*args, "--save", str(kept), "--plot", str(picture)])
    assert first.exit_code == 0, first.output
    lines = first.stdout.splitlines()
    assert "taken within 12 h" in first.stdout and max(map(len, lines)) <= 100
    for name in ("M31-126", "M31-140"):
        assert any(line.startswith(f"{name}: black hole") for line in lines)  # the reason in a line
    hours = re.search(r"in all ([\d.]+) h, ([\d.]+) bits", first.stdout)
    assert 0 < float(hours[1]) <= 12.0 and float(hours[2]) > 0
    assert picture.stat().st_size > 10_000
    later = run(odds, [*args[:-4], "--as-of", "2031-06-25", "--seed", "1", "--since", str(kept)])
    assert later.exit_code == 0 and "2031-06-25" in later.stdout
    # what changed since, in brackets behind each event's reason: in the first night all are new
    changed = r"\[(new|no change|P\(|best option|bits per hour)"
    said, text = (re.findall(changed, " ".join(out.stdout.split())) for out in (first, later))
    assert said == ["new"] * 2 and len(text) == 2 and "new" not in text
