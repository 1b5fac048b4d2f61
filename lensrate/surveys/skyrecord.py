"""What a sky map holds: numbers of many directions, as table, images, picture or plain numbers."""

from dataclasses import dataclass

import astropy.units as u
import numpy as np

from .._version import __version__
from ..errors import InputError, one_of
from ..io import TABLES, check_target, write_table
from ..scenario import Scenario
from ..sources.rules import parse_rule
from ..units import DAYS_PER_YEAR
from . import mapfiles
from .skygrid import SkyGrid

__all__ = ["Quantities", "SkyMap", "known_names"]

_ARCMIN2_PER_DEG2 = 3600.0


def known_names(classes, scenario):
    """Return every name that `SkyMap.quantities` of a scenario may have, before there is a map."""
    stems = ("optical_depth", "rate", "rate_standard_error", "mean_t_E", "share", "rate_per_deg2")
    stems += ("detected_rate", "detected_per_deg2")
    by_class = [f"{stem}_{name}" for stem in stems for name in classes if (stem, name) != ("share", "all")]
    return [
        *by_class,
        "source_density",
        "rate_factor",
        "mean_source_distance",
        f"A_{getattr(parse_rule(scenario.sources), 'band', 'I')}",
    ]


@dataclass(frozen=True, eq=False)
class Quantities:
    """Values of one quantity over all pixels.

    Attributes
    ----------
    values : ndarray, shape (n,)
    unit : Unit
    description : str
    """

    values: np.ndarray
    unit: u.Unit
    description: str


