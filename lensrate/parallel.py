"""Spread independent work over threads or any executor, in order, with a progress bar on stderr."""

import sys
from concurrent.futures import ThreadPoolExecutor

__all__ = ["run_map"]


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
