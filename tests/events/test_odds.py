"""Class probabilities: against importance-sampled events, in both frames, from tables, samples and grids alike."""

import runpy
from collections import OrderedDict
from functools import cache
from pathlib import Path
from types import SimpleNamespace

import astropy.units as u
import numpy as np
import pytest
from astropy.table import Table
from hypothesis import given, settings
from hypothesis import strategies as st

from lensrate.errors import InputError
from lensrate.events import likelihood as like_of
from lensrate.events import odds as module
from lensrate.events import plans
from lensrate.events.fold import heliocentric
from lensrate.events.likelihood import likelihood
from lensrate.events.observed import Measure, Observed, Sample, Solution
from lensrate.events.odds import class_probabilities, event_odds, event_rates, odds
from lensrate.events.posterior import Draws
from lensrate.lensing import earth, kept, mixtures, rates
from lensrate.lensing.masses import fine_masses
from lensrate.lensing.points import EventRates
from lensrate.lensing.quadrature import Numerics
from lensrate.lensing.sampler import Sampler
from lensrate.lensing.sightline import sightline
from lensrate.scenario import Scenario, resolve
from lensrate.units import DAYS_PER_YEAR, KAPPA, MAS

PLACE = (359.8613, -1.6210)  # of OGLE-2011-BLG-0462
UNKICKED = Scenario.read("default").replace(kicks="none", bh_kicks="none")


def m(value, lo, hi=None):
    return Measure(value, lo, lo if hi is None else hi)


def event(frame="heliocentric", t_0par=None, **measured):
    plain = {"I_lens_limit": measured.pop("I_lens_limit")} if "I_lens_limit" in measured else {}
    return Observed("e", *PLACE, frame, t_0par, (Solution("", measured, plain=plain),))


@cache
def line(kicked=True):
    return event_rates(*PLACE, Scenario.read("default") if kicked else UNKICKED)


def judged(**measured):
    return event_odds(event(**measured), line())


def test_rates_are_the_forecasts_own():
    forecast = sightline(PLACE[0] * u.deg, PLACE[1] * u.deg)
    wanted = np.array([forecast.lenses[c.name].rate for c in line().classes])
    assert line().rates() == pytest.approx(wanted, rel=4e-3)
    assert line().rates()[:3] == pytest.approx(wanted[:3], rel=1e-3)
    assert line().nbytes() < 500e6


def test_rate_at_points_is_the_forecasts_joint_density():
    """Two routes to the density of t_E and pi_E: shifted grids, and Gaussians in mu_rel summed over directions."""
    forecast = sightline(PLACE[0] * u.deg, PLACE[1] * u.deg, UNKICKED)
    t, pi, density = forecast.joint("pi_E")
    star = density["star"].value
    for t_E, pi_E in ((20.0, 0.2), (60.0, 0.1), (150.0, 0.08)):
        i, k = np.argmin(np.abs(t.value - t_E)), np.argmin(np.abs(pi.value - pi_E))
        e = event(t_E=m(float(t[i].value), 1e-6), pi_E=m(float(pi[k].value), 1e-6))
        for direct in (False, True):
            points = likelihood(e.solutions[0], e, direct).points
            found = line(False).evaluate(points).sum(axis=1)[0] * t[i].value * pi[k].value / (2 * np.pi * 1e-12)
            # the grid's Lagrange weights smear the mass function's edges over a tenth of a dex
            assert found == pytest.approx(star[i, k], rel=0.02)


@cache
def mock(n=1_000_000):
    """Events of the unkicked model drawn plainly: D_L even, velocities from their Gaussians, everything as weight."""
    rng = np.random.default_rng(20261201)
    model = resolve(UNKICKED)
    l, b = np.radians(PLACE)
    ready = rates.prepare(model, model.galaxy.sightline(l, b), model.sources.toward(l, b, model.galaxy), Numerics())
    S, J = ready.src.shape[1:]
    pick = rng.choice(S * J, n, p=ready.src[0].ravel())
    s, j = np.divmod(pick, J)
    D_S = ready.D_S[j]
    # nearer the source and the observer alike
    D_L = D_S * rng.random(n)
    lens = model.galaxy.profile(ready.line, D_L)
    E = lens.shape[1]
    e = rng.integers(E, size=n)
    k = np.arange(n)
    mean, cov = lens[1:3, e, k], lens[3:, e, k]
    v_S = _draw(rng, ready.src[1:3, s, j], ready.src[3:, s, j])
    mu_l, mu_b = _draw(rng, mean, cov) - v_S
    mu, pi = np.hypot(mu_l, mu_b), 1 / D_L - 1 / D_S
    weight = E * D_S * 2 * lens[0, e, k] * D_L**2 * np.sqrt(KAPPA * pi) * mu * MAS**2 / n
    out = {}
    for name in ("star", "white_dwarf", "black_hole"):
        mass, number = np.zeros(n), np.zeros(n)
        for i in range(E):
            spectrum, mine = model.spectrum(name, i), np.flatnonzero(e == i)
            root = spectrum.number * np.sqrt(spectrum.mass)
            if root.sum() > 0:
                mass[mine] = rng.choice(spectrum.mass, mine.size, p=root / root.sum())
                number[mine] = root.sum()
        theta, size = np.sqrt(KAPPA * mass * pi), np.sqrt(np.divide(pi, KAPPA * mass, where=mass > 0, out=np.ones(n)))
        north, east = earth.to_north_east(mu_l, mu_b, PLACE[0] * u.deg, PLACE[1] * u.deg)
        s_n, s_e = earth.to_north_east(*v_S, PLACE[0] * u.deg, PLACE[1] * u.deg)
        out[name] = {
            "w": weight * number, "t_E": theta / mu * DAYS_PER_YEAR, "pi_E": size, "theta_E": theta, "mu_rel": mu,
            "pi_EN": size * north / mu, "pi_EE": size * east / mu, "mu_S_N": s_n, "mu_S_E": s_e, "D_S": D_S,
        }  # fmt: skip
    return out


