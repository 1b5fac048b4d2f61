"""Galaxy-wide numbers by lens class: born, bound, escaped, how thick, how dense at the Sun.

Everything is a sum over elements (a component's stars, or its remnants of one kick bin) of numbers born times what
one born object of the element contributes, so a mixture of kick laws gives the mixture of the sums.
"""

import math
from dataclasses import dataclass

import astropy.units as u
import numpy as np
from scipy.optimize import brentq

from .._version import __version__
from ..galaxy.density import stellar_mass
from ..kernels.fields import PARTS
from .cubes import block_sums, node_density
from .fields import Grid
from .synthesis import HEIGHTS

__all__ = [
    "DEFINITIONS",
    "NEAREST",
    "Census",
    "ClassCensus",
    "census",
    "element_numbers",
    "exponential_height",
    "median_height",
]

#: mean distance of the nearest of randomly placed points over n^(-1/3): (4 pi / 3)^(-1/3) Gamma(4/3)
NEAREST = 0.554
_RING = 1.5  # kpc on either side of the Sun's radius
_FIT_BELOW = 2.0  # kpc
_WITHIN = 20.0  # kpc
_PC = 1e3  # per kpc

DEFINITIONS = {
    "born": "objects that ever were: born per Msun of each component's stated mass times that mass "
    "(halos inside 100 kpc)",
    "today": "objects today, the escaped ones included; of stars the living ones. All fractions are of these",
    "bound_fraction": "share with negative energy in the Galaxy's potential, bar included, at the end of each "
    "component's age window; 1 by construction where the class follows the stars",
    "escaped_fraction": "one minus bound_fraction: unbound, or kicked faster than the fields' last bin",
    "fraction_within_20_kpc": "share closer than 20 kpc to the Galactic centre at that time",
    "scale_height_kpc": "median |z| / ln 2 of bound objects within 1.5 kpc of the Sun's radius",
    "scale_heights": "median_over_ln2: the same; exponential_fit: maximum likelihood of exp(-|z|/h) below 2 kpc, same "
    "objects; half_mass_whole_galaxy: median |z| (not divided) of all objects inside the fields' grid, R < 20 and "
    "|z| < 6 kpc, passing unbound ones included",
    "local_density_per_pc3": "number density at the Sun's place, passing unbound ones included",
    "nearest_pc": "expected distance of the nearest, 0.554 n^(-1/3) (random places)",
    "mean_mass_msun": "mean mass of today's objects",
    "sampling_errors": "standard errors from the number of orbits followed (not from the equilibria they start in); "
    "none for what follows the stars",
}


@dataclass(frozen=True)
class ClassCensus:
    """Numbers of one class; see `DEFINITIONS`. NaN where something is not defined."""

    kinematics: str
    born: float
    today: float
    bound_fraction: float
    escaped_fraction: float
    fraction_within_20_kpc: float
    scale_height_kpc: float
    scale_heights: dict
    local_density_per_pc3: float
    nearest_pc: float
    mean_mass_msun: float
    sampling_errors: dict


