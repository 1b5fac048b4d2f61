"""A sample against its forecast: fair under the truth drawn by the event sampler, unfair where it must be."""

import astropy.units as u
import numpy as np
import pytest
from astropy.table import Table, vstack
from mocks import FIELDS, draw_sample, draw_table, two_fields
from scipy import stats

import lensrate
from lensrate import InputError, Scenario
from lensrate.datafiles import data_folder
from lensrate.events import goodness
from lensrate.events.compare import compare, differences
from lensrate.events.fold import LN_T, STEP, Errors, assign, fold_campaign, grouped
from lensrate.events.observed import Sample
from lensrate.events.shapes import Parallaxes
from lensrate.events.versus import compare_sample
from lensrate.surveys.campaign import Campaign
from lensrate.surveys.efficiency import Efficiency
from lensrate.surveys.yields import campaign

UNKICKED = Scenario.read("default").replace(kicks="none")
SEASON = {"season": [{"start": "2031-01-01", "end": "2031-12-31"}]}


@pytest.fixture(scope="module")
def forecast(tmp_path_factory):
    return two_fields(tmp_path_factory.mktemp("survey"), UNKICKED)


@pytest.fixture(scope="module")
def folded(forecast):
    return fold_campaign(forecast.campaign, forecast=forecast)


@pytest.fixture(scope="module")
def one(forecast):
    return draw_sample(forecast, 3, parallax=True)


def test_statistics_are_those_of_a_reference_library():
    u = np.random.default_rng(1).random(40)
    assert goodness.kolmogorov_smirnov(u) == pytest.approx(stats.kstest(u, "uniform").statistic)
    known = {"loc": 0.0, "scale": 1.0}
    fit = stats.goodness_of_fit(stats.uniform, u, known_params=known, statistic="ad", n_mc_samples=2, rng=1)
    assert goodness.anderson_darling(u) == pytest.approx(fit.statistic)
    # Cash (1979) form of the Poisson likelihood ratio against the saturated model
    n, mu = np.array([0, 3, 9]), np.array([0.5, 4.0, 6.0])
    ratio = 2 * (stats.poisson.logpmf(n, np.maximum(n, 1e-300)) - stats.poisson.logpmf(n, mu)).sum()
    assert goodness.deviance(n, mu) == pytest.approx(ratio)
    tail = goodness.tail_test(100, 2.5, 4)
    assert tail.p_at_least == pytest.approx(1 - stats.poisson.cdf(3, 2.5))
    assert goodness.tail_test(100, 2.5, 4, 50).p_at_most == pytest.approx(stats.binom.cdf(4, 50, 0.05))


def test_what_is_folded_adds_up_to_the_forecast(forecast, folded):
    np.testing.assert_allclose(folded.expected(), forecast.expected.sum(axis=2), rtol=2e-3)
    errors = Errors((np.log(0.05), 0.0), 3.0, (-0.5, 0.0, 0.5))
    np.testing.assert_allclose(folded.observed(errors).sum(axis=2) * STEP, folded.expected(), rtol=1e-6)
    # a delta of true timescales comes out as wide as the errors and a cell of the grid
    row = errors.matrix[:, 300] / STEP
    mean = np.sum(LN_T * row) * STEP
    width = np.sqrt(np.sum((LN_T - mean) ** 2 * row) * STEP)
    wanted = np.mean([errors.sigma(LN_T[300], q) ** 2 for q in errors.spread]) + STEP**2 / 12
    assert width == pytest.approx(np.sqrt(wanted), rel=1e-3)