def _draw(rng, mean, cov):
    """Gaussian pairs with covariances (ll, lb, bb)."""
    a = np.sqrt(cov[0])
    c = cov[1] / a
    d = np.sqrt(np.maximum(cov[2] - c**2, 0))
    x, y = rng.standard_normal((2, a.size))
    return np.array([mean[0] + a * x, mean[1] + c * x + d * y])


CASES = {
    "t_E": {"t_E": m(60.0, 12.0)},
    "t_E, pi_E": {"t_E": m(60.0, 12.0), "pi_E": m(0.12, 0.03)},
    "split errors": {"t_E": m(60.0, 6.0, 18.0), "pi_E": m(0.12, 0.02, 0.06)},
    "theta_E": {"t_E": m(60.0, 12.0), "theta_E": m(0.5, 0.1)},
    "pi_E, theta_E": {"t_E": m(60.0, 12.0), "pi_E": m(0.12, 0.03), "theta_E": m(0.6, 0.15)},
    "mu_rel": {"t_E": m(60.0, 12.0), "mu_rel": m(3.0, 0.6)},
    "pi_E, mu_rel": {"t_E": m(60.0, 12.0), "pi_E": m(0.12, 0.03), "mu_rel": m(3.0, 0.6)},
    "vector": {"t_E": m(60.0, 12.0), "pi_EN": m(0.1, 0.03), "pi_EE": m(0.05, 0.03)},
    "wide vector": {"t_E": m(60.0, 12.0), "pi_EN": m(-0.03, 0.06), "pi_EE": m(0.05, 0.05)},
    "vector, theta_E": {
        "t_E": m(60.0, 12.0), "pi_EN": m(0.1, 0.03), "pi_EE": m(0.05, 0.03), "theta_E": m(0.5, 0.15)
    },
    "source motion": {
        "t_E": m(60.0, 12.0), "pi_E": m(0.12, 0.03), "mu_S_N": m(-6.0, 1.0), "mu_S_E": m(-3.0, 1.5)
    },
    "source distance": {"t_E": m(60.0, 12.0), "pi_E": m(0.12, 0.03), "D_S": m(7.0, 1.0)},
}  # fmt: skip


@pytest.mark.parametrize("name", list(CASES))
def test_against_sampled_events(name):
    measured = CASES[name]
    e = event(**measured)
    like = likelihood(e.solutions[0], e)
    found = line(False).evaluate(like.points, like.known).sum(axis=1)
    # measured source data enter as normalised densities
    peak = np.prod([np.sqrt(2 * np.pi) * measured[k].err for k in ("mu_S_N", "mu_S_E", "D_S") if k in measured])
    for c, rate in zip(line(False).classes, found):
        if c.name not in mock():
            continue
        drawn = mock()[c.name]
        w = drawn["w"].copy()
        for k, x in measured.items():
            w *= np.exp(-0.5 * ((drawn[k] - x.value) / np.where(drawn[k] > x.value, x.hi, x.lo)) ** 2)
        w /= peak
        error = np.sqrt(np.sum(w**2))
        assert rate == pytest.approx(w.sum(), abs=3.5 * error + 0.01 * w.sum()), f"{c.name}: {rate / w.sum()}"


@cache
def drawn():
    """Events of all classes with kicked remnants, each class as often as any other."""
    model = resolve(Scenario.read("default"))
    l, b = np.radians(PLACE)
    ready = rates.prepare(model, model.galaxy.sightline(l, b), model.sources.toward(l, b, model.galaxy), Numerics())
    return Sampler.of(ready).draw(1_000_000, 7, full=True, tilt="equal")


