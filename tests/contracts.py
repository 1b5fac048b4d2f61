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

    def test_far_away_it_is_a_point_mass_or_grows_as_a_logarithm(self):
        if self.mass is None:  # of a halo whose mass grows as ln r
            mass = [np.linalg.norm(self.acceleration(np.array([[r, 0, 0]]))) * r**2 / G for r in (1e3, 1e4, 1e5)]
            assert mass[1] - mass[0] == pytest.approx(mass[2] - mass[1], rel=0.05)
            return
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


class DensityContract:
    """What every stellar density must satisfy.

    A subclass sets `density`; `mass` (Msun in all space, or inside `inside` kpc of the centre; None: infinite or no
    closed form); `column` (Msun/kpc2 at the Sun's radius, both sides, None: no closed form); `lengths` (kpc, along R
    and z, on which it varies); `shape`: "sphere", "disc" (axisymmetric) or "bar" (two-fold, about `angle` rad).
    """

    density = None
    R0 = 8.178
    mass = None
    inside = None
    column = None
    lengths = (3.0, 0.3)
    shape = "disc"
    angle = 0.0
    rel = 1e-6

    def at(self, p):
        return self.density.at(*np.asarray(p, dtype=float).T, self.R0)

    def points(self):
        rng = np.random.default_rng(11)
        direction = rng.normal(size=(200, 3)) * [1.0, 1.0, self.lengths[1] / self.lengths[0]]
        return direction * self.lengths[0] * np.exp(rng.uniform(np.log(0.01), np.log(3), 200))[:, None]

    @staticmethod
    def panels(edges, n=12):
        x, w = np.polynomial.legendre.leggauss(n)
        edges = np.array(sorted(set(edges)))
        half = 0.5 * np.diff(edges)[:, None]
        return (edges[:-1, None] + half * (x + 1)).ravel(), (half * w).ravel()

    def heights(self):
        return self.panels([0.0, *np.geomspace(self.lengths[1] / 30, self.lengths[1] * 40, 14)])

    def test_positive_and_finite_everywhere(self):
        special = [[0.0, 0.0, 0.0], [0.0, 0.0, 1.0], [1e-9, 0.0, 0.0], [1e3, 1e3, 1e3]]
        rho = self.at(np.vstack([self.points(), special]))
        assert np.all(np.isfinite(rho)) and np.all(rho >= 0) and np.all(rho[:201] > 0)

    def test_shapes_of_arrays(self):
        one, grid = self.density.at(1.0, 0.5, 0.1, self.R0), self.density.at(np.ones((2, 3)), 0.5, 0.1, self.R0)
        assert np.size(one) == 1 and grid.shape == (2, 3)
        assert np.all(grid == one)

    def test_symmetric_as_declared(self):
        p = self.points()
        rho = self.at(p)
        assert self.at(p * [1, 1, -1]) == pytest.approx(rho, rel=1e-13)
        assert self.at(p * [-1, -1, 1]) == pytest.approx(rho, rel=1e-12)
        R, phi, z = np.hypot(p[:, 0], p[:, 1]), np.arctan2(p[:, 1], p[:, 0]), p[:, 2]
        # a bar's major axis runs along (-cos, sin): reflect the azimuth about it; turn anything else by any angle
        phi = 2 * (np.pi - self.angle) - phi if self.shape == "bar" else phi + 1.0
        assert self.at(np.array([R * np.cos(phi), R * np.sin(phi), z]).T) == pytest.approx(rho, rel=1e-10)
        if self.shape == "bar":
            along, across = (np.pi - self.angle + turn for turn in (0.0, np.pi / 2))
            ends = [[np.cos(a) * self.lengths[0], np.sin(a) * self.lengths[0], 0.0] for a in (along, across)]
            assert self.at(ends)[0] > 1.2 * self.at(ends)[1]
        if self.shape == "sphere":
            r = np.linalg.norm(p, axis=1)
            assert self.at(np.array([0 * r, 0 * r, r]).T) == pytest.approx(rho, rel=1e-10)

    def test_integrates_to_its_mass(self):
        if self.mass is None:
            pytest.skip("no closed form")
        if self.inside is not None:
            r, w = self.panels(np.linspace(0, self.inside, 20))
            rho = self.at(np.array([0 * r, 0 * r, r]).T)
            assert 4 * np.pi * np.sum(w * r**2 * rho) == pytest.approx(self.mass, rel=1e-9)
            return
        radii = [*self.density.kink_radii(), *np.geomspace(self.lengths[0] / 30, self.lengths[0] * 40, 14)]
        R, w_R = self.panels([0.0, *radii])
        z, w_z = self.heights()
        # a quarter turn from the major axis and half the heights stand for the rest, by symmetry
        turn, w_turn = self.panels(np.linspace(0, np.pi / 2, 3)) if self.shape == "bar" else ([0.0], [np.pi / 2])
        total = 0.0
        for phi, w_phi in zip(np.pi - self.angle + np.asarray(turn), w_turn):
            RR, zz = np.meshgrid(R, z, indexing="ij")
            rho = self.density.at(RR * np.cos(phi), RR * np.sin(phi), zz, self.R0)
            total += 8 * w_phi * np.einsum("i,j,ij->", w_R * R, w_z, rho)
        assert total == pytest.approx(self.mass, rel=self.rel)

    def test_column_at_the_sun(self):
        if self.column is None:
            pytest.skip("no closed form")
        z, w = self.heights()
        rho = self.at(np.array([np.full(z.size, -self.R0), 0 * z, z]).T)
        assert 2 * np.sum(w * rho) == pytest.approx(self.column, rel=1e-9)
