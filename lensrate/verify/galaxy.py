"""Published optical depths, densities, masses and motions of the Galaxy, recomputed: one function for each row."""

from functools import cache, partial

import astropy.units as u
import numpy as np

from ..galaxy.density import Bar, unit_volume
from ..galaxy.potential import Potential
from ..lensing import rates
from ..lensing.quadrature import Numerics
from ..lensing.sightline import sightline
from ..remnants.classes import CLASSES
from ..scenario import Scenario, resolve
from ..units import KMS_PER_MASYR_KPC

__all__ = ["COMPUTE"]

_TOP = 5.0  # kpc, height to which columns are summed; the thick disc has 0.4 % of its mass above
_BOX = (2.2, 1.4, 1.2)  # kpc, half sides of Portail+ 2017's bulge along the bar's axes
_M_DWARFS = (0.08, 0.6)  # Msun


@cache
def _han_gould(l, b, sources="clump"):
    scenario = Scenario.read("hangould2003").replace(sources=sources)
    parts = sightline(l * u.deg, b * u.deg, scenario).components
    return {name: part.optical_depth for name, part in parts.items()}


def _depth(part, l, b, sources="clump"):
    return _han_gould(l, b, sources)[part]


@cache
def _model():
    return resolve(Scenario.read("default"))


def _hosts(names, power, low=0.0, high=np.inf, skip=()):
    """Components and how many lenses of some classes, times M^power, a solar mass of each stands for."""
    model = _model()
    for component, population in zip(model.galaxy.components, model.populations):
        if component.name in skip or population is None:
            continue
        total = 0.0
        for spectrum in (population.spectra[name] for name in names):
            inside = (spectrum.mass >= low) & (spectrum.mass <= high)
            total += float(np.sum(spectrum.number[inside] * spectrum.mass[inside] ** power))
        yield component.density, total


def _local(names, power, place):
    """Number (power 0) or mass (1) per pc^3 at a place (3, 1) [kpc]."""
    R0 = _model().galaxy.R0
    return sum(float(d.at(*place, R0)[0]) * n for d, n in _hosts(names, power)) / 1e9


def _white_dwarfs():
    """Number per pc^3 at the Sun."""
    return _local(["white_dwarf"], 0, _model().galaxy.sun.origin()[:, None])


def _midplane():
    """Mass of stars and remnants per pc^3 in the plane at the Sun's radius."""
    return _local(CLASSES, 1, np.array([[-_model().galaxy.R0], [0.0], [0.0]]))


def _column(names, low=0.0, high=np.inf):
    """Mass per pc^2 through the discs at the Sun's radius, without the stellar halo."""
    R0 = _model().galaxy.R0
    x, w = np.polynomial.legendre.leggauss(40)
    edges = np.array([0.0, 0.1, 0.3, 1.0, 2.5, _TOP])
    half = 0.5 * np.diff(edges)[:, None]
    z, w = (edges[:-1, None] + half * (x + 1.0)).ravel(), (half * w).ravel()
    hosts = _hosts(names, 1, low, high, skip=("halo",))
    return sum(2 * float(np.sum(w * d.at(-R0, 0.0, z, R0))) * n for d, n in hosts) / 1e6


def _boxed():
    """Stellar mass [Msun] in the bulge's box, the disc there counted in, the nuclear disc not."""
    galaxy = _model().galaxy
    angle = galaxy.bar().angle.to_value(u.rad)
    t, w = np.polynomial.legendre.leggauss(24)
    # the bar's cusp lies at the corner of each octant, and the disc's profile bends at its plane
    t, w = (0.5 * (t + 1.0)) ** 2, w * 0.5 * (t + 1.0)
    along, across, up = np.meshgrid(*(side * t for side in _BOX), indexing="ij")
    weight = np.einsum("i,j,k->ijk", *(side * w for side in _BOX))
    total = 0.0
    for sign in (1, -1):
        x = -np.cos(angle) * along + sign * np.sin(angle) * across
        y = np.sin(angle) * along + sign * np.cos(angle) * across
        for component in galaxy.components:
            if component.name != "nuclear_disc":
                # this octant, the opposite one through the axis, and both below the plane
                total += 4 * float(np.sum(weight * component.density.at(x, y, up, galaxy.R0)))
    return total


def _g2(rho):
    """Mass of the bar of Dwek+ 1995 for a central density [Msun/kpc^3]."""
    return Bar(1.58, 0.62, 0.43, 13.4, rho_centre=rho, c_vertical=4.0, profile="gauss").total_mass().to_value(u.Msun)


@cache
def _dispersions(l, b):
    """Proper-motion dispersions along l and b of the bulge's clump giants [mas/yr], spread in distance included."""
    model = resolve(Scenario.read("default").replace(sources="clump"))
    l, b = np.radians(l), np.radians(b)
    galaxy = model.galaxy
    ready = rates.prepare(model, galaxy.sightline(l, b), model.sources.toward(l, b, galaxy), Numerics())
    w, m_l, m_b, c_ll, _, c_bb = ready.src
    return tuple(float(np.sqrt(np.sum(w * (c + m * m)) - np.sum(w * m) ** 2)) for m, c in ((m_l, c_ll), (m_b, c_bb)))


