"""Orbit weights: the iteration itself, cells against drawn points, and components held over later times."""

import astropy.units as u
import numpy as np
import pytest

from lensrate.errors import InputError
from lensrate.galaxy.density import Uniform
from lensrate.galaxy.model import Galaxy
from lensrate.galaxy.potential import Potential
from lensrate.kernels.equilibrium import _add_columns, cell_of
from lensrate.remnants.births import analytic, draw, kicked, window
from lensrate.remnants.cells import COLUMNS_END, LATITUDES, LONGITUDES, cells_of, columns_of, eye_of
from lensrate.remnants.equilibrium import richardson_lucy, rotation_table, solve
from lensrate.units import KPC_PER_MYR

GALAXY = Galaxy.read("default")
POTENTIAL = Potential.read("default")
BY_NAME = {c.element: c for c in GALAXY.components}


def test_richardson_lucy_finds_a_mixture_that_exists():
    rng = np.random.default_rng(1)
    rows = rng.dirichlet(np.full(40, 0.3), size=15)
    truth = rng.dirichlet(np.ones(15))
    target = truth @ rows
    assert richardson_lucy(rows, target, 30_000) == pytest.approx(truth, abs=1e-3)


def test_richardson_lucy_raises_the_likelihood_at_each_step():
    rng = np.random.default_rng(2)
    rows, target = rng.dirichlet(np.ones(30), size=50), rng.dirichlet(np.ones(30))
    likelihood = [target @ np.log(richardson_lucy(rows, target, n) @ rows) for n in range(12)]
    assert np.all(np.diff(likelihood) > 0)


def _counts(cells, place):
    number = [cell_of(cells.scale, cells.m_edges, cells.t_edges, cells.n_phi, *p) for p in place]
    return np.bincount(number, minlength=cells.target.size)


def bar_points(n, rng):
    """Points of the default bar in its frame: exp(-m) has m from Gamma(3), directions even on the scaled sphere."""
    direction = rng.normal(size=(n, 3))
    direction /= np.linalg.norm(direction, axis=1)[:, None]
    return direction * rng.gamma(3.0, 1.0, n)[:, None] * [0.70, 0.44, 0.18]


def test_cells_of_a_bar_hold_the_mass_of_drawn_points():
    cells = cells_of(BY_NAME["bulge"], GALAXY, POTENTIAL)
    n = 100_000
    place = bar_points(n, np.random.default_rng(3))
    expected = n * cells.target
    chi2, free = np.sum((_counts(cells, place) - expected) ** 2 / expected), cells.target.size
    assert chi2 < free + 4 * np.sqrt(2 * free)
    assert cells.mass == pytest.approx(BY_NAME["bulge"].density.mass.value, rel=2e-3)


def test_columns_of_drawn_points_are_those_of_the_density():
    eye = eye_of(GALAXY, POTENTIAL)
    wanted = columns_of(BY_NAME["bulge"], GALAXY, BY_NAME["bulge"].density.mass.value)
    groups = np.zeros((20, wanted.size))
    for row, rng in zip(groups, np.random.default_rng(12).spawn(20)):
        for x, y, z in bar_points(4000, rng):
            sky = (LONGITUDES, LATITUDES)
            _add_columns(eye, COLUMNS_END, *sky, x, y, z, 1 / 4000, row)
    mean, error = groups.mean(axis=0), groups.std(axis=0, ddof=1) / np.sqrt(20)
    # Student's t of 19 degrees of freedom has a mean square of 19 / 17
    assert np.mean(((mean - wanted) / error) ** 2) == pytest.approx(19 / 17, abs=5 * np.sqrt(3 / wanted.size))
    assert mean.sum() == pytest.approx(wanted.sum(), rel=0.02)


