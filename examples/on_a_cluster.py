"""The same forecast on a Dask cluster: here one of two processes on this machine, elsewhere any scheduler's address.

On a SLURM machine, with the package dask-jobqueue installed:

    from dask_jobqueue import SLURMCluster
    workers = SLURMCluster(cores=1, memory="4GB", walltime="02:00:00")
    workers.scale(jobs=200)

and then `cluster(workers.scheduler_address)` as below, or `lensrate skymap ... --dask ADDRESS` from the shell.
"""

import numpy as np
from distributed import LocalCluster

from lensrate import Campaign, Scenario, campaign
from lensrate.parallel import cluster

if __name__ == "__main__":
    survey, scenario = Campaign.read("marram"), Scenario.read("default").replace(kicks="none")
    with LocalCluster(n_workers=2, threads_per_worker=1, host="127.0.0.1", dashboard_address=None) as workers:
        with cluster(workers.scheduler_address) as executor:
            there = campaign(survey, scenario, executor=executor)
    here = campaign(survey, scenario)
    print("the same numbers, bit for bit:", np.array_equal(here.expected, there.expected))
