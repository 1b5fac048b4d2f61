"""Kick-resolved fields: density and velocity of remnants by component and kick speed, per remnant born.

Every forecast is linear in them: a kick law is a set of weights of the bins, a number of births a factor.
"""

import json
import os
from dataclasses import dataclass, field

import astropy.units as u
import numpy as np

from ..claims import check_fits
from ..errors import DataFileError, InputError, one_of
from ..io import check_target, whole_bytes
from ..kernels import fields as kernels
from ..units import KMS_PER_MASYR_KPC, strip

__all__ = ["GRID_ERROR", "STEPS", "Grid", "RemnantField"]

#: what one unit of a stored integer stands for: of ln density, of velocity [km/s], of correlation, of share
STEPS = np.array([0.01, 1.0, 0.04, 0.002])
_BATCH_STEP = 1e-3
_FORMAT = "lensrate remnant field 2"
_WAY_OUT = "fetch it again, or make one with 'lensrate synthesize'"
_ENDS = ("escaped", "beyond_20_kpc", "outside_grid")


#: largest error of a column through the default grid's own cells, measured in tests/remnants/test_fields.py
GRID_ERROR = 0.005


@dataclass(frozen=True)
class Grid:
    """Cells of the fields; see `kernels.fields`.

    Parameters
    ----------
    R_max, R_scale, z_max, z_scale : float  [kpc]
        Ends, and lengths below which cells stay even.
    n_R, n_z, n_phi : int
        Cells; those in azimuth over half a turn. Even numbers.
    R_four : float  [kpc]
        Inside, a cell holds four Gaussians, outside two.
    """

    R_max: float = 20.0
    R_scale: float = 1.0
    n_R: int = 40
    z_max: float = 6.0
    z_scale: float = 0.15
    n_z: int = 24
    n_phi: int = 18
    R_four: float = 2.5

    def pack(self):
        """Return the kernel's row of seven numbers."""
        per_R = self.n_R / np.arcsinh(self.R_max / self.R_scale)
        per_z = self.n_z / np.arcsinh(self.z_max / self.z_scale)
        return np.array([self.R_scale, per_R, self.n_R, self.z_scale, per_z, self.n_z, self.n_phi], dtype=float)

    @property
    def n_four(self):
        """Number of radii whose cells hold four Gaussians."""
        return min(self.n_R - 1, int(np.arcsinh(self.R_four / self.R_scale) * self.pack()[1]))

    def edges(self):
        """Return the edges in R and |z| [kpc]."""
        per_R, per_z = self.pack()[[1, 4]]
        return (
            self.R_scale * np.sinh(np.arange(self.n_R + 1) / per_R),
            self.z_scale * np.sinh(np.arange(self.n_z + 1) / per_z),
        )

    def centres(self):
        """Return R and |z| [kpc] and azimuth from the bar's major axis [rad] of the cells' middles, in index space."""
        per_R, per_z = self.pack()[[1, 4]]
        return (
            self.R_scale * np.sinh((np.arange(self.n_R) + 0.5) / per_R),
            self.z_scale * np.sinh((np.arange(self.n_z) + 0.5) / per_z),
            (np.arange(self.n_phi) + 0.5) * np.pi / self.n_phi,
        )

    def volumes(self):
        """Return the volume behind each cell, its four images together, shape (n_R, n_z, 1) [kpc^3]."""
        R, z = self.edges()
        return (2 * np.pi / self.n_phi) * np.diff(R**2)[:, None, None] * np.diff(z)[None, :, None]