KICKED = {
    "t_E": CASES["t_E"],
    "pi_E": CASES["t_E, pi_E"],
    "mass": {"t_E": m(100.0, 20.0), "pi_E": m(0.03, 0.008), "theta_E": m(2.0, 0.5)},
    "vector": {"t_E": m(100.0, 10.0), "pi_EN": m(0.03, 0.008), "pi_EE": m(0.02, 0.008)},
    "source motion": CASES["source motion"],
}


@pytest.mark.parametrize("name", list(KICKED))
def test_kicked_remnants_against_sampled_events(name):
    measured = KICKED[name]
    e = event(**measured)
    like = likelihood(e.solutions[0], e)
    found = line().evaluate(like.points, like.known).sum(axis=1)
    peak = np.prod([np.sqrt(2 * np.pi) * measured[k].err for k in ("mu_S_N", "mu_S_E", "D_S") if k in measured])
    d = drawn()
    place = PLACE[0] * u.deg, PLACE[1] * u.deg
    values = {k: getattr(d, k) for k in ("t_E", "pi_E", "theta_E", "mu_rel", "D_S")}
    north, east = earth.to_north_east(d.mu_rel_l, d.mu_rel_b, *place)
    values["pi_EN"], values["pi_EE"] = d.pi_E * north / d.mu_rel, d.pi_E * east / d.mu_rel
    values["mu_S_N"], values["mu_S_E"] = earth.to_north_east(d.mu_S_l, d.mu_S_b, *place)
    w = d.weight / peak
    for k, x in measured.items():
        w = w * np.exp(-0.5 * ((values[k] - x.value) / np.where(values[k] > x.value, x.hi, x.lo)) ** 2)
    compared = 0
    for c, (masses, rate) in enumerate(zip(line().classes, found)):
        mine = w[d.lens_class == c]
        error = np.sqrt(np.sum(mine**2))
        # beyond the ends of a mass spectrum everything hangs on how its nodes are spread
        if rate < 1e-3 * found.sum() or error > 0.1 * mine.sum():
            continue
        compared += 1
        assert rate == pytest.approx(mine.sum(), abs=3.5 * error + 0.003 * mine.sum()), (
            f"{masses.name}: {rate / mine.sum()}"
        )
    assert compared >= 1


def test_distances_and_masses_against_sampled_events():
    measured = CASES["pi_E, theta_E"]
    result = event_odds(event(**measured), line(False), outlier=0.0)
    drawn = mock()["star"]
    w = drawn["w"] * np.prod([np.exp(-0.5 * ((drawn[k] - x.value) / x.lo) ** 2) for k, x in measured.items()], axis=0)
    order = np.argsort(drawn["theta_E"] / drawn["pi_E"])
    mass = (drawn["theta_E"] / drawn["pi_E"] / KAPPA)[order]
    D_L = 1 / (drawn["theta_E"] * drawn["pi_E"] + 1 / drawn["D_S"])
    for values, weights, quantity in (
        (mass, w[order], "mass_msun"),
        (np.sort(D_L), w[np.argsort(D_L)], "distance_kpc"),
    ):
        wanted = np.interp([0.16, 0.5, 0.84], np.cumsum(weights) / weights.sum(), values)
        assert list(result.quantiles(quantity, "star").values()) == pytest.approx(wanted, rel=0.06)


def test_long_events_and_the_mass():
    """OGLE-2011-BLG-0462 (Sahu+ 2022, ApJ 933, 83; pi_E and exact t_E from memory): theta_E decides, not pi_E."""
    short = {"t_E": m(270.7, 11.2), "pi_E": m(0.0894, 0.0135)}
    without = judged(**short)
    assert without.p("black_hole") < 0.1 and without.most_likely == "star"
    assert "theta_E is not measured" in without.says()
    rough = judged(**short, theta_E=m(5.2, 1.5)).p("black_hole")
    good = judged(**short, theta_E=m(5.2, 0.3))
    assert without.p("black_hole") < rough < good.p("black_hole")
    assert good.most_likely == "black_hole" and good.p("black_hole") > 0.8
    dark = judged(**short, theta_E=m(5.2, 0.3), I_lens_limit=20.0)
    assert dark.p("black_hole") > 0.95
    assert dark.quantiles("mass_msun")["p50"] == pytest.approx(5.2 / KAPPA / 0.0894, rel=0.15)


