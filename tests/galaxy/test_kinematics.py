"""Velocity distributions: proper motions against astropy, asymmetric drift, dispersion tensors, rotation."""

import astropy.units as u
import numpy as np
import pytest
from astropy.coordinates import CartesianDifferential, CartesianRepresentation, Galactic, SkyCoord
from reference_frame import galactocentric

from lensrate.galaxy.kinematics import KINEMATICS, BarMotion, DiscMotion, LinearRotation
from lensrate.galaxy.model import Galaxy
from lensrate.kernels import kinematics as kernels
from lensrate.units import KMS_PER_MASYR_KPC

DEFAULT = Galaxy.read("default")
SETS = ("default", "hangould2003", "griest1991")
NEAR = [(30.0, 10.0, 1.0), (180.0, 2.0, 5.0), (90.0, 60.0, 0.3)]
SKY = [(1.0, -3.9, 8.0), (1.0, -3.9, 4.0), (-53.0, -1.5, 3.0), (0.0, 0.0, 8.0), *NEAR]


def motion(component, galaxy, x, y, z):
    """Mean velocity (n, 3) and dispersion tensor (n, 3, 3) of a component at points [kpc]."""
    x, y, z = (np.ascontiguousarray(a, dtype=float) for a in np.broadcast_arrays(*np.atleast_1d(x, y, z)))
    out = np.empty((x.size, 9))
    pars = component.kinematics.pack(galaxy.R0, component.density)
    kernels.velocity_many(component.kinematics.kind, pars, galaxy.rotation.pack(galaxy.R0), x, y, z, out)
    xx, yy, zz, xy, xz, yz = out[:, 3:].T
    return out[:, :3], np.array([[xx, xy, xz], [xy, yy, yz], [xz, yz, zz]]).transpose(2, 0, 1)


def element(name, galaxy=DEFAULT):
    return next(c for c in galaxy.components if c.element == name)


def proper_motions(galaxy, place, velocities):
    """astropy's mu_l cos b and mu_b [mas/yr] of a star at a place [kpc] with velocities (n, 3) [km/s]."""
    v = np.atleast_2d(velocities)
    xyz = CartesianRepresentation(np.repeat(np.array(place)[:, None], len(v), axis=1) * u.kpc)
    star = xyz.with_differentials(CartesianDifferential(v.T * u.km / u.s))
    seen = SkyCoord(galactocentric(galaxy.sun).realize_frame(star)).transform_to(Galactic())
    return np.array([seen.pm_l_cosb.to_value(u.mas / u.yr), seen.pm_b.to_value(u.mas / u.yr)]).T


@pytest.mark.parametrize("name", ["default", "hangould2003"])
@pytest.mark.parametrize(("l", "b", "D"), SKY)
def test_profile_against_astropy(name, l, b, D):
    galaxy = Galaxy.read(name)
    line = galaxy.sightline(np.radians(l), np.radians(b))
    place = line.xyz(D)
    profile = galaxy.profile(line, np.array([D]))[:, :, 0]
    # how the proper motion answers to each component of the velocity
    base, *moved = proper_motions(galaxy, place, np.vstack([np.zeros(3), 100 * np.eye(3)]))
    J = (np.array(moved) - base).T / 100
    for i, component in enumerate(galaxy.components):
        mean, tensor = motion(component, galaxy, *place)
        expected = proper_motions(galaxy, place, mean)[0]
        # 0.03 arcsec of axes between the ICRS and FK5 turn a motion by 2e-7
        assert profile[1:3, i] == pytest.approx(expected, rel=1e-6, abs=1e-6 * np.abs(expected).max())
        C = J @ tensor[0] @ J.T
        assert profile[3:, i] == pytest.approx([C[0, 0], C[0, 1], C[1, 1]], rel=1e-6, abs=1e-6 * C.max())
        assert profile[0, i] == component.density.at(*(np.array([p]) for p in place), galaxy.R0)[0]


