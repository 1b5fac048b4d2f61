"""Options that several commands share, each defined once."""

import click

from ..errors import InputError

__all__ = ["assumptions", "dask", "output", "parse_extinction", "read_scenario", "refuse_idle_extinction"]


def assumptions(command):
    """Add the options that choose or change a scenario."""
    for option in reversed(
        [
            click.option("--scenario", "scenario_name", metavar="NAME|FILE", default="default", show_default=True,
                         help="Named scenario or TOML file."),
            click.option("--kicks", metavar="LAW", help="Kick law of neutron stars: a published set or maxwell:265."),
            click.option("--bh-kicks", metavar="LAW", help="Kick law of black holes: same, momentum, or a law."),
            click.option("--sources", metavar="RULE",
                         help="Source rule: limit:I=21, peak:I=19, clump, clump:all, distance:8.0."),
            click.option("--extinction", metavar="BAND=MAG", multiple=True,
                         help="The field's measured extinction, e.g. I=1.25; may be repeated."),
            click.option("--u-0-limit", type=float, metavar="U", help="Largest impact parameter in Einstein radii."),
        ]
    ):  # fmt: skip
        command = option(command)
    return command


def dask(command):
    """Add the option that sends work to a cluster instead of threads."""
    return click.option(
        "--dask", "address", metavar="ADDRESS", help="Scheduler of a Dask cluster, instead of threads."
    )(command)


def output(command):
    """Add the options that say where results go."""
    for option in reversed(
        [
            click.option("--save", metavar="FILE",
                         help="Write a table: .ecsv .csv (# begins comments) .fits .vot .json."),
            click.option("--json", "as_json", is_flag=True, help="Print JSON instead of a table."),
            click.option("--overwrite", is_flag=True, help="Replace existing files."),
            click.option("--quiet", "-q", is_flag=True, help="No messages on stderr."),
        ]
    ):  # fmt: skip
        command = option(command)
    return command


def parse_extinction(items):
    """Turn ("I=1.25", "V=2.3") into {"I": 1.25, "V": 2.3}."""
    out = {}
    for item in items:
        band, equals, value = item.partition("=")
        if band.strip() in out:
            raise InputError(f"--extinction: {band.strip()} is given twice")
        try:
            out[band.strip()] = float(value)
        except ValueError:
            equals = ""
        if not equals:
            raise InputError(
                f"--extinction: '{item}' is not understood; write a band and magnitudes, for example I=1.25"
            )
    return out


def read_scenario(scenario_name, kicks=None, bh_kicks=None, sources=None, extinction=(), u_0_limit=None):
    """Return the scenario that the shared options describe."""
    from ..scenario import Scenario

    changes = {"kicks": kicks, "bh_kicks": bh_kicks, "sources": sources, "u_0_limit": u_0_limit}
    changes = {k: v for k, v in changes.items() if v is not None}
    measured = parse_extinction(extinction)
    if measured:
        changes["extinction"] = measured
    scenario = Scenario.read(scenario_name)
    return scenario.replace(**changes) if changes else scenario


def refuse_idle_extinction(scenario):
    """Refuse an extinction that was typed where the source rule has no magnitude that dust could change."""
    if click.get_current_context().get_parameter_source("extinction").name != "COMMANDLINE":
        return
    from ..sources.rules import parse_rule

    if not hasattr(parse_rule(scenario.sources), "band"):
        raise click.UsageError(
            f"--extinction has no effect here: it goes with sources of a magnitude limit, not with '{scenario.sources}'"
        )
