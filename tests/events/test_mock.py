"""Mock catalogues: frames against astropy, magnitudes against the luminosity function, campaigns against forecasts.

Statistical tests may fail by chance with probability FALSE_ALARM; seeds are fixed.
"""

from dataclasses import replace
from functools import cache

import astropy.units as u
import numpy as np
import pytest
from astropy.coordinates import SkyCoord, get_body_barycentric_posvel
from astropy.time import Time
from scipy.stats import chi2, kstest

import lensrate
from lensrate.errors import InputError
from lensrate.events import light
from lensrate.galaxy.frames import icrs_from_galactic
from lensrate.lensing import earth
from lensrate.sources.lens_light import dwarf_magnitude, white_dwarf_magnitude
from lensrate.surveys.campaign import Campaign
from lensrate.surveys.field import Field
from lensrate.surveys.yields import campaign
from lensrate.units import DAYS_PER_YEAR

FALSE_ALARM = 1e-4
N = 100_000


@cache
def forecast(l=1.0, b=-3.9, sources="limit:I=21", scenario="default"):
    return lensrate.sightline(l * u.deg, b * u.deg, scenario, sources=sources)


@cache
def bulge():
    return lensrate.mock_events(forecast(), number=N, seed=21)


@cache
def survey():
    """Two small fields of an invented survey, seasons and efficiency of the shipped one."""
    marram = Campaign.read("marram")
    rows = [{"name": f"T{i}", "l": 1.0 + i, "b": -2.9 - i, "area_deg2": 1.0, "limit": "I=21"} for i in (0, 1)]
    fields = tuple(Field.from_dict(row, "field", "") for row in rows)
    return campaign(replace(marram, fields=fields))


@pytest.mark.parametrize("l, b", [(1.0, -3.9), (90.0, 5.0), (200.0, -40.0), (359.0, 1.5)])
def test_north_and_east(l, b):
    """The motion as astropy turns it; and as the difference of two places of the sky."""
    m = lensrate.mock_events(forecast(l, b, "distance:8"), number=300, seed=2)
    unit = u.mas / u.yr
    place = SkyCoord(
        l=np.full(300, l) * u.deg, b=np.full(300, b) * u.deg, pm_l_cosb=m["mu_rel_l"] * unit, pm_b=m["mu_rel_b"] * unit,
        frame="galactic",
    ).icrs  # fmt: skip
    # the frames differ by 0.01 arcsec in direction, so by some 1e-7 in the angle
    size = np.hypot(m["mu_rel_l"], m["mu_rel_b"])
    assert np.all(np.abs(place.pm_ra_cosdec.to_value(unit) - m["mu_rel_E"]) < 3e-7 * size)
    assert np.all(np.abs(place.pm_dec.to_value(unit) - m["mu_rel_N"]) < 3e-7 * size)
    assert np.allclose(np.hypot(m["pi_EN"], m["pi_EE"]), m["pi_E"], rtol=1e-12)
    assert np.allclose(m["pi_EN"] * m["mu_rel_E"], m["pi_EE"] * m["mu_rel_N"], rtol=1e-9, atol=1e-12)


def earth_velocity(mjd, ra, dec):
    """Earth's velocity from the Sun on the sky [au/yr], by differences of astropy's barycentric places of both."""

    def place(t):
        bodies = [get_body_barycentric_posvel(b, t, ephemeris="builtin")[0].xyz for b in ("earth", "sun")]
        return (bodies[0] - bodies[1]).to_value(u.au)

    h = 0.02  # d
    v = (place(Time(mjd + h, format="mjd", scale="tdb")) - place(Time(mjd - h, format="mjd", scale="tdb"))) / (2 * h)
    east = np.array([-np.sin(ra), np.cos(ra), 0.0])
    north = np.array([-np.sin(dec) * np.cos(ra), -np.sin(dec) * np.sin(ra), np.cos(dec)])
    return DAYS_PER_YEAR * north @ v, DAYS_PER_YEAR * east @ v


