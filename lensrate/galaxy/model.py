"""The Galaxy: components of stars with density, motion and population, the Sun, the rotation curve; read from a set."""

from dataclasses import dataclass, field, replace
from functools import cached_property

import astropy.units as u
import numpy as np

from ..datafiles import names, read_set
from ..errors import InputError, did_you_mean, one_of
from ..kernels import profile as kernels
from ..units import KMS_PER_MASYR_KPC
from .density import DENSITIES, Bar, Density
from .frames import Sightline3D, Sun
from .kinematics import KINEMATICS, Kinematics, LinearRotation, PotentialRotation

__all__ = ["COUNTS", "Component", "Galaxy"]

#: what one solar mass of a component's stated mass may count
COUNTS = ("total", "luminous", "stars+brown dwarfs")


@dataclass(frozen=True)
class Component:
    """One element of the stellar Galaxy: a density, a velocity distribution and how its stars were born.

    `name` groups elements for reports (thin_disc), `element` tells them apart (thin_disc_young).
    """

    name: str
    element: str
    density: Density
    kinematics: Kinematics
    imf: str = "kroupa2001"
    age: tuple = (10.0, 10.0)  # Gyr, youngest and oldest
    efold: float = float("inf")  # Gyr; star formation ~ exp(age / efold)
    counts: str = "total"
    stars: bool = True  # made of stars and their remnants; otherwise only lens classes that ride on it count
    sources: bool = True
    bulge: bool = False  # counts as bulge for the clump rule; the rest is 'disc' in the share of disc sources
    group: int = -1  # source rows of one group are merged for the finer densities; below 0: a group of its own


