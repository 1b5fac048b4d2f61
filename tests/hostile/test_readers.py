"""Readers fed with what nobody would write: a clear refusal or a result, never another exception, hang or huge memory.

The numbers of inputs: `FEW` each in the default suite, `MANY` in the slow one. What the search found once stands below
as tests of its own.
"""

import gzip
import io
import json
import resource
import tomllib
from contextlib import contextmanager, suppress

import numpy as np
import pytest
from astropy.io import fits
from astropy.table import Table
from hypothesis import HealthCheck, Phase, given, settings
from mutations import mutated, toml, torn

from lensrate.datafiles import data_folder
from lensrate.errors import DataFileError, InputError, LensrateError
from lensrate.events.observed import Sample
from lensrate.galaxy.model import Galaxy
from lensrate.io import read_rows
from lensrate.provenance import read_made
from lensrate.remnants.ifmr import Ifmr
from lensrate.remnants.imf import Imf
from lensrate.remnants.kicks import parse_kick
from lensrate.remnants.lifetimes import Lifetimes
from lensrate.scenario import Scenario, resolve
from lensrate.sources.extinction import DustDisc
from lensrate.sources.luminosity import LuminosityFunction
from lensrate.surveys.campaign import Campaign
from lensrate.surveys.dust_map import DustMap
from lensrate.surveys.efficiency import Efficiency
from lensrate.surveys.facilities import facility_names
from lensrate.surveys.family import Family
from lensrate.surveys.fieldlist import FieldList

DATA = data_folder()
FEW, MANY = 60, 1500
#: bytes that the readers may take beyond what is there before them
ROOM = 3_000_000_000


@contextmanager
def little_memory():
    """Refuse the process large pieces of memory, so that an unchecked size is an error at once."""
    soft, hard = resource.getrlimit(resource.RLIMIT_AS)
    with open("/proc/self/statm") as file:
        now = int(file.read().split()[0]) * resource.getpagesize()
    resource.setrlimit(resource.RLIMIT_AS, (now + ROOM, hard))
    try:
        yield
    finally:
        resource.setrlimit(resource.RLIMIT_AS, (soft, hard))


def shipped(kind, start=""):
    return [tomllib.loads(p.read_text()) for p in sorted((DATA / kind).glob(f"{start}*.toml"))]


def scenario_tables():
    base = Scenario.read("default").to_dict()
    own = {"mass_function": {"kind": "power", "M_lo": 1.0, "M_hi": 30.0, "slope": 2.0}, "rides_on": "halo"}
    changed = {"bulge": {"density": {"mass": {"value": 1e10, "unit": "Msun"}}}, "sun": {"R0": 8.0}}
    more = {"kicks": "none", "bh_kicks": "none", "extinction": {"I": 1.0}, "numerics": {"nodes": 5, "step_dex": 0.05}}
    return [{**base, **more, "lens_class": {"pbh": {**own, "mass_fraction": 0.1}}, "change": changed}]


def scenario(path):
    s = Scenario.read(path)
    s.build_galaxy()
    # what an output would state of it is the same scenario
    assert Scenario.from_dict(tomllib.loads(s.to_toml())).hash == s.hash


def galaxy(path):
    g = Galaxy.read(str(path))
    assert all(np.all(np.isfinite(a)) for a in (g.packed[1], g.packed[3]))


READERS = {
    "scenario": (scenario_tables, scenario),
    "model": (scenario_tables, lambda p: resolve(Scenario.read(p))),
    "galaxy": (lambda: shipped("galaxy"), galaxy),
    "campaign": (lambda: shipped("campaigns"), lambda p: Campaign.read(p).header()),
    "family": (lambda: shipped("families"), lambda p: Family.read(p).for_base(Scenario.read("default"))),
    "facilities": (lambda: shipped("facilities"), lambda p: facility_names(str(p))),
    "imf": (lambda: shipped("imf"), lambda p: Imf.read(str(p))),
    "ifmr": (lambda: shipped("ifmr"), lambda p: Ifmr.read(str(p))),
    "lifetimes": (lambda: shipped("lifetimes"), lambda p: Lifetimes.read(str(p))),
    "kicks": (lambda: shipped("kicks"), lambda p: parse_kick(str(p)).bin_weights([0.0, 50.0, 100.0])),
    "dust": (lambda: shipped("sources", "dust"), lambda p: DustDisc.read(str(p))),
}
LENGTHS = [pytest.param(FEW, id="few"), pytest.param(MANY, id="many", marks=pytest.mark.slow)]


