"""``lensrate constrain``: kick law and numbers of remnants from a sample, or what a campaign would say of them."""

import click

from .base import Command, announce
from .options import dask
from .text import columns, number, safe, wrap

_MOST_CASES = 8  # that a table names
_WIDTHS = ("rate", "field_rate", "shift", "stretch", "slope")


@click.command(cls=Command, short_help="Kick laws and numbers of remnants from observed events.")
@click.argument("sample", metavar="[SAMPLE]", required=False)
@click.option("--from", "plan", metavar="CAMPAIGN", help="No sample: the constraint that this campaign would give.")
@click.option("--campaign", "campaign_file", metavar="FILE",
              help="Whose fields, stars and efficiency apply to SAMPLE: a campaign file or 'marram' (invented).")
@click.option("--parameter", "-p", "parameters", metavar="NAME", multiple=True, default=("kick_scale",),
              show_default=True, help="kick_scale, slow_weight, kick_bins, neutron_stars, black_holes, remnant_mass or "
              "class:NAME; may be repeated.")
@click.option("--prior", "priors", metavar="NAME=FORM:A,B", multiple=True,
              help="uniform, log-uniform, normal or lognormal (median, dex) instead of the default; may be repeated.")
@click.option("--nuisance", "widths", metavar="NAME=WIDTH", multiple=True,
              help="Prior width of rate, field_rate, shift, stretch or slope; 0 holds it fixed.")
@click.option("--fix-nuisances", is_flag=True, help="Hold all of them fixed: narrower than what is known.")
@click.option("--galaxy", "galaxies", metavar="NAME|FILE", multiple=True,
              help="A further scenario, as likely beforehand, to average over; may be repeated.")
@click.option("--family", metavar="NAME|FILE",
              help="Average over all combinations of this family of assumptions, by its weights if it states some.")
@click.option("--axis", "axes", metavar="NAME", multiple=True, help="Only this axis of --family; may be repeated.")
@click.option("--selection", "stages", metavar="STAGE:CLASS=P", multiple=True,
              help="Declared probability that an event of a class reached parallax, followed or mass.")
@click.option("--listed", default="found", show_default=True, metavar="STAGE",
              help="What an event needs to be in SAMPLE: found, parallax, followed or mass.")
@click.option("--counts", default="auto", show_default=True, metavar="auto|absolute|shape",
              help="Whether expected numbers count: only where the campaign states the stars monitored.")
@click.option("--timescales-only", "only_t_E", is_flag=True, help="Leave parallaxes and angular radii out.")
@click.option("--limit-class", metavar="NAME", help="Upper limits on this lens class of the scenario against its mass.")
@click.option("--masses", metavar="M,M,...", help="Masses [Msun] of --limit-class.")
@click.option("--scenario", "scenario_name", metavar="NAME|FILE", help="Instead of the campaign's own scenario.")
@click.option("--kicks", metavar="LAW", help="Kick law of neutron stars: a published set or maxwell:265.")
@click.option("--bh-kicks", metavar="LAW", help="Kick law of black holes: same, momentum, or a law.")
@click.option("--seasons", type=click.FloatRange(min=0.0, min_open=True), metavar="N",
              help="With --from: seasons like the campaign's own, N in all.")
@click.option("--measured", metavar="CLASS=P", multiple=True,
              help="With --from: share of a class whose mass is measured, e.g. black_hole=0.6; may be repeated.")
@click.option("--mass-error", type=click.FloatRange(0.001, 10.0), default=0.2, show_default=True,
              help="With --from: relative error of these masses.")
@click.option("--t-E-error", "sigma", type=click.FloatRange(0.001, 1.0), default=0.05, show_default=True,
              help="With --from: relative error of t_E.")
@click.option("--mocks", type=click.IntRange(0, 10_000), default=0, show_default=True,
              help="With --from: mock samples, each inferred from in full.")
@click.option("--points", type=click.IntRange(5, 1001), metavar="N", help="Grid points a parameter.")
@click.option("--steps", type=click.IntRange(100, 1_000_000), default=2000, show_default=True,
              help="Of the sampler, for more than three parameters.")
