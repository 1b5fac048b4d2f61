"""The command line as a user meets it: contract of the JSON, coordinates as typed, files, complaints, exit codes."""

import errno
import importlib
import json
import subprocess
import sys

import numpy as np
import pytest
from astropy.io import fits
from astropy.table import Table
from click.testing import CliRunner
from hypothesis import given, settings
from hypothesis import strategies as st

from lensrate.cli import cli, main
from lensrate.errors import InputError
from lensrate.kernels import _jit as kernel_cache

FAST = ["--sources", "distance:8"]
SAMPLE = "marram_events"


def run(*args):
    """Run `main` in this process; returns exit code, stdout, stderr."""
    runner = CliRunner()
    with runner.isolation() as streams:
        try:
            main([str(a) for a in args])
            code = 0
        except SystemExit as done:
            code = done.code
        out, err = streams[0].getvalue().decode(), streams[1].getvalue().decode()
    return code, out, err


def forecast(*args):
    code, out, err = run("sightline", "--json", *args)
    assert code == 0, err
    return json.loads(out)


def test_json_keeps_its_contract():
    result = forecast("1.0", "-3.9")
    assert result["l_deg"] == 1.0 and result["b_deg"] == -3.9
    assert (result["scenario"], result["frame"], result["u_0_limit"], result["t_E_range_d"]) == (
        "default",
        "heliocentric",
        1.0,
        None,
    )
    assert result["sources"]["rule"] == "limit:I=21" and set(result["sources"]) == {
        "rule", "extinction", "mean_distance_kpc", "disc_share", "source_density_per_arcmin2"
    }  # fmt: skip
    assert list(result["lenses"]) == ["star", "brown_dwarf", "white_dwarf", "neutron_star", "black_hole", "all"]
    for name, lens in result["lenses"].items():
        assert set(lens) == {
            "optical_depth", "rate_per_star_per_yr", "mean_t_E_d", "median_t_E_d", "share_of_events",
            "rate_standard_error", "kinematics",
        }  # fmt: skip
        assert lens["optical_depth"] > 0 and lens["rate_per_star_per_yr"] > 0, name
    assert set(result["components"]) == {"thin_disc", "thick_disc", "bulge", "nuclear_disc", "halo"}
    total = result["lenses"]["all"]
    for key in ("optical_depth", "rate_per_star_per_yr"):
        assert sum(c[key] for c in result["components"].values()) == pytest.approx(total[key], rel=1e-9)
        assert sum(result["lenses"][c][key] for c in list(result["lenses"])[:-1]) == pytest.approx(total[key], rel=1e-9)
    words = {
        "star": "stellar",
        "white_dwarf": "stellar",
        "neutron_star": "kicked",
        "black_hole": "kicked",
        "all": "mixed",
    }
    assert {n: result["lenses"][n]["kinematics"] for n in words} == words
    assert result["lenses"]["star"]["rate_standard_error"] is None and "orbits" in result["velocities"]
    assert 0 < result["lenses"]["neutron_star"]["rate_standard_error"] < 1e-9
    assert len(result["references"]) > 10 and result["version"] and len(result["fields"]["sha256"]) == 64
    unkicked = forecast("1.0", "-3.9", "--kicks", "none")
    assert unkicked["lenses"]["neutron_star"]["kinematics"] == "unkicked" and unkicked["fields"] is None
    assert any("unkicked" in w for w in unkicked["warnings"])


def test_negative_numbers_are_taken_as_typed():
    a = forecast("-1.5", "-2.5", *FAST)
    b = forecast(*FAST, "--", "-1.5", "-2.5")
    c = forecast(*FAST, "--t-E-range", "-0.0", "1e9", "-1.5", "-2.5")
    assert (
        a == b
        and a["l_deg"] == -1.5
        and c["lenses"]["all"]["rate_per_star_per_yr"]
        == pytest.approx(a["lenses"]["all"]["rate_per_star_per_yr"], rel=1e-3)
    )
    code, _, err = run("sightline", "1.0", "-3.9", "--scenari", "default")
    assert code == 2 and "--scenari" in err and "--scenario" in err


