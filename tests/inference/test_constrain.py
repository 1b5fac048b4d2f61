"""Inference: parts that add up to forecasts, likelihoods against direct sums and integrals, calibrated posteriors."""

from dataclasses import replace

import numpy as np
import pytest
from mocks import draw_table
from scipy import integrate, stats

from lensrate import InputError
from lensrate.events.fold import LN_T, STEP
from lensrate.events.observed import Sample
from lensrate.inference.calibrate import calibrate
from lensrate.inference.constrain import constrain, mass_limits
from lensrate.inference.data import _Joint, made, observed_data
from lensrate.inference.likelihood import Likelihood, Nuisances, moved, resloped
from lensrate.inference.mocks import mock
from lensrate.inference.parameters import PARAMETERS, Prior, parse_parameters
from lensrate.inference.planned import planned
from lensrate.inference.posterior import grid_posterior
from lensrate.inference.selection import STAGES, Selection
from lensrate.inference.templates import Templates
from lensrate.lensing.sampler import Sampler
from lensrate.remnants.kicks import parse_kick

NUMBERS = parse_parameters(["neutron_stars"])
MEASURED = {"neutron_star": 0.6, "black_hole": 0.8, "white_dwarf": 0.1, "star": 0.05}


def likelihood(templates, n=1, parameters=NUMBERS, **options):
    probe = Likelihood(templates, made(templates, [0], [3.0], [0.05]), parameters)
    data, _ = mock(templates, probe.part_weights([1.0] * len(parameters)), np.random.default_rng(n))
    return Likelihood(templates, data, parameters, **options)


@pytest.mark.parametrize("law, holes", [("igoshev2020", "momentum"), ("hobbs2005", "same"), ("maxwell:100", "none")])
def test_shares_of_parts_are_the_forecast(kicked, templates, law, holes):
    line = kicked.fields[0].sightline.reforecast(kicks=law, bh_kicks=holes)
    exposure = templates.exposure[0]
    for lens in kicked.classes:
        rows = templates.rows(lens)
        shares = np.ones(rows.size)
        if lens == "neutron_star":
            shares = templates.shares(lens, parse_kick(law))
        elif lens == "black_hole":
            own = parse_kick(law if holes != "none" else "none")
            shares = templates.shares(lens, own, momentum=holes == "momentum")
        rate = shares @ templates.rate[0, rows].sum(axis=1) * STEP / exposure
        # black holes' momentum kicks go by the mean mass of each of five groups
        assert rate == pytest.approx(line.lenses[lens].rate, rel=3e-3 if lens == "black_hole" else 1e-4), lens


def test_shifts_and_slopes(templates):
    rows = templates.rate[:, templates.stellar]
    later = moved(rows, 0.1, 1.1)
    total = rows.sum(axis=2)
    np.testing.assert_allclose(later.sum(axis=2)[total > 0], total[total > 0], rtol=2e-3)
    mean = [np.sum(r.sum(axis=(0, 1)) * LN_T) / r.sum() for r in (rows, later)]
    pivot = np.log(20.0)
    assert mean[1] == pytest.approx(pivot + 1.1 * (mean[0] - pivot) + 0.1, abs=2e-3)
    same, factor = resloped(templates, 0.0)
    np.testing.assert_allclose(same, rows)
    np.testing.assert_allclose(factor, 1.0)
    steep, factor = resloped(templates, 0.3)
    dwarfs = [i for i, p in enumerate(templates.parts) if p.lens == "brown_dwarf"]
    # more low-mass objects in the same stated mass: more brown dwarfs, fewer remnants
    assert steep[:, dwarfs].sum() > 1.2 * rows[:, dwarfs].sum() and np.all(factor < 1)


