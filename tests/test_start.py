"""Start-up: what a bare import or --help may load, and that both names of the program run."""

import subprocess
import sys

HEAVY = {"numba", "astropy", "scipy", "pandas", "matplotlib", "numpy"}
COUNT = "import sys; print(*sorted({m.split('.')[0] for m in sys.modules}))"


def loaded(code):
    out = subprocess.run([sys.executable, "-c", f"{code}\n{COUNT}"], capture_output=True, text=True, check=True)
    return set(out.stdout.splitlines()[-1].split())


def test_help_loads_nothing_heavy():
    code = "from lensrate.cli import main\ntry:\n    main(['sightline', '--help'])\nexcept SystemExit: pass"
    assert not loaded(code) & HEAVY
    assert not loaded("import lensrate") & HEAVY


def test_a_forecast_needs_no_plots_and_no_pandas():
    code = "import lensrate, astropy.units as u; lensrate.sightline(1 * u.deg, -3 * u.deg, sources='distance:8')"
    assert not loaded(code) & {"matplotlib", "pandas"}


def test_module_runs_as_a_program():
    out = subprocess.run([sys.executable, "-m", "lensrate", "--version"], capture_output=True, text=True, check=True)
    assert out.stdout.startswith("lensrate ")
