"""Orbits: conserved integrals, order, reversal, a closed form and a reference library."""

import astropy.units as u
import numpy as np
import pytest
from galpy.orbit import Orbit
from galpy.potential import MiyamotoNagaiPotential, NFWPotential, PlummerPotential, SoftenedNeedleBarPotential

from lensrate.errors import InputError
from lensrate.galaxy.potential import Member, Plummer, Potential
from lensrate.kernels.orbits import ROWS, load, take_steps
from lensrate.kernels.potential import LANES
from lensrate.remnants.orbits import bar_states, bound, integrate, states_energies, step
from lensrate.units import KPC_PER_MYR, G

KMS = u.km / u.s


def population(potential, n, seed):
    """Disc and inner orbits, half of them kicked by up to 400 km/s."""
    rng = np.random.default_rng(seed)
    inner = np.arange(n) < n // 4
    radius = np.where(inner, 0.2 + rng.exponential(1.0, n), 0.3 + rng.gamma(2.0, 2.5, n))
    angle = rng.uniform(0, 2 * np.pi, n)
    speed = potential.circular_speed(radius * u.kpc).value
    place = np.column_stack([radius * np.cos(angle), radius * np.sin(angle), rng.normal(0, 0.3, n)])
    velocity = np.column_stack([speed * np.sin(angle), -speed * np.cos(angle), np.zeros(n)])
    velocity += rng.normal(0, 1, (n, 3)) * np.where(inner, 80.0, 30.0)[:, None]
    kick = rng.normal(size=(n, 3))
    kick *= (rng.uniform(0, 400, n) * (np.arange(n) % 2) / np.linalg.norm(kick, axis=1))[:, None]
    return place * u.kpc, (velocity + kick) * KMS


@pytest.mark.parametrize("name", ["needle", "default"])
def test_jacobi_integral_is_kept_over_10_gyr(name):
    potential = Potential.read(name).for_orbits()
    place, velocity = population(potential, 256, 1)
    before = states_energies(potential, bar_states(potential, place.value, velocity.value))
    place, velocity = integrate(potential, place, velocity, 10 * u.Gyr)
    after = states_energies(potential, bar_states(potential, place.value, velocity.value))
    error = (after - before)[:, 1] / 233**2
    middle, most, nearly_all = np.percentile(np.abs(error), [50, 90, 99])
    assert middle < 4e-4 and most < 2.5e-3 and nearly_all < 1e-2
    assert abs(np.median(error)) < 1e-4  # no drift
    # the bar does change energies, so the integral is tested and not the energy
    assert np.median(np.abs(after - before)[:, 0]) > 100 * np.median(np.abs(after - before)[:, 1])


def test_second_order():
    potential = Potential.read("needle")
    place, velocity = population(potential, 64, 2)
    best = integrate(potential, place, velocity, 200 * u.Myr, eta=0.002)[0].value
    errors = [
        np.median(np.linalg.norm(integrate(potential, place, velocity, 200 * u.Myr, eta=eta)[0].value - best, axis=1))
        for eta in (0.08, 0.04, 0.02)
    ]
    assert errors[0] / errors[1] == pytest.approx(4, rel=0.2)
    assert errors[1] / errors[2] == pytest.approx(4, rel=0.2)


def test_steps_reverse():
    potential = Potential.read("default")
    place, velocity = population(potential, LANES, 3)
    states = bar_states(potential, place.value, velocity.value)
    block = np.zeros(ROWS * LANES)
    assert load(states, 0, block) == LANES
    start = block.copy()
    take_steps(*potential.packed, potential.omega, step(0.1), block, 300)
    assert np.median(np.abs(block - start)[: 3 * LANES]) > 0.5
    take_steps(*potential.packed, potential.omega, -step(0.1), block, 300)
    # the map undoes itself, W included; what is left is rounding, grown along the orbits
    kept = np.r_[0 : 3 * LANES, 9 * LANES : 14 * LANES]
    assert block[kept] == pytest.approx(start[kept], rel=1e-8, abs=1e-8)


