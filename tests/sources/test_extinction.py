"""Dust along a sightline against direct quadrature and the frame of astropy, and a field's own extinction."""

import astropy.units as u
import numpy as np
import pytest
from astropy.coordinates import SkyCoord
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.integrate import quad

from lensrate.errors import InputError
from lensrate.galaxy.frames import Sun
from lensrate.sources.bands import BANDS
from lensrate.sources.extinction import DustDisc, band_ratio, sightline_extinction

DUST = DustDisc.read()
R0, Z = 8.178, 0.0208
SUN = {"R0": R0, "z_sun": Z}


def rad(l, b):
    return np.radians(l), np.radians(b)


@pytest.mark.parametrize("l, b", [(1, -3.9), (0, 0), (60, 2), (180, -10), (30, 90), (-45, 0.1)])
def test_profile_is_the_integral(l, b):
    sky = Sun(R0=R0, z=Z, U=0, V=0, W=0)
    cl, sl, cb, sb = (f(x) for x in rad(l, b) for f in (np.cos, np.sin))
    origin, way = sky.origin(), sky.tilt() @ np.array([cb * cl, cb * sl, sb])

    def rate(s):
        x, y, z = origin + s * way
        return np.exp((R0 - np.hypot(x, y)) / 3.2 - (abs(z) - Z) / 0.125)

    crossing = -origin[2] / way[2]
    distances = [0.0, 0.003, 2.0, 8.0, 17.3]
    for D, A in zip(distances, DUST.profile(*rad(l, b), distances, R0, Z)):
        points = [p for p in (crossing, R0 - 0.5, R0, R0 + 0.5, 0.2) if 0 < p < D]
        direct = quad(rate, 0, D, points=points or None, limit=400, epsabs=1e-12)[0] if D else 0.0
        assert pytest.approx(0.40 * DUST.factor(*rad(l, b)) * direct, rel=1e-5, abs=1e-14) == A


def test_far_end_of_a_vertical_sightline():
    """Straight up, the column is closed: rate x height, from the Sun's place."""
    flat = DustDisc(0.4, 1e6, 0.125, 1.0, 0, 0)
    assert flat.profile(0.0, np.pi / 2, [50.0], 1e6, Z)[0] == pytest.approx(0.4 * 0.125, rel=1e-6)


def test_run_of_latitude():
    """The smooth disc's normalisation in Baade's Window, and its run with latitude from an independent integration."""
    window = DUST.profile(*rad(1, -3.9), [8.0], R0, Z)[0]
    assert window == pytest.approx(0.78, abs=0.005)
    wanted = {-1.5: 2.84, -2: 2.08, -3: 1.20, -4: 0.78, -6: 0.41}  # for 0.80 mag in Baade's Window
    for b, A in wanted.items():
        assert DUST.profile(*rad(1, b), [R0], R0, Z)[0] / window == pytest.approx(A / 0.80, rel=0.05)


@settings(derandomize=True, max_examples=50)
@given(st.floats(-180, 180), st.floats(-90, 90))
def test_laws(l, b):
    D = np.linspace(0, 25, 200)
    A = DUST.profile(*rad(l, b), D, R0, Z)
    assert A[0] == 0 and np.all(np.diff(A) >= 0) and np.all(np.isfinite(A))
    assert DUST.bulge_factor.value <= DUST.factor(*rad(l, b)) <= 1
    np.testing.assert_allclose(DUST.profile(*rad(-l, b), D, R0, Z), A, rtol=1e-10, atol=1e-15)
    np.testing.assert_allclose(DUST.profile(*rad(l, -b), D, R0, -Z), A, rtol=1e-10, atol=1e-15)


def test_factor_is_smooth_and_follows_the_angle():
    """Centre within 8 deg, disc beyond 16 deg, and nowhere a step."""
    l = np.linspace(0, 30, 3001)
    factor = np.array([DUST.factor(*rad(x, 2)) for x in l])
    angle = SkyCoord(l, 2, unit="deg", frame="galactic").separation(SkyCoord(0, 0, unit="deg", frame="galactic"))
    assert np.all(factor[angle < 8 * u.deg] == DUST.bulge_factor.value) and np.all(factor[angle > 16 * u.deg] == 1)
    assert 0 <= np.diff(factor).min() and np.diff(factor).max() < 0.0015


