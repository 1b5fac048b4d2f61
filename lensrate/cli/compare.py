"""``lensrate compare``: an observed sample against the forecast of the survey that found it."""

import click

from .base import Command, announce
from .options import dask
from .text import columns, number, safe, wrap

_NAMES = {
    "ks": "t_E, Kolmogorov-Smirnov", "anderson_darling": "t_E, Anderson-Darling", "deviance": "t_E, binned deviance",
    "pi_E_ks": "pi_E given t_E, Kolmogorov-Smirnov", "pi_E_anderson_darling": "pi_E given t_E, Anderson-Darling",
    "sky": "events by field, deviance", "magnitude": "source magnitude, deviance",
}  # fmt: skip


@click.command(cls=Command, short_help="Compare observed events with what scenarios expect.")
@click.argument("sample", metavar="SAMPLE")
@click.option("--campaign", "campaign_file", metavar="FILE",
              help="Whose fields, sources and efficiency apply: a campaign file or 'marram' (invented).")
@click.option("--scenario", "scenario_names", metavar="NAME|FILE", multiple=True,
              help="May be repeated: scenarios side by side. Default the campaign's, or 'default'.")
@click.option("--kicks", metavar="LAW", multiple=True,
              help="Kick law of neutron stars instead of the scenario's; may be repeated: side by side.")
@click.option("--bh-kicks", metavar="LAW", help="Kick law of black holes: same, momentum, or a law.")
@click.option("--sources", metavar="RULE", help="Source rule where there is no campaign.")
@click.option("--u-0-limit", type=float, metavar="U", help="Largest impact parameter where there is no campaign.")
@click.option("--efficiency", "efficiency_file", metavar="FILE",
              help="t_E, efficiency, where there is no campaign; without one every event counts as found.")
@click.option("--counts", default="auto", show_default=True, metavar="auto|absolute|shape",
              help="Whether expected numbers count: absolute only where the campaign states the stars monitored.")
@click.option("--fit", is_flag=True, help="Fit a shift and a stretch of ln t_E first; simulated samples likewise.")
@click.option("--tail", type=float, default=100.0, show_default=True, metavar="DAYS", help="The long tail begins here.")
@click.option("--simulations", type=click.IntRange(0, 100_000), default=500, show_default=True,
              help="Samples drawn for the null distributions.")
@click.option("--seed", type=click.IntRange(0), default=1, show_default=True, help="Of the simulations.")
@click.option("--frame", metavar="FRAME", help="heliocentric or geocentric, where the sample does not say it.")
@click.option("--t-0par", "t_0par", type=float, metavar="MJD", help="Reference epoch of geocentric events.")
@click.option("--skip-bad", is_flag=True, help="Leave bad rows out instead of refusing the sample.")
@click.option("--by", type=click.Choice(["bin", "field", "test", "event", "scenario"]), default="bin",
              show_default=True, help="Rows of the table that --save writes.")
@click.option("--plot", metavar="FILE", help="Draw one page: .png .pdf .svg.")
@click.option("--jobs", type=click.IntRange(1, 256), default=1, show_default=True, help="Threads over fields.")
@dask
@click.option("--save", metavar="FILE", help="Write a table: .ecsv .csv (# begins comments) .fits .vot .json.")
@click.option("--json", "as_json", is_flag=True, help="Print JSON instead of a table.")
@click.option("--overwrite", is_flag=True, help="Replace existing files.")
@click.option("--quiet", "-q", is_flag=True, help="No messages on stderr.")
def compare(
    sample, campaign_file, scenario_names, kicks, bh_kicks, sources, u_0_limit, efficiency_file, counts, fit, tail,
    simulations, seed, frame, t_0par, skip_bad, by, plot, jobs, address, save, as_json, overwrite, quiet,
):  # fmt: skip
    """Compare observed events (SAMPLE) with what a scenario says the survey finds.

    SAMPLE is a table with event, l, b (or ra, dec), t_E, t_E_err and more where known. The forecast is folded with
    efficiency and errors of measurement; the data are divided by efficiency only in the event-weighted optical depth
    and rate. Without --campaign only shapes are compared.

    \b
    Examples:
      lensrate compare events.ecsv --campaign marram --plot compare.png
      lensrate compare events.ecsv --campaign marram --kicks igoshev2020 --kicks hobbs2005
      lensrate compare events.csv --sources limit:I=19 --efficiency curve.ecsv --fit
    """
    from ..io import PICTURES, TABLES, check_target, dump_json, write_table

    if save:
        check_target(save, TABLES, overwrite)
    if plot:
        check_target(plot, PICTURES, overwrite, "--plot")
    if by != "bin" and not save:
        raise click.UsageError("--by has no effect here: it goes with --save")
    if campaign_file and (sources or efficiency_file or u_0_limit is not None):
        raise click.UsageError(
            "--sources, --u-0-limit and --efficiency have no effect with --campaign, which states its own"
        )
    from ..errors import one_of
    from ..events.compare import COUNTS

    one_of("--counts", counts, COUNTS)
    from ..events.observed import Sample

    events = Sample.read(sample, frame, t_0par, skip_bad)
    from ..events.versus import compare_sample
    from ..surveys.campaign import Campaign
    from ..surveys.efficiency import Efficiency

    survey = Campaign.read(campaign_file) if campaign_file else None
    scenarios = _scenarios(scenario_names or (survey.scenario if survey else "default",), kicks, bh_kicks, sources,
                           u_0_limit)
    curve = Efficiency.read(efficiency_file) if efficiency_file else None
    from ..parallel import cluster

    announce(quiet)
    with cluster(address) as executor:
        result = compare_sample(
            events, scenarios, survey, efficiency=curve, jobs=jobs, executor=executor, counts=counts, fit=fit,
            progress=None if quiet else "fields", tail=tail, simulations=simulations, seed=seed,
        )  # fmt: skip
    first = result.comparisons[0]
    if plot:
        from .. import plots

        plots.save_comparison(first, plot, overwrite)
    if save:
        table = result.to_table() if by == "scenario" else first.to_table(by)
        write_table(table, save, overwrite, payload=result.to_dict())
    click.echo(dump_json(result.to_dict()) if as_json else report(result))
    if not quiet:
        for note in dict.fromkeys([*(n for c in result.comparisons for n in c.notes), *first.folded.warnings]):
            click.echo(wrap(f"note: {note}"), err=True)