@pytest.mark.parametrize("name", SETS)
def test_dispersion_tensors_are_positive_definite(name):
    galaxy = Galaxy.read(name)
    rng = np.random.default_rng(5)
    p = rng.normal(size=(500, 3)) * [4.0, 4.0, 1.0]
    p = np.vstack([p, np.zeros((1, 3)), [[0.0, 0.0, 1.0], [1e-13, 0.0, 0.0], [30.0, -30.0, 10.0]]])
    for component in galaxy.components:
        mean, tensor = motion(component, galaxy, *p.T)
        assert np.all(np.isfinite(mean)) and np.all(np.linalg.eigvalsh(tensor) > 0), component.element
        # nothing but rotation: no mean motion along R or z
        assert np.abs(np.sum(mean[:, :2] * p[:, :2], axis=1)) == pytest.approx(0, abs=1e-9)
        assert np.all(mean[:, 2] == 0)


@pytest.mark.parametrize("component", [c for c in DEFAULT.components if c.name == "thin_disc"], ids=lambda c: c.element)
@pytest.mark.parametrize("R", [1.0, 3.0, 5.0, 8.178, 12.0])
def test_asymmetric_drift_from_jeans_equation(component, R):
    """v_c^2 - v_phi^2 = s_phi^2 - s_R^2 (1 + d ln(nu s_R^2) / d ln R), its logarithmic slope taken numerically."""
    step = 1e-5
    radii = R * np.array([1 - step, 1 + step, 1.0])
    mean, tensor = motion(component, DEFAULT, -radii, 0.0, 0.0)
    nu = component.density.at(-radii, 0.0, 0.0, DEFAULT.R0)
    s2_R, s2_phi = tensor[:, 0, 0], tensor[:, 1, 1]
    slope = np.diff(np.log(nu * s2_R)[:2])[0] / np.diff(np.log(radii)[:2])[0]
    v_c = kernels.circular_speed(R, DEFAULT.rotation.pack(DEFAULT.R0))
    drop = s2_R[2] * (s2_phi[2] / s2_R[2] - 1.0 - slope)
    lag = v_c - mean[2, 1]
    # to first order in lag / v_c
    assert 2 * v_c * lag == pytest.approx(drop, rel=1e-4)
    assert abs(v_c - np.sqrt(v_c**2 - drop) - lag) <= abs(1.2 * lag**2 / v_c)


def test_drift_at_the_sun():
    # the thick disc lags by 46 km/s behind the circular speed: Bensby+ 2003, A&A 410, 527 (seen)
    v_0 = kernels.circular_speed(DEFAULT.R0, DEFAULT.rotation.pack(DEFAULT.R0))

    def lag(component):
        return v_0 - motion(component, DEFAULT, -DEFAULT.R0, 0.0, 0.0)[0][0, 1]

    assert lag(element("thick_disc")) == pytest.approx(46, abs=1e-9)
    # older groups lag more, and all rotate toward +y at the Sun
    lags = [lag(c) for c in DEFAULT.components if c.name == "thin_disc"]
    assert np.all(np.diff(lags) > 0) and 0 < lags[0] < lags[-1] < 30


def test_disc_dispersions_fall_and_freeze():
    component = element("thin_disc_old")
    R = np.array([0.3, 1.5, 8.178, 12.0])
    _, tensor = motion(component, DEFAULT, 0.0, R, 0.0)
    # on the y axis the radial direction is y
    k = component.kinematics
    fall = np.exp(-k.fall.value * (np.maximum(R, k.R_frozen.value) - DEFAULT.R0))
    for i, at_sun in ((1, k.sigma_R), (0, k.sigma_phi), (2, k.sigma_z)):
        assert np.sqrt(tensor[:, i, i]) == pytest.approx(at_sun.value * fall, rel=1e-12)
    assert fall[0] == fall[1] > 1 > fall[3]


