"""Every output says how it was made: its scenario is read back from it, and run again gives the same numbers."""

import json
import shutil
import tomllib

import numpy as np
import pytest
from astropy.table import Table
from click.testing import CliRunner
from hypothesis import given, settings
from hypothesis import strategies as st

from lensrate.cli import main
from lensrate.errors import InputError
from lensrate.io import write_table
from lensrate.provenance import read_made
from lensrate.scenario import Scenario

TABLES = (".ecsv", ".csv", ".fits", ".vot", ".json")
PICTURES = (".png", ".pdf", ".svg")
NEEDED = {"version", "scenario", "scenario_hash", "scenario_text", "seed", "references", "warnings", "fields_sha256"}


def run(*args):
    """Run `main` in this process; returns exit code, stdout, stderr."""
    with CliRunner().isolation() as streams:
        try:
            main([str(a) for a in args])
            code = 0
        except SystemExit as done:
            code = done.code
        return code, streams[0].getvalue().decode(), streams[1].getvalue().decode()


@pytest.fixture(scope="module")
def assumptions(tmp_path_factory):
    """A scenario with a Galaxy file of its own, a changed number and a name that is hard to write down."""
    from lensrate.datafiles import data_folder

    folder = tmp_path_factory.mktemp("assumptions")
    shutil.copy(data_folder() / "galaxy" / "default.toml", folder / "ours.toml")
    path = folder / "mine.toml"
    path.write_text(
        'base = "default"\nname = "\\u00fcber \\"mine\\" \\u001b[31m \'x\' $\\\\frac{$"\n'
        'title = """two\n# lines   &"""\n'
        'galaxy = "ours.toml"\nkicks = "none"\nbh_kicks = "none"\nsources = "distance:8"\nu_0_limit = 0.7\n'
        "[change.sun]\nV = { value = 250.0, unit = \"km/s\", source = 'our choice' }\n",
        encoding="utf-8",
    )
    return path


def again(file, folder):
    """Write the scenario of a file into another folder and return its path and what the file says."""
    code, out, err = run("scenario", "--of", file)
    assert code == 0 and not err, err
    # nothing that a terminal would obey
    assert all(c.isprintable() or c == "\n" for c in out)
    target = folder / "elsewhere" / "again.toml"
    target.parent.mkdir(exist_ok=True)
    target.write_text(out, encoding="utf-8")
    code, out, err = run("scenario", "--of", file, "--json")
    made = json.loads(out)
    assert Scenario.read(target).hash == made["scenario_hash"]
    return target, made


def test_sightline_from_every_kind_of_file(assumptions, tmp_path):
    ask = ["sightline", "1", "-3.9", "-q"]
    code, first, err = run(*ask, "--scenario", assumptions, "--json")
    assert code == 0, err
    (tmp_path / "printed.txt").write_text(first, encoding="utf-8")
    files = [tmp_path / f"t{e}" for e in TABLES] + [tmp_path / f"p{e}" for e in PICTURES]
    for file in files:
        option = "--save" if file.suffix in TABLES else "--plot"
        assert run(*ask, "--scenario", assumptions, option, file)[0] == 0
    for file in [*files, tmp_path / "printed.txt"]:
        scenario, made = again(file, tmp_path)
        assert (NEEDED - {"seed"} <= set(made)) and (made["scenario_hash"] == read_made(files[0])["scenario_hash"])
        text = scenario.read_text(encoding="utf-8")
    assert 'galaxy = "' + str(assumptions.parent / "ours.toml") in text
    code, second, _ = run(*ask, "--scenario", scenario, "--json")
    assert code == 0 and json.loads(second) == json.loads(first)


SAMPLE = "event,l,b,t_E,t_E_err\nA,1.0,-3.0,20,2\nB,1.1,-3.1,35,3\nC,0.9,-2.9,12,1\n"


SLOW = [pytest.mark.slow]
TWO = ["skymap", "--l", "0", "1", "--b", "-4", "-3", "--step", "1"]
COMPARE = ["compare", "sample.csv", "--simulations", "9"]
CONSTRAIN = ["constrain", "sample.csv", "--campaign", "c.toml", "-p", "neutron_stars", "--points", "9"]
CAMPAIGN = """name = "C \u202e (invented)"
[[season]]
start = "2031-02-10"
end = "2031-10-25"
[[field]]
name = "M01"
l = 1.0
b = -2.9
radius_deg = 0.6
sources = "distance:8"
monitored_stars = 1.4e6
"""