def test_geocentric_frame():
    """Against finite differences of astropy's Earth, and back again."""
    m = lensrate.mock_events(forecast(), number=400, seed=3, dates=(57000.0, 64000.0))
    ra, dec = (float(x.to_value(u.rad)) for x in icrs_from_galactic(1 * u.deg, -3.9 * u.deg))
    v_N, v_E = earth_velocity(m["t_0"], ra, dec)
    pi_rel = m["pi_E"] * m["theta_E"]
    geo_N, geo_E = m["mu_rel_N"] - pi_rel * v_N, m["mu_rel_E"] - pi_rel * v_E
    mu = np.hypot(geo_N, geo_E)
    # the ephemerides differ by some 1e-6 of Earth's speed
    slack = 3e-5 * 6.3 * pi_rel / mu + 1e-9
    assert np.all(np.abs(m["t_E_geo"] * mu / (DAYS_PER_YEAR * m["theta_E"]) - 1) < slack)
    assert np.all(np.abs(m["pi_EN_geo"] - m["pi_E"] * geo_N / mu) < slack * m["pi_E"])
    assert np.all(np.abs(m["pi_EE_geo"] - m["pi_E"] * geo_E / mu) < slack * m["pi_E"])
    back = earth.to_heliocentric(
        m["t_E_geo"] * u.day, m["pi_EN_geo"], m["pi_EE_geo"], m["t_0"], ra * u.rad, dec * u.rad
    )
    for got, name in zip(back, ("t_E", "pi_EN", "pi_EE")):
        assert np.allclose(u.Quantity(got).value, m[name], rtol=1e-9, atol=1e-12)
    # it matters
    assert np.max(np.abs(m["t_E_geo"] / m["t_E"] - 1)) > 0.1


def test_uniform_numbers():
    m = bulge()
    assert kstest(np.abs(m["u_0"]), "uniform").pvalue > FALSE_ALARM
    assert abs(np.mean(m["u_0"] > 0) - 0.5) < 4 * 0.5 / np.sqrt(N)
    assert kstest(m["t_0"], "uniform", args=(62502.0, 365.0)).pvalue > FALSE_ALARM
    assert Time(62502.0, format="mjd", scale="tdb").iso.startswith("2030-01-01")
    assert Time(62867.0, format="mjd", scale="tdb").iso.startswith("2031-01-01")
    for other in ("t_E", "pi_E", "I_S"):
        assert abs(np.corrcoef(np.abs(m["u_0"]), np.log(m[other]))[0, 1]) < 4 / np.sqrt(N)


def test_motions_and_weights():
    m, f = bulge(), forecast()
    assert np.allclose(m["mu_L_l"] - m["mu_S_l"], m["mu_rel_l"], atol=1e-9)
    assert np.allclose(m["mu_L_b"] - m["mu_S_b"], m["mu_rel_b"], atol=1e-9)
    assert m["weight"].sum() == pytest.approx(f.lenses["all"].rate, rel=1e-9)
    error = np.std(m["t_E"]) / np.sqrt(N)
    assert abs(m["t_E"].mean() - f.lenses["all"].mean_t_E) < 4 * error + 1e-3 * m["t_E"].mean()


def test_source_magnitudes_follow_the_luminosity_function():
    """Whole histogram by component, averaged over the distances drawn."""
    m, sources = bulge(), forecast()._integrals.ready.sources
    edges = np.linspace(14.5, 21.0, 27)
    got, wanted = np.zeros(26), np.zeros(26)
    for i, shine in enumerate(sources.shining):
        mine = m.columns["source_component"] == i
        D = m["D_S"][mine]
        modulus = 5 * np.log10(D) + 10 + sources.dust(D)
        assert np.all(m["I_S"][mine] <= 21.0 + 1e-6)
        below = np.array([shine.brighter(e - modulus) / shine.brighter(21.0 - modulus) for e in edges])
        wanted += np.diff(below, axis=0).sum(axis=1)
        got += np.histogram(m["I_S"][mine], edges)[0]
    value = np.sum((got - wanted) ** 2 / wanted)
    assert wanted.min() > 20 and value < chi2.isf(FALSE_ALARM, 26)


