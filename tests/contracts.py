"""Contracts: one class of tests for each family of models; a new model is tested in three lines."""

import astropy.units as u
import numpy as np
import pytest

from lensrate.units import G


class PotentialContract:
    """What every gravitational potential must satisfy.

    A subclass sets `potential`, and where they apply `mass` (total mass in Msun, None if infinite), `far`
    (kpc, where it should look like a point) and `poisson` (tolerance of Poisson's equation relative to its
    largest term).
    """

    potential = None
    mass = None
    far = 3e4
    poisson = 1e-5

    def points(self):
        rng = np.random.default_rng(7)
        direction = rng.normal(size=(60, 3))
        direction /= np.linalg.norm(direction, axis=1)[:, None]
        return direction * np.exp(rng.uniform(np.log(0.2), np.log(30), 60))[:, None]

    def value(self, p):
        return self.potential.value(*(p.T * u.kpc)).value

    def acceleration(self, p):
        return self.potential.acceleration(*(p.T * u.kpc)).value

    def differences(self, function, step):
        """Central differences of fourth order along each axis at `points`, shape (3, n, ...)."""
        p = self.points()
        h = step * np.linalg.norm(p, axis=1)[:, None]
        out = []
        for axis in np.eye(3):
            v = [function(p + k * h * axis) for k in (-2, -1, 1, 2)]
            hh = h if v[0].ndim == 2 else h[:, 0]
            out.append((v[0] - 8 * v[1] + 8 * v[2] - v[3]) / (12 * hh))
        return np.array(out)

    def test_acceleration_is_minus_the_gradient(self):
        gradient = self.differences(self.value, 1e-3).T
        a = self.acceleration(self.points())
        assert np.all(np.linalg.norm(a + gradient, axis=1) < 2e-7 * np.linalg.norm(a, axis=1))

    def test_poisson(self):
        slopes = self.differences(self.acceleration, 1e-3)
        parts = np.array([slopes[i, :, i] for i in range(3)])
        source = 4 * np.pi * G * self.potential.density(*(self.points().T * u.kpc)).to_value(u.Msun / u.kpc**3)
        size = np.abs(parts).max(axis=0) + np.abs(source)
        assert np.all(np.abs(parts.sum(axis=0) + source) < self.poisson * size)

    def test_far_away_it_is_a_point_mass(self):
        if self.mass is None:
            pytest.skip("infinite mass")
        far = self.far * np.array([[1.0, 0, 0], [0, 1, 0], [0, 0, 1], [0.6, 0.0, 0.8]])
        assert self.value(far) * -self.far / G == pytest.approx(np.full(4, self.mass), rel=2e-3)
        pull = np.linalg.norm(self.acceleration(far), axis=1)
        assert pull * self.far**2 / G == pytest.approx(np.full(4, self.mass), rel=2e-3)

    def test_binds_and_ends_at_infinity(self):
        p = self.points()
        assert np.all(self.value(p) < 0)
        assert np.all(np.abs(self.value(1e6 * p)) < 1e-3 * np.abs(self.value(p)))

    def test_circular_speed_follows_from_the_acceleration(self):
        radius = np.array([0.5, 2.0, 8.0, 20.0])
        angle = (np.arange(256) + 0.5) * np.pi / 128
        ring = np.stack([np.cos(angle), np.sin(angle), 0 * angle], axis=-1)
        pull = [-np.mean(np.sum(self.acceleration(r * ring) * ring, axis=1)) for r in radius]
        assert self.potential.circular_speed(radius * u.kpc).value == pytest.approx(np.sqrt(radius * pull), rel=1e-6)

    def test_shapes(self):
        assert self.potential.value(1 * u.kpc, 2 * u.kpc, 0 * u.kpc).shape == ()
        assert self.potential.acceleration(np.ones((2, 3)) * u.kpc, 1 * u.kpc, 0 * u.kpc).shape == (2, 3, 3)
