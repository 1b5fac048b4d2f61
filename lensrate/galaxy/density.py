"""Mass densities of stellar components, as declared records; the arithmetic is in kernels/density.py."""

from dataclasses import dataclass
from typing import ClassVar

import astropy.units as u
import numpy as np

from ..errors import InputError
from ..kernels import density as kernels
from ..params import Params, param
from ..units import G

__all__ = [
    "BAR_PROFILES",
    "DENSITIES",
    "Bar",
    "CoredHalo",
    "Density",
    "ExpDisc",
    "IsothermalDisc",
    "PowerHalo",
    "SechExpDisc",
    "Uniform",
    "stellar_mass",
]

BAR_PROFILES = {"exp": 0.0, "gauss": 1.0, "sech2": 2.0}


@dataclass(frozen=True)
class Density(Params):
    """Root of the densities: `kind` is the kernel's code, `pack(R0)` its parameters."""

    kind: ClassVar[int] = -1

    def pack(self, R0):
        """Return the kernel's parameters, internal units.

        Parameters
        ----------
        R0 : float
            The Sun's distance from the axis [kpc].

        Returns
        -------
        ndarray, shape (n,)
        """
        return np.append(super().pack(), R0)

    def kink_radii(self):
        """Return the cylindrical radii [kpc] at which a derivative jumps."""
        return ()

    def at(self, x, y, z, R0):
        """Return the density at Galactocentric points.

        Parameters
        ----------
        x, y, z : ndarray, any shapes that broadcast
            Place [kpc].
        R0 : float
            The Sun's distance from the axis [kpc].

        Returns
        -------
        ndarray
            Density [Msun/kpc^3], of the broadcast shape.
        """
        shape = np.broadcast(x, y, z).shape
        x, y, z = (np.ascontiguousarray(np.broadcast_to(a, shape), dtype=float).ravel() for a in (x, y, z))
        out = np.empty(x.size)
        kernels.density_many(self.kind, self.pack(R0), x, y, z, out)
        return out.reshape(shape)


@dataclass(frozen=True)
class ExpDisc(Density):
    """Double exponential disc given by its density in the plane at the Sun."""

    rho_sun: u.Quantity = param("Msun / kpc3", "density in the plane at the Sun's radius")
    h_R: u.Quantity = param("kpc", "scale length")
    h_z: u.Quantity = param("kpc", "scale height")
    R_flat: u.Quantity = param("kpc", "surface density is flat inside", default=0.0)
    kind: ClassVar[int] = kernels.EXP_DISC

    def kink_radii(self):
        return (self.R_flat.value,) if self.R_flat.value > 0 else ()


@dataclass(frozen=True)
class NuclearDisc(Density):
    """Double exponential disc given by its total mass."""

    mass: u.Quantity = param("Msun", "total mass")
    h_R: u.Quantity = param("kpc", "scale length")
    h_z: u.Quantity = param("kpc", "scale height")
    kind: ClassVar[int] = kernels.EXP_DISC

    def pack(self, R0):
        h_R, h_z = self.h_R.value, self.h_z.value
        centre = self.mass.value / (4.0 * np.pi * h_R**2 * h_z)
        # normalised at R = 0 rather than at the Sun, where exp(-R0/h_R) underflows
        return np.array([centre, h_R, h_z, 0.0, 0.0])


