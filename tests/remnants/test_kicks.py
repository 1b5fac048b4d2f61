"""Natal-kick laws: one contract for every form and published set."""

import numpy as np
import pytest
from scipy import stats
from scipy.integrate import quad

from lensrate.datafiles import names
from lensrate.errors import InputError
from lensrate.remnants.kicks import parse_kick
from lensrate.verify.remnants import bound_fraction

SMOOTH = [*names("kicks"), "maxwell:100", "two-maxwell:30,400,0.25", "lognormal:5,0.4"]
EDGES = np.array([0, 5, 10, 20, 40, 60, 90, 130, 180, 240, 310, 400, 520, 700, 1000, 1500.0])


@pytest.mark.parametrize("text", SMOOTH)
class TestContract:
    def test_density(self, text):
        law = parse_kick(text)
        top = float(law.quantile(1 - 1e-12))
        knots = list(law.quantile([1e-3, 0.1, 0.5, 0.9]))
        assert quad(law.pdf, 0, top, points=knots, limit=400)[0] == pytest.approx(1, abs=1e-9)
        mean = quad(lambda v: v * law.pdf(v), 0, top, points=knots, limit=400)[0]
        assert law.mean() == pytest.approx(mean, rel=1e-8)
        share = quad(law.pdf, 0, 150, points=[1, 20, 60], limit=400)[0]
        assert law.cdf(150.0) == pytest.approx(share, abs=1e-9)
        assert law.pdf(0.0) == 0 == law.cdf(0.0) == law.cdf(-3.0)

    def test_quantile_is_the_inverse(self, text):
        law, p = parse_kick(text), np.linspace(0.001, 0.999, 57)
        np.testing.assert_allclose(law.cdf(law.quantile(p)), p, rtol=1e-12)
        assert law.median() == pytest.approx(law.quantile([0.5])[0])
        assert law.quantile(0.0) == 0 and law.quantile(1.0) == np.inf
        with pytest.raises(InputError, match="within 0-1"):
            law.quantile(1.1)

    def test_sample_follows_the_law(self, text):
        law = parse_kick(text)
        speeds = law.sample(20_000, np.random.default_rng(5))
        assert stats.kstest(speeds, law.cdf).pvalue > 1e-3
        np.testing.assert_array_equal(speeds, law.sample(20_000, np.random.default_rng(5)))

    def test_scaled(self, text):
        law, v = parse_kick(text), np.array([10.0, 90.0, 400.0])
        slow = law.scaled(0.2)
        np.testing.assert_allclose(slow.cdf(0.2 * v), law.cdf(v), rtol=1e-12)
        assert slow.mean() == pytest.approx(0.2 * law.mean(), rel=1e-12)
        assert parse_kick(slow.text).values == slow.values  # the text says it all
        np.testing.assert_allclose(parse_kick(slow.text).cdf(v), slow.cdf(v), rtol=1e-14)

    def test_bins(self, text):
        law = parse_kick(text)
        unkicked, inside, above = law.bin_weights(EDGES)
        assert unkicked == 0 and np.all(inside >= 0)
        assert inside.sum() + above == pytest.approx(1, abs=1e-14)
        assert inside[6] == pytest.approx(quad(law.pdf, 90, 130)[0], rel=1e-8)
        assert law.bin_weights(EDGES[3:])[0] == pytest.approx(law.cdf(20.0))

    def test_references(self, text):
        law = parse_kick(text)
        assert parse_kick(law.text) == law and parse_kick(law) is law
        assert bool(law.references) == (":" not in text)


@pytest.mark.parametrize("text", ["hobbs2005", "igoshev2020", "disbergmandel2025"])
def test_bound_fraction_against_quadrature(text):
    """Over isotropic directions the bound share at one speed is closed; the law's density does the rest."""
    law, circular, escape = parse_kick(text), 233.0, 528.0

    def bound(w):
        return np.clip(0.5 * (1 + (escape**2 - circular**2 - w**2) / (2 * circular * w)), 0, 1)

    expected = quad(lambda w: bound(w) * law.pdf(w), 1e-6, escape + circular, points=[escape - circular], limit=200)[0]
    assert bound_fraction(law, circular, escape, draws=200_000) == pytest.approx(expected, abs=5 * 0.5 / 200_000**0.5)


def test_fixed_speed_is_shared_between_bins():
    middles = np.concatenate([[0], 0.5 * (EDGES[1:] + EDGES[:-1])])
    for speed in (1.0, 2.5, 33.0, 205.0, 1249.0):
        unkicked, inside, above = parse_kick(f"fixed:{speed}").bin_weights(EDGES)
        assert above == 0 and unkicked + inside.sum() == pytest.approx(1)
        assert inside @ middles[1:] == pytest.approx(speed)
        assert np.count_nonzero(inside) <= 2
    assert parse_kick("fixed:1400").bin_weights(EDGES).inside[-1] == 1
    assert parse_kick("fixed:1600").bin_weights(EDGES).above == 1
    assert parse_kick("fixed:0").bin_weights(EDGES).unkicked == 1


def test_no_kick():
    law = parse_kick("none")
    assert law.mean() == 0 == law.median() and law.cdf(0) == 1 and law.scaled(0.3) == law
    assert law.bin_weights(EDGES).unkicked == 1
    assert np.all(law.sample(5, np.random.default_rng(0)) == 0)
    with pytest.raises(InputError, match="no density"):
        law.pdf(3)
    assert parse_kick("fixed:80").scaled(0.5).mean() == 40 == parse_kick("fixed:80").scaled(0.5).quantile(0.2)


@pytest.mark.parametrize(
    "text, match",
    [
        ("hobs2005", "did you mean 'hobbs2005'"),
        ("maxwel:3", "did you mean 'maxwell'"),
        ("maxwell", "'maxwell:SIGMA' is needed"),
        ("maxwell:1,2", "has 2 numbers"),
        ("maxwell:fast", "not a number"),
        ("maxwell:nan", "SIGMA is nan"),
        ("maxwell:0", "must be at least 1e-06"),
        ("maxwell:-5", "must be at least 1e-06"),
        ("two-maxwell:50,300,1.2", "WEIGHT1 is 1.2"),
        ("two-maxwell:50,300", "SIGMA1,SIGMA2,WEIGHT1"),
        ("lognormal:300,0.5", "MU is 300"),
        ("fixed:-1", "SPEED is -1"),
        ("fixed:1e9", "at most 100000"),
        ("none:3", "has 1 numbers"),
        ("", "is not known"),
    ],
)
def test_refused(text, match):
    with pytest.raises(InputError, match=match):
        parse_kick(text)


def test_refused_arguments():
    law = parse_kick("hobbs2005")
    for factor in (0, -1, np.nan):
        with pytest.raises(InputError, match="factor"):
            law.scaled(factor)
    for edges in ([0], [5, 3], [-1, 4], [[0, 1]]):
        with pytest.raises(InputError, match="rising speeds"):
            law.bin_weights(edges)