def test_without_nuisances_it_is_the_poisson_likelihood(templates):
    L = likelihood(templates, nuisances=Nuisances.fixed())
    theta = [2.0]
    w = L.part_weights(theta)
    density = np.tensordot(w, templates.rate[0], axes=1)
    d = L.data
    direct = 0.0
    for x, s in zip(d.x, d.sigma):
        kernel = stats.norm.pdf(LN_T, x, s)
        direct += np.log(np.sum(density * kernel) * STEP)
    mu = np.sum(density * templates.efficiency[0]) * STEP
    assert L.ln(theta) == pytest.approx(direct - mu, abs=0.05)
    shape = likelihood(templates, nuisances=Nuisances.fixed(), counts="shape")
    assert shape.ln(theta) == pytest.approx(direct - len(d) * np.log(mu), abs=0.05)


def test_a_fields_own_factor_is_integrated_over_its_gamma_prior(templates):
    wide = likelihood(templates, nuisances=Nuisances(0.0, 0.4, 0.0, 0.0, 0.0))
    plain = likelihood(templates, nuisances=Nuisances.fixed())
    mu, n, k = plain.terms(plain.remnants([1.0]), np.zeros(4))[1][0], len(plain.data), 0.4**-2
    top = n * np.log(n / mu) - n

    def part(f):
        return np.exp(n * np.log(f) - f * mu - top) * stats.gamma.pdf(f, k, scale=1 / k)

    whole = integrate.quad(part, 0.5, 1.6, limit=200)[0]
    base = plain.ln([1.0]) + mu
    assert wide.ln([1.0]) == pytest.approx(base + np.log(whole) + top, abs=1e-3)


@pytest.mark.parametrize("seasons", [0.25, 1.0, 4.0])
def test_numbers_far_from_those_expected_move_the_rate(templates, seasons):
    """A quarter, or four times, of the events that the forecast expects: the search ends at the maximum."""
    many = Templates.of(templates.forecast, seasons)
    data = likelihood(templates).data
    L = Likelihood(many, made(many, data.field, data.x, data.sigma), NUMBERS, Nuisances(0.3, 0.1, 0.0, 0.0, 0.0))
    ln, nu = L.marginal([1.0])
    fixed, rates = L.remnants([1.0]), np.linspace(-2.5, 2.5, 5001)
    rate, mu = L.terms(fixed, np.zeros(4))
    each = np.array([L._fields(mu, r) + L.ln_prior_nu([r, 0, 0, 0]) for r in rates]) + np.sum(np.log(rate))
    assert nu[0] == pytest.approx(rates[each.argmax()], abs=0.02)
    assert ln == pytest.approx(np.log(np.sum(np.exp(each - each.max())) * 1e-3) + each.max(), abs=0.02)


def test_laplace_against_quadrature(templates):
    sd = {"shift": 0.07, "stretch": 0.05}
    L = likelihood(templates, nuisances=Nuisances(0.0, 0.1, sd["shift"], sd["stretch"], 0.0))
    ln, nu = L.marginal([1.5])
    fixed = L.remnants([1.5])
    a, b = (np.linspace(nu[i] - 0.2, nu[i] + 0.2, 61) for i in (1, 2))
    table = np.empty((61, 61))
    for i, shift in enumerate(a):
        for j, stretch in enumerate(b):
            at = [0.0, shift, stretch, 0.0]
            rate, mu = L.terms(fixed, at)
            table[i, j] = np.sum(np.log(rate)) + L._fields(mu, 0.0) + L.ln_prior_nu(at)
    direct = np.log(np.sum(np.exp(table - table.max())) * (a[1] - a[0]) * (b[1] - b[0])) + table.max()
    assert ln == pytest.approx(direct, abs=0.15)
    assert abs(np.unravel_index(table.argmax(), table.shape)[0] - 30) <= 1