@dataclass(frozen=True, eq=False)
class SkyMap:
    """Optical depth, rates and sources of many directions.

    Attributes
    ----------
    l, b : Quantity, shape (n,)
        Pixel centres, row by row in b.
    names : tuple of str
        Of the fields; empty on a grid.
    grid : SkyGrid or None
    classes : tuple of str
        The five, the user's own, and "all".
    optical_depth, rate : ndarray, shape (classes, n)
        For u < 1; per source star and year within u_0_limit. NaN where no star passes the source rule.
    rate_standard_error : ndarray, shape (classes, n)
        Sampling error of the fields; NaN for classes that follow the stars.
    detected : ndarray, shape (classes, n), or None
        Rate times efficiency.
    source_density, mean_source_distance, extinction : ndarray, shape (n,)
        Per square arcminute, kpc, mag; NaN where they do not apply.
    extinction_band : str
    efficiency : str
        Its statements in a line, empty without one.
    rate_factor, area_deg2 : ndarray, shape (n,), or None
        Of a campaign's fields: mean rate over the field against its centre's, and the area that counts.
    campaign : dict or None
        Name, hash and text of the campaign.
    warnings, references : tuple of str
    """

    l: u.Quantity
    b: u.Quantity
    names: tuple
    grid: SkyGrid | None
    scenario: Scenario
    classes: tuple
    optical_depth: np.ndarray
    rate: np.ndarray
    rate_standard_error: np.ndarray
    detected: np.ndarray | None
    source_density: np.ndarray
    mean_source_distance: np.ndarray
    extinction: np.ndarray
    extinction_band: str
    efficiency: str = ""
    kinematics: dict | None = None
    fields: dict | None = None
    rate_factor: np.ndarray | None = None
    area_deg2: np.ndarray | None = None
    campaign: dict | None = None
    warnings: tuple = ()
    references: tuple = ()
    frame: str = "heliocentric"
    version: str = __version__

    @property
    def size(self):
        """Number of pixels or fields."""
        return self.l.size

    def _number(self, name):
        return self.classes.index(one_of("class", name, self.classes))

    def mean_t_E(self, name="all"):
        """Return (2/pi) tau u_0/Gamma of a class [d], (n,): the mean timescale without efficiency."""
        c = self._number(name)
        tau, rate = self.optical_depth[c], self.rate[c]
        scale = 2.0 / np.pi * self.scenario.u_0_limit * DAYS_PER_YEAR
        return np.divide(scale * tau, rate, out=np.full(rate.shape, np.nan), where=rate > 0)

    def share(self, name):
        """Return a class's share of the rate of all, (n,)."""
        c, total = self._number(name), self.rate[-1]
        return np.divide(self.rate[c], total, out=np.full(total.shape, np.nan), where=total > 0)

    def per_deg2(self, name="all", detected=False):
        """Return events per square degree and year, (n,): rate per star times the surface density of source stars.

        Parameters
        ----------
        name : str
            Class.
        detected : bool
            With the efficiency.

        Raises
        ------
        InputError
            No efficiency was given, or the source rule does not count stars.
        """
        if not np.any(np.isfinite(self.source_density)):
            raise InputError(
                f"sources: rule '{self.scenario.sources}' does not count stars, so there is no rate per square degree; "
                "take limit:I=21 or clump"
            )
        if detected and self.detected is None:
            raise InputError("efficiency: none was given; add --efficiency FILE")
        rate = (self.detected if detected else self.rate)[self._number(name)]
        density = self.source_density * _ARCMIN2_PER_DEG2
        if self.rate_factor is not None:
            rate = rate * self.rate_factor
        # no stars, no events, although a rate per star has no meaning there
        return np.where(density == 0, 0.0, rate * density)

    def quantities(self):
        """Return every quantity of the map by name.

        Returns
        -------
        dict of str to Quantities
            optical_depth_CLASS, rate_CLASS and so on, then sources.
        """
        per_yr, area = 1 / u.yr, 1 / (u.yr * u.deg**2)
        limit = f"u_0 < {self.scenario.u_0_limit:g}"
        counts = bool(np.any(np.isfinite(self.source_density)))
        out = {}

        def add(name, values, unit, text):
            out[name] = Quantities(np.asarray(values, dtype=float), u.Unit(unit), text)

        for c, name in enumerate(self.classes):
            who = name.replace("_", " ")
            add(f"optical_depth_{name}", self.optical_depth[c], "", f"optical depth of {who}, u < 1")
            add(f"rate_{name}", self.rate[c], per_yr, f"events per source star and year, {limit}, lenses: {who}")
            if np.any(np.isfinite(self.rate_standard_error[c])):
                text = f"sampling error of the fields in the rate of {who}"
                add(f"rate_standard_error_{name}", self.rate_standard_error[c], per_yr, text)
            add(f"mean_t_E_{name}", self.mean_t_E(name), "d", f"(2/pi) tau/Gamma of {who}")
            if name != "all":
                add(f"share_{name}", self.share(name), "", f"share of {who} in the rate of all classes")
            if counts:
                text = f"events per square degree and year, no efficiency, lenses: {who}"
                add(f"rate_per_deg2_{name}", self.per_deg2(name), area, text)
            if self.detected is not None:
                add(f"detected_rate_{name}", self.detected[c], per_yr, f"rate times efficiency, lenses: {who}")
                if counts:
                    text = f"events per square degree and year times efficiency, lenses: {who}"
                    add(f"detected_per_deg2_{name}", self.per_deg2(name, True), area, text)
        if counts:
            text = f"source stars, {self.scenario.sources}"
            add("source_density", self.source_density, 1 / u.arcmin**2, text)
        if self.rate_factor is not None:
            add("rate_factor", self.rate_factor, "", "source-weighted mean rate over the field against its centre's")
        add("mean_source_distance", self.mean_source_distance, "kpc", "mean distance of the sources")
        if self.extinction_band:
            text = f"extinction used in {self.extinction_band}, at the distance of the Galactic centre"
            add(f"A_{self.extinction_band}", self.extinction, "mag", text)
        return out

    def image(self, name):
        """Return a quantity as an image, (n_b, n_l), l increasing to the left, first row at the lowest b.

        Raises
        ------
        InputError
            Unknown quantity, or a list of fields.
        """
        if self.grid is None:
            raise InputError("image: a list of fields is no image")
        quantities = self.quantities()
        return self.grid.image(quantities[one_of("quantity", name, quantities)].values)

    def header(self):
        """Return the line that stands above every table."""
        each = "pixel" if self.grid is not None else "field"
        dust = f"A_{self.extinction_band} by {each}" if self.extinction_band else "no dust used"
        end = f"; {self.efficiency}" if self.efficiency else "; no efficiency"
        if self.campaign is not None:
            end += f"; stars and areas of campaign {self.campaign['campaign']}"
        return f"sources {self.scenario.sources} ({dust}); u_0 < {self.scenario.u_0_limit:g}; {self.frame}{end}"

    def meta(self):
        """Return how this was made.

        Returns
        -------
        dict
        """
        return {
            "program": "lensrate",
            "version": self.version,
            "header": self.header(),
            "grid": None if self.grid is None else vars(self.grid),
            **(self.campaign or {}),
            **self.scenario.made(),
            "seed": None,
            "fields": self.fields,
            "kinematics": self.kinematics,
            "efficiency": self.efficiency or None,
            "warnings": list(self.warnings),
            "references": list(self.references),
        }

    def to_table(self):
        """Return a table, a row per pixel or field.

        Returns
        -------
        astropy.table.QTable
            Columns name (of fields), l, b, and those of `quantities`.
        """
        from astropy.table import QTable

        table = QTable()
        if self.names:
            table["name"] = list(self.names)
        table["l"], table["b"] = self.l, self.b
        for name, q in self.quantities().items():
            table[name] = q.values if q.unit == u.one else q.values * q.unit
            table[name].info.description = q.description
        table.meta.update(self.meta())
        return table

    def to_pandas(self):
        """Return `to_table` as a pandas DataFrame, units dropped."""
        import pandas as pd

        table = self.to_table()
        return pd.DataFrame({c: getattr(table[c], "value", np.asarray(table[c])) for c in table.colnames})

    def to_fits(self):
        """Return FITS images with a celestial WCS, one extension for each quantity; see `mapfiles.hdu_list`."""
        return mapfiles.hdu_list(self)

    def to_dict(self):
        """Return plain numbers under the keys of ``lensrate skymap --json``.

        Returns
        -------
        dict
            grid, quantities (unit and description by name), pixels (a list of numbers by name), meta.
        """
        quantities = self.quantities()
        l, b = self.l.to_value(u.deg), self.b.to_value(u.deg)
        pixels = []
        for i in range(self.size):
            pixel = {"name": self.names[i]} if self.names else {}
            pixel |= {"l_deg": float(l[i]), "b_deg": float(b[i])}
            pixels.append(pixel | {name: float(q.values[i]) for name, q in quantities.items()})
        return {
            "grid": None if self.grid is None else {**vars(self.grid), "shape": list(self.grid.shape)},
            "quantities": {n: {"unit": str(q.unit), "description": q.description} for n, q in quantities.items()},
            "pixels": pixels,
            "meta": self.meta(),
        }

    def write(self, path, overwrite=False):
        """Write the map: ``.fits`` as images (of a grid) or a table (of fields), ``.ecsv .csv .vot .json`` as a table.

        Returns
        -------
        Path

        Raises
        ------
        InputError, DataFileError
            See `io.check_target` and `io.whole_file`.
        """
        path = check_target(path, TABLES, overwrite)
        if path.suffix.lower() == ".fits" and self.grid is not None:
            return mapfiles.write_fits(self, path, overwrite)
        return write_table(self.to_table(), path, overwrite, payload=self.to_dict())

    def plot(self, ax=None, quantity="rate_all", overlay=(), **style):
        """Draw one quantity, l increasing to the left; see `plots.maps.skymap`.

        Returns
        -------
        matplotlib Axes
        """
        import importlib

        # plots stands above this module, and only a drawing needs it
        return importlib.import_module("lensrate.plots.maps").skymap(self, ax, quantity, overlay, **style)

    def __repr__(self):
        where = f"{self.size} fields" if self.grid is None else "{} x {} pixels (b x l)".format(*self.grid.shape)
        return f"<SkyMap {where}, scenario '{self.scenario.name}' ({self.scenario.hash}): {self.header()}>"
