"""Expected errors against another way to write the path, fits to mock data, closed forms and limits."""

from functools import lru_cache, partial

import astropy.units as u
import numpy as np
import pytest
from astropy.coordinates import SkyCoord
from astropy.table import QTable
from scipy.optimize import least_squares
from scipy.stats import chi2

from lensrate.errors import InputError
from lensrate.kernels import fisher as kernels
from lensrate.lensing import earth
from lensrate.surveys.facilities import Facility, LightCurve
from lensrate.surveys.fisher import mass_errors, measured, measured_against_hours

RA, DEC = np.radians(268.0), np.radians(-29.0)
PLACE = RA * u.rad, DEC * u.rad
START = 63000.0
SEASONS = np.array([[START + 365.25 * k, START + 365.25 * k + 250] for k in range(3)])
FLAT = dict(mag=[10.0, 24.0], sigma=[0.006, 0.006])
NAMES = (
    "t_0",
    "u_0",
    "t_E",
    "pi_EN",
    "pi_EE",
    "theta_E",
    "source_mag",
    "blend_mag",
    "image_source_mag",
    "image_blend_mag",
)


def imager(**changes):
    settings = dict(
        name="imager", band="I", mag=[12.0, 16.0, 24.0], sigma=[0.1, 0.1, 0.5], hours_per_epoch=0.5, number=20,
        spacing=60.0, first_epoch=5.0, blend_error=0.02,
    )  # fmt: skip
    return Facility(**{**settings, **changes})


def events(n, seed=5, **changes):
    rng = np.random.default_rng(seed)
    size, angle = rng.uniform(0.15, 0.35, n), rng.uniform(0, 2 * np.pi, n)
    made = dict(
        t_0=rng.uniform(START + 60, START + 600, n), u_0=rng.choice([-1, 1], n) * rng.uniform(0.1, 0.5, n),
        t_E=rng.uniform(60, 150, n), pi_EN=size * np.cos(angle), pi_EE=size * np.sin(angle),
        theta_E=rng.uniform(1.5, 4, n), source_mag=rng.uniform(16, 17.5, n), blend_mag=rng.uniform(17, 20, n),
        image_source_mag=rng.uniform(16, 17.5, n), image_blend_mag=rng.uniform(19, 22, n),
    )  # fmt: skip
    return {**made, **{k: np.broadcast_to(np.asarray(v, dtype=float), (n,)).copy() for k, v in changes.items()}}


def one(e, i):
    return [e[name][i] for name in NAMES]


# ------------------------------------------------ the same event written from the Sun, in time and real units


@lru_cache(maxsize=8)
def earth_at(times):
    return earth.earth_on_sky(np.frombuffer(times), RA, DEC)[:2]


def separation(p, t, t_ref):
    """Lens minus source in Einstein radii, N and E: straight line seen from the Sun less |pi_E| times Earth's place."""
    t_0, u_0, t_E, north, east = earth.path_to_heliocentric(p[0], p[1], p[2] * u.day, p[3], p[4], t_ref, *PLACE)
    size = np.hypot(north, east)
    tau = (t - t_0) / t_E.value
    x_N, x_E = earth_at(t.tobytes())
    return (
        tau * north / size - u_0 * east / size - size * x_N,
        tau * east / size + u_0 * north / size - size * x_E,
    )


def light(p, t, t_ref):
    """Flux with p = t_0, u_0, t_E, pi_EN, pi_EE, source flux, blend flux, ..."""
    s = np.hypot(*separation(p, t, t_ref))
    return p[5] * (s**2 + 2) / (s * np.sqrt(s**2 + 4)) + p[6]


def places(p, t, t_ref, measures, blend_at):
    """Both coordinates [mas], from the two images one by one and the blend."""
    u_N, u_E = separation(p, t, t_ref)
    s = np.hypot(u_N, u_E)
    root = np.sqrt(s**2 + 4)
    # images on the line through lens and source, (s +- root)/2 from the lens on the source's side
    major, minor = 0.5 * (s + root), 0.5 * (s - root)
    bright, faint = 0.5 * ((s**2 + 2) / (s * root) + 1), 0.5 * ((s**2 + 2) / (s * root) - 1)
    if measures == "images":
        return [p[7] * (minor - major) * x / s for x in (u_N, u_E)]
    found = []
    for x, zero, mu, away in zip((u_N, u_E), p[8:10], p[10:12], earth_at(t.tobytes())):
        lens, toward_source = p[7] * x, -x / s * p[7]
        blend = lens if blend_at == "lens" else 0.0
        sum_of_light = bright * (lens + major * toward_source) + faint * (lens + minor * toward_source) + p[13] * blend
        found.append(sum_of_light / (bright + faint + p[13]) + zero + mu * (t - t_ref) / 365.25 - p[12] * away)
    return found


