"""``lensrate odds``: the class of lens behind each observed event."""

import math

import click

from .base import Command, announce
from .options import assumptions, output, read_scenario
from .sightline import direction
from .text import columns, number, safe, wrap

_TYPED = ("t_E", "pi_E", "pi_EN", "pi_EE", "theta_E", "mu_rel", "mu_S_N", "mu_S_E", "D_S")
_SHORT = {"star": "star", "brown_dwarf": "BD", "white_dwarf": "WD", "neutron_star": "NS", "black_hole": "BH"}
# relative errors taken where a typed number has none
_ASSUMED = {"t_E": 0.05}
_ASSUMED_ELSE = 0.1


def _typed(command):
    """Add an option, and one for its error, for each quantity of a typed event."""
    units = {"t_E": "d", "theta_E": "mas", "mu_rel": "mas/yr", "mu_S_N": "mas/yr", "mu_S_E": "mas/yr", "D_S": "kpc"}
    for name in reversed(_TYPED):
        option = "--" + name.replace("_", "-")
        unit = f" [{units[name]}]" if name in units else ""
        command = click.option(option + "-err", f"{name}_err", type=float, metavar="X", help=f"Error of {option}.")(
            command
        )
        command = click.option(option, name, type=float, metavar="X", help=f"A typed event's {name}{unit}.")(command)
    return command