def _centre_motion(axis):
    """Proper motion of an object at rest in the Galactic centre [mas/yr]; axis 1 along l, 2 along b."""
    galaxy = _model().galaxy
    line = galaxy.sightline(0.0, 0.0)
    return -float(line.axes[axis] @ line.v_sun) / (KMS_PER_MASYR_KPC * galaxy.R0)


def _speed(mu, R0):
    """Speed [km/s] of the Sun that makes Sgr A* move by -mu."""
    return mu * R0 * KMS_PER_MASYR_KPC


@cache
def _bovy():
    return Potential.read("bovy2015")


def _member_mass(name):
    return next(m.model.mass.value for m in _bovy().members if m.name == name)


def _without(potential, keep):
    return potential.without(*(m.name for m in potential.members if m.name not in keep))


def _gravity_density(potential, R):
    return potential.axisymmetric_density(R * u.kpc, 0 * u.kpc).to_value(u.Msun / u.pc**3)


def _gravity_column(potential, R, top):
    """Mass per pc^2 within a height [kpc] of the plane."""
    x, w = np.polynomial.legendre.leggauss(60)
    z = 0.5 * top * (x + 1.0)
    rho = potential.axisymmetric_density(R * u.kpc, z * u.kpc).to_value(u.Msun / u.pc**3)
    return float(np.sum(top * w * rho)) * 1e3


@cache
def _gravity():
    return Potential.read(_model().galaxy.potential)


def _escape(potential, R):
    return float(potential.escape_speed(R * u.kpc).to_value(u.km / u.s))


_R0 = 8.178  # kpc, where the default potential is compared

COMPUTE = {
    "B1_bulge": partial(_depth, "bulge", 1.0, -3.9),
    "B2_disc_published": partial(_depth, "disc", 1.0, -3.9),
    "B2_disc_weighted": partial(_depth, "disc", 1.0, -3.9),
    "B2_disc_fixed": partial(_depth, "disc", 1.0, -3.9, "distance:8"),
    "B2_total": lambda: sum(_han_gould(1.0, -3.9).values()),
    "E1_white_dwarfs": _white_dwarfs,
    "E2_white_dwarfs": _white_dwarfs,
    "E5_stars": lambda: _column(["star"]),
    "E5_m_dwarfs": lambda: _column(["star"], *_M_DWARFS),
    "E5_white_dwarfs": lambda: _column(["white_dwarf"]),
    "E5_brown_dwarfs": lambda: _column(["brown_dwarf"]),
    "E5_stars_and_remnants": lambda: _column(CLASSES),
    "E5_baryons": lambda: _gravity_column(_gravity().without("halo"), _R0, 3.0),
    "E6_neutron_stars_black_holes": lambda: _column(["neutron_star", "black_hole"]),
    "E7_all_matter": lambda: _gravity_density(_gravity(), _R0),
    "E7_dark": lambda: _gravity_density(_without(_gravity(), ["halo"]), _R0),
    "E8_midplane": _midplane,
    "F4_V_8.178": partial(_speed, 6.411, 8.178),
    "F4_V_8.275": partial(_speed, 6.411, 8.275),
    "F4_W": partial(_speed, 0.219, 8.178),
    "F4_V_sun": lambda: _model().galaxy.sun.V.value,
    "F4_mu_l": partial(_centre_motion, 1),
    "F4_mu_b": partial(_centre_motion, 2),
    "F6_box": _boxed,
    "F11_escape": lambda: _escape(_gravity(), _R0),
    "F12_escape": lambda: _escape(_gravity(), _R0),
    "F12_escape_50": lambda: _escape(_gravity(), 50.0),
    "F13_disc": partial(_member_mass, "disc"),
    "F13_bulge": partial(_member_mass, "bulge"),
    "F13_density": lambda: _gravity_density(_bovy(), 8.0),
    "F13_dark": lambda: _gravity_density(_without(_bovy(), ["halo"]), 8.0),
    "F13_column": lambda: _gravity_column(_bovy(), 8.0, 1.1),
    "F16_unit": partial(unit_volume, 2.0, 4.0, "gauss"),
    "F16_mass": partial(_g2, 1e9),
    "F18_baade_l": lambda: _dispersions(1.0, -4.0)[0],
    "F18_baade_b": lambda: _dispersions(1.0, -4.0)[1],
    "F18_sagittarius_l": lambda: _dispersions(0.9, -2.0)[0],
    "F18_sagittarius_b": lambda: _dispersions(0.9, -2.0)[1],
}
for _l, _b in ((1.16, -2.75), (1.5, -2.68), (0.0, -3.0), (0.0, -6.0), (5.0, -3.0), (-5.0, -3.0)):
    for _part in ("bulge", "disc"):
        COMPUTE[f"B5_{_part}_{_l:g}_{_b:g}"] = partial(_depth, _part, _l, _b)
for _R in (2, 4, 6, 8, 12):
    COMPUTE[f"F13_escape_{_R}"] = lambda R=_R: _escape(_bovy(), float(R))