def test_equatorial_input():
    degrees = forecast("--icrs", "267.9174", "-29.8906", *FAST)
    sexagesimal = forecast("--icrs", "17:51:40.19", "-29:53:26.3", *FAST)
    assert degrees["l_deg"] == pytest.approx(359.8613, abs=2e-4) and degrees["b_deg"] == pytest.approx(
        -1.6210, abs=2e-4
    )
    assert sexagesimal["l_deg"] == pytest.approx(degrees["l_deg"], abs=1e-3)


def test_people_get_a_table_with_its_conditions():
    code, out, err = run("sightline", "1", "-3", "--extinction", "I=1.0", "--t-E-range", "2", "300")
    assert code == 0
    for words in ("limit:I=21", "A_I = 1.00", "u_0 < 1", "2 < t_E < 300 d", "heliocentric", "neutron star", "kicked"):
        assert words in out
    assert "igoshev2020" in out and max(map(len, out.splitlines() + err.splitlines())) <= 100
    by_element = run("sightline", "1", "-3", "--by", "element", *FAST)[1]
    assert "thin_disc_old" in by_element
    assert run("sightline", "1", "-3", "--quiet")[2] == ""


def test_files_hold_the_numbers_and_how_they_were_made(tmp_path):
    wanted = forecast("1", "-3", *FAST)
    rate = wanted["lenses"]["black_hole"]["rate_per_star_per_yr"]
    for ending in ("ecsv", "csv", "fits", "vot", "json"):
        path = tmp_path / f"out.{ending}"
        code, _, err = run("sightline", "1", "-3", *FAST, "--save", path, "-q")
        assert code == 0, err
        text = path.read_bytes()
        assert wanted["scenario_hash"].encode() in text and b"Wegg" in text
        if ending == "json":
            assert json.loads(text)["lenses"]["black_hole"]["rate_per_star_per_yr"] == rate
            continue
        if ending == "fits":
            with fits.open(path) as hdus:
                made = json.loads(hdus[1].header["MADE"])
                rows = {str(n): r for n, r in zip(hdus[1].data["lens"], hdus[1].data["rate"])}
            assert made["scenario"] == "default" and made["version"] == wanted["version"]
        else:
            table = Table.read(
                path,
                format={"ecsv": "ascii.ecsv", "csv": "ascii.csv", "vot": "votable"}[ending],
                **({"comment": "#"} if ending == "csv" else {}),
            )
            rows = {str(n): r for n, r in zip(table["lens"], table["rate"])}
        assert rows["black_hole"] == rate
    code, _, err = run("sightline", "1", "-3", *FAST, "--save", tmp_path / "out.ecsv")
    assert code == 2 and "--overwrite" in err
    assert run("sightline", "1", "-3", *FAST, "--save", tmp_path / "out.ecsv", "--overwrite", "-q")[0] == 0
    assert sorted(p.name for p in tmp_path.iterdir()) == ["out.csv", "out.ecsv", "out.fits", "out.json", "out.vot"]


def test_pictures_are_written_with_their_provenance(tmp_path):
    for name, picture in (
        ("a.png", "overview"),
        ("b.svg", "stacked"),
        ("c.pdf", "pi_E"),
        ("d.png", "theta_E"),
        ("e.png", "depth"),
    ):
        assert run("sightline", "1", "-3", *FAST, "--plot", tmp_path / name, "--picture", picture, "-q")[0] == 0
        assert (tmp_path / name).stat().st_size > 5000
    assert (
        b"scenario_hash" in (tmp_path / "a.png").read_bytes() and b"scenario_hash" in (tmp_path / "b.svg").read_bytes()
    )


