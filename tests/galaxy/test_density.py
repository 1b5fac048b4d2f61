"""Stellar densities: the contract on every kind, closed forms, the shipped sets' own numbers."""

import astropy.units as u
import numpy as np
import pytest
from contracts import DensityContract

from lensrate.errors import InputError
from lensrate.galaxy.density import DENSITIES, Bar, ExpDisc, NuclearDisc, PowerHalo, SechExpDisc, Uniform, unit_volume
from lensrate.galaxy.model import Galaxy

DEFAULT = {c.element: c.density for c in Galaxy.read("default").components}
HAN_GOULD = {c.element: c.density for c in Galaxy.read("hangould2003").components}
HALO = Galaxy.read("griest1991").components[0].density
PC2 = 1e6  # Msun/kpc2 per Msun/pc2


def disc_mass(column, h, R_flat=0.0, R0=8.178):
    """Mass of an exponential disc, surface density flat inside R_flat, from its column at R0."""
    inner = 0.5 * R_flat**2 * np.exp(-R_flat / h)
    return 2 * np.pi * column * np.exp(R0 / h) * (inner + h * (R_flat + h) * np.exp(-R_flat / h))


class TestExpDisc(DensityContract):
    density = ExpDisc(5e7, 2.6, 0.3)
    column = 2 * 5e7 * 0.3
    mass = disc_mass(column, 2.6)


class TestThickDisc(DensityContract):
    density = DEFAULT["thick_disc"]
    lengths = (2.0, 0.9)
    column = 2 * 0.001611 * 900 * PC2
    mass = disc_mass(column, 2.0, 4.0)


class TestIsothermalDisc(DensityContract):
    density = DEFAULT["thin_disc_old"]
    lengths = (2.6, 0.5)
    column = 19.5472 * PC2
    mass = disc_mass(column, 2.6, 4.0)

    def test_half_thickness(self):
        here = self.density.at(self.R0, 0.0, 0.0, self.R0)
        assert self.density.half_thickness() == pytest.approx(self.column / (2 * here), rel=1e-12)


class TestYoungDisc(DensityContract):
    density = DEFAULT["thin_disc_young"]
    lengths = (2.6, 0.1)
    column = density.column.to_value(u.Msun / u.kpc**2)
    mass = disc_mass(column, 2.6, 4.0)


class TestSechExpDisc(DensityContract):
    density = HAN_GOULD["disc"]
    R0 = 8.0
    # sech^2 over both sides is twice its height: the column is 36.1 Msun/pc2 with Zheng+ 2001's numbers
    column = 2 * 4.93e7 * (0.435 * 0.27 + 0.565 * 0.44)
    mass = disc_mass(column, 2.75, R0=8.0)

    def test_published_column(self):
        assert self.column / PC2 == pytest.approx(36.1, abs=0.05)


class TestNuclearDisc(DensityContract):
    density = DEFAULT["nuclear_disc"]
    lengths = (0.0886, 0.0284)
    mass = 10.5e8


class TestDefaultBar(DensityContract):
    density = DEFAULT["bulge"]
    lengths = (0.7, 0.18)
    mass = 1.388e10
    shape = "bar"
    angle = np.radians(27)


class TestG2Bar(DensityContract):
    density = HAN_GOULD["bulge"]
    lengths = (1.58, 0.43)
    mass = 1.23e9 * 8.698  # Dwek+ 1995: 8.698e9 Msun for 1e9 Msun/kpc3
    shape = "bar"
    angle = np.radians(20)
    rel = 1e-4  # the digits of 8.698


class TestBoxySech(DensityContract):
    density = Bar(1.7, 0.64, 0.44, 25.0, mass=1e10, c_plane=2.5, c_vertical=3.0, profile="sech2")
    lengths = (1.7, 0.44)
    mass = 1e10
    shape = "bar"
    angle = np.radians(25)


class TestCoredHalo(DensityContract):
    density = HALO
    R0 = 8.5
    lengths = (5.0, 5.0)
    shape = "sphere"
    inside = 50.0
    mass = 4 * np.pi * 7.9e6 * (8.5**2 + 25) * (50 - 5 * np.arctan(10))


