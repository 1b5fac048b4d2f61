"""``lensrate campaign``: expected events of a survey by lens class."""

import click

from .base import Command, announce
from .options import dask
from .text import columns, number, safe, wrap

_DEFAULT_EVENTS = 20000


@click.command(cls=Command, short_help="Expected events of a survey, by lens class and field.")
@click.argument("file", metavar="FILE")
@click.option("--scenario", "scenario_name", metavar="NAME|FILE", help="Instead of the campaign's own scenario.")
@click.option("--kicks", metavar="LAW", help="Kick law of neutron stars: a published set or maxwell:265.")
@click.option("--bh-kicks", metavar="LAW", help="Kick law of black holes: same, momentum, or a law.")
@click.option(
    "--family",
    "family_name",
    metavar="NAME|FILE",
    default="default",
    show_default=True,
    help="Family of assumptions behind the range; 'none' for no range.",
)
@click.option(
    "--exact", is_flag=True, help="Range over alternatives that need new integrals too (seconds a field each)."
)
@click.option("--facilities", metavar="NAME|FILE", help="Who measures masses: 'marram' (invented) or a TOML file.")
@click.option(
    "--mass-error",
    type=click.FloatRange(0.001, 10.0),
    default=0.2,
    show_default=True,
    help="A mass counts as measured below this relative error.",
)
@click.option(
    "--mass-events",
    "n_mass",
    type=click.IntRange(50, 1_000_000),
    default=2000,
    show_default=True,
    help="Mock events a field behind the mass measurements.",
)
@click.option("--mass-plot", metavar="FILE", help="Draw measured black holes against hours.")
@click.option(
    "--kick-yield",
    "kick_class",
    type=click.Choice(["neutron_star", "black_hole"]),
    help="Show the yield of this class against kick speed.",
)
@click.option(
    "--events",
    "n_events",
    type=click.IntRange(100, 10_000_000),
    default=_DEFAULT_EVENTS,
    show_default=True,
    help="Mock events a field behind the distributions.",
)
@click.option("--seed", type=click.IntRange(0), default=1, show_default=True, help="Of the mock events.")
@click.option(
    "--by",
    type=click.Choice(["class", "field"]),
    default="class",
    show_default=True,
    help="Rows of the table that --save writes.",
)
@click.option("--plot", metavar="FILE", help="Draw one page: .png .pdf .svg.")
@click.option("--proposal", metavar="FOLDER", help="Write table, LaTeX, methods, BibTeX and page into a new folder.")
@click.option("--jobs", type=click.IntRange(1, 256), default=1, show_default=True, help="Threads over fields.")
@dask
@click.option("--save", metavar="FILE", help="Write a table: .ecsv .csv (# begins comments) .fits .vot .json.")
@click.option("--json", "as_json", is_flag=True, help="Print JSON instead of a table.")
@click.option("--overwrite", is_flag=True, help="Replace existing files.")
@click.option("--quiet", "-q", is_flag=True, help="No messages on stderr.")
def campaign(
    file, scenario_name, kicks, bh_kicks, family_name, exact, facilities, mass_error, n_mass, mass_plot, kick_class,
    n_events, seed, by,
    plot, proposal, jobs, address, save, as_json, overwrite, quiet,
):  # fmt: skip
    """Expected events of the survey that FILE describes, by lens class.

    FILE is a TOML file of fields, seasons, photometry and efficiency, or 'marram', an invented example. The range over
    a family of assumptions is no standard error. With observed numbers of events in FILE the forecast is also scaled
    to them, field by field.

    \b
    Examples:
      lensrate campaign marram
      lensrate campaign marram --kicks hobbs2005 --plot page.png
      lensrate campaign marram --facilities marram --mass-error 0.2
      lensrate campaign marram --kick-yield neutron_star --plot kicks.png
      lensrate campaign my_survey.toml --exact --jobs 2 --proposal proposal/
    """
    from ..io import PICTURES, TABLES, check_target, dump_json, write_table
    from ..parallel import cluster
    from ..scenario import Scenario

    if save:
        check_target(save, TABLES, overwrite)
    if plot:
        check_target(plot, PICTURES, overwrite, "--plot")
    if mass_plot:
        check_target(mass_plot, PICTURES, overwrite, "--mass-plot")
    folder = _new_folder(proposal, overwrite) if proposal else None
    _no_idle_options(save, facilities, plot or proposal, proposal, kick_class, family_name)
    from ..surveys.campaign import Campaign

    survey = Campaign.read(file)
    base = Scenario.read(scenario_name or survey.scenario)
    changes = {k: v for k, v in (("kicks", kicks), ("bh_kicks", bh_kicks)) if v is not None}
    base = base.replace(**changes) if changes else base
    from ..surveys.family import Family
    from ..surveys.yields import campaign as forecast

    family = None if family_name == "none" else Family.read(family_name)
    announce(quiet)
    with cluster(address) as executor:
        result = forecast(
            survey, base, family=family, exact=exact, jobs=jobs, executor=executor, progress=None if quiet else "fields"
        )
    if facilities:
        from ..events.masses import mass_forecast

        result = mass_forecast(result, facilities, mass_error, n_mass, seed, jobs)
    curve = None
    if kick_class:
        from ..surveys.kick_yield import kick_yield

        curve = kick_yield(result, kick_class)
    if plot:
        from .. import plots

        if curve is not None:
            plots.save_kick_yield(curve, plot, overwrite)
        else:
            plots.save_campaign(result, plot, overwrite, n=n_events, seed=seed)
    if mass_plot:
        from .. import plots

        plots.save_masses(result, mass_plot, overwrite)
    if save:
        table = curve.to_table() if curve is not None else result.to_table(by)
        write_table(table, save, overwrite, payload=curve.to_dict() if curve is not None else result.to_dict())
    if folder is not None:
        _write_proposal(folder, result, n_events, seed)
    if as_json:
        made = result.to_dict()
        if curve is not None:
            made["kick_yield"] = curve.to_dict()
        click.echo(dump_json(made))
    else:
        click.echo(report(result, curve))
    if not quiet:
        for warning in result.warnings:
            click.echo(wrap(f"note: {warning}"), err=True)


