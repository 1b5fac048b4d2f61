"""``lensrate events``: a mock catalogue of a sightline or a campaign."""

import click

from .base import Command, announce
from .options import assumptions, dask, output, read_scenario
from .sightline import direction
from .text import columns, number, safe, wrap


@click.command(cls=Command, short_help="Mock events of a sightline or a campaign.")
@click.argument("lon", metavar="[L B]", required=False)
@click.argument("lat", metavar="", required=False)
@click.option("--campaign", "campaign_file", metavar="FILE", help="A campaign instead: its TOML file, or 'marram'.")
@click.option("--icrs", is_flag=True, help="Take RA Dec (degrees, or hh:mm:ss dd:mm:ss) instead of l b.")
@assumptions
@click.option(
    "--number",
    "-n",
    type=click.IntRange(1, 50_000_000),
    help="Events to draw; 1000 for a sightline. A campaign without it is played once, Poisson numbers and all.",
)
@click.option("--weighted", is_flag=True, help="Events with unequal weights.")
@click.option("--equal-classes", is_flag=True, help="As many events of every lens class; weights undo it.")
@click.option("--detected", "only_detected", is_flag=True, help="Keep only what the campaign finds.")
@click.option("--blend", type=float, metavar="MAG", help="Further light in the source's place.")
@click.option(
    "--dates", nargs=2, metavar="START END",
    help="Events of a sightline peak evenly between these days, like 2031-02-10; in 2030 without it.",
)
@click.option("--seed", type=click.IntRange(0), help="Same seed, same events; made up and told if not given.")
@click.option("--jobs", type=click.IntRange(1, 256), default=1, show_default=True, help="Threads.")
@dask
@click.option("--plot", metavar="FILE", help="Draw t_E and pi_E by class: .png .pdf .svg.")
@output
def events(
    lon, lat, campaign_file, icrs, number, weighted, equal_classes, only_detected, blend, dates, seed, jobs, address,
    plot, save, as_json, overwrite, quiet, **choices,
):  # fmt: skip
    """Mock events toward L B (degrees) or of a campaign, drawn from the rate.

    Masses, distances, motions (l, b and North, East), timescales and parallaxes in the heliocentric and the geocentric
    frame, times of peak, magnitudes of source, lens, baseline and peak.

    \b
    Examples:
      lensrate events 1.0 -3.9 --seed 31
      lensrate events 1.0 -2.9 --number 100000 --save mock.fits --plot mock.png
      lensrate events 1.0 -3.9 --equal-classes --number 5000 --save rare.ecsv
      lensrate events --campaign marram --seed 1 --save season.ecsv --detected
    """
    from ..errors import InputError
    from ..io import PICTURES, TABLES, check_target

    _check(lon, lat, campaign_file, icrs, only_detected, dates)
    if save:
        check_target(save, TABLES, overwrite)
    if plot:
        check_target(plot, PICTURES, overwrite, "--plot")
    import astropy.units as u

    from ..events.mock import mock_events
    from ..surveys.calendar import mjd_of

    drawing = {
        "number": number, "seed": seed, "weighted": weighted, "tilt": "equal" if equal_classes else None, "jobs": jobs,
        "blend": None if blend is None else blend * u.mag,
    }  # fmt: skip
    if dates:
        drawing["dates"] = tuple(mjd_of(day, "--dates") for day in dates)
        if not drawing["dates"][0] < drawing["dates"][1]:
            raise InputError(f"--dates: {dates[0]} to {dates[1]} given, the second must be later than the first")
    from ..parallel import cluster

    with cluster(address) as executor:
        drawing["executor"] = executor
        if campaign_file:
            result = mock_events(_campaign(campaign_file, choices, jobs, executor, quiet), **drawing)
            if only_detected:
                result = result.found()
        else:
            scenario = read_scenario(**choices)
            announce(quiet)
            result = mock_events(*direction(lon, lat, icrs), scenario, **drawing)
    if plot:
        from ..plots import save_events

        save_events(result, plot, overwrite)
    if save:
        from ..io import write_table

        write_table(result.to_table(), save, overwrite, payload=result.to_dict())
    if as_json:
        from ..io import dump_json

        click.echo(dump_json(result.to_dict(), indent=None))
    else:
        click.echo(report(result))
    if not quiet:
        for warning in result.meta()["warnings"]:
            click.echo(wrap(f"note: {warning}"), err=True)