class TestStellarHalo(DensityContract):
    density = DEFAULT["halo"]
    lengths = (5.0, 5.0)

    def test_power_and_flattening(self):
        far = np.array([300.0, 600.0])
        rho = self.density.at(far, 0.0, 0.0, self.R0)
        assert np.log(rho[0] / rho[1]) / np.log(2) == pytest.approx(2.77, rel=1e-4)
        up = self.density.at(0.0, 0.0, 0.64 * far, self.R0)
        assert up == pytest.approx(rho, rel=1e-12)

    def test_mass_of_the_halo(self):
        # (1.4 +- 0.4)e9 Msun inside 100 kpc: Deason, Belokurov & Sanders 2019, MNRAS 490, 3426 (memory); two sigma
        r, w = self.panels(np.concatenate([np.linspace(0, 2, 6), np.geomspace(3, 100, 12)]))
        mu, w_mu = self.panels(np.linspace(0, 1, 6))
        rr, mm = np.meshgrid(r, mu, indexing="ij")
        rho = self.density.at(rr * np.sqrt(1 - mm**2), 0.0, rr * mm, self.R0)
        assert 4 * np.pi * np.einsum("i,j,ij->", w * r**2, w_mu, rho) == pytest.approx(1.4e9, abs=0.8e9)


class TestUniform(DensityContract):
    density = Uniform(1e8)
    shape = "sphere"
    inside = 3.0
    mass = 1e8 * 4 / 3 * np.pi * 27


def test_every_kind_is_under_contract():
    tested = {type(c.density) for c in DensityContract.__subclasses__()}
    assert tested == set(DENSITIES.values())
    kinds = [d.kind for d in DENSITIES.values() if d is not NuclearDisc]
    assert len(kinds) == len(set(kinds)) and NuclearDisc.kind == ExpDisc.kind


def test_stated_densities_hold_at_the_sun():
    R0 = 8.2
    for density in (ExpDisc(3e7, 2.5, 0.3), SechExpDisc(3e7, 2.5, 0.3, 0.4, 0.5), PowerHalo(3e7, 2.8, 0.6, 0.5)):
        assert density.at(0.0, R0, 0.0, R0) == pytest.approx(3e7, rel=1e-12)
    assert Bar(1, 0.5, 0.3, 20, rho_centre=2e9).at(0.0, 0.0, 0.0, R0) == 2e9


def test_unit_volumes():
    assert unit_volume(2, 2, "exp") == pytest.approx(8 * np.pi, rel=1e-12)
    assert unit_volume(2, 2, "gauss") == pytest.approx((2 * np.pi) ** 1.5, rel=1e-12)
    assert unit_volume(2, 2, "sech2") == pytest.approx(4 * np.pi * np.pi**2 / 12, rel=1e-12)
    # the cube |x|, |y|, |z| < 1 is the limit of large exponents, with int m^2 exp(-m) dm = 2
    assert unit_volume(1e4, 1e4, "exp") == pytest.approx(3 * 8 * 2, rel=1e-3)


def test_galaxy_density_is_the_sum_of_its_parts():
    galaxy = Galaxy.read("default")
    place = [np.array([-8.0, 0.3, 2.0]) * u.kpc, np.array([0.0, 0.2, -1.0]) * u.kpc, np.array([0.0, -0.1, 0.4]) * u.kpc]
    parts = sum(galaxy.density(*place, name=name) for name in {c.name for c in galaxy.components})
    assert galaxy.density(*place).value == pytest.approx(parts.value, rel=1e-13)
    with pytest.raises(InputError, match="thick_disc"):
        galaxy.density(*place, name="thik_disc")


@pytest.mark.parametrize(
    ("make", "words"),
    [
        (lambda: Bar(1, 0.5, 0.3, 20), "either mass or rho_centre"),
        (lambda: Bar(1, 0.5, 0.3, 20, mass=1e10, rho_centre=1e9), "either mass or rho_centre"),
        (lambda: Bar(1, 0.5, 0.3, 20, mass=1e10, profile="expo"), "profile"),
        (lambda: ExpDisc(1e7, 3 * u.Msun, 0.3), "ExpDisc.h_R"),
        (lambda: ExpDisc(np.nan, 3, 0.3), "ExpDisc.rho_sun"),
    ],
)
def test_refusals(make, words):
    with pytest.raises(InputError, match=words):
        make()
