"""Neutron stars and black holes on their own fields: limits, linearity, errors, other laws from the same integrals."""

import astropy.units as u
import numpy as np
import pytest

import lensrate
from lensrate.cli.sightline import report
from lensrate.errors import InputError
from lensrate.remnants.kicks import parse_kick
from lensrate.scenario import Scenario

DEFAULT = Scenario.read("default")
DARK = ("neutron_star", "black_hole")


@pytest.fixture(scope="module")
def baade():
    return lensrate.sightline(1 * u.deg, -3.9 * u.deg)


def test_the_grids_error_is_told_where_it_is_known(baade, monkeypatch):
    assert "; grid 0.5%; systematic" in " ".join(report(baade, "class").split())
    monkeypatch.setattr("lensrate.lensing.sightline_result.Grid", lambda: None)
    assert baade.to_dict()["fields"]["grid_error"] is None
    text = " ".join(report(baade, "class").split())
    assert "grid" not in text and "; systematic: fields hold" in text


def test_the_main_job_is_kicked(baade):
    assert [baade.lenses[c].kinematics for c in (*DARK, "star", "white_dwarf")] == ["kicked"] * 2 + ["stellar"] * 2
    unkicked = lensrate.sightline(1 * u.deg, -3.9 * u.deg, kicks="none")
    for name in DARK:
        assert unkicked.lenses[name].kinematics == "unkicked" and unkicked.lenses[name].rate_standard_error is None
    # half of the neutron stars leave the inner Galaxy; black holes get a fifth of the kick and stay
    assert 0.2 < baade.lenses["neutron_star"].rate / unkicked.lenses["neutron_star"].rate < 0.6
    assert 0.8 < baade.lenses["black_hole"].rate / unkicked.lenses["black_hole"].rate < 1.2
    for name in ("star", "brown_dwarf", "white_dwarf"):
        assert baade.lenses[name].rate == pytest.approx(unkicked.lenses[name].rate, rel=1e-12)
    assert not any("unkicked" in w for w in baade.warnings) and any("unkicked" in w for w in unkicked.warnings)


def test_an_overview_is_a_figure_of_its_own(baade):
    left, right = baade.plot(kind="overview").axes
    assert "E" in left.get_xlabel() and "kpc" in right.get_xlabel()
    with pytest.raises(InputError, match="takes no ax"):
        baade.plot(kind="overview", ax=left)


def test_fields_of_some_components_are_mixed():
    """Where the fields hold the bulge alone, the word beside each class says what the note says of the discs."""
    bar = lensrate.sightline(1 * u.deg, -3.9 * u.deg, DEFAULT.replace(galaxy="hangould2003"), sources="distance:8")
    assert any("born there are unkicked" in w for w in bar.warnings)
    assert {bar.lenses[c].kinematics for c in DARK} == {"mixed"} and "others unkicked" in bar.velocities()
    assert all(0 < bar.lenses[c].rate_standard_error < bar.lenses[c].rate for c in DARK)
    none = lensrate.sightline(1 * u.deg, -3.9 * u.deg, bar.scenario, kicks="none")
    assert none.lenses["neutron_star"].kinematics == "unkicked"


def test_no_kick_is_the_stellar_field(baade):
    """The law none and a scenario without fields give the same numbers, bit for bit."""
    none = baade.reforecast(kicks="none").lenses
    without = lensrate.sightline(1 * u.deg, -3.9 * u.deg, DEFAULT.replace(fields="", kicks="none")).lenses
    for name in none:
        assert none[name].rate == pytest.approx(without[name].rate, rel=1e-13)
        assert none[name].median_t_E == pytest.approx(without[name].median_t_E, rel=1e-9)


def test_small_kicks_approach_the_stars(baade):
    """What is left at 3 km/s is the mismatch of the synthesised stars, which is reported."""
    none, small = (baade.reforecast(kicks=k).lenses["neutron_star"] for k in ("none", "maxwell:3"))
    assert abs(baade.field_mismatch) < 0.03
    assert small.optical_depth / none.optical_depth - 1 == pytest.approx(baade.field_mismatch, abs=0.015)
    # the rate differs also because orbits are not the stars' kinematic model
    assert small.rate / none.rate == pytest.approx(1.0, abs=0.1)


def test_a_mixture_of_laws_gives_the_mixture_of_forecasts(baade):
    slow, fast, both = (baade.reforecast(kicks=k) for k in ("maxwell:56", "maxwell:336", "two-maxwell:56,336,0.2"))
    for key in ("optical_depth", "rate"):
        a, b, c = (getattr(r.lenses["neutron_star"], key) for r in (slow, fast, both))
        assert c == pytest.approx(0.2 * a + 0.8 * b, rel=1e-12)
    i = baade.classes.index("neutron_star")
    mixed = 0.2 * slow.rate_per_ln_t_E[i] + 0.8 * fast.rate_per_ln_t_E[i]
    # in the far wings the Lagrange weights of a single mass undershoot and are cut at zero
    seen = mixed > 1e-5 * mixed.max()
    assert np.allclose(both.rate_per_ln_t_E[i][seen], mixed[seen], rtol=1e-10)


