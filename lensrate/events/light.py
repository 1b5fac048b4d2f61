"""How bright sources and lenses of mock events are, given their place and mass; arrays in, arrays out."""

import numpy as np

from ..kernels import catalogue as kernels
from ..lensing.geometry import magnification
from ..remnants.lifetimes import Lifetimes
from ..sources.lens_light import dwarf_magnitude, white_dwarf_magnitude
from ..sources.luminosity import clump_magnitude, clump_width
from ..sources.rules import ClumpRule, DistanceRule, PeakRule

__all__ = ["add", "cooling_age", "gain", "lens_magnitude", "source_magnitude"]

_CELLS = 48  # of the square root of u_0, where it depends on the source
_ROWS = 16384


def source_magnitude(sources, component, D_S, u, normal, u_0, u_0_limit):
    """Draw the apparent magnitude of sources that pass the rule.

    Parameters
    ----------
    sources : LineSources
    component : ndarray of int, shape (n,)
        -1 where the source is no star of the Galaxy.
    D_S : ndarray, shape (n,)
        [kpc]
    u, normal : ndarray, shape (n,)
        Uniform and normal random numbers.
    u_0 : ndarray, shape (n,)
        Uniform below `u_0_limit`; with a limit at peak these become those of sources magnified enough.

    Returns
    -------
    magnitude, u_0 : ndarray, shape (n,)
        NaN where nothing is known of the star.

    Notes
    -----
    From the component's luminosity function up to the limit at that distance behind the dust there. With a rule of one
    distance any star of the function may be the source.
    """
    rule = sources.rule
    out, u_0 = np.full(D_S.size, np.nan), u_0.copy()
    distance = _modulus(sources.dust, D_S)
    for i, shine in enumerate(sources.shining):
        mine = np.flatnonzero(component == i)
        if shine is None or not mine.size:
            continue
        if isinstance(rule, ClumpRule):
            out[mine] = clump_magnitude(shine.band) + clump_width() * normal[mine]
            continue
        if isinstance(rule, DistanceRule):
            faintest = np.full(mine.size, np.inf)
        else:
            faintest = rule.magnitude - distance[mine]
        if isinstance(rule, PeakRule):
            u_0[mine] = _magnified(shine, faintest, u_0[mine] / u_0_limit, u_0_limit)
            faintest = faintest + gain(u_0[mine])
        found = np.empty(mine.size)
        kernels.magnitude_below(u[mine], faintest, shine.magnitude, shine.cumulative, found)
        out[mine] = found
    return out + distance, u_0


def _magnified(shine, faintest, u, limit):
    """u_0 with the chance that goes with the number of stars bright enough at peak."""
    s = np.linspace(0.0, 1.0, _CELLS + 1)
    edges, middle = limit * s**2, limit * (0.5 * (s[1:] + s[:-1])) ** 2
    out = np.empty(u.size)
    for k in range(0, u.size, _ROWS):
        rows = slice(k, k + _ROWS)
        chance = shine.brighter(faintest[rows, None] + gain(middle)) * np.diff(edges)
        cum = np.concatenate([np.zeros((chance.shape[0], 1)), np.cumsum(chance, axis=1)], axis=1)
        y = u[rows] * cum[:, -1]
        cell = np.clip((cum <= y[:, None]).sum(axis=1) - 1, 0, _CELLS - 1)
        at = np.arange(y.size)
        width = cum[at, cell + 1] - cum[at, cell]
        part = np.divide(y - cum[at, cell], width, out=np.full(y.size, 0.5), where=width > 0)
        out[rows] = edges[cell] + part * (edges[cell + 1] - edges[cell])
    return out


def lens_magnitude(model, sources, lens_class, component, M, D_L, u):
    """Return the apparent magnitude of lenses, infinite where they give no light.

    Parameters
    ----------
    model : Model
    sources : LineSources
        Band and dust.
    lens_class, component : ndarray of int, shape (n,)
    M, D_L : ndarray, shape (n,)
        [Msun, kpc]
    u : ndarray, shape (n,)
        Uniform: when a white dwarf's star was born, evenly over its component's ages that are old enough.

    Returns
    -------
    ndarray, shape (n,)
        Stars as dwarfs, white dwarfs by mass and cooling age. Brown dwarfs, neutron stars, black holes and the user's
        own classes: infinite.
    """
    band = sources.dust.band
    out = np.full(D_L.size, np.inf)
    star, dwarf = (lens_class == model.classes.index(n) for n in ("star", "white_dwarf"))
    out[star] = dwarf_magnitude(band, M[star])
    for i in np.unique(component[dwarf]):
        mine = np.flatnonzero(dwarf & (component == i))
        out[mine] = white_dwarf_magnitude(band, M[mine], cooling_age(model, i, M[mine], u[mine]))
    shines = star | dwarf
    out[shines] += _modulus(sources.dust, D_L[shines])
    return out


def cooling_age(model, component, M, u):
    """Return how long white dwarfs have been cooling [Gyr]: their component's age less the life of their star.

    Parameters
    ----------
    model : Model
    component : int
    M : ndarray
        [Msun]
    u : ndarray
        Between 0 and 1, of the shape of `M`: when the star was born, evenly over the ages that are old enough.
    """
    spectrum, (young, old) = model.populations[component].spectra["white_dwarf"], model.galaxy.components[component].age
    order = np.argsort(spectrum.mass)
    star = np.interp(M, spectrum.mass[order], spectrum.initial_mass[order])
    life = Lifetimes.read(model.scenario.lifetimes).lifetime(star)
    oldest = np.maximum(old - life, 0.0)
    youngest = np.minimum(np.maximum(young - life, 0.0), oldest)
    return youngest + u * (oldest - youngest)


def _modulus(dust, D):
    """Apparent minus absolute magnitude at distances D [kpc]."""
    out = np.empty(D.size)
    kernels.interpolate(D, dust.distance, dust.magnitude, out)
    return out + 5.0 * np.log10(D) + 10.0


def gain(u_0):
    """Return the magnitudes by which an event brightens its source at closest approach."""
    return 2.5 * np.log10(magnification(np.abs(u_0)))


def add(*magnitudes):
    """Return the magnitude of several stars together; infinite ones give no light."""
    with np.errstate(divide="ignore"):
        return -2.5 * np.log10(sum(10.0 ** (-0.4 * m) for m in magnitudes))