def test_many_sightlines(tmp_path):
    path = tmp_path / "fields.csv"
    path.write_text("night,name,l,b,A_I\n1,M01,1.0,-2.9,1.25\n1,M02,359.0,-2.0,2.0\n2,M03,2.0,-4.0,\n")
    code, out, err = run("sightline", "--table", path, "--json", "--jobs", "2")
    assert code == 0 and "columns not used, carried along: night" in err, err
    rows = json.loads(out)
    one = forecast("1.0", "-2.9", "--extinction", "I=1.25")
    assert rows[0]["lenses"] == one["lenses"] and rows[0]["sources"]["extinction"] == {"I": 1.25}
    assert rows[1]["sources"]["extinction"] == {"I": 2.0} and rows[1]["row"]["name"] == rows[1]["name"] == "M02"
    assert rows[0]["scenario_hash"] == one["scenario_hash"] != rows[2]["scenario_hash"]
    dust = forecast("2.0", "-4.0")
    assert rows[2]["sources"]["extinction"] == dust["sources"]["extinction"]
    assert run("sightline", "--table", path, "--save", tmp_path / "r.fits", "-q")[0] == 0
    saved = Table.read(tmp_path / "r.fits")
    assert saved["rate_all"][0] == one["lenses"]["all"]["rate_per_star_per_yr"] and list(saved["name"]) == [
        "M01",
        "M02",
        "M03",
    ]
    # the table's own provenance is what the rows share
    assert json.loads(saved.meta["MADE"])["scenario_hash"] == dust["scenario_hash"] == saved["scenario_hash"][2]
    code, out, _ = run("sightline", "--table", path, "-q")
    assert code == 0 and "A_I by row" in out and max(map(len, out.splitlines())) <= 100


def test_scenarios(tmp_path):
    code, out, _ = run("scenario")
    assert code == 0 and "hangould2003" in out and "griest1991" in out
    code, out, _ = run("scenario", "default")
    again = tmp_path / "again.toml"
    again.write_text(out)
    assert code == 0
    first, second = (run("scenario", n, "--check")[1].split("hash ")[1] for n in ("default", again))
    assert first == second
    mine = tmp_path / "mine.toml"
    mine.write_text('base = "default"\nkicks = "maxwell:190"\n[change.bulge.density]\nangle = 30.0\n')
    base, changed = forecast("1", "-3"), forecast("1", "-3", "--scenario", mine)
    assert changed["scenario"] == "mine" and changed["scenario_hash"] != base["scenario_hash"]
    assert changed["components"]["bulge"]["optical_depth"] < base["components"]["bulge"]["optical_depth"]
    code, out, _ = run("scenario", "default", "--references")
    assert code == 0 and "Sormani" in out and "Cummings" in out