def truth(e, i):
    t_0, u_0, t_E, p_N, p_E, theta_E, m_S, m_B, i_S, i_B = one(e, i)
    total = 10 ** (-0.4 * m_S) + 10 ** (-0.4 * m_B)
    f_S = 10 ** (-0.4 * m_S) / total
    q = 10 ** (-0.4 * (i_B - i_S))
    return np.array([t_0, u_0, t_E, p_N, p_E, f_S, 1 - f_S, theta_E, 0, 0, 0, 0, 0.12, q]), -2.5 * np.log10(total), i_S


# ------------------------------------------------------------------------------------------------------- laws


STEP = np.array([1e-3, 1e-5, 1e-3, 1e-6, 1e-6, 1e-4, 1e-4, 1e-4, 1, 1, 1, 1, 1, 1e-4])


def normalised_information(f, p, weight):
    """J J^T of f at p in the kernel's parameters, scaled to a unit diagonal; and the scale."""
    unit = np.array([p[2], 1, p[2], 1, 1, 1, 1, p[7], 1, 1, 365.25 / p[2], 365.25 / p[2], 1, 1])
    d = np.diag(STEP)
    J = np.array([unit[k] * (np.ravel(f(p + d[k])) - np.ravel(f(p - d[k]))) / (2 * STEP[k]) for k in range(14)])
    info = (J * weight) @ (J * weight).T
    scale = np.sqrt(np.maximum(np.diag(info), 1e-300))
    return info / np.outer(scale, scale), scale


@pytest.mark.parametrize("measures, blend_at", [("centroid", "lens"), ("centroid", "source"), ("images", "lens")])
def test_matrix_against_numerical_derivatives(measures, blend_at):
    e = events(3)
    times = np.linspace(START, START + 900, 67)
    x_N, x_E, _, _ = earth.earth_on_sky(times, RA, DEC)
    flat = np.concatenate([[5.0, 30.0, 0.01], np.full(2502, 4.0)])
    kind = np.array([int(measures == "images"), int(blend_at == "source")])
    for i in range(3):
        p, baseline, mag = truth(e, i)
        path, there = p[:5].copy(), np.array(earth.earth_on_sky(p[0], RA, DEC))
        info = np.zeros((14, 14))
        kernels.add_photometry(path, there, p[5], baseline, times, -x_N, -x_E, flat, info)
        magnitudes = 2.5 / np.log(10) / light(p, times, p[0])
        want, scale = normalised_information(partial(light, t=times, t_ref=p[0]), p, 2 * magnitudes)
        assert info / np.outer(scale, scale) == pytest.approx(want, abs=2e-6)
        info[:] = 0.0
        kernels.add_astrometry(path, there, p[7], p[13], mag, times, -x_N, -x_E, flat, kind, np.zeros(2), info)
        measure = partial(places, t=times, t_ref=p[0], measures=measures, blend_at=blend_at)
        want, scale = normalised_information(measure, p, 2)
        assert info / np.outer(scale, scale) == pytest.approx(want, abs=2e-6)
        assert (np.diag(info) > 0).sum() == (6 if measures == "images" else 12)


def mock_fit(p, mag, times, when, facility, error, rng):
    """Draw a light curve and places about p, fit all fourteen parameters, return the fitted ones."""
    t_ref = p[0]
    error = light(p, times, t_ref) * error * np.log(10) / 2.5
    flux = light(p, times, t_ref) + rng.normal(0, error)
    magnified = (light(p, when, t_ref) - p[6]) / p[5]
    blur = np.exp(np.interp(mag - 2.5 * np.log10(magnified + p[13]), facility.mag, np.log(facility.sigma)))
    seen = np.array(places(p, when, t_ref, "centroid", "lens"))
    seen = seen + rng.normal(0, 1, seen.shape) * blur
    ratio = p[13] + rng.normal(0, facility.blend_error)

    def residuals(q):
        off = (np.array(places(q, when, t_ref, "centroid", "lens")) - seen) / blur
        return np.concatenate(
            [(light(q, times, t_ref) - flux) / error, off.ravel(), [(q[13] - ratio) / facility.blend_error]]
        )

    scale = np.array([1, 0.05, 5, 0.02, 0.02, 0.05, 0.05, 0.1, 0.1, 0.1, 0.1, 0.1, 0.1, 0.02])
    fit = least_squares(residuals, p, x_scale=scale, ftol=1e-6)
    assert fit.success
    return fit.x