def test_bands():
    ratios = [band_ratio(band) for band in BANDS]
    assert ratios == sorted(ratios, reverse=True) and ratios[1] == 1
    assert (band_ratio("V") - 1) * 1.217 == pytest.approx(1)
    assert (band_ratio("J") - band_ratio("Ks")) / (band_ratio("V") - 1) == pytest.approx(0.3433)
    assert band_ratio("H") / band_ratio("Ks") == pytest.approx(1.73)
    with pytest.raises(InputError, match="did you mean 'Ks'"):
        band_ratio("K")


def test_measured_field():
    l, b = rad(1, -1.5)
    free = sightline_extinction(DUST, l, b, "I", **SUN)
    own = sightline_extinction(DUST, l, b, "I", {"I": 1.2}, **SUN)
    assert own.at_R0 == own(R0) == pytest.approx(1.2, rel=1e-5) and own.source == "measured" and not own.warnings
    np.testing.assert_allclose(own(np.array([1, 4, 20.0])) / free(np.array([1, 4, 20.0])), 1.2 / free.at_R0, rtol=1e-10)
    infrared = sightline_extinction(DUST, l, b, "Ks", {"V": 3.0, "H": 0.5}, **SUN)
    assert infrared.at_R0 == pytest.approx(0.5 / 1.73)
    assert "from the measured A_H" in infrared.warnings[0] and "Nishiyama" in infrared.warnings[0]
    assert sightline_extinction(DUST, l, b, "I", {"I": 0.0}, **SUN)(12.0) == 0


def test_unsure_near_the_plane():
    low = sightline_extinction(DUST, *rad(1, -1.5), "I", **SUN)
    assert "factor two within 2 deg" in low.warnings[0] and low.source == "dust disc"
    assert not sightline_extinction(DUST, *rad(1, -2.5), "I", **SUN).warnings
    assert low(8.0) == pytest.approx(DUST.profile(*rad(1, -1.5), [8.0], R0, Z)[0], rel=1e-5)
    visual = sightline_extinction(DUST, *rad(1, -1.5), "V", distances_kpc=[2.0, 8.0], **SUN)
    np.testing.assert_allclose(visual([2.0, 8.0]) / low([2.0, 8.0]), band_ratio("V"), rtol=1e-5)


@pytest.mark.parametrize(
    "measured, match",
    [
        ({"K": 1}, "did you mean 'Ks'"),
        ({"I": -1}, "0 to 100"),
        ({"I": float("nan")}, "0 to 100"),
        ({"I": "1.2"}, "not a number of magnitudes"),
        ({"I": True}, "not a number of magnitudes"),
    ],
)
def test_refused_measurements(measured, match):
    with pytest.raises(InputError, match=match):
        sightline_extinction(DUST, *rad(1, -3), "I", measured, **SUN)


def test_refused_arguments(tmp_path):
    with pytest.raises(InputError, match="-pi/2"):
        DUST.profile(1.0, -3.9, [8.0], R0, Z)
    for distances in ([-1.0], [np.nan]):
        with pytest.raises(InputError, match="from 0 up"):
            DUST.profile(0.1, 0.1, distances, R0, Z)
    for changes, match in (
        ((-1, 3, 0.1, 1, 8, 16), "local_rate"),
        ((1, 3, 0, 1, 8, 16), "h_z"),
        ((1, 3, 1, 1, 18, 16), "must rise"),
    ):
        with pytest.raises(InputError, match=match):
            DustDisc(*changes)
    own = tmp_path / "own.toml"
    own.write_text("[dust]\nlocal_rat = 3\n")
    with pytest.raises(InputError, match="did you mean 'local_rate'"):
        DustDisc.read(str(own))
    with pytest.raises(InputError, match="empty"):
        sightline_extinction(DustDisc(0, 3, 0.1, 1, 8, 16), *rad(1, -3), "I", {"I": 1.0}, **SUN)
