"""The Galaxy's gravity: members read from a parameter set, their potential, forces and speeds.

Positions are right-handed Galactocentric as in astropy, with the Sun at x = -R0 and the disc turning
clockwise seen from +z, so that the Sun moves toward +y and L_z < 0. The bar's near end is at l > 0:
its major axis points along (-cos angle, +sin angle). Kernels work in the bar's frame, whose x axis is
that direction and whose z axis is the same; there the pattern turns with a negative angular speed.
"""

from dataclasses import dataclass
from functools import cache, cached_property

import astropy.units as u
import numpy as np

from ..datafiles import read_set
from ..errors import InputError, did_you_mean, one_of
from ..kernels import potential as kernels
from ..params import Params, param
from ..units import G, strip

__all__ = [
    "MEMBER_KINDS",
    "NFW",
    "CutoffPower",
    "Homeoids",
    "Member",
    "MiyamotoNagai",
    "NeedleBar",
    "Plummer",
    "Potential",
]

_DIRECTIONS = 32  # midpoints on half a circle; the bars' azimuthal means are then good to 1e-6
_SPEED2 = u.km**2 / u.s**2


@dataclass(frozen=True)
class MiyamotoNagai(Params):
    """Disc of Miyamoto & Nagai (1975, PASJ 27, 533)."""

    mass: u.Quantity = param("Msun", "total mass; negative to hollow out another disc")
    a: u.Quantity = param("kpc", "radial length")
    b: u.Quantity = param("kpc", "vertical length")

    code = kernels.MIYAMOTO_NAGAI


@dataclass(frozen=True)
class NFW(Params):
    """Halo of Navarro, Frenk & White (1997, ApJ 490, 493), density ~ 1 / [r (a + r)^2]."""

    mass: u.Quantity = param("Msun", "scale mass 4 pi rho_s a^3")
    a: u.Quantity = param("kpc", "scale radius")

    code = kernels.NFW


@dataclass(frozen=True)
class CutoffPower(Params):
    """Spherical power law with an exponential cut-off, density ~ r^-slope exp[-(r/cut)^2] (Bovy 2015)."""

    mass: u.Quantity = param("Msun", "total mass")
    slope: u.Quantity = param("", "inner slope, below 2")
    cut: u.Quantity = param("kpc", "cut-off radius")

    code = kernels.CUTOFF_POWER


@dataclass(frozen=True)
class Plummer(Params):
    """Sphere of Plummer (1911, MNRAS 71, 460)."""

    mass: u.Quantity = param("Msun", "total mass")
    b: u.Quantity = param("kpc", "core radius")

    code = kernels.PLUMMER


@dataclass(frozen=True)
class NeedleBar(Params):
    """Softened needle of Long & Murali (1992, ApJ 397, 44)."""

    mass: u.Quantity = param("Msun", "total mass")
    a: u.Quantity = param("kpc", "half length")
    b: u.Quantity = param("kpc", "softening across")
    c: u.Quantity = param("kpc", "vertical softening")

    code = kernels.NEEDLE_BAR


@dataclass(frozen=True)
class Homeoids(Params):
    """Triaxial body of density exp(-m), m^2 = sum (x_i / a_i)^2, whose gravity is a sum over confocal shells."""

    mass: u.Quantity = param("Msun", "total mass")
    a1: u.Quantity = param("kpc", "exponential length along the bar")
    a2: u.Quantity = param("kpc", "exponential length across the bar")
    a3: u.Quantity = param("kpc", "exponential length in height")
    shells: u.Quantity = param("", "number of shells, 4 to 16", default=10)

    code = kernels.HOMEOIDS

    def pack(self):
        """Return lengths, then weight and inverse squared axes of each shell."""
        mass, a1, a2, a3, shells = super().pack()
        if not 4 <= shells <= 16:
            raise InputError(f"Homeoids.shells: {shells:g} given, 4 to 16 allowed")
        weights, inverse = confocal_shells((a1, a2, a3), int(shells))
        return np.concatenate([[mass, a1, a2, a3, shells], np.column_stack([mass * weights, inverse.T]).ravel()])


