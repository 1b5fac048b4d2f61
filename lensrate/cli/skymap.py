"""``lensrate skymap``: optical depth, rates and sources over a grid of Galactic coordinates or a list of fields."""

from pathlib import Path

import click

from .base import Command, announce
from .interrupts import keeping
from .options import assumptions, output, read_scenario, refuse_idle_extinction
from .text import columns, number, safe, wrap

_SHOWN = 40  # fields that are listed one by one


@click.command(cls=Command, short_help="Map optical depth, rates and sources; rank pointings.")
@click.option("--l", "l_range", type=float, nargs=2, metavar="START END", help="First and last longitude.")
@click.option("--b", "b_range", type=float, nargs=2, metavar="START END", help="First and last latitude.")
@click.option("--step", type=float, metavar="DEG", help="From pixel to pixel, in l and b.")
@click.option(
    "--fields", "field_file", metavar="FILE",
    help="Instead of a grid: table with name, l, b, or a campaign, whose sources, dust, stars and u_0 limit then apply."
)
@click.option("--icrs", is_flag=True, help="Take columns ra, dec of the fields.")
@assumptions
@click.option("--efficiency", metavar="FILE", help="Detection efficiency against t_E; takes several times as long.")
@click.option(
    "--precise", is_flag=True,
    help="The very integrals of 'lensrate sightline', in six times the time; rates are else within 0.2 % of them.",
)
@click.option("--rank", "lens", metavar="CLASS", help="List the pointings with the most events of a lens class.")
@click.option("--top", type=click.IntRange(1, 10_000), default=20, show_default=True, help="Pointings listed.")
@click.option("--field-area", type=float, metavar="DEG2", help="Area of the camera.  [default: 1]")
@click.option("--visit-time", type=float, metavar="S", help="Of a visit with overheads: rank by events per hour.")
@click.option("--cadence", type=float, default=1.0, show_default=True, metavar="D", help="Days from visit to visit.")
@click.option(
    "--rank-per",
    type=click.Choice(["field", "star"]),
    default="field",
    show_default=True,
    help="Rank by events of a field, or of a source star.",
)
@click.option("--save-ranking", metavar="FILE", help="Write the ranking: .ecsv .csv .fits .vot .json.")
@click.option("--plot", metavar="FILE", help="Draw a picture: .png .pdf .svg.")
@click.option(
    "--picture",
    metavar="QUANTITY",
    default="overview",
    show_default=True,
    help="What --plot draws, e.g. rate_black_hole.",
)
@click.option("--overlay", metavar="FILE", help="Fields drawn over the picture: a table or a campaign file.")
@click.option("--jobs", type=click.IntRange(1, 256), default=1, show_default=True, help="Threads.")
@click.option("--dask", metavar="ADDRESS", help="Scheduler of a Dask cluster, instead of threads.")
@output
def skymap(
    l_range, b_range, step, field_file, icrs, efficiency, precise, lens, top, field_area, visit_time, cadence, rank_per,
    save_ranking, plot, picture, overlay, jobs, dask, save, as_json, overwrite, quiet, **choices,
):  # fmt: skip
    """Map optical depth, rates by lens class and sources over Galactic coordinates (degrees).

    Of a grid, --save map.fits writes images with celestial coordinates, one for each quantity; other endings write a
    table. An interrupted map is taken up again by the same command, with the same result: finished pixels are kept in
    FILE.part. The ranking counts a field's area times rate times source density; see --visit-time for telescope time.

    \b
    Examples:
      lensrate skymap --l -5 5 --b -6 6 --step 0.5 --save bulge.fits --plot bulge.png --jobs 2
      lensrate skymap --l 355 5 --b -4 -2 --step 0.25 --rank black_hole --field-area 1.4
      lensrate skymap --fields fields.ecsv --efficiency curve.ecsv --save fields.csv
    """
    import astropy.units as u

    from ..errors import one_of
    from ..io import PICTURES, TABLES, check_target, dump_json, write_table

    _refuse_idle(field_file, lens, plot, visit_time)
    settings = _where(l_range, b_range, step, field_file, icrs)
    fields = settings.pop("fields")
    survey = None if fields is None else fields.survey
    scenario = read_scenario(**choices) if survey is None else _scenario_of(survey, choices)
    refuse_idle_extinction(scenario)
    from ..scenario import resolve
    from ..surveys.skyrecord import known_names

    classes = [*resolve(scenario).classes, "all"]
    if lens:
        one_of("--rank", lens, classes)
        _rankable(scenario, field_area, visit_time, cadence)
    if picture != "overview":
        one_of("--picture", picture, ["overview", *known_names(classes, scenario)])
    target = check_target(save, TABLES, overwrite) if save else None
    ranked_target = check_target(save_ranking, TABLES, overwrite, "--save-ranking") if save_ranking else None
    drawn = check_target(plot, PICTURES, overwrite, "--plot") if plot else None
    settings["precise"] = precise
    outlines = _outlines(overlay, icrs)
    if efficiency:
        from ..surveys.efficiency import Efficiency

        settings["efficiency"] = Efficiency.read(efficiency)
    announce(quiet)
    beside = target or drawn or ranked_target
    part = None if beside is None else Path(f"{beside}.part")
    with keeping("finished pixels", part):
        result = _compute(scenario, survey, settings, part, overwrite, jobs, dask, quiet)
        ranking = None
        if lens:
            ranking = _ranked(result, lens, top, field_area, visit_time, cadence, rank_per, fields)
        if target:
            result.write(target, overwrite)
        if ranked_target:
            write_table(ranking, ranked_target, overwrite)
        if drawn:
            from ..plots.maps import save_skymap

            save_skymap(result, drawn, picture, outlines, overwrite)
    if part is not None:
        part.unlink(missing_ok=True)
    if as_json:
        body = result.to_dict()
        if ranking is not None:
            body["ranking"] = [{c: getattr(row[c], "value", row[c]) for c in ranking.colnames} for row in ranking]
            body["ranked"] = ranking.meta["ranked"]
        click.echo(dump_json(body))
    else:
        click.echo(report(result, u))
        if ranking is not None:
            click.echo("\n" + report_ranking(ranking))
    if not quiet:
        for warning in result.warnings:
            click.echo(wrap(f"note: {warning}"), err=True)
    return 0


