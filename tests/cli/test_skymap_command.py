"""``lensrate skymap``: what is printed and written, what is refused, a run that is killed and taken up again."""

import json
import os
import signal
import subprocess
import sys
import time

import numpy as np
import pytest
from astropy.io import fits
from astropy.table import QTable, Table
from astropy.wcs import WCS
from click.testing import CliRunner

import lensrate
from lensrate.cli import main

QUICK = ["--kicks", "none", "--bh-kicks", "none", "--sources", "clump"]
GRID = ["--l", "359", "1", "--b", "-4", "-3", "--step", "1"]


def run(*args):
    """Run `main` in this process; returns exit code, stdout, stderr."""
    with CliRunner().isolation() as streams:
        try:
            main([str(a) for a in args])
            code = 0
        except SystemExit as done:
            code = done.code
        return code, streams[0].getvalue().decode(), streams[1].getvalue().decode()


def test_json_keeps_its_contract():
    beyond = ["--l", "359", "1.4", *GRID[3:]]
    code, out, err = run("skymap", *beyond, *QUICK, "--json", "--rank", "black_hole", "--top", 2, "--field-area", 0.5)
    assert code == 0 and "the last pixel is at l = 1, not 1.4" in " ".join(err.split()), err
    result = json.loads(out)
    assert list(result) == ["grid", "quantities", "pixels", "meta", "ranking", "ranked"]
    assert result["grid"]["l_end"] == 361 and result["grid"]["b_end"] == -3
    assert result["grid"]["shape"] == [2, 3] and len(result["pixels"]) == 6
    assert [(p["l_deg"], p["b_deg"]) for p in result["pixels"][:3]] == [(359, -4), (0, -4), (1, -4)]
    wanted = {"l_deg", "b_deg", "source_density", "mean_source_distance", "share_black_hole", "mean_t_E_all"}
    wanted |= {f"{q}_{c}" for q in ("optical_depth", "rate", "rate_per_deg2") for c in ("star", "neutron_star", "all")}
    for pixel in result["pixels"]:
        assert wanted <= set(pixel) and set(pixel) == {"l_deg", "b_deg", *result["quantities"]}
    assert result["quantities"]["rate_per_deg2_all"]["unit"] == "1 / (yr deg2)"
    assert {"scenario_hash", "version", "references", "warnings", "scenario_text"} <= set(result["meta"])
    assert [r["rank"] for r in result["ranking"]] == [1, 2] and result["ranking"][0]["b"] == -3
    assert "field area" in result["ranked"]["formula"]


def test_files(tmp_path):
    image, table, picture, pointings = (tmp_path / n for n in ("m.fits", "m.csv", "m.png", "p.ecsv"))
    more = ["--rank", "all", "--save-ranking", pointings, "--visit-time", 60, "--plot", picture]
    code, out, err = run("skymap", *GRID, *QUICK, "--save", image, *more)
    assert code == 0, err
    assert "3 x 2 pixels" in out and "events/hour" in out and "about" in err
    with fits.open(image) as hdus:
        sky = WCS(hdus["RATE_ALL"].header).pixel_to_world(0, 0)
        assert (sky.l.deg, sky.b.deg) == pytest.approx((1, -4))
        rates = hdus["RATE_ALL"].data
    assert run("skymap", *GRID, *QUICK, "--save", table, "--quiet")[0] == 0
    np.testing.assert_array_equal(Table.read(table, comment="#")["rate_all"], rates[:, ::-1].ravel())
    assert QTable.read(pointings)["events_per_hour"][0].value > 0
    assert picture.stat().st_size > 10_000 and not list(tmp_path.glob("*.part"))
    code, _, err = run("skymap", *GRID, *QUICK, "--save", image)
    assert code == 2 and "--overwrite" in err


def test_fields(tmp_path):
    path = tmp_path / "fields.ecsv"
    rows = {"name": ["A", "B"], "ra": [267.0, 270.0], "dec": [-30.0, -29.0], "A_I": [1.5, 1.0], "area_deg2": [1.0, 2.0]}
    Table({**rows, "visit_s": [60.0, 60.0]}).write(path)
    command = ["skymap", "--fields", path, "--kicks", "none", "--bh-kicks", "none"]
    code, out, err = run(*command, "--rank", "neutron_star", "--json")
    assert code == 0, err
    result = json.loads(out)
    assert [p["A_I"] for p in result["pixels"]] == [1.5, 1.0] and result["grid"] is None
    assert {r["name"] for r in result["ranking"]} == {"A", "B"} and "events_per_hour" in result["ranking"][0]
    code, out, _ = run(*command)
    assert code == 0 and "A " in out and "/deg2 yr" in out
    # the invented campaign's fields, drawn over a map of themselves
    marram = lensrate.datafiles.data_folder() / "campaigns" / "marram.toml"
    target = ["--save", tmp_path / "f.fits", "--plot", tmp_path / "f.svg", "--picture", "rate_black_hole"]
    code, out, err = run("skymap", "--fields", "marram", *QUICK[:4], *target, "--overlay", marram)
    assert code == 0 and "without the campaign's efficiency" in err, err
    table = QTable.read(tmp_path / "f.fits")
    stars = table["source_density"][0].value * np.pi * 0.6**2 * 3600
    assert table["name"][0] == "M01" and stars == pytest.approx(7.6e6, rel=1e-4)
    code, _, err = run("skymap", "--fields", "marram", *QUICK)
    assert code == 2 and "a campaign states its own" in err


