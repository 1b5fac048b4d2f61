"""Luminosity functions: one contract for every band and history, counts of evolved stars, and users' tables."""

import math

import numpy as np
import pytest
from astropy.table import Table

from lensrate.datafiles import read_set
from lensrate.errors import InputError
from lensrate.remnants.history import History
from lensrate.remnants.ifmr import Ifmr
from lensrate.remnants.imf import Imf
from lensrate.remnants.lifetimes import Lifetimes
from lensrate.remnants.population import population
from lensrate.sources.bands import BANDS
from lensrate.sources.luminosity import LuminosityFunction, luminosity_function

IMF, LIFE, REMNANTS = Imf.read("kroupa2001"), Lifetimes.read("standard"), Ifmr.read("default")
OLD = History(10, 10)


def build(band="I", history=OLD, counts="total", imf=IMF):
    return luminosity_function(band, history, population(history, imf, LIFE, REMNANTS, counts), imf, LIFE)


@pytest.mark.parametrize("band", BANDS)
@pytest.mark.parametrize("history", [OLD, History(0, 1, 8.5), History(5, 10, 8.5), History(0.002, 0.002)], ids=str)
def test_contract(band, history):
    f = build(band, history)
    assert f.band == band and f.magnitude.shape == f.cumulative.shape
    assert np.all(np.diff(f.magnitude) > 0) and np.all(np.diff(f.cumulative) >= 0) and f.cumulative[0] >= 0
    assert f.brighter(-30.0) == 0 and f.brighter(40.0) == f.brighter(f.faintest) == f.cumulative[-1]
    assert f.clump_per_msun >= 0
    # all living stars are in it; the evolved, 2 per cent at most, come on top of those the lifetimes count
    stars = population(history, IMF, LIFE, REMNANTS).number["star"]
    assert stars <= f.cumulative[-1] < 1.025 * stars


def test_evolved_stars_of_an_old_burst():
    """Each phase holds the stars that leave the main sequence per Gyr times its duration."""
    f, pop = build(), population(OLD, IMF, LIFE, REMNANTS)
    flux = IMF.density(1.0) * 1.0 / (2.5 * 10) * pop.initial_mass_per_msun  # -dM/dt of 10 Gyr M^-2.5
    assert f.clump_per_msun == pytest.approx(0.10 * flux, rel=1e-10)
    giants = f.clump_per_msun / 1.9 / 0.55 * (math.exp(0.55 * (2.0 + 0.12)) - math.exp(0.55 * (-4.0 + 0.12)))
    widened = math.exp(0.5 * (0.55 * 0.12) ** 2)  # a Gaussian spread raises an exponential by this
    assert f.brighter(2.0) == pytest.approx(f.clump_per_msun + widened * giants, rel=1e-4)
    turnoff = 4.087 - 0.9 * (1 - 0.3)
    branch = f.clump_per_msun / 1.9 / 0.55 * (math.exp(0.55 * (turnoff - 0.8 + 0.12)) - math.exp(0.55 * (-4.0 + 0.12)))
    # half-way up the subgiants, where the spread changes nothing
    assert f.brighter(turnoff - 0.4) == pytest.approx(f.clump_per_msun + branch + 0.06 * 10 * flux, rel=2e-3)
    # below 0.6 Msun there is no brightening: the sequence's own magnitude counts the stars above that mass
    evolved = f.cumulative[-1] - pop.initial_mass_per_msun * IMF.number(0.079, 1.0)
    dwarfs = read_set("sources", "dwarf_sequence")["columns"]
    x = np.linspace(-5, 5, 401)
    lightest = np.exp(np.interp(8.037 + 0.12 * x, dwarfs["M_I"], np.log(dwarfs["mass"])))
    brighter = np.average(IMF.number(lightest, 1.0), weights=np.exp(-0.5 * x**2))  # over the spread of 0.12 mag
    assert f.brighter(8.037) == pytest.approx(pop.initial_mass_per_msun * brighter + evolved, rel=1e-3)


def test_colours_of_the_clump():
    """A step of the width of the clump lies at the published magnitude of every band."""
    for band, M in {"I": -0.12, "V": 0.94, "J": -0.93, "H": -1.46, "Ks": -1.61}.items():
        f = build(band)
        inside = f.brighter(M + 0.27) - f.brighter(M - 0.27)
        giants = 2 * f.clump_per_msun / 1.9 / 0.55 * math.sinh(0.55 * 0.27)
        assert (inside - giants) / f.clump_per_msun == pytest.approx(0.9973, abs=0.003)