def _scenarios(names, kicks, bh_kicks, sources, u_0_limit):
    """Every scenario named, under every kick law."""
    from ..scenario import Scenario

    out = []
    for name in (names,) if isinstance(names, str) else names:
        changes = {"bh_kicks": bh_kicks, "sources": sources, "u_0_limit": u_0_limit}
        changes = {k: v for k, v in changes.items() if v is not None}
        base = Scenario.read(name)
        base = base.replace(**changes) if changes else base
        out += [base.replace(kicks=law) for law in kicks] if kicks else [base]
    return out


def report(result):
    """Return the tables for people."""
    from ..events.comparison import OUTLIER
    from ..remnants.classes import LABELS

    first = result.comparisons[0]
    s = first.folded.scenario
    invented = " (invented)" if first.sample.invented else ""
    lines = [
        wrap(f"lensrate {first.version}   {safe(first.sample.name)}{invented}: {len(first.events)} events   scenario "
             f"{s.name} ({s.hash})   kicks {s.kicks}   seed {first.seed}"),
        wrap(first.header()),
        "",
    ]  # fmt: skip
    if first.fitted is not None:
        lines += [f"fitted before testing: t_E times {2.718281828459045 ** first.fitted[0]:.3f}, spread of ln t_E "
                  f"times {first.fitted[1]:.3f}", ""]  # fmt: skip
    some = first.predicted.sum(axis=1) > 0
    names = [n for n, k in zip(first.classes, some) if k]
    rows = []
    for i, (low, high) in enumerate(zip(first.edges[:-1], first.edges[1:])):
        row = [f"{low:.3g} to {high:.3g}", str(first.observed[i]), number(first.predicted[:, i].sum())]
        rows.append([*row, *(number(x) for x in first.predicted[some, i])])
    total = ["all", str(first.observed.sum()), number(first.predicted.sum(), 4)]
    rows.append([*total, *(number(x) for x in first.predicted[some].sum(axis=1))])
    lines.append(columns(["t_E [d]", "seen", "expected", *(LABELS.get(n, n.replace("_", " ")) for n in names)], rows))
    rows = [[_NAMES[k], number(t.value, 4), f"{t.p:.3f}" if t.p == t.p else "-"] for k, t in first.tests.items()]
    lines += ["", columns(["test", "value", "p"], rows)]
    if first.tests["ks"].n:
        lines.append(wrap(f"p: share of {first.tests['ks'].n} simulated samples that are as far off, or more"))
    lines += ["", wrap(tail_words(first)), *_estimates(first)]
    if first.folded.survey is not None:
        lines += ["", _fields(first)]
    if len(result.comparisons) > 1:
        lines += ["", _side_by_side(result)]
        words = f"ln L: a share of {OUTLIER:g} of events may be none of the forecast's, even in ln t_E and ln pi_E"
        lines.append(wrap(words))
    return "\n".join(lines)


def tail_words(c):
    """Return the long tail in a sentence."""
    t = c.tail
    by = ", ".join(f"{n.replace('_', ' ')}s {number(x, 2)}" for n, x in zip(c.classes, c.tail_by_class) if x > 0)
    how = "Poisson" if t.absolute else "binomial among the events seen"
    return (
        f"t_E above {t.beyond:g} d: {t.observed} seen, {number(t.expected)} expected ({by}); chance of so few or fewer "
        f"{t.p_at_most:.3g}, of so many or more {t.p_at_least:.3g} (exact, {how})"
    )


def _estimates(c):
    lines = []
    for label, unit, e in (("optical depth", 1e-6, c.optical_depth), ("rate per star and year", 1e-6, c.rate)):
        if e is not None:
            lines.append(
                wrap(f"event-weighted {label}, inside the efficiency curve: {e.value / unit:.3g} +- "
                     f"{e.error / unit:.2g} x 1e-6 (largest event {e.largest_share:.0%}); forecast "
                     f"{e.predicted / unit:.3g} x 1e-6")
            )  # fmt: skip
    return lines


def _fields(c):
    rows = []
    for f in c.fields:
        chance = ["-", "-"] if not f.anchored else [f"{f.p_at_most:.3f}", f"{f.p_at_least:.3f}"]
        rows.append([safe(f.name)[:20], str(f.observed), number(f.expected), *chance])
    return columns(["field", "seen", "expected", "P(<= seen)", "P(>= seen)"], rows)


def _side_by_side(result):
    rows = []
    for c, d in zip(result.comparisons, result.differences):
        s = c.folded.scenario
        p = [f"{c.tests[k].p:.3f}" for k in ("ks", "deviance")]
        rows.append([s.name, s.kicks, number(c.predicted.sum(), 4), *p, number(d["t_E"]), number(d["pi_E"]),
                     number(d["counts"]), number(d["total"])])  # fmt: skip
    titles = ["scenario", "kicks", "expected", "p KS", "p deviance", "t_E", "pi_E", "counts", "ln L - best"]
    return columns(titles, rows, left=2)
