"""``lensrate sightline``: one direction, or a table of many."""

import click

from .base import Command, announce
from .options import assumptions, output, read_scenario, refuse_idle_extinction
from .text import columns, number, safe, wrap

_PICTURES = ("overview", "timescales", "stacked", "depth", "pi_E", "theta_E")


@click.command(cls=Command, short_help="Optical depth, event rate and timescales by lens class.")
@click.argument("lon", metavar="[L B]", required=False)
@click.argument("lat", metavar="", required=False)
@click.option(
    "--table", "table_file", metavar="FILE",
    help="Many sightlines: columns l, b (or ra, dec), optionally name, A_V, A_I, A_J, A_H, A_Ks.",
)
@click.option("--icrs", is_flag=True, help="Take RA Dec (degrees, or hh:mm:ss dd:mm:ss) instead of l b.")
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
    type=click.Choice(["class", "component", "element"]),
    default="class",
    show_default=True,
    help="Rows of the table.",
)
@click.option("--plot", metavar="FILE", help="Draw a picture: .png .pdf .svg.")
@click.option(
    "--picture", type=click.Choice(_PICTURES), default="overview", show_default=True, help="What --plot draws."
)
@click.option("--jobs", type=click.IntRange(1, 256), default=1, show_default=True, help="Threads for --table.")
@output
def sightline(
    lon, lat, table_file, icrs, t_E_range, by, plot, picture, jobs, save, as_json, overwrite, quiet, **choices
):  # fmt: skip
    """Optical depth, event rate and timescales by lens class toward L B (degrees).

    \b
    Examples:
      lensrate sightline 1.0 -3.9
      lensrate sightline 1.0 -2.9 --extinction I=1.25 --t-E-range 0.5 300
      lensrate sightline --icrs 17:51:40 -29:53:26 --json
      lensrate sightline 280.46 -32.89 --scenario griest1991
      lensrate sightline --table fields.csv --save rates.ecsv --jobs 2
    """
    from ..errors import InputError
    from ..io import PICTURES, TABLES, check_target

    if (table_file is None) == (lon is None):
        raise click.UsageError("give either L B or --table FILE")
    if lon is not None and lat is None:
        raise click.UsageError("two numbers are needed: L B (or RA Dec with --icrs)")
    _no_idle_options(table_file, plot)
    if save:
        check_target(save, TABLES, overwrite)
    if plot:
        check_target(plot, PICTURES, overwrite, "--plot")
        if table_file:
            raise InputError("--plot: draws one sightline; leave out --table, or --plot")
    scenario = read_scenario(**choices)
    refuse_idle_extinction(scenario)
    announce(quiet)
    if table_file:
        _many(table_file, icrs, scenario, t_E_range, jobs, save, as_json, overwrite, quiet)
        return
    import astropy.units as u

    from ..lensing.sightline import sightline as forecast

    l, b = direction(lon, lat, icrs)
    result = forecast(l, b, scenario, t_E_range=tuple(t_E_range) * u.day if t_E_range else None)
    if plot:
        from ..plots import save_picture

        save_picture(result, plot, picture, overwrite)
    if save:
        from ..io import write_table

        write_table(result.to_table(by), save, overwrite, payload=result.to_dict())
    if as_json:
        from ..io import dump_json

        click.echo(dump_json(result.to_dict()))
    else:
        click.echo(report(result, by))
    _tell(result.warnings, quiet)


def _tell(warnings, quiet):
    if not quiet:
        for warning in warnings:
            click.echo(wrap(f"note: {warning}"), err=True)


def _no_idle_options(table_file, plot):
    """Refuse options that were typed and would do nothing."""
    context = click.get_current_context()
    idle = {"by": (table_file, "one sightline"), "picture": (not plot, "--plot"), "jobs": (not table_file, "--table")}
    for option, (useless, partner) in idle.items():
        if useless and context.get_parameter_source(option).name == "COMMANDLINE":
            raise click.UsageError(f"--{option} has no effect here: it goes with {partner}")


def direction(lon, lat, icrs):
    """Turn typed coordinates into Galactic ones, Quantity."""
    import astropy.units as u

    from ..errors import InputError
    from ..galaxy.frames import galactic_from_icrs

    if icrs:
        ra = _angle("ra", lon, 15.0)
        if not 0.0 <= ra <= 360.0:
            raise InputError(f"ra: '{safe(lon)}' given, must be between 0 and 360 degrees, or 0 and 24 hours")
        return galactic_from_icrs(ra * u.deg, _angle("dec", lat, 1.0) * u.deg)
    return _angle("l", lon, None) * u.deg, _angle("b", lat, None) * u.deg


def _angle(name, text, per_unit):
    """Read degrees, or sexagesimal hours (15 degrees each) and degrees where allowed."""
    from ..errors import InputError

    text = str(text)
    try:
        if per_unit is not None and ":" in text:
            parts = [float(p) for p in text.lstrip("+-").split(":")]
            if len(parts) > 3 or any(not 0 <= p < 60 for p in parts[1:]):
                raise ValueError
            value = sum(p / 60**i for i, p in enumerate(parts)) * per_unit
            return -value if text.startswith("-") else value
        return float(text)
    except ValueError:
        how = "degrees" if per_unit is None else "degrees or a:b:c"
        raise InputError(f"{name}: '{safe(text)}' is not a number of {how}") from None