def test_errors_against_fits_to_mock_data():
    """Fitted values scatter about the truth as predicted: sum of z^2 within the 99.8 % range of chi^2."""
    n, error = 30, 0.0012
    survey = LightCurve(SEASONS, 3.0, [10, 24], [error, error])
    facility = imager(sigma=[0.02, 0.02, 0.1], blend_error=0.004)
    e = events(100, seed=11)
    got = mass_errors(e, survey, facility, PLACE, frame="geocentric")
    rows = np.flatnonzero(got.sigma_M < 0.025)[:n]  # small enough for linear errors to hold
    assert rows.size == n
    rng = np.random.default_rng(12)
    times, when = survey.epochs(), facility.schedule(e["t_0"], e["u_0"], e["t_E"])
    z = []
    for i in rows:
        p, _, mag = truth(e, i)
        q = mock_fit(p, mag, times, when[i], facility, error, rng)
        t_E, theta_E = np.log(q[2] / p[2]), np.log(q[7] / p[7])
        pi_E = np.log(np.hypot(q[3], q[4]) / np.hypot(p[3], p[4]))
        z.append(
            [
                t_E / got.sigma_t_E[i],
                pi_E / got.sigma_pi_E[i],
                theta_E / got.sigma_theta_E[i],
                (theta_E - pi_E) / got.sigma_M[i],
            ]
        )
    z = np.array(z)
    low, high = chi2.ppf([0.001, 0.999], n)
    for total in (z**2).sum(axis=0):
        assert low < total < high
    assert np.all(np.abs(z.mean(axis=0)) < 3.3 / np.sqrt(n))


def test_error_of_theta_E_in_closed_form():
    """A dark lens, its path known from a perfect light curve, many epochs evenly over -X..X t_E, place and proper
    motion free: the along-track shift loses its linear part, the cross-track shift its mean."""
    for u_0, X in ((0.5, 2.0), (1.2, 3.0), (0.1, 1.0)):
        t_E, theta_E, n, sigma = 100.0, 1.0, 4001, 0.2
        e = events(1, t_0=START + 400, u_0=u_0, t_E=t_E, pi_EN=1e-4, pi_EE=0, theta_E=theta_E, blend_mag=np.inf,
                   image_source_mag=17, image_blend_mag=np.inf)  # fmt: skip
        perfect = LightCurve([[START - 1500, START + 2500]], 0.5, [5, 30], [1e-7, 1e-7])
        plan = imager(number=0, spacing=0, at=tuple(np.linspace(-X, X, n)), mag=[5, 30], sigma=[sigma, sigma],
                      alert_u=50, first_epoch=0, blend_error=1e-7)  # fmt: skip
        got = mass_errors(e, perfect, plan, PLACE, frame="geocentric", source_parallax_error=1e-7 * u.mas)
        a2 = u_0**2 + 2
        a = np.sqrt(a2)
        angle = np.arctan(X / a)
        along = (angle / a - X / (X**2 + a2)) / (2 * X) - ((2 * X - 2 * a * angle) / (2 * X)) ** 2 / (X**2 / 3)
        mean = angle / (a * X)
        across = u_0**2 * ((angle / a**3 + X / (a2 * (X**2 + a2))) / (2 * X) - mean**2)
        assert got.sigma_theta_E[0] == pytest.approx(sigma / theta_E / np.sqrt(n * (along + across)), rel=2e-3)
        assert got.epochs[0] == n


def test_image_separation_in_closed_form():
    """One epoch at the peak of a known path: theta_E sqrt(u_0^2 + 4) to sigma."""
    e = events(1, t_0=START + 100, u_0=0.3, t_E=80, pi_EN=0.1, pi_EE=0.1, theta_E=2, image_source_mag=12)
    perfect = LightCurve(SEASONS, 0.5, [5, 30], [1e-7, 1e-7])
    plan = imager(measures="images", number=0, spacing=0, days=(0.0,), sigma=[0.05, 0.05, 0.05], mag=[5, 12, 20])
    got = mass_errors(e, perfect, plan, PLACE, frame="geocentric")
    assert got.sigma_theta_E[0] == pytest.approx(0.05 / (2 * np.sqrt(0.3**2 + 4)), rel=1e-6)
    assert got.sigma_M[0] == pytest.approx(got.sigma_theta_E[0], rel=1e-3)
    for changes in ({"least_separation": 4.1}, {"least_flux_ratio": 0.6}):
        lost = mass_errors(e, perfect, imager(**{**vars(plan), **changes}), PLACE, frame="geocentric")
        assert lost.epochs[0] == 0 and lost.hours[0] == 0.5 and lost.sigma_theta_E[0] == np.inf


