"""Shipped data: listed, undamaged, with references; and what is said of files that are not."""

import shutil
from pathlib import Path

import pytest

from lensrate import datafiles
from lensrate.errors import DataFileError, InputError

DATA = datafiles.data_folder()
FILES = sorted(p.relative_to(DATA).as_posix() for p in DATA.rglob("*") if p.is_file() and p.name != "SHA256SUMS")


@pytest.mark.parametrize("name", [f for f in FILES if f.endswith(".toml")])
def test_each_set_is_listed_undamaged_and_cited(name):
    table = datafiles.parse_toml(datafiles.find(name))
    if name.split("/")[0] not in ("scenarios", "published"):
        assert table.get("reference") or table.get("references"), "say where the numbers come from"
    for row in table.get("check", ()):
        assert row["source"] and row["status"], row


def test_the_list_is_complete():
    assert sorted(datafiles.checksums()) == FILES


def test_damage_is_named(tmp_path, monkeypatch):
    copy = tmp_path / "data"
    shutil.copytree(DATA, copy)
    (copy / "kicks" / "hobbs2005.toml").write_text("sigma = 1\n")
    (copy / "imf" / "kroupa2001.toml").unlink()
    (copy / "galaxy" / "mine.toml").write_text("name = 'mine'\n")
    monkeypatch.setenv("LENSRATE_DATA", str(copy))
    for function in (datafiles.data_folder, datafiles.checksums):
        function.cache_clear()
    try:
        for name, word in (
            ("kicks/hobbs2005.toml", "sha256"),
            ("imf/kroupa2001.toml", "missing"),
            ("galaxy/mine.toml", "not listed"),
        ):
            with pytest.raises(DataFileError, match=word):
                datafiles.find(name)
        monkeypatch.setenv("LENSRATE_DATA", str(tmp_path / "nowhere"))
        datafiles.data_folder.cache_clear()
        with pytest.raises(DataFileError, match="LENSRATE_DATA"):
            datafiles.data_folder()
    finally:
        monkeypatch.delenv("LENSRATE_DATA")
        for function in (datafiles.data_folder, datafiles.checksums):
            function.cache_clear()


@pytest.mark.parametrize(
    "content, word",
    [
        (b"a = ", "not a valid TOML"),
        (b"\xff\xfe\x00", "not a valid TOML"),
        (b"a = " + b"[" * 5000 + b"]" * 5000, "not a valid TOML"),
        (b"#" * 5_000_000, "bytes"),
    ],
)
def test_bad_toml_is_named(tmp_path, content, word):
    path = tmp_path / "bad.toml"
    path.write_bytes(content)
    with pytest.raises(InputError, match=word):
        datafiles.parse_toml(path)
    with pytest.raises(InputError, match="no such file"):
        datafiles.parse_toml(tmp_path / "absent.toml")
    with pytest.raises(InputError, match="folder"):
        datafiles.parse_toml(Path(tmp_path))


def test_unknown_names_get_the_nearest():
    with pytest.raises(InputError, match="did you mean 'hobbs2005'"):
        datafiles.read_set("kicks", "hobs2005")
