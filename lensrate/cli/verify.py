"""``lensrate verify``: published values recomputed, computed beside published."""

import sys

import click

from .base import Command, announce
from .text import columns, number, wrap


@click.command(cls=Command, short_help="Recompute published values and show both.")
@click.option("--group", metavar="NAME", help="One group only: lensing, galaxy, ..., surveys, events, files.")
@click.option("--json", "as_json", is_flag=True, help="Print JSON.")
@click.option("--save", metavar="FILE", help="Write a table: .ecsv .csv (# begins comments) .fits .vot .json.")
@click.option("--overwrite", is_flag=True, help="Replace an existing file.")
@click.option("--quiet", "-q", is_flag=True, help="No messages on stderr.")
def verify(group, as_json, save, overwrite, quiet):
    """Recompute published values and show them beside what was published.

    Exit code 1 if one differs that should agree.

    \b
    Examples:
      lensrate verify
      lensrate verify --group lensing --json
    """
    from ..io import TABLES, check_target, dump_json, write_table

    if save:
        check_target(save, TABLES, overwrite)
    announce(quiet)
    from ..verify import checks, to_table

    rows = checks(group)
    if save:
        write_table(to_table(rows), save, overwrite, payload={"checks": [r.to_dict() for r in rows]})
    if as_json:
        click.echo(dump_json([r.to_dict() for r in rows]))
    else:
        _print(rows)
    if any(r.failed for r in rows):
        sys.exit(1)


def _print(rows):
    for name in dict.fromkeys(r.group for r in rows):
        group = [r for r in rows if r.group == name]
        body = [
            [_short(r.quantity), number(r.published, 5), _allowed(r), number(r.computed, 5), r.unit, r.verdict]
            for r in group
        ]
        head, *lines = columns(["  quantity", "published", "allowed", "computed", "unit", "verdict"], body).splitlines()
        click.echo(f"\n{name}\n{head}")
        source = None
        for r, line in zip(group, lines):
            if r.source != source:
                source = r.source
                click.echo(wrap(source))
            click.echo(line)
    tuned = sum(r.used_in_tuning for r in rows)
    known = sum(not r.agrees and not r.failed for r in rows)
    bad = sum(r.failed for r in rows)
    click.echo("")
    text = f"{len(rows)} checks: {bad} that should agree and do not, {known} known differences"
    if tuned:
        text += f"; {tuned} were in view when the default Galaxy was chosen (*) and are no test of it"
    if any(isinstance(r.tolerance, str) and "edge" in r.tolerance for r in rows):
        text += "; where two surveys span a band its middle stands under 'published', --json states the edges"
    click.echo(wrap(text + "."))
    for r in rows:
        if not r.agrees:
            click.echo(wrap(f"{r.quantity}: {r.verdict}; {r.note or r.tolerance if r.failed else r.why}"))


def _allowed(row):
    """Half the accepted interval, so that a reader sees how much 'agrees' allows."""
    low, high = row.accepted
    return f"+-{number((high - low) / 2, 2)}" if low > float("-inf") and high < float("inf") else "one side"


def _short(quantity, width=38):
    """Indent under the source; leave out the end of a long one, at a word."""
    if len(quantity) > width:
        quantity = quantity[: width - 3].rsplit(" ", 1)[0] + " ..."
    return "  " + quantity
