"""``lensrate events``: output, exit codes, what goes together."""

import json

import pytest
from click.testing import CliRunner

from lensrate.cli import cli, main


def run(*args):
    result = CliRunner().invoke(cli, ["events", *args])
    return result.exit_code, result.stdout, result.exception


def test_json_and_table():
    code, out, _ = run("1.0", "-3.9", "-n", "200", "--seed", "3", "--json", "--quiet")
    assert code == 0
    made = json.loads(out)
    assert made["number"] == 200 and made["seed"] == 3 and made["frame"].startswith("heliocentric")
    assert set(made["columns"]) == set(made["units"]) and len(made["columns"]["t_E"]) == 200
    assert {"scenario_hash", "references", "warnings", "version", "lenses"} <= set(made)
    total = sum(made["columns"]["weight"])
    assert total == pytest.approx(sum(lens["weight"] for lens in made["lenses"].values()))
    # the same seed on more threads
    code, again, _ = run("1.0", "-3.9", "-n", "200", "--seed", "3", "--json", "--quiet", "--jobs", "2")
    assert again == out
    code, text, _ = run("1.0", "-3.9", "-n", "200", "--seed", "3", "--quiet")
    assert code == 0 and "neutron star" in text and "seed 3" in text and max(map(len, text.splitlines())) <= 100
    # the rate is the integral's, not that of 200 draws
    import astropy.units as u

    import lensrate

    rate = lensrate.sightline(1.0 * u.deg, -3.9 * u.deg).lenses["white_dwarf"].rate
    assert made["lenses"]["white_dwarf"]["expected"] == pytest.approx(rate, rel=1e-12)
    assert f"{1e6 * rate:.3g}" in next(line for line in text.splitlines() if line.startswith("white dwarf"))


SURVEY = """
name = "small (invented)"
[[season]]
start = 2031-02-10
end = 2031-10-25
[[field]]
name = "T1"
l = 1.0
b = -3.9
area_deg2 = 1.0
limit = "I=21"
"""


def test_campaign(tmp_path):
    file = tmp_path / "small.toml"
    file.write_text(SURVEY)
    target, picture = tmp_path / "season.ecsv", tmp_path / "season.png"
    code, out, error = run(
        "--campaign", str(file), "--seed", "1", "--detected", "--save", str(target), "--plot", str(picture), "--quiet"
    )
    assert code == 0, error
    assert "found" in out and picture.stat().st_size > 10_000
    from astropy.table import QTable

    table = QTable.read(target)
    assert table["detected"].all() and {"field", "efficiency", "t_E_geo"} <= set(table.colnames)
    assert table.meta["campaign_hash"] and table.meta["seed"] == 1
    words = table.meta["selected"]
    assert words == "only those that the campaign finds" and words in table.meta["header"]
    assert "happened" not in out and "small (invented)" in out
    made = json.loads(run("--campaign", str(file), "--seed", "1", "--json", "--quiet")[1])
    assert made["campaign_hash"] == table.meta["campaign_hash"] and made["selected"] == "all"


@pytest.mark.parametrize(
    "args",
    [
        (),
        ("1.0",),
        ("1.0", "-3.9", "--campaign", "marram"),
        ("1.0", "-3.9", "--detected"),
        ("1.0", "-3.9", "-n", "0"),
        ("1.0", "-3.9", "--seed", "-1"),
        ("1.0", "-3.9", "--dates", "2031-02-10", "2031-02-30"),
        ("1.0", "-3.9", "--dates", "2031-02-10", "2030-02-10"),
        ("1.0", "-3.9", "--save", "mock.xls"),
        ("1.0", "north"),
        ("--campaign", "marram", "--sources", "clump"),
        ("--campaign", "marram", "--icrs"),
        ("--campaign", "no_such.toml"),
    ],
)
def test_wrong_input(args, capsys):
    with pytest.raises(SystemExit) as stop:
        main(["events", *args])
    assert stop.value.code == 2
    assert "Traceback" not in capsys.readouterr().err


@pytest.mark.parametrize(
    "dates, words",
    [
        (("2031-02-10",), "Option '--dates' requires 2 arguments."),
        (("2031-02-10", "2030-02-10"), "--dates: 2031-02-10 to 2030-02-10 given, the second must be later"),
    ],
)
def test_dates_are_complained_of_as_typed(dates, words, capsys):
    with pytest.raises(SystemExit):
        main(["events", "1", "-3.9", "--dates", *dates])
    assert words in " ".join(capsys.readouterr().err.split())
