"""Einstein quantities of one event: constants of nature, inverses, limits, published events, refusals."""

import astropy.constants as const
import astropy.units as u
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from lensrate.errors import InputError
from lensrate.lensing import geometry

MASS = st.floats(1e-6, 1e4)
NEAR = st.floats(0.01, 30.0)
BEHIND = st.floats(1.001, 50.0)


@settings(derandomize=True, deadline=None)
@given(MASS, NEAR, BEHIND, st.floats(0.1, 2000.0))
def test_against_lengths_and_speeds(mass, D_L, factor, speed):
    """Everything from metres and seconds, without kappa."""
    M, near, far = mass * u.Msun, D_L * u.kpc, D_L * factor * u.kpc
    r_E = np.sqrt(4 * const.GM_sun * mass / const.c**2 * near * (far - near) / far).to(u.au)
    angle = (r_E / near).to(u.mas, u.dimensionless_angles())
    parallax = geometry.pi_rel(near, far)
    assert geometry.einstein_radius(M, near, far).to_value(u.au) == pytest.approx(r_E.value, rel=1e-9)
    assert geometry.theta_E(M, parallax).to_value(u.mas) == pytest.approx(angle.value, rel=1e-9)
    mu = (speed * u.km / u.s / near).to(u.mas / u.yr, u.dimensionless_angles())
    crossing = (r_E / (speed * u.km / u.s)).to_value(u.day)
    assert geometry.t_E(angle, mu).to_value(u.day) == pytest.approx(crossing, rel=1e-9)


@settings(derandomize=True, deadline=None)
@given(MASS, st.floats(1e-5, 100.0))
def test_mass_comes_back(mass, parallax):
    M, pi = mass * u.Msun, parallax * u.mas
    theta, pi_E = geometry.theta_E(M, pi), geometry.pi_E(M, pi)
    assert geometry.mass_from(theta, pi_E).to_value(u.Msun) == pytest.approx(mass, rel=1e-12)
    assert (theta * pi_E).to_value(u.mas) == pytest.approx(parallax, rel=1e-12)


def test_magnification_and_shift_limits():
    s = np.array([1e-6, 1e-3, 30.0, 100.0])
    assert geometry.magnification(s[:2]) == pytest.approx(1 / s[:2], rel=1e-6)
    assert geometry.magnification(s[2:]) - 1 == pytest.approx(2 / s[2:] ** 4, rel=6e-3)
    assert geometry.magnification(0.0) == np.inf
    grid = np.linspace(0, 10, 100_001)
    shift = geometry.centroid_shift(grid, 1 * u.mas).value
    assert grid[np.argmax(shift)] == pytest.approx(np.sqrt(2), abs=1e-4)
    assert shift.max() == pytest.approx(1 / np.sqrt(8), rel=1e-9)
    assert shift[0] == 0


def test_measured_events():
    # OGLE-2011-BLG-0462 (Sahu+ 2022, ApJ 933, 83): theta_E 5.18 mas, pi_E 0.0894, mass 7.1, largest shift 1.83 mas
    assert geometry.mass_from(5.18 * u.mas, 0.0894).value == pytest.approx(7.1, abs=0.05)
    assert geometry.centroid_shift(np.sqrt(2), 5.18 * u.mas).value == pytest.approx(1.83, abs=0.005)
    assert (5.18 * u.mas * 0.0894).value == pytest.approx(geometry.pi_rel(1.581 * u.kpc, 5.9 * u.kpc).value, rel=2e-3)
    # Stein 2051 B (Sahu+ 2017, Science 356, 1046): 0.675 Msun, parallax 180.8 mas, theta_E 31.53 mas
    assert geometry.theta_E(0.675 * u.Msun, 180.8 * u.mas).value == pytest.approx(31.53, abs=0.005)


def test_arrays_broadcast():
    D_S = [6.0, 8.0] * u.kpc
    assert geometry.einstein_radius([[1.0], [4.0], [9.0]] * u.Msun, 4 * u.kpc, D_S).shape == (3, 2)
    assert geometry.pi_rel(4 * u.kpc, D_S).unit == u.mas


@pytest.mark.parametrize(
    ("call", "words"),
    [
        (lambda: geometry.pi_rel(8 * u.kpc, 8 * u.kpc), "D_L"),
        (lambda: geometry.pi_rel(0 * u.kpc, 8 * u.kpc), "D_L"),
        (lambda: geometry.pi_rel(4, 8 * u.kpc), "no unit"),
        (lambda: geometry.theta_E(-1 * u.Msun, 0.1 * u.mas), "mass"),
        (lambda: geometry.theta_E(1 * u.kpc, 0.1 * u.mas), "mass"),
        (lambda: geometry.t_E(1 * u.mas, 0 * u.mas / u.yr), "mu_rel"),
        (lambda: geometry.mass_from(1 * u.mas, 0.0), "pi_E"),
        (lambda: geometry.mass_from(1 * u.mas, 0.1 * u.mas), "pi_E"),
        (lambda: geometry.magnification(-0.1), "separation"),
        (lambda: geometry.magnification(np.nan), "separation"),
    ],
)
def test_refusals(call, words):
    with pytest.raises(InputError, match=words):
        call()
