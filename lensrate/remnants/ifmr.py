"""What a star of given birth mass becomes when it dies, and how heavy that is."""

from dataclasses import dataclass, replace
from functools import cache

import numpy as np

from ..datafiles import names, read_set
from ..errors import InputError
from .tables import check_keys, number, numbers

__all__ = ["DEAD", "Ifmr", "MassLaw", "Outcome"]

#: classes a star can end in, lightest first
DEAD = ("white_dwarf", "neutron_star", "black_hole")
_SCATTER_NODES = 9
_LAW_KEYS = ["from", "weight", "origin", "coefficients", "factor", "exponent"]
_AND_KEYS = ["and_weight", "and_origin", "and_coefficients"]


@cache
def _gauss_hermite():
    x, w = np.polynomial.hermite_e.hermegauss(_SCATTER_NODES)
    return x, w / w.sum()


@dataclass(frozen=True)
class MassLaw:
    """Remnant mass against birth mass M, with scatter.

    The mean is a weighted sum of terms, each sum_k c_k (M - origin)^k + factor M^exponent.

    Parameters
    ----------
    start : float
        Birth mass from which the law holds [Msun].
    terms : tuple of (weight, origin, coefficients, factor, exponent)
        Summed.
    scatter : float
        Standard deviation of a Gaussian about the mean [Msun].
    source : str
        Paper.
    """

    start: float
    terms: tuple
    scatter: float = 0.0
    source: str = ""

    def mean(self, mass):
        """Return the mean remnant mass [Msun] of stars born with `mass` [Msun], an array."""
        total = np.zeros(np.shape(mass))
        for weight, origin, coefficients, factor, exponent in self.terms:
            total += weight * np.polynomial.polynomial.polyval(np.asarray(mass) - origin, coefficients)
            if factor:
                total += weight * factor * np.asarray(mass) ** exponent
        return total


@dataclass(frozen=True, eq=False)
class Outcome:
    """One class that stars of the asked masses may end in.

    Parameters
    ----------
    name : str
        "white_dwarf", "neutron_star" or "black_hole".
    probability : ndarray, shape (n,)
        Chance of this end at each birth mass.
    mass : ndarray, shape (n, k)
        Remnant masses [Msun].
    weight : ndarray, shape (k,)
        Shares of the k masses, summing to one.
    """

    name: str
    probability: np.ndarray
    mass: np.ndarray
    weight: np.ndarray