@dataclass(frozen=True, eq=False)
class RemnantField:
    """Density and velocity of remnants of each component and kick bin, per remnant born.

    Parameters
    ----------
    components : tuple of str
        Elements of the Galaxy set.
    kick_edges : ndarray, shape (k + 1,)  [km/s]
        Bin 0 of the fields is unkicked, bin i holds kicks between edges i - 1 and i.
    grid : Grid
    ln_rho : ndarray of int16, shape (c, k + 1, n_R, n_z, n_phi)
        Of the cells' nodes.
    four, two : ndarray of int16
        Gaussians, shapes (c, k + 1, n_four, n_z, n_phi, 4, 10) and (c, k + 1, n_R - n_four, n_z, n_phi, 2, 10).
    batches : ndarray of int16, shape (c, k + 1, b, n_R / 2, n_z / 2, n_phi / 2)
        Each batch's density over the mean, in blocks of eight cells, in thousandths.
    ends : dict of str to ndarray, shape (c, k + 1)
        Shares "escaped" (unbound at the end of the window), "beyond_20_kpc" and "outside_grid".
    heights : ndarray, shape (c, k + 1, h)
        Share of the born that is bound and within 1.5 kpc of the Sun's radius, by |z| between `height_edges`.
    height_edges : ndarray, shape (h + 1,)  [kpc]
    bar_angle : float  [rad]
    mismatch : dict
        By component: how well the orbits hold the stars, and synthesised over wanted density by region.
    provenance : dict
        How it was made: sets, numbers, version, seed.
    """

    components: tuple
    kick_edges: np.ndarray
    grid: Grid
    ln_rho: np.ndarray
    four: np.ndarray
    two: np.ndarray
    batches: np.ndarray
    ends: dict
    heights: np.ndarray
    height_edges: np.ndarray
    bar_angle: float
    mismatch: dict = field(default_factory=dict)
    provenance: dict = field(default_factory=dict)

    @property
    def n_elements(self):
        """Number of components times kick bins, the unkicked one included."""
        return self.ln_rho.shape[0] * self.ln_rho.shape[1]

    def element(self, component, kick_bin):
        """Return the number of an element, in the order of rows.

        Parameters
        ----------
        component : str
        kick_bin : int
            0 unkicked, then the bins of `kick_edges`.

        Returns
        -------
        int
            Its Gaussians are rows 4 e to 4 e + 3 of `profile` and `rows`.
        """
        one_of("component", component, self.components)
        if not 0 <= kick_bin < self.ln_rho.shape[1]:
            raise InputError(f"kick_bin: {kick_bin} given, 0 to {self.ln_rho.shape[1] - 1} allowed")
        return self.components.index(component) * self.ln_rho.shape[1] + kick_bin

    def _arrays(self):
        azimuth = np.pi - self.bar_angle  # of the near end, seen from the centre with the Sun at x < 0
        flat = (a.reshape(self.n_elements, *a.shape[2:]) for a in (self.ln_rho, self.four, self.two))
        return azimuth, self.grid.pack(), STEPS, *flat

    def profile(self, line, D):
        """Return density and motion along a sightline, like `Galaxy.profile`.

        Parameters
        ----------
        line : Sightline3D
        D : ndarray, any shape  [kpc]

        Returns
        -------
        ndarray, shape (6, 4 * n_elements, *D.shape)
            Density [1/kpc^3 per remnant born], mu_l, mu_b [mas/yr], C_ll, C_lb, C_bb [(mas/yr)^2], seen from the Sun.
        """
        D = np.ascontiguousarray(D, dtype=float)
        out = np.empty((6, kernels.PARTS * self.n_elements, D.size))
        kernels.field_profile(D.ravel(), line.origin, line.axes, line.v_sun, KMS_PER_MASYR_KPC, *self._arrays(), out)
        return out.reshape(6, -1, *D.shape)

    def rows(self, x, y, z):
        """Return density and velocity of every element's Gaussians at points.

        Parameters
        ----------
        x, y, z : Quantity, shape (n,)
            Galactocentric.

        Returns
        -------
        density : Quantity [1 / kpc3], shape (4 * n_elements, n)
            Per remnant born; none where cells hold fewer.
        mean : Quantity [km / s], shape (4 * n_elements, n, 3)
        tensor : Quantity [km2 / s2], shape (4 * n_elements, n, 6)
            xx yy zz xy xz yz.
        """
        points = np.column_stack([np.atleast_1d(strip(n, q, "kpc")) for n, q in zip("xyz", (x, y, z))])
        out = np.empty((kernels.PARTS * self.n_elements, len(points), kernels.Q))
        kernels.field_rows(points, *self._arrays(), out)
        return out[..., 0] / u.kpc**3, out[..., 1:4] * (u.km / u.s), out[..., 4:] * (u.km / u.s) ** 2

    def density(self, component, kick_weights, x, y, z):
        """Return the density of one component's remnants under a kick law, per remnant born.

        Parameters
        ----------
        component : str
        kick_weights : array_like, shape (k + 1,)
            Shares: unkicked, then each bin.
        x, y, z : Quantity, shape (n,)
            Galactocentric.

        Returns
        -------
        Quantity [1 / kpc3], shape (n,)
        """
        weights = np.asarray(kick_weights, dtype=float)
        if weights.shape != (self.ln_rho.shape[1],):
            raise InputError(f"kick_weights: shape {weights.shape} given, ({self.ln_rho.shape[1]},) needed")
        first = self.element(component, 0)
        rho = self.rows(x, y, z)[0].reshape(self.n_elements, kernels.PARTS, -1).sum(axis=1)
        return weights @ rho[first : first + weights.size]

    def batch_factors(self, x, y, z):
        """Return each batch's density over the mean near points; their scatter is the sampling error.

        Parameters
        ----------
        x, y, z : ndarray, shape (n,)  [kpc]
            Galactocentric.

        Returns
        -------
        ndarray, shape (batches, n_elements, n)
            One where nothing is stored. The error of a mean is the scatter over the square root of the batches.
        """
        a_R, per_R, n_R, a_z, per_z, n_z, n_phi = self.grid.pack()
        i = np.minimum(np.arcsinh(np.hypot(x, y) / a_R) * per_R, n_R - 1).astype(int) // 2
        j = np.minimum(np.arcsinh(np.abs(z) / a_z) * per_z, n_z - 1).astype(int) // 2
        phi = (np.arctan2(y, x) - np.pi + self.bar_angle) / np.pi * n_phi
        k = (np.floor(phi).astype(int) % int(n_phi)) // 2
        flat = self.batches.reshape(self.n_elements, *self.batches.shape[2:])
        return np.moveaxis(flat[:, :, i, j, k], 0, 1) * _BATCH_STEP

    def write(self, path, overwrite=False):
        """Write one FITS file, whole or not at all.

        Parameters
        ----------
        path : str or Path
            Ending in ``.fits``.
        overwrite : bool

        Returns
        -------
        Path

        Raises
        ------
        InputError, DataFileError
            See `io.check_target` and `io.whole_file`.
        """
        from astropy.io import fits

        path = check_target(path, (".fits",), overwrite)
        made = {
            "format": _FORMAT,
            "components": list(self.components),
            "kick_edges_kms": [float(e) for e in self.kick_edges],
            "grid": vars(self.grid),
            "height_edges_kpc": [float(e) for e in self.height_edges],
            "bar_angle_rad": self.bar_angle,
            "mismatch": self.mismatch,
            "provenance": self.provenance,
        }
        primary = fits.PrimaryHDU()
        primary.header["LRFIELD"] = (_FORMAT, "what this file is")
        hdus = [primary, fits.ImageHDU(np.frombuffer(json.dumps(made).encode(), dtype=np.uint8), name="MADE")]
        cubes = {"LN_RHO": self.ln_rho, "BATCHES": self.batches}
        cubes |= {name: _last_first(cube) for name, cube in (("FOUR", self.four), ("TWO", self.two))}
        for name, cube in cubes.items():
            flat = cube.reshape(-1, np.prod(cube.shape[-3:]))
            tile = (1, flat.shape[1])
            hdus.append(fits.CompImageHDU(flat, name=name, compression_type="RICE_1", tile_shape=tile))
        hdus.append(fits.ImageHDU(np.stack([self.ends[k] for k in _ENDS]), name="ENDS"))
        hdus.append(fits.ImageHDU(self.heights, name="HEIGHTS"))
        with whole_bytes(path) as buffer:
            fits.HDUList(hdus).writeto(buffer, checksum=True)
        return path

    @classmethod
    def read(cls, path):
        """Read a field file and check that it is whole.

        Parameters
        ----------
        path : str or Path

        Returns
        -------
        RemnantField

        Raises
        ------
        DataFileError
            Missing, damaged, or not a field file.
        """
        import warnings

        from astropy.io import fits
        from astropy.utils.exceptions import AstropyWarning

        try:
            with warnings.catch_warnings():
                warnings.simplefilter("error", AstropyWarning)  # a wrong checksum is a warning there, an error here
                # the file is opened here, since astropy leaves it open where a checksum is wrong
                with open(path, "rb") as handle:
                    reason = check_fits(handle, os.fstat(handle.fileno()).st_size)
                    if reason:
                        raise ValueError(reason)
                with open(path, "rb") as handle, fits.open(handle, checksum=True, memmap=False) as hdus:
                    if hdus[0].header.get("LRFIELD") != _FORMAT:
                        found = hdus[0].header.get("LRFIELD", "no such mark")
                        raise DataFileError(
                            f"{path}: not a file of form '{_FORMAT}', which is read here (found: {found}); {_WAY_OUT}"
                        )
                    return cls._from_hdus(hdus)
        except DataFileError:
            raise
        except FileNotFoundError:
            raise DataFileError(f"{path}: no such file; make one with 'lensrate synthesize'") from None
        except Exception as error:  # a damaged file makes astropy raise many kinds; all mean that it cannot be used
            reason = " ".join(str(error).split())[:120]
            raise DataFileError(f"{path}: damaged or not a field file ({reason}); {_WAY_OUT}") from None

    @classmethod
    def _from_hdus(cls, hdus):
        made = json.loads(hdus["MADE"].data.tobytes().decode())
        grid = Grid(**made["grid"])
        shape = (len(made["components"]), len(made["kick_edges_kms"]))
        cells = (grid.n_z, grid.n_phi)
        ln_rho, four, two = (np.array(hdus[n].data, dtype=np.int16) for n in ("LN_RHO", "FOUR", "TWO"))
        ends, heights = (np.array(hdus[n].data, dtype=float) for n in ("ENDS", "HEIGHTS"))
        batches = np.array(hdus["BATCHES"].data, dtype=np.int16)
        _check_numbers(grid, made, ends, heights)
        return cls(
            components=tuple(made["components"]),
            kick_edges=np.array(made["kick_edges_kms"]),
            grid=grid,
            ln_rho=ln_rho.reshape(*shape, grid.n_R, *cells),
            four=_first_last(four.reshape(*shape, 4, 10, grid.n_four, *cells)),
            two=_first_last(two.reshape(*shape, 2, 10, grid.n_R - grid.n_four, *cells)),
            batches=batches.reshape(*shape, -1, grid.n_R // 2, grid.n_z // 2, grid.n_phi // 2),
            ends=dict(zip(_ENDS, ends)),
            heights=heights,
            height_edges=np.array(made["height_edges_kpc"]),
            bar_angle=made["bar_angle_rad"],
            mismatch=made["mismatch"],
            provenance=made["provenance"],
        )


def _check_numbers(grid, made, *tables):
    """Raise where a file that is whole holds what the kernels must not be given."""
    cells = [grid.n_R, grid.n_z, grid.n_phi]
    lengths = [grid.R_max, grid.R_scale, grid.z_max, grid.z_scale, grid.R_four]
    edges = np.array(made["kick_edges_kms"], dtype=float)
    heights = np.array(made["height_edges_kpc"], dtype=float)
    if not all(isinstance(n, int) and 2 <= n <= 10_000 and n % 2 == 0 for n in cells):
        raise ValueError("impossible numbers of cells")
    if not all(isinstance(x, (int, float)) and 0 < x < 1e6 for x in lengths):
        raise ValueError("an impossible grid")
    if not (np.all(np.isfinite(edges)) and np.all(np.diff(edges) > 0) and edges[0] >= 0):
        raise ValueError("kick speeds that do not rise")
    # the first and the last height may be open
    if not np.all(np.diff(heights) > 0) or not np.isfinite(made["bar_angle_rad"]):
        raise ValueError("an impossible geometry")
    if not all(np.all(np.isfinite(t)) for t in tables):
        raise ValueError("shares that are no numbers")


def _last_first(gaussians):
    """Put a cell's part and number before the cells: neighbouring cells are alike, which packs well."""
    return np.ascontiguousarray(np.moveaxis(gaussians, (-2, -1), (2, 3)))


def _first_last(gaussians):
    """Undo `_last_first`, so that the numbers of a Gaussian are neighbours in memory."""
    return np.ascontiguousarray(np.moveaxis(gaussians, (2, 3), (-2, -1)))
