"""``lensrate synthesize``: the same result whatever happens on the way, files that are refused, interruptions."""

import hashlib
import os
import shutil
import signal
import subprocess
import sys
import time

import numpy as np
import pytest
from astropy.io import fits
from click.testing import CliRunner

from lensrate.cli import main
from lensrate.datafiles import data_folder
from lensrate.errors import DataFileError
from lensrate.remnants.fields import RemnantField

SMALL = ["--tracers", "256", "--bundles", "64", "--iterations", "10"]
ARRAYS = ("LN_RHO", "FOUR", "TWO", "BATCHES", "ENDS", "HEIGHTS")


def run(*args):
    """Run `main` in this process; returns exit code, stdout, stderr."""
    with CliRunner().isolation() as streams:
        try:
            main([str(a) for a in args])
            code = 0
        except SystemExit as done:
            code = done.code
        return code, streams[0].getvalue().decode(), streams[1].getvalue().decode()


def arrays(path):
    with fits.open(path) as hdus:
        # digests: a difference between megabytes would take pytest hours to explain
        return {name: hashlib.sha256(hdus[name].data.tobytes()).hexdigest() for name in ARRAYS}


@pytest.fixture(scope="session")
def scenario(tmp_path_factory):
    """A Galaxy of a young and an old disc only, so that orbits are few."""
    folder = tmp_path_factory.mktemp("galaxy")
    head, *rows = (data_folder() / "galaxy" / "default.toml").read_text().split("[[component]]\n")
    kept = [r for r in rows if "thin_disc_young" in r or 'name = "thick_disc"' in r]
    (folder / "galaxy.toml").write_text("[[component]]\n".join([head, *kept]))
    path = folder / "two.toml"
    path.write_text(f'base = "default"\ngalaxy = "{folder / "galaxy.toml"}"\n')
    return path


@pytest.fixture(scope="session")
def made(scenario, tmp_path_factory):
    """A field file, and what was printed."""
    path = tmp_path_factory.mktemp("fields") / "two.fits"
    code, out, err = run("synthesize", "--scenario", scenario, "--save", path, *SMALL)
    assert code == 0, err
    return path, out, err


def test_report_and_provenance(made, scenario):
    path, out, err = made
    assert "thin_disc_young" in out and "error" in out and max(map(len, (out + err).splitlines())) <= 100
    assert "memory" in err and "100 %" in err
    assert [p.name for p in path.parent.iterdir()] == ["two.fits"]
    made = RemnantField.read(path).provenance
    assert made["scenario"] == "two" and len(made["scenario_hash"]) == 12 and made["tracers"] == 256
    assert f'galaxy = "{scenario.parent / "galaxy.toml"}"' in made["scenario_text"]


def test_killed_and_resumed_gives_the_same_bytes(made, scenario, tmp_path):
    path = tmp_path / "two.fits"
    command = ["synthesize", "--scenario", str(scenario), "--save", str(path), "--jobs", "2", *SMALL]
    start = f"from lensrate.cli import main; main({command!r})"
    victim = subprocess.Popen([sys.executable, "-c", start], stderr=subprocess.DEVNULL)
    pieces = tmp_path / "two.fits.checkpoint"
    deadline = time.monotonic() + 60
    while len(list(pieces.glob("*/[0-9]*.npz"))) < 5 and victim.poll() is None and time.monotonic() < deadline:
        time.sleep(0.01)
    os.kill(victim.pid, signal.SIGKILL)
    assert victim.wait() == -signal.SIGKILL and not path.exists()
    before = {p: p.stat().st_mtime_ns for p in pieces.glob("*/[0-9]*.npz")}
    assert 5 <= len(before) < 33
    damaged = sorted(before)[0]
    damaged.write_bytes(damaged.read_bytes()[:-200])
    # the scenario that the whole run states, from another place
    (tmp_path / "again.toml").write_text(run("scenario", "--of", made[0])[1])
    again = ["--scenario", tmp_path / "again.toml"]
    kept = run("synthesize", *again, "--save", path, *SMALL, "--checkpoint", pieces, "-q")
    assert kept[0] == 0 and kept[2] == "" and not pieces.exists()
    # one thread without a break, and two threads with one
    assert arrays(path) == arrays(made[0])