def test_joint_values_against_events_drawn_one_by_one(kicked, templates):
    f = kicked.fields[0]
    draws = Sampler.of(f.sightline).draw(400_000, 3, tilt="equal")
    t, s = 40.0, 0.1
    joint = _Joint(templates, 0)
    for pi, theta in (((0.1, 0.03, False), (0.6, 0.12)), ((0.15, 0.05, True), None), (None, (0.8, 0.15))):
        like = stats.norm.pdf(np.log(t), np.log(draws.t_E), s)
        if pi is not None and not pi[2]:
            like = like * stats.norm.pdf(pi[0], draws.pi_E, pi[1])
        if pi is not None and pi[2]:
            like = like * stats.rice.pdf(pi[0] / pi[1], draws.pi_E / pi[1]) / pi[1] / (2 * np.pi * pi[0])
        if theta is not None:
            like = like * stats.norm.pdf(theta[0], draws.theta_E, theta[1])
        value = joint.of(np.log(t), s, pi, theta)
        scenario = kicked.scenario
        for lens in kicked.classes:
            rows = templates.rows(lens)
            w = np.ones(rows.size)
            if lens in ("neutron_star", "black_hole"):
                w = templates.shares(lens, parse_kick(scenario.kicks), momentum=lens == "black_hole")
            mine = draws.lens_class == kicked.classes.index(lens)
            terms = (draws.weight * like)[mine] * templates.exposure[0]
            wanted, error = terms.sum(), np.sqrt(np.sum(terms**2))
            assert abs(w @ value[rows] - wanted) < 4 * error + 0.03 * wanted, (lens, pi, theta)


def test_an_event_of_unknown_parallax_is_one_of_its_timescale(templates):
    wide = _Joint(templates, 0).of(np.log(30.0), 0.05, (0.1, 30.0, False), None)
    plain = made(templates, [0], [np.log(30.0)], [0.05]).value[0]
    # the fastest bins send hardly a lens; their cells are few and the interpolations differ
    some = plain > 1e-3 * plain.max()
    ratio = wide[some] / plain[some]
    np.testing.assert_allclose(ratio, np.median(ratio), rtol=0.03)


def test_priors():
    for text in ("uniform:0.2,3", "log-uniform:0.2,5", "normal:1,0.4", "lognormal:1,0.3"):
        p = Prior.parse(text, 0.0)
        share = np.linspace(0.05, 0.95, 7)
        np.testing.assert_allclose(p.share(p.quantile(share)), share, atol=1e-9)
        values, weight = p.grid(40)
        assert weight.sum() == pytest.approx(1.0) and np.all(np.diff(values) > 0) and values[0] > 0
        assert Prior.parse(p.text, 0.0) == p


@pytest.mark.parametrize(
    "names, priors, words",
    [
        (["kick_scal"], [], "did you mean 'kick_scale'"),
        ([], [], "none given"),
        (["kick_scale", "kick_scale"], [], "given twice"),
        (["kick_scale"], ["neutron_stars=uniform:0,1"], "none of the parameters asked for"),
        (["kick_scale"], ["kick_scale"], "NAME=FORM:A,B"),
        (["kick_scale"], ["kick_scale=flat:0,1"], "prior of kick_scale: 'flat' is not known"),
        (["kick_scale"], ["kick_scale=uniform:3,1"], "3 must be below 1"),
        (["kick_scale"], ["kick_scale=uniform:-1,1"], "reaches outside 0"),
        (["kick_scale"], ["kick_scale=log-uniform:0,1"], "begins above 0"),
        (["kick_scale"], ["kick_scale=normal:1,0"], "width above 0"),
        (["kick_scale"], ["kick_scale=normal:-50,1"], "allows nothing"),
        (["slow_weight"], ["slow_weight=uniform:0,2"], "reaches outside 0 to 1"),
        (["kick_scale"], ["kick_scale=uniform:a,1"], "not understood"),
        (["kick_bins", "kick_scale"], [], "no other parameter of the kick law"),
    ],
)
def test_parameters_that_cannot_be(names, priors, words):
    with pytest.raises(InputError, match=words):
        parse_parameters(names, priors)