def search(strategy, read, many):
    """Run a reader over drawn inputs; anything but our own errors comes out of here."""
    quiet = list(HealthCheck)

    @settings(
        max_examples=many, deadline=None, database=None, suppress_health_check=quiet, derandomize=many < MANY // 4,
        phases=[Phase.generate, Phase.shrink],
    )  # fmt: skip
    @given(strategy)
    def run(drawn):
        with suppress(LensrateError):
            read(drawn)

    with little_memory():
        run()


@pytest.mark.parametrize("many", LENGTHS)
@pytest.mark.parametrize("name", READERS)
def test_toml_with_things_exchanged(name, many, tmp_path):
    tables, read = READERS[name]
    for beside in (DATA / "campaigns").glob("*.ecsv"):
        (tmp_path / beside.name).write_bytes(beside.read_bytes())
    path = tmp_path / "mutant.toml"

    def through_a_file(table):
        path.write_text(toml(table))
        read(path)

    search(mutated(tables()), through_a_file, many)


SAMPLE = {"event": ["A", "B"], "l": [1.0, 1.1], "b": [-3.0, -3.1], "t_E": [20.0, 30.0], "t_E_err": [2.0, 3.0],
          "pi_EN": [0.1, np.nan], "pi_EN_err": [0.01, np.nan], "frame": ["geocentric", "heliocentric"],
          "t_0par": [57000.0, np.nan]}  # fmt: skip
DRAWS = {"t_E": [20.0, 21.0], "pi_E": [0.1, 0.2], "weight": [1.0, 2.0]}
CURVE = {"t_E": [1.0, 10.0, 100.0], "efficiency": [0.1, 0.5, 0.4]}
FIELDS = {"name": ["A", "B"], "l": [1.0, 2.0], "b": [-3.0, -2.0], "A_I": [1.0, 1.1], "radius_deg": [0.5, 0.6]}
STARS = {"magnitude": [-2.0, 0.0, 3.0], "number": [0.001, 0.01, 0.2]}
TABLES = {
    "sample": (SAMPLE, {"invented": True}, lambda p: Sample.read(p).summary()),
    "draws": (DRAWS, {"prior": "uniform", "l": 1.0, "b": -3.0}, lambda p: Sample.read(p).summary()),
    "efficiency": (CURVE, {"per": "source", "includes": ["gaps"]}, lambda p: Efficiency.read(p).mean(
        np.geomspace(0.1, 300, 50), np.ones(50))),
    "fields": (FIELDS, {}, FieldList.read),
    "luminosity": (STARS, {"band": "I", "clump_per_msun": 0.01}, LuminosityFunction.read),
    "made": (CURVE, {"scenario_text": "", "scenario_hash": ""}, read_made),
}  # fmt: skip