def _check(lon, lat, campaign_file, icrs, only_detected, dates):
    """Refuse what does not go together."""
    if (campaign_file is None) == (lon is None):
        raise click.UsageError("give either L B or --campaign FILE")
    if lon is not None and lat is None:
        raise click.UsageError("two numbers are needed: L B (or RA Dec with --icrs)")
    context = click.get_current_context()
    if campaign_file is None:
        if only_detected:
            raise click.UsageError("--detected has no effect here: it goes with --campaign")
        return
    if icrs or dates:
        raise click.UsageError(f"--{'icrs' if icrs else 'dates'} has no effect here: it goes with L B")
    for option, where in (("sources", "limit"), ("extinction", "extinction"), ("u_0_limit", "u_0_limit")):
        if context.get_parameter_source(option).name == "COMMANDLINE":
            name = option.replace("_", "-")
            raise click.UsageError(f"--{name}: a campaign states its own; change '{where}' in its file")


def _campaign(file, choices, jobs, executor, quiet):
    """Forecast of the campaign, under its own scenario unless one is named."""
    from ..surveys.campaign import Campaign
    from ..surveys.yields import campaign

    survey = Campaign.read(file)
    typed = click.get_current_context().get_parameter_source("scenario_name").name == "COMMANDLINE"
    name = choices["scenario_name"] if typed else survey.scenario
    scenario = read_scenario(name, choices["kicks"], choices["bh_kicks"])
    announce(quiet)
    return campaign(survey, scenario, jobs=jobs, executor=executor)


def report(result):
    """Return the table for people: what was drawn, by class."""
    import numpy as np

    from ..remnants.classes import LABELS

    made = result.meta()
    of = f"   {safe(made['campaign'])} ({made['campaign_hash']})" if "campaign" in made else ""
    head = [
        wrap(f"lensrate {result.version}{of}   scenario {safe(made['scenario'])} ({made['scenario_hash']})"),
        wrap(result.header()),
    ]
    w, expected = result.columns["weight"], result.expected()
    # of a sightline the integrated rate; of a campaign what happened in these draws, where they are all of them
    unit, scale, tail = "rate [1e-6/yr]", 1e6, []
    campaign = "detected" in result.columns
    counted = [*([] if result.selected else ["happened"]), "found"] if campaign else [unit]
    titles = ["lens", "drawn", *counted, "median t_E [d]", "median pi_E", "median M"]

    def row(label, numbers, rate, mine):
        drawn, weight, found = numbers
        shown = [*([] if result.selected else [weight]), found] if campaign else [rate * scale]
        middle = [_median(result.columns[c][mine], w[mine]) for c in ("t_E", "pi_E", "M_L")]
        return [label, f"{int(drawn)}", *map(number, [*shown, *middle])]

    rows = []
    for i, name in enumerate(result.classes):
        label = LABELS.get(name, name.replace("_", " "))
        rows.append(row(label, result.by_class[i], expected[name], result.columns["lens"] == i))
    rows.append(row("all", result.by_class.sum(axis=0), sum(expected.values()), np.ones(w.size, dtype=bool)))
    effective = w.sum() ** 2 / np.sum(w**2) if w.sum() > 0 else 0.0
    if effective < 0.999 * w.size:
        tail.append(f"worth {effective:.0f} equal events")
    if not campaign:
        tail.append("rate: integrated, per source star; the other columns are those of the draws")
    return "\n".join([*head, columns(titles, rows), *tail])


def _median(x, weight):
    import numpy as np

    if not weight.sum() > 0:
        return np.nan
    order = np.argsort(x)
    cum = np.cumsum(weight[order])
    return x[order][np.searchsorted(cum, 0.5 * cum[-1])]