def test_outlier_floor():
    data = {"t_E": m(270.7, 3.0), "pi_E": m(0.0894, 0.003), "theta_E": m(5.2, 0.1)}
    p = [event_odds(event(**data), line(), outlier=x) for x in (0.0, 1e-3, 1e-2, 1e-1)]
    holes = [x.p("black_hole") for x in p]
    assert holes == sorted(holes, reverse=True)
    assert [x.outlier_weight for x in p] == sorted(x.outlier_weight for x in p)
    assert p[0].outlier_weight == 0.0 and p[0].p("white_dwarf") < 1e-12
    # the floor: what t_E alone says, times the share of wrong fits and a log-uniform density over four decades
    assert p[2].floors[0.1] == pytest.approx(p[1].probability) and p[2].floors[10.0] == pytest.approx(p[3].probability)
    assert "white_dwarf" in p[0].to_dict()["below"] and p[0].to_dict()["probability"]["white_dwarf"] == 1e-6


def _draws(n, seed=3, **change):
    rng = np.random.default_rng(seed)
    t = rng.normal(60.0, 2.0, n)
    p_n, p_e = rng.normal(0.11, 0.015, n), rng.normal(-0.06, 0.01, n)
    return {"t_E": t, "pi_EN": p_n, "pi_EE": p_e, **change}


def _as_draws(columns, weight=None, ln_prior=0.0):
    n = columns["t_E"].size
    weight = np.ones(n) if weight is None else weight
    return Draws(columns, weight / weight.sum(), ln_prior + np.zeros(n), "uniform")


def _of(draws, frame="heliocentric", t_0par=None):
    e = Observed("e", *PLACE, frame, t_0par, (Solution("", {}, draws=draws),))
    return event_odds(e, line())


def test_table_samples_and_grid_agree():
    table = judged(t_E=m(60.0, 2.0), pi_EN=m(0.11, 0.015), pi_EE=m(-0.06, 0.01))
    samples = _of(_as_draws(_draws(2000)))
    z = np.linspace(-3.5, 3.5, 11)
    a, b, c = (x.ravel() for x in np.meshgrid(z, z, z, indexing="ij"))
    columns = {"t_E": 60 + 2 * a, "pi_EN": 0.11 + 0.015 * b, "pi_EE": -0.06 + 0.01 * c}
    grid = _of(_as_draws(columns, np.exp(-0.5 * (a * a + b * b + c * c))))
    assert samples.probability == pytest.approx(table.probability, rel=0.05, abs=1e-4)
    assert grid.probability == pytest.approx(table.probability, rel=0.01, abs=1e-5)
    assert samples.effective_samples > 1000
    for other in (samples, grid):
        assert other.quantiles("mass_msun")["p50"] == pytest.approx(table.quantiles("mass_msun")["p50"], rel=0.03)
        assert other.outlier_weight == pytest.approx(table.outlier_weight, rel=0.2)


def test_sampling_prior_is_divided_out():
    """Samples from a likelihood times a prior give the same odds as samples from the likelihood."""
    columns = _draws(60_000)
    plain = _of(_as_draws({k: v[:2000] for k, v in columns.items()}))
    t = columns["t_E"]
    keep = np.random.default_rng(1).random(t.size) < (t.min() / t) ** 4
    biased = {k: v[keep][:2000] for k, v in columns.items()}
    corrected = _of(_as_draws(biased, ln_prior=-4 * np.log(biased["t_E"])))
    assert corrected.probability == pytest.approx(plain.probability, rel=0.05, abs=1e-4)


def test_few_effective_samples_are_refused():
    with pytest.raises(InputError, match="effective samples"):
        _of(_as_draws(_draws(60)))


def test_directions_of_a_sample_are_no_further_samples():
    # a geocentric size without a direction is evaluated in several directions
    columns = {"t_E": _draws(300)["t_E"], "pi_E": np.random.default_rng(5).normal(0.12, 0.01, 300)}
    assert 100 < _of(_as_draws(columns), "geocentric", 60000.0).effective_samples <= 300


WIDE = {
    "wide": {"t_E": m(60.0, 6.0), "pi_EN": m(0.1, 0.1), "pi_EE": m(0.05, 0.03)},
    "thin": {"t_E": m(60.0, 1.0), "pi_EN": m(0.1, 0.3), "pi_EE": m(0.05, 0.02)},
    "and mu_rel": {"t_E": m(60.0, 6.0), "pi_EN": m(0.0, 0.05), "pi_EE": m(0.0, 0.02), "mu_rel": m(6.0, 1.0)},
    "and theta_E": {"t_E": m(60.0, 3.0), "pi_EN": m(0.1, 0.1), "pi_EE": m(0.05, 0.03), "theta_E": m(0.5, 0.02)},
}  # fmt: skip