@dataclass(frozen=True)
class IsothermalDisc(Density):
    """Exponential disc whose vertical profile is that of an isothermal population in a given potential.

    rho(z) ~ exp(-Phi(z / stretch) / sigma_W^2), Phi = 2 pi G Sigma (sqrt(z^2 + depth^2) - depth) + 2 pi G rho_dark z^2.
    """

    column: u.Quantity = param("Msun / kpc2", "surface density at the Sun's radius, both sides")
    h_R: u.Quantity = param("kpc", "scale length")
    R_flat: u.Quantity = param("kpc", "surface density is flat inside")
    sigma_W: u.Quantity = param("km/s", "vertical dispersion")
    sheet_column: u.Quantity = param("Msun / kpc2", "surface density of all baryons")
    sheet_depth: u.Quantity = param("kpc", "effective half thickness of the baryons")
    rho_dark: u.Quantity = param("Msun / kpc3", "dark matter density")
    stretch: u.Quantity = param("", "factor on all heights")
    kind: ClassVar[int] = kernels.ISOTHERMAL_DISC

    def _vertical(self):
        s2 = self.sigma_W.value**2
        return (
            2 * np.pi * G * self.sheet_column.value / s2,
            self.sheet_depth.value,
            2 * np.pi * G * self.rho_dark.value / s2,
        )

    def half_thickness(self):
        """Return column / (2 density in the plane), kpc."""
        a, d, b = self._vertical()
        # the integrand falls monotonically; the grid reaches exp(-60)
        top = min(60.0 / a + d, np.sqrt(60.0 / b) if b > 0 else np.inf) * 1.5
        x, w = np.polynomial.legendre.leggauss(40)
        edges = np.concatenate([[0.0], np.geomspace(top / 256, top, 9)])
        z = 0.5 * (edges[1:, None] - edges[:-1, None]) * (x + 1) + edges[:-1, None]
        f = np.exp(-a * (np.sqrt(z * z + d * d) - d) - b * z * z)
        return float(np.sum(0.5 * (edges[1:, None] - edges[:-1, None]) * w * f) * self.stretch.value)

    def pack(self, R0):
        a, d, b = self._vertical()
        rho0 = self.column.value / (2.0 * self.half_thickness())
        return np.array([rho0, self.h_R.value, self.R_flat.value, R0, a, d, b, self.stretch.value])

    def kink_radii(self):
        return (self.R_flat.value,) if self.R_flat.value > 0 else ()


@dataclass(frozen=True)
class SechExpDisc(Density):
    """Radial exponential with a sech^2 and an exponential vertical part (Zheng+ 2001, ApJ 555, 393)."""

    rho_sun: u.Quantity = param("Msun / kpc3", "density in the plane at the Sun's radius")
    h_R: u.Quantity = param("kpc", "scale length")
    h_sech: u.Quantity = param("kpc", "height of the sech^2 part")
    h_exp: u.Quantity = param("kpc", "height of the exponential part")
    share_sech: u.Quantity = param("", "share of the sech^2 part in the plane")
    kind: ClassVar[int] = kernels.SECH_EXP_DISC


@dataclass(frozen=True)
class Bar(Density):
    """Triaxial bar of ellipsoidal, boxy or G2 surfaces (Dwek+ 1995, ApJ 445, 716), by total mass or central density.

    c_plane, c_vertical = 2, 2: ellipsoids; 2, 4: the boxy surfaces of the G2 model; profile "exp", "gauss", "sech2".
    """

    a: u.Quantity = param("kpc", "length along the major axis")
    b: u.Quantity = param("kpc", "length along the middle axis")
    c: u.Quantity = param("kpc", "length along the minor axis")
    angle: u.Quantity = param("deg", "angle between major axis and the Sun-centre line, near end at l > 0")
    mass: u.Quantity = param("Msun", "total mass (0: central density is given)", default=0.0)
    rho_centre: u.Quantity = param("Msun / kpc3", "central density (0: mass is given)", default=0.0)
    c_plane: u.Quantity = param("", "exponent of the surfaces in the plane", default=2.0)
    c_vertical: u.Quantity = param("", "exponent of the surfaces vertically", default=2.0)
    profile: str = "exp"
    kind: ClassVar[int] = kernels.BAR

    def __post_init__(self):
        super().__post_init__()
        if self.profile not in BAR_PROFILES:
            raise InputError(f"Bar.profile: '{self.profile}' is not known (known: {', '.join(BAR_PROFILES)})")
        if (self.mass.value > 0) == (self.rho_centre.value > 0):
            raise InputError(
                f"Bar: mass {self.mass:g}, rho_centre {self.rho_centre:g} given; either mass or rho_centre is needed, "
                "above 0"
            )

    def volume(self):
        """Return mass over central density, kpc^3, by quadrature over the surfaces."""
        abc = self.a.value * self.b.value * self.c.value
        return abc * unit_volume(self.c_plane.value, self.c_vertical.value, self.profile)

    def total_mass(self):
        """Return the total mass, Quantity."""
        return self.mass if self.mass.value > 0 else self.rho_centre.value * self.volume() * u.Msun

    def pack(self, R0):
        rho0 = self.rho_centre.value or self.mass.value / self.volume()
        return np.array(
            [
                rho0,
                self.a.value,
                self.b.value,
                self.c.value,
                self.angle.to_value(u.rad),
                self.c_plane.value,
                self.c_vertical.value,
                BAR_PROFILES[self.profile],
            ]
        )