def _no_idle_options(save, facilities, pages, proposal, kick_class, family_name):
    """Refuse options that were typed and would do nothing."""
    yields = "which --kick-yield takes for its own table or picture"
    idle = {
        "by": (bool(kick_class) or not save, f"it goes with --save{kick_class and f', {yields}' or ''}"),
        "exact": (family_name == "none", "it goes with a --family"),
        "mass_error": (not facilities, "it goes with --facilities"),
        "n_mass": (not facilities, "it goes with --facilities"),
        "mass_plot": (not facilities, "it goes with --facilities"),
        "n_events": (not pages, "it goes with --plot or --proposal"),
        "seed": (not (pages or facilities), "it goes with --plot, --proposal or --facilities"),
    }
    if kick_class and not proposal:
        idle["n_events"] = (True, f"it goes with --plot, {yields}")
        idle["seed"] = (not facilities, f"it goes with --plot, {yields}")
    names = {"n_events": "events", "mass_error": "mass-error", "n_mass": "mass-events", "mass_plot": "mass-plot"}
    for option, (useless, why) in idle.items():
        if useless and _typed(option):
            raise click.UsageError(f"--{names.get(option, option)} has no effect here: {why}")


def _typed(option):
    return click.get_current_context().get_parameter_source(option).name == "COMMANDLINE"


def _new_folder(name, overwrite):
    """The folder of --proposal: made if it is not there, refused if it holds something."""
    from pathlib import Path

    from ..errors import InputError

    folder = Path(name)
    if folder.exists() and not folder.is_dir():
        raise InputError(f"--proposal: '{name}' is a file; name a folder")
    if folder.is_dir() and any(folder.iterdir()) and not overwrite:
        raise InputError(f"--proposal: folder '{name}' is not empty; choose another or add --overwrite")
    if not folder.parent.is_dir():
        raise InputError(f"--proposal: folder '{folder.parent}' does not exist; make it first")
    return folder


def _write_proposal(folder, result, n_events, seed):
    from .. import plots
    from ..io import whole_file, write_table
    from ..surveys import report as words
    from ..surveys.bibliography import bibtex

    folder.mkdir(exist_ok=True)
    texts = {
        "table.tex": words.latex(result),
        "methods.txt": words.headline(result) + "\n\n" + words.methods(result),
        "references.bib": bibtex(result.references, result.meta()),
    }
    for name, text in texts.items():
        with whole_file(folder / name) as temporary:
            temporary.write_text(text + "\n", encoding="utf-8")
    write_table(result.to_table(), folder / "by_class.ecsv", True)
    write_table(result.to_table("field"), folder / "by_field.ecsv", True)
    if result.masses is not None:
        write_table(result.masses.to_table(), folder / "masses.ecsv", True)
    plots.save_campaign(result, folder / "page.pdf", True, n=n_events, seed=seed)


def report(result, curve=None):
    """Return the tables for people."""
    from ..remnants.classes import LABELS
    from ..surveys.report import headline
    from ..surveys.yields import poisson_68

    survey = result.campaign
    head = [
        wrap(f"lensrate {result.version}   {survey.name} ({survey.hash})   scenario {result.scenario.name} "
             f"({result.scenario.hash})"),
        wrap(result.header()),
        wrap(result.scenario.kick_words()),
        "",
        wrap(headline(result)),
        "",
    ]  # fmt: skip
    events, scaled = result.by_class(), result.scaled_by_class()
    sampling = [sum(f.sampling[i] for f in result.fields) for i in range(len(result.classes))]
    titles = ["lens", "events", "68% counts"]
    titles += ["range"] * (result.ranges is not None) + ["+- (kick fields)", "P(>=1)"]
    titles += ["scaled"] * (scaled is not None)
    rows = []
    for i, name in enumerate([*result.classes, "all"]):
        low, high = poisson_68(events[i])
        row = [LABELS.get(name, name.replace("_", " ")), number(events[i]), f"{low}-{high}"]
        if result.ranges is not None:
            row.append(f"{number(result.ranges[i][0])} to {number(result.ranges[i][1])}")
        kicked = i < len(sampling) and sampling[i] > 0
        p = -_expm1(-events[i])
        row += [number(sampling[i], 2) if kicked else "-", f"{p:.3f}" if p < 0.9995 else ">0.999"]
        if scaled is not None:
            row.append(number(scaled[i]))
        rows.append(row)
    lines = [*head, columns(titles, rows)]
    if result.ranges is not None:
        over = ", ".join(result.range_over) or "no assumption that differs from the scenario's"
        lines.append(wrap(f"range: least and most over {over}, one at a time (family {result.family})"))
    if any(s > 0 for s in sampling):
        lines.append(wrap("+- (kick fields): from the finite number of orbits behind the kicked remnants' density"))
    if scaled is not None:
        lines.append(wrap(f"scaled: share x events observed in {', '.join(map(safe, result.scaled_fields()))}"))
    lines += ["", _fields(result)]
    if result.masses is not None:
        lines += ["", _masses(result.masses)]
    if curve is not None:
        lines += ["", _kicks(curve)]
    return "\n".join(lines)


