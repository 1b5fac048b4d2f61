"""Lifetimes, histories and what a component consists of today."""

import math
import time

import numpy as np
import pytest
from scipy.integrate import quad

from lensrate.errors import InputError
from lensrate.remnants.classes import CLASSES
from lensrate.remnants.history import History
from lensrate.remnants.ifmr import Ifmr
from lensrate.remnants.imf import Imf
from lensrate.remnants.lifetimes import Lifetimes
from lensrate.remnants.population import COUNTS, population

HISTORIES = [History(10, 10), History(0, 1, 8.5), History(0, 13), History(5, 10, -2.0)]


@pytest.fixture(params=Lifetimes.names())
def lifetimes(request):
    return Lifetimes.read(request.param)


def test_lifetimes_contract(lifetimes):
    m = np.geomspace(0.1, 150, 400)
    age = lifetimes.lifetime(m)
    assert np.all(np.diff(age) < 0)
    np.testing.assert_allclose(lifetimes.turnoff_mass(age), m, rtol=1e-12)
    assert lifetimes.turnoff_mass(0) == np.inf
    t, step = 7.0, 1e-4
    slope = (lifetimes.turnoff_mass(t - step) - lifetimes.turnoff_mass(t + step)) / (2 * step)
    assert lifetimes.turnoff_speed(t) == pytest.approx(slope, rel=1e-6)
    np.testing.assert_allclose(lifetimes.lifetime(m[m < 2]), 10 * m[m < 2] ** -2.5, rtol=1e-12)
    assert lifetimes.references


def test_lifetimes_refuse_what_does_not_fall():
    with pytest.raises(InputError, match="lifetimes fall"):
        Lifetimes("mine", (1, 2), (1, 2))
    with pytest.raises(InputError, match="two or more"):
        Lifetimes("mine", (1,), (1,))
    with pytest.raises(InputError, match="did you mean 'standard'"):
        Lifetimes.read("standart")


@pytest.mark.parametrize("efold", [8.5, -2.0, 0.05, math.inf])
def test_history_is_a_distribution(efold):
    history = History(1, 9, efold)
    ages, weights = history.nodes(32)
    assert weights.sum() == pytest.approx(1, rel=1e-14)
    rate = (lambda t: 1.0) if math.isinf(efold) else (lambda t: math.exp((t - (9 if efold > 0 else 1)) / efold))
    norm = quad(rate, 1, 9, points=[1.2, 8.8])[0]
    assert weights @ ages == pytest.approx(quad(lambda t: t * rate(t), 1, 9, points=[1.2, 8.8])[0] / norm, rel=1e-5)
    share = quad(rate, 1, 6, points=[1.2, 5.8])[0] / norm
    assert history.fraction_younger(6.0) == pytest.approx(share, rel=1e-8, abs=1e-12)
    p = np.array([0, 0.3, 1])
    np.testing.assert_allclose(history.fraction_younger(history.age_at(p)), p, atol=1e-12)


@pytest.mark.parametrize(
    "ages", [(-1, 3, 1), (5, 3, 1), (1, 30, 1), (1, 2, 0), (0, 0, 1), (1, float("nan"), 1), ("a", 2, 1)]
)
def test_history_refuses(ages):
    with pytest.raises(InputError, match="history"):
        History(*ages)


@pytest.mark.parametrize("relation", Ifmr.names())
@pytest.mark.parametrize("history", HISTORIES, ids=str)
def test_population_is_converged_and_adds_up(history, relation):
    imf, lifetimes, ifmr = Imf.read("kroupa1993_field"), Lifetimes.read("standard"), Ifmr.read(relation)
    pop = population(history, imf, lifetimes, ifmr)
    fine = population(history, imf, lifetimes, ifmr, nodes=60)
    for name in CLASSES:
        spectrum = pop.spectra[name]
        assert spectrum.mass.size <= 120 and np.all(spectrum.number > 0) and np.all(spectrum.mass > 0)
        for power in (0, 0.5, 1):
            assert spectrum.moment(power) == pytest.approx(fine.spectra[name].moment(power), rel=1e-5)
        assert pop.number[name] == pytest.approx(spectrum.moment(0), rel=1e-12)
    assert sum(pop.mass_fraction.values()) == pytest.approx(1, rel=1e-12)
    # every star and brown dwarf ever formed is still there in one class or another
    born = pop.initial_mass_per_msun * imf.number(imf.breaks[0], imf.breaks[-1])
    assert sum(pop.number.values()) == pytest.approx(born, rel=1e-8)
    assert sum(s.number @ s.initial_mass for s in pop.spectra.values()) == pytest.approx(
        pop.initial_mass_per_msun, rel=1e-6
    )
    assert pop.born_per_msun["star"] == pytest.approx(pop.initial_mass_per_msun * imf.number(0.08, 1e3), rel=1e-8)
    assert pop.mean_mass == pytest.approx(pop.moment(1) / pop.moment(0), rel=1e-12)


def test_mixed_ages_are_the_sum_of_bursts():
    """The closed-form share of living stars against a sum over many bursts."""
    parts = Imf.read("kroupa2001"), Lifetimes.read("standard"), Ifmr.read("default")
    history = History(2, 9, 4.0)
    whole = population(history, *parts)
    bursts = [(w, population(History(t, t), *parts)) for t, w in zip(*history.nodes(200))]
    for name in CLASSES:
        total = sum(w * b.number[name] / b.initial_mass_per_msun for w, b in bursts)
        assert whole.number[name] / whole.initial_mass_per_msun == pytest.approx(total, rel=1e-5)


def test_what_the_stated_mass_counts():
    parts = History(10, 10), Imf.read("kroupa2001"), Lifetimes.read("standard"), Ifmr.read("default")
    pops = {counts: population(*parts, counts=counts) for counts in COUNTS}
    for counts, classes in COUNTS.items():
        assert sum(pops[counts].mass_fraction[c] for c in classes) == pytest.approx(1, rel=1e-12)
    ratio = pops["luminous"].number["neutron_star"] / pops["total"].number["neutron_star"]
    assert ratio == pytest.approx(pops["total"].total_to_luminous, rel=1e-12)
    assert pops["total"].total_to_luminous == pytest.approx(1.4, abs=0.03)  # an old population, common practice
    with pytest.raises(InputError, match="did you mean 'luminous'"):
        population(*parts, counts="luminus")


def test_young_stars_leave_no_white_dwarfs():
    pop = population(History(0.001, 0.001), Imf.read("kroupa2001"), Lifetimes.read("standard"), Ifmr.read("default"))
    assert pop.number["white_dwarf"] == pop.number["neutron_star"] == pop.number["black_hole"] == 0
    assert pop.spectra["white_dwarf"].mass.size == 0 and pop.mass_fraction["star"] > 0.9


def test_fast_enough_for_a_loop_over_assumptions():
    parts = History(0, 10, 8.5), Imf.read("kroupa2001"), Lifetimes.read("standard"), Ifmr.read("raithel2018")
    population(*parts)
    best = min(_seconds(lambda: population(*parts)) for _ in range(5))
    assert best < 0.003


def _seconds(call):
    start = time.perf_counter()
    call()
    return time.perf_counter() - start