@pytest.mark.parametrize("name", list(WIDE))
def test_vectors_have_points_enough(name, monkeypatch):
    """Twice as many directions, half the steps and 15 timescales move the rates by a thousandth."""
    e = event("geocentric", 55763.0, **WIDE[name])
    found = line().evaluate(likelihood(e.solutions[0], e).points).sum(axis=1)
    turns = like_of._turns

    def finer(north, east, size=None):
        angle, _ = turns(north, east, size)
        n = 2 * angle.size
        return (np.arange(n) + 0.5) * (2 * np.pi / n), np.full(n, 2 * np.pi / n)

    def more(measure):
        t, w = like_of._nodes(measure, 15, 15, wide=0.35)
        return t, w / t

    monkeypatch.setattr(like_of, "_turns", finer)
    monkeypatch.setattr(like_of, "_timescales", more)
    monkeypatch.setattr(like_of, "_POLAR_STEP", 0.08)
    points = likelihood(e.solutions[0], e).points
    fine = line().evaluate(points).sum(axis=1)
    assert found == pytest.approx(fine, rel=1.5e-3, abs=1e-6 * fine.sum())
    # the motions of points at several timescales are the same, so they cost as much as those of one
    motions = np.unique(np.round(np.stack([np.log(points.X / points.t_E if points.on_theta else points.X * points.t_E),
                                           points.angle]), 9), axis=1)  # fmt: skip
    assert motions.shape[1] < (0.2 if name != "and theta_E" else 1.01) * len(points)


@cache
def ungathered():
    """Rates of the unkicked model from Gaussians that are hardly joined."""
    finest = line(False)
    made = EventRates(finest.ready)
    for with_source in (False, True):
        close = (0.02, 0.02, 0.02, 0.02 if with_source else np.inf)
        mixture = mixtures.Mixture.gathered(made._nodes(), with_source, [close])
        if with_source:
            made._with_source = mixture
        else:
            made.mixture, made.gauss = mixture, mixture.finished(mixture.parts)
    return made


MORE = {
    "wide, source motion": {**WIDE["wide"], "mu_S_N": m(-6.0, 0.5), "mu_S_E": m(-3.0, 0.5)},
    "source motion alone": {"t_E": m(20.0, 1.0), "mu_S_N": m(-2.0, 0.5), "mu_S_E": m(2.0, 0.5)},
    "sharp source distance": {"t_E": m(20.0, 1.0), "D_S": m(8.5, 0.3)},
}


@pytest.mark.parametrize("name", ["t_E", "vector", "source motion", "source distance", *MORE])
def test_joined_gaussians_give_the_rates_of_all(name):
    fewer, all_of_them = line(False), ungathered()
    assert fewer.mixture.cell.size < 0.5 * all_of_them.mixture.cell.size
    e = event(**({**CASES, **MORE}[name]))
    like = likelihood(e.solutions[0], e)
    found, wanted = (x.evaluate(like.points, like.known).sum(axis=1) for x in (fewer, all_of_them))
    # what is known of the source picks out few of them
    assert found == pytest.approx(wanted, rel=6e-3 if like.known else 3e-3)


def test_both_frames_give_the_same_answer():
    """The samples of one fit in both frames, its prior carried along: dt d2pi goes with the third power of t_E."""
    target = {"t_0par": 55763.0, "ra": 267.9 * u.deg, "dec": -29.9 * u.deg}
    from lensrate.galaxy.frames import icrs_from_galactic

    target["ra"], target["dec"] = icrs_from_galactic(PLACE[0] * u.deg, PLACE[1] * u.deg)
    helio = _draws(500, **{"pi_EN": np.random.default_rng(1).normal(0.3, 0.03, 500)})
    t, north, east = earth.to_geocentric(helio["t_E"] * u.day, helio["pi_EN"], helio["pi_EE"], **target)
    geo = {"t_E": t.value, "pi_EN": north, "pi_EE": east}
    assert np.abs(geo["t_E"] / helio["t_E"] - 1).max() > 0.1
    n = len(line().classes)
    out = []
    for columns, ln_prior, frame, epoch in (
        (helio, 0.0, "heliocentric", None),
        (geo, 3 * np.log(helio["t_E"] / geo["t_E"]), "geocentric", 55763.0),
    ):
        e = Observed("e", *PLACE, frame, epoch, (Solution("", {}, draws=_as_draws(columns, ln_prior=ln_prior)),))
        points = likelihood(e.solutions[0], e).points
        out.append(line().evaluate(points).sum(axis=1))
    assert out[0].size == n
    assert out[1] / out[1].sum() == pytest.approx(out[0] / out[0].sum(), rel=1e-6)
    # sharp measurements, as Gaussians
    # without the outlier floor, which takes t_E alone and so knows no frame
    sharp = [{q: m(v[7], 0.002 * abs(v[7])) for q, v in columns.items()} for columns in (helio, geo)]
    a = event_odds(event(**sharp[0]), line(), outlier=0.0)
    b = event_odds(event("geocentric", 55763.0, **sharp[1]), line(), outlier=0.0)
    assert b.probability == pytest.approx(a.probability, rel=0.01, abs=1e-9)
    # taking one for the other is no small matter
    wrong = event_odds(event(**sharp[1]), line(), outlier=0.0)
    assert np.abs(wrong.probability / a.probability - 1).max() > 0.1