@pytest.mark.parametrize(
    "ask, option, file",
    [
        pytest.param(["sightline", "--table", "rows.csv"], "--save", "x.ecsv"),
        pytest.param(["sightline", "--table", "rows.csv"], "--save", "x.json", marks=SLOW),
        pytest.param(TWO, "--save", "x.fits"),
        pytest.param(TWO, "--plot", "x.png", marks=SLOW),
        pytest.param(["skymap", "--fields", "rows.csv"], "--save", "x.fits", marks=SLOW),
        pytest.param(["events", "1", "-3", "--number", "40"], "--save", "x.fits"),
        pytest.param(["events", "1", "-3", "--number", "40", "--weighted"], "--plot", "x.svg", marks=SLOW),
        pytest.param(["census"], "--save", "x.vot"),
        pytest.param(["census"], "--plot", "x.pdf", marks=SLOW),
        pytest.param(["spread", "1", "-3.9", "--axis", "bh_kicks"], "--save", "x.csv"),
        pytest.param(["spread", "1", "-3.9", "--axis", "imf"], "--plot", "x.png", marks=SLOW),
        pytest.param(COMPARE, "--save", "x.ecsv"),
        pytest.param(COMPARE, "--plot", "x.pdf", marks=SLOW),
        pytest.param(["odds", "sample.csv"], "--save", "x.ecsv"),
        pytest.param(["odds", "sample.csv"], "--plot", "x.png", marks=SLOW),
        pytest.param(CONSTRAIN, "--save", "x.ecsv"),
        pytest.param(CONSTRAIN, "--plot", "x.pdf", marks=SLOW),
        pytest.param(CONSTRAIN, "--samples", "x.fits", marks=SLOW),
        pytest.param(["campaign", "c.toml", "--family", "none"], "--save", "x.fits"),
        pytest.param(["campaign", "c.toml", "--family", "none", "--events", "100"], "--plot", "x.svg", marks=SLOW),
    ],
    ids=lambda x: " ".join(x[:2]) if isinstance(x, list) else str(x),
)
def test_every_command_runs_again_to_the_same_numbers(ask, option, file, assumptions, tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    (tmp_path / "rows.csv").write_text("name,l,b\nA,1.0,-3.0\nB,2.0,-4.0\n")
    (tmp_path / "sample.csv").write_text(SAMPLE)
    (tmp_path / "c.toml").write_text(CAMPAIGN, encoding="utf-8")
    ask = [*ask, "-q"]
    code, first, err = run(*ask, "--scenario", assumptions, option, file, "--json")
    assert code == 0, err
    scenario, made = again(tmp_path / file, tmp_path)
    assert NEEDED <= set(made) and made["references"]
    (tmp_path / "printed.json").write_text(first, encoding="utf-8")
    assert read_made(tmp_path / "printed.json")["scenario_hash"] == made["scenario_hash"]
    if made["seed"] is not None:
        ask += ["--seed", made["seed"]]
    more = [option, "again" + file] if "--events" in ask else []
    code, second, err = run(*ask, "--scenario", scenario, "--json", *more)
    assert code == 0, err
    assert json.loads(second) == json.loads(first)


def test_scenarios_side_by_side_are_all_told(assumptions, tmp_path):
    (tmp_path / "sample.csv").write_text(SAMPLE)
    target = tmp_path / "x.json"
    more = ["--scenario", assumptions, "--kicks", "none", "--kicks", "maxwell:0.1", "--bh-kicks", "none"]
    ask = ["compare", tmp_path / "sample.csv", *more, "--sources", "distance:8", "--simulations", 5, "-q"]
    code, out, err = run(*ask, "--by", "scenario", "--save", target)
    assert code == 0, err
    told = json.loads(target.read_text())["made"]["scenarios"]
    assert [Scenario.from_dict(tomllib.loads(t["scenario_text"])).kicks for t in told] == [
        "none",
        "maxwell:0.1",
    ]


def test_changed_files_behind_a_scenario_are_noticed(assumptions, tmp_path):
    ours = tmp_path / "galaxy.toml"
    ours.write_text((assumptions.parent / "ours.toml").read_text())
    mine = tmp_path / "mine.toml"
    mine.write_text('base = "default"\ngalaxy = "galaxy.toml"\nkicks = "none"\nbh_kicks = "none"\nsources = "clump"\n')
    before = Scenario.read(mine).hash
    assert run("census", "--scenario", mine, "--save", tmp_path / "c.csv", "-q")[0] == 0
    # another place, the same content, the same assumptions
    moved = tmp_path / "moved"
    moved.mkdir()
    shutil.copy(ours, moved)
    shutil.copy(mine, moved)
    assert Scenario.read(moved / "mine.toml").hash == before
    ours.write_text(ours.read_text().replace("title", "# changed\ntitle", 1).replace("8.178", "8.2", 1))
    text = ours.read_text().replace("10.0", "10.1", 1)
    ours.write_text(text)
    code, out, err = run("scenario", "--of", tmp_path / "c.csv")
    assert code == 0 and "have changed" in " ".join(err.split()) and "galaxy.toml" in out
    ours.unlink()
    code, out, err = run("scenario", "--of", tmp_path / "c.csv")
    assert code == 0 and "cannot be run" in err


@settings(max_examples=60, deadline=None)
@given(
    st.dictionaries(st.text(min_size=1, max_size=5), st.text(max_size=30), max_size=3),
    st.text(alphabet=st.characters(codec="utf-8"), max_size=90),
    st.text(alphabet="a '\"\\\n\t&", min_size=60, max_size=200),
)
def test_metadata_comes_back_from_every_ending(tmp_path_factory, extra, name, text):
    folder = tmp_path_factory.mktemp("meta")
    made = {"scenario": name, "scenario_text": text, "scenario_hash": "0" * 12, "x": extra, "n": 0.1}
    table = Table({"a": [1.0, 2.0]})
    table.meta.update(made)
    for ending in TABLES:
        path = write_table(table, folder / f"t{ending}")
        found = read_made(path)
        assert {k: found[k] for k in made} == made


def test_foreign_and_damaged_files_are_refused_by_name(tmp_path):
    from matplotlib.figure import Figure

    Table({"a": [1.0]}).write(tmp_path / "f.ecsv")
    Table({"a": [1.0]}).write(tmp_path / "f.fits")
    Table({"a": [1.0]}).write(tmp_path / "f.vot", format="votable")
    (tmp_path / "f.csv").write_text("a,b\n1,2\n")
    (tmp_path / "f.json").write_text('{"a": [1, {"b": null}]}')
    for ending in PICTURES:
        Figure().savefig(tmp_path / f"f{ending}")
    files = sorted(tmp_path.iterdir())
    assert len(files) == 8
    for path in files:
        with pytest.raises(InputError, match="says nothing about a scenario") as refused:
            read_made(path)
        assert path.name in str(refused.value)
    bomb = '<!DOCTYPE x [<!ENTITY a "b"><!ENTITY c "&a;&a;">]><x><description>&c;</description></x>'
    deep = '{"a":' * 100_000
    bad = {"a.vot": bomb, "a.svg": bomb, "b.json": deep, "c.json": "{", "d.png": "x", "f.fits": ""}
    bad["e.pdf"] = "%PDF /Subject ((("
    for name, content in bad.items():
        (tmp_path / name).write_text(content)
        with pytest.raises(InputError, match="damaged, or not written by lensrate|cannot be read") as refused:
            read_made(tmp_path / name)
        assert name in str(refused.value)
    for name, word in (("none.csv", "no such file"), ("a.xlsx", "not one of ours")):
        if word.startswith("not"):
            (tmp_path / name).write_text("")
        code, out, err = run("scenario", "--of", tmp_path / name)
        assert code == 2 and not out and word in err and name in err


def test_cut_and_flipped_files_raise_nothing_else(assumptions, tmp_path):
    from contextlib import suppress

    rng = np.random.default_rng(4)
    ask = ["sightline", "1", "-3.9", "-q", "--scenario", assumptions]
    for ending in (*TABLES, *PICTURES):
        path = tmp_path / f"x{ending}"
        run(*ask, "--save" if ending in TABLES else "--plot", path)
        whole = path.read_bytes()
        # metadata stand at the beginning of most files
        for end in rng.integers(min(len(whole), 20_000), size=12):
            path.write_bytes(whole[:end])
            with suppress(InputError):
                read_made(path)
        for place in rng.integers(min(len(whole), 20_000), size=12):
            flipped = bytearray(whole)
            flipped[place] ^= 1 << int(rng.integers(8))
            path.write_bytes(flipped)
            with suppress(InputError):
                read_made(path)