def test_selection():
    said = ["parallax:black_hole=0.6", "parallax:star=0.1", "mass:all=0.5"]
    s = Selection.parse(said, classes=["star", "black_hole"])
    assert s.weight("black_hole", "found") == pytest.approx(0.4)
    assert s.weight("black_hole", "parallax") == pytest.approx(0.6 * 0.5)
    assert s.weight("star", "mass") == pytest.approx(0.1 * 0.5) and s.kept("star") == 1.0
    assert Selection(s.parallax, listed="parallax").kept("star") == pytest.approx(0.1)
    # every end of the chain has some probability, and they add up
    assert sum(s.weight("star", r) for r in ("found", "parallax", "mass")) == pytest.approx(1.0)
    assert len(STAGES) == 3
    said = ("parallax:star=1.5", "paralax:star=0.5", "mass:stars=0.5", "mass=0.5", "mass:star=x", "mass:star=0.5")
    for bad in said:
        with pytest.raises(InputError, match="from 0 to 1|did you mean|write STAGE|no probability|not for black_hole"):
            Selection.parse([bad], classes=["star", "black_hole"])
    with pytest.raises(InputError, match="known: followed"):
        Selection(listed="seen")


def test_no_information_is_said_so(templates):
    empty = made(templates, np.zeros(0, dtype=int), np.zeros(0), np.zeros(0))
    result = grid_posterior({"a": Likelihood(templates, empty, NUMBERS, counts="shape")})
    got = result.learned["neutron_stars"]
    assert got.bits < 1e-6 and not got.constrained and "not constrained" in result.verdict("neutron_stars")
    np.testing.assert_allclose(got.quantiles, got.prior_quantiles, rtol=1e-2)


def test_bounds_of_the_prior_are_named(templates):
    """A prior that ends where the sample still allows everything, and one that does not."""
    many = Templates.of(templates.forecast, 20.0)
    for prior, wanted in (("log-uniform:0.01,0.7", ["upper"]), ("log-uniform:0.01,100", [])):
        parameters = parse_parameters(["neutron_stars"], [f"neutron_stars={prior}"])
        probe = Likelihood(many, made(many, [0], [3.0], [0.05]), NUMBERS)
        data, _ = mock(many, probe.part_weights([1.0]), np.random.default_rng(3), measured=MEASURED)
        found = grid_posterior({"a": Likelihood(many, data, parameters)})
        assert found.learned["neutron_stars"].constrained
        said = [n for n in found.cautions() if n.startswith("neutron_stars: the posterior does not fall")]
        assert [end for end in ("lower", "upper") if any(f"{end} end" in n for n in said)] == wanted
        assert found.to_dict()["notes"] == found.cautions() == found.meta()["notes"]


def test_timescales_alone_hardly_see_neutron_stars_and_masses_do(templates):
    """5,000 events: what stars known perfectly would give is not what a sample gives."""
    many = Templates.of(templates.forecast, 5000 / templates.forecast.by_class()[-1])
    bare = planned(many, NUMBERS, Nuisances(0.3, 0.1, 0.0, 0.0, 0.0))
    free = planned(many, NUMBERS)
    share = bare.events["neutron_star"] / sum(bare.events.values())
    narrow, wide = share * bare.sigma["neutron_stars"], share * free.sigma["neutron_stars"]
    assert 0.01 < narrow < 0.09 and wide > 2 * narrow and wide > 3 * share
    assert "not constrained" in free.words("neutron_stars")
    masses = planned(many, NUMBERS, measured=MEASURED)
    assert masses.sigma["neutron_stars"] < 0.3 * free.sigma["neutron_stars"]
    assert "a factor" in masses.words("neutron_stars")
    # ten times the exposure: no worse, and no better than ten times the information
    more = planned(Templates.of(templates.forecast, 10 * many.seasons), NUMBERS, measured=MEASURED)
    assert 0.99 < np.sqrt(10) * more.sigma["neutron_stars"] / masses.sigma["neutron_stars"] < np.sqrt(10)


