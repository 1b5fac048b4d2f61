"""Drawn events against the deterministic integrals: two routes to the same rate that share the profiles only.

Chi-squared tests take whole histograms. Each may fail by chance with probability FALSE_ALARM; seeds are fixed.
"""

from dataclasses import replace
from functools import cache

import astropy.units as u
import numpy as np
import pytest
from scipy.stats import chi2

import lensrate
from lensrate.errors import ConvergenceError, InputError
from lensrate.lensing import distributions, rates
from lensrate.lensing.sampler import BLOCK, Sampler
from lensrate.units import DAYS_PER_YEAR, KAPPA

FALSE_ALARM = 1e-4
PLACES = {
    "bulge": (1.0, -3.9, "default"),
    "plane": (20.0, 0.5, "default"),
    "clouds": (280.46, -32.89, "griest1991"),
}
N = 400_000


@cache
def made(place):
    l, b, scenario = PLACES[place]
    forecast = lensrate.sightline(l * u.deg, b * u.deg, scenario)
    return forecast, Sampler.of(forecast)


@cache
def events(place, **options):
    return made(place)[1].draw(N, 11, full=True)


def chi_squared(wanted, weight, *index):
    """Compare binned weights with expected rates; cells of fewer than 25 events are joined into one."""
    shape = wanted.shape
    flat = np.ravel_multi_index(index, shape)
    got = np.bincount(flat, weight, minlength=wanted.size)
    square = np.bincount(flat, weight**2, minlength=wanted.size)
    wanted = wanted.ravel()
    few = wanted < 25 * weight.mean()
    rows = [np.append(x[~few], x[few].sum()) for x in (got, wanted, square)]
    keep = rows[2] > 0
    got, wanted, square = (x[keep] for x in rows)
    assert keep.sum() > 5
    # events are a fixed number: binomial, for equal weights
    variance = square * (1 - np.minimum(wanted / weight.sum(), 0.5))
    value = np.sum((got - wanted) ** 2 / variance)
    assert value < chi2.isf(FALSE_ALARM, keep.sum()), (value, keep.sum())


def test_every_event_is_possible():
    for place in PLACES:
        d = events(place)
        assert np.all((d.D_L > 0) & (d.D_L < d.D_S) & (d.M > 0) & (d.weight >= 0) & (d.t_E > 0))
        assert np.allclose(d.theta_E, np.sqrt(KAPPA * d.M * d.pi_rel), rtol=1e-12)
        assert np.allclose(d.pi_rel, 1 / d.D_L - 1 / d.D_S, rtol=1e-6, atol=1e-9)
        assert np.allclose(d.t_E, DAYS_PER_YEAR * d.theta_E / d.mu_rel, rtol=1e-12)
        assert np.allclose(d.pi_E * d.theta_E, d.pi_rel, rtol=1e-12)
        assert np.allclose(d.mu_L_l - d.mu_S_l, d.mu_rel_l, atol=1e-9 * np.abs(d.mu_L_l).max())


@pytest.mark.parametrize("place", PLACES)
def test_rate_and_effective_number(place):
    """Before any scaling the draws know the total rate; tables as fine as they are err below 1e-3."""
    forecast, sampler = made(place)
    d = events(place)
    assert d.weight.sum() == pytest.approx(forecast.lenses["all"].rate, rel=1e-12)
    assert abs(d.estimate - d.rate) < 4 * d.estimate_error + 1e-3 * d.rate
    assert d.estimate_error < 1e-3 * d.rate
    assert d.effective_share > 0.85
    equal = sampler.draw(50_000, 3, weighted=False)
    assert np.ptp(equal.weight) == 0 and equal.effective_share == pytest.approx(1.0)
    assert abs(equal.estimate - d.rate) < 4 * equal.estimate_error + 1e-3 * d.rate