def test_limit_at_peak():
    """Every event is brought over the limit; u_0 is as even as the number of stars allows."""
    f = forecast(sources="peak:I=18.5")
    m = lensrate.mock_events(f, number=60_000, seed=4)
    assert np.all(m["I_S"] - light.gain(m["u_0"]) <= 18.5 + 1e-6)
    # faint sources need high magnification
    faint = m["I_S"] > 20.5
    assert np.abs(m["u_0"][faint]).max() < 0.2 and faint.sum() > 300
    # stars that are bright enough without: as many as the rates of both rules say, evenly in u_0
    plain = forecast(sources="limit:I=18.5")
    bright = m["I_S"] < 18.5 - light.gain(1.0)
    assert kstest(np.abs(m["u_0"][bright]), "uniform").pvalue > FALSE_ALARM
    number = [g._integrals.ready.per_arcmin2() * g.lenses["all"].rate for g in (plain, f)]
    share = np.mean(m["I_S"] < 18.5)
    assert abs(share - number[0] / number[1]) < 4 * np.sqrt(share / 60_000) + 2e-3


def test_clump_and_single_distance():
    m = lensrate.mock_events(forecast(sources="clump"), number=20_000, seed=5)
    sources = forecast(sources="clump")._integrals.ready.sources
    absolute = m["I_S"] - 5 * np.log10(m["D_S"]) - 10 - sources.dust(m["D_S"])
    assert absolute.mean() == pytest.approx(-0.12, abs=4 * 0.09 / np.sqrt(20_000))
    assert absolute.std() == pytest.approx(0.09, rel=0.02)
    cloud = lensrate.mock_events(forecast(280.46, -32.89, None, "griest1991"), number=500, seed=6)
    assert np.all(np.isnan(cloud["I_S"])) and np.all(np.isinf(cloud["I_L"])) and np.ptp(cloud["D_S"]) < 1e-9


def test_lens_light():
    """Values read off Pecaut & Mamajek (2013) and of white dwarfs (Holberg & Bergeron 2006, memory)."""
    m = bulge()
    assert dwarf_magnitude("I", [1.0, 0.45])[0] == pytest.approx(4.087, abs=1e-6)
    assert np.isinf(m["I_L"][np.isin(m["lens"], ["brown_dwarf", "neutron_star", "black_hole"])]).all()
    assert np.isfinite(m["I_L"][np.isin(m["lens"], ["star", "white_dwarf"])]).all()
    # 0.6 Msun, 10000 K: M_V near 12.2 at 0.6 Gyr
    assert white_dwarf_magnitude("V", 0.6, 0.63) == pytest.approx(12.2, abs=0.2)
    assert white_dwarf_magnitude("V", 1.0, 1.0) > white_dwarf_magnitude("V", 0.6, 1.0)
    ages = np.geomspace(0.001, 10, 60)
    for band in ("V", "I", "J", "H", "Ks"):
        assert np.all(np.diff(white_dwarf_magnitude(band, 0.6, ages)) >= 0)
    # light adds up
    f = 10 ** (-0.4 * m["I_S"]) + 10 ** (-0.4 * m["I_L"])
    assert np.allclose(m["I_base"], -2.5 * np.log10(f))
    rise = 10 ** (-0.4 * m["I_peak"]) - 10 ** (-0.4 * m["I_base"])
    assert np.allclose(rise, 10 ** (-0.4 * m["I_S"]) * (10 ** (0.4 * light.gain(m["u_0"])) - 1), rtol=1e-6)
    blended = lensrate.mock_events(forecast(), number=100, seed=21, blend=18 * u.mag)
    assert np.all(blended["I_base"] < 18)


@pytest.mark.parametrize("weighted", [True, False])
def test_seed_and_threads(weighted):
    f = forecast()
    n = 140_000
    one, two = (lensrate.mock_events(f, number=n, seed=9, weighted=weighted, jobs=j) for j in (1, 3))
    other = lensrate.mock_events(f, number=n, seed=10, weighted=weighted)
    for name in one.names:
        assert np.array_equal(one[name], two[name], equal_nan=one[name].dtype.kind == "f"), name
    assert not np.array_equal(one["u_0"], other["u_0"]) and not np.array_equal(one["t_E"], other["t_E"])
    made = lensrate.mock_events(f, number=10)
    assert 0 <= made.seed < 2**32  # short enough to be typed again
    again = lensrate.mock_events(f, number=10, seed=made.seed)
    assert np.array_equal(made["I_peak"], again["I_peak"])


