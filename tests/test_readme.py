"""README and guide against the code: commands listed, Python runs, output as printed, the picture there."""

import re
import shlex
from pathlib import Path

import pytest
from click.testing import CliRunner

from lensrate.cli import cli, main

ROOT = Path(__file__).parent.parent
README = (ROOT / "README.md").read_text(encoding="utf-8")


def block(language):
    return re.findall(rf"```{language}\n(.*?)```", README, flags=re.DOTALL)


def run(line):
    runner = CliRunner()
    with runner.isolation() as streams:
        with pytest.raises(SystemExit) as done:
            main(shlex.split(line)[1:])
        assert not done.value.code, streams[1].getvalue().decode()
        return streams[0].getvalue().decode()


def test_printed_output_is_the_real_one():
    command = re.search(r"<!-- output of: (.*?) -->", README).group(1)
    assert block("text")[0].strip() == run(command).strip()


def test_python_example_runs(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    for code in block("python"):
        exec(compile(code, "README.md", "exec"), {})


def test_scenario_example_runs(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    Path("mine.toml").write_text(block("toml")[1])
    out = run("lensrate sightline 1.0 -3.9 --scenario mine.toml -q")
    assert "free planet" in out
    Path("dark.toml").write_text(block("toml")[2])
    assert "primordial black hole" in run("lensrate sightline 280.46 -32.89 --scenario dark.toml -q")


def test_campaign_example_runs(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    Path("mine.toml").write_text(block("toml")[0])
    Path("curve.csv").write_text("# per: source\n# includes: none\nt_E,efficiency\n1,0.01\n20,0.3\n300,0.1\n")
    assert "one deep field (invented)" in run("lensrate campaign mine.toml --kicks none --family none -q")


def test_commands_and_files_are_there():
    for name in cli.commands:
        assert f"`lensrate {name}" in README, name
    said = README.split("`--dask ADDRESS`, which")[1].split("have,")[0]
    having = {name for name, command in cli.commands.items() if any("--dask" in p.opts for p in command.params)}
    assert set(re.findall("`([a-z]+)`", said)) == having
    for picture in re.findall(r"!\[.*?\]\((.*?)\)", README):
        assert (ROOT / picture).is_file(), picture
    guide = (ROOT / "DEVELOPERS.md").read_text(encoding="utf-8")
    for package in sorted(p.stem for p in (ROOT / "lensrate").glob("[a-z]*")):
        assert f"`{package}`" in guide, f"{package} is missing from the guide's layers"
    # continuous integration deletes the environment that the README makes
    removed = re.search(r"^rm -rf (\S+)$", (ROOT / ".ci" / "run").read_text(encoding="utf-8"), re.M)[1]
    ours = re.search(r"^    python3 -m venv (\S+) ", guide, re.M)[1]
    assert f"-m venv {removed} " in README and ours != removed


def test_every_key_of_a_campaign_is_explained():
    from lensrate.surveys import campaign, efficiency, field

    table = README.split("Keys of the file")[1].split("![Expected")[0]
    keys = [*campaign._KEYS, *field._KEYS, "start", "end", "gaps", "band", "precision", "floor_mag", "file"]
    keys += [*efficiency._STATEMENTS, *efficiency.PER, *efficiency.INCLUDES]
    tables = ("season", "photometry", "efficiency", "field")
    assert not [k for k in keys if f"`{k}`" not in table and k not in tables]