@dataclass(frozen=True, eq=False)
class Census:
    """Galaxy-wide numbers by class.

    Attributes
    ----------
    classes : dict of str to ClassCensus
    model : Model
        What they rest on.
    warnings : tuple of str
    """

    classes: dict
    model: object
    warnings: tuple = ()

    def meta(self):
        """Return how it was made, as plain values."""
        scenario, kicked = self.model.scenario, self.model.kicked
        return {
            "program": "lensrate",
            **scenario.made(),
            "seed": None,
            "kicks": scenario.kicks,
            "bh_kicks": scenario.bh_kicks,
            "fields": None if kicked is None else scenario.fields,
            "fields_made": None if kicked is None else kicked.field.provenance,
            "definitions": DEFINITIONS,
            "warnings": list(self.warnings),
            "references": list(self.model.references),
            "version": __version__,
        }

    def to_dict(self):
        """Return the keys of ``lensrate census --json``."""
        return {"classes": {k: vars(v) for k, v in self.classes.items()}, **self.meta()}

    def to_table(self):
        """Return an astropy QTable with a row per class."""
        from astropy.table import QTable

        table = QTable()
        table["lens"] = list(self.classes)
        table["kinematics"] = [c.kinematics for c in self.classes.values()]
        units = {"scale_height_kpc": u.kpc, "local_density_per_pc3": u.pc**-3, "nearest_pc": u.pc}
        units["mean_mass_msun"] = u.Msun
        for key, text in DEFINITIONS.items():
            if key not in ("scale_heights", "sampling_errors"):
                name = key.removesuffix("_kpc") if key == "scale_height_kpc" else key
                name = name.removesuffix("_per_pc3").removesuffix("_pc").removesuffix("_msun")
                table[name] = np.array([getattr(c, key) for c in self.classes.values()]) * units.get(key, 1)
                table[name].info.description = text
        for part in ("exponential_fit", "half_mass_whole_galaxy"):
            table[part] = [c.scale_heights[part] for c in self.classes.values()] * u.kpc
            table[part].info.description = DEFINITIONS["scale_heights"]
        for part in ("bound_fraction", "scale_height_kpc", "local_density_per_pc3"):
            errors = [c.sampling_errors.get(part) for c in self.classes.values()]
            name = part.removesuffix("_kpc").removesuffix("_per_pc3") + "_error"
            errors = np.array([np.nan if e is None else e for e in errors], dtype=float)
            table[name] = errors * units.get(part, 1)
            table[name].info.description = f"standard error from the number of orbits, {part}"
        table.meta.update(self.meta())
        return table

    def plot(self):
        """Draw maps of stars, neutron stars and black holes; returns a matplotlib Figure."""
        import importlib

        # plots stands above this module, and only a drawing needs it
        return importlib.import_module("lensrate.plots").maps(self)

    def _repr_html_(self):
        return self.to_table()._repr_html_()


def census(model):
    """Count the Galaxy by lens class.

    Parameters
    ----------
    model : Model
        A resolved scenario, see `scenario.resolve`.

    Returns
    -------
    Census
    """
    elements = _Elements.of(model)
    warnings = list(model.warnings)
    if model.kicked is None and not model.scenario.unkicked:
        warnings.append(
            "the scenario has no kick-resolved fields: neutron stars and black holes follow the stars, unkicked; make "
            "some with 'lensrate synthesize' and name them with  fields = \"FILE\""
        )
    return Census({name: _one(name, model, elements) for name in model.classes}, model, tuple(warnings))


def element_numbers(name, model):
    """Return objects of a class on every element of a model, shape (elements,), NaN on densities without an end."""
    out = np.zeros(len(model.component_of))
    for e, i in enumerate(model.component_of):
        spectrum = model.spectrum(name, e)
        if spectrum is not None and spectrum.mass.size:
            mass = stellar_mass(model.galaxy.components[i].density, model.galaxy.R0)
            out[e] = spectrum.moment(0) * mass if np.isfinite(mass) else np.nan
    return out


def _one(name, model, elements):
    """Count one class."""
    numbers = element_numbers(name, model)
    born = today = mass = 0.0
    for component, pop in zip(model.galaxy.components, model.populations):
        # what a kick law puts above the last bin is in a population, but in no element
        if pop is not None and name in pop.spectra:
            stated = stellar_mass(component.density, model.galaxy.R0)
            born += pop.born_per_msun[name] * stated
            today += pop.number[name] * stated
            mass += pop.spectra[name].moment(1) * stated
    if name in model.own:
        born = today = numbers.sum()
        spectra = [model.spectrum(name, e) for e in range(len(numbers))]
        mass = sum(n * s.moment(1) / s.moment(0) for n, s in zip(numbers, spectra) if s is not None)
    if not today > 0:
        nan = float("nan")
        heights = dict.fromkeys(("median_over_ln2", "exponential_fit", "half_mass_whole_galaxy"), nan)
        return ClassCensus(model.kinematics(name), float(born), float(today), *[nan] * 4, heights, *[nan] * 3, {})
    heights = numbers @ elements.heights
    scale = {
        "median_over_ln2": median_height(heights, elements.height_edges) / math.log(2),
        "exponential_fit": exponential_height(heights, elements.height_edges),
        "half_mass_whole_galaxy": median_height(numbers @ elements.layers, elements.layer_edges),
    }
    above = today - numbers.sum()  # kicked faster than the last bin; or what rounding leaves
    escaped = float(numbers @ elements.escaped + (above if above > 1e-9 * today else 0.0)) / today
    local = float(numbers @ elements.local) / _PC**3
    return ClassCensus(
        kinematics=model.kinematics(name),
        born=float(born),
        today=float(today),
        bound_fraction=1 - escaped,
        escaped_fraction=escaped,
        fraction_within_20_kpc=float(numbers @ elements.within) / today,
        scale_height_kpc=scale["median_over_ln2"],
        scale_heights=scale,
        local_density_per_pc3=local,
        nearest_pc=NEAREST * local ** (-1 / 3) if local > 0 else float("nan"),
        mean_mass_msun=float(mass / today),
        sampling_errors=elements.errors(numbers, today) if model.kinematics(name) in ("kicked", "mixed") else {},
    )


