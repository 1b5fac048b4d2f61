"""Value of planned measurements: against sampled events, laws of information, budgets, running events, the command."""

import json
from dataclasses import replace
from functools import cache

import numpy as np
import pytest
from click.testing import CliRunner

from lensrate.cli import cli
from lensrate.datafiles import checksums
from lensrate.errors import InputError
from lensrate.events import followup, plans, worth
from lensrate.events import odds as odds_module
from lensrate.events.followup import follow_up, greedy
from lensrate.events.followup_result import EventPlan, FollowUpPlan, Option
from lensrate.events.latent import latent
from lensrate.events.observed import Measure, Observed, Solution
from lensrate.events.odds import event_odds, event_rates
from lensrate.kernels import followup as kernels
from lensrate.lensing import points, rates
from lensrate.lensing.quadrature import Numerics
from lensrate.lensing.sampler import Sampler
from lensrate.scenario import Scenario, resolve
from lensrate.surveys.campaign import Campaign
from lensrate.surveys.facilities import Facility

PLACE = (359.8613, -1.6210)
NIGHT = 63032.0


def event(name="e", t_0=63050.0, u_0=0.2, I_S=17.0, **measured):
    measured = {k: Measure(v, e, e) for k, (v, e) in measured.items()}
    plain = {"t_0": t_0, "u_0": u_0, "I_S": I_S}
    return Observed(name, *PLACE, "heliocentric", None, (Solution("", measured, plain=plain),))


@cache
def line():
    return event_rates(*PLACE, Scenario.read("default"))


@cache
def drawn():
    model = resolve(Scenario.read("default"))
    l, b = np.radians(PLACE)
    ready = rates.prepare(model, model.galaxy.sightline(l, b), model.sources.toward(l, b, model.galaxy), Numerics())
    return Sampler.of(ready).draw(1_200_000, 11, tilt="equal")


@cache
def spread(running=False, **measured):
    e = event(**(measured or {"t_E": (60.0, 12.0)}))
    return latent(e, line(), np.random.default_rng(4), outlier=0.0, running=running, points=1500)


def plan(what, theta_E=0.0):
    """Inverse errors of a plan that measures theta_E to so many mas and nothing else."""
    out = []
    for t in what.theta_E:
        s = np.zeros((3, *t.shape))
        if theta_E:
            s[2] = 1.0 / theta_E
        out.append(s)
    return out


def entropy(p):
    return -np.sum(np.where(p > 0, p * np.log2(np.maximum(p, 1e-300)), 0.0), axis=0)


def test_points_agree_with_the_deterministic_sums():
    e = event(t_E=(60.0, 3.0), pi_E=(0.12, 0.03))
    what, found = latent(e, line(), np.random.default_rng(2), outlier=0.0), event_odds(e, line(), 0.0)
    assert what.probability == pytest.approx(found.probability, abs=1e-9)
    error = 4.0 / np.sqrt(what.effective)
    some = found.probability > 1e-3
    assert what.drawn[some] == pytest.approx(1.0, abs=error)
    assert what.quantiles(name="star") == pytest.approx(list(found.quantiles("theta_E_mas", "star").values()), rel=0.08)
    d = drawn()
    w = d.weight * np.exp(-0.5 * ((d.t_E - 60.0) / 3.0) ** 2 - 0.5 * ((d.pi_E - 0.12) / 0.03) ** 2)
    for c in (0, what.classes.index("neutron_star")):
        mine = np.flatnonzero(d.lens_class == c)
        mine = mine[np.argsort(d.theta_E[mine])]
        wanted = np.interp([0.16, 0.5, 0.84], np.cumsum(w[mine]) / w[mine].sum(), d.theta_E[mine])
        assert what.quantiles(name=what.classes[c]) == pytest.approx(wanted, rel=0.08)


MEASURED, SIGMA = {"t_E": (150.0, 30.0), "pi_E": (0.06, 0.012)}, 0.3
GRID = np.linspace(-1.5, 14.0, 1200)


