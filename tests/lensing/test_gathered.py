"""Sources gathered behind each lens: against the sightline's own two rules, which gather nothing."""

import numpy as np
import pytest

from lensrate.kernels.profile import interpolate_rows
from lensrate.lensing import gathered, rates
from lensrate.scenario import Scenario, resolve
from lensrate.scenario.numerics import Numerics


def line(l, b, **changes):
    model = resolve(Scenario.read("default").replace(**changes))
    l, b = np.radians(l), np.radians(b)
    return rates.prepare(model, model.galaxy.sightline(l, b), model.sources.toward(l, b, model.galaxy), Numerics())


def both_rules(ready):
    tau, gamma, _ = rates.moments(ready)
    stellar = np.array([tau.sum(axis=1), gamma.sum(axis=1), np.zeros(len(tau))])
    return np.concatenate([stellar, rates.kicked_moments(ready)], axis=1)


def by_class(ready, found):
    """Optical depth, rate and its error by class."""
    spectra = ready.model.spectra()
    mass, root = (np.array([[0.0 if s is None else s.moment(p) for s in row] for row in spectra]) for p in (1.0, 0.5))
    return mass @ found[0], root @ found[1], np.hypot.reduce(root * found[2], axis=1)


@pytest.mark.parametrize(
    "l, b, most",
    [(1.0, -3.9, 1e-3), (5.0, 6.0, 1e-3), (30.0, 0.5, 1e-3), (280.5, -32.9, 1e-3), (0.0, -0.5, 2e-3), (0.0, 0.0, 2e-3)],
)
def test_every_class_agrees_with_the_ungathered_rules(l, b, most):
    ready = line(l, b)
    wanted, found = (by_class(ready, rule(ready)) for rule in (both_rules, gathered.moments))
    np.testing.assert_allclose(found[0], wanted[0], rtol=most)
    np.testing.assert_allclose(found[1], wanted[1], rtol=most)
    np.testing.assert_allclose(found[2][3:], wanted[2][3:], rtol=0.02)


def test_sources_at_one_distance_are_not_gathered():
    ready = line(1.0, -3.9, sources="distance:8")
    np.testing.assert_array_equal(gathered.moments(ready), both_rules(ready))


def test_more_bins_change_nothing(monkeypatch):
    ready = line(2.0, -2.5)
    coarse = by_class(ready, gathered.moments(ready))
    for name, value in (("_BINS", 32), ("_STAR_BINS", 64), ("_CUT", 0.0), ("_DIRECTIONS", 32)):
        monkeypatch.setattr(gathered, name, value)
    fine = by_class(ready, gathered.moments(ready))
    np.testing.assert_allclose(coarse[0], fine[0], rtol=1e-12)
    np.testing.assert_allclose(coarse[1], fine[1], rtol=5e-4)


def test_kicked_lenses_near_the_centre_see_every_panel_of_sources(monkeypatch):
    # the nuclear disc is thinner than panels that may be joined elsewhere
    ready = line(0.0, -0.5)
    tau = rates.kicked_moments(ready)[0]
    monkeypatch.setattr(rates, "_joined", lambda edges: edges)
    np.testing.assert_allclose(tau, rates.kicked_moments(ready)[0], rtol=1e-12)


def test_velocities_are_interpolated_and_proper_motions_follow():
    # lenses of one velocity: mu = v / D at every distance, between the points of the table too
    step, D = 0.03, np.array([0.004, 0.03, 0.042, 0.051, 0.3, 1.234, 2.9])
    at = step * np.arange(1, 101)
    v, C = np.array([200.0, -30.0]), np.array([400.0, 25.0, 900.0])
    table = np.array([np.ones_like(at), *(v[:, None] / at), *(C[:, None] / at**2)])[:, None]
    out = np.empty((6, 1, D.size))
    interpolate_rows(step, table, D, out)
    np.testing.assert_allclose(out[1:3, 0] * D, v[:, None] * np.ones_like(D), rtol=1e-12)
    np.testing.assert_allclose(out[3:, 0] * D**2, C[:, None] * np.ones_like(D), rtol=1e-12)
