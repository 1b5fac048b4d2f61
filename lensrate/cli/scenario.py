"""``lensrate scenario``: list, show and check scenarios, print the references a result rests on."""

import click

from .base import Command
from .text import safe, wrap


@click.command(cls=Command)
@click.argument("name", metavar="[NAME|FILE]", required=False)
@click.option("--references", is_flag=True, help="Print the sources of the numbers it uses.")
@click.option("--galaxy", is_flag=True, help="Print every number of its Galaxy set, changes included, as TOML.")
@click.option("--check", is_flag=True, help="Only say whether it can be used, and its hash.")
@click.option("--of", "made_file", metavar="FILE", help="The scenario that made a table, map, field file or picture.")
@click.option("--json", "as_json", is_flag=True, help="Print JSON.")
def scenario(name, references, galaxy, check, made_file, as_json):
    """List scenarios, or show one whole.

    \b
    Examples:
      lensrate scenario
      lensrate scenario default
      lensrate scenario my.toml --check
      lensrate scenario default --references
      lensrate scenario default --galaxy > my_galaxy.toml
      lensrate scenario --of rates.ecsv > again.toml
    """
    from ..io import dump_json
    from ..scenario import Scenario, resolve

    if made_file is not None:
        if name is not None or references or galaxy or check:
            raise click.UsageError("--of takes no scenario and goes with --json only")
        _of(made_file, as_json)
        return
    if name is None:
        from ..datafiles import names

        known = [Scenario.read(n) for n in names("scenarios")]
        if as_json:
            click.echo(dump_json([{"name": s.name, "title": s.title, "hash": s.hash} for s in known]))
            return
        for s in known:
            click.echo(f"{s.name:<14} {s.hash}  {s.title}")
        click.echo("\nshow one with 'lensrate scenario NAME'; start your own with  base = \"default\"", err=True)
        return
    chosen = Scenario.read(name)
    model = resolve(chosen)
    if as_json:
        click.echo(dump_json({**chosen.to_dict(), "hash": chosen.hash, "references": list(model.references)}))
    elif check:
        click.echo(f"{safe(chosen.name)}: can be used, hash {chosen.hash}")
    elif galaxy:
        click.echo(chosen.galaxy_toml().rstrip())
    elif references:
        for line in model.references:
            click.echo(wrap(line))
    else:
        click.echo(f"# {safe(chosen.name)}: {safe(chosen.title)}  (hash {chosen.hash})")
        click.echo(chosen.to_toml().rstrip())
        if model.mass_note():
            click.echo(f"# {safe(model.mass_note())}")
        for note in model.galaxy.notes:
            click.echo(wrap(f"# {note}", indent="#   "))


_TOLD = ("version", "header", "seed", "l_deg", "b_deg", "number", "campaign", "campaign_hash", "sample")


def _of(path, as_json):
    """Print the scenario that a file of ours states, as TOML; and say where today's would differ."""
    import tomllib

    from .._version import __version__
    from ..errors import InputError, LensrateError
    from ..io import dump_json
    from ..provenance import read_made
    from ..scenario import Scenario

    made = read_made(path)
    if as_json:
        click.echo(dump_json(made))
    else:
        click.echo(f"# scenario {safe(made.get('scenario', ''))} ({safe(made['scenario_hash'])}) of {safe(path)}")
        for key in _TOLD:
            if made.get(key) is not None:
                click.echo(wrap(f"# {key}: {made[key]}", indent="#   "))
        click.echo("".join(c if c.isprintable() or c in "\n\t" else "" for c in made["scenario_text"]).rstrip())
    try:
        now = Scenario.from_dict(tomllib.loads(made["scenario_text"]), "scenario", "unnamed").hash
    except (tomllib.TOMLDecodeError, RecursionError) as error:
        raise InputError(f"'{path}': the scenario in it is damaged ({str(error)[:80]})") from None
    except LensrateError as error:
        click.echo(wrap(f"note: the scenario cannot be run as things are: {error}"), err=True)
        return
    if now != made["scenario_hash"]:
        click.echo(
            wrap(
                f"note: its hash is {now} now and was {made['scenario_hash']}: data or files that it names have "
                "changed, so numbers will differ"
            ),
            err=True,
        )
    elif made.get("version") not in (None, __version__):
        click.echo(
            wrap(f"note: made by version {made['version']}, this is {__version__}: numbers may differ"), err=True
        )
