"""Rate and timescale distribution against nested adaptive quadrature by scipy, written with other formulas."""

import numpy as np
import pytest
from scipy.integrate import quad
from scipy.special import erfc

from lensrate.lensing import distributions, rates
from lensrate.lensing.quadrature import Numerics
from lensrate.scenario import Scenario, resolve
from lensrate.units import DAYS_PER_YEAR, KAPPA, MAS

PHI = 2 * np.pi * (np.arange(192) + 0.5) / 192
LENSES = {"thin_disc_old": 3, "bulge": 5}


def ready(l, b, sources, **numerics):
    scenario = Scenario.read("default").replace(sources=sources)
    model = resolve(scenario)
    line = model.galaxy.sightline(np.radians(l), np.radians(b))
    return rates.prepare(
        model, line, model.sources.toward(np.radians(l), np.radians(b), model.galaxy), Numerics(**numerics)
    )


def on_circle(lens, src):
    """Quadratic form a v^2 - b v + c0 of the relative motion's Gaussian on each direction, and its normalisation."""
    m = lens[1:3] - src[1:3]
    c = lens[3:6] + src[3:6]
    inverse = np.linalg.inv(np.array([[c[0], c[1]], [c[1], c[2]]]))
    e = np.array([np.cos(PHI), np.sin(PHI)])
    a = 0.5 * np.einsum("ip,ij,jp->p", e, inverse, e)
    b = m @ inverse @ e
    return a, b, 0.5 * m @ inverse @ m, np.sqrt(np.linalg.det(inverse)) / (2 * np.pi)


def mean_speed(lens, src):
    """int v^2 N2 dv dphi with the radial integral in closed form (the kernel projects on a half circle instead)."""
    a, b, c0, norm = on_circle(lens, src)
    q = b / (2 * a)
    tail = 0.5 * np.sqrt(np.pi / a) * erfc(-b / (2 * np.sqrt(a)))
    radial = q / (2 * a) * np.exp(-c0) + (1 / (2 * a) + q * q) * tail * np.exp(b * b / (4 * a) - c0)
    return norm * radial.mean() * 2 * np.pi


def density_of_log_speed(mu, lens, src):
    a, b, c0, norm = on_circle(lens, src)
    return mu**3 * norm * np.exp(b * mu - a * mu * mu - c0).mean() * 2 * np.pi


def nested(line, i, sources, term, rel=1e-5):
    """int dD_S W_S int dD_L n_L D_L^2 2 theta_E term(theta_E, lens, source) by scipy, split at the model's kinks."""
    galaxy = line.model.galaxy
    kinks = [k for k in line.edges if 0 < k < 40]

    def inner(D_S):
        rows = galaxy.profile(line.line, np.array([D_S]))[:, :, 0]
        weight = line.sources.weights(np.array([D_S]), rows[0][:, None])[:, 0]

        def integrand(t):
            # the square root at both ends is taken out
            D_L = D_S * np.sin(t) ** 2
            jacobian = 2 * D_S * np.sin(t) * np.cos(t)
            lens = galaxy.profile(line.line, np.array([D_L]))[:, i, 0]
            theta_E = np.sqrt(KAPPA * (1 / D_L - 1 / D_S))
            total = sum(weight[s] * term(theta_E, lens, rows[:, s]) for s in sources)
            return jacobian * lens[0] * D_L**2 * 2 * theta_E * total

        points = [np.arcsin(np.sqrt(k / D_S)) for k in kinks if k < D_S]
        return quad(integrand, 1e-4, np.pi / 2 - 1e-4, points=points or None, epsrel=0.3 * rel, limit=200)[0]

    total = 0.0
    for low, high in zip([0.05, *kinks], kinks):
        total += quad(inner, low, high, epsrel=rel, epsabs=1e-9 * max(total, 1e-300))[0]
    return total * MAS**2 / line.norm


@pytest.mark.slow
@pytest.mark.parametrize("name", LENSES)
def test_rate(name):
    line = ready(1.0, -3.9, "clump")
    _, gamma, _ = rates.moments(line)
    wanted = nested(line, LENSES[name], [5], lambda theta_E, lens, src: mean_speed(lens, src))
    assert gamma[LENSES[name], 5] == pytest.approx(wanted, rel=1e-4)


@pytest.mark.slow
@pytest.mark.parametrize("name", LENSES)
@pytest.mark.parametrize("days", [2.0, 20.0, 150.0])
def test_timescales(name, days):
    line = ready(1.0, -3.9, "clump", step_dex=0.025, nodes=8, directions=4.0)
    grid, T = rates.rate_density(line)
    t = distributions.timescale_grid(grid)
    k = np.argmin(np.abs(np.log(t / days)))
    pdf = distributions.unit_timescales(grid, T)[LENSES[name], k]
    years = t[k] / DAYS_PER_YEAR
    # the nuclear disc supplies clump giants too, 1e-6 of them here
    wanted = nested(
        line, LENSES[name], [5], lambda theta_E, lens, src: density_of_log_speed(theta_E / years, lens, src)
    )
    assert pdf == pytest.approx(wanted, rel=1e-4)
