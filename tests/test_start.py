"""Start-up: what a bare import or --help may load, and that both names of the program run."""

import subprocess
import sys

import pytest

HEAVY = {"numba", "astropy", "scipy", "pandas", "matplotlib", "numpy"}
COUNT = "import sys; print(*sorted({m.split('.')[0] for m in sys.modules}))"


def loaded(code):
    out = subprocess.run([sys.executable, "-c", f"{code}\n{COUNT}"], capture_output=True, text=True, check=True)
    return set(out.stdout.splitlines()[-1].split())


def test_help_loads_nothing_heavy():
    code = "from lensrate.cli import main\ntry:\n    main(['sightline', '--help'])\nexcept SystemExit: pass"
    assert not loaded(code) & HEAVY
    assert not loaded("import lensrate") & HEAVY


@pytest.mark.parametrize(
    "line, wanted",
    [
        ("campaign ", ["file,", "plain,marram"]),
        ("sightline 1 -3.9 --kicks hob", ["file,hob", "plain,hobbs2005"]),
        ("odds my.csv --spread ", ["file,", "plain,default", "plain,kicks"]),
        ("odds my", ["file,my"]),
        ("odds marram_r", ["file,marram_r", "plain,marram_running"]),
        ("synthesize --checkpoint ", ["dir,"]),
    ],
)
def test_a_shell_completes_files_and_shipped_names_at_once(line, wanted):
    words = ["lensrate", *line.split(" ")]
    asked = {"COMP_WORDS": " ".join(words), "COMP_CWORD": str(len(words) - 1), "_LENSRATE_COMPLETE": "bash_complete"}
    code = f"import os; os.environ.update({asked})\nfrom lensrate.cli import main\ntry:\n    main([])\n"
    code += f"except SystemExit: pass\n{COUNT}"
    out = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True).stdout.splitlines()
    assert out[:-1] == wanted and not set(out[-1].split()) & HEAVY


def test_a_forecast_needs_no_plots_and_no_pandas():
    code = "import lensrate, astropy.units as u; lensrate.sightline(1 * u.deg, -3 * u.deg, sources='distance:8')"
    assert not loaded(code) & {"matplotlib", "pandas"}


def test_module_runs_as_a_program():
    out = subprocess.run([sys.executable, "-m", "lensrate", "--version"], capture_output=True, text=True, check=True)
    assert out.stdout.startswith("lensrate ")