def test_bar_dispersions_lie_along_its_axes():
    component = element("bulge")
    k = component.kinematics
    angle = k.angle.to_value(u.rad)
    axes = np.array([[-np.cos(angle), np.sin(angle), 0], [np.sin(angle), np.cos(angle), 0], [0, 0, 1]])
    stated = np.diag(np.square([k.sigma_x.value, k.sigma_y.value, k.sigma_z.value]))
    for x, y, z in ((0.0, 0.0, 0.56), (1.0, -0.5, 0.2), (-0.3, 2.0, -1.5)):
        mean, tensor = motion(component, DEFAULT, x, y, z)
        R = np.hypot(x, y)
        fall = np.exp(-k.fall_R.value * R - k.fall_z.value * (abs(z) - k.z_ref.value))
        assert axes @ tensor[0] @ axes.T == pytest.approx(stated * fall**2, rel=1e-12, abs=1e-9)
        speed = k.v_rot.value * R / np.hypot(R, k.R_rot.value)
        # clockwise seen from +z, as the disc
        assert x * mean[0, 1] - y * mean[0, 0] == pytest.approx(-R * speed, rel=1e-12, abs=1e-12)
    # about 75 km/s at l = 10, b = -4: Rich+ 2007, Howard+ 2008 (memory); the model has 69
    line = DEFAULT.sightline(np.radians(10), np.radians(-4))
    mean, _ = motion(component, DEFAULT, *line.xyz(line.tangent_distance()))
    assert mean[0] @ line.axes[0] == pytest.approx(75, abs=10)


def test_rotation_curve():
    for soft in (0.0, 0.5):
        rotation = LinearRotation(233, -1.7, soft).pack(8.178)
        assert kernels.circular_speed(8.178, rotation) == pytest.approx(233, rel=1e-14)
        assert kernels.circular_speed(20.0, rotation) == pytest.approx(233 - 1.7 * (20 - 8.178), rel=3e-3)
    assert kernels.circular_speed(0.0, rotation) == 0.0
    # a table of the same curve
    dR = 0.25
    table = np.array([kernels.circular_speed(i * dR, rotation) for i in range(121)])
    tabled = np.concatenate([[kernels.TABLE, dR], table])
    for R in (0.7, 3.3, 8.178, 29.0):
        assert kernels.circular_speed(R, tabled) == pytest.approx(kernels.circular_speed(R, rotation), rel=2e-3)


def test_a_body_at_rest_shows_the_suns_motion():
    still = {"name": "still", "density": {"kind": "uniform", "rho": 1.0}, "kinematics": {"kind": "rest"}}
    sun = {"R0": 8.0, "z": 0.0, "U": 10.0, "V": 240.0, "W": 7.0}
    galaxy = Galaxy.from_dict({"sun": sun, "component": [still]})
    profile = galaxy.profile(galaxy.sightline(0.0, 0.0), np.array([8.0]))[:, 0, 0]
    assert profile[1] == pytest.approx(-240 / (8 * KMS_PER_MASYR_KPC), rel=1e-14)
    assert profile[2] == pytest.approx(-7 / (8 * KMS_PER_MASYR_KPC), rel=1e-14)
    assert np.all(profile[3:] == 0)


def test_kinds_are_unique_and_fields_fit_the_kernel():
    kinds = [k.kind for k in KINEMATICS.values()]
    assert len(set(kinds)) == len(kinds)
    bar = BarMotion(1, 2, 3, 0.1, 0.2, 0.3, 90, 5, 6).pack(8.0, None)
    assert bar == pytest.approx([1, 2, 3, 0.1, 0.2, 0.3, np.pi / 2, 5, 6])
    disc = DiscMotion(1, 2, 3, 0.1, 0.2, 7).pack(8.0, element("thin_disc_young").density)
    assert disc == pytest.approx([1, 2, 3, 0.1, 0.2, 8.0, 7, 2.6, 4.0])
