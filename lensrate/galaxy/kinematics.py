"""Velocity distributions of stellar components, as declared records; the arithmetic is in kernels/kinematics.py."""

import hashlib
import json
from dataclasses import dataclass
from functools import cache
from typing import ClassVar

import astropy.units as u
import numpy as np

from ..datafiles import read_set
from ..errors import DataFileError
from ..io import whole_file
from ..kernels import kinematics as kernels
from ..kernels._jit import CACHE
from ..params import Params, param
from .potential import Potential

__all__ = ["KINEMATICS", "AtRest", "BarMotion", "DiscMotion", "Kinematics", "LinearRotation", "PotentialRotation"]

_SPEED_STEP = 0.1  # kpc


@dataclass(frozen=True)
class LinearRotation(Params):
    """Circular speed v0 + slope (R - R0), softened as R / sqrt(R^2 + soft^2) near the centre."""

    v0: u.Quantity = param("km/s", "circular speed at R0")
    slope: u.Quantity = param("km / (s kpc)", "its radial slope", default=0.0)
    soft: u.Quantity = param("kpc", "softening radius", default=0.0)

    def pack(self, R0):
        """Return the kernel's rotation array for the Sun at R0 [kpc]."""
        # v0 is the speed at R0 itself, whatever the softening
        v0 = self.v0.value * np.sqrt(R0**2 + self.soft.value**2) / R0
        return np.array([kernels.LINEAR, v0, self.slope.value, R0, self.soft.value], dtype=float)


@dataclass(frozen=True)
class PotentialRotation:
    """The circular speed of a potential set, as the orbits feel it, so that stars and kicked remnants agree."""

    potential: str

    def pack(self, R0):
        """Return the kernel's rotation array: a table in steps of 0.1 kpc out to 60 kpc."""
        return _speeds(self.potential)


@cache
def _speeds(name):
    """Table of a potential's circular speed; kept beside the compiled kernels, since it takes half a second."""
    stated = json.dumps(read_set("potential", name), sort_keys=True, default=str)
    path = CACHE / f"speeds_{hashlib.sha256(stated.encode()).hexdigest()[:16]}.npy"
    R = np.arange(0.0, 60.05, _SPEED_STEP)
    try:
        kept = np.load(path, allow_pickle=False)
        if kept.shape == (R.size + 2,) and np.all(np.isfinite(kept)):
            return kept
    except (OSError, ValueError, EOFError):
        pass  # not there yet, or damaged: made again
    speed = Potential.read(name).for_orbits().circular_speed(R[1:] * u.kpc).to_value(u.km / u.s)
    table = np.concatenate([[kernels.TABLE, _SPEED_STEP, 0.0], speed])
    try:
        path.parent.mkdir(parents=True, exist_ok=True)
        with whole_file(path) as temporary:
            np.save(temporary, table)
    except (OSError, DataFileError):
        pass  # a folder that cannot be written costs half a second a run
    return table


@dataclass(frozen=True)
class Kinematics(Params):
    """Root of the velocity distributions: `kind` is the kernel's code."""

    kind: ClassVar[int] = -1

    def pack(self, R0, density):
        """Return the kernel's parameters, internal units; `density` supplies the asymmetric drift's slope."""
        return super().pack()

    def kink_radii(self):
        """Return the cylindrical radii [kpc] at which the motion or a derivative of it jumps."""
        return ()


@dataclass(frozen=True)
class DiscMotion(Kinematics):
    """Rotation with the circular speed less a drift; dispersions along R, phi, z fall exponentially with R."""

    sigma_R: u.Quantity = param("km/s", "radial dispersion at the Sun")
    sigma_phi: u.Quantity = param("km/s", "azimuthal dispersion at the Sun")
    sigma_z: u.Quantity = param("km/s", "vertical dispersion at the Sun")
    fall: u.Quantity = param("1/kpc", "d ln sigma / dR, with a minus sign", default=0.0)
    R_frozen: u.Quantity = param("kpc", "dispersions stay constant inside", default=0.0)
    drift: u.Quantity = param("km/s", "lag at the Sun; below zero: from Jeans' equation", default=0.0)
    kind: ClassVar[int] = kernels.DISC

    def kink_radii(self):
        return (self.R_frozen.value,) if self.R_frozen.value > 0 and self.fall.value != 0 else ()

    def pack(self, R0, density):
        s = [q.value for q in (self.sigma_R, self.sigma_phi, self.sigma_z, self.fall, self.R_frozen)]
        h_R = getattr(density, "h_R", None)
        R_flat = getattr(density, "R_flat", None)
        return np.array(
            [
                *s,
                R0,
                self.drift.value,
                h_R.value if h_R is not None else 1e9,
                R_flat.value if R_flat is not None else 0.0,
            ]
        )


@dataclass(frozen=True)
class BarMotion(Kinematics):
    """Dispersions along the bar's axes, falling with R and |z|; cylindrical rotation v R / sqrt(R^2 + R_rot^2)."""

    sigma_x: u.Quantity = param("km/s", "dispersion along the major axis")
    sigma_y: u.Quantity = param("km/s", "dispersion along the middle axis")
    sigma_z: u.Quantity = param("km/s", "dispersion along the minor axis")
    fall_R: u.Quantity = param("1/kpc", "exponential fall with R", default=0.0)
    fall_z: u.Quantity = param("1/kpc", "exponential fall with |z|", default=0.0)
    z_ref: u.Quantity = param("kpc", "height at which the dispersions are stated", default=0.0)
    angle: u.Quantity = param("deg", "angle of the axes, as of the bar", default=0.0)
    v_rot: u.Quantity = param("km/s", "rotation speed far out", default=0.0)
    R_rot: u.Quantity = param("kpc", "turn-over radius of the rotation", default=1.0)
    kind: ClassVar[int] = kernels.BAR

    def pack(self, R0, density):
        p = Params.pack(self)
        p[6] = self.angle.to_value(u.rad)
        return p


@dataclass(frozen=True)
class AtRest(Kinematics):
    """No motion at all, for checks against closed forms."""

    kind: ClassVar[int] = kernels.REST


#: names used in Galaxy files
KINEMATICS = {"disc": DiscMotion, "bar": BarMotion, "rest": AtRest}
