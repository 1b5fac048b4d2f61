"""``lensrate spread``: the same forecast over a family of assumptions."""

import click

from .base import Command, announce
from .options import assumptions, output, read_scenario
from .progress import Progress
from .sightline import direction
from .text import columns, number, safe, wrap

_SHOWN = (
    ("events", "all"), ("events", "neutron_star"), ("events", "black_hole"),
    ("optical_depth", "all"), ("rate", "all"), ("median_t_E", "all"), ("share_of_events", "white_dwarf"),
    ("share_of_events", "neutron_star"), ("share_of_events", "black_hole"),
)  # fmt: skip
_HEADS = {
    "events": ("events", 1.0),
    "scaled_to_observed": ("scaled", 1.0),
    "optical_depth": ("tau [1e-6]", 1e6),
    "rate": ("rate [1e-6/yr]", 1e6),
    "mean_t_E": ("mean t_E [d]", 1.0),
    "median_t_E": ("median t_E [d]", 1.0),
    "share_of_events": ("share", 1.0),
}
_SHORT = {"star": "star", "brown_dwarf": "BD", "white_dwarf": "WD", "neutron_star": "NS", "black_hole": "BH"}
_LENSES = [*_SHORT, "all"]
_WIDEST = 23  # letters of an alternative's name


@click.command(cls=Command, short_help="Spread of a forecast over a family of assumptions.")
@click.argument("lon", metavar="L", required=False)
@click.argument("lat", metavar="B", required=False)
@click.option("--campaign", "survey", metavar="FILE", help="A campaign instead of L B: its file, or 'marram'.")
@click.option("--icrs", is_flag=True, help="Take RA Dec (degrees, or hh:mm:ss dd:mm:ss) instead of l b.")
@click.option(
    "--family",
    "family_name",
    metavar="NAME|FILE",
    default="default",
    show_default=True,
    help="Named family of assumptions (default, kicks) or TOML file.",
)
@click.option("--axis", "axes", metavar="NAME", multiple=True, help="Only this axis of the family; may be repeated.")
@click.option("--combinations", is_flag=True, help="All combinations too, not only one change at a time.")
@click.option("--exact", is_flag=True, help="Let mass functions and remnant masses change the source stars too.")
@click.option("--number", "which", type=click.Choice(list(_HEADS)), help="Show this number only.")
@click.option("--lens", metavar="CLASS", help="Show this lens class only: star, neutron_star, ..., all.")
@assumptions
@click.option(
    "--t-E-range",
    "t_E_range",
    type=float,
    nargs=2,
    metavar="LOW HIGH",
    help="Limit what is reported to these timescales in days.",
)
@click.option(
    "--by",
    type=click.Choice(["alternative", "range"]),
    default="alternative",
    show_default=True,
    help="Rows of the table that --save writes.",
)
@click.option("--plot", metavar="FILE", help="Draw what moves the numbers most: .png .pdf .svg.")
@click.option("--jobs", type=click.IntRange(1, 256), default=1, show_default=True, help="Threads.")
@output
def spread(
    lon, lat, survey, icrs, family_name, axes, combinations, exact, which, lens, t_E_range, by, plot, jobs, save,
    as_json, overwrite, quiet, **choices
):  # fmt: skip
    """Spread of a forecast toward L B (degrees), or of a campaign, over a family of assumptions.

    Every assumption is changed alone, and with --combinations all together. What comes out is a range, not a standard
    error, unless the family states weights.

    \b
    Examples:
      lensrate spread 1.0 -3.9
      lensrate spread 1.0 -3.9 --number share_of_events --lens neutron_star --plot spread.png
      lensrate spread 1.0 -3.9 --family kicks --combinations --save kicks.ecsv
      lensrate spread 1.0 -3.9 --axis kicks --axis imf --combinations --json
      lensrate spread 1.0 -2.9 --extinction I=1.25 --family my_family.toml --exact
      lensrate spread --campaign marram --axis kicks --axis ifmr
    """
    import astropy.units as u

    from ..errors import one_of
    from ..io import PICTURES, TABLES, check_target

    if save:
        check_target(save, TABLES, overwrite)
    if plot:
        check_target(plot, PICTURES, overwrite, "--plot")
    if not save and click.get_current_context().get_parameter_source("by").name == "COMMANDLINE":
        raise click.UsageError("--by has no effect here: it goes with --save")
    if survey is not None and click.get_current_context().get_parameter_source("scenario_name").name != "COMMANDLINE":
        from ..surveys.campaign import Campaign

        choices["scenario_name"] = Campaign.read(survey).scenario
    scenario = read_scenario(**choices)
    place = _place(lon, lat, survey, icrs, exact, t_E_range)
    if lens is not None:
        own = {**scenario.build_galaxy().lens_class, **scenario.lens_class}
        one_of("--lens", lens, list(dict.fromkeys([*_LENSES, *own])))
    if which is not None:
        one_of(f"--number of a {'sightline' if survey is None else 'campaign'}", which, _numbers(survey))
    from ..surveys.family import Family
    from ..surveys.spread import sightline_spread

    family = Family.read(family_name)
    announce(quiet)
    with Progress("spread", quiet) as progress:
        options = {"combinations": combinations, "axes": list(axes), "jobs": jobs, "progress": progress}
        if survey is not None:
            from ..surveys.campaign_spread import campaign_spread

            result = campaign_spread(survey, family, scenario, **options)
        else:
            limits = tuple(t_E_range) * u.day if t_E_range else None
            result = sightline_spread(*place, family, scenario, exact=exact, t_E_range=limits, **options)
    pairs = shown(result, which, lens)
    if plot:
        from ..plots import save_spread

        save_spread(result, plot, pairs[:6] if which or lens else None, overwrite)
    if save:
        from ..io import write_table

        write_table(result.to_table(by), save, overwrite, payload=result.to_dict())
    if as_json:
        from ..io import dump_json

        click.echo(dump_json(result.to_dict()))
    else:
        click.echo(report(result, pairs))
    if not quiet:
        for note in notes(result):
            click.echo(wrap(f"note: {note}"), err=True)