def test_campaign_gives_the_expected_events():
    """Drawn weights and efficiencies sum to the forecast of every field; times of peak lie in open seasons."""
    result = survey()
    m = lensrate.mock_events(result, number=60_000, seed=12, weighted=True)
    per_field = np.bincount(m.columns["field"], m["weight"] * m["efficiency"])
    square = np.bincount(m.columns["field"], (m["weight"] * m["efficiency"]) ** 2)
    wanted = result.expected.sum(axis=(1, 2))
    assert np.all(np.abs(per_field - wanted) < 4 * np.sqrt(square) + 2e-3 * wanted)
    found = np.sum(m["weight"] * m["detected"])
    error = np.sqrt(np.sum(m["weight"] ** 2 * m["efficiency"]))
    assert abs(found - wanted.sum()) < 4 * error
    seasons = result.campaign.calendar.seasons
    inside = np.zeros(len(m), dtype=bool)
    for s in seasons:
        inside |= (m["t_0"] >= s.start) & (m["t_0"] <= s.end)
    assert inside.all()


def test_campaign_played_once():
    result = survey()
    m = lensrate.mock_events(result, seed=13)
    assert np.all(m["weight"] == 1.0) and m.unit == ""
    wanted = result.expected.sum()
    assert abs(m["detected"].sum() - wanted) < 4 * np.sqrt(wanted)
    assert set(np.unique(m["field"])) <= {f.field.name for f in result.fields}
    found = m.select(m["detected"])
    assert len(found) == m["detected"].sum() and np.all(found["efficiency"] > 0)
    some = lensrate.mock_events(result, number=500, seed=13)
    assert len(some) == 500 and np.ptp(some["weight"]) < 1e-9


def test_efficiency_of_second_variable():
    """An efficiency of u_0 is asked with the event's own u_0."""
    result = survey()
    curve = result.campaign.efficiency
    sharp = replace(
        curve, t_E=np.array([1e-6, 1e6]), values=np.array([[1.0, 1.0], [1.0, 1.0], [0.0, 0.0], [0.0, 0.0]]),
        binned=False, second="u_0", grid=np.array([0.0, 0.5, 0.5000000001, 1.0]),
    )  # fmt: skip
    only = replace(result, campaign=replace(result.campaign, efficiency=sharp))
    m = lensrate.mock_events(only, number=3000, seed=14)
    assert np.array_equal(m["detected"], np.abs(m["u_0"]) <= 0.5)


def test_table_and_meta(tmp_path):
    from lensrate.io import write_table

    m = lensrate.mock_events(forecast(), number=50, seed=15)
    table = m.to_table()
    assert table["t_E"].unit == u.day and table["D_S"].unit == u.kpc and table["weight"].unit == 1 / u.yr
    assert all(table[name].info.description for name in table.colnames)
    for key in ("scenario_hash", "scenario_text", "seed", "version", "references", "frame", "t_0"):
        assert table.meta[key]
    assert set(np.unique(table["lens"])) <= set(m.classes)
    assert list(m.to_pandas().columns) == m.names[1:]
    for ending in ("ecsv", "fits", "csv", "vot", "json"):
        write_table(table, tmp_path / f"mock.{ending}", payload=m.to_dict())
    from astropy.table import QTable

    assert np.allclose(QTable.read(tmp_path / "mock.fits")["t_E"].value, m["t_E"])


def test_refusals():
    f = forecast()
    for wrong, match in (
        ({"number": 0}, "number"),
        ({"number": 2.5}, "number"),
        ({"seed": -3}, "seed"),
        ({"blend": 18.0}, "unit"),
        ({"dates": (63000.0, 62000.0)}, "dates"),
        ({"dates": 63000.0}, "dates"),
        ({"tilt": "even"}, "tilt"),
    ):
        with pytest.raises(InputError, match=match):
            lensrate.mock_events(f, **{"number": 5, "seed": 1, **wrong})
    with pytest.raises(InputError, match="seasons"):
        lensrate.mock_events(survey(), number=5, dates=(62502.0, 62867.0))
    with pytest.raises(InputError, match="no column"):
        lensrate.mock_events(f, number=5, seed=1)["t_e"]


def test_picture(tmp_path):
    import matplotlib

    matplotlib.use("Agg")
    import matplotlib.pyplot as plt

    from lensrate.plots import save_events

    m = lensrate.mock_events(forecast(), number=2000, seed=16, tilt="equal")
    ax = m.plot()
    assert "d" in ax.get_xlabel() and len(ax.collections) == 5
    plt.close(ax.figure)
    save_events(m, tmp_path / "mock.png")
    assert b"scenario_hash" in (tmp_path / "mock.png").read_bytes()
