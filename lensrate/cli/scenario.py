"""``lensrate scenario``: list, show and check scenarios, print the references a result rests on."""

import click

from .base import Command
from .text import safe, wrap


@click.command(cls=Command)
@click.argument("name", metavar="[NAME|FILE]", required=False)
@click.option("--references", is_flag=True, help="Print the sources of the numbers it uses.")
@click.option("--galaxy", is_flag=True, help="Print every number of its Galaxy set, changes included, as TOML.")
@click.option("--check", is_flag=True, help="Only say whether it can be used, and its hash.")
@click.option("--json", "as_json", is_flag=True, help="Print JSON.")
def scenario(name, references, galaxy, check, as_json):
    """List scenarios, or show one whole.

    \b
    Examples:
      lensrate scenario
      lensrate scenario default
      lensrate scenario my.toml --check
      lensrate scenario default --references
      lensrate scenario default --galaxy > my_galaxy.toml
    """
    from ..io import dump_json
    from ..scenario import Scenario, resolve

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