def _scenario_of(survey, choices):
    """The campaign's own scenario unless one is named, with what its fields share; what it states is not typed."""
    from ..surveys.skymap import campaign_scenario

    context = click.get_current_context()
    for option, key in (("sources", "limit"), ("extinction", "extinction"), ("u_0_limit", "u_0_limit")):
        if context.get_parameter_source(option).name == "COMMANDLINE":
            name = option.replace("_", "-")
            raise click.UsageError(f"--{name}: a campaign states its own; change '{key}' in its file")
    typed = context.get_parameter_source("scenario_name").name == "COMMANDLINE"
    name = choices["scenario_name"] if typed else survey.scenario
    return campaign_scenario(survey, read_scenario(name, choices["kicks"], choices["bh_kicks"]))


def _rankable(scenario, field_area, visit_time, cadence):
    """Refuse, before the work, what no ranking can be made with."""
    from ..errors import InputError
    from ..sources.rules import DistanceRule, parse_rule

    numbers = {"--field-area": field_area, "--visit-time": visit_time, "--cadence": cadence}
    for name, value in numbers.items():
        if value is not None and not 0 < value < 1e9:
            raise InputError(f"{name}: {value:g} given, must be above 0")
    if isinstance(parse_rule(scenario.sources), DistanceRule):
        raise InputError(
            f"--rank: sources '{scenario.sources}' are not counted, so fields have no number of events; take "
            "limit:I=21 or clump"
        )


