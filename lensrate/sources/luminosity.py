"""How many stars are brighter than an absolute magnitude, per solar mass of a component's stated mass.

Dwarfs follow a published sequence, brightened with age; subgiants, the giant branch and the red clump
are fed by the stars that leave the main sequence. All giants have the clump's colours.
"""

import math
from dataclasses import dataclass
from functools import cache

import numpy as np
from scipy.special import ndtr

from ..datafiles import read_set
from ..errors import InputError
from ..io import read_rows
from ..remnants.tables import check_keys, number
from .bands import check_band

__all__ = ["LuminosityFunction", "clump_magnitude", "clump_width", "luminosity_function"]

_AGES = 24  # bursts that stand for a longer history
_MASSES = 240  # points of the main sequence of one age
_STEP = 0.02  # mag, grid of the result
_BRIGHTEST = -8.0  # mag, beyond the brightest giants of a young burst
_YOUNGEST = 1e-3  # Gyr; stars die no younger than about 3 Myr

_GIANTS = {
    "spread": {"sigma": "mag"},
    "brightening": {"amount": "mag", "power": "", "zero": "", "from": "Msun", "full": "Msun"},
    "subgiant": {"duration": "", "span": "mag"},
    "giant": {"slope": "1/mag", "tip": "mag"},
    "clump": {
        "M_I": "mag",
        "width": "mag",
        "lifetime": "Gyr",
        "longest_share": "",
        "equivalent_width": "mag",
        "V_I": "mag",
        "M_J": "mag",
        "M_H": "mag",
        "M_Ks": "mag",
    },
}


@dataclass(frozen=True, eq=False)
class LuminosityFunction:
    """Stars brighter than an absolute magnitude, per solar mass.

    Parameters
    ----------
    band : str
        V, I, J, H or Ks.
    magnitude : ndarray, shape (n,)
        Absolute magnitudes, rising [mag].
    cumulative : ndarray, shape (n,)
        Stars brighter than each, per solar mass of the stated mass [1/Msun].
    clump_per_msun : float
        Red-clump giants per solar mass [1/Msun]; not a number where a user's table does not say.
    """

    band: str
    magnitude: np.ndarray
    cumulative: np.ndarray
    clump_per_msun: float

    @property
    def faintest(self):
        """Absolute magnitude beyond which no further stars are counted [mag]."""
        return float(self.magnitude[-1])

    def brighter(self, M):
        """Return the stars brighter than absolute magnitude `M` [1/Msun], float or array.

        Zero above the brightest star, and no more than at `faintest`.
        """
        return np.interp(M, self.magnitude, self.cumulative, left=0.0)

    @classmethod
    def read(cls, path, band=None, clump_per_msun=None):
        """Read a user's function from any table astropy reads.

        Parameters
        ----------
        path : str or Path
            Columns ``magnitude`` (absolute) and either ``cumulative`` (stars brighter, per Msun) or ``number`` (stars
            per Msun in the bin around that magnitude; bins meet half-way between rows). Header keys ``band`` and
            ``clump_per_msun`` (ECSV) are used where the arguments are not given.
        band : str, optional
            V, I, J, H or Ks.
        clump_per_msun : float, optional
            Red-clump giants per solar mass, needed for the ``clump`` rule only.

        Returns
        -------
        LuminosityFunction

        Raises
        ------
        InputError
            A missing column or band, values that are not numbers, negative, or do not rise.
        """
        return _read(path, band, clump_per_msun)


@cache
def _giants():
    table = read_set("sources", "giants")
    check_keys("sources 'giants'", table, ["reference", *_GIANTS], _GIANTS)
    result = {}
    for part, keys in _GIANTS.items():
        where = f"sources 'giants'.{part}"
        check_keys(where, table[part], keys, keys)
        result[part] = {key: number(where, table[part], key, unit) for key, unit in keys.items()}
    return result


