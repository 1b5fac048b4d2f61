"""``lensrate synthesize``: run the orbits of a scenario's Galaxy and write its kick-resolved fields."""

from pathlib import Path

import click

from .base import Command, announce
from .interrupts import keeping
from .options import dask
from .text import columns, safe, wrap


@click.command(cls=Command, short_help="Synthesise where remnants are and how they move.")
@click.option(
    "--scenario", "name", metavar="NAME|FILE", default="default", show_default=True, help="Named scenario or TOML file."
)
@click.option("--save", metavar="FILE", required=True, help="Where the fields go, ending in .fits.")
@click.option(
    "--tracers",
    type=click.IntRange(256, 10_000_000),
    default=20_000,
    show_default=True,
    help="Orbits for each component and kick bin; errors fall with the root of it, time grows with it.",
)
@click.option("--bundles", type=click.IntRange(64, 65_536), default=6144, hidden=True)
@click.option("--iterations", type=click.IntRange(0, 10_000), default=300, hidden=True)
@click.option("--seed", type=click.IntRange(0), default=1, show_default=True, help="Of the random numbers.")
@click.option("--jobs", type=click.IntRange(1, 256), default=1, show_default=True, help="Threads.")
@click.option(
    "--checkpoint",
    metavar="FOLDER",
    help="Keeps finished pieces until the file is written.  [default: FILE.checkpoint]",
)
@dask
@click.option("--overwrite", is_flag=True, help="Replace an existing file.")
@click.option("--quiet", "-q", is_flag=True, help="No messages on stderr.")
def synthesize(name, save, tracers, bundles, iterations, seed, jobs, checkpoint, address, overwrite, quiet):
    """Synthesise where remnants are and how they move, for every natal kick.

    An interrupted run is taken up again by the same command, with the same result. The result does not depend on the
    number of threads. Use the file in a scenario with  fields = "FILE".

    \b
    Examples:
      lensrate synthesize --save mine.fits --jobs 2
      lensrate synthesize --scenario my.toml --save mine.fits --tracers 50000 --jobs 8
    """
    from dataclasses import replace

    from ..claims import check_memory
    from ..galaxy.potential import Potential
    from ..io import check_target
    from ..parallel import cluster
    from ..remnants.cost import estimate
    from ..remnants.synthesis import Settings, forget, stellar_components
    from ..remnants.synthesis import synthesize as run
    from ..scenario import Scenario
    from .progress import Progress, duration, size

    target = check_target(save, (".fits",), overwrite)
    scenario = Scenario.read(name)
    galaxy = scenario.build_galaxy()
    potential = Potential.read(_potential(galaxy))
    settings = Settings(tracers=tracers, bundles=bundles, iterations=iterations, seed=seed)
    folder = Path(checkpoint) if checkpoint else target.with_name(target.name + ".checkpoint")
    announce(quiet)
    components = stellar_components(galaxy)
    need = estimate(components, galaxy, potential, settings, jobs)
    if address is None:
        check_memory("synthesize", need.memory, "take fewer --jobs or --tracers")
    if not quiet:
        text = (
            f"lensrate: {len(components)} components x {len(settings.kick_edges)} kick bins x {tracers} orbits: about "
            f"{duration(need.seconds)} and {size(need.memory)} of memory on {jobs} thread{'s' * (jobs > 1)}"
        )
        click.echo(wrap(text), err=True)
    with keeping("finished pieces", folder):
        with cluster(address) as executor, Progress("synthesize", quiet) as progress:
            field = run(
                galaxy, potential, settings, jobs=jobs, executor=executor, checkpoint=folder, progress=progress
            )
        stated = {"scenario": scenario.name, "scenario_hash": scenario.hash, "scenario_text": scenario.to_toml()}
        replace(field, provenance={**field.provenance, **stated}).write(target, overwrite)
    forget(folder, field)
    click.echo(report(target, field, scenario, size(target.stat().st_size)))
    return 0


def _potential(galaxy):
    from ..datafiles import names
    from ..errors import InputError

    if not galaxy.potential:
        raise InputError(
            f"galaxy '{galaxy.name}': names no potential, which orbits need; add  potential = \"default\"  to the set "
            f"(known: {', '.join(names('potential'))})"
        )
    return galaxy.potential


def report(target, field, scenario, size):
    """Return the table for people: errors by component."""
    import numpy as np

    from ..remnants.cubes import sampling_error
    from ..remnants.kicks import parse_kick
    from ..remnants.synthesis import REGIONS

    law = parse_kick(scenario.kicks).bin_weights(field.kick_edges)
    error = sampling_error(field, np.concatenate([[law.unkicked], law.inside]))
    regions = [r for r in REGIONS if any(r in m["regions"] for m in field.mismatch.values())]
    rings, heights = zip(*[[_span(part) for part in r.split(",", 1)] for r in regions])
    body = [["|z| [kpc]", "[%]", "", *heights]]
    for name, e in zip(field.components, error):
        held = field.mismatch[name]
        later = held["equilibrium"].get("later")
        numbers = [held["regions"].get(r) for r in regions]
        row = [name, f"{100 * e:.2g}", "-" if later is None else f"{later:.3f}"]
        body.append(row + ["-" if n is None else f"{n:.3f}" for n in numbers])
    lines = [
        f"{safe(target)}   {size}   scenario {safe(scenario.name)} ({scenario.hash})",
        "",
        columns(["R [kpc]", "error", "rms", *rings], body),
        "",
        wrap(
            f"error: sampling error of the density in a block of eight cells, rms over remnants, kicks "
            f"{safe(scenario.kicks)}. rms: of the equilibrium's cells about the stars' density, in orbits it was not "
            "fitted to. Last columns: synthesised over wanted unkicked density, by region."
        ),
    ]
    return "\n".join(lines)


def _span(text):
    """Turn "R<1" into "0-1" and "0.3<|z|<0.8" into "0.3-0.8"."""
    parts = text.split("<")
    return f"{parts[0] if len(parts) == 3 else 0}-{parts[-1]}"
