"""Run the orbits of a Galaxy: equilibrium of each component, births with kicks, fields of every element.

Each element (component and kick bin) is one job with its own random stream, and sums its batches in order, so the
result is the same whatever the number of threads. What is finished, and what is done of an element that takes long,
is kept in a folder.
"""

import hashlib
import json
import shutil
import threading
from dataclasses import dataclass
from io import BytesIO
from pathlib import Path

import astropy.units as u
import numpy as np

from .._version import __version__
from ..errors import DataFileError, InputError
from ..galaxy.density import Uniform
from ..io import whole_bytes
from ..parallel import run_map
from .births import KICK_EDGES, self_held
from .cells import cells_of
from .cost import steps
from .element import HEIGHTS
from .element import element as _element
from .equilibrium import CHUNK, Equilibrium, solve
from .fields import Grid, RemnantField
from .kicked import galaxy_numbers
from .orbits import step

__all__ = ["HEIGHTS", "REGIONS", "Settings", "forget", "stellar_components", "synthesize"]

_CHECK = hashlib.sha256().digest_size  # bytes before a finished piece


@dataclass(frozen=True)
class Settings:
    """Numbers of a synthesis.

    Parameters
    ----------
    tracers : int
        Per element, over all batches.
    batches : int
        At least 2; their scatter gives the sampling error.
    kick_edges : tuple of float  [km/s]
    bundles, iterations : int
        Of the equilibrium, see `equilibrium.solve`.
    eta : float
        Step, see `orbits.step`; densities move by less than their sampling error between 0.1 and 0.2.
    stride : int
        Steps between deposits.
    grid : Grid
    seed : int
    """

    tracers: int = 20_000
    batches: int = 4
    kick_edges: tuple = KICK_EDGES
    bundles: int = 6144
    iterations: int = 300
    eta: float = 0.15
    stride: int = 8
    grid: Grid = Grid()
    seed: int = 1

    def __post_init__(self):
        edges = np.asarray(self.kick_edges, dtype=float)
        if edges.ndim != 1 or edges.size < 2 or edges[0] < 0 or np.any(np.diff(edges) <= 0):
            raise InputError("kick_edges: two or more rising speeds from 0 km/s up are needed")
        for name, low in (("tracers", 256), ("batches", 2), ("bundles", 64), ("iterations", 0), ("stride", 1)):
            value = getattr(self, name)
            if not isinstance(value, (int, np.integer)) or value < low:
                raise InputError(f"{name}: {value!r} given, a whole number of at least {low} is needed")
        step(self.eta)


def synthesize(galaxy, potential, settings=None, *, jobs=1, executor=None, progress=None, checkpoint=None):
    """Make the kick-resolved fields of a Galaxy.

    Parameters
    ----------
    galaxy : Galaxy
        Its components of stars; those of uniform density are left out.
    potential : Potential
        Of the whole Galaxy. Members marked so are left out of the orbits, except for the component they hold.
    settings : Settings, optional
    jobs, executor
        See `parallel.run_map`.
    progress : callable, optional
        Called after each piece with the shares, 0 to 1, of the work that is done and that was found done before.
    checkpoint : str or Path, optional
        Folder that keeps finished pieces; a run with the same inputs takes them up again. See `forget`.

    Returns
    -------
    RemnantField

    Raises
    ------
    InputError
        The Galaxy's bar and the potential's stand at different angles, or nothing is left to synthesise.
    """
    settings = settings or Settings()
    bar = galaxy.bar()
    if bar is not None and abs((bar.angle - potential.bar_angle).to_value(u.deg)) > 1e-6:
        raise InputError(
            f"potential '{potential.name}': its bar stands at {potential.bar_angle:.4g}, the stars' bar of galaxy "
            f"'{galaxy.name}' at {bar.angle:.4g}; change one of them"
        )
    components = stellar_components(galaxy)
    pieces = _Pieces(checkpoint, _made(galaxy, potential, settings))
    work = _Work({c.element: steps(c, galaxy, potential, settings) for c in components}, progress)
    streams = np.random.SeedSequence(settings.seed).spawn(len(components))
    plans, held = [], []
    for place, (c, stream) in enumerate(zip(components, streams)):
        equilibrium = None
        if not self_held(c):
            key = f"{place}_equilibrium"
            equilibrium = _held(c, key, galaxy, potential, settings, stream, pieces, work, jobs, executor)
        held.append(equilibrium)
        plans += [(place, i, s) for i, s in enumerate(stream.spawn(len(settings.kick_edges)))]
    # threads leave early when the run is broken off; other executors pickle their work, which an event forbids
    stop = threading.Event() if executor is None else None

    make = _Elements(components, held, galaxy, potential, settings)

    def run(plan):
        found = pieces.get(_name(plan))
        if found is not None:
            return found, True
        made = pieces.keep(_name(plan), make(plan, stop, pieces.part(_name(plan))))
        pieces.drop(f"{_name(plan)}_part")
        return made, False

    def tell(plan, result):
        work.add(components[plan[0]].element, 1 + plan[1], 1.0, result[1])

    if executor is None:
        done = [arrays for arrays, _ in run_map(run, plans, jobs, None, tell, stop)]
    else:
        done = _elsewhere(make, plans, pieces, executor, tell)
    shape = (len(components), len(settings.kick_edges))
    stacked = {k: np.stack([d[k] for d in done]).reshape(*shape, *done[0][k].shape) for k in done[0]}
    mismatch = {}
    for i, c in enumerate(components):
        balance = {**held[i].mismatch, "effective_bundles": held[i].effective} if held[i] else {}
        regions = _regions(c, galaxy, potential, settings.grid, stacked["density"][i, 0])
        mismatch[c.element] = {"equilibrium": balance, "regions": regions}
    return RemnantField(
        components=tuple(c.element for c in components),
        kick_edges=np.asarray(settings.kick_edges, dtype=float),
        grid=settings.grid,
        ln_rho=stacked["ln_rho"],
        four=stacked["four"],
        two=stacked["two"],
        batches=stacked["batches"],
        ends={k: stacked["ends"][..., i] for i, k in enumerate(("escaped", "beyond_20_kpc", "outside_grid"))},
        heights=stacked["heights"],
        height_edges=HEIGHTS,
        bar_angle=float(potential.bar_angle.to_value(u.rad)),
        mismatch=mismatch,
        provenance=pieces.made,
    )


