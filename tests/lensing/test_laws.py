"""Identities, scalings and limits of the rate integrals, whatever the model."""

from functools import cache

import astropy.units as u
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

import lensrate
from lensrate.lensing import distributions, rates
from lensrate.lensing.quadrature import Numerics
from lensrate.scenario import Scenario, resolve
from lensrate.units import DAYS_PER_YEAR, KAPPA

DEFAULT = Scenario.read("default")


def prepared(l, b, scenario=DEFAULT, **numerics):
    model = resolve(scenario)
    l, b = np.radians(l), np.radians(b)
    line = model.galaxy.sightline(l, b)
    return rates.prepare(model, line, model.sources.toward(l, b, model.galaxy), Numerics(**numerics))


@pytest.mark.parametrize("l, b", [(1, -3.9), (-5, 2), (30, -1.5), (150, 4)])
def test_optical_depth_is_rate_times_mean_timescale(l, b):
    """tau = (pi/2) Gamma <t_E>: tau from the product rule, the mean from the rate density."""
    ready = prepared(l, b, nodes=7, directions=4.0, q_max=24.0, weight_cut=1e-8)
    tau, gamma, _ = rates.moments(ready)
    grid, T = rates.rate_density(ready)
    t_E = np.sqrt(KAPPA * grid.pi)[:, None] / grid.mu
    area = 2 * grid.h**2
    big = gamma.sum(axis=1) > 1e-4 * gamma.sum()
    # the last 1e-6 of tau lies in events beyond the slowest mu_rel of the grid
    assert np.allclose(np.pi / 2 * (T * t_E).sum(axis=(1, 2))[big] * area, tau.sum(axis=1)[big], rtol=3e-4)
    total = np.pi / 2 * (T * t_E).sum() * area
    assert total == pytest.approx(tau.sum(), rel=1e-4)


def test_event_rate_density_sums_to_rate_density():
    ready = prepared(1, -2.9, step_dex=0.1, weight_cut=1e-12)
    grid, T = rates.rate_density(ready)
    weight = np.linspace(0.5, 2.0, T.shape[0])
    cells = np.array([0.0, 4.0, 6.0, 7.0, 8.0, 9.0, 10.0, 12.0, 200.0])
    _, R = rates.event_rate_density(ready, weight, cells, n_phi=16)
    assert R.shape == (grid.pi.size, 8, 16, grid.mu.size) and R.dtype == np.float32
    wanted = np.tensordot(weight, T, axes=1)
    assert np.allclose(R.sum(axis=(1, 2), dtype=float), wanted, rtol=1e-3, atol=3e-5 * wanted.max())
    assert R.sum(dtype=float) == pytest.approx(wanted.sum(), rel=2e-5)
    _, half = rates.event_rate_density(ready, 0.5 * weight, cells, n_phi=16)
    assert np.allclose(half, 0.5 * R, rtol=1e-5, atol=1e-12 * R.max())


def test_direction_cells_follow_the_mean_motion():
    """The rate-weighted direction of mu_rel from the cells points where the mean motions say."""
    ready = prepared(3, -4, DEFAULT.replace(sources="distance:8"), step_dex=0.1)
    weight = np.zeros(len(ready.elements))
    weight[0] = 1.0  # young disc: cold, so that its direction is sharp
    grid, R = rates.event_rate_density(ready, weight, np.array([0.0, 100.0]), n_phi=32)
    phi = 2 * np.pi * (np.arange(32) + 0.5) / 32
    by_angle = R.sum(axis=(0, 1, 3))
    mean = np.angle(np.sum(by_angle * np.exp(1j * phi)))
    D = np.linspace(1, 7, 50)
    lens = ready.model.galaxy.profile(ready.line, D)[:, 0]
    source = np.average(ready.src[1:3, :, 0], axis=1, weights=ready.src[0, :, 0])
    motion = np.average(lens[1:3] - source[:, None], axis=1, weights=lens[0] * D**1.5)
    assert abs(np.angle(np.exp(1j * (mean - np.arctan2(motion[1], motion[0]))))) < 0.15