def test_p_values_are_even_under_the_truth_and_estimates_unbiased(forecast, folded):
    made = [compare(draw_sample(forecast, 100 + i), folded, simulations=40, seed=i) for i in range(40)]
    for name in ("ks", "anderson_darling", "deviance", "sky"):
        p = [c.tests[name].p for c in made]
        assert stats.kstest(p, "uniform").pvalue > 1e-3, name
    for key in ("optical_depth", "rate"):
        rows = [getattr(c, key) for c in made]
        pull = [(r.value - r.predicted) / r.error for r in rows]
        assert abs(np.mean(pull)) < 4 / np.sqrt(40) and 0.7 < np.std(pull) < 1.4
    tail = [c.tail for c in made]
    total = sum(t.expected for t in tail)
    assert abs(sum(t.observed for t in tail) - total) < 4 * np.sqrt(total)


@pytest.mark.slow
def test_p_values_are_even_under_the_truth_where_a_fit_comes_first(forecast, folded):
    """Events 1.3 times as long: after the fit nothing is left to see, and the simulated samples are fitted too."""
    p = {"ks": [], "anderson_darling": [], "deviance": []}
    for i in range(40):
        table = draw_table(forecast, 300 + i)
        table["t_E"] *= 1.3
        table["t_E_err"] *= 1.3
        found = compare(Sample.from_table(table), folded, simulations=40, fit=True, seed=i).tests
        for name, values in p.items():
            values.append(found[name].p)
    for name, values in p.items():
        assert stats.kstest(values, "uniform").pvalue > 1e-3, (name, np.sort(values))


def test_longer_events_are_noticed_and_a_fit_takes_them_in(forecast, folded):
    table = draw_table(forecast, 5)
    table["t_E"] *= 1.5
    table["t_E_err"] *= 1.5
    sample = Sample.from_table(table)
    plain = compare(sample, folded, simulations=200)
    assert max(plain.tests[k].p for k in ("ks", "anderson_darling")) < 0.02
    assert plain.tail.p_at_least < 0.05
    fitted = compare(sample, folded, simulations=20, fit=True)
    assert fitted.fitted[0] == pytest.approx(np.log(1.5), abs=0.2) and fitted.tests["ks"].p > 0.05
    assert fitted.ln_likelihood["t_E"] > plain.ln_likelihood["t_E"]


def test_parallaxes_given_t_E_do_not_see_the_selection_of_timescales(forecast, folded):
    long = [e for i in range(6) for e in draw_sample(forecast, 40 + i, parallax=True) if e.t_E.value > 25]
    c = compare(Sample(tuple(long), "long ones"), folded, simulations=100)
    assert c.tests["ks"].p < 0.02 < c.tests["pi_E_ks"].p and c.parallax_shares.size == len(long)


def test_the_size_of_a_measured_vector_errs_like_one(folded):
    # Rice (1945): the size of a true parallax of the forecast plus noise in both components
    given, rng = Parallaxes(folded), np.random.default_rng(2)
    t, y, density = folded.sightlines[0].joint("pi_E")
    row = sum(np.asarray(d) for d in density.values())[np.argmin(np.abs(np.log(np.asarray(t) / 20)))]
    true = np.exp(np.interp(rng.random(300), np.cumsum(row) / row.sum(), np.log(np.asarray(y))))
    noise = 0.1 * rng.standard_normal((2, 300))
    seen = np.hypot(true + noise[0], noise[1])
    x = float(np.log(t[np.argmin(np.abs(np.log(np.asarray(t) / 20)))].to_value(u.day)))
    as_vector = [given.given(0, x, 1e-3, s, 0.1, True)[0] for s in seen]
    as_number = [given.given(0, x, 1e-3, s, 0.1, False)[0] for s in seen]
    assert stats.kstest(as_vector, "uniform").pvalue > 1e-3 > stats.kstest(as_number, "uniform").pvalue


def test_source_magnitudes(forecast, folded):
    edges = np.arange(13.0, 25.01, 0.5)
    share = folded.magnitude_shares(0, edges)
    assert share.sum() == pytest.approx(1.0) and share[edges[:-1] >= 20].sum() < 1e-9
    table, rng = draw_table(forecast, 9), np.random.default_rng(4)
    middle = 0.5 * (edges[1:] + edges[:-1])
    table["I_S"] = rng.choice(middle, len(table), p=share)
    assert compare(Sample.from_table(table), folded, simulations=100).tests["magnitude"].p > 0.01
    table["I_S"] = 17.0
    assert compare(Sample.from_table(table), folded, simulations=100).tests["magnitude"].p < 0.02