@dataclass(frozen=True)
class _Elements:
    """What makes an element of a plan; sent to other processes, so it holds no folder, executor or event."""

    components: list
    held: list
    galaxy: object
    potential: object
    settings: object

    def __call__(self, plan, stop=None, part=None):
        place, number, stream = plan
        return _element(self.components[place], self.held[place], number, stream, self.galaxy, self.potential,
                        self.settings, stop, part)  # fmt: skip


def _name(plan):
    """Name of a plan's piece in the checkpoint."""
    return f"{plan[0]}_{plan[1]}"


def _elsewhere(make, plans, pieces, executor, tell):
    """Arrays of all plans, made by an executor that may know nothing of the checkpoint's folder: it is kept here."""
    found = [pieces.get(_name(plan)) for plan in plans]
    for plan, arrays in zip(plans, found):
        if arrays is not None:
            tell(plan, (arrays, True))
    todo = [i for i, arrays in enumerate(found) if arrays is None]
    for i, arrays in zip(todo, executor.map(make, [plans[i] for i in todo])):
        found[i] = pieces.keep(_name(plans[i]), arrays)
        tell(plans[i], (arrays, False))
    return found


def stellar_components(galaxy):
    """Return the components that a synthesis follows.

    Raises
    ------
    InputError
        There is none.
    """
    components = [c for c in galaxy.components if c.stars and not isinstance(c.density, Uniform)]
    if not components:
        raise InputError(f"galaxy '{galaxy.name}': no component of stars with an end; nothing to synthesise")
    return components


class _Work:
    """Steps of orbits done so far, told to whoever asked."""

    def __init__(self, by_element, tell):
        self.by_element, self.tell = by_element, tell
        self.total = sum(n.sum() for n in by_element.values())
        self.done = self.found = 0.0

    def add(self, element, number, share, found):
        steps = self.by_element[element][number] * share
        self.done += steps
        self.found += steps if found else 0.0
        if self.tell is not None:
            self.tell(self.done / self.total, self.found / self.total)