#: word in a parameter set -> record
MEMBER_KINDS = {
    "miyamoto_nagai": MiyamotoNagai,
    "nfw": NFW,
    "cutoff_power": CutoffPower,
    "plummer": Plummer,
    "needle_bar": NeedleBar,
    "homeoids": Homeoids,
}


@cache
def confocal_shells(lengths, shells):
    """Choose the shells of a `Homeoids` body of unit mass by non-negative least squares on force and depth.

    Parameters
    ----------
    lengths : tuple of three float
        Exponential lengths in kpc.
    shells : int
        How many; u = s^2 with s spread evenly in its logarithm.

    Returns
    -------
    weights : ndarray, shape (shells,)
    inverse : ndarray, shape (3, shells)
        1 / (a_i^2 + u) in kpc^-2.

    Notes
    -----
    The force to match is Binney & Tremaine (2008), eq. 2.140, for density exp(-m), integrated over 700 values of s.
    Range of s and fitting points (to 60 kpc for a bar of 0.4 kpc) scale with the lengths: our choice. Far outside
    the points the sum falls off faster than a point mass; a tenth of the weight on the depth makes up for it.
    """
    from scipy.optimize import nnls  # slow to import, and a forecast does without

    lengths = np.array(lengths)
    size = np.prod(lengths) ** (1 / 3)
    rng = np.random.default_rng(20)
    direction = rng.normal(size=(900, 3))
    direction /= np.linalg.norm(direction, axis=1)[:, None]
    points = direction[:600] * lengths * np.exp(rng.uniform(np.log(0.02), np.log(60), 600))[:, None]
    far = direction[600:] * size * np.exp(rng.uniform(np.log(8), np.log(160), 300))[:, None]
    points = np.vstack([points, far])
    step, s = _log_steps(1e-4 * size, 1e7 * size, 700)
    inverse = 1 / (lengths[:, None] ** 2 + s**2)
    exact = 0.5 * step * s**2 * np.sqrt(np.prod(inverse, axis=0))  # du / Delta(u) times G M / 4
    force, depth = (f(points, inverse) @ exact for f in (_shell_forces, _shell_depths))
    size_of_force = np.linalg.norm(force, axis=1)[:, None]
    s = _log_steps(0.213 * 0.934 ** (shells - 10) * size, 210 * 1.13 ** (shells - 10) * size, shells)[1]
    inverse = 1 / (lengths[:, None] ** 2 + s**2)
    rows = (_shell_forces(points, inverse) / size_of_force[:, :, None]).reshape(-1, shells)
    rows = np.vstack([rows, 0.1 * _shell_depths(points, inverse) / depth[:, None]])
    weights, _ = nnls(rows, np.append((force / size_of_force).ravel(), np.full(depth.size, 0.1)))
    return weights, inverse


def _log_steps(low, high, n):
    """Return the step of ln s and n values of s from low to high."""
    return np.log(high / low) / (n - 1), np.geomspace(low, high, n)


def _shell_depths(points, inverse):
    """Return (1 + m_k) exp(-m_k), shape (points, shells)."""
    m = np.sqrt(points**2 @ inverse)
    return (1 + m) * np.exp(-m)


def _shell_forces(points, inverse):
    """Return x_i exp(-m_k) / (a_i^2 + u_k), shape (points, 3, shells)."""
    m = np.sqrt(points**2 @ inverse)
    return points[:, :, None] * inverse[None] * np.exp(-m)[:, None, :]


@dataclass(frozen=True)
class Member:
    """One named body; `in_orbits` is False where orbits should not feel it."""

    name: str
    model: Params
    in_orbits: bool = True