@dataclass(frozen=True)
class Ifmr:
    """Initial-final mass relation: class boundaries, chances and mass laws.

    Parameters
    ----------
    name : str
        Published or own name.
    star_above : float
        Hydrogen-burning limit: below it brown dwarfs [Msun].
    white_dwarf_below : float
        Lighter stars leave white dwarfs [Msun].
    steps, probability : tuple of float
        Chance that a heavier star leaves a neutron star, else a black hole: ``probability[0]`` below ``steps[0]``
        [Msun], then ``probability[1]`` up to ``steps[1]`` and so on.
    laws : tuple of (str, tuple of MassLaw)
        Mass laws of each class, rising in `start`; the first also holds below its start.
    alive_below : float, optional
        If given, lighter stars live and heavier ones are dead whatever their age [Msun].
    references : tuple of str
        Papers.
    """

    name: str
    star_above: float
    white_dwarf_below: float
    steps: tuple
    probability: tuple
    laws: tuple
    alive_below: float | None = None
    references: tuple = ()

    def __post_init__(self):
        where = f"ifmr '{self.name}'"
        if len(self.probability) != len(self.steps) + 1:
            raise InputError(
                f"{where}: {len(self.steps)} steps need one probability more, {len(self.probability)} given"
            )
        if any(not 0 <= p <= 1 for p in self.probability):
            raise InputError(f"{where}: probabilities {self.probability} must lie within 0-1")
        edges = (self.star_above, self.white_dwarf_below, *self.steps)
        if edges[0] <= 0 or any(b <= a for a, b in zip(edges, edges[1:])):
            raise InputError(
                f"{where}: class boundaries {', '.join(f'{e:g}' for e in edges)} Msun must be positive and rise"
            )

    @classmethod
    def read(cls, name):
        """Read a shipped relation by name, or a user's ``.toml`` file of the same form.

        Parameters
        ----------
        name : str
            One of ``Ifmr.names()``, or a path.

        Returns
        -------
        Ifmr

        Raises
        ------
        InputError
            Unknown name or key, or boundaries and laws that contradict each other.
        """
        table, where = read_set("ifmr", name), f"ifmr '{name}'"
        single = ["star_above", "white_dwarf_below", "black_hole_above", "alive_below"]
        known = ["reference", *single, "neutron_star_probability", *DEAD]
        check_keys(where, table, known, ["reference", "star_above", "white_dwarf_below", *DEAD])
        if ("black_hole_above" in table) == ("neutron_star_probability" in table):
            raise InputError(f"{where}: give either black_hole_above or neutron_star_probability")
        edge = {key: number(where, table, key, "Msun", low=0) for key in single if key in table}
        if "black_hole_above" in edge:
            steps, chances = (edge["black_hole_above"],), (1.0, 0.0)
        else:
            islands, at = table["neutron_star_probability"], f"{where}.neutron_star_probability"
            check_keys(at, islands, ["steps", "probability"], ["steps", "probability"])
            steps, chances = numbers(at, islands, "steps", "Msun"), numbers(at, islands, "probability", "", 0, 1)
        laws = tuple((dead, cls._read_laws(f"{where}.{dead}", table[dead])) for dead in DEAD)
        alive = edge.get("alive_below")
        return cls(
            str(name), edge["star_above"], edge["white_dwarf_below"], steps, chances, laws, alive, (table["reference"],)
        )

    @staticmethod
    def _read_laws(where, rows):
        if not isinstance(rows, list) or not rows:
            raise InputError(f"{where}: one or more [[tables]] of mass laws are needed")
        laws = []
        for i, row in enumerate(rows):
            at = f"{where}[{i}]"
            check_keys(at, row, [*_LAW_KEYS, *_AND_KEYS, "scatter", "source"], ["coefficients"])

            def pick(key, default, at=at, row=row):
                return number(at, row, key, "") if key in row else default

            terms = [
                (
                    pick("weight", 1.0),
                    pick("origin", 0.0),
                    numbers(at, row, "coefficients", ""),
                    pick("factor", 0.0),
                    pick("exponent", 0.0),
                )
            ]
            if "and_coefficients" in row:
                terms.append(
                    (
                        pick("and_weight", 1.0),
                        pick("and_origin", 0.0),
                        numbers(at, row, "and_coefficients", ""),
                        0.0,
                        0.0,
                    )
                )
            scatter = number(at, row, "scatter", "Msun", low=0) if "scatter" in row else 0.0
            laws.append(MassLaw(pick("from", 0.0), tuple(terms), scatter, row.get("source", "")))
        if any(b.start <= a.start for a, b in zip(laws, laws[1:])):
            raise InputError(f"{where}: 'from' must rise from law to law")
        return tuple(laws)

    @staticmethod
    def names():
        """Return the names of the shipped relations."""
        return names("ifmr")

    def with_boundaries(self, star_above=None, white_dwarf_below=None, black_hole_above=None):
        """Return the relation with other class boundaries [Msun].

        Raises
        ------
        InputError
            `black_hole_above` where neutron stars and black holes alternate, or boundaries that do not rise.
        """
        changes = {"star_above": star_above, "white_dwarf_below": white_dwarf_below}
        changes = {key: float(value) for key, value in changes.items() if value is not None}
        if black_hole_above is not None:
            if self.probability != (1.0, 0.0):
                raise InputError(
                    f"black_hole_above: '{self.name}' has them by turns with neutron stars; edit a copy of its file"
                )
            changes["steps"] = (float(black_hole_above),)
        return replace(self, **changes)

    def edges(self):
        """Return the birth masses where an outcome jumps or bends [Msun], rising."""
        starts = [law.start for _, laws in self.laws for law in laws[1:]]
        alive = [] if self.alive_below is None else [self.alive_below]
        return sorted({self.star_above, self.white_dwarf_below, *self.steps, *starts, *alive})

    def outcomes(self, mass):
        """Return what stars of the given birth masses leave when they die.

        Parameters
        ----------
        mass : float or array_like, shape (n,)
            Birth masses [Msun].

        Returns
        -------
        list of Outcome
            In the order of `DEAD`; the probabilities sum to one at each mass.

        Raises
        ------
        InputError
            A mass law gives a remnant of no or negative mass.
        """
        mass = np.atleast_1d(np.asarray(mass, dtype=float))
        dwarf = mass < self.white_dwarf_below
        star = np.array(self.probability)[np.searchsorted(self.steps, mass, side="right")]
        chances = (np.where(dwarf, 1.0, 0.0), np.where(dwarf, 0.0, star), np.where(dwarf, 0.0, 1 - star))
        return [self._outcome(name, laws, chance, mass) for (name, laws), chance in zip(self.laws, chances)]

    def _outcome(self, name, laws, probability, mass):
        which = np.clip(np.searchsorted([law.start for law in laws], mass, side="right") - 1, 0, len(laws) - 1)
        mean, scatter = np.zeros(mass.shape), np.zeros(mass.shape)
        for i in np.unique(which):
            here = which == i
            mean[here], scatter[here] = laws[i].mean(mass[here]), laws[i].scatter
        x, w = _gauss_hermite() if np.any(scatter > 0) else (np.zeros(1), np.ones(1))
        left = mean[:, None] + scatter[:, None] * x
        possible = probability > 0
        if np.any(left[possible] <= 0):
            row = np.argmax(np.any(left <= 0, axis=1) & possible)
            raise InputError(
                f"ifmr '{self.name}': a {name} of {left[row].min():.3g} Msun from a star of {mass[row]:.3g} Msun; "
                "change its mass law"
            )
        return Outcome(name, probability, left, w)