@pytest.mark.parametrize(
    "changes", [{"kicks": "hobbs2005"}, {"bh_kicks": "same"}, {"bh_kicks": "fixed:80"}, {"u_0_limit": 0.5}]
)
def test_reforecast_is_a_new_forecast(baade, changes):
    quick, full = baade.reforecast(**changes), lensrate.sightline(1 * u.deg, -3.9 * u.deg, DEFAULT.replace(**changes))
    assert quick.to_dict() == full.to_dict()
    with pytest.raises(InputError, match="sources"):
        baade.reforecast(sources="clump")


def test_faster_kicks_empty_the_bulge_and_shorten_events(baade):
    lenses = [baade.reforecast(kicks=f"maxwell:{s}").lenses["neutron_star"] for s in (30, 100, 200, 350)]
    assert np.all(np.diff([x.rate for x in lenses]) < 0)
    assert np.all(np.diff([x.median_t_E for x in lenses[:3]]) < 0)
    wild = baade.reforecast(kicks="maxwell:900")
    assert any("faster than 1500 km/s" in w for w in wild.warnings)


def test_momentum_scales_with_the_inverse_of_the_mass(baade):
    """Black holes of one mass under momentum move as under the neutron stars' law at the speed scaled by 1.4/M."""
    scaled = baade.reforecast(kicks="fixed:300", bh_kicks="momentum").lenses["black_hole"]
    by_hand = baade.reforecast(kicks="fixed:300", bh_kicks=f"fixed:{300 * 1.4 / 7.8}").lenses["black_hole"]
    # 7.8 Msun with 1.2 Msun of scatter
    assert scaled.rate == pytest.approx(by_hand.rate, rel=0.01)
    assert scaled.rate > baade.reforecast(kicks="fixed:300", bh_kicks="same").lenses["black_hole"].rate


@pytest.mark.parametrize("l, b", [(1.0, -3.9), (0.0, -1.5), (-2.0, 2.5), (3.0, -6.0)])
def test_sampling_error_in_bulge_fields(l, b):
    lenses = lensrate.sightline(l * u.deg, b * u.deg).lenses
    for name in DARK:
        assert 0 < lenses[name].rate_standard_error < 0.01 * lenses[name].rate


def test_optical_depth_along_the_sightline_adds_up(baade):
    D, parts = baade.optical_depth_along
    total = sum(np.trapezoid(p, D) for p in parts.values())
    # drawn out to 12 kpc; beyond lies a hundredth
    assert total == pytest.approx(baade.lenses["all"].optical_depth, rel=0.02)


def test_event_rate_density_holds_the_kicked_too(baade):
    """Summed over source distances and directions it is the rate density of the same weights."""
    from lensrate.lensing import rates

    ready, integrals = baade._integrals.ready, baade._integrals
    weight = np.zeros(len(integrals.tau))
    first = baade._model.n_stellar
    weight[first + 7 :: 16] = 1.0  # one kick bin of every component
    _, R = rates.event_rate_density(ready, weight, np.array([0.0, 7.0, 8.0, 9.0, 200.0]), n_phi=16)
    wanted = np.tensordot(weight, integrals.T, axes=1)
    assert R.sum(dtype=float) == pytest.approx(wanted.sum(), rel=5e-3)


def test_what_the_fields_lack_is_said():
    extra = {
        "name": "extra",
        "density": {"kind": "exp_disc", "rho_sun": {"value": 0.01, "unit": "Msun/pc3"}, "h_R": 2.6, "h_z": 0.3},
        "kinematics": {"kind": "disc", "sigma_R": 35.0, "sigma_phi": 25.0, "sigma_z": 20.0},
    }
    result = lensrate.sightline(1 * u.deg, -3 * u.deg, DEFAULT.replace(component=(extra,)))
    assert any("hold no extra" in w for w in result.warnings)
    holes = lensrate.sightline(1 * u.deg, -3 * u.deg, DEFAULT.replace(bh_kicks="none"))
    assert any(w.startswith("black holes are unkicked") for w in holes.warnings)
    assert "neutron stars: their own orbits" in holes.velocities() and "black holes: the same" in holes.velocities()


def test_a_law_is_well_sampled_by_fifteen_bins(baade):
    """Kick bins are flat inside; the rate against kick speed, interpolated, says what that costs a smooth law."""
    from scipy.interpolate import CubicSpline

    model, integrals = baade._model, baade._integrals
    edges = model.kicked.edges
    bins, first = len(edges) - 1, model.n_stellar
    born = np.array([p.born_per_msun["neutron_star"] for p in model.populations])
    gamma = np.zeros(bins)
    for i, host in enumerate(model.kicked.host):
        k = i % (bins + 1)
        if k > 0:
            gamma[k - 1] += born[host] * integrals.gamma[first + i]
    # cumulated over speed, the bins' means are differences of a smooth curve
    rate = CubicSpline(
        edges, np.concatenate([[0.0], np.cumsum(gamma * np.diff(edges))]), bc_type="natural"
    ).derivative()
    speed = np.linspace(0, edges[-1], 60_001)
    for law in ("hobbs2005", "igoshev2020", "verbunt2017", "disbergmandel2025", "maxwell:56", "maxwell:20"):
        kicks = parse_kick(law)
        exact = np.trapezoid(kicks.pdf(speed) * rate(speed), speed)
        assert kicks.bin_weights(edges).inside @ gamma == pytest.approx(exact, rel=1e-2), law  # what README promises