def test_finished_pieces_are_not_made_again(scenario, tmp_path, monkeypatch):
    import lensrate.remnants.synthesis as synthesis

    def broken(component, equilibrium, number, *rest):
        if component.element == "thick_disc" and number == 3:
            raise KeyboardInterrupt
        return whole(component, equilibrium, number, *rest)

    whole, calls = synthesis._element, []
    monkeypatch.setattr(synthesis, "_element", broken)
    command = ("synthesize", "--scenario", scenario, "--save", tmp_path / "x.fits", *SMALL)
    code, out, err = run(*command)
    assert code == 130 and out == "" and "x.fits.checkpoint" in " ".join(err.split()) and "Traceback" not in err
    assert [p.name for p in tmp_path.iterdir()] == ["x.fits.checkpoint"]

    def counted(component, equilibrium, number, *rest):
        calls.append((component.element, number))
        return whole(component, equilibrium, number, *rest)

    monkeypatch.setattr(synthesis, "_element", counted)
    assert run(*command, "-q")[0] == 0
    assert calls == [("thick_disc", i) for i in range(3, 16)]
    assert [p.name for p in tmp_path.iterdir()] == ["x.fits"]


def test_damaged_and_foreign_files_are_refused_by_name(made, tmp_path):
    whole = made[0].read_bytes()
    rng = np.random.default_rng(5)
    bad = {"cut.fits": whole[: len(whole) // 2], "short.fits": whole[:1000], "empty.fits": b"", "text.fits": b"a,b\n"}
    # blanks behind the last card of a header say nothing and may change
    places = [p for p in rng.integers(len(whole), size=40) if whole[p - 3 : p + 4] != b" " * 7]
    for i, place in enumerate(places):
        flipped = bytearray(whole)
        flipped[place] ^= 1 << int(rng.integers(8))
        bad[f"flipped_{i}.fits"] = bytes(flipped)
    for name, content in bad.items():
        path = tmp_path / name
        path.write_bytes(content)
        with pytest.raises(DataFileError, match="lensrate synthesize") as refused:
            RemnantField.read(path)
        assert str(path) in str(refused.value)
    fits.PrimaryHDU(np.zeros((3, 3))).writeto(tmp_path / "foreign.fits")
    shutil.copy(made[0], tmp_path / "later.fits")
    with fits.open(tmp_path / "later.fits", mode="update", checksum=True) as hdus:
        hdus[0].header["LRFIELD"] = "lensrate remnant field 3"
    for name, word in (("foreign.fits", "no such mark"), ("later.fits", "field 3")):
        with pytest.raises(DataFileError, match=word) as refused:
            RemnantField.read(tmp_path / name)
        assert name in str(refused.value) and "lensrate synthesize" in str(refused.value)
    mine = tmp_path / "mine.toml"
    mine.write_text(f'base = "default"\nfields = "{tmp_path / "cut.fits"}"\n')
    code, out, err = run("sightline", "1", "-3", "--scenario", mine)
    assert code == 1 and out == "" and "cut.fits" in err and "lensrate synthesize" in err and "Traceback" not in err


@pytest.mark.parametrize(
    "args, word",
    [
        (["--save", "x.csv"], ".fits"),
        (["--save", "nowhere/x.fits"], "does not exist"),
        (["--save", "x.fits", "--tracers", "10"], "256"),
        (["--save", "x.fits", "--scenario", "hangould2003"], "no potential"),
        (["--save", "x.fits", "--checkpoint", "file"], "checkpoint"),
        ([], "--save"),
    ],
)
def test_bad_input(args, word, tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    (tmp_path / "file").write_text("")
    code, out, err = run("synthesize", *args, "-q")
    assert code in (1, 2) and out == "" and word in err and "Traceback" not in err
    assert [p.name for p in tmp_path.iterdir()] == ["file"]
