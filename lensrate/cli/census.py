"""``lensrate census``: Galaxy-wide numbers by lens class."""

import click

from .base import Command, announce
from .options import output, read_scenario
from .text import columns, number, safe, wrap


@click.command(cls=Command, short_help="Count the Galaxy by lens class: born, bound, escaped.")
@click.option(
    "--scenario",
    "scenario_name",
    metavar="NAME|FILE",
    default="default",
    show_default=True,
    help="Named scenario or TOML file.",
)
@click.option("--kicks", metavar="LAW", help="Kick law of neutron stars: a published set or maxwell:265.")
@click.option("--bh-kicks", metavar="LAW", help="Kick law of black holes: same, momentum, or a law.")
@click.option("--plot", metavar="FILE", help="Draw maps of stars and remnants: .png .pdf .svg.")
@output
def census(plot, save, as_json, overwrite, quiet, **choices):
    """Count the Galaxy by lens class: born, bound, escaped, how thick, how dense here.

    \b
    born      objects that ever were, escaped and dead ones included (halos inside 100 kpc)
    bound     share of today's objects with negative energy in the Galaxy's potential, bar
              included, at the end of each component's age window; the others are unbound,
              or were kicked faster than the fields' last bin (--json: escaped_fraction)
    < 20 kpc  share closer than 20 kpc to the Galactic centre at that time
    height    median |z| / ln 2 of bound objects within 1.5 kpc of the Sun's radius
    exp. fit  height of greatest likelihood of exp(-|z|/h) below 2 kpc, same objects
    half mass median |z| of all objects inside the fields' grid (R < 20, |z| < 6 kpc), passing
              unbound ones included: as much of the whole Galaxy as the fields hold
    local     number density at the Sun's place, passing unbound ones included
    nearest   expected distance of the nearest, 0.554 n^(-1/3), for random places
    mass      mean mass of today's objects
    Stars, brown dwarfs and white dwarfs follow the Galaxy set's stars, all bound. Stars count as
    born dead or alive; their other numbers are of living ones. Errors are from the number of
    orbits followed.

    \b
    Examples:
      lensrate census
      lensrate census --kicks hobbs2005 --bh-kicks none --json
      lensrate census --scenario my.toml --save census.ecsv --plot census.pdf
    """
    from ..io import PICTURES, TABLES, check_target, dump_json, write_table

    if save:
        check_target(save, TABLES, overwrite)
    if plot:
        check_target(plot, PICTURES, overwrite, "--plot")
    scenario = read_scenario(**choices)
    announce(quiet)
    from ..remnants.census import census as count
    from ..scenario import resolve

    result = count(resolve(scenario))
    if plot:
        from ..plots import save_maps

        save_maps(result, plot, overwrite)
    if save:
        write_table(result.to_table(), save, overwrite, payload=result.to_dict())
    click.echo(dump_json(result.to_dict()) if as_json else report(result))
    if not quiet:
        for warning in result.warnings:
            click.echo(wrap(f"note: {warning}"), err=True)


def report(result):
    """Return the table for people."""
    from .._version import __version__
    from ..remnants.classes import LABELS

    scenario = result.model.scenario
    fields = scenario.fields if result.model.kicked else "none: all unkicked"
    head = [
        f"lensrate {__version__}   scenario {safe(scenario.name)} ({scenario.hash})",
        wrap(f"kicks {scenario.kicks}, black holes {scenario.bh_kicks}; fields {fields}"),
    ]
    titles = ["", "born", "bound", "< 20 kpc", "height", "exp. fit", "half mass", "local", "nearest", "mass"]
    body = [["", "", "", "", "[kpc]", "[kpc]", "[kpc]", "[pc^-3]", "[pc]", "[Msun]"]]
    errors = []
    for name, c in result.classes.items():
        label, heights = LABELS.get(name, name.replace("_", " ")), c.scale_heights
        body.append(
            [label, f"{c.born:.2e}".replace("e+", "e"), number(c.bound_fraction, 4), number(c.fraction_within_20_kpc),
             number(c.scale_height_kpc), number(heights["exponential_fit"]), number(heights["half_mass_whole_galaxy"]),
             number(c.local_density_per_pc3), number(c.nearest_pc), number(c.mean_mass_msun)]
        )  # fmt: skip
        e = c.sampling_errors
        if e:
            bound = "" if e["bound_fraction"] is None else f"bound +-{e['bound_fraction']:.1g}, "
            local = c.local_density_per_pc3
            part = f"{100 * e['local_density_per_pc3'] / local:.2g} %" if local and local > 0 else "unknown"
            height = e["scale_height_kpc"]
            height = "unknown" if height is None or height != height else f"+-{height:.1g} kpc"
            errors.append(f"{label}: {bound}height {height}, local +-{part}")
    lines = [*head, "", columns(titles, body)]
    if errors:
        lines += ["", wrap("sampling errors of " + "; ".join(errors))]
    return "\n".join([*lines, "", "Definitions: lensrate census --help"])
