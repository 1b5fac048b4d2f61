"""Coverage of the inference over many mock samples: alike, with declared stages, and where the truth is another.

    python tests/benchmarks/bench_coverage.py [SAMPLES]
    python tests/benchmarks/bench_coverage.py bins [SAMPLES]

The Marram campaign (invented), four times its seasons; the table of a run is kept in calibration.txt beside this file.
The second line is for free kick bins, which take a sampler, 45 s of processor time a sample, and many seasons.
"""

# ruff: noqa: E402  (one thread is set before the imports)
import os

os.environ.setdefault("OMP_NUM_THREADS", "1")

import sys
import time

import numpy as np

from lensrate.inference.calibrate import calibrate, no_events
from lensrate.inference.likelihood import Likelihood, Nuisances
from lensrate.inference.mocks import mock
from lensrate.inference.parameters import bin_parameters, parse_parameters
from lensrate.inference.selection import Selection
from lensrate.inference.templates import Templates
from lensrate.remnants.kicks import parse_kick
from lensrate.surveys.reweighted import reweighted
from lensrate.surveys.yields import campaign

MEASURED = {"neutron_star": 0.6, "black_hole": 0.8, "white_dwarf": 0.1, "star": 0.05}
CHAIN = {
    "parallax": {"star": 0.15, "brown_dwarf": 0.05, "white_dwarf": 0.3, "neutron_star": 0.6, "black_hole": 0.8},
    "followed": {"star": 0.2, "brown_dwarf": 0.1, "white_dwarf": 0.5, "neutron_star": 0.7, "black_hole": 0.9},
    "mass": dict.fromkeys(("star", "brown_dwarf", "white_dwarf", "neutron_star", "black_hole"), 0.8),
}
NUMBERS, TWO = parse_parameters(["neutron_stars"]), parse_parameters(["kick_scale", "neutron_stars"])
LAWS = ("verbunt2017", "hobbs2005", "maxwell:60", "none")


def say(*words):
    print(*words, flush=True)


def table(title, *what, **options):
    """One calibration and its lines."""
    start = time.process_time()
    found = calibrate(*what, **options)
    seconds = (time.process_time() - start) / len(found.share)
    say(f"\n{title}: {len(found.share)} samples, {seconds:.2f} s of CPU each")
    ks, chi2 = found.even()
    for i, name in enumerate(found.names):
        cover = [(100 * q, *(v[i] for v in found.coverage(q))) for q in (0.68, 0.95)]
        words = ", ".join(f"{q:.0f} %: {inside:.3f} +- {error:.3f}" for q, inside, error in cover)
        below, above = np.mean(found.share[:, i] < 0.025), np.mean(found.share[:, i] > 0.975)
        say(f"  {name:14s} {words}; truth in the lowest 2.5 %: {below:.3f}, highest: {above:.3f}; even: KS p "
            f"{ks[i]:.2f}, chi2 p {chi2[i]:.2f}; {found.bits[:, i].mean():.2f} bits")  # fmt: skip
    return found


def bins(forecast, n, seasons=200.0):
    """Free shares of the kick bins, from a sample of lenses with measured masses alone."""
    t = Templates.of(forecast, seasons)
    years = seasons * len(forecast.campaign.calendar.seasons)
    masses = {"star": 0.002, "brown_dwarf": 0.0, "white_dwarf": 0.05, "neutron_star": 0.5, "black_hole": 0.5}
    found = table(f"free kick bins, {years:.0f} seasons, listed: those with a mass", t, bin_parameters(t.edges), n, 15,
                  selection=Selection(mass=masses, listed="mass"), steps=800)  # fmt: skip
    inside = [np.abs(found.share - 0.5) < 0.5 * q for q in (0.68, 0.95)]
    words = ", ".join(
        # the bins of a sample go together, so samples are what is counted
        f"{q} %: {x.mean():.3f} +- {x.mean(axis=1).std() / np.sqrt(len(x)):.3f}" for q, x in zip((68, 95), inside)
    )
    say(f"  all bins: {words}; {found.events.mean():.0f} events a sample")


def power(forecast, n=12):
    """ln L of the true kick law over another, numbers and nuisances known: what the sample could say at best."""
    t = Templates.of(forecast, 200.0)
    seasons = 200 * len(forecast.campaign.calendar.seasons)
    own = Likelihood(t, no_events(t), TWO).part_weights([1.0, 1.0])
    rng = np.random.default_rng(9)
    samples = [mock(t, own, rng, measured=MEASURED)[0] for _ in range(n)]
    masses = np.mean([np.sum(mock(t, own, rng, measured=MEASURED)[1] == "neutron_star") for _ in range(2)])
    say(f"\nTrue kick law {forecast.scenario.kicks} against others, masses of 60 % of neutron stars measured to 20 %, "
        f"all else known; {seasons} seasons")  # fmt: skip
    for text in LAWS:
        law, other = parse_kick(text), own.copy()
        other[t.rows("neutron_star")] = t.shares("neutron_star", law)
        other[t.rows("black_hole")] = t.shares("black_hole", law, True)
        gain = [np.log(d.value @ own).sum() - np.log(d.value @ other).sum() - (t.expected @ (own - other)).sum()
                for d in samples]  # fmt: skip
        mean, error = np.mean(gain), np.std(gain) / np.sqrt(n)
        words = "not told apart"
        if mean > 2 * error:
            each = 3.0 * seasons / mean
            words = f"3 in about {each:.0f} seasons, {0.6 * masses * each / seasons:.0f} neutron stars with a mass"
        say(f"  {text:12s} mean ln L difference {mean:.2f} +- {error:.2f}: {words}")


def main():
    asked = sys.argv[1:]
    forecast = campaign("marram")
    if asked[:1] == ["bins"]:
        return bins(forecast, int(asked[1]) if len(asked) > 1 else 100)
    n = int(asked[0]) if asked else 600
    many = Templates.of(forecast, 4.0)
    seasons = 4 * len(forecast.campaign.calendar.seasons)
    say(f"Inference, Marram (invented), {seasons} seasons, {many.expected.sum():.0f} events if all were in every "
        f"kick bin; scenario {forecast.scenario.hash}")  # fmt: skip
    table("two parameters, masses of some measured, truth from the priors", many, TWO, n, 11, points=11,
          measured=MEASURED)  # fmt: skip
    for listed in ("found", "followed"):
        chain = Selection(**CHAIN, listed=listed)
        table(f"stages parallax, followed, mass declared; listed: {listed}", many, NUMBERS, n // 2, 12, points=21,
              selection=chain)  # fmt: skip
    power(forecast)
    for changes in ({"ifmr": "raithel2018"}, {"kicks": "none"}, {"imf": "salpeter1955"}):
        wrong = Templates.of(reweighted(forecast, forecast.scenario.replace(**changes)), 4.0)
        words = ", ".join(f"{k} {v}" for k, v in changes.items())
        for what, nuisances in (("free", None), ("fixed", Nuisances(0.3, 0.1, 0.0, 0.0, 0.0))):
            table(f"truth with {words}, inference without; the stars' timescales {what}", many, NUMBERS, n // 4, 13,
                  points=21, truth=wrong, measured=MEASURED, nuisances=nuisances, fixed_nuisances=True)  # fmt: skip


if __name__ == "__main__":
    main()