@click.option("--seed", type=click.IntRange(0), default=1, show_default=True, help="Of samples and mocks.")
@click.option("--frame", metavar="FRAME", help="heliocentric or geocentric, where the sample does not say it.")
@click.option("--t-0par", "t_0par", type=float, metavar="MJD", help="Reference epoch of geocentric events.")
@click.option("--skip-bad", is_flag=True, help="Leave bad rows out instead of refusing the sample.")
@click.option("--samples", "samples_file", metavar="FILE", help="Write 10,000 draws of the posterior.")
@click.option("--plot", metavar="FILE", help="Draw marginals and pairs: .png .pdf .svg.")
@click.option("--jobs", type=click.IntRange(1, 256), default=1, show_default=True, help="Threads over fields.")
@dask
@click.option("--save", metavar="FILE", help="Write a table: .ecsv .csv (# begins comments) .fits .vot .json.")
@click.option("--json", "as_json", is_flag=True, help="Print JSON instead of a table.")
@click.option("--overwrite", is_flag=True, help="Replace existing files.")
@click.option("--quiet", "-q", is_flag=True, help="No messages on stderr.")
def constrain(
    sample, plan, campaign_file, parameters, priors, widths, fix_nuisances, galaxies, family, axes, stages, listed,
    counts, only_t_E, limit_class, masses, scenario_name, kicks, bh_kicks, seasons, measured, mass_error, sigma, mocks,
    points, steps, seed, frame, t_0par, skip_bad, samples_file, plot, jobs, address, save, as_json, overwrite, quiet,
):  # fmt: skip
    """Constrain kick law and numbers of remnants from observed events (SAMPLE).

    Nuisances are on by default: a common rate, a rate of each field, shift and stretch of the stars' timescales, the
    low-mass slope. How far each parameter moved from its prior is always shown.

    \b
    Examples:
      lensrate constrain events.ecsv --campaign marram -p kick_scale -p neutron_stars --plot corner.png
      lensrate constrain events.ecsv --campaign marram -p black_holes --prior black_holes=log-uniform:0.1,10
      lensrate constrain events.ecsv --campaign marram -p neutron_stars --family default --axis bar_mass --axis imf
      lensrate constrain --from marram -p kick_scale --seasons 10 --measured neutron_star=0.5
      lensrate constrain events.ecsv --campaign c.toml --scenario s.toml --limit-class dark --masses 0.01,1,30
    """
    from ..io import PICTURES, TABLES, check_target, dump_json, write_table

    for path, option in ((save, "--save"), (samples_file, "--samples")):
        if path:
            check_target(path, TABLES, overwrite, option)
    if plot:
        check_target(plot, PICTURES, overwrite, "--plot")
    _check_together(sample, plan, campaign_file, samples_file, plot, limit_class, masses, parameters)
    _refuse_idle(plan, limit_class, parameters, mocks, fix_nuisances)
    from ..inference.likelihood import Nuisances
    from ..inference.parameters import parse_parameters
    from ..scenario import Scenario
    from ..surveys.campaign import Campaign

    survey = Campaign.read(plan or campaign_file)
    base = Scenario.read(scenario_name or survey.scenario)
    changes = {k: v for k, v in (("kicks", kicks), ("bh_kicks", bh_kicks)) if v}
    base = base.replace(**changes) if changes else base
    asked = parse_parameters(parameters, priors, base.lens_class)
    nuisances = Nuisances.fixed() if fix_nuisances else _nuisances(widths)
    label = None if quiet else "fields"
    from ..events.observed import Sample
    from ..inference.selection import Selection
    from ..parallel import cluster
    from ..remnants.classes import CLASSES

    events = None if plan else Sample.read(sample, frame, t_0par, skip_bad)
    selection = Selection.parse(stages, listed, [*CLASSES, *base.lens_class])
    announce(quiet)
    with cluster(address) as executor:
        spread = {"jobs": jobs, "executor": executor, "progress": label}
        if plan:
            result = _planned(survey, base, asked, nuisances, seasons, _shares(measured, base), spread, counts,
                              sigma=sigma, mass_error=mass_error, mocks=mocks, seed=seed, points=points)  # fmt: skip
            text = report_plan(result)
        elif limit_class:
            result = _limits(events, survey, base, limit_class, masses, nuisances, counts, spread)
            text = report_limits(result)
        else:
            from ..inference.constrain import constrain as infer

            result = infer(
                events, parameters, survey, base, priors=priors, nuisances=nuisances, selection=selection,
                counts=counts, galaxies=galaxies, family=family, axes=axes, points=points, steps=steps, seed=seed,
                only_t_E=only_t_E, **spread,
            )  # fmt: skip
            text = report(result)
    if plot:
        from .. import plots

        (plots.save_mass_limits if limit_class else plots.save_posterior)(result, plot, overwrite)
    if save:
        write_table(result.to_table(), save, overwrite, payload=result.to_dict())
    if samples_file:
        write_table(result.samples_table(seed=seed), samples_file, overwrite)
    click.echo(dump_json(result.to_dict()) if as_json else text)
    if not quiet:
        if hasattr(result, "cautions"):
            said = result.cautions()
        else:
            said = getattr(result, "notes", result.made.get("notes", ()))
        for note in dict.fromkeys([*said, *result.made.get("warnings", ())]):
            click.echo(wrap(f"note: {note}"), err=True)