def test_scenarios_side_by_side(forecast, one, tmp_path):
    other = UNKICKED.replace(imf="kroupa2001_ballero2007", name="flat")
    result = compare_sample(one, [UNKICKED, other], forecast=forecast, simulations=0)
    d = result.differences
    assert max(x["total"] for x in d) == 0.0 and d[0] != d[1]
    a, b = result.comparisons
    assert d[1]["t_E"] - d[0]["t_E"] == pytest.approx(b.ln_likelihood["t_E"] - a.ln_likelihood["t_E"])
    assert len(result.to_table()) == 2 and len(result.to_dict()["scenarios"]) == 2
    assert a.to_table("test")["p"].mask.all() if hasattr(a.to_table("test")["p"], "mask") else True
    for by, n in (("bin", a.observed.size), ("field", 2), ("event", len(one))):
        table = a.to_table(by)
        assert len(table) == n and table.meta["scenario_hash"] == UNKICKED.hash
    assert sum(a.to_table()["observed"]) == len(one)


def test_without_a_campaign_there_are_shapes_only(one):
    scenario = UNKICKED.replace(sources="limit:I=20")
    c = compare_sample(one, scenario, simulations=20).comparisons[0]
    assert c.counts == "shape" and c.optical_depth is None and "sky" not in c.tests
    assert c.predicted.sum() == pytest.approx(len(one), rel=5e-3) and "shapes only" in c.notes[0]
    assert len(c.fields) == 2
    with pytest.raises(InputError, match="--campaign"):
        compare_sample(one, scenario, counts="absolute")


def test_events_are_where_they_are(forecast, folded, one):
    fields = forecast.campaign.fields
    assert set(assign(one.events, fields)) == {0, 1}
    table = draw_table(forecast, 3)
    table["l"][:3] = 10.0
    c = compare(Sample.from_table(table), folded, simulations=0)
    assert len(c.outside) == 3 and table["event"][0] in c.notes[0]
    table["l"] = 10.0
    with pytest.raises(InputError, match=r"none of its \d+ events lies in a field .*l = 10.00"):
        compare(Sample.from_table(table), folded)
    places, index = grouped(one.events)
    assert len(places) == 2 and index.min() == 0


def test_what_cannot_be(folded, one):
    with pytest.raises(InputError, match="did you mean 'absolute'"):
        compare(one, folded, counts="absolut")
    with pytest.raises(InputError, match="tail: -3 d"):
        compare(one, folded, tail=-3.0)
    with pytest.raises(InputError, match="no events"):
        compare(Sample((), "empty"), folded)
    with pytest.raises(InputError, match="states its own"):
        lensrate.compare_sample(one, UNKICKED, folded.survey, efficiency=folded.curves[0])


def test_geocentric_events_with_a_parallax_vector_become_heliocentric(folded):
    row = {"event": ["a"], "l": [1.0], "b": [-2.9], "t_E": [60.0], "t_E_err": [2.0], "t_0par": [55000.0],
           "pi_EN": [0.2], "pi_EE": [0.1], "pi_EN_err": [0.01], "pi_EE_err": [0.01]}  # fmt: skip
    table = Table(row)
    table.meta["frame"] = "geocentric"
    moved = compare(Sample.from_table(table), folded, simulations=0)
    assert abs(np.exp(moved.x[0]) - 60.0) > 1.0
    table.remove_columns(["pi_EN", "pi_EE", "pi_EN_err", "pi_EE_err"])
    stuck = compare(Sample.from_table(table), folded, simulations=0)
    assert np.exp(stuck.x[0]) == pytest.approx(60.0) and "no parallax components" in stuck.notes[0]


