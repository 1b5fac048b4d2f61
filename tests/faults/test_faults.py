"""What happens to results when something goes wrong, really caused: killed, interrupted, full, damaged, twice at once.

After each: what was finished is there or its whole predecessor, nothing half written stands under its name, and a line
says what to do. The numbers of tries of the slow tests are in `TRIES`.
"""

import hashlib
import os
import resource
import signal
import subprocess
import sys
import time
from contextlib import contextmanager

import numpy as np
import pytest
from astropy.io import fits
from click.testing import CliRunner

from lensrate.cli import main
from lensrate.datafiles import data_folder
from lensrate.errors import InputError
from lensrate.provenance import read_made

TRIES = 6
QUICK = ["--kicks", "none", "--bh-kicks", "none", "--sources", "distance:8"]
SMALL = ["--tracers", "256", "--bundles", "64", "--iterations", "10"]
MAP = ["skymap", "--l", "-6", "6", "--b", "-6", "-3", "--step", "0.5", *QUICK]
EVENTS = ["events", "1", "-3", "--number", "300000", "--seed", "3", *QUICK]


def run(*args):
    """Run `main` in this process; returns exit code, stdout, stderr."""
    with CliRunner().isolation() as streams:
        try:
            main([str(a) for a in args])
            code = 0
        except SystemExit as done:
            code = done.code
        return code, streams[0].getvalue().decode(), " ".join(streams[1].getvalue().decode().split())


def start(*args):
    # a suite in the background of a script ignores Ctrl-C, and so would what it starts
    program = "import os, sys, signal as s; s.signal(s.SIGINT, s.SIG_DFL); os.execv(sys.argv[1], sys.argv[1:])"
    asked = [sys.executable, "-m", "lensrate", *map(str, args)]
    return subprocess.Popen(
        [sys.executable, "-c", program, *asked], stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True
    )


def finish(*args):
    """Run to the end; the end must be good."""
    done = subprocess.run([sys.executable, "-m", "lensrate", *map(str, args)], capture_output=True, text=True)
    assert done.returncode == 0, done.stderr


def effort(*args):
    """Run to the end twice; the processor time of the second [s], which finds all compiled."""
    finish(*args)
    before = os.times()
    finish(*args, "--overwrite")
    after = os.times()
    return after.children_user + after.children_system - before.children_user - before.children_system


def at_work(process, seconds):
    """Wait until a process has had so much processor time, whatever else the machine does; False if it ended before."""
    ticks = os.sysconf("SC_CLK_TCK")
    while process.poll() is None:
        try:
            with open(f"/proc/{process.pid}/stat") as file:
                fields = file.read().rpartition(")")[2].split()
        except (FileNotFoundError, ProcessLookupError):
            break
        if (int(fields[11]) + int(fields[12])) / ticks >= seconds:
            return True
        time.sleep(0.005)
    return False


def digest(path):
    """Checksum of a file's numbers, the metadata left out."""
    with fits.open(path, memmap=False) as hdus:
        h = hashlib.sha256()
        for hdu in hdus[1:]:
            if hdu.name != "MADE":
                h.update(hdu.data.tobytes())
        return h.hexdigest()


@pytest.fixture(scope="session")
def two(tmp_path_factory):
    """A scenario of a young and an old disc only, so that orbits are few."""
    folder = tmp_path_factory.mktemp("two")
    head, *rows = (data_folder() / "galaxy" / "default.toml").read_text().split("[[component]]\n")
    kept = [r for r in rows if "thin_disc_young" in r or 'name = "thick_disc"' in r]
    (folder / "galaxy.toml").write_text("[[component]]\n".join([head, *kept]))
    path = folder / "two.toml"
    path.write_text('base = "default"\ngalaxy = "galaxy.toml"\n')
    return path


def asked_of(name, two):
    return {"synthesize": ["synthesize", "--scenario", two, *SMALL], "skymap": MAP, "events": EVENTS}[name]


# ---- killed and interrupted at moments of chance