def _check_together(sample, plan, campaign_file, samples_file, plot, limit_class, masses, parameters):
    """Refuse what does not go together."""
    if bool(sample) == bool(plan):
        raise click.UsageError("give a SAMPLE, or --from CAMPAIGN without one")
    if plan and (samples_file or plot or campaign_file or limit_class):
        raise click.UsageError("--from goes with none of --campaign, --samples, --plot and --limit-class")
    if plan and "kick_bins" in parameters:
        raise click.UsageError("kick_bins needs a sample; --from takes kick_scale, slow_weight and numbers")
    if sample and not campaign_file:
        raise click.UsageError("--campaign FILE is needed: its fields, stars and efficiency make the expected numbers")
    if bool(limit_class) != bool(masses):
        raise click.UsageError("--limit-class and --masses go together")
    if limit_class and samples_file:
        raise click.UsageError("--samples has no effect with --limit-class")


def _refuse_idle(plan, limit_class, parameters, mocks, fix_nuisances):
    """Refuse options that were typed and would do nothing."""
    from ..inference.parameters import BINS

    context = click.get_current_context()
    sampler = BINS in parameters or len(parameters) > 3
    alone, limits = "it goes with a SAMPLE, not --from", "--limit-class takes timescales alone, with priors of its own"
    idle = {}
    for name in ("parameters", "priors", "stages", "listed", "galaxies", "family", "axes", "only_t_E", "points",
                 "steps"):  # fmt: skip
        idle[name] = (bool(limit_class), limits)
    if plan:
        names = ("stages", "listed", "galaxies", "family", "axes", "only_t_E", "steps", "frame", "t_0par", "skip_bad")
        idle |= {name: (True, alone) for name in names}
        idle["points"] = (not mocks, "with --from it goes with --mocks")
    elif not limit_class:
        idle["points"] = (sampler, "more than three parameters are sampled, not put on a grid")
        idle["steps"] = (not sampler, "up to three parameters are put on a grid")
    for name in ("seasons", "measured", "mass_error", "sigma", "mocks"):
        idle[name] = (not plan, "it goes with --from")
    idle["widths"] = (fix_nuisances, "--fix-nuisances holds all of them")
    for parameter in context.command.params:
        useless, why = idle.get(parameter.name, (False, ""))
        if useless and context.get_parameter_source(parameter.name).name == "COMMANDLINE":
            raise click.UsageError(f"{max(parameter.opts, key=len)} has no effect here: {why}")


def _pairs(items, what):
    from ..errors import InputError

    out = {}
    for item in items:
        name, equals, value = item.partition("=")
        try:
            out[name] = float(value)
        except ValueError:
            equals = ""
        if not equals:
            raise InputError(f"{what}: '{item}' is not understood; write NAME=NUMBER")
    return out


