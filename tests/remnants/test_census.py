"""Census: closed forms of what follows the stars, and laws of what is kicked."""

from dataclasses import replace
from functools import cache

import numpy as np
import pytest

from lensrate.galaxy.density import stellar_mass
from lensrate.remnants.census import census, exponential_height, median_height
from lensrate.remnants.cubes import node_density, sampling_error
from lensrate.remnants.maps import galaxy_maps
from lensrate.scenario import Scenario, resolve

DARK = ("neutron_star", "black_hole")
LINEAR = ("bound_fraction", "escaped_fraction", "fraction_within_20_kpc", "local_density_per_pc3")


@pytest.fixture(scope="module")
def scenario(kicked_scenario):
    return Scenario.read(kicked_scenario)


@pytest.fixture(scope="module")
def count(scenario):
    """Census under some laws."""

    def under(kicks="igoshev2020", bh_kicks="momentum"):
        return census(resolve(scenario.replace(kicks=kicks, bh_kicks=bh_kicks))).classes

    return under


def test_heights_of_an_exponential_are_its_own():
    edges = np.concatenate([[0.0], np.geomspace(0.01, 50.0, 61), [np.inf]])
    for h in (0.08, 0.3, 1.5):
        weights = -np.diff(np.exp(-edges / h))
        assert median_height(weights, edges) == pytest.approx(h * np.log(2), rel=3e-3)
        assert exponential_height(weights, edges) == pytest.approx(h, rel=0.01)
    assert np.isnan(median_height(np.zeros(62), edges)) and np.isnan(exponential_height(np.zeros(62), edges))
    rising = np.diff(np.minimum(edges, 2.0) ** 2)
    assert np.isnan(exponential_height(rising, edges))


def test_one_exponential_disc_in_closed_form():
    """All from the thick disc of the default set: 900 pc, 0.001611 Msun/pc^3 at the Sun (its data file)."""
    model = resolve(Scenario.read("default").replace(fields="", kicks="none"))
    disc = next(i for i, c in enumerate(model.galaxy.components) if c.name == "thick_disc")
    galaxy = replace(model.galaxy, components=(model.galaxy.components[disc],))
    model = replace(model, galaxy=galaxy, populations=(model.populations[disc],), kicked=None)
    result = census(model)
    density, pop = galaxy.components[0].density, model.populations[0]
    for name, c in result.classes.items():
        assert c.scale_height_kpc == pytest.approx(0.9, rel=5e-3), name
        assert c.scale_heights["exponential_fit"] == pytest.approx(0.9, rel=5e-3)
        here = density.rho_sun.value * np.exp(-galaxy.sun.z.value / 0.9) * pop.number[name]
        assert c.local_density_per_pc3 == pytest.approx(here / 1e9, rel=1e-3)
        assert c.nearest_pc == pytest.approx(0.554 * (here / 1e9) ** (-1 / 3), rel=1e-3)
        # outside a cylinder of 20 kpc; outside the ball is 2 % more, as its edge comes in by z^2 / 40 kpc
        tail = 2 * (20 + 2) * np.exp(-(20 - 4) / 2) / (0.5 * 4**2 + 2 * (4 + 2))
        assert 1 - c.fraction_within_20_kpc == pytest.approx(tail, rel=0.04)
        assert c.born == pytest.approx(pop.born_per_msun[name] * stellar_mass(density, galaxy.R0))
        assert (c.bound_fraction, c.escaped_fraction, c.sampling_errors) == (1.0, 0.0, {})
    assert result.classes["star"].born > result.classes["star"].today
    assert result.classes["neutron_star"].born == result.classes["neutron_star"].today


@cache
def without_kicks():
    """Censuses on the shipped fields: of no kick, and of what starts with kicks of 2.5 km/s and has its own orbits."""
    default = Scenario.read("default")
    return tuple(census(resolve(default.replace(kicks=law, bh_kicks=law))).classes for law in ("none", "fixed:2.5"))


def test_no_kick_leaves_remnants_with_the_stars():
    still, slow = without_kicks()
    for name in DARK:
        a, b = still[name], slow[name]
        assert (a.bound_fraction, a.kinematics, b.kinematics) == (1, "unkicked", "kicked")
        assert b.bound_fraction > 1 - 1e-9 and b.born == a.born
        assert b.fraction_within_20_kpc == pytest.approx(a.fraction_within_20_kpc, abs=0.005)
        for height in ("median_over_ln2", "exponential_fit"):
            assert b.scale_heights[height] == pytest.approx(a.scale_heights[height], rel=0.02)
        assert b.local_density_per_pc3 == pytest.approx(a.local_density_per_pc3, rel=0.03)


WIDE = pytest.mark.xfail(
    strict=True, reason="2.1 %: inside 3 kpc the orbits hold 2 to 4 % too many stars between 300 and 800 pc"
)


@pytest.mark.parametrize("name", ["neutron_star", pytest.param("black_hole", marks=WIDE)])
def test_no_kick_leaves_half_of_the_mass_below_the_same_height(name):
    still, slow = (classes[name].scale_heights["half_mass_whole_galaxy"] for classes in without_kicks())
    assert slow == pytest.approx(still, rel=0.02)