def test_fisher_errors_are_those_of_posteriors(templates):
    many = Templates.of(templates.forecast, 5.0)
    made_ = planned(many, NUMBERS, measured=MEASURED, mocks=8, points=31)
    width = made_.mocks["neutron_stars"]["half_width_95"]
    assert width == pytest.approx(1.96 * made_.sigma["neutron_stars"], rel=0.35)


def test_calibrated(templates):
    made_ = calibrate(templates, NUMBERS, 40, seed=2, points=21, measured=MEASURED)
    assert stats.kstest(made_.share[:, 0], "uniform").pvalue > 1e-3
    for level in (0.68, 0.95):
        inside, error = made_.coverage(level)
        assert abs(inside[0] - level) < 3.5 * error[0]
    assert made_.bits.mean() > 0.2


@pytest.mark.slow
def test_calibrated_in_two_parameters(templates):
    many = Templates.of(templates.forecast, 3.0)
    two = parse_parameters(["kick_scale", "neutron_stars"])
    made_ = calibrate(many, two, 150, seed=5, points=13, measured=MEASURED)
    for i in range(2):
        assert stats.kstest(made_.share[:, i], "uniform").pvalue > 1e-3
        for level in (0.68, 0.95):
            inside, error = made_.coverage(level)
            assert abs(inside[i] - level) < 3.5 * error[i]


CHAIN = {"parallax": {"star": 0.15, "brown_dwarf": 0.05, "white_dwarf": 0.3, "neutron_star": 0.6, "black_hole": 0.8},
         "followed": {"star": 0.2, "brown_dwarf": 0.1, "white_dwarf": 0.5, "neutron_star": 0.7, "black_hole": 0.9},
         "mass": {"star": 0.8, "brown_dwarf": 0.8, "white_dwarf": 0.8, "neutron_star": 0.8,
                  "black_hole": 0.8}}  # fmt: skip


@pytest.mark.parametrize("listed", ["found", "followed"])
def test_calibrated_with_the_stages_of_a_sample(templates, listed):
    """Posteriors hold the truth as often as they say where parallax, follow-up and mass depend on the class."""
    many = Templates.of(templates.forecast, 4.0)
    chain = Selection(**CHAIN, listed=listed)
    made_ = calibrate(many, NUMBERS, 60, seed=3, points=21, selection=chain)
    assert made_.even()[0][0] > 1e-3 and made_.bits.mean() > 0.3
    for level in (0.68, 0.95):
        inside, error = made_.coverage(level)
        assert abs(inside[0] - level) < 3.5 * error[0]


def test_the_stages_of_drawn_events():
    """Shares of the events that got so far are the probabilities that the likelihood takes."""
    rng, lens = np.random.default_rng(1), np.array(["star", "black_hole"] * 20_000)
    for listed in ("found", "parallax", "followed", "mass"):
        s = Selection(**CHAIN, listed=listed)
        reached, kept = s.draw(lens, rng)
        for c in ("star", "black_hole"):
            mine = lens == c
            assert kept[mine].mean() == pytest.approx(s.kept(c), abs=0.012)
            for r in np.unique(reached[kept]):
                share = np.mean((reached == r) & kept & mine) / np.mean(mine)
                assert share == pytest.approx(s.weight(c, r), abs=0.012), (listed, c, r)