def median_height(weights, edges):
    """Return the height that half of the weight lies below, even inside a bin [kpc].

    Parameters
    ----------
    weights : ndarray, shape (h,)
    edges : ndarray, shape (h + 1,)
        Rising; the last may be infinite.

    Returns
    -------
    float
        NaN without weight; infinite where the median lies in an endless bin.
    """
    total = weights.sum()
    if not total > 0:
        return float("nan")
    below = np.concatenate([[0.0], np.cumsum(weights)]) / total
    i = min(int(np.searchsorted(below, 0.5, side="right")) - 1, weights.size - 1)
    return float(edges[i] + (edges[i + 1] - edges[i]) * (0.5 - below[i]) / (below[i + 1] - below[i]))


def exponential_height(weights, edges, top=_FIT_BELOW):
    """Return the scale height of greatest likelihood of exp(-z / h) below `top` [kpc].

    Parameters
    ----------
    weights, edges
        As for `median_height`.
    top : float  [kpc]

    Returns
    -------
    float
        NaN where the heights are even or rise.
    """
    low, high = edges[:-1], np.minimum(edges[1:], top)
    share = np.clip((high - low) / (edges[1:] - low), 0, 1)
    w = weights * share
    if not w.sum() > 0:
        return float("nan")
    mean = float(w @ (0.5 * (low + high)) / w.sum())

    def excess(h):
        return h - top / np.expm1(top / h) - mean

    largest = 50 * top
    return float("nan") if excess(largest) <= 0 else float(brentq(excess, mean / 2, largest))


