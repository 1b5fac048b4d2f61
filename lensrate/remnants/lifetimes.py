"""How long a star of given mass lives, and which mass is dying at a given age."""

from dataclasses import dataclass

import numpy as np

from ..datafiles import names, read_set
from ..errors import InputError
from .tables import check_keys, numbers

__all__ = ["Lifetimes"]


@dataclass(frozen=True)
class Lifetimes:
    """Lifetime against mass: straight between rows in log-log, the end slopes continued.

    Parameters
    ----------
    name : str
        Published or own name.
    masses : tuple of float
        Rising [Msun].
    gyr : tuple of float
        Falling [Gyr].
    references : tuple of str
        Papers.
    """

    name: str
    masses: tuple
    gyr: tuple
    references: tuple = ()

    def __post_init__(self):
        for key in ("masses", "gyr", "references"):
            object.__setattr__(self, key, tuple(getattr(self, key)))
        m, t = np.array(self.masses, dtype=float), np.array(self.gyr, dtype=float)
        if m.shape != t.shape or m.size < 2:
            raise InputError(
                f"lifetimes '{self.name}': {m.size} masses and {t.size} lifetimes given, two or more of each needed"
            )
        if not (np.all(np.isfinite(m) & np.isfinite(t)) and np.all(m > 0) and np.all(t > 0)):
            raise InputError(f"lifetimes '{self.name}': masses and lifetimes must be finite and positive")
        if np.any(np.diff(m) <= 0) or np.any(np.diff(t) >= 0):
            raise InputError(f"lifetimes '{self.name}': masses must rise and lifetimes fall")
        object.__setattr__(self, "_x", np.log(m))
        object.__setattr__(self, "_y", np.log(t))

    @classmethod
    def read(cls, name):
        """Read a shipped set ("standard", "powerlaw") by name, or a user's ``.toml`` file of the same form.

        Raises
        ------
        InputError
            Unknown name or key, or rows that do not make a falling law.
        """
        table, where = read_set("lifetimes", name), f"lifetimes '{name}'"
        keys = ["reference", "mass", "lifetime"]
        check_keys(where, table, keys, keys)
        rows = numbers(where, table, "mass", "Msun"), numbers(where, table, "lifetime", "Gyr")
        return cls(str(name), *rows, (table["reference"],))

    @staticmethod
    def names():
        """Return the names of the shipped sets."""
        return names("lifetimes")

    def lifetime(self, mass):
        """Return the age at death [Gyr] of stars of `mass` [Msun], float or array."""
        x = np.log(np.asarray(mass, dtype=float))
        i = np.clip(np.searchsorted(self._x, x) - 1, 0, len(self._x) - 2)
        slope = np.diff(self._y) / np.diff(self._x)
        return np.exp(self._y[i] + slope[i] * (x - self._x[i]))

    def turnoff_mass(self, age):
        """Return the mass [Msun] dying at `age` [Gyr], float or array; infinite at age zero. Inverse of `lifetime`."""
        x, i, slope = self._inverse(age)
        return np.exp(self._x[i] + (x - self._y[i]) / slope[i])

    def turnoff_speed(self, age):
        """Return how fast the dying mass falls, -dM/dt at `age` [Msun/Gyr]."""
        age = np.asarray(age, dtype=float)
        _, i, slope = self._inverse(age)
        return -self.turnoff_mass(age) / (age * slope[i])

    def _inverse(self, age):
        with np.errstate(divide="ignore"):
            y = np.log(np.asarray(age, dtype=float))
        i = np.clip(len(self._y) - 1 - np.searchsorted(self._y[::-1], y), 0, len(self._y) - 2)
        return y, i, np.diff(self._y) / np.diff(self._x)