def test_scalings():
    e = events(30)
    full = mass_errors(e, LightCurve(SEASONS, 1.0, **FLAT), imager(), PLACE)
    half = mass_errors(
        e, LightCurve(SEASONS, 1.0, [10, 24], [0.003, 0.003]), imager(sigma=[0.05, 0.05, 0.25], blend_error=0.01), PLACE
    )
    for name in ("sigma_t_E", "sigma_pi_E", "sigma_theta_E", "sigma_M", "sigma_pi_E_photometry"):
        assert getattr(half, name) == pytest.approx(0.5 * getattr(full, name), rel=1e-6)
    cloudy = mass_errors(e, LightCurve(SEASONS, 1.0, **FLAT, usable=0.25), None, PLACE)
    assert cloudy.sigma_pi_E == pytest.approx(2 * full.sigma_pi_E_photometry, rel=1e-6)
    often = mass_errors(e, LightCurve(SEASONS, 0.25, **FLAT), None, PLACE)
    assert often.sigma_pi_E == pytest.approx(0.5 * full.sigma_pi_E_photometry, rel=0.02)
    # a systematic floor that dwarfs the photons makes the photons irrelevant
    floors = [mass_errors(e, LightCurve(SEASONS, 1.0, **FLAT), imager(floor=5.0, sigma=s, mag=[12, 24]), PLACE)
              for s in ([0.01, 0.01], [0.1, 0.1])]  # fmt: skip
    assert floors[0].sigma_theta_E == pytest.approx(floors[1].sigma_theta_E, rel=1e-3)
    # more knowledge never hurts
    known = mass_errors(e, LightCurve(SEASONS, 1.0, **FLAT), imager(), PLACE, source_parallax_error=0.02 * u.mas)
    assert np.all(known.sigma_M < full.sigma_M)
    assert np.all(full.sigma_pi_E <= full.sigma_pi_E_photometry * (1 + 1e-9))


def test_frames_units_and_containers_agree():
    e = events(6)
    survey, plan = LightCurve(SEASONS, 2.0, **FLAT), imager(least_sun_angle=50)
    sun = mass_errors(e, survey, plan, PLACE)
    t_E, north, east = earth.to_geocentric(e["t_E"] * u.day, e["pi_EN"], e["pi_EE"], e["t_0"], *PLACE)
    here = {**e, "t_E": t_E, "pi_EN": north, "pi_EE": east, "theta_E": (e["theta_E"] * u.mas).to(u.uas)}
    geo = mass_errors(QTable(here), survey, plan, SkyCoord(*PLACE), frame="geocentric", jobs=2)
    for name in ("sigma_M", "sigma_theta_E", "sigma_t_E"):
        assert getattr(sun, name) == pytest.approx(getattr(geo, name), rel=1e-6)
    assert sun.to_table()["hours"].unit == u.hour and len(sun.to_table()) == 6


# ----------------------------------------------------------------------------------------------------- limits


def test_no_mass_without_a_parallax():
    plan, survey = (
        imager(at=(-0.9, -0.5, 0.0, 0.5, 1, 2, 4, 8, 16, 40), number=0, spacing=0),
        LightCurve(SEASONS, 0.5, **FLAT),
    )
    short = mass_errors(events(8, t_E=4.0, t_0=START + 120, theta_E=6.0), survey, plan, PLACE)
    assert np.all(short.sigma_theta_E < 0.2) and np.all(short.sigma_pi_E > 0.5)
    assert short.sigma_M == pytest.approx(short.sigma_pi_E, rel=0.15)
    none = mass_errors(events(4, pi_EN=0.0, pi_EE=0.0), survey, plan, PLACE)
    assert np.all(none.sigma_M == np.inf) and np.all(none.sigma_pi_E == np.inf) and np.all(none.sigma_t_E < 0.1)
    alone = mass_errors(events(4), survey, None, PLACE)
    assert np.all(alone.sigma_M == np.inf) and np.all(alone.sigma_theta_E == np.inf) and np.all(alone.sigma_pi_E < 1)