def test_a_mixture_of_laws_is_the_mixture_of_censuses(count):
    one, two = count("maxwell:90"), count("maxwell:320")
    both = count("two-maxwell:90,320,0.3")
    for name in DARK:
        for key in LINEAR:
            wanted = 0.3 * getattr(one[name], key) + 0.7 * getattr(two[name], key)
            assert getattr(both[name], key) == pytest.approx(wanted, rel=1e-9), (name, key)
        assert both[name].born == one[name].born
    low, high = sorted(c["neutron_star"].scale_height_kpc for c in (one, two))
    assert low < both["neutron_star"].scale_height_kpc < high


def test_laws_of_kicks(count):
    slow, fast = count("maxwell:100"), count("maxwell:400")
    assert slow["neutron_star"].bound_fraction > fast["neutron_star"].bound_fraction
    default, same = count(), count(bh_kicks="same")
    for name in ("star", "brown_dwarf", "white_dwarf"):
        assert default[name].bound_fraction == 1 and default[name].kinematics == "stellar"
    ns, bh, stars = (default[n] for n in (*DARK, "star"))
    assert stars.scale_height_kpc < bh.scale_height_kpc < ns.scale_height_kpc
    assert bh.bound_fraction > 0.98 > ns.bound_fraction
    assert same["black_hole"].bound_fraction == pytest.approx(same["neutron_star"].bound_fraction, abs=0.05)
    # beyond the last bin everything has left
    gone = count("fixed:1600", "same")["neutron_star"]
    assert (gone.escaped_fraction, gone.fraction_within_20_kpc, gone.local_density_per_pc3) == (1.0, 0.0, 0.0)
    assert np.isnan(gone.nearest_pc) and np.isnan(gone.scale_height_kpc)


def test_sampling_errors_are_of_the_size_of_the_scatter(count, scenario):
    c = count()["neutron_star"]
    assert 0 < c.sampling_errors["bound_fraction"] < 0.01
    assert 0 < c.sampling_errors["local_density_per_pc3"] < 0.3 * c.local_density_per_pc3
    assert 0 < c.sampling_errors["scale_height_kpc"] < 0.15 * c.scale_height_kpc
    field = resolve(scenario).kicked.field
    weights = np.zeros(len(field.kick_edges))
    weights[4] = 1
    errors = sampling_error(field, weights)
    assert errors.shape == (3,) and np.all((errors > 0.02) & (errors < 0.6))


def test_what_is_born_is_in_the_grid_or_out_of_it(scenario):
    field = resolve(scenario).kicked.field
    held = (node_density(field) * field.grid.volumes()).sum(axis=(2, 3, 4))
    inside = 1 - field.ends["outside_grid"]
    # nodes stand in cells where the density bends: the slow elements' sum is good to a few per cent
    assert held[:, :6] == pytest.approx(inside[:, :6], rel=0.04)


def test_young_remnants_follow_the_disc_more_closely(scenario):
    """Overlap with the young stars' density of today, as shares by R and |z|."""
    model = resolve(scenario)
    field = model.kicked.field
    law = model.laws["neutron_star"].bin_weights(field.kick_edges)
    volume = field.grid.volumes()
    cubes = node_density(field) * volume
    remnants = np.tensordot(cubes[:, 1:], law.inside, axes=([1], [0])).sum(axis=-1)
    stars = cubes[field.components.index("thin_disc_young"), 0].sum(axis=-1)
    overlap = {name: np.minimum(remnants[i], stars).sum() / stars.sum() for i, name in enumerate(field.components)}
    assert overlap["thin_disc_young"] > 1.1 * overlap["thin_disc_old"]


def test_maps_hold_the_objects_inside_their_frame(scenario, count):
    maps = galaxy_maps(resolve(scenario))
    groups = [("star", "all"), *[(name, group) for name in DARK for group in ("young", "old")]]
    assert [(m.name, m.group) for m in maps] == groups
    total = sum(m.number for m in maps if m.name == "neutron_star")
    assert total == pytest.approx(count()["neutron_star"].born, rel=1e-9)
    for m in maps:
        area = np.diff(m.x)[0] ** 2
        assert m.face_on.shape == (m.x.size, m.x.size) and m.edge_on.shape == (m.z.size, m.x.size)
        assert np.all(np.isfinite(m.face_on)) and 0.2 < m.face_on.sum() * area <= 1.05
        # half a turn changes nothing; the bar's near end is at y > 0 on the Sun's side
        assert m.face_on == pytest.approx(m.face_on[::-1, ::-1], rel=1e-6)
        assert m.edge_on == pytest.approx(m.edge_on[::-1], rel=1e-9)
    stars = maps[0]
    x, y = np.meshgrid(stars.x, stars.x)
    assert stars.face_on[(x < 0) & (y > 0) & (np.hypot(x, y) < 3)].sum() > (
        1.2 * stars.face_on[(x < 0) & (y < 0) & (np.hypot(x, y) < 3)].sum()
    )
    assert stars.face_on.sum() * np.diff(stars.x)[0] ** 2 > 0.9
