"""Unpacked copies of field files: the same fields, and never in the way."""

import hashlib
from dataclasses import fields

import numpy as np
import pytest

from lensrate.errors import DataFileError
from lensrate.remnants.fields import Grid, RemnantField
from lensrate.remnants.unpacked import damaged_copies, read_unpacked

GRID = Grid(n_R=8, n_z=4, n_phi=4)


def small_field(rng):
    def codes(*shape):
        return rng.integers(-3000, 3000, shape).astype(np.int16)

    outer = GRID.n_R - GRID.n_four
    return RemnantField(
        components=("bulge", "halo"),
        kick_edges=np.array([0.0, 100.0, 1500.0]),
        grid=GRID,
        ln_rho=codes(2, 3, 8, 4, 4),
        four=codes(2, 3, GRID.n_four, 4, 4, 4, 10),
        two=codes(2, 3, outer, 4, 4, 2, 10),
        batches=codes(2, 3, 4, 4, 2, 2),
        ends={name: rng.random((2, 3)) for name in ("escaped", "beyond_20_kpc", "outside_grid")},
        heights=rng.random((2, 3, 5)),
        height_edges=np.linspace(0.0, 5.0, 6),
        bar_angle=0.47,
        mismatch={"bulge": {"inner": 0.01}},
        provenance={"seed": 3},
    )


@pytest.fixture
def stored(tmp_path, monkeypatch):
    """A field file, its sha256, and the folder of its copies."""
    monkeypatch.setenv("XDG_CACHE_HOME", str(tmp_path / "cache"))
    path = small_field(np.random.default_rng(5)).write(tmp_path / "field.fits")
    return path, hashlib.sha256(path.read_bytes()).hexdigest(), tmp_path / "cache" / "lensrate" / "fields"


def assert_same(a, b):
    for f in fields(RemnantField):
        x, y = getattr(a, f.name), getattr(b, f.name)
        if isinstance(x, np.ndarray):
            assert np.array_equal(x, y) and x.dtype == y.dtype and type(x) is np.ndarray and x.flags.writeable, f.name
        elif f.name == "ends":
            assert all(np.array_equal(x[k], y[k]) for k in x) and set(x) == set(y)
        else:
            assert x == y, f.name


def test_a_copy_holds_what_the_file_holds(stored):
    path, sha256, folder = stored
    plain = RemnantField.read(path)
    assert_same(read_unpacked(path, sha256), plain)
    (copy,) = folder.iterdir()
    assert copy.name == f"{sha256}.bin"
    # the second time the field file is not opened
    path.unlink()
    again = read_unpacked(path, sha256)
    assert_same(again, plain)
    # what a process writes to its arrays stays with it
    again.ln_rho[:] = 0
    assert_same(read_unpacked(path, sha256), plain)


@pytest.mark.parametrize("keep", [0, 10, 0.5, -3])
def test_a_cut_copy_is_made_again(stored, keep):
    path, sha256, folder = stored
    read_unpacked(path, sha256)
    (copy,) = folder.iterdir()
    whole = copy.read_bytes()
    copy.write_bytes(whole[: int(keep * len(whole)) if keep == 0.5 else keep])
    assert_same(read_unpacked(path, sha256), RemnantField.read(path))
    assert copy.read_bytes() == whole


def test_no_place_for_copies_is_no_hindrance(stored):
    path, sha256, folder = stored
    folder.parent.parent.write_text("a file where the folder should be")
    assert_same(read_unpacked(path, sha256), RemnantField.read(path))
    with pytest.raises(DataFileError, match="no such file"):
        read_unpacked(path.with_name("none.fits"), "0" * 64)


def test_few_copies_are_kept(stored):
    path, _, folder = stored
    for i in range(6):
        read_unpacked(path, f"{i:064d}")
    assert [p.stem[-1] for p in sorted(folder.iterdir())] == ["3", "4", "5"]


def test_damaged_copies_are_found_and_made_again(stored):
    path, sha256, folder = stored
    plain = read_unpacked(path, sha256)
    copy = folder / f"{sha256}.bin"
    assert damaged_copies() == []
    whole = copy.read_bytes()
    start = whole.index(b"\n", whole.index(b"\n") + 1) + 1
    rng = np.random.default_rng(4)
    missed = 0
    for place in rng.integers(start, len(whole), 60):
        flipped = bytearray(whole)
        flipped[place] ^= 1 << int(rng.integers(8))
        copy.write_bytes(flipped)
        found = damaged_copies()
        # bits between two arrays belong to neither
        missed += not found
        assert found == [str(copy)] or copy.read_bytes() == bytes(flipped)
    assert missed < 6
    copy.unlink(missing_ok=True)
    assert_same(read_unpacked(path, sha256), plain)