@dataclass(frozen=True)
class Potential:
    """A sum of members, turning with the bar.

    Parameters
    ----------
    members : tuple of Member
    bar_angle : Quantity
        Angle between the bar's near end and the direction to the Sun, toward l > 0.
    pattern_speed : Quantity
        Angular speed of the bar in the sense of the disc's rotation.
    name, reference : str
    """

    members: tuple
    bar_angle: u.Quantity = 0.0 * u.deg
    pattern_speed: u.Quantity = 0.0 * u.km / u.s / u.kpc
    name: str = "unnamed"
    reference: str = ""

    @classmethod
    def read(cls, name="default"):
        """Read a shipped set by name or a user's TOML file by path.

        Parameters
        ----------
        name : str
            "default", "bovy2015", "needle", or a path ending in ``.toml``.

        Returns
        -------
        Potential

        Raises
        ------
        InputError
            Unknown set, member kind or parameter.
        """
        table = read_set("potential", name)
        allowed = ("reference", "status", "bar", "circular_speed", "radius", "members")
        for key in table:
            if key not in allowed:
                raise InputError(f"potential {name}: key '{key}' is not known{did_you_mean(key, allowed)}")
        where = f"potential {name}"
        members = tuple(_member(key, dict(entry), table, where) for key, entry in table.get("members", {}).items())
        if not members:
            raise InputError(f"{where}: needs at least one table [members.NAME]")
        bar = {key: entry["value"] * u.Unit(entry["unit"]) for key, entry in table.get("bar", {}).items()}
        speed = bar.get("pattern_speed", 0 * u.km / u.s / u.kpc)
        return cls(members, bar.get("angle", 0 * u.deg), speed, name, table.get("reference", ""))

    def for_orbits(self):
        """Return the same potential without the members that orbits should not feel."""
        return self.without(*(m.name for m in self.members if not m.in_orbits))

    def without(self, *names):
        """Return the same potential without some members.

        Parameters
        ----------
        *names : str
            Members' names.

        Returns
        -------
        Potential

        Raises
        ------
        InputError
            A name that is not a member's.
        """
        for name in names:
            one_of("member", name, [m.name for m in self.members])
        kept = tuple(m for m in self.members if m.name not in names)
        return Potential(kept, self.bar_angle, self.pattern_speed, self.name, self.reference)

    @cached_property
    def packed(self):
        """Kind codes, shape (n,), and rows of numbers, shape (n, m), as the kernels take them."""
        rows = [m.model.pack() for m in self.members]
        pars = np.zeros((len(rows), max(4, max(r.size for r in rows))))
        for i, row in enumerate(rows):
            pars[i, : row.size] = row
            pars[i, 0] *= G
            if self.members[i].model.code == kernels.HOMEOIDS:
                pars[i, 5 : row.size : 4] *= G
        return np.array([m.model.code for m in self.members], dtype=np.int64), pars

    @property
    def omega(self):
        """Angular speed of the bar's frame about +z in km/s/kpc: negative, since the disc turns clockwise."""
        return -strip("pattern_speed", self.pattern_speed, "km/(s kpc)")

    def to_bar_frame(self, vectors):
        """Turn Galactocentric vectors into the bar's frame; arrays of floats, last axis x, y, z."""
        c, s = self._axis
        out = np.array(vectors, dtype=float)
        out[..., 0] = -c * vectors[..., 0] + s * vectors[..., 1]
        out[..., 1] = -s * vectors[..., 0] - c * vectors[..., 1]
        return out

    def from_bar_frame(self, vectors):
        """Undo `to_bar_frame`."""
        c, s = self._axis
        out = np.array(vectors, dtype=float)
        out[..., 0] = -c * vectors[..., 0] - s * vectors[..., 1]
        out[..., 1] = s * vectors[..., 0] - c * vectors[..., 1]
        return out

    @property
    def _axis(self):
        angle = strip("bar_angle", self.bar_angle, "rad")
        return np.cos(angle), np.sin(angle)

    def _fill(self, x, y, z):
        points = np.stack(np.broadcast_arrays(*(strip(n, q, "kpc") for n, q in zip("xyz", (x, y, z)))), axis=-1)
        flat = self.to_bar_frame(points.reshape(-1, 3))
        out = np.empty((flat.shape[0], 5))
        kernels.fill(*self.packed, flat, out)
        return out.reshape(*points.shape[:-1], 5)

    def value(self, x, y, z):
        """Return the potential, zero at infinity.

        Parameters
        ----------
        x, y, z : Quantity
            Galactocentric position; shapes are broadcast.

        Returns
        -------
        Quantity [km2 / s2]
        """
        return self._fill(x, y, z)[..., 0] * _SPEED2

    def acceleration(self, x, y, z):
        """Return minus the gradient of the potential.

        Parameters
        ----------
        x, y, z : Quantity
            Galactocentric position; shapes are broadcast.

        Returns
        -------
        Quantity [km2 / (s2 kpc)]
            A last axis of three components is added.
        """
        return self.from_bar_frame(self._fill(x, y, z)[..., 1:4]) * (_SPEED2 / u.kpc)

    def density(self, x, y, z):
        """Return the mass density that makes this potential.

        Parameters
        ----------
        x, y, z : Quantity
            Galactocentric position; shapes are broadcast.

        Returns
        -------
        Quantity [Msun / pc3]
            For `Homeoids` the density of the body itself, not of the sum of shells.
        """
        return (self._fill(x, y, z)[..., 4] / (4 * np.pi * G) * (u.Msun / u.kpc**3)).to(u.Msun / u.pc**3)

    def _rings(self, radius, z):
        radius, z = np.broadcast_arrays(strip("radius", radius, "kpc", low=0.0), strip("z", z, "kpc"))
        out = np.empty((radius.size, 3))
        kernels.fill_ring_means(*self.packed, radius.ravel().astype(float), z.ravel().astype(float), _DIRECTIONS, out)
        return radius, out.reshape(*radius.shape, 3)

    def circular_speed(self, radius):
        """Return the circular speed in the plane of the axisymmetrised potential.

        Parameters
        ----------
        radius : Quantity
            Galactocentric radius.

        Returns
        -------
        Quantity [km / s]
        """
        radius, out = self._rings(radius, 0 * u.kpc)
        return np.sqrt(radius * out[..., 1]) * (u.km / u.s)

    def escape_speed(self, radius, z=0 * u.kpc):
        """Return the speed that just reaches infinity, sqrt(-2 Phi), of the axisymmetrised potential.

        Parameters
        ----------
        radius, z : Quantity
            Cylindrical radius and height.

        Returns
        -------
        Quantity [km / s]
        """
        return np.sqrt(-2 * self._rings(radius, z)[1][..., 0]) * (u.km / u.s)

    def axisymmetric_density(self, radius, z):
        """Return the mass density averaged over azimuth, in Msun / pc3."""
        return (self._rings(radius, z)[1][..., 2] / (4 * np.pi * G) * (u.Msun / u.kpc**3)).to(u.Msun / u.pc**3)


def _member(name, entry, table, where):
    where = f"{where}.members.{name}"
    if "kind" not in entry:
        raise InputError(f"{where}: needs 'kind', one of {', '.join(MEMBER_KINDS)}")
    model = MEMBER_KINDS[one_of(f"{where}.kind", entry.pop("kind"), MEMBER_KINDS)]
    in_orbits = entry.pop("in_orbits", True)
    share = entry.pop("share", None)
    if share is None:
        return Member(name, model.from_table(entry, where), in_orbits)
    if "circular_speed" not in table or "radius" not in table:
        raise InputError(f"{where}.share: the set must then state circular_speed and radius")
    speed, radius = (table[k]["value"] * u.Unit(table[k]["unit"]) for k in ("circular_speed", "radius"))
    unit = Member(name, model.from_table({**entry, "mass": {"value": 1e10, "unit": "Msun"}}, where), in_orbits)
    factor = share["value"] * float((speed / Potential((unit,)).circular_speed(radius)) ** 2)
    return Member(name, model.from_table({**entry, "mass": {"value": 1e10 * factor, "unit": "Msun"}}, where), in_orbits)