@pytest.mark.parametrize("weighted", [True, False])
@pytest.mark.parametrize("place", PLACES)
def test_timescales_by_class(place, weighted):
    forecast, sampler = made(place)
    d = events(place) if weighted else sampler.draw(N // 2, 12, weighted=False)
    edges = np.geomspace(0.1, 2000, 45)
    wanted = []
    for pdf in forecast.rate_per_ln_t_E:
        q = distributions.Quantiles(forecast.t_E, pdf)
        cells = [q.rate(lo, hi) for lo, hi in zip([None, *edges], [*edges, None])]
        wanted.append(cells)
    wanted = np.array(wanted)
    wanted *= (sampler.class_rate / np.maximum(wanted.sum(axis=1), 1e-300))[:, None]
    chi_squared(wanted, d.weight, d.lens_class, np.searchsorted(edges, d.t_E))


@pytest.mark.parametrize("place", PLACES)
def test_plane_of_timescale_and_parallax(place):
    forecast, _ = made(place)
    d = events(place)
    t, y, density = forecast.joint("pi_E")
    t, y = t.value, y.value
    total = sum(q.value for q in density.values()) * np.log(t[1] / t[0]) * np.log(y[1] / y[0])
    n_t, n_y = t.size // 5, y.size // 5
    cells = total[: 5 * n_t, : 5 * n_y].reshape(n_t, 5, n_y, 5).sum(axis=(1, 3))
    i = np.floor(np.log(d.t_E / t[0]) / np.log(t[1] / t[0]) + 0.5).astype(int) // 5
    j = np.floor(np.log(d.pi_E / y[0]) / np.log(y[1] / y[0]) + 0.5).astype(int) // 5
    inside = (i >= 0) & (i < n_t) & (j >= 0) & (j < n_y)
    assert d.weight[~inside].sum() < 1e-4 * d.rate
    chi_squared(cells * d.rate / cells.sum(), d.weight[inside], i[inside], j[inside])


def roots(sampler):
    """Number times sqrt(M) of all classes on each element."""
    return np.array([[0.0 if s is None else s.moment(0.5) for s in row] for row in sampler.model.spectra()]).sum(axis=0)


@pytest.mark.parametrize("place", ["bulge", "plane"])
def test_direction_and_speed(place):
    forecast, sampler = made(place)
    d = events(place)
    grid, R = rates.event_rate_density(sampler.ready, roots(sampler), np.array([0.0, 1000.0]), n_phi=16)
    cells = R.sum(axis=(0, 1), dtype=float)
    n = cells.shape[1] // 4
    cells = cells[:, : 4 * n].reshape(16, n, 4).sum(axis=2)
    phi = np.arctan2(d.mu_rel_b, d.mu_rel_l) % (2 * np.pi)
    k = np.clip(np.floor(np.log(d.mu_rel / grid.mu[0]) / grid.h + 0.5).astype(int) // 4, 0, n - 1)
    chi_squared(cells * d.rate / cells.sum(), d.weight, (phi / (2 * np.pi) * 16).astype(int) % 16, k)


@pytest.mark.parametrize("place", ["bulge", "plane"])
def test_source_distance(place):
    """Rates of the stars by panel of source distance, from the product rule."""
    forecast, sampler = made(place)
    d, ready, m = events(place), sampler.ready, sampler.model.n_stellar
    panel = np.searchsorted(ready.edges, ready.D_S) - 1
    wanted = np.zeros(ready.edges.size - 1)
    for i in range(wanted.size):
        src = ready.src.copy()
        src[0][:, panel != i] = 0.0
        wanted[i] = roots(sampler)[:m] @ rates.moments(replace(ready, src=src))[1].sum(axis=1)
    stars = d.element < m
    chi_squared(wanted, d.weight[stars], np.searchsorted(ready.edges, d.D_S[stars]) - 1)


@pytest.mark.parametrize("place", PLACES)
def test_means(place):
    """Mean lens distance of each element; mean t_E = (2/pi) tau / Gamma of each class."""
    forecast, sampler = made(place)
    d = events(place)

    def close(values, chosen, wanted, slack):
        w = d.weight[chosen]
        if np.count_nonzero(w) < 200:
            return 0
        mean = np.average(values[chosen], weights=w)
        error = np.sqrt(np.sum((w * (values[chosen] - mean)) ** 2)) / w.sum()
        assert abs(mean - wanted) < 4.2 * error + slack * wanted, (mean, wanted, error)
        return 1

    distance = rates.moments(sampler.ready)[2]
    assert sum(close(d.D_L, d.element == e, distance[e], 1e-3) for e in range(distance.size)) >= 1
    tested = 0
    for c, name in enumerate(forecast.classes):
        tested += close(d.t_E, d.lens_class == c, forecast.lenses[name].mean_t_E, 1e-3)
    assert tested == sum(lens.rate > 1e-3 * d.rate for name, lens in forecast.lenses.items() if name != "all")


def test_separate_motions():
    """Sources of one component at one distance move as the Galaxy says, once events are weighed by 1 / theta_E mu_rel.

    Such weights turn the rate into the source and lens density; only a narrow range of distances is taken.
    """
    _, sampler = made("bulge")
    d = events("bulge")
    bulge = next(i for i, c in enumerate(sampler.model.galaxy.components) if c.element == "bulge")
    chosen = (d.source_component == bulge) & (np.abs(d.D_S - 8.0) < 0.15) & (d.element == bulge)
    w = (d.weight / (d.theta_E * d.mu_rel))[chosen]
    profile = sampler.model.galaxy.profile(sampler.ready.line, d.D_S[chosen])[:, bulge]
    lens = sampler.model.galaxy.profile(sampler.ready.line, d.D_L[chosen])[:, bulge]
    for table, l, b in ((profile, d.mu_S_l, d.mu_S_b), (lens, d.mu_L_l, d.mu_L_b)):
        x, y = l[chosen] - table[1], b[chosen] - table[2]
        for value, wanted in ((x, 0), (y, 0), (x * x, table[3]), (y * y, table[5]), (x * y, table[4])):
            miss = np.average(value - wanted, weights=w)
            error = np.sqrt(np.sum((w * (value - wanted - miss)) ** 2)) / w.sum()
            assert abs(miss) < 4 * error, (miss, error)


@pytest.mark.parametrize("weighted", [True, False])
def test_seed_and_threads(weighted):
    _, sampler = made("bulge")
    n = 40 * BLOCK + 17 if weighted else 100_001
    one = sampler.draw(n, 5, full=True, weighted=weighted, jobs=1)
    two = sampler.draw(n, np.random.default_rng(5), full=True, weighted=weighted, jobs=3)
    other = sampler.draw(n, 6, weighted=weighted)
    plain = sampler.draw(n, np.random.SeedSequence(5), weighted=weighted)
    assert len(one) == n
    # a bare number is the root itself; a generator or sequence lends a child, anew each time
    again = sampler.draw(n, 5, full=True, weighted=weighted, jobs=4)
    for name in ("M", "D_L", "D_S", "mu_rel_l", "t_E", "weight", "mu_S_b", "lens_class", "row"):
        assert np.array_equal(getattr(one, name), getattr(again, name)), name
    assert np.array_equal(two.t_E, plain.t_E)
    assert not np.array_equal(one.t_E, other.t_E)
    rng = np.random.default_rng(1)
    assert not np.array_equal(sampler.draw(10, rng).t_E, sampler.draw(10, rng).t_E)


def test_tilt_leaves_the_rates():
    forecast, sampler = made("bulge")
    d = sampler.draw(N, 7, tilt="equal")
    numbers = np.bincount(d.lens_class, minlength=5)
    assert numbers.min() > 0.15 * N
    got = np.bincount(d.lens_class, d.weight, minlength=5)
    error = np.sqrt(np.bincount(d.lens_class, d.weight**2, minlength=5))
    # shares of the whole: tables may differ by 1e-3
    assert np.all(np.abs(got - sampler.class_rate) < 4.5 * error + 2e-3 * sampler.class_rate)
    hole = sampler.draw(20_000, 8, weighted=False, tilt={"black_hole": 100.0})
    assert np.unique(hole.weight).size == 2
    share = np.mean(hole.lens_class == 4)
    wanted = 100 * sampler.class_rate[4] / (sampler.rate + 99 * sampler.class_rate[4])
    assert abs(share - wanted) < 4 * np.sqrt(wanted * (1 - wanted) / 20_000)


def test_draws_are_continuous():
    """No distance or mass is met twice, but for masses that are one number."""
    forecast, sampler = made("bulge")
    d = events("bulge")
    assert np.unique(d.D_S).size > 0.999 * N and np.unique(d.D_L).size > 0.999 * N
    stars = d.lens_class == 0
    assert np.unique(d.M[stars]).size > 0.999 * stars.sum()
    neutron = d.M[d.lens_class == 3]
    assert np.ptp(neutron) < 1e-9 and neutron[0] == pytest.approx(1.4)
    spectrum = next(s for s in (sampler.model.spectrum("star", i) for i in range(9)) if s is not None)
    assert d.M[stars].min() > 0.99 * spectrum.mass.min()


def test_kick_law_of_another_model():
    forecast, _ = made("bulge")
    slow = forecast.reforecast(kicks="maxwell:100")
    d = Sampler.of(slow).draw(N, 9, tilt={"neutron_star": 50.0})
    chosen = d.lens_class == 3
    w = d.weight[chosen]
    error = np.sqrt(np.sum(w**2))
    assert abs(w.sum() - slow.lenses["neutron_star"].rate) < 4 * error + 2e-3 * w.sum()
    assert slow.lenses["neutron_star"].rate > 1.05 * forecast.lenses["neutron_star"].rate


def test_refusals():
    _, sampler = made("bulge")
    for wrong in ({"n": 0}, {"n": 1.5}, {"tilt": "even"}, {"tilt": {"black_hol": 2}}, {"tilt": {"star": 0}}):
        with pytest.raises(InputError):
            sampler.draw(**{"n": 10, "rng": 1, **wrong})
    for seed in (-1, "one", 1.5):
        with pytest.raises(InputError, match="seed"):
            sampler.draw(10, seed)
    with pytest.raises(InputError, match="black_hole"):
        sampler.draw(10, 1, tilt={"black_hol": 2})


def test_no_lenses():
    table = {"mass_function": {"kind": "delta", "M": 1.0}, "rides_on": "halo", "mass_fraction": 0.0}
    scenario = lensrate.Scenario.read("griest1991").replace(lens_class={"compact_object": table})
    forecast = lensrate.sightline(280 * u.deg, -33 * u.deg, scenario)
    with pytest.raises(ConvergenceError, match="no lenses"):
        Sampler.of(forecast)