def _sampled(rows, classes):
    """Joint probability of class and measured theta_E on GRID, of importance-sampled events alone."""
    d = drawn()
    w = d.weight[rows].copy()
    for name, (value, error) in MEASURED.items():
        w *= np.exp(-0.5 * ((getattr(d, name)[rows] - value) / error) ** 2)
    joint = np.zeros((len(classes), GRID.size))
    for c in range(len(classes)):
        mine = d.lens_class[rows] == c
        hist, edges = np.histogram(d.theta_E[rows][mine], np.linspace(0, 14, 2801), weights=w[mine])
        middle = 0.5 * (edges[1:] + edges[:-1])
        joint[c] = np.exp(-0.5 * ((GRID[:, None] - middle) / SIGMA) ** 2) @ hist
    return joint / joint.sum()


def _batches(measure, classes):
    """A number from all sampled events, and its error from four parts of them."""
    parts = [measure(_sampled(slice(k, None, 4), classes)) for k in range(4)]
    return measure(_sampled(slice(None), classes)), np.std(parts, axis=0, ddof=1) / 2


@cache
def _found():
    what = spread(**MEASURED)
    seen = worth.of_widths(what, plan(what, SIGMA), np.random.default_rng(1), 1600)
    return what, worth.worth(what, seen, "black_hole")


def test_bits_of_theta_E_against_sampled_events():
    """The same information from importance-sampled events: outcomes on a grid, no points and no engine."""
    what, found = _found()
    c = what.classes.index("black_hole")

    def bits(joint):
        seen = joint.sum(axis=0)
        own = np.array([joint[c], seen - joint[c]])
        return np.array([entropy(x.sum(axis=1)) - seen @ entropy(x / seen) for x in (joint, own)])

    wanted, error = _batches(bits, what.classes)
    got, own = np.array([found.bits, found.target_bits]), np.array([found.bits_error, found.target_error])
    assert np.all(np.abs(got - wanted) < 3.5 * np.hypot(own, error)), (got, wanted, error)


def test_certainty_and_false_alarms_against_sampled_events():
    """Where the posterior calls a black hole sure, sampled events say how often that is so and how often it is wrong.

    Where sampled events themselves call it sure would be no test: they do where, by chance, they have few stars.
    """
    what, found = _found()
    c = what.classes.index("black_hole")
    outcome = np.column_stack([np.full((GRID.size, 2), np.nan), GRID])
    rates_at = np.zeros((len(what.classes), GRID.size))
    for k, sharp in enumerate(plan(what, SIGMA)):
        if what.weight[k].sum() > 0:
            out = np.empty(GRID.size)
            kernels.judged(what.weight[k], np.log(what.t_E), what.pi_E, what.theta_E[k], sharp, outcome, out)
            rates_at[k] = out
    total = rates_at.sum(axis=0)
    alarm = (rates_at[c] > worth.SURE * total) & (total > 0)

    def chances(joint):
        seen = joint.sum(axis=0)
        return np.array([seen @ alarm, (seen - joint[c]) @ alarm / (seen @ alarm)])

    wanted, error = _batches(chances, what.classes)
    # 0.003: scatter of false alarms between seeds of the points
    got, own = np.array([found.target_sure, found.false_alarm]), np.array([found.target_sure_error, 0.003])
    assert wanted[0] > 0.002 and found.false_alarm < 1 - worth.SURE
    assert np.all(np.abs(got - wanted) < 3.5 * np.hypot(own, error)), (got, wanted, error)


@pytest.mark.parametrize("outlier", [0.0, 0.05])
def test_expected_posterior_is_the_present_one(outlier):
    e = event(t_E=(120.0, 10.0), pi_E=(0.05, 0.02))
    what = latent(e, line(), np.random.default_rng(5), outlier=outlier)
    o = worth.of_widths(what, plan(what, 0.3), np.random.default_rng(3), 300)
    w = o.weight / o.weight.sum()
    mean = np.einsum("k,vk,vkc->c", w, o.chance, o.posterior)
    for c in range(len(what.classes)):
        x = (o.chance[:, :, None] * o.posterior).sum(axis=0)[:, c]
        error = np.sqrt(sum(w[o.stratum == s].sum() ** 2 * x[o.stratum == s].var() / 300 for s in set(o.stratum)))
        assert mean[c] == pytest.approx(what.probability[c], abs=4 * error + 0.01 * what.probability[c] + 2e-4)


