"""One element of the fields, a component's remnants in one kick bin: its tracers followed batch by batch."""

import time

import numpy as np

from ..kernels import fields as kernels
from ..kernels.potential import LANES
from .births import analytic, draw, kicked, self_held, window
from .cost import PILOT
from .moments import batch_ratios, encode, frames
from .orbits import states_energies, step

__all__ = ["HEIGHTS", "element"]

_RING = 1.5  # kpc on either side of the Sun's radius, where heights are counted
HEIGHTS = np.concatenate([[0.0], np.geomspace(0.01, 50.0, 61), [np.inf]])
_BLOCK = 256 * LANES  # tracers followed between looks at the clock: a second or two
_KEEP_EVERY = 20.0  # seconds


def element(component, equilibrium, number, stream, galaxy, potential, settings, stop=None, part=None):
    """Follow the tracers of one element.

    Parameters
    ----------
    component : Component
    equilibrium : Equilibrium or None
        None for a self-held component.
    number : int
        Of the kick bin, 0 is unkicked.
    stream : numpy.random.SeedSequence
    galaxy : Galaxy
    potential : Potential
    settings : Settings
    stop : threading.Event, optional
        Once set, the work is left with KeyboardInterrupt.
    part : pair of callables, optional
        The first returns what an interrupted run had kept of this element, or None; the second keeps what is done, and
        is called every 20 s. The result is the same with and without a break.

    Returns
    -------
    dict of str to ndarray
        What a field stores of the element, shares of ends and heights, and its density.
    """
    grid, edges = settings.grid, settings.kick_edges
    felt = potential if self_held(component) else potential.for_orbits()
    ages, ds = window(component), step(settings.eta)
    bins = (HEIGHTS.size - 3) / np.log(HEIGHTS[-2] / HEIGHTS[1])
    ring = np.array([galaxy.R0 - _RING, galaxy.R0 + _RING, np.log(HEIGHTS[1]), bins])
    span = (ages.young, ages.old, ages.growth, settings.stride)
    rngs = [np.random.default_rng(s) for s in stream.spawn(settings.batches + 1)]
    n = -(-settings.tracers // settings.batches)

    def born(batch):
        rng, many = rngs[batch], n if batch else max(64, settings.tracers // PILOT)
        if equilibrium is None:
            rows = analytic(component, galaxy, felt, many, rng)
        else:
            rows = draw(equilibrium, many, rng)
        if number > 0:
            rows = kicked(rows, edges[number - 1], edges[number], rng)
        # blocks of like energy take like numbers of steps
        order = np.argsort(states_energies(felt, rows)[:, 0], kind="stable")
        return np.ascontiguousarray(rows[order])

    done = _begun(grid, settings.batches)
    kept = part[0]() if part else None
    if kept is not None and all(k in kept and kept[k].shape == v.shape for k, v in done.items()):
        done = kept
    looked = time.monotonic()
    # batch 0 is the pilot, which finds the velocities about which cells are divided
    for batch in range(int(done["at"][0]), settings.batches + 1):
        rows = born(batch)
        while done["at"][1] < len(rows):
            if stop is not None and stop.is_set():
                raise KeyboardInterrupt
            first = int(done["at"][1])
            orbits = (*felt.packed, felt.omega, ds, rows[first : first + _BLOCK], *span)
            cells = (grid.pack(), grid.n_four, done["frame"], ring)
            kernels.deposit_orbits(*orbits, *cells, *(done[k] for k in ("sums", "fourth", "heights", "ends")))
            done["at"][1] = first + _BLOCK
            if part and time.monotonic() - looked > _KEEP_EVERY:
                part[1](done)
                looked = time.monotonic()
        if batch == 0:
            done["frame"] = frames(done["sums"].sum(axis=0), grid)
            for k in ("fourth", "heights", "ends"):
                done[k][:] = 0.0
        else:
            done["weights"][batch - 1] = done["sums"][..., 0].sum(axis=0)
            done["total"] += done["sums"]
        done["sums"][:] = 0.0
        done["at"][:] = batch + 1, 0
    return _finished(done, settings.stride * ds / (ages.total * done["ends"][0]), grid)


def _begun(grid, batches):
    """Return the sums of an element before its first tracer; "at" is the batch and the tracer in it that is next."""
    cells = (kernels.PARTS, grid.n_R, grid.n_z, grid.n_phi, 10)
    return {
        "at": np.zeros(2, dtype=np.int64),
        "sums": np.zeros(cells),
        "total": np.zeros(cells),
        "frame": np.zeros((*cells[1:4], 6)),
        "fourth": np.zeros(cells[1:4]),
        "weights": np.zeros((batches, *cells[1:4])),
        "heights": np.zeros(HEIGHTS.size - 1),
        "ends": np.zeros(4),
    }


def _finished(done, scale, grid):
    """Turn an element's sums into what a field stores of it."""
    ends, total = done["ends"], done["total"]
    ln_rho, four, two = encode(total, scale, grid, done["frame"], done["fourth"])
    inside = total[..., 0].sum() * scale
    return {
        "ln_rho": ln_rho,
        "four": four,
        "two": two,
        "batches": batch_ratios(done["weights"]),
        "heights": done["heights"] * scale,
        "ends": np.array([ends[1] / ends[0], 1 - ends[2] / ends[0], 1 - inside]),
        "density": total[..., 0].sum(axis=0) * scale / grid.volumes(),
    }