def test_solutions_weigh_by_evidence():
    one, other = {"t_E": m(60.0, 2.0), "pi_E": m(0.1, 0.01)}, {"t_E": m(60.0, 2.0), "pi_E": m(0.4, 0.02)}
    apart = [event_odds(event(**x), line()) for x in (one, other)]
    for chi2 in (0.0, 4.0, 60.0):
        both = Observed("e", *PLACE, "heliocentric", None, (Solution("a", one), Solution("b", other, chi2)))
        result = event_odds(both, line())
        weights = np.array([s.evidence for s in result.solutions])
        assert weights[1] / weights[0] == pytest.approx(
            np.exp(-chi2 / 2) * apart[1].solutions[0].evidence / apart[0].solutions[0].evidence
        )
        low, high = (np.minimum, np.maximum)
        p = [a.probability for a in apart]
        assert np.all(result.probability >= low(*p) - 1e-9) and np.all(result.probability <= high(*p) + 1e-9)
    assert result.probability == pytest.approx(apart[0].probability, rel=1e-6)


def test_lens_light():
    """A nearby lens of half a solar mass that does not shine is a white dwarf; neutron stars and the like stay."""
    data = {"t_E": m(40.0, 1.0), "pi_E": m(0.35, 0.02), "theta_E": m(1.7, 0.1)}
    free, bright, dark = (judged(**data, **x) for x in ({}, {"I_lens_limit": 12.0}, {"I_lens_limit": 21.0}))
    assert free.most_likely == "star"
    assert bright.probability == pytest.approx(free.probability, rel=0.02, abs=1e-4)
    assert dark.p("white_dwarf") > 0.9
    assert dark.p("neutron_star") / dark.p("black_hole") == pytest.approx(
        free.p("neutron_star") / free.p("black_hole"), rel=0.02
    )


def test_white_dwarfs_shine_as_those_of_a_mock_catalogue():
    from lensrate.events.lens_limit import LensLimit
    from lensrate.events.mock import mock_events

    forecast = sightline(PLACE[0] * u.deg, PLACE[1] * u.deg, UNKICKED)
    drawn = mock_events(forecast, number=40_000, seed=1)
    mine = drawn["lens"] == "white_dwarf"
    D, M = drawn["D_L"][mine], drawn["M_L"][mine]
    absolute = drawn["I_L"][mine] - 5 * np.log10(D) - 10 - forecast._integrals.ready.sources.dust(D)
    masses = next(c for c in line(False).classes if c.name == "white_dwarf")
    mean, spread = LensLimit(20.0, line(False)).of(masses)
    order, ends = np.argsort(masses.ln_M), np.quantile(M, [0.0, 0.3, 0.7, 1.0])
    for low, high in zip(ends, ends[1:]):
        here = (M >= low) & (M <= high)
        said = np.mean(np.interp(np.log(M[here]), masses.ln_M[order], mean[order]))
        # which component a lens near or far is of is left out of the limit: a tenth of a magnitude
        assert said == pytest.approx(absolute[here].mean(), abs=4 * absolute[here].std() / np.sqrt(here.sum()) + 0.1)
    around = absolute - np.interp(np.log(M), masses.ln_M[order], mean[order])
    assert spread == pytest.approx(around.std(), rel=0.1)


@settings(deadline=None, max_examples=20)
@given(
    st.floats(0.5, 500.0), st.floats(0.005, 2.0), st.floats(0.02, 0.6), st.floats(0.1, 5.0), st.sampled_from([0, 1, 2])
)
def test_probabilities_of_any_event(t_E, pi_E, share, theta_E, level):
    data = {"t_E": m(t_E, share * t_E)}
    if level > 0:
        data["pi_E"] = m(pi_E, share * pi_E)
    if level > 1:
        data["theta_E"] = m(theta_E, share * theta_E)
    result = judged(**data)
    assert result.probability.sum() == pytest.approx(1.0) and np.all(result.probability >= 0)
    assert 0 <= result.outlier_weight <= 1
    q = result.quantiles("mass_msun")
    assert q["p16"] <= q["p50"] <= q["p84"]


def test_bulk_is_the_same():
    t, pi = np.array([20.0, 60.0, 200.0]), np.array([0.3, np.nan, 0.02])
    names, p = class_probabilities(
        PLACE[0] * u.deg, PLACE[1] * u.deg, {"t_E": (t, 0.05 * t), "pi_E": (pi, 0.1 * pi)}, outlier=0.01
    )
    first = judged(t_E=m(20.0, 1.0), pi_E=m(0.3, 0.03))
    second = judged(t_E=m(60.0, 3.0))
    assert names == list(first.classes)
    assert p[0] == pytest.approx(first.probability, rel=1e-9) and p[1] == pytest.approx(second.probability, rel=1e-9)
    with pytest.raises(InputError, match="did you mean 'pi_E'"):
        class_probabilities(PLACE[0] * u.deg, PLACE[1] * u.deg, {"t_E": (t, t), "pi_e": (t, t)})