BAD = [
    (["1", "-91"], "b: -91"),
    (["nan", "-3"], "l: nan"),
    (["1", "inf"], "b: inf"),
    (["one", "-3"], "'one'"),
    (["1"], "two numbers"),
    ([], "either L B or --table"),
    (["1", "-3", "4"], "unexpected extra argument"),
    (["1", "-3", "--sources", "distance:-8"], "-8"),
    (["1", "-3", "--sources", "distance:0.01"], "0.05"),
    (["1", "-3", "--sources", "limt:I=21"], "limit"),
    (["1", "-3", "--sources", "limit:R=21"], "R"),
    (["1", "-3", "--sources", "limit:I=nan"], "finite"),
    (["1", "-3", "--scenario", "defalt"], "did you mean 'default'"),
    (["1", "-3", "--scenario", "nowhere/my.toml"], "no such file"),
    (["1", "-3", "--kicks", "hobs2005"], "hobbs2005"),
    (["1", "-3", "--kicks", "maxwell:-3"], "-3"),
    (["1", "-3", "--extinction", "1.2"], "I=1.25"),
    (["1", "-3", "--extinction", "I=-1"], "extinction"),
    (["1", "-3", "--extinction", "R=1"], "R"),
    (["1", "-3", "--extinction", "I=1", "--extinction", "I=2"], "twice"),
    (["1", "-3", "--picture", "depth"], "--picture"),
    (["1", "-3", "--jobs", "2"], "--jobs"),
    (["1", "-3", "--bh-kicks", "momentm"], "bh_kicks: 'momentm' is not known, did you mean 'momentum'?"),
    (["1", "-3", "--bh-kicks", "maxwell:fast"], "bh_kicks: 'maxwell:fast' holds something that is not a number"),
    (["1", "-3", "--save"], "Option '--save' requires an argument."),
    (["1", "-3", "--u-0-limit", "0"], "u_0_limit"),
    (["1", "-3", "--t-E-range", "300", "2"], "t_E_range"),
    (["1", "-3", "--save", "out.xls"], ".ecsv"),
    (["1", "-3", "--save", "no_such_folder/out.ecsv"], "does not exist"),
    (["1", "-3", "--plot", "out.gif"], "ending '.gif' of 'out.gif' is not known (known: .png, .pdf, .svg)"),
    (["--table", "absent.csv"], "absent.csv"),
    (["--icrs", "17:99:00", "-29"], "17:99:00"),
    (["--icrs", "25:03:32", "-30:02:05"], "ra: '25:03:32' given, must be between 0 and 360 degrees, or 0 and 24 hours"),
    (["--icrs", "-92.5", "-30"], "ra: '-92.5' given"),
    (["1", "-3", "--sources", "clump", "--extinction", "I=3.1"], "--extinction has no effect here"),
]  # fmt: skip


