"""Stated errors cover the truth, what is not known is said, and nothing that is no number leaves."""

import astropy.units as u
import numpy as np
import pytest
from astropy.table import Table

import lensrate
from lensrate.errors import ConvergenceError, InputError
from lensrate.scenario import Scenario
from lensrate.scenario.numerics import Numerics

RULES = ("limit:I=21", "limit:I=19", "peak:I=19", "limit:Ks=17", "clump", "distance:8.0")
LAWS = ("igoshev2020", "hobbs2005", "maxwell:100", "none")


def scenarios(n, seed):
    """Random directions of the bulge and the disc, with random assumptions."""
    rng = np.random.default_rng(seed)
    for _ in range(n):
        far = rng.random() < 0.3
        l, b = (rng.uniform(20, 340) if far else rng.uniform(-8, 8)), rng.uniform(2.2, 8) * rng.choice([-1, 1])
        s = Scenario.read("default").replace(
            sources=str(rng.choice(RULES[:4] if far else RULES)), kicks=str(rng.choice(LAWS)),
            imf=str(rng.choice(["", "kroupa2001", "salpeter1955"])),
        )  # fmt: skip
        yield l * u.deg, b * u.deg, s


@pytest.mark.slow
def test_quadrature_errors_cover_the_refined_runs():
    finer = vars(Numerics().halved())
    off = []
    for l, b, s in scenarios(20, seed=20):
        rough = lensrate.sightline(l, b, s)
        fine = lensrate.sightline(l, b, s.replace(numerics=finer))
        # what is promised of every number, and what this forecast says of itself where that is more
        stated = max(1e-3, rough.quadrature_error)
        for name, lens in rough.lenses.items():
            other = fine.lenses[name]
            for what in ("rate", "optical_depth"):
                x, y = getattr(lens, what), getattr(other, what)
                if y > 0:
                    where = float(l.value), float(b.value), s.sources, s.kicks, name, what
                    off.append((abs(x / y - 1) / stated, *where))
    off.sort(reverse=True)
    print(*off[:5], sep="\n")
    assert len(off) >= 200 and off[0][0] <= 1, off[:8]


def test_a_limit_beyond_the_luminosity_function_is_told(tmp_path):
    path = tmp_path / "stars.ecsv"
    Table({"magnitude": [-3.0, 0.0, 3.0], "cumulative": [1e-5, 1e-3, 0.05]}, meta={"band": "I"}).write(path)
    s = Scenario.read("default").replace(kicks="none", bh_kicks="none", luminosity=str(path))
    told = {}
    for rule in ("limit:I=17", "limit:I=23"):
        result = lensrate.sightline(1 * u.deg, -4 * u.deg, s.replace(sources=rule, extinction={"I": 1.0}))
        told[rule] = [w for w in result.warnings if "luminosity function" in w]
    assert len(told["limit:I=23"]) == 1 and "magnitude 3.0" in told["limit:I=23"][0]
    # M_I = 17 - 1 - 14.5 = 1.5 at the bulge; some foreground stars are nearer than where it reaches 3
    assert "100%" in told["limit:I=23"][0] and (not told["limit:I=17"] or "100%" not in told["limit:I=17"][0])
    default = lensrate.sightline(1 * u.deg, -4 * u.deg, Scenario.read("default").replace(kicks="none", bh_kicks="none"))
    assert not [w for w in default.warnings if "luminosity function" in w]


@pytest.mark.parametrize("mass", [1e16, 1e150, 1e300])
def test_absurd_numbers_end_in_words(mass):
    """The largest mass that is taken gives finite numbers or says that it does not; what is beyond is refused."""
    change = {"bulge": {"density": {"mass": {"value": mass, "unit": "Msun"}}}}
    s = Scenario.read("default").replace(kicks="none", bh_kicks="none", sources="distance:8", change=change)
    try:
        result = lensrate.sightline(1 * u.deg, -4 * u.deg, s)
    except ConvergenceError as error:
        assert mass == 1e16 and "scenario" in str(error)
    except InputError as error:
        assert mass > 1e16 and "change.bulge.density.mass" in str(error) and "Msun given" in str(error)
    else:
        for lens in result.lenses.values():
            assert np.isfinite(lens.rate) and lens.rate >= 0 and np.isfinite(lens.optical_depth)