def test_sample_shares_sightlines_and_keeps_order():
    rows = {"l": [359.8613, 359.88, 359.8613], "b": [-1.621] * 3, "t_E": [20.0, 21.0, 200.0], "t_E_err": [1.0] * 3}
    sample = Sample.from_table(Table({"event": ["a", "b", "c"], **rows}), "heliocentric")
    result = odds(sample)
    assert [e.name for e in result] == ["a", "b", "c"] and not result.failed
    table = result.to_table()
    assert len(table) == 3 and table["M_p50"].unit == u.Msun and table.meta["scenario_hash"] == result.scenario.hash
    assert sum(table[f"P_{c}"][0] for c in result.events[0].classes) == pytest.approx(1.0)
    keys = {"event", "frame", "probability", "prior", "odds_against_star", "outlier_weight", "most_likely", "mass_msun",
            "distance_kpc", "by_class", "solutions", "effective_samples"}  # fmt: skip
    assert all(keys <= set(row) for row in result.to_dict())


def test_many_wide_vectors_in_threads():
    """Any number of threads gives the same numbers, which are each event's own."""
    rng = np.random.default_rng(12)
    crowd = [
        event(t_E=m(t, 0.01 * t), pi_EN=m(n, 0.1), pi_EE=m(e, 0.04))
        for t, n, e in zip(rng.uniform(20, 120, 10), rng.normal(0, 0.2, 10), rng.normal(0, 0.1, 10))
    ]
    one, two = odds(crowd, UNKICKED), odds(crowd, UNKICKED, jobs=2)
    alone = [event_odds(e, line(False)) for e in crowd]
    for a, b, c in zip(one.events, two.events, alone):
        assert np.array_equal(a.probability, b.probability)
        assert np.array_equal(a.probability, c.probability)


@pytest.fixture
def forgotten(monkeypatch):
    """No sightline held in memory; counts those made."""
    made = []
    of = module._event_rates
    monkeypatch.setattr(module, "_held", OrderedDict())
    monkeypatch.setattr(module, "_event_rates", lambda *args: made.append(args) or of(*args))
    return made


def test_unordered_fields_are_made_once_each(forgotten):
    places = [(1.0, -2.0), (3.0, -3.0), (0.0, 4.0)]
    mixed = [Observed(f"{k}", *places[k % 3], "heliocentric", None, (Solution("", {"t_E": m(20.0 + k, 1.0)}),))
             for k in range(9)]  # fmt: skip
    result = odds(mixed, UNKICKED)
    assert [e.name for e in result] == [str(k) for k in range(9)] and len(forgotten) == 3
    alone = odds(mixed[4:5], UNKICKED).events[0]
    assert np.array_equal(alone.probability, result.events[4].probability)


def test_spread_is_the_range_over_scenarios():
    others = [("bright", UNKICKED.replace(sources="limit:I=18")), ("far", UNKICKED.replace(sources="distance:9"))]
    events = [event(t_E=m(60.0, 3.0), pi_E=m(0.1, 0.02)), event(t_E=m(200.0, 3.0))]
    result = odds(events, UNKICKED, spread=others)
    alone = [odds(events, s) for s in (UNKICKED, *(s for _, s in others))]
    assert result.spread == ("bright", "far")
    for k, e in enumerate(result):
        every = np.array([o.events[k].probability for o in alone])
        assert np.array_equal(e.probability, every[0])
        assert np.array_equal(e.range[0], every.min(axis=0)) and np.array_equal(e.range[1], every.max(axis=0))
        assert np.all(e.range[1] > e.range[0])


def _all(result):
    return [(e.probability.tolist(), e.histogram.tobytes(), e.outlier_weight) for e in result]


