"""Annual parallax against astropy's ephemeris, frames there and back, and the path that both frames must share."""

import astropy.units as u
import erfa
import numpy as np
import pytest
from astropy.coordinates import SkyCoord, get_body_barycentric
from astropy.time import Time

from lensrate.errors import InputError
from lensrate.lensing import earth, geometry

# bulge, anticentre, Magellanic Clouds, near the ecliptic pole, southern sky
SKY = [(268.0, -29.0), (86.4, 28.9), (80.9, -69.8), (270.0, 66.6), (15.0, -75.0)]
BULGE = (268.0 * u.deg, -29.0 * u.deg)


def _astropy_offset(mjd, ra, dec):
    """Earth minus Sun from astropy's built-in ephemeris, on axes made by moving the target a little."""
    t = Time(mjd, format="mjd", scale="tdb")
    d = get_body_barycentric("earth", t, ephemeris="builtin") - get_body_barycentric("sun", t, ephemeris="builtin")
    xyz = d.xyz.to_value(u.au)
    here = SkyCoord(ra * u.deg, dec * u.deg)
    axes = []
    for angle in (0, 90):
        there = here.directional_offset_by(angle * u.deg, 90 * u.deg)
        axes.append(there.cartesian.xyz.value @ xyz)
    return axes


@pytest.mark.parametrize("ra, dec", SKY)
def test_place_and_velocity_against_astropy(ra, dec):
    mjd = 58000.0 + np.arange(0.0, 4000.0, 137.0)
    north, east = earth.earth_offset(mjd, ra * u.deg, dec * u.deg)
    want = _astropy_offset(mjd, ra, dec)
    assert north.to_value(u.au) == pytest.approx(want[0], abs=1e-6)
    assert east.to_value(u.au) == pytest.approx(want[1], abs=1e-6)
    h = 0.05
    after, before = _astropy_offset(mjd + h, ra, dec), _astropy_offset(mjd - h, ra, dec)
    for v, a, b in zip(earth.earth_velocity(mjd, ra * u.deg, dec * u.deg), after, before):
        assert v.to_value(u.au / u.day) == pytest.approx((a - b) / (2 * h), abs=2e-7)


def test_between_nodes_and_at_the_ends():
    """Cubics between days against the series itself; no warning at either end of the span."""
    mjd = np.concatenate([np.random.default_rng(2).uniform(15020, 88069, 40), [15020.0, 88068.9, 88069.0]])
    helio, _ = erfa.epv00(2400000.5, mjd)
    north, east, v_N, v_E = earth.earth_on_sky(mjd, 0.0, 0.5 * np.pi)
    assert north == pytest.approx(-helio["p"][:, 0], abs=1e-9)
    assert east == pytest.approx(helio["p"][:, 1], abs=1e-9)
    assert v_N == pytest.approx(-helio["v"][:, 0], abs=1e-8)
    assert v_E == pytest.approx(helio["v"][:, 1], abs=1e-8)
    assert earth.earth_on_sky(np.zeros((3, 0)), 0.0, 0.0)[0].shape == (3, 0)
    assert earth.earth_on_sky(60000.0, np.zeros(4), 0.0)[0].shape == (4,)


def test_sun_angle():
    t = Time(58000.0 + np.arange(0.0, 400.0, 23.0), format="mjd", scale="tdb")
    theirs = SkyCoord(268 * u.deg, -29 * u.deg).cartesian.xyz.value
    d = get_body_barycentric("sun", t, ephemeris="builtin") - get_body_barycentric("earth", t, ephemeris="builtin")
    want = np.degrees(np.arccos(theirs @ (d.xyz / d.norm()).value))
    assert earth.sun_angle(t, *BULGE).value == pytest.approx(want, abs=1e-4)


def test_speed():
    """29.78 km/s in the mean (memory); near the ecliptic pole all of it lies on the sky."""
    mjd = 60000.0 + np.linspace(0, 365.25, 1000, endpoint=False)
    speed = np.hypot(*earth.earth_velocity(mjd, 270 * u.deg, 66.56 * u.deg)).to_value(u.km / u.s)
    assert speed.mean() == pytest.approx(29.78, abs=0.02)
    assert speed.min() == pytest.approx(29.29, abs=0.02)
    assert speed.max() == pytest.approx(30.29, abs=0.02)


def test_parallax_offset_starts_flat_and_curves_toward_the_sun():
    t_ref = 59000.0
    h = 2.0
    t = t_ref + np.array([-h, 0.0, h])
    for ds, x in zip(earth.parallax_offset(t, t_ref, *BULGE), earth.earth_offset(t_ref, *BULGE)):
        ds = ds.to_value(u.au)
        assert ds[1] == 0.0
        assert ds[2] - ds[0] == pytest.approx(0.0, abs=3e-5)
        # Kepler: Earth's acceleration is -(2 pi / yr)^2 x at 1 au, within the 5 % of the eccentricity
        assert (ds[2] + ds[0]) / h**2 == pytest.approx((2 * np.pi / 365.25) ** 2 * x.to_value(u.au), rel=0.06, abs=1e-6)