def test_where_nothing_is_seen():
    survey = LightCurve(SEASONS, 0.5, **FLAT)
    far = mass_errors(events(5, t_0=START + 3000, t_E=20.0), survey, imager(), PLACE)
    assert np.all(far.sigma_pi_E_photometry == np.inf) and np.all(far.sigma_M == np.inf)
    faint = mass_errors(events(5, image_source_mag=29, image_blend_mag=np.nan), survey, imager(), PLACE)
    assert np.all(faint.epochs == 0) and np.all(faint.hours == 0) and np.all(faint.sigma_theta_E == np.inf)
    assert np.all(np.isfinite(faint.sigma_pi_E))
    bright = mass_errors(events(5, image_source_mag=14), survey, imager(saturation=16.0), PLACE)
    assert np.all(bright.epochs == 0)
    few = mass_errors(events(5), survey, imager(number=2), PLACE)
    assert np.all(few.sigma_M == np.inf) and few.sigma_pi_E == pytest.approx(few.sigma_pi_E_photometry)
    nothing = LightCurve(SEASONS, 0.5, **FLAT, usable=0.0)
    assert np.all(mass_errors(events(5), nothing, None, PLACE).sigma_t_E == np.inf)


# ---------------------------------------------------------------------------------------------- what it is worth


def test_measured_and_hours():
    e = events(60, seed=2)
    e["theta_E"][30:] = 0.05
    survey, plan = LightCurve(SEASONS, 1.0, **FLAT), imager()
    got = mass_errors(e, survey, plan, PLACE)
    classes = np.array(["black_hole"] * 30 + ["star"] * 30)
    weights = np.full(60, 0.5)
    counts = measured(got, classes, weights)
    assert counts["all"]["events"] == 30 and counts["all"]["measured"] == counts["black_hole"]["measured"]
    assert counts["star"]["measured"] == 0 and counts["black_hole"]["share"] > 0.5
    assert measured(got, classes, weights, threshold=1e9)["all"]["share"] <= 1
    best = measured_against_hours(got, classes, weights, order="sigma_M")
    plain = measured_against_hours(got, classes, weights)
    for curve in (best, plain):
        assert curve.hours[-1] == pytest.approx(0.5 * got.hours.sum())
        assert curve.measured["all"][-1] == pytest.approx(counts["all"]["measured"])
        assert np.all(np.diff(curve.measured["all"]) >= 0)
    # the known answer first is never worse, hour by hour, where every event costs the same
    assert np.all(got.hours == got.hours[0])
    assert np.all(best.measured["all"] >= plain.measured["all"])
    assert best.at(best.hours[-1] / 2)["all"] >= plain.at(best.hours[-1] / 2)["all"]
    assert measured_against_hours(got, classes, weights, order=got.sigma_M).measured["all"] == pytest.approx(
        best.measured["all"]
    )


def test_refusals():
    e, survey = events(3), LightCurve(SEASONS, 1.0, **FLAT)
    for change, word in (
        ({"u_0": np.zeros(2)}, "u_0"), ({"t_E": np.array([1, -1, 1.0])}, "t_E"), ({"pi_EN": [1, np.nan, 1]}, "pi_EN"),
        ({"blend_mag": np.array([1, 99.0, 1])}, "blend_mag"), ({"t_E": np.ones(3) * u.mas}, "converted"),
    ):  # fmt: skip
        with pytest.raises(InputError, match=word):
            mass_errors({**e, **change}, survey, imager(), PLACE)
    with pytest.raises(InputError, match="no column 'theta_E'"):
        mass_errors({k: v for k, v in e.items() if k != "theta_E"}, survey, imager(), PLACE)
    with pytest.raises(InputError, match="did you mean 'heliocentric'"):
        mass_errors(e, survey, imager(), PLACE, frame="helocentric")
    with pytest.raises(InputError, match="ra"):
        mass_errors(e, survey, imager(), (268.0, -29.0))
    got = mass_errors(e, survey, imager(), PLACE)
    with pytest.raises(InputError, match="order"):
        measured_against_hours(got, ["star"] * 3, order="t_e")
    with pytest.raises(InputError, match="classes"):
        measured(got, ["star"])
    with pytest.raises(InputError, match="threshold"):
        measured(got, ["star"] * 3, threshold=0)