def test_mass_shifts_timescales():
    """A class four times as heavy: t_E doubles; the same optical depth comes at half the rate."""

    def own(mass):
        table = {"mass_function": {"kind": "delta", "M": mass}, "rides_on": "bulge", "mass_fraction": 0.1}
        return lensrate.sightline(1 * u.deg, -3 * u.deg, DEFAULT.replace(lens_class={"dark": table})).lenses["dark"]

    light, heavy = own(0.643), own(4 * 0.643)
    assert heavy.optical_depth == pytest.approx(light.optical_depth, rel=1e-12)
    assert heavy.rate == pytest.approx(light.rate / 2, rel=1e-12)
    assert heavy.mean_t_E == pytest.approx(2 * light.mean_t_E, rel=1e-12)
    assert heavy.median_t_E == pytest.approx(2 * light.median_t_E, rel=3e-4)


def test_parts_add_up_and_ranges_partition():
    whole = lensrate.sightline(2 * u.deg, -2.5 * u.deg)
    everything = whole.lenses["all"]
    for parts in (whole.components, whole.elements, {c: whole.lenses[c] for c in whole.classes}):
        assert sum(p.rate for p in parts.values()) == pytest.approx(everything.rate, rel=1e-12)
        assert sum(p.optical_depth for p in parts.values()) == pytest.approx(everything.optical_depth, rel=1e-12)
    cuts = [(1e-3, 5), (5, 40), (40, 1e6)]
    pieces = [lensrate.sightline(2 * u.deg, -2.5 * u.deg, t_E_range=c * u.day).lenses for c in cuts]
    for name in whole.lenses:
        assert sum(p[name].rate for p in pieces) == pytest.approx(whole.lenses[name].rate, rel=2e-4)
        assert sum(p[name].optical_depth for p in pieces) == pytest.approx(whole.lenses[name].optical_depth, rel=2e-3)
    assert all(5 < p.median_t_E < 40 and 5 < p.mean_t_E < 40 for p in pieces[1].values())
    assert pieces[2]["black_hole"].share_of_events > whole.lenses["black_hole"].share_of_events
    wide = lensrate.sightline(2 * u.deg, -2.5 * u.deg, DEFAULT.replace(u_0_limit=1.5)).lenses["all"]
    assert wide.rate == pytest.approx(1.5 * everything.rate, rel=1e-12)
    assert wide.mean_t_E == pytest.approx(everything.mean_t_E, rel=1e-12)


def test_joint_distributions_sum_to_the_timescales():
    result = lensrate.sightline(1 * u.deg, -3 * u.deg)
    for y in ("pi_E", "theta_E"):
        t, values, density = result.joint(y)
        step = float(np.log(values[41] / values[40]))
        for name, pdf in zip(result.classes, result.rate_per_ln_t_E):
            marginal = density[name].value.sum(axis=1) * step
            # Lagrange weights of a single mass undershoot a little where the density is steep
            assert np.allclose(marginal, pdf, rtol=1e-2, atol=1e-6 * pdf.max()), (y, name)
            assert marginal.sum() == pytest.approx(pdf.sum(), rel=1e-6)
    # M = theta_E / (kappa pi_E) at the peaks of a class of one mass
    table = {"mass_function": {"kind": "delta", "M": 10.0}, "rides_on": "bulge", "mass_fraction": 0.1}
    result = lensrate.sightline(1 * u.deg, -3 * u.deg, DEFAULT.replace(lens_class={"ten": table}))
    peak = {}
    for y in ("pi_E", "theta_E"):
        t, values, density = result.joint(y)
        spread = density["ten"].value.sum(axis=0)
        peak[y] = np.exp(np.average(np.log(values.value), weights=spread))
    assert peak["theta_E"] / (KAPPA * peak["pi_E"]) == pytest.approx(10.0, rel=1e-3)


REPORTED = [
    (1.0, -3.9, "limit:I=21"), (-2.0, 1.5, "limit:I=20"), (0.2, -0.3, "limit:Ks=18"), (20.0, 2.0, "limit:I=21"),
    (180.0, 2.0, "limit:I=21"), (40.0, 90.0, "limit:I=21"), (1.0, -3.9, "distance:8"), (280.5, -32.9, "distance:50"),
    (1.2, -2.8, "clump:all"),
]  # fmt: skip


@cache
def coarse_and_exact(l, b, rule):
    fine = {
        "step_dex": 0.025, "nodes": 8, "directions": 6.0, "half_circle": 32, "q_max": 36.0, "weight_cut": 1e-8,
        "merge_sources": False,
    }  # fmt: skip
    scenario = DEFAULT.replace(sources=rule)
    return tuple(lensrate.sightline(l * u.deg, b * u.deg, s) for s in (scenario, scenario.replace(numerics=fine)))