def test_scales_with_the_mass_that_is_counted():
    pop = population(OLD, IMF, LIFE, REMNANTS)
    ratio = build(counts="luminous").brighter(4.0) / build().brighter(4.0)
    assert ratio == pytest.approx(pop.total_to_luminous, rel=1e-10)


def test_longer_history_is_the_sum_of_its_parts():
    halves = [build(history=History(a, b), counts="total") for a, b in ((4, 6), (6, 8))]
    whole = build(history=History(4, 8))
    formed = [
        population(History(*ages), IMF, LIFE, REMNANTS).initial_mass_per_msun for ages in ((4, 6), (6, 8), (4, 8))
    ]
    for M in (-2.0, 0.5, 2.5, 3.5, 5.0, 9.0):
        total = 0.5 * sum(f.brighter(M) / m for f, m in zip(halves, formed))
        assert whole.brighter(M) / formed[2] == pytest.approx(total, rel=0.01)


def test_stars_below_the_mass_function_do_not_appear():
    low = IMF.between(0.01, 0.07)
    with pytest.raises(InputError, match="nothing that 'luminous'"):
        build(counts="luminous", imf=low)
    assert build(imf=low).cumulative[-1] == 0


def test_own_table(tmp_path):
    path = tmp_path / "own.ecsv"
    table = Table(
        {"magnitude": [0.0, 2, 4, 8], "cumulative": [0.001, 0.01, 0.03, 0.5]},
        meta={"band": "I", "clump_per_msun": 1e-3},
    )
    table.write(path)
    f = LuminosityFunction.read(path)
    assert (f.band, f.clump_per_msun, f.faintest) == ("I", 1e-3, 8.0)
    assert f.brighter(3.0) == pytest.approx(0.02) and f.brighter(-1) == 0 and f.brighter(99) == 0.5
    bins = tmp_path / "bins.csv"
    Table({"magnitude": [1.0, 2, 3], "number": [0.1, 0.2, 0.4]}).write(bins)
    f = LuminosityFunction.read(bins, band="Ks")
    assert [float(f.brighter(M)) for M in (0.5, 1.5, 2.5, 3.5)] == pytest.approx([0, 0.1, 0.3, 0.7])
    assert math.isnan(f.clump_per_msun)


GOOD = {"magnitude": [0.0, 2, 4], "cumulative": [0.001, 0.01, 0.03]}


@pytest.mark.parametrize(
    "columns, band, match",
    [
        ({"mag": [1.0, 2], "cumulative": [1, 2]}, "I", "'magnitude' and one of"),
        ({"magnitude": [1.0, 2]}, "I", "found magnitude"),
        (GOOD | {"number": [1, 1, 1]}, "I", "one of"),
        (GOOD, None, "says no band"),
        (GOOD, "R", "is not known"),
        (GOOD | {"magnitude": [0.0, 4, 2]}, "I", "rising 'magnitude'"),
        (GOOD | {"cumulative": [0.1, np.nan, 0.3]}, "I", "finite numbers"),
        (GOOD | {"cumulative": [-0.1, 0.2, 0.3]}, "I", "negative value in row 1"),
        (GOOD | {"cumulative": [0.1, 0.3, 0.2]}, "I", "falls after row 2"),
        (GOOD | {"cumulative": [0.0, 0.0, 0.0]}, "I", "counts no stars"),
        (GOOD | {"cumulative": ["a", "b", "c"]}, "I", "not a number"),
        (GOOD | {"cumulative": np.ma.array([0.1, 0.2, 0.3], mask=[0, 1, 0])}, "I", "no value in row 2"),
    ],
)
def test_own_table_is_checked(tmp_path, columns, band, match):
    path = tmp_path / "own.ecsv"
    Table(columns).write(path)
    with pytest.raises(InputError, match=match):
        LuminosityFunction.read(path, band=band)


def test_own_table_must_be_one(tmp_path):
    with pytest.raises(InputError, match="no file|cannot be read"):
        LuminosityFunction.read(tmp_path / "missing.ecsv", "I")
    Table(GOOD).write(tmp_path / "own.ecsv")
    with pytest.raises(InputError, match="clump_per_msun"):
        LuminosityFunction.read(tmp_path / "own.ecsv", "I", clump_per_msun=-1)
