"""Reports of follow-up and of one lens's kick, for ``lensrate odds``."""

import math

from .text import columns, number, safe, wrap

__all__ = ["read_since", "report_kick", "report_plan"]

_KINDS = {"lens_light": "lens light", "source_motion": "source motion", "images": "theta_E, images",
          "centroid": "theta_E, centroid"}  # fmt: skip
_SHORT = {"star": "star", "brown_dwarf": "BD", "white_dwarf": "WD", "neutron_star": "NS", "black_hole": "BH"}


def read_since(path):
    """Return the events of an earlier run, from its --json output or its --save file in JSON."""
    import json

    from ..errors import InputError

    try:
        with open(path, encoding="utf-8") as file:
            made = json.load(file)
    except (OSError, UnicodeDecodeError) as error:
        raise InputError(f"--since: '{path}' could not be read ({getattr(error, 'strerror', None) or error})") from None
    except json.JSONDecodeError as error:
        raise InputError(f"--since: '{path}' is not JSON ({error.msg}, line {error.lineno})") from None
    events = made.get("events") if isinstance(made, dict) else made
    if not isinstance(events, list) or not all(isinstance(e, dict) and "event" in e for e in events):
        raise InputError(f"--since: '{path}' is no output of lensrate odds --json (or --save FILE.json)")
    return events


def _chance(x):
    return "-" if x is None or x != x else f"{x:.3f}" if x >= 5e-4 else "0" if x == 0 else "<0.001"


def _with_error(x, error):
    return f"{max(x, 0.0):.3f}+-{error:.3f}"


def _day(mjd):
    from ..events.followup_result import date_of

    return "-" if mjd is None else "any" if math.isinf(mjd) else date_of(mjd)


def report_plan(plan):
    """Return the nightly table and the list under the budget."""
    lines = [
        f"lensrate {plan.version}   scenario {safe(plan.scenario.name)} ({plan.scenario.hash})"
        + ("   invented facilities" if plan.invented else ""),
        wrap(plan.header()),
        "",
    ]
    names = plan.events[0].classes
    titles = ["event", *(_SHORT.get(c, c.replace("_", " ")) for c in names), "theta_E [mas]", "shift", "at u = sqrt 2",
              "I now/peak", "bits/h", "start by", "no."]  # fmt: skip
    rows = []
    for e in plan.events:
        q, m = e.theta_E["all"], e.magnitudes
        theta = "-" if q is None else f"{number(q['p16'], 2)}-{number(q['p84'], 2)}"
        shift = "-" if q is None else number(q["p50"] / math.sqrt(8.0), 2)
        later = [d for d in e.shift_dates if d >= plan.as_of]
        best = e.best
        rows.append([
            e.name[:14], *(f"{p:.2f}" if p >= 0.005 else "<.01" for p in e.probability), theta, shift,
            _day(later[0] if later else None), f"{m['now']:.1f}/{m['peak']:.1f}",
            number(best.per_hour, 2) if best and best.per_hour >= 1e-4 else "<1e-4", _day(e.last_start),
            str(e.order or "-"),
        ])  # fmt: skip
    lines += [columns(titles, rows), ""]
    for e in plan.events:
        changed = f" [{e.changed}]" if e.changed else ""
        lines.append(wrap(f"{e.name}: {e.reason}{changed}"))
    aim = plan.target.replace("_", " ") if plan.target else "likeliest class"
    how = "most bits per hour first (greedy, each event once, then costlier options)"
    lines += ["", f"taken within {plan.budget:g} h, {how}:"]
    titles = ["no.", "event", "measurement", "what", "hours", "bits", f"P({aim} > 0.95)", "false", "some > 0.95"]
    rows = []
    for e in plan.chosen:
        o, w = e.best, e.best.worth
        bits = _with_error(w.target_bits, w.target_error) if plan.target else _with_error(w.bits, w.bits_error)
        rows.append([
            str(e.order), e.name[:14], o.name[:24], _KINDS.get(o.measures, o.measures), f"{o.hours:.1f}", bits,
            _chance(w.target_sure), _chance(w.false_alarm), _chance(w.sure),
        ])  # fmt: skip
    lines.append(columns(titles, rows, left=4))
    lines.append(f"in all {plan.hours:.1f} h, {plan.bits:.2f} bits")
    return "\n".join(lines)


def report_kick(kick):
    """Return the table of one lens's kick."""
    lines = [
        f"lensrate {kick.version}   scenario {safe(kick.scenario.name)} ({kick.scenario.hash})",
        wrap(kick.header()),
        "",
    ]
    titles = ["kick [km/s]", *(f"{_SHORT[c]} {p}" for c in kick.classes for p in ("law", "flat"))]
    rows = []
    if kick.unkicked.sum() > 0:
        rows.append(["unkicked"])
        for share in kick.unkicked.sum(axis=1):
            rows[0] += [_chance(share), "-"]
    for k in range(kick.edges.size - 1):
        row = [f"{kick.edges[k]:g}-{kick.edges[k + 1]:g}"]
        for c in range(len(kick.classes)):
            row += [_chance(kick.law[c, :, k].sum()), _chance(kick.flat[c, :, k].sum())]
        rows.append(row)
    lines += [columns(titles, rows), ""]
    titles = ["born in", *(f"{_SHORT[c]} {p}" for c in kick.classes for p in ("law", "flat"))]
    rows = []
    for i, name in enumerate(kick.components):
        row = [name.replace("_", " ")]
        for c in range(len(kick.classes)):
            row += [_chance(kick.law[c, i].sum() + kick.unkicked[c, i]), _chance(kick.flat[c, i].sum())]
        rows.append(row)
    lines += [columns(titles, rows), ""]
    for name in kick.classes:
        word = name.replace("_", " ")
        for prior in ("law", "flat"):
            q = kick.quantiles(name, prior)
            if q is not None:
                lines.append(
                    f"if a {word}, prior {'the law ' + kick.laws[name] if prior == 'law' else 'flat in bins'}: kick "
                    f"{number(q['p50'])} ({number(q['p16'])} to {number(q['p84'])}) km/s"
                )
    return "\n".join(lines)