@click.command(cls=Command, short_help="Lens-class odds of observed events; plans of follow-up.")
@click.argument("sample", metavar="[SAMPLE]", required=False)
@click.option("--at", nargs=2, metavar="L B", help="Place of a typed event (degrees; RA Dec with --icrs).")
@click.option("--icrs", is_flag=True, help="--at is RA Dec.")
@_typed
@click.option("--lens-limit", "lens_limit", type=float, metavar="MAG", help="The lens is fainter than this in I.")
@click.option("--frame", type=click.Choice(["heliocentric", "geocentric"]), help="Of t_E, pi_E, mu_rel if unsaid.")
@click.option("--t-0par", "t_0par", type=float, metavar="MJD", help="Reference epoch of geocentric events.")
@click.option(
    "--outlier", type=float, default=0.01, show_default=True,
    help="Share of fits wrong in all but t_E (geocentric taken as heliocentric): the floor under what a fit rules out.",
)
@click.option(
    "--tolerance", type=float, default=0.05, show_default=True, help="Events so near [deg] share a sightline."
)
@click.option("--spread", "family", metavar="FAMILY", help="Range over a family of assumptions, e.g. kicks.")
@click.option("--rank", metavar="CLASS", help="Plan follow-up: rank by bits on this lens class, or all.")
@click.option("--facilities", metavar="FILE", default="marram", show_default=True, help="What could follow up (TOML).")
@click.option("--campaign", metavar="FILE", default="marram", show_default=True, help="Whose light curves these are.")
@click.option("--hours", type=float, metavar="H", help="Telescope time there is for --rank.")
@click.option("--as-of", "as_of", metavar="DATE", help="Night that --rank plans from, e.g. 2031-06-15.")
@click.option("--since", metavar="FILE", help="JSON of an earlier --rank run: tell what changed.")
@click.option("--seed", type=click.IntRange(0), default=1, show_default=True, help="Of simulated outcomes.")
@click.option("--kick", is_flag=True, help="Birth component and kick of one event's lens, were it a remnant.")
@click.option("--skip-bad", is_flag=True, help="Leave bad rows out.")
@click.option("--jobs", type=click.IntRange(1, 256), default=1, show_default=True, help="Threads over events.")
@click.option("--keep", metavar="FOLDER", help="Keep the sightlines' rate densities there; later runs take them.")
@assumptions
@click.option("--plot", metavar="FILE", help="Draw the events over the classes' densities: .png .pdf .svg.")
@output
def odds(
    sample, at, icrs, lens_limit, frame, t_0par, outlier, tolerance, family, rank, facilities, campaign, hours, as_of,
    since, seed, kick, skip_bad, jobs, keep, plot, save, as_json, overwrite, quiet, **choices
):  # fmt: skip
    """Lens-class odds of each event of SAMPLE, or of one event typed with --t-E ... --at L B.

    SAMPLE is a table or a file of posterior samples. A typed number without an error gets 5 % (t_E) or 10 %.

    Printed for one event: P, the probability; prior, the class's share of all events there; P/P(star); floor x0.1 and
    x10, what P were with a tenth and with ten times the share --outlier of wrong fits: far apart where P rests on it.

    \b
    Columns of a table (units of the file, else d, mas, mas/yr, kpc, deg, mag, MJD; empty: not measured):
      event, or name or id; l, b or ra, dec; t_E
      pi_E, or pi_EN and pi_EE (with pi_E_corr); theta_E; mu_rel; mu_S_N, mu_S_E; D_S
      each of these with _err, or _lo and _hi, without which it is refused
      frame, t_0par (of geocentric numbers); solution, delta_chi2 (rows of one event)
      I_lens_limit; samples (a file beside the table)
      for --rank also I_S, source_fraction, u_0, t_0

    \b
    Examples:
      lensrate odds events.ecsv
      lensrate odds --t-E 120 --pi-E 0.08 --at 1.2 -2.9
      lensrate odds --t-E 270 --t-E-err 3 --pi-E 0.09 --theta-E 5.2 --theta-E-err 0.3 --at 359.86 -1.62
      lensrate odds events.csv --frame geocentric --t-0par 55763 --save odds.ecsv --plot odds.png
      lensrate odds events.ecsv --spread kicks --json
      lensrate odds events.ecsv --keep rates --jobs 2
      lensrate odds running.ecsv --rank black_hole --hours 40 --as-of 2031-06-15 --facilities marram --campaign marram
      lensrate odds --t-E 270 --pi-E 0.09 --theta-E 5.2 --at 359.86 -1.62 --kick --plot kick.png
    """
    from ..io import PICTURES, TABLES, check_target

    values = {name: choices.pop(name) for name in _TYPED}
    errors = {name: choices.pop(f"{name}_err") for name in _TYPED}
    typed = values["t_E"] is not None
    if typed == (sample is not None):
        raise click.UsageError("give either SAMPLE or one event: --t-E ... --at L B")
    lone = [
        o
        for o, v in {**values, **{f"{k}_err": v for k, v in errors.items()}, "lens_limit": lens_limit, "at": at}.items()
        if v is not None
    ]
    if not typed and lone:
        raise click.UsageError(f"--{lone[0].replace('_', '-')} belongs to an event typed with --t-E, not to SAMPLE")
    for name, value in {**values, **{f"{k}_err": v for k, v in errors.items()}, "lens_limit": lens_limit}.items():
        if value is not None and not math.isfinite(value):
            raise click.UsageError(
                f"--{name.replace('_', '-')}: {value} given, a finite number is needed; leave out what is not measured"
            )
    if typed and not at:
        raise click.UsageError("--at L B is needed: where on the sky is the event?")
    if save:
        check_target(save, TABLES, overwrite)
    if plot:
        check_target(plot, PICTURES, overwrite, "--plot")
    _check_plan(rank, hours, as_of, since, kick)
    scenario = read_scenario(**choices)
    _no_idle_options(typed, rank, scenario)
    from ..events.observed import Sample
    from ..events.odds import odds as compute

    if typed:
        read = _event(values, errors, lens_limit, direction(*at, icrs), frame, t_0par)
    else:
        read = Sample.read(sample, frame, t_0par, skip_bad)
    announce(quiet)
    if not quiet:
        click.echo(wrap(f"lensrate: {read.summary()}"), err=True)
    others = _family(family, scenario) if family else ()
    result = compute(
        read, scenario, outlier=outlier, tolerance=tolerance, spread=others, jobs=jobs, keep=keep,
        progress=None if quiet else "events",
    )  # fmt: skip
    extra = None
    if result.events and (rank or kick):
        if rank:
            options = (rank, facilities, campaign, hours, as_of, since, seed, outlier, tolerance, keep, jobs, quiet)
            extra = _plan(read, scenario, *options)
        else:
            extra = _kick(read, scenario, outlier, keep)
        if plot:
            from .. import plots

            (plots.save_follow_up if rank else plots.save_kick)(extra, plot, overwrite)
    elif result.events and plot:
        from ..plots import save_odds

        save_odds(result, plot, overwrite)
    if result.events and save:
        from ..io import write_table

        write_table((extra or result).to_table(), save, overwrite, payload={"events": _rows(result, extra)})
    if as_json:
        from ..io import dump_json

        click.echo(dump_json(_rows(result, extra)))
    elif extra is not None:
        from .followup import report_kick, report_plan

        click.echo(report_plan(extra) if rank else report_kick(extra))
        if others:
            click.echo("\n" + report_ranges(result))
    elif result.events:
        click.echo(report_one(result) if len(result) == 1 else report(result))
    if not quiet:
        more = (*extra.notes, *extra.failed) if rank and extra is not None else ()
        for warning in dict.fromkeys([*result.warnings(), *more]):
            click.echo(wrap(f"note: {warning}"), err=True)
    if not result.events:
        from ..errors import ConvergenceError

        raise ConvergenceError(f"no event could be judged: {result.failed[0] if result.failed else 'none given'}")