def _expm1(x):
    import math

    return math.expm1(x)


_SHORT = {"star": "stars", "brown_dwarf": "BD", "white_dwarf": "WD", "neutron_star": "NS", "black_hole": "BH"}
_SEASONS = 12  # listed one by one


def _fields(result):
    bands = list(dict.fromkeys(b for f in result.fields for b in f.sightline.sources["extinction"]))
    classes = [_SHORT.get(c, c)[:8] for c in result.classes]
    titles = ["field", "l", "b", "deg2", *(f"A_{b}" for b in bands), "sources/1e6", *classes, "all"]
    titles += ["seen"] if result.scaled_fields() else []
    rows = []
    for f in result.fields:
        each, dust = f.expected.sum(axis=1), f.sightline.sources["extinction"]
        row = [safe(f.field.name)[:14], f"{f.field.l_deg:.2f}", f"{f.field.b_deg:.2f}", f"{f.field.area_deg2:.2f}"]
        row += [f"{dust[b]:.2f}{'*' * (f.dust_from == 'dust disc')}" if b in dust else "-" for b in bands]
        row += [number(f.sources / 1e6), *map(number, each), number(each.sum())]
        if result.scaled_fields():
            row.append("-" if f.field.observed_events is None else f"{f.field.observed_events:g}")
        rows.append(row)
    lines = [columns(titles, rows)]
    if any(f.dust_from == "dust disc" for f in result.fields):
        lines.append("* not stated: that of the smooth dust disc")
    seasons = result.campaign.calendar.seasons
    if 1 < len(seasons) <= _SEASONS:
        by = result.expected.sum(axis=0)
        rows = [
            [safe(s.name)[:14], f"{s.length - s.gap_days:.0f}", *map(number, by[:, j]), number(by[:, j].sum())]
            for j, s in enumerate(seasons)
        ]
        lines += ["", columns(["season", "days open", *classes, "all"], rows)]
    return "\n".join(lines)


def _kicks(curve):
    rows = [["unkicked", number(curve.per_born[0] * 1e9), "-"]]
    for low, high, y, e in zip(curve.edges[:-1], curve.edges[1:], curve.per_born[1:], curve.sampling[1:]):
        rows.append([f"{low:g} to {high:g}", number(y * 1e9), number(e * 1e9, 2)])
    named = "; ".join(f"{name} {number(events)}" for name, events in curve.named().items())
    label = curve.lens.replace("_", " ")
    return "\n".join(
        [
            wrap(f"yield of {label}s against kick speed ({number(curve.born)} born in the Galaxy)"),
            columns(["kick [km/s]", "events per 1e9 born", "+- (kick fields)"], rows),
            wrap(f"expected events with every {label} under a law: {named}"),
        ]
    )


def _masses(made):
    from ..events.masses import HOURS
    from ..remnants.classes import LABELS

    lines = [f"masses measured to {made.limit:.0%} ({made.number} mock events, seed {made.seed})"]
    titles = ["lens", "found", *(f.facility.name[:24] for f in made.facilities)]
    rows = []
    for lens, first in made.facilities[0].counts.items():
        each = [f.counts[lens] for f in made.facilities]
        cells = [
            f"{number(row['measured'])} +- {number(row['standard_error'], 2)}" if row["measured"] > 0 else "none drawn"
            for row in each
        ]
        rows.append([LABELS.get(lens, lens.replace("_", " ")), number(first["events"]), *cells])
    for h in HOURS:
        cells = [number(f.follow.at(h).get("black_hole", 0.0)) for f in made.facilities]
        rows.append([f"black holes in {h:g} h", "-", *cells])
    rows.append(["hours for all", "-", *(number(f.follow.hours[-1]) for f in made.facilities)])
    lines.append(columns(titles, rows))
    lines.append(wrap("events followed longest t_E first; +- is the error of the finite number of mock events"))
    invented = [f.facility.name for f in made.facilities if f.facility.invented]
    if invented:
        lines.append(wrap(f"invented: {', '.join(map(safe, invented))}"))
    return "\n".join(lines)
