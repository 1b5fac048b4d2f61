"""Spread independent work over threads or any executor, in order, with a progress bar on stderr."""

import sys
import warnings
from concurrent.futures import ThreadPoolExecutor
from contextlib import contextmanager

from .errors import InputError, LensrateError

__all__ = ["DaskExecutor", "cluster", "cores", "run_map"]

_RETRIES = 3  # of a task whose worker was lost or failed
_WAIT = 30  # s for a scheduler to answer


def cores():
    """Return how many threads may run at once: NUMBA_NUM_THREADS where it is set, else what the system allows."""
    import numba  # slow to import, and a cluster's address needs none of it

    return numba.config.NUMBA_NUM_THREADS


def run_map(func, items, jobs=1, executor=None, progress=None, stop=None):
    """Apply `func` to each item and return the results in the order of the items.

    Parameters
    ----------
    func : callable
        Independent of the order of calls; the kernels inside release the interpreter lock.
    items : sequence
        Arguments.
    jobs : int
        Local threads, where no executor is given.
    executor : object with ``map``, optional
        For example `concurrent.futures.ThreadPoolExecutor` or a Dask client's executor.
    progress : str or callable, optional
        Label of a progress bar, which is drawn only where stderr is a terminal; or what is called, with the item and
        its result, after each one in order.
    stop : threading.Event, optional
        Set when the work is broken off, so that `func` in other threads can leave early.

    Returns
    -------
    list
    """
    items = list(items)
    pool = None
    if executor is None and jobs > 1 and len(items) > 1:
        pool = executor = ThreadPoolExecutor(min(jobs, len(items)))
    try:
        results = executor.map(func, items) if executor is not None else map(func, items)
        if callable(progress):
            done = []
            for item, result in zip(items, results):
                done.append(result)
                progress(item, result)
            return done
        if not progress or not sys.stderr.isatty():
            return list(results)
        import click

        with click.progressbar(results, length=len(items), label=progress, file=sys.stderr) as bar:
            return list(bar)
    except BaseException:
        if stop is not None:
            stop.set()
        raise
    finally:
        if pool is not None:
            pool.shutdown(wait=True, cancel_futures=True)


class DaskExecutor:
    """An executor on a Dask cluster; build with `cluster`.

    The function of a `map`, with everything it holds, is sent to each worker once; results come back in order, each as
    soon as it and those before it are done. A task whose worker is lost is run again elsewhere.
    """

    def __init__(self, client):
        self._client = client

    def map(self, func, items):
        """Yield func(item) for each item, in order."""
        items = list(items)
        if not items:
            return
        with warnings.catch_warnings():
            # functions hold megabytes of tables, and chunks of events are as large: each goes where it is needed, once
            warnings.filterwarnings("ignore", message="Sending large graph", category=UserWarning)
            # a task of its own, not scattered data: the scheduler can make it again where a worker is lost
            sent = self._client.submit(_itself, func, pure=False, retries=_RETRIES)
            futures = self._client.map(_apply, items, work=sent, pure=False, retries=_RETRIES)
        try:
            for future in futures:
                yield future.result()
        finally:
            self._client.cancel(futures)


def _itself(func):
    return func


def _apply(item, work):
    return work(item)


@contextmanager
def cluster(address):
    """Give an executor on an existing Dask cluster, or None where no address is given.

    Parameters
    ----------
    address : str or None
        Of the scheduler, for example ``tcp://10.0.0.5:8786``, or a scheduler file.

    Yields
    ------
    DaskExecutor or None

    Raises
    ------
    InputError
        Dask is not installed.
    LensrateError
        The scheduler does not answer.
    """
    if address is None:
        yield None
        return
    try:
        from distributed import Client
    except ImportError:
        raise InputError("--dask: Dask is not installed; pip install 'lensrate[dask]'") from None
    try:
        how = {"scheduler_file": address} if str(address).endswith(".json") else {"address": address}
        client = Client(**how, timeout=_WAIT)
    except (OSError, ValueError, TimeoutError) as error:
        raise LensrateError(f"--dask: no scheduler answers at '{address}' ({type(error).__name__})") from None
    with client:
        yield DaskExecutor(client)