def _refuse_idle(field_file, lens, plot, visit_time):
    """Refuse options that were typed and would do nothing."""
    context = click.get_current_context()
    idle = {name: (not lens, "--rank") for name in ("top", "field_area", "visit_time", "cadence", "rank_per")}
    idle |= {"save_ranking": (not lens, "--rank"), "picture": (not plot, "--plot"), "overlay": (not plot, "--plot")}
    idle |= {"icrs": (not field_file, "--fields")}
    if lens:
        idle["cadence"] = visit_time is None, "--visit-time"
    for name, (useless, partner) in idle.items():
        if useless and context.get_parameter_source(name).name == "COMMANDLINE":
            raise click.UsageError(f"--{name.replace('_', '-')} has no effect here: it goes with {partner}")


def _where(l_range, b_range, step, field_file, icrs):
    """Directions as arguments of `surveys.skymap.skymap`, and the list of fields if there is one."""
    import astropy.units as u

    grid = {"--l": l_range, "--b": b_range, "--step": step}
    given = [name for name, value in grid.items() if value is not None]
    if field_file:
        if given:
            raise click.UsageError(f"{given[0]} makes a grid; leave it out, or --fields")
        from ..surveys.fieldlist import FieldList

        fields = FieldList.read(field_file, icrs)
        return {
            "l": fields.l, "b": fields.b, "names": fields.names, "extinction": fields.extinction, "fields": fields
        }  # fmt: skip
    missing = [name for name, value in grid.items() if value is None]
    if missing:
        raise click.UsageError(
            f"{' and '.join(missing)} missing: give --l START END --b START END --step DEG, or --fields FILE"
        )
    return {"l": l_range * u.deg, "b": b_range * u.deg, "step": step * u.deg, "fields": None}


def _outlines(overlay, icrs):
    if not overlay:
        return []
    from ..surveys.fieldlist import FieldList

    return FieldList.read(overlay, icrs, "--overlay").outlines


def _compute(scenario, survey, settings, part, overwrite, jobs, dask, quiet):
    """Run the map."""
    from ..parallel import cluster
    from ..surveys.skymap import campaign_skymap, count, seconds
    from ..surveys.skymap import skymap as run
    from .progress import Progress, duration

    n = count(settings["l"], settings["b"], settings.get("step"))
    if not quiet:
        time = seconds(scenario, n, "efficiency" in settings, settings["precise"], 1 if dask else jobs)
        text = f"lensrate: {n} {'pixels' if 'step' in settings else 'fields'}: about {duration(time)}"
        click.echo(f"{text} of one thread" if dask else f"{text} on {jobs} thread{'s' * (jobs > 1)}", err=True)
    with cluster(dask) as executor, Progress("skymap", quiet) as progress:
        running = {
            "scenario": scenario, "jobs": jobs, "executor": executor, "progress": progress, "checkpoint": part,
            "restart": overwrite,
        }  # fmt: skip
        if survey is not None:
            kept = {k: v for k, v in settings.items() if k in ("efficiency", "precise")}
            return campaign_skymap(survey, **running, **kept)
        return run(**running, **settings)


def _ranked(result, lens, top, field_area, visit_time, cadence, per, fields):
    import astropy.units as u

    from ..surveys.pointings import rank

    area = None if field_area is None else field_area * u.deg**2
    visit = None if visit_time is None else visit_time * u.s
    if fields is not None:
        # what is typed goes before what the list says; of a campaign the map itself knows the area that counts
        listed = None if fields.survey is not None else fields.area
        area, visit = (listed if area is None else area), (fields.visit if visit is None else visit)
    return rank(result, lens, top=top, area=area, visit=visit, cadence=cadence * u.day, per=per)


