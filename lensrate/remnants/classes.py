"""The five lens classes, and classes a user defines: free-floating planets, primordial black holes, whatever."""

import math
import re
from dataclasses import dataclass

import numpy as np

from ..errors import InputError, one_of
from .imf import gauss_legendre
from .tables import check_keys, number

__all__ = ["CLASSES", "LABELS", "LensClass", "MassSpectrum"]

#: the words used in tables, JSON and options, lightest first among the living, then the dead
CLASSES = ("star", "brown_dwarf", "white_dwarf", "neutron_star", "black_hole")
#: the same for people
LABELS = {name: name.replace("_", " ") for name in CLASSES}

_LAWS = {"delta": ("M",), "power": ("M_lo", "M_hi", "slope"), "lognormal": ("median", "sigma_dex")}
_NORMS = ("mass_fraction", "number_per_msun", "number_per_star")
_NODES = 40
_REACH = 5.0  # standard deviations kept of a log-normal; the rest is 6e-7


@dataclass(frozen=True, eq=False)
class MassSpectrum:
    """Objects of one class as mass nodes.

    Parameters
    ----------
    mass : ndarray, shape (n,)
        Mass now [Msun].
    number : ndarray, shape (n,)
        Objects per solar mass of the component's stated mass [1/Msun].
    initial_mass : ndarray, shape (n,)
        Mean mass at birth of the objects at a node [Msun].
    """

    mass: np.ndarray
    number: np.ndarray
    initial_mass: np.ndarray

    def moment(self, power):
        """Return the sum of number times mass^power [Msun^(power-1)]."""
        return float(self.number @ self.mass**power) if self.mass.size else 0.0


@dataclass(frozen=True)
class LensClass:
    """A lens class of the user's own.

    Parameters
    ----------
    name : str
        Small letters, digits and underscores; none of the five.
    law : str
        "delta", "power" (dN/dM as M^-slope) or "lognormal" (in log10 M).
    values : tuple of float
        M; M_lo, M_hi, slope; or median, sigma_dex [Msun, Msun, pure number].
    rides_on : tuple of str
        Components, or a density set, whose density and motion the objects share.
    norm : str
        "mass_fraction" (Msun of these objects per Msun of the host), "number_per_msun", or "number_per_star".
    amount : float
        How much of it.
    """

    name: str
    law: str
    values: tuple
    rides_on: tuple
    norm: str
    amount: float

    @classmethod
    def parse(cls, name, table, where="lens_class"):
        """Build from a table: ``{mass_function = {kind = "delta", M = 30}, rides_on = "halo", mass_fraction = 0.1}``.

        Parameters
        ----------
        name : str
            Name of the class.
        table : dict
            Keys ``mass_function``, ``rides_on`` and one of the three normalisations.
        where : str
            Named in complaints.

        Returns
        -------
        LensClass

        Raises
        ------
        InputError
            Unknown or missing key (with the nearest known one), or an impossible value.
        """
        where = f"{where}.{name}"
        if not re.fullmatch(r"[a-z][a-z0-9_]*", str(name)) or name in (*CLASSES, "all"):
            raise InputError(
                f"{where}: a name of small letters, digits and _ is needed, other than {', '.join(CLASSES)}, all"
            )
        check_keys(where, table, ["mass_function", "rides_on", *_NORMS], ["mass_function", "rides_on"])
        law, values = cls._parse_law(f"{where}.mass_function", table["mass_function"])
        hosts = table["rides_on"]
        hosts = (hosts,) if isinstance(hosts, str) else tuple(hosts) if isinstance(hosts, list) else ()
        if not hosts or not all(isinstance(h, str) and h for h in hosts):
            raise InputError(
                f"{where}.rides_on: {table['rides_on']!r} given, a component's name or a list of them is needed"
            )
        norms = [key for key in _NORMS if key in table]
        if len(norms) != 1:
            raise InputError(f"{where}: give one of {', '.join(_NORMS)} ({len(norms)} given)")
        return cls(name, law, values, hosts, norms[0], number(where, table, norms[0], "", low=0))

    @staticmethod
    def _parse_law(where, table):
        check_keys(where, table, ["kind", *(key for keys in _LAWS.values() for key in keys)], ["kind"])
        law = one_of(f"{where}.kind", table["kind"], _LAWS)
        check_keys(where, table, ["kind", *_LAWS[law]], _LAWS[law])
        units = {"slope": "", "sigma_dex": ""}
        values = tuple(number(where, table, key, units.get(key, "Msun")) for key in _LAWS[law])
        for key, value in zip(_LAWS[law], values):
            if key != "slope" and value <= 0:
                raise InputError(f"{where}.{key}: {value:g} given, must be above 0")
        if law == "power" and values[1] <= values[0]:
            raise InputError(f"{where}: M_hi {values[1]:g} must be above M_lo {values[0]:g} Msun")
        return law, values

    def spectrum(self, population=None):
        """Return the objects per solar mass of the host's stated mass.

        Parameters
        ----------
        population : Population, optional
            The host component's; needed for ``number_per_star`` only.

        Returns
        -------
        MassSpectrum

        Raises
        ------
        InputError
            ``number_per_star`` on a host that has no stars.
        """
        mass, share = self._nodes()
        if self.norm == "mass_fraction":
            total = self.amount / float(share @ mass)
        elif self.norm == "number_per_msun":
            total = self.amount
        elif population is None:
            raise InputError(
                f"lens class '{self.name}': number_per_star needs a host with stars, '{self.rides_on[0]}' has none"
            )
        else:
            total = self.amount * population.number["star"]
        return MassSpectrum(mass, total * share, mass.copy())

    def _nodes(self):
        """Masses [Msun] and shares by number, which sum to one."""
        if self.law == "delta":
            return np.array(self.values, dtype=float), np.ones(1)
        if self.law == "power":
            lo, hi, slope = self.values
        else:
            spread = _REACH * self.values[1] * math.log(10)
            lo, hi = self.values[0] * math.exp(-spread), self.values[0] * math.exp(spread)
        t, w = gauss_legendre(_NODES)
        x = math.log(lo) + math.log(hi / lo) * t
        if self.law == "power":
            share = w * np.exp((1 - slope) * (x - x.mean()))
        else:
            share = w * np.exp(-0.5 * ((x - math.log(self.values[0])) / (self.values[1] * math.log(10))) ** 2)
        return np.exp(x), share / share.sum()
