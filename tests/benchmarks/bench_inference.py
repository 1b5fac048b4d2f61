"""Inference: calibration and coverage of posteriors, power against a wrong kick law.

    python tests/benchmarks/bench_inference.py [SAMPLES]

The Marram campaign (invented) with masses of some events measured as `MEASURED` says. The table of a run is kept in
inference.txt beside this file. Coverages carry their binomial error.
"""

# ruff: noqa: E402  (one thread is set before the imports)
import os

os.environ.setdefault("OMP_NUM_THREADS", "1")

import sys
from dataclasses import replace

import numpy as np
from scipy import stats

from lensrate.inference.calibrate import calibrate
from lensrate.inference.data import made
from lensrate.inference.likelihood import Likelihood, Nuisances
from lensrate.inference.mocks import mock
from lensrate.inference.parameters import parse_parameters
from lensrate.inference.planned import planned
from lensrate.inference.templates import Templates
from lensrate.remnants.kicks import parse_kick
from lensrate.surveys.reweighted import reweighted
from lensrate.surveys.yields import campaign

MEASURED = {"neutron_star": 0.6, "black_hole": 0.8, "white_dwarf": 0.1, "star": 0.05}
NUMBERS = parse_parameters(["neutron_stars"])
TWO = parse_parameters(["kick_scale", "neutron_stars"])


def say(*words):
    print(*words, flush=True)


def coverage(title, made_):
    for i, name in enumerate(made_.names):
        p = stats.kstest(made_.share[:, i], "uniform").pvalue
        rows = [(q, *(x[i] for x in made_.coverage(q))) for q in (0.68, 0.95)]
        words = [f"{100 * q:.0f} %: {inside:.3f} +- {error:.3f}" for q, inside, error in rows]
        say(f"{title:60s} {name:14s} {'; '.join(words)}; shares even p = {p:.2f}; {made_.bits[:, i].mean():.2f} bits")


def honesty(forecast):
    """Share of neutron stars among 5,000 events: stars held fixed, free, and with masses."""
    many = Templates.of(forecast, 5000 / forecast.by_class()[-1])
    rate_only = Nuisances(0.3, 0.1, 0.0, 0.0, 0.0)
    for title, nuisances, measured in (
        ("stars' timescales fixed", rate_only, None),
        ("stars' timescales free", None, None),
        ("free, masses measured", None, MEASURED),
    ):
        p = planned(many, NUMBERS, nuisances, measured=measured)
        share = p.events["neutron_star"] / sum(p.events.values())
        say(f"5,000 events, {title:26s} share {share:.4f}, sigma(share) {share * p.sigma['neutron_stars']:.4f}")


def power(templates, seed=1, n=100):
    """How often a sample of the scenario's kicks prefers a wrong law, and with masses measured, by ln likelihood."""
    for seasons in (1.0, 10.0, 40.0):
        t = Templates.of(templates.forecast, seasons)
        for measured in (None, MEASURED):
            probe = Likelihood(t, made(t, [0], [3.0], [0.05]), parse_parameters(["kick_scale"]))
            own = probe.part_weights([1.0])
            other = own.copy()
            rows = [t.rows("neutron_star"), t.rows("black_hole")]
            law = parse_kick("verbunt2017")
            other[rows[0]], other[rows[1]] = t.shares("neutron_star", law), t.shares("black_hole", law, True)
            rng, gains = np.random.default_rng(seed), []
            for _ in range(n if seasons < 20 else n // 4):
                data, _ = mock(t, own, rng, measured=measured)
                values = [np.log(data.value @ w).sum() - float((t.expected @ w).sum()) for w in (own, other)]
                gains.append(values[0] - values[1])
            gains = np.array(gains)
            what = "masses" if measured else "t_E only"
            say(f"truth igoshev2020 against verbunt2017, {3 * seasons:.0f} seasons, {what}: mean ln L difference "
                f"{gains.mean():.3f}, above 3 in {np.mean(gains > 3):.0%}, wrong sign {np.mean(gains < 0):.0%}")


def main():
    n = int(sys.argv[1]) if len(sys.argv) > 1 else 100
    forecast = campaign("marram")
    templates = Templates.of(forecast)
    say(f"Marram: {forecast.by_class()[-1]:.1f} events expected, scenario {forecast.scenario.hash}, {n} samples a line")
    honesty(forecast)
    for name, p in (("timescales", None), ("masses", MEASURED)):
        plan = planned(templates, TWO, measured=p)
        say(f"plan, {name}: {plan.words('kick_scale')}; {plan.words('neutron_stars')}")
    power(templates)
    coverage("truth and inference alike, 3 seasons", calibrate(templates, NUMBERS, n, 1, points=21, measured=MEASURED))
    many = Templates.of(forecast, 4.0)
    coverage("alike, 12 seasons", calibrate(many, NUMBERS, n, 2, points=21, measured=MEASURED))
    coverage("alike, 12 seasons, two parameters", calibrate(many, TWO, n // 2, 3, points=11, measured=MEASURED))
    wrong = Templates.of(reweighted(forecast, forecast.scenario.replace(ifmr="raithel2018")), 4.0)
    truths = {"remnant masses of Raithel+ 2018": wrong, "stars 5 % slower": _slower(many)}
    for name, truth in truths.items():
        for what, nuisances in (("fixed", Nuisances(0.3, 0.1, 0.0, 0.0, 0.0)), ("free", None)):
            for k, measured in enumerate((None, MEASURED)):
                got = calibrate(many, NUMBERS, n, 4 + k, truth=truth, points=21, fix_truth=[1.0], fixed_nuisances=True,
                                nuisances=nuisances, measured=measured)  # fmt: skip
                coverage(f"{name}, stars {what}, {'masses' if measured else 't_E only'}", got)


def _slower(templates):
    """Stars whose timescales are longer by 5 %."""
    from lensrate.inference.likelihood import moved

    rate, slopes = templates.rate.copy(), templates.slope_rate.copy()
    rate[:, templates.stellar] = moved(rate[:, templates.stellar], np.log(1.05), 1.0)
    return replace(templates, rate=rate, slope_rate=moved(slopes, np.log(1.05), 1.0))


if __name__ == "__main__":
    main()