def test_opposition_and_quadrature():
    """A target on the ecliptic: at opposition no offset and the whole speed, at quadrature the reverse."""
    t = np.arange(59000.0, 59366.0, 0.01)
    size = np.hypot(*earth.earth_offset(t, 270 * u.deg, -23.4393 * u.deg)).to_value(u.au)
    speed = np.hypot(*earth.earth_velocity(t, 270 * u.deg, -23.4393 * u.deg)).to_value(u.km / u.s)
    seen = Time(t[np.argmin(size)], format="mjd").iso[:10]
    assert seen in ("2020-06-20", "2020-12-21")  # solstices of 2020 (memory)
    assert size.min() < 1e-3 and speed[np.argmin(size)] > 29.2
    assert size[np.argmin(speed)] > 0.98 and speed.min() < 0.6


def _events(n=400):
    rng = np.random.default_rng(3)
    size, angle = 10 ** rng.uniform(-3, 0.5, n), rng.uniform(0, 2 * np.pi, n)
    return {
        "t_0": rng.uniform(58000, 62000, n),
        "u_0": rng.uniform(-1, 1, n),
        "t_E": 10 ** rng.uniform(0.3, 2.7, n) * u.day,
        "pi_EN": size * np.cos(angle),
        "pi_EE": size * np.sin(angle),
        "t_0par": rng.uniform(58000, 62000, n),
        "ra": rng.uniform(0, 360, n) * u.deg,
        "dec": rng.uniform(-89, 89, n) * u.deg,
    }


def test_there_and_back():
    e = _events()
    place = e["t_0par"], e["ra"], e["dec"]
    t_E, north, east = earth.to_geocentric(e["t_E"], e["pi_EN"], e["pi_EE"], *place)
    assert np.hypot(north, east) == pytest.approx(np.hypot(e["pi_EN"], e["pi_EE"]), rel=1e-12)
    back = earth.to_heliocentric(t_E, north, east, *place)
    for a, b in zip(back, (e["t_E"].value, e["pi_EN"], e["pi_EE"])):
        assert np.asarray(a) == pytest.approx(b, rel=1e-9, abs=1e-12)
    path = [e[k] for k in ("t_0", "u_0", "t_E", "pi_EN", "pi_EE")]
    geo = earth.path_to_geocentric(*path, *place)
    for a, b in zip(earth.path_to_heliocentric(*geo, *place), path):
        assert np.asarray(a) == pytest.approx(np.asarray(b), rel=1e-9, abs=1e-7)


def test_both_frames_describe_one_path():
    """Separation seen from Earth: heliocentric line plus pi_E s(t), and geocentric line plus pi_E ds(t)."""
    e = _events(60)
    place = e["t_0par"], e["ra"], e["dec"]
    t_0, u_0, t_E, north, east = earth.path_to_geocentric(
        *(e[k] for k in ("t_0", "u_0", "t_E", "pi_EN", "pi_EE")), *place
    )
    size = np.hypot(e["pi_EN"], e["pi_EE"])
    for dt in (-200.0, -30.0, 0.0, 77.0, 400.0):
        t = e["t_0par"] + dt
        x_N, x_E = (x.value for x in earth.earth_offset(t, e["ra"], e["dec"]))
        ds_N, ds_E = (x.value for x in earth.parallax_offset(t, *place))
        sun = _separation((t - e["t_0"]) / e["t_E"].value, e["u_0"], e["pi_EN"] / size, e["pi_EE"] / size)
        line = _separation(
            (t - t_0) / t_E.value + north * ds_N + east * ds_E,
            u_0 + north * ds_E - east * ds_N,
            north / size,
            east / size,
        )
        assert line[0] == pytest.approx(sun[0] - size * x_N, rel=1e-9, abs=1e-8)
        assert line[1] == pytest.approx(sun[1] - size * x_E, rel=1e-9, abs=1e-8)


def _separation(tau, beta, e_N, e_E):
    return tau * e_N - beta * e_E, tau * e_E + beta * e_N


