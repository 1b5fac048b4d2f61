"""The kick-resolved fields as lenses: rows of density and motion along a sightline, and their sampling error."""

import hashlib
import json
from dataclasses import dataclass
from functools import lru_cache

import numpy as np

from ..datafiles import field_checksum, field_path, read_set
from ..galaxy.density import stellar_mass
from ..kernels.fields import PARTS
from .fields import RemnantField
from .unpacked import read_unpacked

__all__ = ["KickedLenses", "galaxy_numbers", "read_field", "read_with_checksum"]


def galaxy_numbers(galaxy):
    """Return a sha256 of what orbits depend on: densities, motions and ages of the components, potential, rotation.

    Parameters
    ----------
    galaxy : Galaxy

    Returns
    -------
    str
    """
    parts = [(c.element, c.density, c.kinematics, c.age, c.efold) for c in galaxy.components if c.stars]
    potential = json.dumps(read_set("potential", galaxy.potential), sort_keys=True) if galaxy.potential else ""
    return hashlib.sha256(repr((parts, galaxy.rotation, galaxy.sun.R0, potential)).encode()).hexdigest()


def read_field(name):
    """Read kick-resolved fields once per process.

    Parameters
    ----------
    name : str
        Shipped name, or a file ending in ``.fits``.

    Returns
    -------
    RemnantField

    Raises
    ------
    InputError, DataFileError
        Unknown name; missing, damaged or foreign file.
    """
    return read_with_checksum(name)[0]


def read_with_checksum(name):
    """As `read_field`, with the file's sha256 at the time of reading."""
    path = field_path(name)
    return _read(str(path), path.stat().st_mtime_ns, name)


@lru_cache(maxsize=2)
def _read(path, _stamp, name):
    sha256 = field_checksum(name)
    return read_unpacked(path, sha256), sha256


@dataclass(frozen=True, eq=False)
class KickedLenses:
    """Fields of those components that a Galaxy has, scaled to densities per stated solar mass.

    Attributes
    ----------
    field : RemnantField
    host : tuple of int
        Component index, in the Galaxy, of each kicked element; bins of one component follow one another.
    edges : ndarray, shape (k + 1,)
        Kick bins [km/s]; element bin 0 is unkicked.
    mass : ndarray, shape (elements,)
        Stated mass of each element's component [Msun]: a field is per remnant born, a spectrum per stated Msun.
    rows : ndarray of int
        Rows of the field's profile that belong to the elements, `PARTS` Gaussians each.
    sha256 : str
        Of the file, when it was read.
    """

    field: RemnantField
    host: tuple
    edges: np.ndarray
    mass: np.ndarray
    rows: np.ndarray
    sha256: str = ""

    @classmethod
    def make(cls, field, galaxy, sha256=""):
        """Match fields to a Galaxy's components by name; None if none matches."""
        bins = len(field.kick_edges)
        host, mass, rows = [], [], []
        for i, component in enumerate(galaxy.components):
            if component.element in field.components and component.stars:
                first = field.element(component.element, 0)
                host += [i] * bins
                mass += [stellar_mass(component.density, galaxy.R0)] * bins
                rows += range(PARTS * first, PARTS * (first + bins))
        if not host:
            return None
        return cls(field, tuple(host), np.asarray(field.kick_edges), np.array(mass), np.array(rows), sha256)

    @property
    def element_of_row(self):
        """Kicked element of each row."""
        return np.repeat(np.arange(len(self.host)), PARTS)

    @property
    def elements(self):
        """Numbers of the elements in the field."""
        return self.rows[::PARTS] // PARTS

    def profile(self, line, D):
        """Return density and motion of every element's Gaussians, like `Galaxy.profile`.

        Parameters
        ----------
        line : Sightline3D
        D : ndarray, shape (n,)
            Distances [kpc].

        Returns
        -------
        ndarray, shape (6, PARTS * elements, n)
            The density is that of the stated mass [Msun/kpc^3] if all of it moved like this element.
        """
        out = self.field.profile(line, D)
        if not np.array_equal(self.rows, np.arange(out.shape[1])):
            out = np.ascontiguousarray(out[:, self.rows])
        out[0] *= np.repeat(self.mass, PARTS)[:, None]
        return out

    def batch_factors(self, line, D):
        """Return each batch's density over the mean along a sightline, shape (batches, elements, n)."""
        return self.field.batch_factors(*line.xyz(D))[:, self.elements]