@pytest.mark.parametrize("many", LENGTHS)
@pytest.mark.parametrize("ending", [".ecsv", ".csv", ".fits", ".vot"])
@pytest.mark.parametrize("name", TABLES)
def test_tables_torn(name, ending, many, tmp_path):
    from lensrate.io import write_table

    columns, meta, read = TABLES[name]
    path = tmp_path / f"whole{ending}"
    write_table(Table(columns, meta=meta), path)
    whole = path.read_bytes()
    mutant = tmp_path / f"mutant{ending}"

    def through_a_file(content):
        mutant.write_bytes(content)
        read(mutant)

    search(torn(whole), through_a_file, many // 4)


@pytest.fixture(scope="module")
def image(tmp_path_factory):
    path = tmp_path_factory.mktemp("dust") / "dust.fits"
    hdu = fits.PrimaryHDU(np.ones((4, 5)))
    for key, value in {"CTYPE1": "GLON-CAR", "CTYPE2": "GLAT-CAR", "CRVAL1": 1.0, "CRVAL2": -3.0, "CDELT1": -0.1,
                       "CDELT2": 0.1, "CRPIX1": 3, "CRPIX2": 2}.items():  # fmt: skip
        hdu.header[key] = value
    hdu.writeto(path)
    return path


@pytest.mark.parametrize("many", LENGTHS)
def test_dust_maps_torn(image, many, tmp_path):
    path = tmp_path / "mutant.fits"

    def through_a_file(content):
        path.write_bytes(content)
        DustMap.read(path).at(1.0, -3.0)

    search(torn(image.read_bytes()), through_a_file, many)


# ---- what was found, and single cases that a search would not hit

CSV = "event,l,b,t_E,t_E_err\n"
DEEP = "a = " + "[" * 200 + "]" * 200


@pytest.mark.parametrize(
    "text",
    [
        DEEP, "a = " + "[" * 100_000, 'name = "' + "x" * 5_000_000 + '"', "u_0_limit = " + "9" * 5000,
        "u_0_limit = 0x" + "f" * 400, "u_0_limit = nan", "name = []", "component = {}", "numerics = [1]",
        "extinction = {I = inf}", "kicks = []", "base = []", 'base = "mutant.toml"', 'galaxy = "\\u0000.toml"',
        'galaxy = "' + "x/" * 3000 + 'y.toml"', 'luminosity = "\\u0000"', 'luminosity = "' + "x" * 5000 + '"',
        'fields = "\\u0000.fits"', "[change]\nsun = 1", "[[component]]\n", "\ufeffname = 'x'", "a\x00 = 1",
        'kicks = "maxwell:1e400"', 'sources = "distance:nan"', 'name = "\\ud800"', "[lens_class.x]\nrides_on = {}",
    ],
    ids=lambda text: ascii(text[:20]),
)  # fmt: skip
def test_scenarios_that_nobody_would_write(text, tmp_path):
    path = tmp_path / "mutant.toml"
    path.write_text(text, encoding="utf-8")
    # the first letters of a very long line are enough of an answer
    with pytest.raises(InputError) as refused:
        resolve(Scenario.read(path))
    assert len(str(refused.value)) < 20_000


def test_numbers_of_the_wrong_kind_in_galaxy_and_other_sets(tmp_path):
    path = tmp_path / "x.toml"
    whole = shipped("galaxy", "griest")[0]
    for key, bad in (("references", 1.5), ("references", [1]), ("notes", 1), ("name", []), ("potential", {}),
                     ("lens_class", []), ("sun", [])):  # fmt: skip
        path.write_text(toml({**whole, key: bad}))
        with pytest.raises(InputError, match=key):
            Galaxy.read(str(path))
    facilities = shipped("facilities")[0]
    path.write_text(toml({**facilities, "invented": 3}))
    with pytest.raises(InputError, match="invented"):
        facility_names(str(path))
    path.write_text(toml({**shipped("sources", "dust")[0]}).replace("[", "[[", 1).replace("]", "]]", 1))
    with suppress(LensrateError):
        DustDisc.read(str(path))
    dust = shipped("sources", "dust")[0]
    for unit in (np.inf, np.nan, 2, ["mag"]):
        dust["dust"]["bulge_factor"]["unit"] = unit
        path.write_text(toml(dust))
        with pytest.raises(InputError, match="bulge_factor: unit .* must be text"):
            DustDisc.read(str(path))
    dust["dust"]["bulge_factor"] = {"value": 1e300, "unit": "1e300"}
    path.write_text(toml(dust))
    with pytest.raises(InputError, match="bulge_factor"):
        DustDisc.read(str(path))


def fits_with(key, value, **columns):
    buffer = io.BytesIO()
    Table(columns or SAMPLE).write(buffer, format="fits")
    raw = buffer.getvalue()
    i = raw.index(f"{key:8}=".encode(), 2880)
    return raw[:i] + f"{key:8}= {value:>20}".ljust(80).encode() + raw[i + 80 :]


VOT = '<?xml version="1.0"?><VOTABLE version="1.4"><RESOURCE><TABLE {0}><FIELD name="l" datatype="double" {1}/><DATA>' \
      "<TABLEDATA><TR><TD>1</TD></TR></TABLEDATA></DATA></TABLE></RESOURCE></VOTABLE>"  # fmt: skip
ENTITIES = '<?xml version="1.0"?><!DOCTYPE V [<!ENTITY a "aaaaaaaaaa">' + "".join(
    f'<!ENTITY {b} "{f"&{a};" * 10}">' for a, b in zip("abcdefgh", "bcdefghi")
)
ALIASES = "\n".join(
    ["# %ECSV 1.0", "# ---", "# datatype:", "# - {name: t_E, datatype: float64}", "# meta: !!omap",
     "# - {a0: &a0 [x,x,x,x,x,x,x,x,x,x]}",
     *(f"# - {{a{i}: &a{i} [{','.join([f'*a{i - 1}'] * 10)}]}}" for i in range(1, 9)), "# - {prior: *a8}", "t_E", "1"]
)  # fmt: skip
TIMES = "\n".join(
    ["# %ECSV 1.0", "# ---", "# datatype:", "# - {name: l.jd1, datatype: float64}",
     "# - {name: l.jd2, datatype: float64}",
     "# - {name: b, datatype: float64}", "# - {name: t_E, datatype: float64}", "# meta: !!omap",
     "# - __serialized_columns__:", "#     l:", "#       __class__: astropy.time.core.Time", "#       format: jd",
     "#       scale: utc", "#       jd1: !astropy.table.SerializedColumn {name: l.jd1}",
     "#       jd2: !astropy.table.SerializedColumn {name: l.jd2}", "l.jd1 l.jd2 b t_E", "2450000 0.5 -3 20"]
)  # fmt: skip


@pytest.mark.parametrize(
    "name, content",
    [
        ("rows.fits", fits_with("NAXIS2", 10**12)), ("rows.fits", fits_with("NAXIS2", -1)),
        ("rows.fits", fits_with("NAXIS2", 10**7)), ("rows.fits", fits_with("NAXIS1", 10**12)),
        ("rows.fits", fits_with("TFIELDS", 10**9)), ("rows.fits", fits_with("PCOUNT", 10**15)),
        ("rows.fits", fits_with("TFORM1", "'999999999999A'")), ("rows.fits", b"SIMPLE  =" + b" " * 100_000),
        ("rows.fits", gzip.compress(fits_with("NAXIS2", 2), mtime=0)),
        ("rows.csv", gzip.compress(b"l,b\n" + b"1,2\n" * 10**6, mtime=0)),
        ("rows.vot", VOT.format('nrows="2000000000000"', "").encode()),
        ("rows.vot", VOT.format("", 'arraysize="99999999999"').encode()), ("rows.vot", (ENTITIES + "]>").encode()),
        ("rows.ecsv", ALIASES.encode()), ("rows.ecsv", TIMES.encode()),
        ("rows.csv", (",".join(f"c{i}" for i in range(30_000)) + "\n").encode()),
        ("rows.csv", b"\xff\xfe\x00event,l\n\x00\x01"),
    ],
    ids=lambda x: x if isinstance(x, str) else ascii(x[:12])[2:-1],
)  # fmt: skip
def test_tables_that_claim_more_than_they_hold(name, content, tmp_path):
    path = tmp_path / name
    path.write_bytes(content)
    with little_memory():
        for read in (read_rows, Sample.read, Efficiency.read, FieldList.read, LuminosityFunction.read, read_made):
            with pytest.raises(InputError) as refused:
                read(path)
            assert name in str(refused.value) or "column" in str(refused.value)


@pytest.mark.parametrize(
    "head, rows",
    [
        ("# prior: uniform\n# l: 1\n# b: -3\n", "t_E,weight\n20,1e308\n21,1e308\n"),
        ("# prior: [1, 2]\n# l: 1\n# b: -3\n", "t_E,ln_likelihood\n20,1e308\n21,-1e308\n"),
        ("# prior: uniform\n# l: null\n# b: {}\n", "t_E,delta_chi2\n20,-1e308\n21,1e308\n"),
        ('# prior: {"t_E": ["x"]}\n# frame: ["a"]\n# l: 1\n# b: 3\n', "t_E\n20\n"),
        ('# prior: uniform\n# frame: geocentric\n# t_0par: [1]\n# event: "\\ud800"\n# l: 1\n# b: 3\n', "t_E\n20\n"),
        ("", CSV + "A,1,95,nope,4\n"), ("", CSV + "A,1,2,1e999,4\n"), ("", CSV + f"A,1,2,{'9' * 5000},4\n"),
        ("", CSV + "A,1,2,1+2j,4\n"), ("", "event,l,l,b,t_E,t_E_err\nA,1,1,95,3,-4\n"), ("", CSV),
        ("", CSV.replace("\n", ",samples\n") + "A,1,2,,,../../../../etc/passwd\n"),
        ("", CSV.replace("\n", ",samples\n") + "A,1,2,,,/dev/zero\n"),
    ],
)  # fmt: skip
def test_samples_that_cannot_be(head, rows, tmp_path):
    path = tmp_path / "sample.csv"
    path.write_text(head + rows)
    before = sorted(tmp_path.iterdir())
    with pytest.raises(InputError):
        Sample.read(path)
    assert sorted(tmp_path.iterdir()) == before


def test_an_efficiency_whose_grid_would_fill_the_memory(tmp_path):
    path = tmp_path / "curve.csv"
    rows = "".join(f"{i + 1},{15 + i * 1e-4},0.5\n" for i in range(30_000))
    path.write_text("t_E,I_S,efficiency\n" + rows)
    with little_memory(), pytest.raises(InputError, match="every pair"):
        Efficiency.read(path, per="source", includes=[])


def test_devices_and_links_are_no_files(tmp_path):
    link = tmp_path / "endless.toml"
    link.symlink_to("/dev/zero")
    with pytest.raises(InputError, match="more than"):
        Scenario.read(link)
    for ending in (".csv", ".fits", ".png"):
        endless = tmp_path / f"endless{ending}"
        endless.symlink_to("/dev/zero")
        for read in (read_rows, read_made):
            with pytest.raises(InputError, match="no"):
                read(endless)


def test_field_files_with_true_checksums_and_false_numbers(kicked_scenario, tmp_path):
    from lensrate.remnants.fields import RemnantField

    whole = kicked_scenario.parent / "fields.fits"
    changes = [("grid", "R_scale", float("nan")), ("grid", "z_scale", -1.0), ("grid", "n_R", 10**9),
               ("grid", "n_R", 40.0), ("grid", "n_phi", 0), ("bar_angle_rad", None, float("inf")),
               ("kick_edges_kms", 1, -5.0),
               ("components", 0, None), ("mismatch", None, None), ("height_edges_kpc", 3, float("nan"))]  # fmt: skip
    for key, inner, value in changes:
        with fits.open(whole, memmap=False) as hdus:
            made = json.loads(hdus["MADE"].data.tobytes())
            if value is None:
                del made[key]
            elif inner is None:
                made[key] = value
            else:
                made[key][inner] = value
            hdus["MADE"] = fits.ImageHDU(np.frombuffer(json.dumps(made).encode(), dtype=np.uint8), name="MADE")
            hdus.writeto(tmp_path / "bad.fits", overwrite=True, checksum=True)
        with little_memory(), pytest.raises(DataFileError, match=r"bad\.fits.*lensrate synthesize"):
            RemnantField.read(tmp_path / "bad.fits")


def test_a_family_that_gives_a_component_a_number_for_a_mass_function(tmp_path):
    path = tmp_path / "mutant.toml"
    path.write_text(
        '[axis.imf]\nlabel = "x"\nalternatives = [{name = "a", source = "none", change = {bulge = {imf = 1.5}}}]\n'
    )
    with pytest.raises(InputError):
        Family.read(path).for_base(Scenario.read("default"))


def test_a_votable_in_an_encoding_that_there_is_not(tmp_path):
    path = tmp_path / "mutant.vot"
    path.write_bytes(b'<?xml version="1.0" encoding="ttf-8"?>\n<VOTABLE version="1.4"/>\n')
    with pytest.raises(InputError, match="damaged"):
        read_made(path)
