"""Gravity: each member against the contract, the sets against published numbers and a reference library."""

import astropy.units as u
import numpy as np
import pytest
from contracts import PotentialContract
from galpy.potential import (
    MWPotential2014,
    SoftenedNeedleBarPotential,
    evaluatePotentials,
    evaluateRforces,
    evaluatezforces,
    vcirc,
)
from scipy import special

from lensrate.datafiles import names
from lensrate.errors import InputError
from lensrate.galaxy import potential as module
from lensrate.galaxy.potential import NFW, CutoffPower, Homeoids, Member, MiyamotoNagai, NeedleBar, Plummer, Potential
from lensrate.kernels import elementary
from lensrate.kernels.potential import LANES, acceleration_at, add_lane_accelerations
from lensrate.units import G


def one(model):
    return Potential((Member("only", model),), bar_angle=27 * u.deg)


class TestMiyamotoNagai(PotentialContract):
    potential = one(MiyamotoNagai(5e10, 2.8, 0.28))
    mass = 5e10


class TestNFW(PotentialContract):
    potential = one(NFW(3.7e11, 11.0))


class TestCutoffPower(PotentialContract):
    potential = one(CutoffPower(5e9, 1.8, 1.9))
    mass = 5e9


class TestPlummer(PotentialContract):
    potential = one(Plummer(5e9, 0.3))
    mass = 5e9


class TestNeedleBar(PotentialContract):
    potential = one(NeedleBar(1e10, 3.5, 0.4, 0.3))
    mass = 1e10
    poisson = 1e-4


class TestHomeoids(PotentialContract):
    potential = one(Homeoids(1.39e10, 0.70, 0.44, 0.18, 12))
    mass = 1.39e10
    far = 60.0  # farther out the sum falls off faster than the body
    poisson = 1e-2  # the sum of 12 shells stands for the body; its second derivative is that good


@pytest.mark.parametrize("name", names("potential"))
class TestSets(PotentialContract):
    poisson = 1e-2

    @pytest.fixture(autouse=True)
    def _set(self, name):
        self.potential = Potential.read(name)


def test_every_kind_is_in_a_contract():
    tested = {type(c.potential.members[0].model) for c in PotentialContract.__subclasses__() if c.potential is not None}
    assert tested == set(module.MEMBER_KINDS.values())


# F13: Bovy 2015 (parameters seen, the numbers computed independently of this code); tolerance 0.5 %
F13 = Potential.read("bovy2015")


def test_f13_masses_densities_and_column():
    mass = {m.name: m.model.mass.value for m in F13.members}
    assert mass["disc"] == pytest.approx(6.82e10, rel=5e-3)
    assert mass["bulge"] == pytest.approx(0.450e10, rel=5e-3)
    here = 8 * u.kpc
    assert F13.circular_speed(here).value == pytest.approx(220, rel=1e-9)
    assert F13.axisymmetric_density(here, 0 * u.kpc).value == pytest.approx(0.1011, rel=5e-3)
    assert F13.without("disc", "bulge").axisymmetric_density(here, 0 * u.kpc).value == pytest.approx(0.00754, rel=5e-3)
    z = np.linspace(-1.1, 1.1, 2001) * u.kpc
    column = np.trapezoid(F13.axisymmetric_density(here, z), z).to_value(u.Msun / u.pc**2)
    assert column == pytest.approx(67.5, rel=5e-3)


def test_f13_escape_speeds():
    speed = F13.escape_speed([2, 4, 6, 8, 12] * u.kpc).value
    assert speed == pytest.approx(np.array([626.6, 576.8, 540.1, 513.0, 475.0]), rel=5e-4)


def test_bovy2015_against_galpy():
    for radius, z in ((0.4, 0.1), (2.0, 0.5), (8.0, 0.02), (15.0, 6.0), (60.0, -30.0)):
        a = F13.acceleration(-radius * u.kpc, 0 * u.kpc, z * u.kpc).value
        unit = 220**2 / 8
        assert -a[0] == pytest.approx(evaluateRforces(MWPotential2014, radius / 8, z / 8) * unit, rel=1e-6)
        assert a[2] == pytest.approx(evaluatezforces(MWPotential2014, radius / 8, z / 8) * unit, rel=1e-6)
        speed = F13.circular_speed(radius * u.kpc).value
        assert speed == pytest.approx(220 * vcirc(MWPotential2014, radius / 8), rel=1e-6)
        ours = (F13.value(radius * u.kpc, 0 * u.kpc, z * u.kpc) - F13.value(8 * u.kpc, 0 * u.kpc, 0 * u.kpc)).value
        theirs = evaluatePotentials(MWPotential2014, radius / 8, z / 8) - evaluatePotentials(MWPotential2014, 1.0, 0.0)
        assert ours == pytest.approx(theirs * 220**2, rel=1e-6, abs=1e-6 * 220**2)


