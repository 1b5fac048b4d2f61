"""Every example runs as it stands, in an empty folder, and leaves what it says."""

import os
import subprocess
import sys
from pathlib import Path

import pytest

EXAMPLES = Path(__file__).parent.parent / "examples"
LEAVES = {
    "choose_pointings.sh": ("pointings.fits", "pointings.ecsv", "pointings.png"),
    "forecast_campaign.sh": ("marram.ecsv", "marram_page.png"),
    "compare_kick_laws.py": ("stacked_hobbs2005.png",),
    "mock_season.sh": ("season.ecsv", "season.png"),
    "notebook.py": ("forecast.html", "notebook.png"),
    "on_a_cluster.py": (),
    "own_galaxy.sh": ("own_galaxy.png",),
    "plan_for_kicks.sh": (),
    "weigh_one_event.sh": (),
}


def test_every_example_is_listed():
    assert set(LEAVES) == {p.name for p in EXAMPLES.iterdir() if p.suffix in (".sh", ".py")}


@pytest.mark.slow
@pytest.mark.parametrize("name", sorted(LEAVES))
def test_example(name, tmp_path):
    if name == "on_a_cluster.py":
        pytest.importorskip("distributed", reason="Dask is an optional extra")
    program = [sys.executable] if name.endswith(".py") else ["bash"]
    path = f"{Path(sys.executable).parent}{os.pathsep}{os.environ['PATH']}"
    out = subprocess.run(
        [*program, str(EXAMPLES / name)], cwd=tmp_path, capture_output=True, text=True,
        env={**os.environ, "PATH": path, "MPLBACKEND": "agg"},
    )  # fmt: skip
    assert out.returncode == 0, out.stderr
    assert out.stdout.strip()
    assert {p.name for p in tmp_path.iterdir()} == set(LEAVES[name])
