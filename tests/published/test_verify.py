"""The engine of ``lensrate verify``: verdicts, tolerances of every form, damaged files, the command."""

import json
import shutil

import pytest
from astropy.table import QTable
from click.testing import CliRunner

import lensrate.verify.engine as engine
from lensrate.cli import main
from lensrate.cli.verify import verify
from lensrate.datafiles import checksums, data_folder
from lensrate.errors import DataFileError, InputError
from lensrate.verify import Check, checks, to_table

ROW = {
    "id": "x",
    "quantity": "x of y",
    "published": 2.0,
    "tolerance": 0.1,
    "unit": "kpc",
    "source": "Author 2000",
    "status": "seen",
    "used_in_tuning": False,
    "group": "galaxy",
}
BAND = {k: v for k, v in ROW.items() if k not in ("published", "tolerance")} | {"low": 1.0, "high": 2.0}
KEYS = {"quantity", "published", "error", "computed", "unit", "source", "status", "used_in_tuning"}


@pytest.mark.parametrize(
    ("row", "inside", "outside"),
    [
        (ROW, (1.91, 2.09), (1.89, 2.11)),
        (ROW | {"error": [0.2, 0.1], "sigmas": 2}, (1.81, 2.39), (1.79, 2.41)),
        (BAND | {"slack": 0.15}, (0.86, 2.29), (0.84, 2.31)),
        (BAND | {"tolerance": 0.05}, (0.96, 2.04), (0.94, 2.06)),
        (BAND | {"low": -2.0, "high": -1.0, "slack": 0.1}, (-2.19, -0.91), (-2.21, -0.89)),
    ],
)
def test_tolerances(row, inside, outside):
    for value in inside:
        assert engine.check(row, lambda v=value: v).agrees
    for value in outside:
        result = engine.check(row, lambda v=value: v)
        assert not result.agrees and result.failed and result.verdict == "FAILS"


def test_verdicts():
    tuned = engine.check(ROW | {"used_in_tuning": True}, lambda: 2.0)
    assert tuned.verdict == "agrees *" and "no test" in tuned.to_dict()["status"]
    known = engine.check(ROW | {"expected_to_differ": True, "why": "its reason", "status": "memory"}, lambda: 3.0)
    assert known.verdict == "differs: known" and not known.failed
    assert "its reason" in known.to_dict()["status"] and "memory" in known.to_dict()["status"]
    assert engine.check(ROW | {"used_in_tuning": True}, lambda: 3.0).failed

    def broken():
        raise InputError("this cannot be")

    lost = engine.check(ROW | {"expected_to_differ": True, "why": "its reason"}, broken)
    assert lost.failed and "this cannot be" in lost.note and lost.to_dict()["computed"] is None


def test_error_on_the_side_of_the_computed_value():
    row = ROW | {"error": [0.2, 0.1], "sigmas": 2}
    assert engine.check(row, lambda: 2.1).error == 0.2
    assert engine.check(row, lambda: 1.9).error == 0.1


def test_table():
    rows = checks("sources")
    table = to_table(rows)
    assert isinstance(table, QTable) and len(table) == len(rows)
    assert list(table["verdict"]) == [row.verdict for row in rows]
    assert table.meta["failed"] == 0
    assert all(isinstance(row, Check) and KEYS < set(row.to_dict()) for row in rows)


def test_unknown_group():
    with pytest.raises(InputError, match="lensing"):
        checks("lensng")


def test_damaged_files_are_named(tmp_path, monkeypatch):
    assert checks("files")[0].agrees
    copy = tmp_path / "data"
    shutil.copytree(data_folder(), copy)
    (copy / "imf" / "kroupa2001.toml").write_text("slopes = [0]\n")
    (copy / "kicks" / "hobbs2005.toml").unlink()
    monkeypatch.setattr(engine, "data_folder", lambda: copy)
    row = engine.checks("files")[0]
    assert row.failed and row.computed == 2
    assert "imf/kroupa2001.toml" in row.note and "kicks/hobbs2005.toml" in row.note
    assert len(checksums()) > 30


def test_command(tmp_path, monkeypatch):
    run = CliRunner().invoke
    result = run(verify, ["--group", "sources", "--quiet", "--json", "--save", str(tmp_path / "v.ecsv")])
    assert result.exit_code == 0, result.output
    rows = json.loads(result.stdout)
    assert len(rows) == len(QTable.read(tmp_path / "v.ecsv")) and all(set(row) > KEYS for row in rows)
    text = run(verify, ["--group", "sources", "--quiet"]).stdout
    assert max(len(line) for line in text.splitlines()) <= 100 and "Hawkins" in text
    monkeypatch.setattr("lensrate.verify.checks", lambda group: [engine.check(ROW, lambda: 3.0)])
    assert run(verify, ["--quiet"]).exit_code == 1
    with pytest.raises(SystemExit) as done:
        main(["verify", "--quiet"])
    assert done.value.code == 1


def test_damaged_table_stops(monkeypatch):
    def refuse(relative):
        raise DataFileError(f"{relative}: its sha256 differs")

    monkeypatch.setattr(engine, "find", refuse)
    with pytest.raises(DataFileError, match=r"published/lensing\.toml"):
        checks("lensing")