def _place(lon, lat, survey, icrs, exact, t_E_range):
    """Direction of L B; None with a campaign, which takes nothing that belongs to one direction."""
    if survey is None:
        if lon is None or lat is None:
            raise click.UsageError("L and B are missing; give them in degrees, or --campaign FILE")
        return direction(lon, lat, icrs)
    context = click.get_current_context()
    typed = ("sources", "extinction", "u_0_limit")
    idle = [n for n in typed if context.get_parameter_source(n).name == "COMMANDLINE"]
    idle += [n for n, given in (("icrs", icrs), ("exact", exact), ("t_E_range", t_E_range)) if given]
    if lon is not None:
        raise click.UsageError("L B and --campaign are both given; keep one")
    if idle:
        raise click.UsageError(f"--{idle[0].replace('_', '-')} has no effect with --campaign, which states its own")
    return None


def _numbers(survey):
    """Names of the numbers that there will be."""
    if survey is None:
        from ..surveys.spread import SightlineForecast

        return list(SightlineForecast.units)
    from ..surveys.campaign import Campaign
    from ..surveys.campaign_spread import CampaignForecasts

    scaled = any(f.observed_events is not None for f in Campaign.read(survey).fields)
    return [n for n in CampaignForecasts.units if scaled or n != "scaled_to_observed"]


def shown(result, which, lens):
    """Return the (number, lens) pairs to show."""
    if which and lens:
        return [(which, lens)]
    if which:
        return [(which, x) for x in result.lenses if not (which == "share_of_events" and x == "all")]
    if lens:
        return [(n, lens) for n in result.numbers if not (n == "share_of_events" and lens == "all")]
    return [(n, x) for n, x in _SHOWN if x in result.lenses and n in result.numbers]


def notes(result):
    """Return warnings, and what was left out or kept."""
    out = list(result.warnings)
    if result.left_out:
        out.append(f"left out, since they do not fit the base scenario: {', '.join(result.left_out)}")
    if any("source stars are still" in w for w in result.warnings):
        out.append("with --exact, mass functions and remnant masses change the source stars too")
    held = [a.name for a in result.family.axes if not a.combine]
    if result.combined is not None and held:
        out.append(f"not combined by this family: {', '.join(held)} (choose axes with --axis to combine them)")
    return out


def _where(about):
    if "campaign" in about:
        return f"{safe(about['campaign'])} ({about['campaign_hash']})"
    return f"l = {about['l_deg']:.4f}, b = {about['b_deg']:.4f} deg"


