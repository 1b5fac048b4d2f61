"""Initial mass functions: every shipped one keeps the contract, and the closed forms agree with scipy's quadrature."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.integrate import quad

from lensrate.errors import InputError
from lensrate.remnants.imf import Imf


@pytest.fixture(params=Imf.names())
def imf(request):
    return Imf.read(request.param)


def test_contract(imf):
    lo, hi = imf.breaks[0], imf.breaks[-1]
    assert imf.mass(lo, hi) == pytest.approx(1, rel=1e-12)
    assert imf.references
    for power, call in ((0, imf.number), (1, imf.mass)):
        a, b = 0.3 * lo + 0.7 * 0.2, 17.0
        inner = [x for x in imf.breaks if a < x < b]
        numeric = quad(lambda m, p=power: float(m**p * imf.density(m)), a, b, points=inner, epsrel=1e-10, limit=200)[0]
        assert call(a, b) == pytest.approx(numeric, rel=1e-8)
        assert call(a, b) + call(b, hi) == pytest.approx(call(a, hi), rel=1e-12)
    for join in imf.breaks[1:-1]:
        assert imf.density(join * (1 - 1e-10)) == pytest.approx(imf.density(join), rel=1e-8)
    assert imf.density(0.5 * lo) == 0 == imf.density(2 * hi)
    assert imf.number(2 * hi, 3 * hi) == 0
    m, dn = imf.nodes([0, 0.08, 1.0, 1e4], 24)
    assert np.all(dn > 0) and np.sum(dn) == pytest.approx(imf.number(lo, hi), rel=1e-10)
    assert np.sum(dn * m) == pytest.approx(1, rel=1e-10)


def test_cut_keeps_the_shape(imf):
    cut = imf.between(0.2, 3.0)
    m = np.array([0.25, 0.9, 1.1, 2.9])
    ratio = cut.density(m) / imf.density(m)
    np.testing.assert_allclose(ratio, 1 / imf.mass(0.2, 3.0), rtol=1e-10)


@settings(derandomize=True, max_examples=40)
@given(st.lists(st.floats(-1.0, 4.0), min_size=1, max_size=4))
def test_any_broken_power_law_is_normalised(slopes):
    imf = Imf("mine", np.geomspace(0.01, 100, len(slopes) + 1), slopes)
    m, dn = imf.nodes([0.01, 100], 60)
    assert np.sum(m * dn) == pytest.approx(1, rel=1e-8)
    assert imf.number(0.01, 100) == pytest.approx(np.sum(dn), rel=1e-8)


@pytest.mark.parametrize(
    "breaks, slopes, shape, match",
    [
        ((0.1,), (), None, "at least two"),
        ((0.1, 0.1), (2.3,), None, "must rise"),
        ((0.0, 1.0), (2.3,), None, "positive"),
        ((0.1, 1.0), (2.3, 1.0), None, "1 finite slopes"),
        ((0.1, float("nan")), (2.3,), None, "positive"),
        ((0.1, 1.0, 9.0), (2.3,), (0.2, -1.0), "lognormal"),
    ],
)
def test_refused(breaks, slopes, shape, match):
    with pytest.raises(InputError, match=match):
        Imf("mine", breaks, slopes, lognormal=shape)


def test_unknown_names_and_keys(tmp_path):
    with pytest.raises(InputError, match="did you mean 'kroupa2001'"):
        Imf.read("kroupa2010")
    own = tmp_path / "own.toml"
    own.write_text('kind = "power"\nreference = "me"\nbreaks = [0.1, 1, 100]\nslope = [1.3, 2.3]\n')
    with pytest.raises(InputError, match="did you mean 'slopes'"):
        Imf.read(str(own))
    own.write_text('kind = "power"\nreference = "me"\nbreaks = [0.1, 1, 100]\nslopes = [1.3, 2.3]\n')
    assert Imf.read(str(own)).slopes == (1.3, 2.3)
    with pytest.raises(InputError, match="nothing between"):
        Imf.read("kroupa2001").between(200, 300)