def _nuisances(widths):
    from ..errors import one_of
    from ..inference.likelihood import Nuisances

    given = _pairs(widths, "--nuisance")
    for name in given:
        one_of("--nuisance", name, _WIDTHS)
    return Nuisances(**given)


def _shares(measured, base):
    from ..errors import InputError, one_of
    from ..remnants.classes import CLASSES

    out, known = {}, [*CLASSES, *base.lens_class]
    for name, p in _pairs(measured, "--measured").items():
        one_of("--measured", name, [*known, "all"])
        if not 0 <= p <= 1:
            raise InputError(f"--measured: {name}={p:g} given, a share from 0 to 1 is needed")
        out.update(dict.fromkeys(known if name == "all" else [name], p))
    return out


def _planned(survey, base, asked, nuisances, seasons, measured, spread, counts, **options):
    from ..inference.likelihood import anchors
    from ..inference.planned import planned
    from ..inference.templates import Templates
    from ..surveys.yields import campaign as forecast

    own = len(survey.calendar.seasons)
    templates = Templates.of(forecast(survey, base, **spread), (seasons or own) / own)
    anchors(templates, counts)
    return planned(templates, asked, nuisances, measured=measured, counts=counts, executor=spread["executor"],
                   **options)  # fmt: skip


def _limits(events, survey, base, lens, masses, nuisances, counts, spread):
    from ..errors import InputError, one_of
    from ..inference.constrain import mass_limits
    from ..surveys.yields import campaign as forecast

    one_of("--limit-class", lens, base.lens_class or ["(the scenario has no lens class of its own)"])
    try:
        values = [float(m) for m in masses.split(",")]
    except ValueError:
        raise InputError(f"--masses: '{masses}' is not understood; write numbers of Msun, like 0.01,1,30") from None
    return mass_limits(events, forecast(survey, base, **spread), lens, values, nuisances=nuisances, counts=counts,
                       executor=spread["executor"])  # fmt: skip


def report(result):
    """Return the table for people."""
    made = result.made
    invented = " (invented)" if made["sample_invented"] else ""
    words = f"{safe(made['sample'])}{invented}: {result.events} events, {number(result.expected, 4)} expected"
    lines = [_head(result, words), wrap(made["header"]), ""]
    rows, single = [], [p for p in result.parameters if not p.name.startswith("kick_bin_")]
    for p in single:
        got = result.learned[p.name]
        rows.append([p.name, p.prior.text, *(number(q) for q in got.quantiles), f"{got.bits:.2f}", f"{got.shift:+.2f}",
                     f"{got.shrinkage:.2f}"])  # fmt: skip
    if single:
        titles = ["parameter", "prior", "2.5%", "16%", "50%", "84%", "97.5%", "bits", "shift", "shrinkage"]
        lines += [columns(titles, rows, left=2), "shift: of the mean in the prior's sigmas; shrinkage: of the variance"]
        lines += ["", *(wrap(result.verdict(p.name)) for p in single), ""]
    if len(single) < len(result.parameters):
        lines += [_speed_table(result), ""]
    lines.append(_nuisance_line(result.nuisances))
    if result.cases:
        lines.append(wrap(_case_line(result)))
    return "\n".join(lines)


def _case_line(result):
    """Posterior and prior shares of what was averaged over, the likeliest first."""
    before, made = result.made["galaxies_prior"], result.made
    order = sorted(result.cases, key=result.cases.get, reverse=True)
    parts = [f"{safe(k)} {result.cases[k]:.2f} ({before[k]:.2f})" for k in order[:_MOST_CASES]]
    if len(order) > _MOST_CASES:
        rest = sum(result.cases[k] for k in order[_MOST_CASES:])
        parts.append(f"{len(order) - _MOST_CASES} others {rest:.2f}")
    what = "Galaxy sets"
    if "family" in made:
        what = f"the family '{safe(made['family'])}', weights {made['family_weights']}"
    return f"averaged over {len(order)} cases of {what}; posterior share (prior): {'; '.join(parts)}"