def agree_to_a_thousandth(l, b, rule, kicked):
    coarse, exact = coarse_and_exact(l, b, rule)
    for name, lens in exact.lenses.items():
        if (lens.kinematics == "kicked") == kicked:
            for key in ("optical_depth", "rate", "mean_t_E", "median_t_E", "share_of_events"):
                assert getattr(coarse.lenses[name], key) == pytest.approx(getattr(lens, key), rel=1e-3), (name, key)
    return coarse, exact


@pytest.mark.slow
@pytest.mark.parametrize("l, b, rule", REPORTED)
def test_halving_every_step_moves_nothing_by_a_thousandth(l, b, rule):
    coarse, exact = agree_to_a_thousandth(l, b, rule, kicked=False)
    for name, part in exact.components.items():
        # a component without a thousandth of the rate is as exact as the total needs
        if part.rate > 1e-3 * exact.lenses["all"].rate:
            assert coarse.components[name].rate == pytest.approx(part.rate, rel=1e-3)
            assert coarse.components[name].optical_depth == pytest.approx(part.optical_depth, rel=1e-3)
    for key in ("mean_distance_kpc", "disc_share", "source_density_per_arcmin2"):
        if coarse.sources[key]:
            assert coarse.sources[key] == pytest.approx(exact.sources[key], rel=1e-3), key


ROUGH = pytest.mark.xfail(strict=True, reason="fields bend at every cell's border and end at 20 kpc: 2-3e-3 here")
KICKED = [pytest.param(*r, marks=ROUGH) if r[2] == "distance:50" else r for r in REPORTED]


@pytest.mark.slow
@pytest.mark.parametrize("l, b, rule", KICKED)
def test_halving_every_step_moves_no_kicked_class_by_a_thousandth(l, b, rule):
    agree_to_a_thousandth(l, b, rule, kicked=True)


@settings(derandomize=True, max_examples=25, deadline=None)
@given(
    st.floats(-360, 360), st.floats(-90, 90), st.sampled_from(["limit:I=19", "distance:3.3", "clump:all", "limit:H=16"])
)
def test_any_direction_gives_sound_numbers(l, b, rule):
    quick = {"step_dex": 0.1, "nodes": 4, "directions": 2.0}
    result = lensrate.sightline(l * u.deg, b * u.deg, DEFAULT.replace(sources=rule, numerics=quick))
    for lens in result.lenses.values():
        assert lens.optical_depth >= 0 and lens.rate >= 0
        if lens.rate > 0:
            assert 0 < lens.median_t_E < 1e6 and 0 < lens.mean_t_E < 1e6 and 0 <= lens.share_of_events <= 1
    assert np.all(result.rate_per_ln_t_E >= 0) and np.all(np.isfinite(result.rate_per_ln_t_E))
    assert result.quadrature_error < 0.03


@pytest.mark.parametrize("kicks", ["none", "igoshev2020"])
def test_one_sightline_is_the_same_whatever_the_cores(kicks, monkeypatch):
    made = []
    for n in (1, 2):
        monkeypatch.setattr("lensrate.lensing.forecast.cores", lambda n=n: n)
        made.append(lensrate.sightline(1 * u.deg, -3 * u.deg, kicks=kicks))
    assert made[0].to_dict() == made[1].to_dict()
    assert np.array_equal(made[0].rate_per_ln_t_E, made[1].rate_per_ln_t_E)


def test_same_answer_whatever_the_threads():
    from lensrate.lensing.many import sightlines

    l, b = np.array([1.0, -1.0, 3.0]) * u.deg, np.array([-3.0, 2.0, -2.0]) * u.deg
    one, two = sightlines(l, b, jobs=1), sightlines(l, b, jobs=2)
    for name in one.colnames:
        assert np.array_equal(np.asarray(one[name]), np.asarray(two[name])), name


def test_quantiles_of_a_known_distribution():
    t = np.exp(np.arange(-12, 12, 0.1))
    gauss = np.exp(-0.5 * (np.log(t) / 1.3) ** 2)
    q = distributions.Quantiles(t, gauss)
    assert q.quantile(0.5) == pytest.approx(1.0, abs=1e-4)
    assert q.quantile(0.8413447) == pytest.approx(np.exp(1.3), rel=2e-4)
    assert q.mean() == pytest.approx(np.exp(0.5 * 1.3**2), rel=1e-3)
    assert q.rate(1.0, np.exp(1.3)) == pytest.approx(0.3413447 * 1.3 * np.sqrt(2 * np.pi), rel=2e-4)
    assert DAYS_PER_YEAR == 365.25
