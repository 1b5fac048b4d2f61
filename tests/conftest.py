"""Shared by all tests: a small Galaxy with kick-resolved fields of its own, made once.

Standing here, this file also puts its folder (with contracts.py) on the import path.
"""

import contextlib
import tempfile

import pytest

# galpy writes a settings file into the home folder when first imported: it gets a folder of its own
with tempfile.TemporaryDirectory() as _folder, pytest.MonkeyPatch.context() as _patch:
    _patch.setenv("HOME", _folder)
    with contextlib.suppress(ImportError):
        import galpy.orbit
        import galpy.potential  # noqa: F401

from lensrate.datafiles import data_folder
from lensrate.galaxy.potential import Potential
from lensrate.remnants.synthesis import Settings, synthesize
from lensrate.scenario import Scenario


@pytest.fixture(scope="session")
def kicked_scenario(tmp_path_factory):
    """Path of a scenario of a young disc, an old disc and a bulge with quickly made fields."""
    folder = tmp_path_factory.mktemp("kicked")
    head, *rows = (data_folder() / "galaxy" / "default.toml").read_text().split("[[component]]\n")
    kept = [r for r in rows if any(f'"{n}"' in r for n in ("thin_disc_young", "thin_disc_old", "bulge"))]
    (folder / "galaxy.toml").write_text("[[component]]\n".join([head, *kept]))
    path = folder / "small.toml"
    path.write_text(f'base = "default"\nfields = ""\ngalaxy = "{folder / "galaxy.toml"}"\n')
    galaxy = Scenario.read(path).build_galaxy()
    settings = Settings(tracers=512, bundles=128, iterations=60)
    field = synthesize(galaxy, Potential.read(galaxy.potential), settings, jobs=2)
    field.write(folder / "fields.fits")
    path.write_text(f'base = "default"\nfields = "{folder / "fields.fits"}"\ngalaxy = "{folder / "galaxy.toml"}"\n')
    return path