def test_the_invented_sample_lies_in_the_invented_fields():
    sample = Sample.read(data_folder() / "samples" / "marram_2031_2033.ecsv")
    assert sample.invented and len(sample) == 236 and not sample.notes
    fields = Campaign.read("marram").fields
    n = np.bincount(assign(sample.events, fields), minlength=len(fields))
    assert n.sum() == len(sample) and n.min() > 40
    assert sum("pi_EN" in e.solutions[0].measured for e in sample) == 42


def test_what_the_forecast_calls_impossible_counts_in_ln_L(forecast, folded):
    table = draw_table(forecast, 3, parallax=True)
    usual = compare(Sample.from_table(table), folded, simulations=0)
    # a field where nothing is expected, an event longer than the efficiency curve, a parallax of no lens
    table["t_E"][0], table["t_E_err"][0] = 5000.0, 1.0
    table["pi_EN"][1], table["pi_EN_err"][1], table["pi_EE_err"][1] = 500.0, 1e-3, 1e-3
    strange = compare(Sample.from_table(table), folded, simulations=0)
    assert any("1 events have a t_E of which the forecast finds none" in n for n in strange.notes)
    assert any("1 events have a pi_E" in n for n in strange.notes)
    # an outlier's term: the share over the span of ln t_E
    (place,) = [i for i, e in enumerate(strange.events) if e.t_E.value == 5000.0]
    g = folded.observed(strange.errors).sum(axis=1)
    own = np.interp(usual.x[place], LN_T, g[usual.field[place]]) / (g[usual.field[place]].sum() * STEP)
    lost = strange.ln_likelihood["t_E"] - usual.ln_likelihood["t_E"]
    assert lost == pytest.approx(np.log(1e-3 / np.log(1e8)) - np.log(own), abs=0.05)
    assert usual.ln_likelihood["pi_E"] - strange.ln_likelihood["pi_E"] > 5
    from dataclasses import replace

    none = replace(folded, rate=folded.rate * np.array([1.0, 0.0])[:, None, None])
    dark = compare(draw_sample(forecast, 3), none, simulations=0)
    assert dark.ln_likelihood["counts"] == -np.inf == dark.ln_likelihood["total"]
    assert any("ln L of the counts is minus infinity" in n for n in dark.notes)
    d = differences([dark, usual, dark])
    assert d[0]["total"] == -np.inf and d[1]["total"] == 0.0 and not any(np.isnan(v) for row in d for v in row.values())


def test_a_long_tail_by_class_is_the_long_tail(forecast, folded):
    from dataclasses import replace

    half = replace(folded, anchored=np.array([True, False]))
    for f in (folded, half):
        c = compare(draw_sample(forecast, 7), f, simulations=0, tail=60.0)
        assert c.tail_by_class.sum() == pytest.approx(c.tail.expected, rel=1e-9)
    assert c.counts == "mixed"


def write(path, columns, **meta):
    table = Table(columns)
    table.meta = {"per": "source", "includes": [], **meta}
    table.write(path, format="ascii.ecsv", overwrite=True)


def test_estimates_take_the_efficiency_of_the_fields_own_sources(tmp_path, forecast):
    # most sources are faint: a curve against I_S that finds bright ones only is nearly zero on average
    t, m = (a.ravel() for a in np.meshgrid([1e-3, 1e5], [14.0, 19.9]))
    write(tmp_path / "mag.ecsv", {"t_E": t, "I_S": m, "efficiency": np.where(m < 15, 1.0, 0.1)})
    old = forecast.campaign
    table = {"season": [{"start": "2031-01-01", "end": "2031-12-31"}], "efficiency": {"file": "mag.ecsv"},
             "field": [{"name": "A", "l": 1.0, "b": -2.9, "radius_deg": 0.5, "limit": "I=20", "extinction": {"I": 1.2},
                        "monitored_stars": 3e7}]}  # fmt: skip
    f = fold_campaign(Campaign.from_dict(table, tmp_path / "c.toml"), UNKICKED)
    assert old.fields[0].name == "A" and f.efficiency.max() < 0.2
    c = compare(draw_sample(forecast, 3), f, simulations=0)
    inside = [e for e in c.events]
    assert c.rate.value == pytest.approx(len(inside) / f.efficiency.max() / f.star_years.sum(), rel=1e-6)
    assert any("without I_S" in n for n in c.notes)


