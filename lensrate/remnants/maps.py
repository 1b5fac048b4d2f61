"""Maps of the Galaxy by class, from above and from the side, out of the fields' grid."""

from dataclasses import dataclass

import numpy as np
from scipy.ndimage import map_coordinates

from ..galaxy.density import stellar_mass
from .census import element_numbers
from .cubes import node_density
from .fields import Grid

__all__ = ["Map", "galaxy_maps"]

_YOUNG = 1.0  # Gyr
_REACH, _HEIGHT = 14.0, 5.0  # kpc shown: corners lie inside the grid
_STEP, _STEP_Z = 0.14, 0.1


@dataclass(frozen=True, eq=False)
class Map:
    """Shares of some objects per square kiloparsec.

    Attributes
    ----------
    name, group : str
        Lens class; "young", "old" or "all".
    number : float
        Objects that the shares are of, the escaped ones included.
    x, z : ndarray  [kpc]
        Galactocentric; the Sun is at negative x.
    face_on : ndarray, shape (x, x)
        Along y, x: seen from the north Galactic pole, below 6 kpc.
    edge_on : ndarray, shape (z, x)
        Along z, x: summed over |y| < 14 kpc.
    """

    name: str
    group: str
    number: float
    x: np.ndarray
    z: np.ndarray
    face_on: np.ndarray
    edge_on: np.ndarray


def galaxy_maps(model):
    """Return maps of stars, and of neutron stars and black holes of young and old components.

    Parameters
    ----------
    model : Model
        A resolved scenario.

    Returns
    -------
    list of Map
        Young are components not older than 1 Gyr; where there are none, both together are one map.
    """
    field = None if model.kicked is None else model.kicked.field
    grid = Grid() if field is None else field.grid
    bar = model.galaxy.bar()
    angle = field.bar_angle if field is not None else 0.0 if bar is None else bar.angle.to_value("rad")
    densities = _densities(model, field, grid, angle)
    young = np.array([model.galaxy.components[i].age[1] <= _YOUNG for i in model.component_of])
    groups = {"young": young, "old": ~young} if young.any() and not young.all() else {"all": young | True}
    chosen = [("star", "all", young | True)]
    chosen += [(name, g, mask) for name in ("neutron_star", "black_hole") for g, mask in groups.items()]
    out = []
    for name, group, mask in chosen:
        numbers = np.where(mask, np.nan_to_num(element_numbers(name, model)), 0.0)
        born = _all(name, model, mask, numbers)
        if born > 0:
            out.append(Map(name, group, born, *_project(np.tensordot(numbers / born, densities, 1), grid, angle)))
    return out


def _all(name, model, mask, numbers):
    """Objects of a class in the components of a group, with those that no element holds since they escaped at once."""
    total = 0.0
    for i, (component, pop) in enumerate(zip(model.galaxy.components, model.populations)):
        if pop is not None and mask[i]:
            total += pop.number[name] * stellar_mass(component.density, model.galaxy.R0)
    return total or numbers.sum()


def _densities(model, field, grid, angle):
    """Return the density at the grid's nodes of one object of each element, shape (e, n_R, n_z, n_phi)."""
    R, z, phi = np.meshgrid(*grid.centres(), indexing="ij")
    azimuth = np.pi - angle + phi
    x, y = R * np.cos(azimuth), R * np.sin(azimuth)
    R0 = model.galaxy.R0
    stars = []
    for component in model.galaxy.components:
        mass = stellar_mass(component.density, R0)
        stars.append(component.density.at(x, y, z, R0) / mass if np.isfinite(mass) else np.zeros(R.shape))
    if field is None:
        return np.array(stars)
    kicked = node_density(field).reshape(field.n_elements, *R.shape)[model.kicked.elements]
    return np.concatenate([np.array(stars), kicked])


def _project(density, grid, angle):
    """Return x, z and the two maps of a density at the grid's nodes."""
    per_R = grid.pack()[1]
    z_edges = grid.edges()[1]
    x = np.arange(-_REACH, _REACH + 0.5 * _STEP, _STEP)
    z = np.arange(-_HEIGHT, _HEIGHT + 0.5 * _STEP_Z, _STEP_Z)

    def at(plane, x, y):
        """Interpolate ln of a plane given in R, azimuth at points."""
        R, phi = np.hypot(x, y), np.arctan2(y, x) - np.pi + angle
        u = np.arcsinh(R / grid.R_scale) * per_R - 0.5
        p = (phi / np.pi * grid.n_phi) % grid.n_phi + 0.5  # one column is added in front
        padded = np.log(np.concatenate([plane[:, -1:], plane, plane[:, :1]], axis=1) + 1e-30)
        return np.where(R < grid.R_max, np.exp(map_coordinates(padded, [u, p], order=1, mode="nearest")), 0.0)

    column = 2 * np.tensordot(density, np.diff(z_edges), axes=([1], [0]))
    face_on = at(column, *np.meshgrid(x, x))
    # along y, short steps at the centre
    y_edges = 0.3 * np.sinh(np.linspace(-1, 1, 121) * np.arcsinh(_REACH / 0.3))
    points = np.meshgrid(x, 0.5 * (y_edges[1:] + y_edges[:-1]))
    planes = np.array([np.diff(y_edges) @ at(density[:, j], *points) for j in range(grid.n_z)])
    v = np.arcsinh(np.abs(z) / grid.z_scale) * grid.pack()[4] - 0.5
    w, i = np.meshgrid(v, np.arange(x.size), indexing="ij")
    edge_on = np.exp(map_coordinates(np.log(planes + 1e-30), [w, i], order=1, mode="nearest"))
    return x, z, face_on, edge_on