def test_a_sample_from_the_event_sampler(kicked):
    sample = Sample.from_table(draw_table(kicked, 4, parallax=True)[:100])
    result = constrain(sample, ["neutron_stars"], forecast=kicked, points=31, counts="shape")
    assert result.events == len(sample) and result.expected == pytest.approx(kicked.by_class()[-1], rel=3e-3)
    low, high = result.quantile(0, [0.005, 0.995])
    assert low < 1.0 < high
    plain = constrain(sample, ["neutron_stars"], forecast=kicked, points=31, counts="shape", only_t_E=True)
    assert plain.learned["neutron_stars"].bits < 0.3
    table, draws = result.to_table(), result.samples_table(500)
    assert table.meta["scenario_hash"] == kicked.scenario.hash and len(draws) == 500
    np.testing.assert_allclose(
        np.median(np.log(result.samples(20_000)[:, 0])), np.log(result.quantile(0, 0.5)), atol=0.08
    )
    assert result.upper_limit("neutron_stars") < 20
    both = constrain(sample, ["neutron_stars"], forecast=kicked, points=15, only_t_E=True,
                     galaxies=[kicked.scenario.replace(name="other", kicks="hobbs2005")])  # fmt: skip
    assert sum(both.cases.values()) == pytest.approx(1.0) and len(both.cases) == 2


def test_what_cannot_be_constrained(kicked, templates):
    sample = Sample.from_table(draw_table(kicked, 4))
    with pytest.raises(InputError, match="--campaign FILE"):
        constrain(sample)
    with pytest.raises(InputError, match="no events"):
        constrain(Sample((), "none"), forecast=kicked)
    with pytest.raises(InputError, match="no slow component"):
        constrain(sample, ["slow_weight"], forecast=kicked, scenario=kicked.scenario.replace(kicks="hobbs2005"))
    with pytest.raises(InputError, match="with 'mass', which this one has not"):
        observed_data(sample, templates, Selection(listed="mass"))
    with pytest.raises(InputError, match="up to three"):
        constrain(sample, [*PARAMETERS][:4], forecast=kicked, method="grid")
    with pytest.raises(InputError, match="a width from 0"):
        Nuisances(shift=-1.0)
    table = draw_table(kicked, 4)
    table["l"] += 20
    with pytest.raises(InputError, match="none of its"):
        constrain(Sample.from_table(table), forecast=kicked)


def test_masses_with_measurements_are_refused_and_without_they_move(kicked):
    sample = Sample.from_table(draw_table(kicked, 4, parallax=True)[:20])
    with pytest.raises(InputError, match="timescales-only"):
        constrain(sample, ["remnant_mass"], forecast=kicked, points=5)
    made_ = constrain(sample, ["remnant_mass"], forecast=kicked, points=9, only_t_E=True)
    assert made_.learned["remnant_mass"].bits < 0.5


def test_timescales_alone_are_heliocentric_and_know_their_stage(kicked, templates):
    table = draw_table(kicked, 4, parallax=True)[:30]
    sample = Sample.from_table(table)
    events = [replace(e, frame="geocentric", t_0par=63000.0) for e in sample.events]
    geo = replace(sample, events=tuple(events))
    whole, alone = observed_data(geo, templates), observed_data(geo, templates, only_t_E=True)
    np.testing.assert_array_equal(whole.x, alone.x)
    assert whole.full.any() and not alone.full.any()
    assert np.abs(alone.x - observed_data(sample, templates).x).max() > 0.01
    chain = Selection(parallax=dict.fromkeys(templates.classes, 0.2) | {"black_hole": 0.9})
    weight = observed_data(sample, templates, chain, only_t_E=True).weight
    holes = templates.rows("black_hole")
    seen = np.array(["pi_EN" in e.solutions[0].measured for e in sample.events])
    np.testing.assert_allclose(weight[:, holes[0]], np.where(seen, 0.9, 0.1))


