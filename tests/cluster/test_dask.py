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