def report(result, pairs):
    """Return the table for people."""
    about, base, family = result.about, result.base, result.family
    head = [
        f"lensrate {result.version}   {_where(about)}   scenario {safe(base.name)} ({base.hash})",
        wrap(f"base: {result.header()}"),
        wrap(
            f"base: {base.kick_words()}; remnant masses {base.ifmr}; "
            f"mass function {base.imf or 'of each component'}; Galaxy {base.galaxy}"
        ),
        wrap(f"family {family.name} ({family.hash}): one assumption changed at a time; ranges, not standard errors"),
    ]
    if about.get("exact"):
        head.append("exact: source stars follow mass function and remnant masses")
    several = len({x for _, x in pairs}) > 1
    titles = ["assumption", *(_title(n, x, several) for n, x in pairs)]
    if len(pairs) == 1:
        titles += ["/ base", "source"]
    if len({n for n, _ in pairs}) == 1:
        head.append(f"number: {_HEADS[pairs[0][0]][0]}")
    if not several:
        head.append(f"lenses: {_who(pairs[0][1])}")
    elif any(x == "all" for _, x in pairs):
        head.append("numbers without a class are of all lenses")
    body = [_line("base", result.rows[0], pairs, result)]
    for axis in family.axes:
        rows = [r for r in result.rows if r.axis == axis.name]
        if rows:
            body.append([f"{axis.label} ({axis.name})"])
            body += [_line(f"  {_cut(r.alternative)}", r, pairs, result) for r in rows]
    ranges = [result.range(n, x) for n, x in pairs]
    body += _extremes("one at a time", ranges, pairs)
    if result.combined is not None:
        both = [result.combined_range(n, x) for n, x in pairs]
        body += _extremes(f"{len(result.combined_labels)} combinations", both, pairs)
    parts = ["\n".join(head), _table(titles, body), "\n".join(wrap(s) for s in _movers(result, pairs))]
    weights = _weights(result, pairs)
    if weights:
        parts.append("\n".join(wrap(s) for s in weights))
    return "\n\n".join(p for p in parts if p)


def _table(titles, body):
    """Rows under titles; a row of one cell is a heading and may run on to the right."""
    sources = titles[-1] == "source"
    cut = len(titles) - sources
    rows = [row[:cut] if len(row) > 1 else [""] * cut for row in body]
    lines = columns(titles[:cut], rows).splitlines()
    if sources:
        # text, which has what room is left
        width = max(map(len, lines)) + 2
        texts = [titles[-1], *(row[-1] if len(row) > 1 else "" for row in body)]
        lines = [f"{line:<{width}}{_cut(safe(t), 100 - width)}".rstrip() for line, t in zip(lines, texts)]
    return "\n".join([lines[0], *(safe(row[0]) if len(row) == 1 else line for row, line in zip(body, lines[1:]))])


def _title(n, lens, several):
    word = _HEADS[n][0]
    if not several or lens == "all":
        return word
    short = _SHORT.get(lens) or _cut(lens, 12)
    return f"{short} {word}" if n == "share_of_events" else short


def _cut(text, room=_WIDEST):
    return text if len(text) <= room else text[: room - 3] + "..."


def _line(label, row, pairs, result):
    cells = [label, *(number(row.values[x][n] * _HEADS[n][1], 4) for n, x in pairs)]
    if len(pairs) == 1:
        n, x = pairs[0]
        base = result.rows[0].values[x][n]
        cells += [f"{row.values[x][n] / base:.3f}" if base > 0 and row.alternative else "", row.source]
    return cells


def _extremes(label, ranges, pairs):
    rows = [[label]]
    for word in ("low", "high"):
        cells = [number(getattr(r, word) * _HEADS[n][1], 4) for r, (n, _) in zip(ranges, pairs)]
        if len(pairs) == 1:
            r = ranges[0]
            ratio = getattr(r, word) / r.base if r.base > 0 else float("nan")
            cells += [number(ratio, 4), getattr(r, f"{word}_by")]
        rows.append([f"  {word}est", *cells])
    return rows


def _movers(result, pairs):
    """One line a number: what moves it most."""
    labels = {a.name: a.label for a in result.family.axes}
    out = []
    for n, lens in pairs:
        moved = [(labels[a], m) for a, m in result.moves(n, lens).items() if m > 0]
        if moved:
            first = ", ".join(f"{a} ({_factor(m)})" for a, m in moved[:3])
            word = _HEADS[n][0].split(" [")[0]
            out.append(f"{word} of {_who(lens)}: moved most by {first}")
    return out


def _who(lens):
    return "all lenses" if lens == "all" else lens.replace("_", " ") + "s"


def _factor(m):
    import math

    if m == math.inf:
        return "from or to nothing"
    return f"factor {math.exp(m):.2f}" if m > 0.1 else f"{math.expm1(m):.1%}"


def _weights(result, pairs):
    out = []
    for n, lens in pairs:
        scale, who = _HEADS[n][1], _who(lens)
        for axis, w in result.weighted(n, lens).items():
            mean, sd = number(w.mean * scale, 4), number(w.sd * scale, 3)
            out.append(f"{_HEADS[n][0]} of {who}, weighted over {axis}: mean {mean}, standard deviation {sd}")
    if out:
        for axis in result.family.axes:
            rows = result.weighted(*pairs[0]).get(axis.name)
            if rows is not None:
                out.append(f"weights of {axis.name}: " + ", ".join(f"{k} {v:g}" for k, v in rows.weights.items()))
    return out