def test_kept_sightlines_give_the_same_numbers(forgotten, tmp_path):
    events = [event(t_E=m(60.0, 3.0), pi_E=m(0.1, 0.02)), event(**CASES["source distance"])]
    folder = tmp_path / "rates"

    def again(keep=folder):
        module._held.clear()
        return odds(events, UNKICKED, keep=keep)

    plain, first = again(None), again()
    files = sorted(folder.iterdir())
    assert len(files) == 2 and _all(first) == _all(plain) and first.notes == plain.notes
    stamps = [f.stat().st_mtime_ns for f in files]
    assert _all(again()) == _all(plain)
    assert [f.stat().st_mtime_ns for f in files] == stamps
    # another scenario, sightline or numerics has files of its own
    odds(events[:1], UNKICKED.replace(numerics={"nodes": 6}), keep=folder)
    odds([Observed("e", 1.0, -2.0, "heliocentric", None, events[0].solutions)], UNKICKED, keep=folder)
    assert len(list(folder.iterdir())) == 4 and [f.stat().st_mtime_ns for f in files] == stamps
    rng = np.random.default_rng(3)
    for path in files:
        whole = path.read_bytes()
        flipped = bytearray(whole)
        flipped[int(rng.integers(len(whole) // 2, len(whole)))] ^= 16
        # every other file under this name: of the same sightline, and of others
        swapped = [f.read_bytes() for f in folder.iterdir() if f != path]
        for damage in (bytes(flipped), whole[: len(whole) // 3], b"", b"lensrate sightline rates 1\n{}", *swapped,
                       b"lensrate sightline rates 1\n" + b"[" * 500_000):  # fmt: skip
            path.write_bytes(damage)
            result = again()
            assert any(path.name in note and "made anew" in note for note in result.warnings())
            assert _all(result) == _all(plain) and path.read_bytes() == whole
    with pytest.raises(InputError, match="keep: folder .* cannot be made"):
        again(files[0] / "below")


def test_kept_sightlines_belong_to_the_code_that_made_them(tmp_path):
    """A setting changed anywhere in lensing gives another name."""
    here = Path(kept.__file__).parent
    for name in ("kept.py", "masses.py", "quadrature.py"):
        (tmp_path / name).write_bytes((here / name).read_bytes())
    of = runpy.run_path(str(tmp_path / "kept.py"), run_name="lensrate.lensing.copied")["Kept"]
    first = of(tmp_path, {"l_deg": 1.0}).path("rates")
    masses = tmp_path / "masses.py"
    masses.write_text(masses.read_text() + "_STEP = 0.5\n")
    of = runpy.run_path(str(tmp_path / "kept.py"), run_name="lensrate.lensing.copied")["Kept"]
    assert of(tmp_path, {"l_deg": 1.0}).path("rates") != first


def test_parallaxes_have_error_bars():
    """Along the vector: the gradient of its size; bars of the picture span them."""
    made = [
        event(t_E=m(60.0, 3.0), pi_E=m(0.1, 0.02, 0.03)),
        event(t_E=m(70.0, 3.0), pi_EN=m(0.3, 0.02), pi_EE=m(-0.4, 0.05)),
        event(t_E=m(80.0, 3.0)),
    ]
    result = odds(made, UNKICKED)
    along = np.hypot(0.6 * 0.02, 0.8 * 0.05)
    assert result.events[0].pi_E_range == pytest.approx((0.08, 0.13))
    assert result.events[1].pi_E_range == pytest.approx((0.5 - along, 0.5 + along))
    assert result.events[2].pi_E_range is None
    # a correlation, the same in every use: error of a rotated ellipse along its long axis
    both = Solution("", {"t_E": m(70.0, 3.0), "pi_EN": m(0.1, 0.02), "pi_EE": m(0.1, 0.02)}, pi_E_corr=0.8)
    tilted = Observed("t", *PLACE, "heliocentric", None, (both,))
    size, error = np.hypot(0.1, 0.1), 0.02 * np.sqrt(1.8)
    assert odds([tilted], UNKICKED).events[0].pi_E_range == pytest.approx((size - error, size + error))
    assert heliocentric([tilted])[2][0] == pytest.approx((size, error, True))
    what = SimpleNamespace(event=tilted)
    present, _ = plans._present(what, np.array([60.0, 80.0]), np.array([0.1, 0.2]), np.ones(2))
    assert 1.0 / present[1] == pytest.approx(error)
    ax = result.plot()
    bars = [line.get_ydata() for line in ax.lines if len(line.get_xdata()) == 2 and np.ptp(line.get_xdata()) == 0]
    assert [tuple(b) for b in bars] == [pytest.approx(e.pi_E_range) for e in result.events[:2]]


def test_mass_spectra_keep_numbers_and_means():
    model = resolve(Scenario.read("default"))
    for name in ("star", "white_dwarf", "black_hole"):
        spectrum = model.populations[-3].spectra[name]
        fine = fine_masses(name, [(0, spectrum.mass, spectrum.number)])
        n = fine.number[:, 0]
        assert n.sum() == pytest.approx(spectrum.number.sum(), rel=1e-6)
        mean = n @ np.exp(fine.ln_M) / n.sum()
        assert mean == pytest.approx(spectrum.moment(1) / spectrum.moment(0), rel=5e-3)
    single = fine_masses("x", [(0, np.array([30.0]), np.array([1e-3]))])
    assert single.width[0] == 0.0 and np.exp(single.ln_M[0]) == pytest.approx(30.0)