def test_masses_of_mock_samples_move(templates):
    mass, many = parse_parameters(["remnant_mass"]), Templates.of(templates.forecast, 400.0)
    L = Likelihood(many, made(many, [0], [3.0], [0.05]), mass, counts="absolute")
    w, rng = L.part_weights([1.0]), np.random.default_rng(2)
    for factor in (0.6, 1.0, 1.7):
        _, lens = mock(many, w, rng, ln_mass=float(np.log(factor)))
        seen, wanted = np.sum(np.isin(lens, ["neutron_star", "black_hole"])), L.remnants([factor])[1].sum()
        assert abs(seen - wanted) < 4 * np.sqrt(wanted), factor
    # what masses say of masses, and what cannot be inferred
    alone, seen = planned(many, mass), planned(many, mass, measured={"neutron_star": 0.5, "black_hole": 0.5})
    assert seen.sigma["remnant_mass"] < 0.2 * alone.sigma["remnant_mass"]
    n = 0.5 * (seen.events["neutron_star"] + seen.events["black_hole"])
    assert seen.sigma["remnant_mass"] < 3 * 0.2 / np.sqrt(n)
    with pytest.raises(InputError, match="leave out the mock samples"):
        planned(many, mass, measured={"black_hole": 0.5}, mocks=2)
    with pytest.raises(InputError, match="reaches outside 0.5 to 2"):
        parse_parameters(["remnant_mass"], ["remnant_mass=log-uniform:0.2,5"])
    assert np.isnan(planned(templates, parse_parameters(["slow_weight"])).seasons_for_two["slow_weight"])


def test_limits_on_a_class_of_ones_own(kicked):
    scenario = kicked.scenario.replace(
        lens_class={"dark": {"mass_function": {"kind": "delta", "M": 0.1}, "rides_on": "halo", "mass_fraction": 1.0}}
    )
    from lensrate.surveys.reweighted import reweighted

    forecast = reweighted(kicked, scenario)
    sample = Sample.from_table(draw_table(kicked, 6))
    limits = mass_limits(sample, forecast, "dark", [1e-3, 0.3, 3e4])
    # too few to be seen at all: said so, and no more than the whole
    assert limits.constrained[0] and not limits.constrained[2] and limits.limit[2] == pytest.approx(0.95, abs=0.01)
    assert limits.made["nuisances"]["rate"] == 0.3 and limits.made["prior"] == "uniform:0,1"
    assert np.all(limits.limit > 0) and np.all(np.isfinite(limits.limit)) and limits.norm == "mass_fraction"
    # three events expected and none seen is the limit of a clean search; this one has a background
    assert np.all((limits.limit * limits.expected)[limits.constrained] > 2.0)
    with pytest.raises(InputError, match="did you mean 'dark'"):
        mass_limits(sample, forecast, "drak", [1.0])
    with pytest.raises(InputError, match="above 0"):
        mass_limits(sample, forecast, "dark", [-1.0])


def test_the_stars_slopes_are_those_of_the_sums(templates):
    """Analytic slopes of rates and numbers against differences; the kernel against interpolated tables."""
    L = likelihood(templates, n=4)
    fixed, nu = L.remnants([1.3]), np.array([0.1, 0.031, -0.021, 0.15])
    rate, mu, rate_slope, mu_slope = L._terms_and_slopes(fixed, nu)
    stellar, factor = resloped(templates, nu[3])
    rows = moved(stellar.sum(axis=1), nu[1], np.exp(nu[2]))
    wanted = np.sum(rows * templates.efficiency, axis=1) * STEP + factor * fixed[1] + fixed[3]
    np.testing.assert_allclose(mu, wanted, rtol=1e-3)
    for j in range(3):
        h = 1e-6
        up, down = nu.copy(), nu.copy()
        up[j + 1] += h
        down[j + 1] -= h
        (r1, m1), (r0, m0) = L.terms(fixed, up), L.terms(fixed, down)
        np.testing.assert_allclose(mu_slope[j], (m1 - m0) / (2 * h), rtol=1e-4, atol=1e-4 * mu.max())
        # a node that crosses a cell's edge within h is rare
        np.testing.assert_allclose(np.median(rate_slope[j] - (r1 - r0) / (2 * h)), 0.0, atol=1e-6 * rate.max())