def _speed_table(result):
    """Shares of neutron stars by kick speed, and whether any of them says more than its prior."""
    rows, bins = [], [result.learned[n] for n in result.names if n.startswith("kick_bin_")]
    for row, got in zip(result.kick_shares().to_rows(), bins):
        found = [f"{row[k]:.3f}" for k in ("law", "p2.5", "p16", "p50", "p84", "p97.5")]
        prior = f"{row['prior_p16']:.3f}-{row['prior_p84']:.3f}"
        rows.append([f"{row['low_kms']:g}-{row['high_kms']:g}", *found, prior, f"{got.bits:.2f}"])
    titles = ["kick [km/s]", "law", "2.5%", "16%", "50%", "84%", "97.5%", "prior 68%", "bits"]
    known, most = sum(g.constrained for g in bins), max(g.bits for g in bins)
    said = f"{known} of {len(bins)} bins constrained" if known else "no bin is constrained: what is quoted is the prior"
    return (f"share of neutron stars by kick speed\n{columns(titles, rows, left=1)}\n"
            f"{said} (at most {most:.2f} bits beyond the prior)")  # fmt: skip


def _head(result, words):
    made = result.made
    scenario = f"{made['scenario']} ({made['scenario_hash']})"
    return wrap(f"lensrate {result.version}   {words}   campaign {safe(made['campaign'])}   scenario {scenario}")


def _nuisance_line(nuisances):
    widths = nuisances["prior_widths"]
    found = nuisances.get("likeliest", {})
    names = ("rate", "shift", "stretch", "slope")
    parts = [f"{n} {found[n]:+.3f} (+-{widths[n]:g})" if n in found else f"{n} +-{widths[n]:g}" for n in names]
    each = f"each field's rate +-{widths['field_rate']:g}"
    return wrap(f"nuisances (likeliest, width of prior): {', '.join(parts)}; {each}")


def report_plan(result):
    """Return the answer of --from for people."""
    head = _head(result, f"{number(sum(result.events.values()), 4)} events expected")
    lines = [head, wrap(result.made["header"]), ""]
    rows = []
    for p in result.parameters:
        s = [result.sigma[p.name], result.sigma_fixed[p.name], result.sigma_prior[p.name]]
        kind = "ln" if p.prior.logarithmic else "linear"
        seasons = number(result.seasons_for_two[p.name]) if p.prior.logarithmic else "-"
        rows.append([p.name, p.prior.text, kind, *(number(x) for x in s), seasons])
    titles = ["parameter", "prior", "scale", "sigma", "all else fixed", "prior's", "seasons for a factor 2"]
    lines += [columns(titles, rows, left=3), ""]
    lines += [wrap(result.words(p.name)) for p in result.parameters]
    masses = sum(result.measured.values())
    lines += ["", wrap(f"measured masses: {number(masses)}" if masses else "timescales alone: no mass is measured")]
    lines.append(_nuisance_line(result.nuisances))
    if result.mocks is not None:
        for name, m in result.mocks.items():
            lines.append(wrap(f"{m['samples']} mock samples, {name}: half width of the posterior at 95 % "
                              f"{m['half_width_95']:.3g} ({m['p16']:.3g} to {m['p84']:.3g}), constrained in "
                              f"{m['share_constrained']:.0%}"))  # fmt: skip
    return "\n".join(lines)


def report_limits(result):
    """Return limits against mass for people."""
    rows = [
        [number(m), number(x) if known else "not constrained", number(n)]
        for m, x, n, known in zip(result.mass, result.limit, result.expected, result.constrained)
    ]
    head = wrap(f"{result.lens.replace('_', ' ')}: upper limits on {result.norm.replace('_', ' ')} at "
                f"{result.level:.0%}; the scenario has {result.amount:g}; prior {result.made['prior']} times "
                "that")  # fmt: skip
    return "\n".join([head, "", columns(["mass [Msun]", "limit", "events at the scenario's"], rows)])