@pytest.mark.parametrize(
    "args, words",
    [
        (["--l", "5", "-5", "--b", "-1", "1", "--step", "1"], "before the start"),
        (["--l", "-5", "5", "--b", "1", "-1", "--step", "1"], "exchange them"),
        (["--l", "-5", "5", "--b", "-1", "1", "--step", "0"], "above 0"),
        (["--l", "-5", "5", "--b", "-95", "1", "--step", "1"], "-90"),
        (["--l", "-180", "180", "--b", "-90", "90", "--step", "0.01"], "smaller area"),
        (["--l", "-5", "5", "--b", "-1", "1"], "--step missing"),
        ([], "--fields FILE"),
        ([*GRID, "--fields", "x.csv"], "leave it out"),
        ([*GRID, "--rank", "black_holes"], "did you mean 'black_hole'"),
        ([*GRID, "--top", "3"], "goes with --rank"),
        ([*GRID, "--cadence", "2"], "goes with --rank"),
        ([*GRID, "--rank", "all", "--cadence", "2"], "--cadence has no effect here: it goes with --visit-time"),
        ([*GRID, "--icrs"], "goes with --fields"),
        ([*GRID, "--picture", "rate_all"], "goes with --plot"),
        ([*GRID, "--plot", "m.png", "--picture", "rate_al"], "did you mean 'rate_all'"),
        ([*GRID, "--save", "map.fit"], "is not known (known: .ecsv, .csv, .fits"),
        ([*GRID, "--save", "/nowhere/map.fits"], "does not exist"),
        ([*GRID, "--efficiency", "none.ecsv"], "no file"),
        ([*GRID, "--rank", "all", "--field-area", "-1"], "above 0"),
        ([*GRID, "--rank", "all", "--visit-time", "0"], "above 0"),
        ([*GRID, "--rank", "all", "--sources", "distance:8"], "are not counted"),
        (["--fields", "none.csv"], "no file"),
        ([*GRID, "--sources", "clump", "--extinction", "I=1"], "--extinction has no effect here"),
    ],
)
def test_what_is_refused(tmp_path, monkeypatch, args, words):
    monkeypatch.chdir(tmp_path)
    code, out, err = run("skymap", *QUICK, *args)
    assert code == 2 and not out
    assert words in " ".join(err.split())
    assert not list(tmp_path.iterdir())  # nothing half done, and told before the work


def test_a_size_without_its_unit_is_no_unknown_column(tmp_path):
    path = tmp_path / "fields.csv"
    path.write_text("Name,l,b,radius,seeing\nA,1,-3,0.5,good\n")
    code, _, err = run("skymap", *QUICK, "--fields", path)
    assert code == 2 and "column 'radius' is not known, did you mean 'radius_deg'?" in " ".join(err.split())


def test_killed_and_taken_up_again(tmp_path):
    whole, broken = tmp_path / "whole.fits", tmp_path / "broken.fits"
    asked = ["skymap", "--l", "-6", "6", "--b", "-6", "-3", "--step", "0.5", *QUICK, "--jobs", "2"]
    assert run(*asked, "--save", whole)[0] == 0
    command = [sys.executable, "-m", "lensrate", *asked, "--save", str(broken)]
    part = broken.with_name("broken.fits.part")
    process = subprocess.Popen(command, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL)
    try:
        until = time.monotonic() + 300
        while (not part.is_file() or part.read_bytes().count(b"\n") < 8) and time.monotonic() < until:
            time.sleep(0.01)
            assert process.poll() is None, "it ended before it could be killed"
    finally:
        os.kill(process.pid, signal.SIGKILL)
        process.wait()
    kept = part.read_bytes().count(b"\n") - 1
    assert process.returncode == -signal.SIGKILL and not broken.exists() and 7 <= kept < 175
    done = subprocess.run(command, capture_output=True, text=True)
    assert done.returncode == 0, done.stderr
    assert not part.exists()
    assert broken.read_bytes() == whole.read_bytes()


def test_interrupted_by_the_keyboard(tmp_path, monkeypatch):
    from lensrate.surveys.pixels import PixelWork

    pixel, count = PixelWork.__call__, []

    def third_time(self, direction):
        count.append(direction)
        if len(count) == 3:
            raise KeyboardInterrupt
        return pixel(self, direction)

    monkeypatch.setattr(PixelWork, "__call__", third_time)
    command = ["skymap", *GRID, *QUICK, "--save", tmp_path / "m.fits"]
    code, out, err = run(*command)
    assert code == 130 and not out and "goes on from there" in " ".join(err.split())
    # other assumptions do not get mixed with what is kept
    code, _, err = run(*command, "--u-0-limit", 0.5)
    assert code == 2 and "another map" in err
    assert run(*command)[0] == 0 and len(count) == 7
