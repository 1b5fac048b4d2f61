"""Kick of one lens: linear in the law's shares, the classes' sums those of the odds."""

from dataclasses import replace
from functools import cache

import numpy as np
import pytest

from lensrate.cli.followup import _chance, report_kick
from lensrate.errors import InputError
from lensrate.events.kick import kick_posterior
from lensrate.events.latent import _exact
from lensrate.events.observed import Measure, Observed, Solution
from lensrate.events.odds import OUTLIER, event_rates
from lensrate.remnants.kicks import parse_kick
from lensrate.scenario import Scenario

PLACE = (359.8613, -1.6210)


def event(**measured):
    measured = {k: Measure(v, e, e) for k, (v, e) in measured.items()}
    return Observed("e", *PLACE, "heliocentric", None, (Solution("", measured),))


EVENT = event(t_E=(90.0, 5.0), pi_EN=(0.08, 0.01), pi_EE=(0.03, 0.01), theta_E=(1.2, 0.1))


FOLDER = []


@pytest.fixture(scope="module", autouse=True)
def folder(tmp_path_factory):
    FOLDER.append(tmp_path_factory.mktemp("rates"))
    return FOLDER[0]


@cache
def made(kicks="igoshev2020"):
    return kick_posterior(EVENT, Scenario.read("default").replace(kicks=kicks), keep=FOLDER[0])


def test_a_law_only_reweighs_the_bins():
    one = made()
    shares = parse_kick("igoshev2020").bin_weights(one.edges)
    assert one.law.sum(axis=(1, 2)) + one.unkicked.sum(axis=1) == pytest.approx(1.0)
    assert one.flat.sum(axis=(1, 2)) == pytest.approx(1.0)
    # neutron stars of one mass: posterior over share is the same for every law, and is what the event itself says
    c = one.classes.index("neutron_star")
    predicted = one.flat[c] * np.asarray(shares.inside)
    assert one.law[c] / one.law[c].sum() == pytest.approx(predicted / predicted.sum(), rel=1e-6)


def test_another_law_from_the_same_support():
    one, other = made(), made("hobbs2005")
    c = one.classes.index("neutron_star")
    assert other.support[c] == pytest.approx(one.support[c], rel=1e-9)
    assert other.quantiles("neutron_star")["p50"] > one.quantiles("neutron_star")["p50"]
    assert other.quantiles("neutron_star", "flat") == pytest.approx(one.quantiles("neutron_star", "flat"))


def test_columns_sum_to_one_with_the_unkicked():
    """Table, report and picture show the unkicked share, and nothing is scaled to hide it."""
    one, share = made(), np.array([0.3, 0.6])
    assert "unkicked" not in report_kick(one) and np.all(one.to_table()["kick_hi"] > 0)
    # as under a law that leaves these shares unkicked
    still = share[:, None] * one.law.sum(axis=2)
    law = one.law * (1 - share)[:, None, None]
    one = replace(one, law=law, unkicked=still, probability=dict.fromkeys(one.classes, 0.1))
    table = one.to_table()
    assert table.meta["outlier"] == one.outlier == OUTLIER
    ax = one.plot()
    bars = {x.get_label().split(",")[0]: [b.get_height() for b in x] for x in ax.containers}
    lines = report_kick(one).splitlines()
    first = next(k for k, line in enumerate(lines) if line.startswith("kick ["))
    rows = [line.split() for line in lines[first:]]
    for c, name in enumerate(one.classes):
        mine = table[table["lens"] == name]
        assert mine["P_law"].sum() == pytest.approx(1.0) and mine["P_flat"].sum() == pytest.approx(1.0)
        still = mine[mine["kick_hi"] == 0]
        assert still["P_law"].sum() == pytest.approx(share[c])
        assert sum(bars[name.replace("_", " ")]) == pytest.approx(1.0)
        (told,) = (r for r in rows if r[:1] == ["unkicked"])
        assert told[1 + 2 * c] == _chance(share[c]) and told[2 + 2 * c] == "-"


def test_quantiles_of_a_flat_bin():
    one = made()
    q = one.quantiles("black_hole", "flat")
    p = np.concatenate([[0.0], np.cumsum(one.flat[one.classes.index("black_hole")].sum(axis=0))])
    assert np.interp(q["p50"], one.edges, p) == pytest.approx(0.5)


def test_sums_are_those_of_the_odds():
    from lensrate.events import kick as module
    from lensrate.events.likelihood import likelihood
    from lensrate.lensing import rates
    from lensrate.lensing.points import EventRates
    from lensrate.lensing.quadrature import Numerics
    from lensrate.scenario import resolve

    model = resolve(Scenario.read("default"))
    l, b = np.radians(PLACE)
    ready = rates.prepare(model, model.galaxy.sightline(l, b), model.sources.toward(l, b, model.galaxy), Numerics())
    line = EventRates(ready, module._layout(model))
    found = line.evaluate(likelihood(EVENT.solutions[0], EVENT).points).sum(axis=1)
    wanted, _ = _exact(EVENT, event_rates(*PLACE), 0.0)
    names = [c.name for c in event_rates(*PLACE).classes]
    for name in ("neutron_star", "black_hole"):
        mine = sum(v for c, v in zip(line.classes, found) if c.name[0] == "law" and c.name[1] == name)
        # both thin their Gaussians, by row of different sums
        assert mine == pytest.approx(wanted[names.index(name)], rel=0.02)


def test_probabilities_come_from_the_folder(folder):
    one = made()
    assert one.scenario.kicks == "igoshev2020" and list(folder.glob("*.rates"))


def test_without_fields_there_is_no_kick():
    with pytest.raises(InputError, match="fields"):
        kick_posterior(EVENT, Scenario.read("default").replace(fields=""))