def test_needle_bar_against_galpy():
    bar = SoftenedNeedleBarPotential(amp=G * 1e10, a=3.5, b=0.4, c=0.3, pa=0.0, omegab=0.0)
    ours = Potential((Member("bar", NeedleBar(1e10, 3.5, 0.4, 0.3)),))
    for x, y, z in ((0.5, 0.2, 0.1), (3.5, -0.3, 0.2), (-6.0, 2.0, -1.0)):
        radius, phi = np.hypot(x, y), np.arctan2(y, x)
        a = ours.acceleration(x * u.kpc, y * u.kpc, z * u.kpc).value
        inward = (a[0] * x + a[1] * y) / radius
        assert inward == pytest.approx(bar.Rforce(radius, z, phi=phi), rel=1e-10)
        assert a[2] == pytest.approx(bar.zforce(radius, z, phi=phi), rel=1e-10)
        assert x * a[1] - y * a[0] == pytest.approx(bar.phitorque(radius, z, phi=phi), rel=1e-9, abs=1e-9)


def test_homeoids_converge_to_the_closed_integral():
    # Binney & Tremaine (2008), eq. 2.140, by Gauss-Legendre in s = sqrt(u), independent of the fit's nodes
    lengths = np.array([0.70, 0.44, 0.18])
    node, weight = np.polynomial.legendre.leggauss(800)
    s = 0.5 * (1 + node) * np.log(1e7) + np.log(1e-4)
    w, s = 0.5 * weight * np.log(1e7), np.exp(s)
    inverse = 1 / (lengths[:, None] ** 2 + s**2)
    rng = np.random.default_rng(3)
    direction = rng.normal(size=(300, 3))
    points = direction / np.linalg.norm(direction, axis=1)[:, None] * lengths * rng.uniform(0.05, 8, 300)[:, None]
    m = np.sqrt(points**2 @ inverse)
    exact = -points * ((np.exp(-m) * (0.5 * w * s**2 * np.sqrt(np.prod(inverse, axis=0)))) @ inverse.T) * G * 1e10
    for shells, median, worst in ((8, 1e-3, 4e-3), (10, 1.5e-4, 6e-4), (12, 4e-5, 1.5e-4)):
        body = Potential((Member("bar", Homeoids(1e10, *lengths, shells)),), bar_angle=180 * u.deg)
        a = body.acceleration(*(points.T * u.kpc)).value
        error = np.linalg.norm(a - exact, axis=1) / np.linalg.norm(exact, axis=1)
        assert np.median(error) < median and np.max(error) < worst


def test_a_round_body_of_homeoids_is_the_exponential_sphere():
    # rho = M exp(-r/a) / (8 pi a^3): M(r) = M P(3, r/a), the regularised incomplete gamma function
    body = one(Homeoids(1e10, 0.5, 0.5, 0.5, 12))
    r = np.array([0.1, 0.5, 2.0, 10.0])
    expected = np.sqrt(G * 1e10 * special.gammainc(3, r / 0.5) / r)
    assert body.circular_speed(r * u.kpc).value == pytest.approx(expected, rel=1e-3)