def test_of_degenerate_solutions_the_best_counts_wherever_it_stands(tmp_path, forecast):
    t, x = (a.ravel() for a in np.meshgrid([1e-3, 1e5], [0.0, 1.0]))
    write(tmp_path / "u.ecsv", {"t_E": t, "u_0": x, "efficiency": 1 - 0.9 * x})
    f = fold_campaign(Campaign.from_dict({**SEASON, "efficiency": {"file": "u.ecsv"}, "field": FIELDS},
                                         tmp_path / "c.toml"), UNKICKED)  # fmt: skip
    best, rng = draw_table(forecast, 3), np.random.default_rng(1)
    best["u_0"], best["I_S"], best["delta_chi2"] = rng.random(len(best)), rng.uniform(15, 20, len(best)), 0.0
    worse = best.copy()
    worse["u_0"], worse["I_S"], worse["delta_chi2"] = 0.99, 14.2, 30.0
    for table in (best, worse):
        table["solution"] = "best" if table is best else "worse"
    one, *both = (compare(Sample.from_table(vstack(t)), f, simulations=0)
                  for t in ([best], [best, worse], [worse, best]))  # fmt: skip
    for c in both:
        assert all(len(e.solutions) == 2 and e.best_solution.name == "best" for e in c.events)
        assert (c.rate, c.optical_depth) == (one.rate, one.optical_depth)
        assert c.tests["magnitude"].value == one.tests["magnitude"].value


def test_an_efficiency_against_u_0_goes_to_the_campaigns_limit(tmp_path):
    t, x = (a.ravel() for a in np.meshgrid([1e-3, 1e5], [0.0, 1.0]))
    write(tmp_path / "u.ecsv", {"t_E": t, "u_0": x, "efficiency": 1 - x})
    table = {"season": [{"start": "2031-01-01", "end": "2031-12-31"}], "efficiency": {"file": "u.ecsv"},
             "u_0_limit": 0.4, "field": [{"l": 1.0, "b": -2.9, "area_deg2": 1.0, "limit": "I=20",
                                          "extinction": {"I": 1.2}, "monitored_stars": 3e7}]}  # fmt: skip
    made = campaign(Campaign.from_dict(table, tmp_path / "c.toml"), UNKICKED)
    f = fold_campaign(made.campaign, forecast=made)
    np.testing.assert_allclose(f.expected(), made.expected.sum(axis=2), rtol=2e-3)


def test_an_efficiency_without_a_campaign_is_checked_like_one_with(tmp_path, one):
    scenario = UNKICKED.replace(sources="limit:I=20")
    for stated, words in (({"source_limit": "I=19"}, "one of limit:I=19"), ({"u_0_limit": 0.5}, "u_0_limit = 0.5")):
        write(tmp_path / "e.ecsv", {"t_E": [1.0, 300.0], "efficiency": [0.1, 0.2]}, **stated)
        with pytest.raises(InputError, match=words):
            compare_sample(one, scenario, efficiency=Efficiency.read(tmp_path / "e.ecsv"), simulations=0)
    t, m = (a.ravel() for a in np.meshgrid([1.0, 300.0], [14.0, 19.0]))
    write(tmp_path / "e.ecsv", {"t_E": t, "I_S": m, "efficiency": 0.0 * t + 0.5})
    with pytest.raises(InputError, match="depends on I_S"):
        curve = Efficiency.read(tmp_path / "e.ecsv")
        compare_sample(one, UNKICKED.replace(sources="clump"), efficiency=curve, simulations=0)