@pytest.mark.slow
@pytest.mark.parametrize("name", ["synthesize", "skymap", "events"])
def test_killed_at_any_moment(name, two, tmp_path):
    asked = asked_of(name, two)
    whole = tmp_path / "whole.fits"
    span = effort(*asked, "--save", whole)
    rng = np.random.default_rng(8)
    killed = 0
    for i, share in enumerate(rng.uniform(0.1, 0.8, TRIES)):
        target = tmp_path / f"try{i}.fits"
        target.write_text("the predecessor")
        victim = start(*asked, "--save", target, "--overwrite")
        if at_work(victim, share * span):
            os.kill(victim.pid, signal.SIGKILL)
            killed += 1
        victim.communicate()
        # the predecessor or the new file, whole
        if target.read_bytes() != b"the predecessor":
            assert digest(target) == digest(whole)
        finish(*asked, "--save", target, "--overwrite")
        assert digest(target) == digest(whole)
        assert not [p for p in tmp_path.iterdir() if p.name.endswith((".part", ".checkpoint"))]
    assert killed >= TRIES // 2


@pytest.mark.slow
@pytest.mark.parametrize("name", ["synthesize", "skymap", "events"])
def test_interrupted_at_any_moment(name, two, tmp_path):
    asked = asked_of(name, two)
    span = effort(*asked, "--save", tmp_path / "whole.fits")
    rng = np.random.default_rng(9)
    stopped = 0
    for i, wait in enumerate(span * rng.uniform(0.3, 0.9, TRIES)):
        target = tmp_path / f"try{i}.fits"
        victim = start(*asked, "--save", target)
        if at_work(victim, wait):
            os.kill(victim.pid, signal.SIGINT)
        out, err = victim.communicate()
        assert "Traceback" not in err, err
        if victim.returncode == 0:
            assert read_made(target)
            continue
        if victim.returncode == -signal.SIGINT:
            # while Python itself was starting or ending, which a shell calls 130 too
            assert not target.exists() or read_made(target)
            continue
        stopped += 1
        assert victim.returncode == 130 and "interrupted" in err and not out
        # nothing, or all of it where the file had just been finished
        assert not target.exists() or digest(target) == digest(tmp_path / "whole.fits")
        left = [p.name for p in tmp_path.iterdir() if p.name.startswith((f"try{i}.", f".try{i}."))]
        assert not [n for n in left if not n.endswith((".part", ".checkpoint"))]
        if left:
            assert "goes on from there" in " ".join(err.split())
    assert stopped >= 1


# ---- a full disk, and folders that nothing can be written to


@contextmanager
def room(size):
    """Let this process write no file beyond so many bytes; what is beyond fails as on a full disk."""
    soft, hard = resource.getrlimit(resource.RLIMIT_FSIZE)
    handler = signal.signal(signal.SIGXFSZ, signal.SIG_IGN)
    resource.setrlimit(resource.RLIMIT_FSIZE, (size, hard))
    try:
        yield
    finally:
        resource.setrlimit(resource.RLIMIT_FSIZE, (soft, hard))
        signal.signal(signal.SIGXFSZ, handler)


SIGHTLINE = ["sightline", "1", "-3.9", *QUICK]


@pytest.mark.parametrize("ending", [".ecsv", ".csv", ".fits", ".vot", ".json", ".png", ".pdf", ".svg"])
def test_a_disk_that_fills_up(ending, tmp_path):
    target = tmp_path / f"x{ending}"
    option = "--plot" if ending in (".png", ".pdf", ".svg") else "--save"
    for size in (0, 700, 3000):
        for before in (None, b"the predecessor"):
            if before is not None:
                target.write_bytes(before)
            with room(size):
                code, out, err = run(*SIGHTLINE, option, target, "--overwrite", "-q")
            assert code == 1 and "could not be written" in err and target.name in err
            assert (target.read_bytes() if target.exists() else None) == before
            assert [p.name for p in tmp_path.iterdir()] == [target.name] * (before is not None)
            target.unlink(missing_ok=True)


def test_a_disk_that_fills_up_under_a_map(tmp_path):
    target = tmp_path / "m.fits"
    asked = ["skymap", "--l", "-2", "2", "--b", "-4", "-3", "--step", "0.5", *QUICK, "--save", target, "-q"]
    whole = tmp_path / "whole.fits"
    assert run(*asked[:-2], whole, "-q")[0] == 0
    with room(2000):
        code, out, err = run(*asked)
    part = tmp_path / "m.fits.part"
    assert code == 1 and "finished pixels are kept" in err and not target.exists() and part.stat().st_size == 2000
    kept = part.read_bytes().count(b"\n") - 1
    assert kept >= 2
    assert run(*asked)[0] == 0 and target.read_bytes() == whole.read_bytes() and not part.exists()