@dataclass(frozen=True, eq=False)
class _Elements:
    """What one object born in each element contributes; rows in the order of the model's elements.

    escaped, within, local [1/kpc^3]: shape (e,); heights (e, h): bound and near the Sun's radius, by |z|;
    layers (e, n_z): inside the grid, by |z|; field, first: of the kicked ones, from row `first` on.
    """

    escaped: np.ndarray
    within: np.ndarray
    local: np.ndarray
    heights: np.ndarray
    height_edges: np.ndarray
    layers: np.ndarray
    layer_edges: np.ndarray
    field: object
    first: int
    kicked: np.ndarray
    place: np.ndarray
    ring: np.ndarray

    @classmethod
    def of(cls, model):
        galaxy, field = model.galaxy, None if model.kicked is None else model.kicked.field
        edges, grid = (HEIGHTS, Grid()) if field is None else (field.height_edges, field.grid)
        layer_edges = grid.edges()[1]
        place = galaxy.sun.origin()
        stars = [_stellar(c.density, galaxy.R0, edges, grid, place) for c in galaxy.components]
        within, local, heights, layers = (np.array([s[i] for s in stars]) for i in range(4))
        escaped = np.zeros(len(stars))
        first, rows, ring = len(stars), np.empty(0, dtype=int), None
        if field is not None:
            rows = model.kicked.elements
            cubes = node_density(field) * grid.volumes()
            cubes = cubes.reshape(field.n_elements, *cubes.shape[2:])[rows]
            escaped = np.concatenate([escaped, field.ends["escaped"].ravel()[rows]])
            within = np.concatenate([within, 1 - field.ends["beyond_20_kpc"].ravel()[rows]])
            here = field.rows(*(place[:, None] * u.kpc))[0].value.reshape(-1, PARTS).sum(axis=1)
            local = np.concatenate([local, here[rows]])
            heights = np.concatenate([heights, field.heights.reshape(field.n_elements, -1)[rows]])
            layers = np.concatenate([layers, cubes.sum(axis=(1, 3))])
            near = np.abs(grid.centres()[0] - galaxy.R0) < _RING
            ring = block_sums(cubes * near[:, None, None])
        return cls(escaped, within, local, heights, edges, layers, layer_edges, field, first, rows, place, ring)

    def errors(self, numbers, today):
        """Return standard errors from the number of orbits, as far as they are kept."""
        field, n = self.field, numbers[self.first :]
        tracers = field.provenance.get("tracers")
        out = {"bound_fraction": None, "scale_height_kpc": None, "local_density_per_pc3": None}
        if tracers:
            f = self.escaped[self.first :]
            out["bound_fraction"] = float(np.sqrt(np.sum(n**2 * f * (1 - f) / tracers)) / today)
        batches = field.batch_factors(*self.place[:, None])[:, self.kicked, 0]
        local = batches @ (n * self.local[self.first :]) / _PC**3
        root = np.sqrt(len(local))
        out["local_density_per_pc3"] = float(local.std(ddof=1) / root)
        ratios = field.batches.reshape(field.n_elements, *field.batches.shape[2:])[self.kicked] / 1000.0
        layers = np.einsum("e,erzp,ebrzp->bz", n, self.ring, ratios)
        edges = np.append(self.layer_edges[:-1:2], self.layer_edges[-1])
        medians = np.array([median_height(row, edges) for row in layers])
        out["scale_height_kpc"] = float(medians.std(ddof=1) / root) / math.log(2)
        return out


def _spread(edges, nodes):
    """Gauss-Legendre nodes and weights between edges, each of shape (bins * nodes,)."""
    x, w = np.polynomial.legendre.leggauss(nodes)
    half = 0.5 * np.diff(edges)[:, None]
    return (edges[:-1, None] + half * (1 + x)).ravel(), (half * w).ravel()


def _stellar(density, R0, height_edges, grid, place):
    """Shares within 20 kpc, 1/kpc^3 at the Sun, by |z| near the Sun's radius, by |z| inside the grid."""
    mass = stellar_mass(density, R0)
    if not np.isfinite(mass):
        return np.nan, np.nan, np.full(height_edges.size - 1, np.nan), np.full(grid.n_z, np.nan)
    phi = (np.arange(8) + 0.5) * np.pi / 8

    def shells(R, wR, z, wz):
        """Masses at nodes over the component's, R and wR of shape (n, m) or (n, 1)."""
        rho = sum(density.at(R * np.cos(p), R * np.sin(p), z, R0) for p in phi) / phi.size
        return 4 * np.pi * R * wR * rho * wz / mass

    def layers(R, wR, edges, nodes):
        masses = shells(R[:, None], wR[:, None], *_spread(edges, nodes))
        return masses.sum(axis=0).reshape(-1, nodes).sum(axis=1)

    R_edges, z_edges = grid.edges()
    finite = np.append(height_edges[:-1], 4 * height_edges[-2])
    near = layers(*_spread(np.array([R0 - _RING, R0 + _RING]), 12), finite, 3)
    inside = layers(*_spread(R_edges, 4), z_edges, 4)
    # more radii than heights: discs have a kink where their column becomes flat
    fine, finer = (np.concatenate([[0.0], np.geomspace(2.5e-4, 1.0, n)]) for n in (60, 200))
    (share, w), (z, wz) = _spread(finer, 3), _spread(_WITHIN * fine, 3)
    edge = np.sqrt(_WITHIN**2 - z**2)
    ball = shells(share[:, None] * edge, w[:, None] * edge, z, wz).sum()
    return min(float(ball), 1.0), float(density.at(*place, R0)) / mass, near, inside