@dataclass(frozen=True)
class Galaxy:
    """Components, rotation curve and Sun, with the references of every number.

    Examples
    --------
    >>> from lensrate import Galaxy
    >>> Galaxy.read("default").components[0].name
    'thin_disc'
    """

    name: str
    components: tuple
    sun: Sun
    rotation: LinearRotation | PotentialRotation
    references: tuple = ()
    potential: str = ""
    lens_class: dict = field(default_factory=dict)  # lens classes that belong to the set, see remnants/classes.py
    notes: tuple = ()

    @classmethod
    def read(cls, name="default"):
        """Read a shipped set by name or a user's TOML file by path.

        Parameters
        ----------
        name : str
            For example "default", "hangould2003", "griest1991", or "my_galaxy.toml".

        Returns
        -------
        Galaxy

        Raises
        ------
        InputError
            Unknown name or key, missing key, impossible value.
        """
        return cls.from_dict(read_set("galaxy", name), str(name))

    @classmethod
    def from_dict(cls, table, where="galaxy"):
        """Build from nested tables as a Galaxy file holds them.

        Parameters
        ----------
        table : dict
            Parsed TOML.
        where : str
            Named in complaints.

        Returns
        -------
        Galaxy

        Raises
        ------
        InputError
            See `read`.
        """
        known = (
            "name",
            "title",
            "references",
            "notes",
            "retrieved",
            "potential",
            "lens_class",
            "sun",
            "rotation",
            "component",
        )
        for key in table:
            if key not in known:
                raise InputError(f"{where}: unknown key '{key}'{did_you_mean(key, known)} (known: {', '.join(known)})")
        for key in ("sun", "component"):
            if key not in table:
                raise InputError(f"{where}: needs [{key}]")
        for key, kind, words in (
            ("name", str, "text"), ("potential", str, "text"), ("references", list, "a list of text"),
            ("notes", list, "a list of text"), ("lens_class", dict, "a table"),
        ):  # fmt: skip
            value = table.get(key, kind())
            if not isinstance(value, kind) or (kind is list and not all(isinstance(v, str) for v in value)):
                raise InputError(f"{where}: {key}: {value!r} given, must be {words}")
        sun = Sun.from_table(table["sun"], f"{where}: sun")
        if sun.R0.value <= 0:
            raise InputError(f"{where}: sun.R0: {sun.R0} given, must be above 0")
        rotation = _rotation(table, f"{where}: rotation")
        rows = table["component"]
        if not isinstance(rows, list) or not rows:
            raise InputError(f"{where}: component must be a list of tables, [[component]]")
        components = tuple(_component(row, f"{where}: component {i + 1}") for i, row in enumerate(rows))
        elements = [c.element for c in components]
        for e in elements:
            if elements.count(e) > 1:
                raise InputError(f"{where}: element '{e}' is defined twice; elements need different names")
        return cls(
            name=table.get("name", where),
            components=components,
            sun=sun,
            rotation=rotation,
            references=tuple(table.get("references", ())),
            potential=table.get("potential", ""),
            lens_class=table.get("lens_class", {}),
            notes=tuple(table.get("notes", ())),
        )

    def replace(self, **changes):
        """Return a copy with some fields exchanged.

        Parameters
        ----------
        **changes
            Fields of `Galaxy`.

        Returns
        -------
        Galaxy
        """
        return replace(self, **changes)

    @property
    def R0(self):
        """The Sun's distance from the centre, float [kpc]."""
        return self.sun.R0.value

    @cached_property
    def packed(self):
        """What the profile kernel needs: density codes (m,) and parameters (m, p), the same of kinematics, rotation."""
        components = self.components
        d = [np.asarray(c.density.pack(self.R0), dtype=float) for c in components]
        v = [np.asarray(c.kinematics.pack(self.R0, c.density), dtype=float) for c in components]
        return (
            np.array([c.density.kind for c in components], dtype=np.int64),
            _pad(d),
            np.array([c.kinematics.kind for c in components], dtype=np.int64),
            _pad(v),
            self.rotation.pack(self.R0),
        )

    def profile(self, line, D):
        """Return density and motion along a sightline.

        Parameters
        ----------
        line : Sightline3D
            From `sightline`.
        D : ndarray, any shape
            Distances [kpc].

        Returns
        -------
        ndarray, shape (6, n_components, *D.shape)
            Density [Msun/kpc^3], mu_l, mu_b [mas/yr], C_ll, C_lb, C_bb [(mas/yr)^2], seen from the Sun.
        """
        D = np.ascontiguousarray(D, dtype=float)
        out = np.empty((6, len(self.components), D.size))
        kernels.stellar_profile(D.ravel(), line.origin, line.axes, line.v_sun, KMS_PER_MASYR_KPC, *self.packed, out)
        return out.reshape(6, len(self.components), *D.shape)

    def sightline(self, l, b):
        """Return origin and axes of the sightline toward l, b [rad]."""
        return Sightline3D.toward(self.sun, l, b)

    def density(self, x, y, z, name=None):
        """Return the mass density of stars, remnants included as the components state it.

        Parameters
        ----------
        x, y, z : Quantity, shape (n,)
            Galactocentric place.
        name : str, optional
            One component (or element) only.

        Returns
        -------
        Quantity, shape (n,)
        """
        chosen = [c for c in self.components if name is None or name in (c.name, c.element)]
        if not chosen:
            one_of("component", name, [c.name for c in self.components])
        place = [np.atleast_1d(q.to_value(u.kpc)) for q in (x, y, z)]
        return sum(c.density.at(*place, self.R0) for c in chosen) * u.Msun / u.kpc**3

    def bar(self):
        """Return the first bar's density record, or None."""
        return next((c.density for c in self.components if isinstance(c.density, Bar)), None)


def _efold(value, where):
    if isinstance(value, bool) or not isinstance(value, (int, float)) or value != value or value == 0:
        raise InputError(f"{where}: {value!r} given, must be a number of Gyr other than 0 (inf: constant rate)")
    return float(value)


def _group(value, where):
    if isinstance(value, bool) or not isinstance(value, int):
        raise InputError(f"{where}: {value!r} given, must be a whole number")
    return value