def _no_idle_options(typed, rank, scenario):
    """Refuse options that were typed and would do nothing."""
    context = click.get_current_context()
    alone = "it goes with a SAMPLE"
    idle = {
        "icrs": (not typed, "it goes with --at; a SAMPLE says its own place, as l, b or ra, dec"),
        "skip_bad": (typed, alone),
        "tolerance": (typed, alone),
        "u_0_limit": (
            not scenario.sources.startswith("peak"),
            "all classes share it, so odds do not depend on it but with a limit at peak",
        ),
    }
    for name in ("facilities", "campaign", "seed"):
        idle[name] = (not rank, "it goes with --rank")
    for option, (useless, why) in idle.items():
        if useless and context.get_parameter_source(option).name == "COMMANDLINE":
            raise click.UsageError(f"--{option.replace('_', '-')} has no effect here: {why}")


def _check_plan(rank, hours, as_of, since, kick):
    """Refuse half of a plan before the work."""
    if rank and (hours is None or not as_of):
        raise click.UsageError("--rank needs --hours (the time there is) and --as-of DATE (the night to plan from)")
    for name, value in (("--hours", hours), ("--as-of", as_of), ("--since", since)):
        if value is not None and not rank:
            raise click.UsageError(f"{name} belongs to --rank CLASS")
    if rank and kick:
        raise click.UsageError("--rank and --kick are two questions; ask one at a time")


def _plan(read, scenario, rank, facilities, campaign, hours, as_of, since, seed, outlier, tolerance, keep, jobs, quiet):
    from ..events.followup import follow_up
    from .followup import read_since

    before = read_since(since) if since else None
    return follow_up(
        read, scenario, as_of=as_of, hours=hours, target=None if rank == "all" else rank, facilities=facilities,
        campaign=campaign, outlier=outlier, seed=seed, tolerance=tolerance, since=before,
        keep=keep, jobs=jobs, progress=None if quiet else "follow-up",
    )  # fmt: skip


def _kick(read, scenario, outlier, keep):
    from ..errors import InputError
    from ..events.kick import kick_posterior

    if len(read.events) != 1:
        raise InputError(f"--kick: one event at a time, the sample has {len(read.events)}")
    return kick_posterior(read.events[0], scenario, outlier=outlier, keep=keep)


def _rows(result, extra):
    """What --json prints: the odds of each event, with its follow-up or kick where asked for; how it was made first."""
    rows = result.to_dict()
    if rows:
        # once is enough for a list of one run
        rows[0]["made"] = result.meta()
    if extra is None:
        return rows
    if hasattr(extra, "edges"):
        return [{**rows[0], "kick": extra.to_dict()}]
    plans = extra.to_dict()
    return [{**row, "follow_up": plans[row["event"]]} if row["event"] in plans else row for row in rows]


def _event(values, errors, lens_limit, place, frame, t_0par):
    """A sample of the one typed event."""
    from astropy.table import Table

    from ..events.observed import Sample

    row, assumed = {"event": "typed"}, []
    for name, value in values.items():
        if value is None:
            if errors[name] is not None:
                raise click.UsageError(f"--{name.replace('_', '-')}-err without --{name.replace('_', '-')}")
            continue
        error = errors[name]
        if error is None:
            share = _ASSUMED.get(name, _ASSUMED_ELSE)
            error = share * abs(value)
            assumed.append(f"{share:.0%} of {name}")
        row[name], row[f"{name}_err"] = value, error
    if lens_limit is not None:
        row["I_lens_limit"] = lens_limit
    row["l"], row["b"] = (x.to_value("deg") for x in place)
    if frame:
        row["frame"] = frame
    if t_0par is not None:
        row["t_0par"] = t_0par
    sample = Sample.from_table(Table([row]), where="typed event")
    notes = [f"errors assumed: {', '.join(assumed)}"] * bool(assumed)
    return Sample(sample.events, "typed event", (*notes, *sample.notes))


def _family(name, scenario):
    from ..surveys.family import Family

    return [(label, s) for label, s in Family.read(name).one_at_a_time(scenario) if label != "base"]


def _p(x):
    """A probability for people."""
    return "< 1e-6" if x < 1e-6 else f"{x:.4f}" if x >= 1e-3 else f"{x:.1e}"


def _span(q, digits=3):
    """A median, and the 16th and 84th percentiles."""
    if q is None:
        return "-"
    return f"{number(q['p50'], digits)} ({number(q['p16'], digits)}-{number(q['p84'], digits)})"


def _head(result):
    source = f"   {safe(result.sample)}" + (" (invented)" if result.invented else "")
    return [
        f"lensrate {result.version}{source}   scenario {safe(result.scenario.name)} ({result.scenario.hash})",
        wrap(result.header()),
        wrap(result.scenario.kick_words()),
    ]