@cache
def _dwarfs(band):
    """Masses rising [Msun] and absolute magnitudes of the sequence."""
    columns = read_set("sources", "dwarf_sequence")["columns"]
    return np.array(columns["mass"])[::-1], np.array(columns[f"M_{band}"])[::-1]


def _sequence(band, mass):
    """Absolute magnitude on the sequence, straight in log mass; the slope of its heavy end continues beyond."""
    known, magnitude = _dwarfs(band)
    x, log = np.log(mass), np.log(known)
    slope = (magnitude[-1] - magnitude[-3]) / (log[-1] - log[-3])
    return np.interp(x, log, magnitude) + slope * np.maximum(x - log[-1], 0)


def _main_sequence(band, mass, age, lifetimes):
    """Absolute magnitude of dwarfs of one age."""
    g = _giants()["brightening"]
    lived = np.minimum(age / lifetimes.lifetime(mass), 1.0)
    share = np.clip((mass - g["from"]) / (g["full"] - g["from"]), 0, 1)
    return _sequence(band, mass) - share * g["amount"] * (lived ** g["power"] - g["zero"])


def clump_magnitude(band):
    """Return the red clump's absolute magnitude in V, I, J, H or Ks [mag]."""
    clump = _giants()["clump"]
    return clump["M_I"] + clump["V_I"] if band == "V" else clump[f"M_{band}"]


def clump_width():
    """Return the standard deviation of the red clump's magnitudes [mag]."""
    return _giants()["clump"]["width"]


def _burst(band, grid, age, imf, lifetimes):
    """Stars brighter than each of `grid` but for the clump, and clump giants, of one solar mass formed `age` ago."""
    g = _giants()
    lightest, turnoff = _dwarfs(band)[0][0], float(lifetimes.turnoff_mass(age))
    top = min(turnoff, imf.breaks[-1])
    if top <= lightest:
        return np.zeros(grid.size), 0.0
    mass = np.geomspace(lightest, top, _MASSES)
    dwarfs = _main_sequence(band, mass, age, lifetimes)
    heavier_than = np.exp(np.interp(grid, dwarfs[::-1], np.log(mass[::-1])))
    total = imf.number(heavier_than, top)
    if turnoff >= imf.breaks[-1]:
        return total, 0.0
    # stars that leave the main sequence per Gyr
    flux = float(imf.density(turnoff) * lifetimes.turnoff_speed(age))
    base, span = dwarfs[-1], g["subgiant"]["span"]
    total = total + flux * g["subgiant"]["duration"] * age * np.clip((grid - (base - span)) / span, 0, 1)
    clump = flux * min(g["clump"]["lifetime"], g["clump"]["longest_share"] * age)
    centre, slope = clump_magnitude(band), g["giant"]["slope"]
    tip = centre + g["giant"]["tip"] - g["clump"]["M_I"]
    if base - span > tip:
        at_tip = clump / g["clump"]["equivalent_width"] * math.exp(slope * (tip - centre))
        total = total + at_tip / slope * np.expm1(slope * (np.clip(grid, tip, base - span) - tip))
    return total, clump


def _spread(cumulative, sigma):
    """Smooth over a Gaussian spread of magnitude; the irregular last point of the grid stays as it is."""
    half = int(math.ceil(4 * sigma / _STEP))
    if half == 0:
        return cumulative
    weight = np.exp(-0.5 * (np.arange(-half, half + 1) * _STEP / sigma) ** 2)
    regular = cumulative[:-1]
    # beyond the faint end the counts go on rising, in a straight line as far as the spread can see
    rise = regular[-1] + (regular[-1] - regular[-2]) * np.arange(1, half + 1)
    padded = np.concatenate([np.zeros(half), regular, rise])
    smooth = np.convolve(padded, weight / weight.sum(), mode="valid")
    return np.append(np.minimum(smooth, cumulative[-1]), cumulative[-1])