def _rotation(table, where):
    """The set's rotation curve: that of a potential, or numbers of its own."""
    given = table.get("rotation", {"v0": 220.0})
    if not isinstance(given, dict):
        raise InputError(f"{where}: {given!r} given, must be a table")
    if "potential" not in given:
        return LinearRotation.from_table(given, where)
    if len(given) > 1:
        raise InputError(f"{where}: give either a potential or numbers, not both")
    one_of(f"{where}.potential", given["potential"], names("potential"))
    return PotentialRotation(given["potential"])


def _pad(rows):
    out = np.zeros((len(rows), max(r.size for r in rows) if rows else 0))
    for i, r in enumerate(rows):
        out[i, : r.size] = r
    return out


_SIGNED = ("drift", "angle", "v_rot", "fall", "fall_R", "fall_z")
#: numbers that may be zero; every other one is a length, a mass, a density or a dispersion
_MAY_VANISH = ("R_flat", "R_frozen", "z_ref", "rho_dark", "share_sech", "rho", "column", "rho_sun", "core")


def _record(table, kinds, where):
    if not isinstance(table, dict) or "kind" not in table:
        raise InputError(f"{where}: needs a table with 'kind' (known: {', '.join(kinds)})")
    kind = one_of(f"{where}.kind", table["kind"], kinds)
    rest = {k: v for k, v in table.items() if k != "kind"}
    profile = {"profile": rest.pop("profile")} if "profile" in rest and kinds[kind] is Bar else {}
    record = kinds[kind].from_table(rest, where) if not profile else _bar(rest, profile, where)
    for key, value in vars(record).items():
        if not isinstance(value, u.Quantity) or key in _SIGNED:
            continue
        if key in _MAY_VANISH or (key in ("mass", "rho_centre") and kinds[kind] is Bar):
            if value.value < 0:
                raise InputError(f"{where}.{key}: {value} given, must not be negative")
        elif not value.value > 0:
            raise InputError(f"{where}.{key}: {value} given, must be above 0")
    return record


def _bar(rest, profile, where):
    plain = Bar.from_table({**rest}, where)
    return replace(plain, **profile)


def _component(row, where):
    known = (
        "name",
        "element",
        "density",
        "kinematics",
        "imf",
        "age",
        "efold",
        "counts",
        "stars",
        "sources",
        "bulge",
        "group",
    )
    if not isinstance(row, dict):
        raise InputError(f"{where}: must be a table")
    for key in row:
        if key not in known:
            raise InputError(f"{where}: unknown key '{key}'{did_you_mean(key, known)} (known: {', '.join(known)})")
    for key in ("name", "density", "kinematics"):
        if key not in row:
            raise InputError(f"{where}: needs '{key}'")
    age = row.get("age", [10.0, 10.0])
    if not (
        isinstance(age, list)
        and len(age) == 2
        and all(isinstance(a, (int, float)) for a in age)
        and 0 <= age[0] <= age[1] <= 14
    ):
        raise InputError(f"{where}.age: {age!r} given, must be [youngest, oldest] in Gyr between 0 and 14")
    one_of(f"{where}.counts", row.get("counts", "total"), COUNTS)
    density = _record(row["density"], DENSITIES, f"{where}.density")
    motion = row["kinematics"]
    if isinstance(density, Bar) and isinstance(motion, dict) and motion.get("kind") == "bar" and "angle" not in motion:
        # a bar's velocities follow its body unless the set says otherwise
        motion = {**motion, "angle": float(density.angle.value)}
    stars = bool(row.get("stars", True))
    return Component(
        name=str(row["name"]),
        element=str(row.get("element", row["name"])),
        density=density,
        kinematics=_record(motion, KINEMATICS, f"{where}.kinematics"),
        imf=str(row.get("imf", "kroupa2001")),
        age=(float(age[0]), float(age[1])),
        efold=_efold(row.get("efold", float("inf")), f"{where}.efold"),
        counts=row.get("counts", "total"),
        stars=stars,
        sources=bool(row.get("sources", stars)),
        bulge=bool(row.get("bulge", False)),
        group=_group(row.get("group", -1), f"{where}.group"),
    )