def test_information_grows_with_precision_and_is_bounded():
    what = spread()
    bits = []
    for sigma in (0.0, 2.0, 0.3, 0.05):
        bits.append(worth.worth(what, worth.of_widths(what, plan(what, sigma), np.random.default_rng(1), 200), "star"))
    assert bits[0].bits == pytest.approx(0.0, abs=1e-9) and np.isfinite(bits[0].bits)
    assert all(b.bits > a.bits for a, b in zip(bits, bits[1:]))
    assert bits[-1].bits < entropy(what.probability) and all(b.target_bits <= b.bits + 0.02 for b in bits)


def test_light_of_the_lens_tells_stars_from_the_dark():
    what = spread()
    shown = worth.unseen(what, line(), 19.0), worth.unseen(what, line(), 26.0)
    dark = [[np.sum(w * d) / w.sum() for w, d in zip(what.weight, s)] for s in shown]
    star, hole = what.classes.index("star"), what.classes.index("black_hole")
    assert dark[0][star] > dark[1][star]
    assert dark[0][hole] == pytest.approx(1.0, abs=1e-12) == dark[1][hole]
    seen = worth.of_widths(what, plan(what), np.random.default_rng(1), 100, shown[1])
    p, q = what.probability, np.array(dark[1])
    joint = np.array([p * q, p * (1 - q)]).T
    wanted = entropy(p) - joint.sum(axis=0) @ entropy(joint / joint.sum(axis=0))
    found = worth.worth(what, seen, "black_hole")
    assert found.bits == pytest.approx(wanted, abs=4 * found.bits_error + 1e-6)


def test_running_events_are_longer():
    """Weights by t_E, against sampled events weighted the same way."""
    plain, running = spread(t_E=(60.0, 20.0)), spread(True, t_E=(60.0, 20.0))
    d = drawn()
    w = d.weight * np.exp(-0.5 * ((d.t_E - 60.0) / 20.0) ** 2)
    wanted = np.bincount(d.lens_class, w * d.t_E, len(plain.classes))
    wanted /= wanted.sum()
    c = plain.classes.index("black_hole")
    assert running.probability[c] > plain.probability[c]
    assert running.probability == pytest.approx(wanted, rel=0.1, abs=0.002)


def test_nothing_is_observed_before_the_start():
    for name in ("marram_space_imager", "marram_adaptive_camera", "marram_interferometer"):
        tool = Facility.read(name)
        args = np.array([63050.0]), np.array([0.1]), np.array([80.0])
        before, after = tool.schedule(*args), plans.Started.at(tool, 63060.0).schedule(*args)
        assert np.nanmin(before) < 63060.0 <= np.nanmin(after) and before.shape == after.shape


def _row(name, *options):
    made = [Option(n, "centroid", h, worth.Worth(b, 0, b, 0, 0, 0, 0, 0, np.nan), b / h) for n, h, b in options]
    made.sort(key=lambda o: -o.per_hour)
    return EventPlan(name, ("star",), np.ones(1), {"all": None}, 0.0, 0.0, (), {}, made[0], tuple(made), None, "")


def test_greedy_keeps_to_the_budget():
    rows = [_row("a", ("x", 4.0, 0.8), ("y", 1.0, 0.1)), _row("b", ("x", 3.0, 0.45)), _row("c", ("x", 2.0, 0.2)),
            _row("d", ("x", 1.0, 0.001))]  # fmt: skip
    chosen = greedy(rows, 6.5)
    assert [(e.name, e.best.name) for e in chosen] == [("a", "x"), ("c", "x")]
    assert [(e.name, e.best.name) for e in greedy(rows, 3.5)] == [("b", "x")]
    assert [e.name for e in greedy(rows, 100.0)] == ["a", "b", "c"]
    rows = [_row("a", ("quick", 1.0, 0.3), ("long", 5.0, 0.6)), _row("b", ("x", 2.0, 0.2))]
    assert [(e.name, e.best.name) for e in greedy(rows, 6.9)] == [("a", "quick"), ("b", "x")]
    assert [(e.name, e.best.name) for e in greedy(rows, 7.0)] == [("a", "long"), ("b", "x")]