def report(result, u):
    """Return the table for people: fields one by one, of a grid the range of each quantity and where it is highest."""
    import numpy as np

    from ..remnants.classes import LABELS

    size = f"{result.size} fields" if result.grid is None else "{1} x {0} pixels (l x b)".format(*result.grid.shape)
    head = [
        f"lensrate {result.version}   {size}   scenario {safe(result.scenario.name)} ({result.scenario.hash})",
        wrap(result.header()),
        "",
    ]
    l, b = result.l.to_value(u.deg), result.b.to_value(u.deg)
    known = result.quantities()
    if result.grid is None and result.size <= _SHOWN:
        titles = ["field", "l", "b", "tau/1e-6", "rate/1e-6 yr", "<t_E>/d", "NS share", "BH share", "D_S/kpc"]
        titles.append("/deg2 yr")
        found = "detected_per_deg2_all" if "detected_per_deg2_all" in known else "rate_per_deg2_all"
        cells = [
            (known["optical_depth_all"].values * 1e6, 3), (known["rate_all"].values * 1e6, 3),
            (known["mean_t_E_all"].values, 3), (known["share_neutron_star"].values, 3),
            (known["share_black_hole"].values, 3), (result.mean_source_distance, 3),
            (known[found].values if found in known else np.full(result.size, np.nan), 4),
        ]  # fmt: skip
        names = result.names or [str(i + 1) for i in range(result.size)]
        rows = [
            [safe(names[i])[:14], f"{l[i]:.3f}", f"{b[i]:.3f}", *(number(v[i], d) for v, d in cells)]
            for i in range(result.size)
        ]
        return "\n".join([*head, columns(titles, rows)])
    rows = []
    wanted = [("optical depth [1e-6]", "optical_depth_all", 1e6), ("mean t_E [d]", "mean_t_E_all", 1.0)]
    for name in result.classes:
        label = LABELS.get(name, name.replace("_", " "))
        wanted.append((f"rate of {label} [1e-6/yr]", f"rate_{name}", 1e6))
    for stem, word in (("rate_per_deg2", "events"), ("detected_per_deg2", "found events")):
        for name in ("neutron_star", "black_hole", "all"):
            label = LABELS.get(name, name.replace("_", " "))
            wanted.append((f"{word} of {label} [/yr deg2]", f"{stem}_{name}", 1.0))
    wanted += [("sources [/arcmin2]", "source_density", 1.0), ("mean D_S [kpc]", "mean_source_distance", 1.0)]
    if result.extinction_band:
        wanted.append((f"A_{result.extinction_band} [mag]", f"A_{result.extinction_band}", 1.0))
    for title, name, factor in wanted:
        if name not in known or not np.isfinite(known[name].values).any():
            continue
        v = known[name].values * factor
        i = int(np.nanargmax(v))
        numbers = (np.nanmin(v), np.nanmean(v), v[i])
        rows.append([title, *map(number, numbers), f"{l[i]:g}", f"{b[i]:g}"])
    return "\n".join([*head, columns(["", "lowest", "mean", "highest", "at l", "b"], rows)])


def report_ranking(ranking):
    """Return the ranking for people."""
    made = ranking.meta["ranked"]
    titles, rows = ["rank"], []
    named, timed = "name" in ranking.colnames, "events_per_hour" in ranking.colnames
    titles += (["field"] if named else []) + ["l", "b", "events/field yr"] + (["events/hour"] if timed else [])
    titles += ["events/1e6 stars yr", "stars", "share", "<t_E>/d"]
    for row in ranking:
        cells = [str(row["rank"])] + ([safe(row["name"])[:14]] if named else [])
        cells += [f"{row['l'].value:g}", f"{row['b'].value:g}", number(row["events_per_field_yr"].value)]
        cells += [number(row["events_per_hour"].value)] if timed else []
        last = (row["rate"].value * 1e6, row["stars"], row["share"], row["mean_t_E"].value)
        cells += [number(v) for v in last]
        rows.append(cells)
    who, per = made["lens"].replace("_", " "), {"field": "of a field", "star": "per source star"}[made["per"]]
    time = "" if made["visit_h"] is None else f", a visit every {made['cadence_d']:g} d"
    hour = " and telescope hour" if timed and made["per"] == "field" else ""
    few = len(ranking) < made["asked"]
    why = "the list holds no more" if named else "the map has room for no more, inside it and apart from each other"
    first = f"pointings by events of {who} {per}{hour}{time}"
    note = [wrap(f"{len(ranking)} of {made['asked']} asked for: {why}")] * few
    return "\n".join([first, columns(titles, rows, left=2 if named else 1), *note, "", wrap(made["formula"])])
