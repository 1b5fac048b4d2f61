"""One evaluation of the likelihood of a sample, in ten fields, against forecasting them again under another kick law.

    python tests/benchmarks/bench_likelihood.py

One thread, processor time, medians; the Marram campaign (invented), its fields repeated until there are ten.
"""

# ruff: noqa: E402  (one thread is set before the imports)
import os

os.environ.setdefault("OMP_NUM_THREADS", "1")
os.environ.setdefault("NUMBA_NUM_THREADS", "1")

from dataclasses import replace

import numpy as np
from bench_inference import MEASURED, TWO
from report import duration, heading, median, row

from lensrate.inference.data import made
from lensrate.inference.likelihood import Likelihood
from lensrate.inference.mocks import mock
from lensrate.inference.templates import Templates
from lensrate.surveys.reweighted import reweighted
from lensrate.surveys.yields import campaign


def ten_fields(templates):
    """The same fields repeated until there are ten."""
    which = np.arange(10) % len(templates.names)
    forecast = replace(templates.forecast, fields=tuple(templates.forecast.fields[i] for i in which))
    return replace(
        templates, forecast=forecast, rate=templates.rate[which], slope_rate=templates.slope_rate[:, which],
        slope_factor=templates.slope_factor[:, which], efficiency=templates.efficiency[which],
        exposure=templates.exposure[which], anchored=templates.anchored[which],
    )  # fmt: skip


def main():
    heading("Likelihood of a sample", "one thread, ten fields")
    forecast = campaign("marram")
    ten = ten_fields(Templates.of(forecast))
    laws = iter(np.linspace(100, 300, 60))
    base = ten.forecast.scenario
    again = median(lambda: reweighted(ten.forecast, base.replace(kicks=f"maxwell:{next(laws):.3f}")), 10)
    for words, measured in (("timescales", None), ("some masses measured", MEASURED)):
        probe = Likelihood(ten, made(ten, [0], [3.0], [0.05]), TWO)
        data, _ = mock(ten, probe.part_weights([1.0, 1.0]), np.random.default_rng(1), measured=measured)
        L = Likelihood(ten, data, TWO)
        scales = iter(1.0 + 0.01 * np.arange(60))
        took = median(lambda L=L, scales=scales: L.ln([next(scales), 1.1], [0.05, 0.01, 0.01, 0.1]), 40)
        row(f"{len(data)} events, {words}", duration(took), f"ten re-forecasts {duration(again)}", again / took)


if __name__ == "__main__":
    main()