def luminosity_function(band, history, population, imf, lifetimes):
    """Build the luminosity function of one component.

    Parameters
    ----------
    band : str
        V, I, J, H or Ks.
    history : History
        When its stars were born; a longer history is a sum of 24 bursts.
    population : Population
        Says how much mass was formed for one solar mass of the stated mass.
    imf : Imf
        Birth masses.
    lifetimes : Lifetimes
        Which mass leaves the main sequence at an age.

    Returns
    -------
    LuminosityFunction

    Notes
    -----
    Dwarfs: Pecaut & Mamajek (2013) and its electronic table. The flux through the evolved phases is the number of
    stars born at the turn-off mass times the speed of that mass; every phase holds flux times duration. The clump's
    place and the giants' slope are those of Nataf+ (2013); all but the clump is smoothed
    over the spread of metallicity; other bands have the clump's colours, which leaves the
    giants near the tip too blue. Dwarfs heavier than the sequence continue its slope.
    """
    check_band("band", band)
    faintest = _dwarfs(band)[1][0]
    grid = np.append(np.arange(_BRIGHTEST, faintest, _STEP), faintest)
    total, clump = np.zeros(grid.size), 0.0
    for age, weight in zip(*history.nodes(_AGES)):
        brighter, giants = _burst(band, grid, max(age, _YOUNGEST), imf, lifetimes)
        total += weight * brighter
        clump += weight * giants
    g = _giants()
    total = _spread(total, g["spread"]["sigma"]) + clump * ndtr((grid - clump_magnitude(band)) / g["clump"]["width"])
    formed = population.initial_mass_per_msun
    return LuminosityFunction(band, grid, total * formed, float(clump * formed))


def _column(table, name, path):
    values = table[name]
    if hasattr(values, "mask") and np.any(values.mask):
        raise InputError(f"{path}: column '{name}' has no value in row {int(np.argmax(values.mask)) + 1}")
    try:
        values = np.array(values, dtype=float)
    except (TypeError, ValueError):
        raise InputError(f"{path}: column '{name}' holds something that is not a number") from None
    if values.ndim != 1 or not np.all(np.isfinite(values)):
        raise InputError(f"{path}: column '{name}' must hold finite numbers only")
    return values


def _read(path, band, clump_per_msun):
    table = read_rows(path, "luminosity")
    band = table.meta.get("band") if band is None else band
    if band is None:
        raise InputError(f"{path}: says no band; give band = V, I, J, H or Ks, in the header or as an argument")
    check_band(f"{path}: band", band)
    given = [name for name in ("cumulative", "number") if name in table.colnames]
    if "magnitude" not in table.colnames or len(given) != 1:
        raise InputError(
            f"{path}: columns 'magnitude' and one of 'cumulative', 'number' needed, found {', '.join(table.colnames)}"
        )
    magnitude, values = _column(table, "magnitude", path), _column(table, given[0], path)
    if magnitude.size < 2 or np.any(np.diff(magnitude) <= 0):
        raise InputError(f"{path}: two or more rows with rising 'magnitude' are needed")
    if np.any(values < 0):
        raise InputError(f"{path}: column '{given[0]}' has a negative value in row {int(np.argmax(values < 0)) + 1}")
    if given[0] == "number":
        middle = 0.5 * (magnitude[1:] + magnitude[:-1])
        ends = 2 * magnitude[0] - middle[0], 2 * magnitude[-1] - middle[-1]
        magnitude = np.concatenate([[ends[0]], middle, [ends[1]]])
        values = np.concatenate([[0.0], np.cumsum(values)])
    elif np.any(np.diff(values) < 0):
        raise InputError(
            f"{path}: column 'cumulative' falls after row {int(np.argmax(np.diff(values) < 0)) + 1}, must not"
        )
    if not values[-1] > 0:
        raise InputError(f"{path}: counts no stars")
    clump = table.meta.get("clump_per_msun", math.nan) if clump_per_msun is None else clump_per_msun
    if isinstance(clump, bool) or not isinstance(clump, (int, float)) or clump < 0 or math.isinf(clump):
        raise InputError(f"{path}: clump_per_msun {clump!r} given, must be a number from 0 up")
    return LuminosityFunction(band, magnitude, values, float(clump))