def report(result, by):
    """Return the table for people."""
    import astropy.units as u

    from ..remnants.classes import LABELS

    s = result.sources
    head = [
        f"lensrate {result.version}   l = {result.l.to_value(u.deg):.4f}, b = {result.b.to_value(u.deg):.4f} deg   "
        f"scenario {safe(result.scenario.name)} ({result.scenario.hash})",
        result.header(),
    ]
    where = f"mean distance {s['mean_distance_kpc']:.2f} kpc"
    if s["disc_share"] is not None:
        where += f", disc share {s['disc_share']:.2f}"
    if s["source_density_per_arcmin2"] is not None:
        where += f", {number(s['source_density_per_arcmin2'], 4)} per arcmin2"
    head.append(f"sources: {where}")
    if result.field_mismatch is not None:
        errors = [result.lenses[n].rate_standard_error for n in ("neutron_star", "black_hole")]
        rates = [result.lenses[n].rate for n in ("neutron_star", "black_hole")]
        grid = result.meta()["fields"]["grid_error"]
        # known for one grid only
        grid = "" if grid is None else f"grid {grid:.1%}; "
        parts = [f"{e / r:.1%}" for e, r in zip(errors, rates) if e is not None and r > 0]
        head.append(
            wrap(
                f"{result.scenario.kick_words()}; sampling error of their rates {', '.join(parts) or 'none'}; "
                f"{grid}systematic: fields hold the stars here to {result.field_mismatch:+.1%}"
            )
        )
    if result.mass_note:
        head.append(wrap(f"mass of {result.mass_note}"))
    if by == "class":
        titles = ["lens", "tau [1e-6]", "rate [1e-6/yr]", "mean t_E [d]", "median t_E [d]", "share", "field"]
        rows = []
        for name, lens in result.lenses.items():
            label = LABELS.get(name, name.replace("_", " "))
            share = f"{lens.share_of_events:.4f}" if lens.share_of_events == lens.share_of_events else "-"
            numbers = (lens.optical_depth * 1e6, lens.rate * 1e6, lens.mean_t_E, lens.median_t_E)
            rows.append([label, *map(number, numbers), share, lens.kinematics])
    else:
        parts = result.components if by == "component" else result.elements
        total = result.lenses["all"]
        titles = [by, "tau [1e-6]", "rate [1e-6/yr]", "share of events"]
        rows = [
            [
                n,
                number(p.optical_depth * 1e6),
                number(p.rate * 1e6),
                f"{p.rate / total.rate:.4f}" if total.rate > 0 else "-",
            ]
            for n, p in parts.items()
        ]
        rows.append(["all", number(total.optical_depth * 1e6), number(total.rate * 1e6), "1.0000"])
    return "\n".join([*head, "", columns(titles, rows)])


def _many(table_file, icrs, scenario, t_E_range, jobs, save, as_json, overwrite, quiet):
    import astropy.units as u

    from ..io import dump_json, read_rows, write_table
    from ..lensing.many import directions_of, forecasts, gather
    from ..sources.rules import parse_rule

    l, b, measured, carried = directions_of(read_rows(table_file, "--table"), icrs, f"--table '{table_file}'")
    label = next((c for c in carried.colnames if c.lower() in ("name", "field")), None)
    notes = []
    if any(measured) and not hasattr(parse_rule(scenario.sources), "band"):
        notes.append(f"the table's extinctions have no effect: sources '{scenario.sources}' have no magnitude limit")
    unused = [c for c in carried.colnames if c != label]
    if unused:
        notes.append(f"columns not used, carried along: {', '.join(map(safe, unused))}")
    results = forecasts(
        l, b, scenario, extinction=measured, t_E_range=tuple(t_E_range) * u.day if t_E_range else None,
        jobs=jobs, progress=None if quiet else "sightlines",
    )  # fmt: skip
    table = gather(results, scenario, carried)
    table.meta["warnings"] = [*notes, *table.meta["warnings"]]
    rows = [{**({"name": str(carried[label][i])} if label else {}), **r.to_dict()} for i, r in enumerate(results)]
    for i, row in enumerate(rows):
        row["row"] = {c: str(carried[c][i]) for c in carried.colnames}
    if save:
        write_table(table, save, overwrite, payload={"sightlines": rows})
    meta = table.meta
    if as_json:
        click.echo(dump_json(rows))
        _tell(meta["warnings"], quiet)
        return
    many = "sightline" if len(table) == 1 else "sightlines"
    click.echo(
        f"lensrate {meta['version']}   {len(table)} {many}   "
        f"scenario {safe(meta['scenario'])} ({meta['scenario_hash']})"
    )
    click.echo(meta["header"])
    click.echo("")
    bands = [c for c in table.colnames if c.startswith("A_")]
    titles = ["l", "b", *bands, "tau/1e-6", "rate/1e-6 yr", "<t_E>/d", "NS share", "BH share", "D_S/kpc", "/arcmin2"]
    body = []
    for i, (r, row) in enumerate(zip(results, rows)):
        dark = (number(r.lenses[n].share_of_events) for n in ("neutron_star", "black_hole"))
        total = r.lenses["all"]
        body.append(
            [f"{row['l_deg']:.3f}", f"{row['b_deg']:.3f}", *(f"{table[c][i].value:.2f}" for c in bands),
             number(total.optical_depth * 1e6), number(total.rate * 1e6), number(total.mean_t_E), *dark,
             f"{r.sources['mean_distance_kpc']:.2f}", number(r.sources["source_density_per_arcmin2"], 4)]
        )  # fmt: skip
    if carried.colnames:
        # a name, or else the first further column, tells the rows apart
        first = label or carried.colnames[0]
        titles, body = [first, *titles], [[safe(str(carried[first][i]))[:12], *row] for i, row in enumerate(body)]
    click.echo(columns(titles, body, left=bool(carried.colnames)))
    _tell(meta["warnings"], quiet)
