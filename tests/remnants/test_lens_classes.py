"""Lens classes that a user defines."""

import numpy as np
import pytest
from scipy.integrate import quad

from lensrate.errors import InputError
from lensrate.remnants.classes import CLASSES, LABELS, LensClass
from lensrate.remnants.history import History
from lensrate.remnants.ifmr import Ifmr
from lensrate.remnants.imf import Imf
from lensrate.remnants.lifetimes import Lifetimes
from lensrate.remnants.population import population

PLANETS = {
    "mass_function": {"kind": "power", "M_lo": 1e-6, "M_hi": 1e-2, "slope": 1.9},
    "rides_on": ["thin_disc", "bulge"],
    "number_per_star": 5,
}
HOLES = {
    "mass_function": {"kind": "lognormal", "median": 20, "sigma_dex": 0.3},
    "rides_on": "halo",
    "mass_fraction": 0.1,
}


def test_words():
    assert CLASSES == ("star", "brown_dwarf", "white_dwarf", "neutron_star", "black_hole")
    assert LABELS["white_dwarf"] == "white dwarf"


def test_power_law_rides_on_stars():
    planets = LensClass.parse("planet", PLANETS)
    assert planets.rides_on == ("thin_disc", "bulge")
    old = population(History(10, 10), Imf.read("kroupa2001"), Lifetimes.read("standard"), Ifmr.read("default"))
    spectrum = planets.spectrum(old)
    assert spectrum.moment(0) == pytest.approx(5 * old.number["star"], rel=1e-12)
    norm = quad(lambda x: np.exp(-0.9 * x), *np.log([1e-6, 1e-2]))[0]
    root = quad(lambda x: np.exp(-0.4 * x), *np.log([1e-6, 1e-2]))[0]
    assert spectrum.moment(0.5) / spectrum.moment(0) == pytest.approx(root / norm, rel=1e-8)
    with pytest.raises(InputError, match="host with stars"):
        planets.spectrum()


def test_lognormal_keeps_its_mass():
    spectrum = LensClass.parse("primordial", HOLES).spectrum()
    assert spectrum.moment(1) == pytest.approx(0.1, rel=1e-12)
    s = 0.3 * np.log(10)
    assert spectrum.moment(1) / spectrum.moment(0) == pytest.approx(20 * np.exp(s**2 / 2), rel=1e-5)


def test_single_mass():
    table = {"mass_function": {"kind": "delta", "M": 0.5}, "rides_on": "halo", "number_per_msun": 0.2}
    spectrum = LensClass.parse("macho", table).spectrum()
    assert spectrum.mass.tolist() == [0.5] and spectrum.number.tolist() == [0.2]


@pytest.mark.parametrize(
    "name, change, match",
    [
        ("star", {}, "a name of small letters"),
        ("Planet", {}, "a name of small letters"),
        ("planet", {"ride_on": "halo"}, "did you mean 'rides_on'"),
        ("planet", {"rides_on": []}, "component's name"),
        ("planet", {"rides_on": 3}, "component's name"),
        ("planet", {"mass_fraction": 0.1}, "give one of"),
        ("planet", {"number_per_star": -1}, "at least 0"),
        ("planet", {"number_per_star": "many"}, "not a finite number"),
        ("planet", {"mass_function": {"kind": "powr", "M_lo": 1}}, "did you mean 'power'"),
        ("planet", {"mass_function": {"kind": "delta", "M_lo": 1}}, "not a key here"),
        ("planet", {"mass_function": {"kind": "delta", "M": 0}}, "above 0"),
        ("planet", {"mass_function": {"kind": "power", "M_lo": 2, "M_hi": 1, "slope": 1}}, "must be above M_lo"),
        ("planet", {"mass_function": 3}, "not a table"),
    ],
)
def test_refused(name, change, match):
    with pytest.raises(InputError, match=match):
        LensClass.parse(name, PLANETS | change)