def unit_volume(p, q, profile):
    """Return int f(m) dx dy dz for unit lengths, by the volume inside m = 1 and a radial integral.

    Parameters
    ----------
    p, q : float
        Exponents of the surfaces in the plane and vertically.
    profile : str
        "exp", "gauss" or "sech2".

    Returns
    -------
    float
    """
    from scipy.special import gammaln

    def lens(n):  # area of |x|^n + |y|^n < 1
        return 4.0 * np.exp(2 * gammaln(1 + 1 / n) - gammaln(1 + 2 / n))

    # volume of {P^q + |z|^q < 1}, P the planar radius: area(P) * 2 int_0^1 (1 - t^q)^(2/q) dt
    beta = np.exp(gammaln(1 / q) + gammaln(1 + 2 / q) - gammaln(1 + 3 / q)) / q
    inside = lens(p) * 2.0 * beta
    radial = {"exp": 2.0, "gauss": np.sqrt(np.pi / 2), "sech2": np.pi**2 / 12}[profile]  # int m^2 f(m) dm
    return 3.0 * inside * radial


@dataclass(frozen=True)
class CoredHalo(Density):
    """Cored isothermal halo (Griest 1991, ApJ 366, 412)."""

    rho_sun: u.Quantity = param("Msun / kpc3", "density at the Sun's radius")
    core: u.Quantity = param("kpc", "core radius")
    kind: ClassVar[int] = kernels.CORED_HALO


@dataclass(frozen=True)
class PowerHalo(Density):
    """Oblate power-law stellar halo (form of Juric+ 2008, ApJ 673, 864, eq. 24), softened inside a core."""

    rho_sun: u.Quantity = param("Msun / kpc3", "density in the plane at the Sun's radius")
    exponent: u.Quantity = param("", "power")
    q: u.Quantity = param("", "axis ratio")
    core: u.Quantity = param("kpc", "softening radius")
    kind: ClassVar[int] = kernels.POWER_HALO


@dataclass(frozen=True)
class Uniform(Density):
    """The same density everywhere, for checks against closed forms."""

    rho: u.Quantity = param("Msun / kpc3", "density")
    kind: ClassVar[int] = kernels.UNIFORM


#: names used in Galaxy files
DENSITIES = {
    "exp_disc": ExpDisc,
    "nuclear_disc": NuclearDisc,
    "isothermal_disc": IsothermalDisc,
    "sech_exp_disc": SechExpDisc,
    "bar": Bar,
    "cored_halo": CoredHalo,
    "power_halo": PowerHalo,
    "uniform": Uniform,
}


def stellar_mass(density, R0, R_max=100.0):
    """Return the mass of a component [Msun], float; of halos, which do not end, inside `R_max` [kpc].

    Parameters
    ----------
    density : Density
        Any record but `Uniform`, whose mass is infinite.
    R0 : float
        The Sun's distance from the axis [kpc].
    R_max : float
        Where a halo is cut [kpc].

    Returns
    -------
    float
    """
    if isinstance(density, NuclearDisc):
        return float(density.mass.value)
    if isinstance(density, Bar):
        return float(density.total_mass().value)
    if isinstance(density, (ExpDisc, IsothermalDisc, SechExpDisc)):
        h = density.h_R.value
        R_f = density.R_flat.value if hasattr(density, "R_flat") else 0.0
        area = 2 * np.pi * np.exp((R0 - R_f) / h) * (0.5 * R_f**2 + h * (R_f + h))
        return float(area * _column(density))
    if isinstance(density, Uniform):
        return np.inf
    x, w = np.polynomial.legendre.leggauss(48)
    u_r, u_t = 0.5 * (x + 1), 0.5 * (x + 1)
    # r = R_max u^3 gathers the nodes at the centre
    r = R_max * u_r**3
    R, z = r[:, None] * np.sqrt(1 - u_t**2), r[:, None] * u_t
    rho = density.at(R, 0.0, z, R0)
    weight = (0.5 * w * 3 * R_max * u_r**2 * 4 * np.pi * r**2)[:, None] * (0.5 * w)
    return float(np.sum(rho * weight))


def _column(density):
    """Surface density at the Sun's radius [Msun/kpc^2]."""
    if isinstance(density, IsothermalDisc):
        return density.column.value
    if isinstance(density, ExpDisc):
        return 2 * density.rho_sun.value * density.h_z.value
    share = density.share_sech.value
    return 2 * density.rho_sun.value * (share * density.h_sech.value + (1 - share) * density.h_exp.value)