@pytest.mark.parametrize("args, word", BAD, ids=lambda x: "_".join(x) if isinstance(x, list) else None)
def test_bad_input_is_one_clear_line(args, word, tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    code, out, err = run("sightline", *args)
    assert code == 2 and out == "" and word in err and "Traceback" not in err
    assert not list(tmp_path.iterdir())


@pytest.mark.parametrize(
    "text, word",
    [
        ("l,b\n1,-3\n2,-95\n", "row 2, column b"),
        ("l,b\n1,nan\n", "row 1, column b"),
        ("l,lat\n1,-3\n", "column 'b'"),
        ("l,b\n1,-3\n1,south\n", "fields.csv': row 2, column b: 'south' is not a number in deg"),
        ("ra,dec\n268,-30\n367,-30\n", "row 2, column ra: 367 deg given, must be between 0 and 360"),
        ("l,b,A_I\n1,-3,-2\n", "extinction"),
        ("l,b,A_i\n1,-3,2\n", "did you mean 'A_I'"),
        ("l,b,AI\n1,-3,2\n", "column 'AI' is not known, did you mean 'A_I'? (known: l, b, ra, dec, A_V, A_I"),
        ("l,b,extinction\n1,-3,2\n", "column 'extinction' is not known"),
        ("", "no rows"),
        ("l,b\n1,-3,4\n", "cannot be read"),
        ("l,b\n", "no rows"),
    ],
)
def test_bad_tables_name_row_and_column(tmp_path, text, word):
    path = tmp_path / "fields.csv"
    path.write_text(text)
    code, out, err = run("sightline", "--table", path)
    assert code == 2 and word in err and out == ""


@pytest.mark.parametrize(
    "text, word",
    [
        ('base = "default"\nkick = "none"', "did you mean 'kicks'"),
        ('galaxy = "defaul"', "did you mean 'default'"),
        ("u_0_limit = nan", "u_0_limit"),
        ("numerics = {nodes = 1000}", "nodes"),
        ("numerics = {nodez = 5}", "did you mean 'nodes'"),
        ('[change.buldge]\nimf = "kroupa2001"', "did you mean 'bulge'"),
        ("[change.bulge.density]\nangel = 3.0", "did you mean 'angle'"),
        ("[change.bulge.density]\nmass = {value = 1.0, unit = 'kpc'}", "mass"),
        ("[change.bulge.density]\nmass = -1.0", "scenario 'loop': change.bulge.density: Bar: mass -1 solMass,"),
        ("[change.bulge.density.mass]\nvalue = 1e10\nunit = 'Mson'", "change.bulge.density.mass: unit 'Mson'"),
        ("[change.sun]\nR0 = -8.0", "scenario 'loop': change.sun.R0"),
        ("[[component]]\nname = 'x'\ndensity = 3\nkinematics = 3", "scenario 'loop': component 1.density"),
        (
            "[lens_class.pbh]\nrides_on = 'hallo'\nmass_fraction = 0.1\nmass_function = {kind = 'delta', M = 30.0}",
            "did you mean 'halo'",
        ),
        ("sources = 3", "must be text"),
        ("component = 3", "list of tables"),
        ("luminosity = 'nofile.ecsv'", "no file"),
        ("[change.halo.density]\nq = 0", "above 0"),
        ("[change.thin_disc.density]\nsigma_W = 0", "above 0"),
        ("[change.bulge.density]\nc = {value = 0.2, unti = 'kpc'}", "did you mean 'unit'"),
        ("fields = 'mine.fits'", "no file"),
        ("this is not toml", "not a valid TOML"),
        ("base = 'loop.toml'", "circles"),
    ],
)
def test_bad_scenarios_name_the_key(tmp_path, text, word):
    path = tmp_path / "loop.toml"
    path.write_text(text)
    code, out, err = run("sightline", "1", "-3", "--scenario", path)
    assert code == 2 and word in err and "Traceback" not in err and out == ""


def test_unwritable_folder(tmp_path):
    folder = tmp_path / "shut"
    folder.mkdir()
    folder.chmod(0o500)
    code, out, err = run("sightline", "1", "-3", *FAST, "--save", folder / "x.ecsv", "-q")
    folder.chmod(0o700)
    # the superuser may write anywhere
    assert (code == 2 and "not writable" in err and out == "") or (folder / "x.ecsv").exists()


def test_commands_are_named_when_mistyped():
    code, _, err = run("sightlin", "1", "-3")
    assert code == 2 and "did you mean 'sightline'" in err
    assert run("--help")[0] == 0 and run("--version")[0] == 0
    for name, command in cli.commands.items():
        assert command.help and "Examples" in command.help, name
        assert run(name, "--help")[0] == 0


@settings(derandomize=True, max_examples=120, deadline=None)
@given(st.text(max_size=12), st.text(max_size=12))
def test_garbage_is_refused_politely(lon, lat):
    code, out, err = run("sightline", "--sources", "distance:8", "--json", "--", lon, lat)
    assert code in (0, 2) and "Traceback" not in err
    if code == 0:
        assert np.isfinite(json.loads(out)["lenses"]["all"]["optical_depth"])


@settings(derandomize=True, max_examples=150, deadline=None)
@given(st.sampled_from(["--sources", "--kicks", "--bh-kicks", "--extinction", "--scenario"]), st.text(max_size=16))
def test_garbage_in_options_is_refused_politely(option, text):
    code, _, err = run("sightline", "1", "-91", option, text)
    assert code == 2 and "Traceback" not in err and all(c.isprintable() or c == "\n" for c in err)


def test_pipes_stay_clean():
    code = "from lensrate.cli import main; main(['sightline', '1', '-3', '--sources', 'distance:8', '--json'])"
    out = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert json.loads(out.stdout)["l_deg"] == 1.0 and out.stderr == ""


def test_an_interrupt_inside_compiled_code_is_an_interrupt(monkeypatch, capsys):
    import lensrate.cli as command

    def kernel(how):
        def body(*args, **kwargs):
            try:
                raise KeyboardInterrupt
            except KeyboardInterrupt as stop:
                raise SystemError("returned a result with an exception set") from (stop if how == "cause" else None)

        return body

    for how in ("cause", "context"):
        monkeypatch.setattr(command.cli, "main", kernel(how))
        with pytest.raises(SystemExit) as left:
            command.main([])
        assert left.value.code == 130 and "interrupted" in capsys.readouterr().err

    def broken(*args, **kwargs):
        raise SystemError("of another kind")

    monkeypatch.setattr(command.cli, "main", broken)
    with pytest.raises(SystemError, match="another kind"):
        command.main([])


@pytest.mark.parametrize("how", ["python", "compiled"])
def test_an_interrupt_says_what_is_kept(how, tmp_path, monkeypatch, capsys):
    """Wherever in a long run it comes, and only where there is something."""
    import click

    import lensrate.cli as command
    from lensrate.cli.interrupts import keeping

    folder = tmp_path / "m.checkpoint"

    def work():
        if how == "python":
            raise KeyboardInterrupt
        try:
            raise KeyboardInterrupt
        except KeyboardInterrupt as stop:
            raise SystemError("returned a result with an exception set") from stop

    def run(path):
        @click.command()
        def body():
            with keeping("finished pieces", path):
                work()

        monkeypatch.setattr(command, "cli", body)
        with pytest.raises(SystemExit) as left:
            command.main([])
        assert left.value.code == 130
        return capsys.readouterr().err.strip()

    assert run(folder) == "lensrate: interrupted; nothing half written was left"
    assert run(None) == "lensrate: interrupted; nothing was kept, since no file is written"
    folder.mkdir()
    kept = f"finished pieces are kept in '{folder}', the same command goes on from there"
    assert run(folder) == f"lensrate: interrupted; {kept}"


def test_complaints_of_the_system_name_the_file(monkeypatch, capsys):
    import lensrate.cli as command

    cases = [
        (PermissionError(errno.EACCES, "Permission denied", "events.csv"), "lensrate: events.csv: Permission denied\n"),
        (OSError(errno.EIO, "Input/output error"), "lensrate: Input/output error\n"),
        (OSError(errno.ENOSPC, "No space left on device"),
         "lensrate: output could not be written (No space left on device)\n"),
        (OSError(errno.EROFS, "Read-only file system", "/x/a.fits"),
         "lensrate: /x/a.fits: could not be written (Read-only file system)\n"),
    ]  # fmt: skip
    for error, words in cases:

        def fail(*_, error=error, **__):
            raise error

        monkeypatch.setattr(command.cli, "main", fail)
        with pytest.raises(SystemExit) as left:
            command.main([])
        assert left.value.code == 1 and capsys.readouterr().err == words


@pytest.mark.parametrize(
    "args, where, name",
    [
        (["campaign", "marram"], "surveys.yields", "campaign"),
        (["compare", SAMPLE, "--campaign", "marram"], "events.versus", "compare_sample"),
        (["constrain", SAMPLE, "--campaign", "marram"], "inference.constrain", "constrain"),
        (["spread", "1", "-3"], "surveys.spread", "sightline_spread"),
    ],
)
def test_compiling_is_announced_before_it_begins(args, where, name, tmp_path, monkeypatch):
    def begun(*_, **__):
        raise InputError("the work has begun")

    monkeypatch.setattr(kernel_cache, "CACHE", tmp_path)
    monkeypatch.setattr(importlib.import_module(f"lensrate.{where}"), name, begun)
    code, out, err = run(*args)
    assert code == 2 and out == ""
    assert err.index("compiling kernels, once per installation") < err.index("the work has begun")
    assert "compiling" not in run(*args, "-q")[2]


@pytest.mark.parametrize("option", ["--theta-E", "--pi-E-err", "--lens-limit"])
def test_a_typed_number_that_is_none_is_refused(option):
    code, out, err = run("odds", "--t-E", "20", "--pi-E", "0.1", "--at", "1", "-3", option, "nan")
    assert code == 2 and out == "" and f"{option}: nan given, a finite number is needed" in " ".join(err.split())
