"""lensrate campaign: what it prints, writes and refuses."""

import json

import pytest
from astropy.table import QTable
from click.testing import CliRunner

from lensrate.cli import cli
from lensrate.surveys.campaign import Campaign

SMALL = """
name = "Marram, one field (invented)"
[[season]]
start = 2031-02-10
end = 2031-10-25
[[field]]
name = "M01"
l = 1.0
b = -2.9
area_deg2 = 1.0
limit = "I=20"
extinction = { I = 1.25 }
observed_events = 40
"""


def run(*args):
    return CliRunner().invoke(cli, ["campaign", *map(str, args)])


@pytest.fixture(scope="module")
def small(tmp_path_factory):
    path = tmp_path_factory.mktemp("campaign") / "small.toml"
    path.write_text(SMALL)
    return path


def test_json_has_the_keys_of_the_contract(small):
    out = run(small, "--kicks", "none", "--json", "-q")
    made = json.loads(out.stdout)
    assert [f["name"] for f in made["fields"]] == ["M01"] and made["mass_measured"] == {}
    for row in made["expected"].values():
        assert set(row) == {
            "events", "poisson_68", "assumptions_range", "field_sampling", "p_at_least_one", "scaled_to_observed"
        }  # fmt: skip
    everything = made["expected"]["all"]
    assert everything["scaled_to_observed"] == pytest.approx(40) and len(everything["assumptions_range"]) == 2


def test_a_proposal_is_written_whole_and_its_tables_read_back(small, tmp_path):
    folder = tmp_path / "proposal"
    out = run(small, "--kicks", "none", "--family", "none", "--events", 2000, "--proposal", folder, "-q")
    assert out.exit_code == 0, out.output
    assert {p.name for p in folder.iterdir()} == {
        "table.tex", "methods.txt", "references.bib", "by_class.ecsv", "by_field.ecsv", "page.pdf"
    }  # fmt: skip
    table = QTable.read(folder / "by_class.ecsv")
    assert table.meta["campaign_hash"] == Campaign.read(small).hash and "heliocentric" in table.meta["header"]
    assert all(len(line) <= 100 for line in out.stdout.splitlines())
    again = run(small, "--kicks", "none", "--proposal", folder)
    assert again.exit_code != 0 and "not empty" in str(again.exception or again.output)


def test_bad_input_is_named(tmp_path, small):
    bad = tmp_path / "bad.toml"
    bad.write_text(SMALL.replace("area_deg2", "area_deg"))
    for args, words in (
        ((tmp_path / "none.toml",), "no such file"),
        ((bad,), "did you mean 'area_deg2'"),
        ((small, "--kicks", "hobs2005"), "did you mean 'hobbs2005'"),
        ((small, "--family", "defalt"), "did you mean 'default'"),
        ((small, "--save", "out.txt"), "ending"),
        ((small, "--by", "field"), "--save"),
        ((small, "--seed", "3"), "--plot"),
        ((small, "--exact", "--family", "none"), "goes with a --family"),
        ((small, "--kick-yield", "neutron_star", "--save", "a.csv", "--by", "field"), "--by has no effect here"),
        ((small, "--kick-yield", "neutron_star", "--plot", "a.png", "--events", "500"), "--events has no effect"),
    ):
        out = run(*args)
        assert out.exit_code != 0 and words in f"{out.output} {out.exception}", args
