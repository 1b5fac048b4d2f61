"""``lensrate census``: keys of the JSON, the table, files, the picture, and what is said without fields."""

import json

import pytest
from astropy.table import QTable
from click.testing import CliRunner

from lensrate.cli import main

KEYS = {
    "born", "bound_fraction", "escaped_fraction", "fraction_within_20_kpc", "scale_height_kpc", "scale_heights",
    "local_density_per_pc3", "nearest_pc", "mean_mass_msun",
}  # fmt: skip


def run(*args):
    """Run `main` in this process; returns exit code, stdout, stderr."""
    with CliRunner().isolation() as streams:
        try:
            main([str(a) for a in args])
            code = 0
        except SystemExit as done:
            code = done.code
        return code, streams[0].getvalue().decode(), streams[1].getvalue().decode()


def test_json_keeps_its_contract(kicked_scenario):
    code, out, err = run("census", "--scenario", kicked_scenario, "--json", "--kicks", "hobbs2005")
    assert code == 0 and err == "", err
    result = json.loads(out)
    assert list(result["classes"]) == ["star", "brown_dwarf", "white_dwarf", "neutron_star", "black_hole"]
    for name, c in result["classes"].items():
        assert set(c) == KEYS | {"kinematics", "today", "sampling_errors"}, name
        assert set(c["scale_heights"]) == {"median_over_ln2", "exponential_fit", "half_mass_whole_galaxy"}
        assert c["scale_heights"]["median_over_ln2"] == c["scale_height_kpc"]
        assert c["bound_fraction"] + c["escaped_fraction"] == pytest.approx(1, abs=1e-12)
        assert c["nearest_pc"] == pytest.approx(0.554 * c["local_density_per_pc3"] ** (-1 / 3))
        assert KEYS <= set(result["definitions"])
    assert result["classes"]["neutron_star"]["kinematics"] == "kicked"
    assert (result["kicks"], result["bh_kicks"], result["scenario"]) == ("hobbs2005", "momentum", "small")
    assert result["warnings"] == [] and len(result["references"]) > 10 and len(result["scenario_hash"]) == 12


def test_table_files_and_picture(kicked_scenario, tmp_path):
    table, picture = tmp_path / "c.ecsv", tmp_path / "c.png"
    command = ("census", "--scenario", kicked_scenario, "--save", table, "--plot", picture)
    code, out, err = run(*command)
    assert code == 0, err
    assert max(map(len, (out + err).splitlines())) <= 100
    assert "igoshev2020" in out and "momentum" in out and "neutron star" in out and "sampling errors" in out
    saved = QTable.read(table)
    assert saved.meta["scenario_hash"] in out and saved["scale_height"].unit == "kpc"
    assert saved["local_density"].unit == "1 / pc3" and saved["bound_fraction"][3] < 1
    assert picture.read_bytes()[:4] == b"\x89PNG" and b"scenario_hash" in picture.read_bytes()
    code, out, err = run(*command)
    assert code == 2 and "--overwrite" in err and out == ""
    assert run(*command, "--overwrite", "-q")[2] == ""


def test_without_fields_it_says_so(kicked_scenario, tmp_path):
    bare = tmp_path / "bare.toml"
    bare.write_text(f'base = "{kicked_scenario}"\nfields = ""\n')
    code, out, err = run("census", "--scenario", bare)
    assert code == 0 and "unkicked" in out and "lensrate synthesize" in " ".join(err.split())
    # no law, no need
    assert run("census", "--scenario", bare, "--kicks", "none")[2] == ""


@pytest.mark.parametrize(
    "args, word",
    [
        (["--kicks", "hobs2005"], "hobbs2005"),
        (["--bh-kicks", "maxwel:90"], "maxwell"),
        (["--save", "x.xls"], ".ecsv"),
        (["--plot", "x.gif"], ".png"),
        (["--scenario", "defalt"], "default"),
    ],
)
def test_bad_input(args, word, tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    code, out, err = run("census", *args)
    assert code == 2 and word in err and out == "" and "Traceback" not in err and not list(tmp_path.iterdir())


def test_help_states_every_definition():
    out = run("census", "--help")[1]
    for words in ("median |z| / ln 2", "0.554 n^(-1/3)", "negative energy", "2 kpc", "6 kpc", "1.5 kpc", "20 kpc"):
        assert words in " ".join(out.split()), words


def test_a_law_that_expels_everything(kicked_scenario):
    from click.testing import CliRunner

    from lensrate.cli import cli

    result = CliRunner().invoke(cli, ["census", "--scenario", str(kicked_scenario), "--kicks", "fixed:5000"])
    assert result.exit_code == 0 and "neutron star" in result.stdout and "unknown" in result.stdout