def test_folders_that_cannot_be_written(tmp_path):
    # where not even the superuser can make files
    for target in ("/proc/x.csv", "/proc/self/x.fits"):
        code, out, err = run(*SIGHTLINE, "--save", target, "-q")
        assert code in (1, 2) and "writ" in err and "Traceback" not in err
    for command in (["synthesize", *SMALL, "--save", "/proc/x.fits"], [*MAP, "--save", "/proc/x.fits"]):
        code, out, err = run(*command, "-q")
        assert code in (1, 2) and not out and ("cannot be" in err or "writ" in err)
    if os.geteuid() != 0:
        tmp_path.chmod(0o555)
        code, out, err = run(*SIGHTLINE, "--save", tmp_path / "x.csv", "-q")
        assert code == 2 and "not writable" in err
        tmp_path.chmod(0o755)


# ---- damaged checkpoints


def test_flipped_bits_in_finished_pixels(tmp_path):
    from lensrate.surveys.mapfiles import PartFile
    from lensrate.surveys.pixels import Pixel

    path = tmp_path / "p"
    pixels = [Pixel((0.1 * i, 2.0), (1e-6, 2e-6), (3.0, 4.0), (), 1.5, 8.0, 0.9, ("a",)) for i in range(6)]
    part = PartFile(path, "key")
    for i, pixel in enumerate(pixels):
        part.add(i, pixel)
    part.close()
    whole = path.read_bytes()
    first = whole.index(b"\n") + 1
    rng = np.random.default_rng(6)
    for place in rng.integers(first, len(whole), 200):
        flipped = bytearray(whole)
        flipped[place] ^= 1 << int(rng.integers(8))
        path.write_bytes(flipped)
        part = PartFile(path, "key")
        part.close()
        # what stands before the damage is kept, nothing of it is believed
        hurt = whole[first:place].count(b"\n")
        assert part.found == dict(enumerate(pixels[:hurt])) or part.found == dict(enumerate(pixels))


def test_flipped_and_cut_pieces_of_a_synthesis_are_made_again(tmp_path):
    from lensrate.remnants.synthesis import _Pieces

    pieces = _Pieces(tmp_path, {"a": 1})
    arrays = {"states": np.arange(300.0), "weights": np.ones(40, dtype=np.int16)}
    pieces.keep("x", arrays)
    path = next(tmp_path.glob("*/x.npz"))
    whole = path.read_bytes()
    rng = np.random.default_rng(7)
    hurt = [whole[:n] for n in rng.integers(len(whole), size=40)]
    for place in rng.integers(len(whole), size=300):
        flipped = bytearray(whole)
        flipped[place] ^= 1 << int(rng.integers(8))
        hurt.append(bytes(flipped))
    for content in hurt:
        path.write_bytes(content)
        kept = pieces.get("x")
        assert kept is None or all(np.array_equal(kept[k], v) for k, v in arrays.items())


# ---- twice at once


@pytest.mark.slow
@pytest.mark.parametrize("name", ["synthesize", "skymap", "events"])
def test_two_processes_writing_to_the_same_target(name, two, tmp_path):
    target = tmp_path / "x.fits"
    asked = [*asked_of(name, two), "--save", target, "--overwrite"]
    both = [start(*asked), start(*asked)]
    ends = [p.communicate() for p in both]
    for process, (_, err) in zip(both, ends):
        assert process.returncode == 0, err
    once = tmp_path / "once.fits"
    finish(*asked_of(name, two), "--save", once)
    assert digest(target) == digest(once)
    assert sorted(p.name for p in tmp_path.iterdir()) == ["once.fits", "x.fits"]


# ---- more than the memory holds


def test_runs_that_memory_does_not_hold_are_refused_before(monkeypatch, two, tmp_path):
    import lensrate.claims as claims

    need = claims.available_memory()
    assert need is None or need > 1e8
    with pytest.raises(InputError, match="GB of memory are needed"):
        claims.check_memory("x", 1e18, "take less")
    monkeypatch.setattr(claims, "available_memory", lambda: 5e6)
    code, out, err = run(*EVENTS, "--save", tmp_path / "x.fits", "-q")
    assert code == 2 and "number: 300000" in err and "draw fewer" in err
    code, out, err = run("synthesize", "--scenario", two, *SMALL, "--save", tmp_path / "x.fits", "-q")
    assert code == 2 and "fewer --jobs or --tracers" in err
    monkeypatch.undo()
    code, out, err = run("skymap", "--l", "0", "359", "--b", "-89", "89", "--step", "0.001", *QUICK)
    assert code == 2 and "smaller area" in err
    assert not list(tmp_path.iterdir())