def test_motion_and_timescale_say_the_same():
    """mu_geo = mu_hel - v_Earth pi_rel / au, with theta_E put in; a nearby lens changes by tens of per cent."""
    M, D_L, D_S = 7.0 * u.Msun, np.array([1.0, 4.0, 7.9]) * u.kpc, 8.0 * u.kpc
    parallax = geometry.pi_rel(D_L, D_S)
    theta_E, pi_E = geometry.theta_E(M, parallax), geometry.pi_E(M, parallax)
    mu_N, mu_E = np.array([1.5, -3.0, 4.0]) * u.mas / u.yr, np.array([-4.0, -3.0, 4.0]) * u.mas / u.yr
    mu = np.hypot(mu_N, mu_E)
    place = 59010.0, *BULGE
    g_N, g_E = earth.motion_to_geocentric(mu_N, mu_E, parallax, *place)
    t_E, north, east = earth.to_geocentric(geometry.t_E(theta_E, mu), pi_E * mu_N / mu, pi_E * mu_E / mu, *place)
    geo = np.hypot(g_N, g_E)
    assert t_E.to_value(u.day) == pytest.approx(geometry.t_E(theta_E, geo).to_value(u.day), rel=1e-10)
    assert north == pytest.approx((pi_E * g_N / geo).value, rel=1e-10)
    assert east == pytest.approx((pi_E * g_E / geo).value, rel=1e-10)
    # 29.8 km/s is 6.28 au/yr, so 5.5 mas/yr at a relative parallax of 7/8 mas
    change = np.hypot(g_N - mu_N, g_E - mu_E).value
    assert change[0] == pytest.approx(6.28 * 7 / 8, rel=0.06)
    assert abs(geo[0] / mu[0] - 1) > 0.2 and abs(geo[2] / mu[2] - 1) < 0.01
    for a, b in zip(earth.motion_to_heliocentric(g_N, g_E, parallax, *place), (mu_N, mu_E)):
        assert a.value == pytest.approx(b.value, rel=1e-12)


def test_no_parallax_changes_nothing():
    got = earth.path_to_geocentric(59000.0, -0.3, 20 * u.day, 0.0, 0.0, 59100.0, *BULGE)
    assert [float(getattr(x, "value", x)) for x in got] == pytest.approx([59000.0, -0.3, 20.0, 0.0, 0.0], abs=1e-9)


def test_galactic_axes_against_astropy():
    rng = np.random.default_rng(1)
    l, b = rng.uniform(0, 360, 50) * u.deg, rng.uniform(-85, 85, 50) * u.deg
    mu_l, mu_b = rng.normal(0, 5, (2, 50)) * u.mas / u.yr
    want = SkyCoord(l=l, b=b, pm_l_cosb=mu_l, pm_b=mu_b, frame="galactic").icrs
    north, east = earth.to_north_east(mu_l, mu_b, l, b)
    # astropy's Galactic frame goes by FK5, 0.02 arcsec from the Hipparcos matrix
    assert north.value == pytest.approx(want.pm_dec.value, abs=3e-5)
    assert east.value == pytest.approx(want.pm_ra_cosdec.value, abs=3e-5)
    back = earth.from_north_east(north, east, l, b)
    assert back[0].value == pytest.approx(mu_l.value, abs=1e-12)
    assert back[1].value == pytest.approx(mu_b.value, abs=1e-12)
    pole = SkyCoord(l=l, b=b, frame="galactic").position_angle(SkyCoord(l=0 * u.deg, b=90 * u.deg, frame="galactic"))
    here = SkyCoord(l=l, b=b, frame="galactic").icrs.position_angle(
        SkyCoord(l=0 * u.deg, b=90 * u.deg, frame="galactic").icrs
    )
    assert np.cos(pole) == pytest.approx(np.ones(50))
    assert np.cos(here - earth.sky_angle(l, b)).value == pytest.approx(np.ones(50), abs=1e-9)
    assert np.sin(here - earth.sky_angle(l, b)).value == pytest.approx(np.zeros(50), abs=1e-5)


def test_refusals():
    for call, word in (
        (lambda: earth.earth_offset(59000.0, 268.0, -29 * u.deg), "ra"),
        (lambda: earth.earth_offset(2459000.5, *BULGE), "88069"),
        (lambda: earth.earth_offset(59000.0 * u.day, *BULGE), "MJD"),
        (lambda: earth.to_geocentric(0 * u.day, 0.1, 0.1, 59000.0, *BULGE), "t_E"),
        (lambda: earth.to_geocentric(30 * u.day, np.nan, 0.1, 59000.0, *BULGE), "pi_EN"),
        (lambda: earth.to_geocentric(30 * u.day, 0.1, 0.1, 59000.0, 268 * u.deg, 100 * u.deg), "dec"),
    ):
        with pytest.raises(InputError, match=word):
            call()
    same = earth.earth_offset(Time(59000.0, format="mjd"), *BULGE)
    assert same[0] == earth.earth_offset(59000.0, *BULGE)[0]