# galpy says which of its integrators it uses by way of a warning
@pytest.mark.filterwarnings("ignore:Using C implementation")
def test_against_galpy():
    # galpy's units with ro = vo = 1 are kpc and km/s; its bar turns by omegab t from angle pa
    potential = Potential.read("needle")
    mass = {m.name: m.model for m in potential.members}
    gm = {k: G * m.mass.value for k, m in mass.items()}
    angle = np.pi - np.radians(27)
    reference = (
        PlummerPotential(amp=gm["nucleus"], b=0.3)
        + SoftenedNeedleBarPotential(amp=gm["bar"], a=3.5, b=0.4, c=0.3, pa=angle, omegab=potential.omega)
        + MiyamotoNagaiPotential(amp=gm["disc"], a=2.8, b=0.28)
        + NFWPotential(amp=gm["halo"], a=11.13)
    )
    place, velocity = population(potential, 24, 4)
    x, v = place.value, velocity.value
    radius, phi = np.hypot(x[:, 0], x[:, 1]), np.arctan2(x[:, 1], x[:, 0])
    c, s = np.cos(phi), np.sin(phi)
    start = np.column_stack([radius, c * v[:, 0] + s * v[:, 1], c * v[:, 1] - s * v[:, 0], x[:, 2], v[:, 2], phi])
    time = 300 * KPC_PER_MYR
    orbits = Orbit(start)
    orbits.integrate(np.array([0.0, time]), reference, method="dop853_c", progressbar=False)
    ct, st = np.cos(potential.omega * time), np.sin(potential.omega * time)
    xt, yt, zt = orbits.x(time), orbits.y(time), orbits.z(time)
    theirs = np.column_stack([ct * xt + st * yt, ct * yt - st * xt, zt])
    ours = integrate(potential, place, velocity, 300 * u.Myr, eta=0.002)[0].value
    error = np.linalg.norm(ours - theirs, axis=1)
    assert np.median(error) < 2e-5 and np.max(error) < 3e-3


def test_kepler_period():
    # far outside a Plummer sphere the orbit closes after T = 2 pi sqrt(a^3 / GM)
    point = Potential((Member("sun", Plummer(1e11, 1e-3)),))
    a, e = 8.0, 0.3
    speed = np.sqrt(G * 1e11 / a * (1 - e) / (1 + e))
    period = 2 * np.pi * np.sqrt(a**3 / (G * 1e11)) / KPC_PER_MYR
    place, velocity = [[a * (1 + e), 0.0, 0.0]] * u.kpc, [[0.0, -speed, 0.0]] * KMS
    end = integrate(point, place, velocity, period * u.Myr, eta=0.005)[0].value
    assert end == pytest.approx(place.value, abs=2e-3)


def test_escapers_stay_finite():
    potential = Potential.read("default")
    place = np.full((4, 3), [8.0, 0.0, 0.02]) * u.kpc
    velocity = np.array([[0, -233.0, 0], [0, -900, 0], [1500, 0, 0], [0, 0, -1500]]) * KMS
    place, velocity = integrate(potential, place, velocity, 10 * u.Gyr)
    assert np.all(np.isfinite(place.value)) and np.all(np.isfinite(velocity.value))
    assert list(bound(potential, place, velocity)) == [True, False, False, False]
    # v_inf^2 = v^2 - v_esc^2, and 10 Gyr at that speed
    far = np.sqrt(1500**2 - potential.escape_speed(8 * u.kpc).value ** 2) * 1e4 * KPC_PER_MYR
    assert np.linalg.norm(place.value[2]) == pytest.approx(far, rel=0.02)


def test_complaints():
    potential = Potential.read("needle")
    with pytest.raises(InputError, match="eta: 2"):
        integrate(potential, np.zeros((1, 3)) * u.kpc, np.zeros((1, 3)) * KMS, 1 * u.Gyr, eta=2)
    with pytest.raises(InputError, match=r"place: shape \(3,\)"):
        integrate(potential, np.zeros(3) * u.kpc, np.zeros((1, 3)) * KMS, 1 * u.Gyr)