class TestDefault:
    galaxy = Potential.read("default")

    def test_circular_speed_and_its_slope(self):
        # 233 km/s at the Sun; Eilers+ 2019 (memory): -1.7 km/s/kpc from 5 to 25 kpc
        sun, far = self.galaxy.circular_speed([8.178, 20.0] * u.kpc).value
        assert sun == pytest.approx(233.0, abs=0.05)
        assert (far - sun) / (20.0 - 8.178) == pytest.approx(-1.7, abs=0.1)

    def test_escape_speed(self):
        # F10, F11: Piffl+ 2014 533 +54-41 km/s, Deason+ 2019 528 +24-25 km/s (seen)
        assert 500 < self.galaxy.escape_speed(8.178 * u.kpc).value < 550

    def test_local_dark_density(self):
        # E7: McKee+ 2015 (seen) 0.013 +- 0.003 Msun/pc3
        dark = self.galaxy.without(*(m.name for m in self.galaxy.members if m.name != "halo"))
        assert dark.axisymmetric_density(8.178 * u.kpc, 0 * u.kpc).value == pytest.approx(0.013, abs=0.003)

    def test_local_column_of_baryons(self):
        # E5: McKee+ 2015 (seen) 47.1 +- 3.4 Msun/pc2
        discs = self.galaxy.without("halo", "bar", "nuclear_disc")
        z = np.concatenate([-np.geomspace(20, 1e-3, 1000), np.geomspace(1e-3, 20, 1000)]) * u.kpc
        column = np.trapezoid(discs.axisymmetric_density(8.178 * u.kpc, z), z).to_value(u.Msun / u.pc**2)
        assert column == pytest.approx(47.1, rel=0.02)

    def test_density_is_nowhere_negative(self):
        radius, z = np.meshgrid(np.linspace(0.1, 60, 80), np.concatenate([[0.0], np.geomspace(0.05, 40, 30)]))
        assert np.all(self.galaxy.axisymmetric_density(radius * u.kpc, z * u.kpc).value > 0)

    def test_orbits_leave_the_nuclear_disc_out(self):
        kept = {m.name for m in self.galaxy.for_orbits().members}
        assert {m.name for m in self.galaxy.members} - kept == {"nuclear_disc"}

    def test_bar_points_to_positive_longitude_and_turns_clockwise(self):
        # the Sun is at x = -R0 and l = 90 deg is +y: the near end is at x < 0, y > 0
        r, angle = 2.0, np.radians(27.0)
        along = self.galaxy.value(-r * np.cos(angle) * u.kpc, r * np.sin(angle) * u.kpc, 0 * u.kpc)
        mirrored = self.galaxy.value(-r * np.cos(angle) * u.kpc, -r * np.sin(angle) * u.kpc, 0 * u.kpc)
        assert along < mirrored
        assert self.galaxy.omega == -39.0


def test_frames_are_inverse_and_right_handed():
    galaxy = Potential.read("default")
    vectors = np.random.default_rng(1).normal(size=(5, 3))
    turned = galaxy.to_bar_frame(vectors)
    assert galaxy.from_bar_frame(turned) == pytest.approx(vectors, abs=1e-14)
    crossed = galaxy.to_bar_frame(np.cross(vectors[0], vectors[1]))
    assert np.cross(turned[0], turned[1]) == pytest.approx(crossed, abs=1e-13)
    angle = np.radians(27.0)
    assert galaxy.to_bar_frame(np.array([-np.cos(angle), np.sin(angle), 0.0])) == pytest.approx([1, 0, 0], abs=1e-14)


def test_lanes_agree_with_single_points():
    rng = np.random.default_rng(5)
    for name in names("potential"):
        kinds, pars = Potential.read(name).packed
        s = np.zeros(9 * LANES)
        s[: 3 * LANES] = rng.normal(0, 4, 3 * LANES)
        add_lane_accelerations(kinds, pars, s)
        p, a = s[: 3 * LANES].reshape(3, LANES), s[3 * LANES : 6 * LANES].reshape(3, LANES)
        expected = np.array([acceleration_at(kinds, pars, *p[:, i]) for i in range(LANES)]).T
        assert a == pytest.approx(expected, rel=1e-12)


def test_elementary_functions_against_scipy():
    y = np.concatenate([np.geomspace(1e-300, 1e300, 1001), 1 + np.geomspace(1e-15, 1, 100)])
    assert [elementary.log(v) for v in y] == pytest.approx(np.log(y), rel=1e-15)
    for s in (0.1, 0.6, 1.5, 3.0):
        t = np.geomspace(1e-8, 300, 60)
        assert [elementary.regularised_gamma(s, v) for v in t] == pytest.approx(special.gammainc(s, t), rel=1e-13)
        upper = special.gammaincc(s, t) * special.gamma(s)
        assert [elementary.gamma_upper(s, v) for v in t] == pytest.approx(upper, rel=1e-11)


def test_complaints_name_the_way_out(tmp_path):
    with pytest.raises(InputError, match="did you mean 'default'"):
        Potential.read("defalt")
    file = tmp_path / "mine.toml"
    file.write_text('[members.disc]\nkind = "miyamoto_nagay"\nmass = 1e10\n')
    with pytest.raises(InputError, match="did you mean 'miyamoto_nagai'"):
        Potential.read(str(file))
    file.write_text('[members.disc]\nkind = "plummer"\nshare = {value = 0.5}\nb = 0.3\n')
    with pytest.raises(InputError, match="circular_speed"):
        Potential.read(str(file))
    with pytest.raises(InputError, match="has no unit"):
        Potential.read("default").value(1.0, 0.0, 0.0)
    with pytest.raises(InputError, match="bulg"):
        F13.without("bulg")