def _held(component, key, galaxy, potential, settings, stream, pieces, work, jobs, executor):
    """Return a component's equilibrium, found now or kept from before."""
    rng = np.random.default_rng(stream.spawn(1)[0])
    kept = pieces.get(key)
    if kept is None:
        options = {"bundles": settings.bundles, "iterations": settings.iterations, "eta": settings.eta}
        parts = -(-settings.bundles // CHUNK)
        options["progress"] = lambda *_: work.add(component.element, 0, 1 / parts, False)
        found = solve(component, galaxy, potential.for_orbits(), rng, jobs=jobs, executor=executor, **options)
        mismatch = np.array(json.dumps(found.mismatch))
        pieces.keep(key, {"states": found.states, "weights": found.weights, "mismatch": mismatch})
        return found
    work.add(component.element, 0, 1.0, True)
    return Equilibrium(
        kept["states"], kept["weights"], float(1 / np.sum(kept["weights"] ** 2)), json.loads(str(kept["mismatch"]))
    )


#: regions in which the synthesised stars are held against the stars of the Galaxy set: R and |z| between [kpc]
REGIONS = {
    "R<1,|z|<0.3": (0, 1, 0, 0.3),
    "R<1,0.3<|z|<0.8": (0, 1, 0.3, 0.8),
    "1<R<3,|z|<0.3": (1, 3, 0, 0.3),
    "1<R<3,0.3<|z|<0.8": (1, 3, 0.3, 0.8),
    "3<R<6,|z|<0.8": (3, 6, 0, 0.8),
    "6<R<10,|z|<0.8": (6, 10, 0, 0.8),
    "R<10,0.8<|z|<3": (0, 10, 0.8, 3),
}


def _regions(component, galaxy, potential, grid, density):
    """Return by region the share of the unkicked tracers over the share of the stars."""
    cells = cells_of(component, galaxy, potential)
    # mass of each grid cell from 3 x 3 x 2 points in it
    (R, z), sub = grid.edges(), (np.arange(3) + 0.5) / 3
    R = (R[:-1, None] + np.diff(R)[:, None] * sub).ravel()
    z = (z[:-1, None] + np.diff(z)[:, None] * sub).ravel()
    phi = (np.arange(2 * grid.n_phi) + 0.5) * np.pi / (2 * grid.n_phi)
    R, z, phi = np.meshgrid(R, z, phi, indexing="ij")
    points = potential.from_bar_frame(np.stack([R * np.cos(phi), R * np.sin(phi), z], axis=-1).reshape(-1, 3))
    rho = component.density.at(*points.T, galaxy.R0).reshape(R.shape) * R
    volume = grid.volumes() / (18 * R.reshape(grid.n_R, 3, grid.n_z, 3, grid.n_phi, 2).mean(axis=(1, 3, 5)))
    stars = rho.reshape(grid.n_R, 3, grid.n_z, 3, grid.n_phi, 2).sum(axis=(1, 3, 5)) * volume
    found = density * grid.volumes()
    stars = stars / cells.mass
    R, z, _ = grid.centres()
    out = {}
    for name, (r0, r1, z0, z1) in REGIONS.items():
        here = ((R[:, None] >= r0) & (R[:, None] < r1) & (z >= z0) & (z < z1))[:, :, None]
        wanted = float(np.sum(stars * here))
        if wanted > 2e-3:
            out[name] = float(np.sum(found * here)) / wanted
    return out


def _made(galaxy, potential, settings):
    """Return what decides the result, as plain JSON values."""
    numbers = {k: v for k, v in vars(settings).items() if k != "grid"}
    return json.loads(
        json.dumps(
            {
                "version": __version__,
                "galaxy": galaxy.name,
                "galaxy_numbers": galaxy_numbers(galaxy),
                "potential": potential.name,
                "potential_numbers": hashlib.sha256(repr(potential.members).encode()).hexdigest(),
                "pattern_speed_kms_kpc": -potential.omega,
                "references": [*galaxy.references, potential.reference],
                "grid": vars(settings.grid),
                **numbers,
            }
        )
    )


def _key(made):
    return hashlib.sha256(json.dumps(made, sort_keys=True).encode()).hexdigest()[:16]


def forget(checkpoint, field):
    """Remove the finished pieces that a field was made of, and their folder if nothing else is in it.

    Parameters
    ----------
    checkpoint : str or Path
        As given to `synthesize`.
    field : RemnantField
        As it was returned.
    """
    folder = Path(checkpoint)
    shutil.rmtree(folder / _key(field.provenance), ignore_errors=True)
    if folder.is_dir() and not any(folder.iterdir()):
        folder.rmdir()


class _Pieces:
    """Finished elements in a folder; without a folder nothing is kept."""

    def __init__(self, folder, made):
        self.made = made
        self.folder = None
        if folder is not None:
            self.folder = Path(folder) / _key(made)
            try:
                self.folder.mkdir(parents=True, exist_ok=True)
            except OSError as error:
                raise DataFileError(f"checkpoint: folder '{self.folder}' cannot be made ({error.strerror})") from None

    def get(self, key):
        """Return the arrays of a piece, None where it is missing or damaged: it is then made again."""
        path = self.folder / f"{key}.npz" if self.folder else None
        if path is None or not path.is_file():
            return None
        try:
            content = path.read_bytes()
        except OSError:
            return None
        body = content[_CHECK:]
        if hashlib.sha256(body).digest() != content[:_CHECK]:
            return None
        with np.load(BytesIO(body)) as kept:
            return {k: kept[k] for k in kept.files}

    def keep(self, key, arrays):
        """Write a piece, whole or not at all; return its arrays."""
        if self.folder is not None:
            # another run to the same target may have ended and tidied up
            self.folder.mkdir(parents=True, exist_ok=True)
            body = BytesIO()
            np.savez_compressed(body, **arrays)
            with whole_bytes(self.folder / f"{key}.npz") as buffer:
                buffer.write(hashlib.sha256(body.getbuffer()).digest())
                buffer.write(body.getbuffer())
        return arrays

    def drop(self, key):
        """Remove a piece, if it is there."""
        if self.folder is not None:
            (self.folder / f"{key}.npz").unlink(missing_ok=True)

    def part(self, key):
        """Return how to get and to keep what is done of a piece, None without a folder."""
        if self.folder is None:
            return None
        return lambda: self.get(f"{key}_part"), lambda arrays: self.keep(f"{key}_part", arrays)