def report(result):
    """Return the table for people, a row per event."""
    classes = result.events[0].classes
    titles = ["event", *(_SHORT.get(c, c.replace("_", " ")) for c in classes), "M [Msun]", "D_L [kpc]", "wrong fit"]
    rows = []
    for e in result:
        mass, distance = e.quantiles("mass_msun"), e.quantiles("distance_kpc")
        cells = [f"{number(q['p16'], 2)}-{number(q['p84'], 2)}" if q else "-" for q in (mass, distance)]
        rows.append([safe(e.name)[:18], *(_p(p) for p in e.probability), *cells, f"{e.outlier_weight:.3f}"])
    says = {}
    for e in result:
        says.setdefault(_general(e.says()), []).append(safe(e.name))
    lines = [wrap(f"{', '.join(names)}: {text}") for text, names in says.items()]
    if any(e.range is not None for e in result):
        lines += ["", report_ranges(result)]
    return "\n".join([*_head(result), "", columns(titles, rows), "", *lines])


def report_ranges(result):
    """Return the table of each event's least and most probability over a family of assumptions."""
    titles = ["range of P", *(_SHORT.get(c, c.replace("_", " ")) for c in result.events[0].classes)]
    rows = []
    for e in result:
        ends = zip(*e.range) if e.range is not None else [None] * len(e.classes)
        rows.append([safe(e.name)[:18], *("-" if pair is None else "-".join(map(_short_p, pair)) for pair in ends)])
    over = f"least and most over this scenario and {len(result.spread)} others: {'; '.join(result.spread)}"
    return "\n".join([columns(titles, rows), wrap(over)])


def _short_p(x):
    return "<1e-6" if x < 1e-6 else f"{x:.4f}" if x >= 1e-3 else f"{x:.1e}".replace("e-0", "e-")


def _general(text):
    """The line on what the answer rests on, without the event's own mass."""
    return text.split(", about ")[0]


def report_one(result):
    """Return the report of a single event."""
    from ..remnants.classes import LABELS

    (e,) = result.events
    titles = ["lens", "P", "prior", "P/P(star)", "floor x0.1", "x10", "M [Msun]", "D_L [kpc]"]
    star = e.p("star") if "star" in e.classes else float("nan")
    ranged = e.range is not None
    if ranged:
        titles.insert(2, "over the family")
    rows = []
    for k, c in enumerate(e.classes):
        p = e.probability[k]
        ratio = (
            number(p / star)
            if star >= 1e-6 and p >= 1e-6
            else "> " * (star < 1e-6 <= p) + number(p / 1e-6)
            if p >= 1e-6
            else "-"
        )
        row = [LABELS.get(c, c.replace("_", " ")), _p(p), _p(e.prior[k]), ratio]
        row += [_p(e.floors[f][k]) for f in (0.1, 10.0)]
        row += [_span(e.quantiles("mass_msun", c), 2), _span(e.quantiles("distance_kpc", c), 2)]
        if ranged:
            row.insert(2, f"{_p(e.range[0][k])} to {_p(e.range[1][k])}")
        rows.append(row)
    lines = [
        f"all classes: M = {_span(e.quantiles('mass_msun'))} Msun, D_L = {_span(e.quantiles('distance_kpc'))} kpc, "
        f"theta_E = {_span(e.quantiles('theta_E_mas'))} mas, mu_rel = {_span(e.quantiles('mu_rel_mas_per_yr'))} mas/yr "
        f"({e.frame})",
        e.says(),
    ]
    if e.outlier_weight > 0 or result.outlier > 0:
        lines.append(
            f"floor: in a share {result.outlier:g} of fits all but t_E is taken as wrong, so that no slip rules a "
            "class out; P with a tenth and with ten times that share stands beside it"
            + "; it takes the geocentric t_E as heliocentric" * (e.frame == "geocentric")
        )
    if e.outlier_weight > 0:
        lines.append(f"the fit is wrong with probability {e.outlier_weight:.4f}")
    if e.effective_samples is not None:
        lines.append(f"effective posterior samples: {e.effective_samples:.0f}")
    if len(e.solutions) > 1:
        total = sum(s.evidence for s in e.solutions)
        for s in e.solutions:
            parts = ", ".join(f"{_SHORT.get(c, c)} {_p(p)}" for c, p in zip(e.classes, s.probability))
            lines.append(f"solution {safe(s.name) or '-'} (weight {s.evidence / total:.3f}): {parts}")
    return "\n".join([*_head(result), "", columns(titles, rows), "", *(wrap(x) for x in lines)])