def test_a_night_and_what_changed_since():
    events = [event("long", t_E=(150.0, 20.0)), replace(event("bare", t_E=(20.0, 1.0)), solutions=(
        Solution("", {"t_E": Measure(20.0, 1.0, 1.0)}),))]  # fmt: skip
    kwargs = {"as_of": NIGHT, "hours": 15.0, "target": "black_hole", "number": 32}
    night = follow_up(events, **kwargs)
    assert [e.name for e in night.events] == ["long"] and "no t_0, u_0, I_S" in night.failed[0]
    (one,) = night.events
    assert one.changed == "new" and night.hours <= 15.0 and one.last_start is not None
    assert one.shift_dates[1] - 63050.0 == pytest.approx(150.0 * np.sqrt(2 - 0.04))
    assert set(one.to_dict()["options"]) >= {"marram_space_imager", "marram_lens_imaging", "marram_source_motion"}
    before = [{"event": "long", "follow_up": json.loads(json.dumps(one.to_dict()))}, {"event": "past"}]
    again = follow_up(events, **kwargs, since=before)
    assert again.events[0].changed == "no change" and any("past" in n for n in again.notes)
    assert again.events[0].to_dict() | {"changed": 0} == one.to_dict() | {"changed": 0}
    with pytest.raises(InputError, match="black_hole"):
        follow_up(events, as_of=NIGHT, hours=15.0, target="blak_hole")


def test_kept_sightlines_are_taken_and_threads_change_nothing(tmp_path, monkeypatch):
    """Three places, more than memory holds: no density is gathered again."""

    def planned(e, line, *_):
        p = event_odds(e, line).probability
        return replace(_row(e.name, ("x", 1.0, p[0])), classes=tuple(c.name for c in line.classes), probability=p), ()

    monkeypatch.setattr(followup, "_event", planned)
    scenario = Scenario.read("default").replace(kicks="none", bh_kicks="none")
    places = [(1.0, -2.0), (1.0, -2.0), (3.0, -3.0), (0.0, 4.0)]
    events = [replace(event(f"e{k}", t_E=(60.0, 3.0)), l=l, b=b) for k, (l, b) in enumerate(places)]
    kwargs = {"as_of": NIGHT, "hours": 15.0, "number": 8, "keep": tmp_path}
    first = follow_up(events, scenario, **kwargs)
    assert len(list(tmp_path.iterdir())) == 3 and len(first.events) == 4
    monkeypatch.setattr(odds_module, "_held", type(odds_module._held)())
    monkeypatch.setattr(points.Mixture, "gathered", None)
    again = follow_up(events, scenario, **kwargs, jobs=2)
    assert again.to_dict() == first.to_dict() and again.failed == ()
    made = again.meta()
    assert made["outlier"] == odds_module.OUTLIER and made["tolerance_deg"] == 0.05
    assert made["facilities_sha256"] == checksums()["facilities/marram.toml"]
    assert made["campaign_hash"] == Campaign.read("marram").hash


def test_a_table_says_which_option_is_taken():
    """Both options of a chosen event stand in it; one of them is in the list."""
    rows = greedy([_row("a", ("quick", 1.0, 0.3), ("long", 5.0, 0.6)), _row("b", ("x", 2.0, 0.2))], 7.0)
    chosen = [replace(e, order=k + 1) for k, e in enumerate(rows)]
    events = [replace(e, options=tuple(sorted(e.options, key=lambda o: o.hours))) for e in chosen]
    plan = FollowUpPlan(
        tuple(events), tuple(chosen), None, NIGHT, 7.0, "marram", "m", Scenario.read("default"), 1, 8, True
    )
    table = plan.to_table()
    shown = [(r["event"], r["option"], bool(r["taken"]), int(r["order"])) for r in table]
    first = {e.name: e.order for e in chosen}
    wanted = [("a", "quick", False, 0), ("a", "long", True, first["a"]), ("b", "x", True, first["b"])]
    assert sorted(shown) == sorted(wanted)
    assert table["taken"].dtype == bool


@pytest.mark.parametrize(
    "args, said",
    [
        (["--rank", "black_hole"], "--hours"),
        (["--hours", "3"], "--rank"),
        (["--rank", "black_hole", "--hours", "3", "--as-of", "2031-06-15", "--kick"], "one at a time"),
    ],
)
def test_half_a_plan_is_refused(args, said):
    ran = CliRunner().invoke(cli, ["odds", "--t-E", "30", "--at", "1", "-3", *args])
    assert ran.exit_code == 2 and said in ran.output