@pytest.mark.parametrize("name", ["thick_disc", "thin_disc_old", "nuclear_disc", "halo"])
def test_analytic_births_fill_the_cells(name):
    cells = cells_of(BY_NAME[name], GALAXY, POTENTIAL)
    n = 40_000
    place = analytic(BY_NAME[name], GALAXY, POTENTIAL, n, np.random.default_rng(4))[:, :3]
    expected = n * cells.target
    share = _counts(cells, place) / expected
    # places come from a table of the profile: a few per cent in single cells, far less on the whole
    assert np.sqrt(np.average((share - 1) ** 2, weights=cells.target)) < 3 * np.sqrt(cells.target.size / n)
    found, wanted = ((q[:-1]).reshape(cells.shape).sum(axis=(1, 2)) for q in (share * cells.target, cells.target))
    assert found / wanted == pytest.approx(np.ones(cells.shape[0]), abs=0.1)


def test_rotation_table_follows_the_potential():
    table = rotation_table(POTENTIAL)
    assert table[2 + 82] == pytest.approx(POTENTIAL.circular_speed(8.2 * u.kpc).value, rel=1e-6)


def test_a_disc_is_held():
    rng = np.random.default_rng
    held = solve(BY_NAME["thick_disc"], GALAXY, POTENTIAL.for_orbits(), rng(5), bundles=256)
    assert held.mismatch["later"] < 0.12 < 0.25 < held.mismatch["start"]
    assert held.weights.sum() == pytest.approx(1)
    again = solve(BY_NAME["thick_disc"], GALAXY, POTENTIAL.for_orbits(), rng(5), bundles=256, jobs=2)
    assert np.array_equal(held.states, again.states) and np.array_equal(held.weights, again.weights)


def test_the_bar_is_held():
    held = solve(BY_NAME["bulge"], GALAXY, POTENTIAL.for_orbits(), np.random.default_rng(6), bundles=512)
    assert held.mismatch["later"] < 0.25 < 0.4 < held.mismatch["start"]
    # the latitudes of bulge fields
    assert held.mismatch["later_high"] < 0.12
    rows = draw(held, 20_000, np.random.default_rng(7))
    # for exp(-m) the mean square of each coordinate is 4 times its squared length; the ends are not fully held
    assert np.sqrt(np.mean(rows[:, 2] ** 2) / 4) == pytest.approx(0.18, rel=0.07)
    assert np.sqrt(np.mean(rows[:, 1] ** 2) / 4) == pytest.approx(0.44, rel=0.12)
    # tensor virial theorem (Binney & Tremaine 2008, eq. 4.241): <v_z^2> = -<z a_z> over the density, drawn exactly
    place = bar_points(20_000, np.random.default_rng(9))
    pull = POTENTIAL.for_orbits().acceleration(*(POTENTIAL.from_bar_frame(place).T * u.kpc)).value[:, 2]
    assert np.std(rows[:, 5]) == pytest.approx(np.sqrt(-np.mean(place[:, 2] * pull)), rel=0.04)


def test_kicks_fill_their_bin_evenly_and_in_all_directions():
    rows = np.zeros((30_000, 6))
    kick = kicked(rows, 100.0, 200.0, np.random.default_rng(8))[:, 3:]
    speed = np.linalg.norm(kick, axis=1)
    assert np.histogram(speed, np.linspace(100, 200, 11))[0] == pytest.approx(np.full(10, 3000), abs=2)
    assert np.mean(kick, axis=0) == pytest.approx(np.zeros(3), abs=3)
    assert np.mean((kick / speed[:, None]) ** 2, axis=0) == pytest.approx(np.full(3, 1 / 3), abs=0.01)


def test_windows_of_ages():
    gyr = 1e3 * KPC_PER_MYR
    bulge, thin = window(BY_NAME["bulge"]), window(BY_NAME["thin_disc_old"])
    assert (bulge.young / gyr, bulge.old / gyr, bulge.growth) == pytest.approx((8, 10, 0))
    assert (thin.young / gyr, thin.old / gyr, thin.growth * gyr) == pytest.approx((5, 10, 1 / 8.5))
    ages = np.linspace(thin.young, thin.old, 20_001)
    assert thin.total == pytest.approx(np.trapezoid(np.exp(thin.growth * ages), ages), rel=1e-8)


def test_a_density_without_end_is_refused():
    endless = type(BY_NAME["halo"])("all", "all", Uniform(1.0), BY_NAME["halo"].kinematics)
    with pytest.raises(InputError, match="uniform density has no equilibrium"):
        cells_of(endless, GALAXY, POTENTIAL)
