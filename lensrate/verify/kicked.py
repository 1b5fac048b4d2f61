"""Published numbers about kicked remnants, recomputed with the recommended scenario and its fields."""

from functools import cache, partial

import astropy.units as u
import numpy as np

from ..errors import DataFileError
from ..galaxy.density import stellar_mass
from ..galaxy.potential import Potential
from ..remnants.births import analytic
from ..remnants.census import census, element_numbers, exponential_height
from ..remnants.cubes import node_density
from ..remnants.ifmr import Ifmr
from ..remnants.kicks import parse_kick
from ..remnants.orbits import galactocentric, integrate
from ..scenario import Scenario, resolve

__all__ = ["COMPUTE", "settled_speeds"]

_DARK = ("neutron_star", "black_hole")
_TRACERS = 2000


@cache
def _census(**changes):
    scenario = Scenario.read("default").replace(**changes)
    model = resolve(scenario)
    if model.kicked is None:
        raise DataFileError("scenario 'default': has no kick-resolved fields, which this check needs")
    return census(model)


def _of(name, key, **changes):
    return getattr(_census(**changes).classes[name], key)


def _height(name):
    return _of(name, "scale_heights")["exponential_fit"]


def _escaped(names):
    counts = [_census().classes[n] for n in names]
    return 100 * sum(c.born * c.escaped_fraction for c in counts) / sum(c.born for c in counts)


def _both_height():
    """Height of neutron stars and black holes together."""
    model = _census().model
    field = model.kicked.field
    first = len(model.galaxy.components)
    heights = field.heights.reshape(field.n_elements, -1)[model.kicked.elements]
    numbers = sum(element_numbers(n, model)[first:] for n in _DARK)
    return 1e3 * exponential_height(numbers @ heights, field.height_edges)


def _stated_mass(model):
    return [stellar_mass(c.density, model.galaxy.R0) for c in model.galaxy.components]


def _mass_lost():
    result = _census()
    lost = sum(c.born * c.escaped_fraction * c.mean_mass_msun for c in map(result.classes.get, _DARK))
    return 100 * lost / sum(_stated_mass(result.model))


def _in_disc(R_max=20.0, z_max=0.2):
    """Share of the neutron stars born that are inside a slab."""
    model = _census().model
    field = model.kicked.field
    held = (node_density(field) * field.grid.volumes()).sum(axis=(2, 4)).reshape(field.n_elements, -1)
    first = len(model.galaxy.components)
    layers = element_numbers("neutron_star", model)[first:] @ held[model.kicked.elements]
    below = np.concatenate([[0.0], np.cumsum(layers)])
    return float(np.interp(z_max, field.grid.edges()[1], below)) / _of("neutron_star", "born")


def _rate_mean(gyr=10.0):
    """Core collapses per century, averaged over the Galaxy's life."""
    return sum(_of(n, "born") for n in _DARK) / (gyr * 1e7)


def _rate_now(**changes):
    """Core collapses per century in the youngest component."""
    model = resolve(Scenario.read("default").replace(**changes))
    young = min(range(len(model.galaxy.components)), key=lambda i: model.galaxy.components[i].age[1])
    born = sum(model.populations[young].born_per_msun[n] for n in _DARK) * _stated_mass(model)[young]
    return born / (model.galaxy.components[young].age[1] * 1e7)


def _lightest(name):
    """Lowest initial mass that may leave a remnant of a class."""
    mass = np.linspace(1.0, 60.0, 59001)
    outcome = next(o for o in Ifmr.read("default").outcomes(mass) if o.name == name)
    return float(mass[outcome.probability > 0][0])


@cache
def settled_speeds(law="maxwell:265", age=200.0, tracers=_TRACERS, seed=1):
    """Return speeds and distances from the centre of kicked bodies of the disc after some time.

    Parameters
    ----------
    law : str
    age : float  [Myr]
    tracers, seed : int

    Returns
    -------
    speed : ndarray, shape (n,)  [km/s]
        Galactocentric.
    distance : ndarray, shape (n,)  [kpc]

    Notes
    -----
    Born where the young disc's stars are, on circular orbits, as in Disberg+ 2024, A&A 687, A272.
    """
    galaxy = Scenario.read("default").build_galaxy()
    potential = Potential.read(galaxy.potential)
    rng = np.random.default_rng(seed)
    rows = analytic(galaxy.components[0], galaxy, potential, tracers, rng)
    place = galactocentric(potential, rows)[0]
    x, y = place[:, :2].T
    R = np.hypot(x, y)
    circular = potential.circular_speed(R * u.kpc).to_value(u.km / u.s)
    kick = rng.normal(size=(tracers, 3))
    kick *= (parse_kick(law).sample(tracers, rng) / np.linalg.norm(kick, axis=1))[:, None]
    # the disc turns clockwise seen from the north
    velocity = np.column_stack([circular * y / R, -circular * x / R, np.zeros(tracers)]) + kick
    place, velocity = integrate(potential, place * u.kpc, velocity * (u.km / u.s), age * u.Myr)
    return np.linalg.norm(velocity.value, axis=1), np.linalg.norm(place.value, axis=1)


def _settled(within=np.inf):
    speed, distance = settled_speeds()
    return float(np.median(speed[distance < within]))


COMPUTE = {
    "E14_bh_bound": partial(_of, "black_hole", "bound_fraction"),
    "E14_ns_height_over_stars": lambda: _height("neutron_star") / _height("star"),
    "E14_ns_height_over_bh": lambda: _height("neutron_star") / _height("black_hole"),
    "E14_ns_escaped_published": partial(_escaped, _DARK[:1]),
    "E14_all_escaped_published": partial(_escaped, _DARK),
    "E14_height_published": _both_height,
    "E14_nearest_ns_published": partial(_of, "neutron_star", "nearest_pc"),
    "E14_nearest_bh_published": partial(_of, "black_hole", "nearest_pc"),
    "E14_mass_lost_published": _mass_lost,
    "E12_in_disc": _in_disc,
    "E15_speed_inside": partial(_settled, 20.0),
    "E15_speed_all": _settled,
    "E9_rate_mean": _rate_mean,
    "E9_rate_now": _rate_now,
    "E9_rate_now_kroupa": partial(_rate_now, imf="kroupa2001"),
    "E10_rate_now": _rate_now,
    "E11_neutron_stars": partial(_of, "neutron_star", "born"),
    "E16_black_holes": partial(_of, "black_hole", "born"),
    "E16_mean_mass": partial(_of, "black_hole", "mean_mass_msun"),
    "E17_black_holes": partial(_of, "black_hole", "born"),
    "rule_ns_lost": partial(_escaped, _DARK[:1]),
    "rule_ns_height": lambda: _height("neutron_star") / _height("star"),
    "rule_ns_nearest": partial(_of, "neutron_star", "nearest_pc"),
    "rule_ns_progenitor": partial(_lightest, "neutron_star"),
    "rule_bh_progenitor": partial(_lightest, "black_hole"),
}
for _law in ("igoshev2020", "hobbs2005", "disbergmandel2025"):
    COMPUTE[f"E14_ns_bound_{_law}"] = partial(_of, "neutron_star", "bound_fraction", kicks=_law)
for _law in ("hobbs2005", "verbunt2017", "disbergmandel2025", "igoshev2020"):
    COMPUTE[f"E12_bound_{_law}"] = partial(_of, "neutron_star", "bound_fraction", kicks=_law)
