"""Long jobs on a real Dask cluster of processes: the same numbers as one process, also when a worker is killed."""

import os
import signal
import threading
import time

import numpy as np
import pytest

from lensrate import Campaign, LensrateError, Scenario, campaign
from lensrate.galaxy.potential import Potential
from lensrate.parallel import cluster
from lensrate.remnants.synthesis import Settings, synthesize

distributed = pytest.importorskip("distributed", reason="Dask is an optional extra")

# a worker that is killed on purpose leaves sockets open, of which its nanny and the client warn
pytestmark = [
    pytest.mark.slow,
    pytest.mark.filterwarnings("ignore::ResourceWarning"),
    pytest.mark.filterwarnings("ignore::pytest.PytestUnraisableExceptionWarning"),
    pytest.mark.filterwarnings("ignore::DeprecationWarning"),
]


@pytest.fixture(scope="module")
def scheduler():
    with distributed.LocalCluster(
        n_workers=2, threads_per_worker=1, processes=True, host="127.0.0.1", dashboard_address=None
    ) as made:
        yield made


def galaxy_and_settings():
    base = Scenario.read("default")
    galaxy = base.build_galaxy()
    settings = Settings(tracers=256, batches=2, kick_edges=(0.0, 100.0), bundles=64, iterations=5, eta=0.5)
    return galaxy, Potential.read(galaxy.potential), settings


def same(one, other):
    for name in ("ln_rho", "four", "two", "batches", "heights"):
        assert np.array_equal(getattr(one, name), getattr(other, name)), name


def test_a_campaign_is_the_same_bit_for_bit(scheduler):
    survey, base = Campaign.read("marram"), Scenario.read("default").replace(kicks="none")
    here = campaign(survey, base)
    with cluster(scheduler.scheduler_address) as executor:
        there = campaign(survey, base, executor=executor)
    assert np.array_equal(here.expected, there.expected)
    assert there.fields[1].sightline.reforecast(ifmr="raithel2018").lenses["black_hole"].rate > 0


def test_a_killed_worker_costs_time_and_nothing_else(scheduler, tmp_path):
    here = synthesize(*galaxy_and_settings())
    seen = []

    def kill_one(done, found):
        seen.append(done)
        if len(seen) == 12:
            pid = next(iter(scheduler.workers.values())).pid
            threading.Thread(target=os.kill, args=(pid, signal.SIGKILL)).start()

    with cluster(scheduler.scheduler_address) as executor:
        there = synthesize(
            *galaxy_and_settings(), executor=executor, progress=kill_one, checkpoint=tmp_path / "pieces"
        )
    same(here, there)
    assert len(seen) > 12
    # the pieces that came back were kept on this side
    again = synthesize(*galaxy_and_settings(), checkpoint=tmp_path / "pieces", progress=lambda d, f: seen.append(f))
    same(here, again)
    assert seen[-1] == pytest.approx(1.0)


def test_no_scheduler_is_named_quickly(monkeypatch):
    monkeypatch.setattr("lensrate.parallel._WAIT", 1)
    start = time.monotonic()
    with pytest.raises(LensrateError, match="no scheduler answers"):
        with cluster("tcp://127.0.0.1:9"):
            pass
    assert time.monotonic() - start < 60


def two_places(folder):
    """A small unkicked campaign and a sample of its events, some with parallaxes (invented)."""
    from mocks import draw_sample, survey

    made = campaign(survey(folder), Scenario.read("default").replace(kicks="none"))
    return made, draw_sample(made, 5, parallax=True)


class Killing:
    """An executor whose cluster loses a worker once the first result is there."""

    def __init__(self, executor, scheduler):
        self._executor, self._scheduler, self._done = executor, scheduler, False

    def map(self, func, items):
        for result in self._executor.map(func, items):
            yield result
            if not self._done:
                self._done = True
                os.kill(next(iter(self._scheduler.workers.values())).pid, signal.SIGKILL)


def kill_one(scheduler, after=1.0):
    """Kill a worker in a while."""
    pid = next(iter(scheduler.workers.values())).pid
    thread = threading.Timer(after, os.kill, (pid, signal.SIGKILL))
    thread.start()
    return thread


def test_drawn_events_are_the_same_bit_for_bit(scheduler, tmp_path):
    from lensrate import mock_events

    forecast, _ = two_places(tmp_path)
    line = forecast.fields[0].sightline
    for options in ({"number": 150_000}, {"number": 150_000, "weighted": True}, {"number": 70_000, "tilt": "equal"}):
        here = mock_events(line, seed=7, **options)
        with cluster(scheduler.scheduler_address) as executor:
            killed = kill_one(scheduler)
            there = mock_events(line, seed=7, executor=executor, **options)
            killed.join()
        for name, column in here.columns.items():
            assert np.array_equal(column, there.columns[name], equal_nan=column.dtype.kind == "f"), name
    here = mock_events(forecast, seed=7)
    with cluster(scheduler.scheduler_address) as executor:
        there = mock_events(forecast, seed=7, executor=executor)
    assert all(np.array_equal(c, there.columns[n]) for n, c in here.columns.items())


def test_comparisons_and_constraints_are_the_same_bit_for_bit(scheduler, tmp_path):
    from lensrate.events.versus import compare_sample
    from lensrate.inference.constrain import constrain
    from lensrate.inference.parameters import parse_parameters
    from lensrate.inference.planned import planned
    from lensrate.inference.templates import Templates

    forecast, sample = two_places(tmp_path)
    templates, number = Templates.of(forecast), parse_parameters(["black_holes"])
    measured = {"black_hole": 0.8, "star": 0.1}

    def everything(executor):
        compared = compare_sample(sample, survey=forecast.campaign, scenarios=forecast.scenario, fit=True,
                                  simulations=400, executor=executor)  # fmt: skip
        found = constrain(sample, ["black_holes"], forecast=forecast, points=9, executor=executor)
        plan = planned(templates, number, measured=measured, mocks=24, points=9, executor=executor)
        return {k: t._asdict() for k, t in compared.comparisons[0].tests.items()}, found.weight, plan.mocks

    here = everything(None)
    with cluster(scheduler.scheduler_address) as executor:
        there = everything(Killing(executor, scheduler))
    assert here[0] == there[0] and np.array_equal(here[1], there[1]) and here[2] == there[2]
