"""The record of one sightline's forecast: numbers, tables, how it was made, forecasts from the same integrals."""

from dataclasses import dataclass, field
from functools import cached_property
from html import escape

import astropy.units as u
import numpy as np

from .._version import __version__
from ..errors import InputError, one_of
from ..remnants.fields import GRID_ERROR, Grid
from ..scenario import Scenario
from ..sources.rules import PeakRule, parse_rule
from . import distributions
from .forecast import assemble, disc_share, optical_depth_along

__all__ = ["LINEAR", "Sightline"]

#: fields of a scenario that only weigh the integrals
LINEAR = ("kicks", "bh_kicks", "ifmr", "imf", "lens_class", "u_0_limit")


@dataclass(frozen=True, eq=False)
class Sightline:
    """Forecast for one sightline.

    Attributes
    ----------
    l, b : Quantity
        Direction.
    lenses : dict of str to Lens
        The five classes, the user's own, and "all".
    components, elements : dict of str to Lens
        By Galactic component and by its elements, all classes together; optical depth and rate only.
    sources : dict
        Rule, extinction by band, mean distance, share of disc sources, surface density.
    t_E, rate_per_ln_t_E : ndarray, (n,) and (classes, n)
        Timescale [d] and events per source, year and unit ln t_E, within u_0_limit.
    warnings, references : tuple of str
        What to mind; what the numbers rest on.
    quadrature_error : float
        Relative difference of the total rate between the two independent quadratures.
    field_mismatch : float or None
        Systematic error of the kicked fields: optical depth of unkicked neutron stars on the synthesised field over
        that on the stars' own, minus one, on this sightline; None without fields.
    """

    l: u.Quantity
    b: u.Quantity
    scenario: Scenario
    sources: dict
    lenses: dict
    components: dict
    elements: dict
    t_E: np.ndarray
    rate_per_ln_t_E: np.ndarray
    u_0_limit: float = 1.0
    t_E_range: tuple | None = None
    warnings: tuple = ()
    references: tuple = ()
    quadrature_error: float = 0.0
    mass_note: str = ""
    frame: str = "heliocentric"
    version: str = __version__
    field_mismatch: float | None = None
    _model: object = field(default=None, repr=False)
    _integrals: object = field(default=None, repr=False)

    @classmethod
    def of(cls, l, b, scenario, model, integrals, limits):
        """Weigh a sightline's integrals (`forecast.integrate`) by a model's masses and kick laws.

        Parameters
        ----------
        l, b : Quantity
        scenario : Scenario
        model : Model
            Of that scenario.
        integrals : Integrals
        limits : (float, float) or None
            Range of t_E [d].

        Returns
        -------
        Sightline
        """
        ready = integrals.ready
        forecast = assemble(model, integrals, scenario.u_0_limit, limits, f"l = {l:g}, b = {b:g}")
        sources = {
            "rule": ready.sources.rule.text,
            "extinction": dict(ready.sources.extinction),
            "mean_distance_kpc": ready.mean_distance(),
            "disc_share": disc_share(ready),
            "source_density_per_arcmin2": ready.per_arcmin2() if ready.sources.counts_stars else None,
        }
        return cls(
            l=l,
            b=b,
            scenario=scenario,
            sources=sources,
            u_0_limit=scenario.u_0_limit,
            t_E_range=limits,
            references=model.references,
            mass_note=model.mass_note(),
            _model=model,
            _integrals=integrals,
            **forecast,
        )

    @property
    def classes(self):
        """Lens classes in the order of `rate_per_ln_t_E`, without "all"."""
        return [name for name in self.lenses if name != "all"]

    def header(self):
        """Return the line that stands above every table: sources, band, u_0 limit, timescales, frame."""
        limit = "all t_E" if self.t_E_range is None else f"{self.t_E_range[0]:g} < t_E < {self.t_E_range[1]:g} d"
        a = ", ".join(f"A_{band} = {value:.2f}" for band, value in self.sources["extinction"].items()) or "no dust used"
        return f"sources {self.sources['rule']} ({a}); u_0 < {self.u_0_limit:g}; {limit}; {self.frame}"

    def to_dict(self):
        """Return plain numbers under the keys of ``lensrate sightline --json``.

        Returns
        -------
        dict
        """
        lenses = {}
        for name, lens in self.lenses.items():
            lenses[name] = {
                "optical_depth": lens.optical_depth,
                "rate_per_star_per_yr": lens.rate,
                "mean_t_E_d": _none(lens.mean_t_E),
                "median_t_E_d": _none(lens.median_t_E),
                "share_of_events": _none(lens.share_of_events),
                "rate_standard_error": lens.rate_standard_error,
                "kinematics": lens.kinematics,
            }
        parts = {
            name: {"optical_depth": part.optical_depth, "rate_per_star_per_yr": part.rate}
            for name, part in self.components.items()
        }
        return {
            "l_deg": float(self.l.to_value(u.deg)),
            "b_deg": float(self.b.to_value(u.deg)),
            **self.scenario.made(),
            "frame": self.frame,
            "u_0_limit": self.u_0_limit,
            "t_E_range_d": list(self.t_E_range) if self.t_E_range else None,
            "sources": self.sources,
            "lenses": lenses,
            "components": parts,
            "quadrature_error": self.quadrature_error,
            "field_mismatch": _none(self.field_mismatch),
            "fields": self._fields(),
            "velocities": self.velocities(),
            "warnings": list(self.warnings),
            "references": list(self.references),
            "version": self.version,
        }

    def velocities(self):
        """Return a line that says which velocities are used where."""
        stars = (
            "sources, stars, brown dwarfs and white dwarfs: the Galaxy set's kinematic model (white dwarfs' kicks of "
        )
        stars += "under 1 km/s, El-Badry & Rix 2018, are neglected)"
        words = {"kicked": "their own orbits in the Galaxy's potential", "unkicked": "the same, unkicked"}
        words["mixed"] = "those of the components in the fields " + words["kicked"] + ", the others unkicked"
        dark = (f"{n.replace('_', ' ')}s: {words[self.lenses[n].kinematics]}" for n in ("neutron_star", "black_hole"))
        return "; ".join([stars, *dark])

    def kick_words(self):
        """Return the kick laws in a few words."""
        return f"kicks {self.scenario.kicks}, black holes {self.scenario.bh_kicks}"

    def _fields(self):
        """Name and checksum of the kick-resolved fields in use, or None."""
        if self._model is None or self._model.kicked is None:
            return None
        field = self._model.kicked.field
        return {
            "name": self.scenario.fields,
            "sha256": self._model.kicked.sha256,
            "tracers_per_element": field.provenance.get("tracers"),
            "grid_error": GRID_ERROR if field.grid == Grid() else None,
        }

    def meta(self):
        """Return how this was made, for the metadata of tables and pictures.

        Returns
        -------
        dict
        """
        return {
            "program": "lensrate",
            "version": self.version,
            "l_deg": float(self.l.to_value(u.deg)),
            "b_deg": float(self.b.to_value(u.deg)),
            "header": f"{self.header()}; {self.kick_words()}",
            **self.scenario.made(),
            "seed": None,
            "fields": self._fields(),
            "velocities": self.velocities(),
            "field_mismatch": _none(self.field_mismatch),
            "quadrature_error": self.quadrature_error,
            "mass_note": self.mass_note,
            "warnings": list(self.warnings),
            "references": list(self.references),
        }

    def to_table(self, by="class"):
        """Return a table, a row per lens class, component or element.

        Parameters
        ----------
        by : str
            "class", "component" or "element".

        Returns
        -------
        astropy.table.QTable
            Columns lens, optical_depth, rate, mean_t_E, median_t_E, share_of_events, kinematics as far as they apply.

        Raises
        ------
        InputError
            Unknown `by`.
        """
        from astropy.table import QTable

        rows = {"class": self.lenses, "component": self.components, "element": self.elements}
        rows = rows[one_of("by", by, rows)]
        first = "lens" if by == "class" else by
        table = QTable()
        table[first] = list(rows)
        table["optical_depth"] = np.array([r.optical_depth for r in rows.values()])
        table["rate"] = np.array([r.rate for r in rows.values()]) / u.yr
        if by == "class":
            table["rate_standard_error"] = (
                np.array([np.nan if r.rate_standard_error is None else r.rate_standard_error for r in rows.values()])
                / u.yr
            )
            table["mean_t_E"] = np.array([r.mean_t_E for r in rows.values()]) * u.day
            table["median_t_E"] = np.array([r.median_t_E for r in rows.values()]) * u.day
            table["share_of_events"] = np.array([r.share_of_events for r in rows.values()])
            table["kinematics"] = [r.kinematics for r in rows.values()]
        described = {
            first: f"lens {by}",
            "optical_depth": "for u < 1",
            "rate": f"events per source star and year, u_0 < {self.u_0_limit:g}",
            "rate_standard_error": "sampling error of the fields; nan: analytic",
            "mean_t_E": "mean Einstein radius crossing time",
            "median_t_E": "median Einstein radius crossing time",
            "share_of_events": "of the rate of all classes",
            "kinematics": "stellar, kicked, unkicked, or mixed",
        }
        for name in table.colnames:
            table[name].info.description = described[name]
        table.meta.update(self.meta())
        return table

    def to_pandas(self, by="class"):
        """Return `to_table` as a pandas DataFrame, units dropped (1/yr, d).

        Parameters
        ----------
        by : str
            "class", "component" or "element".

        Returns
        -------
        pandas.DataFrame
        """
        table = self.to_table(by)
        import pandas as pd

        return pd.DataFrame({c: getattr(table[c], "value", np.asarray(table[c])) for c in table.colnames}).set_index(
            table.colnames[0]
        )

    def timescales(self):
        """Return the timescale distribution: t_E and events per source, year and unit ln t_E by class.

        Returns
        -------
        astropy.table.QTable
            Columns t_E, one per class, all.
        """
        from astropy.table import QTable

        table = QTable({"t_E": self.t_E * u.day})
        for name, pdf in zip(self.classes, self.rate_per_ln_t_E):
            table[name] = pdf / u.yr
        table["all"] = self.rate_per_ln_t_E.sum(axis=0) / u.yr
        table.meta.update(self.meta())
        return table

    def joint(self, y="pi_E"):
        """Return the two-dimensional distribution (t_E, pi_E) or (t_E, theta_E) by class.

        Parameters
        ----------
        y : str
            "pi_E" or "theta_E".

        Returns
        -------
        t_E, y, density : Quantity (n,), Quantity (m,), dict of str to Quantity (n, m)
            Events per source, year, unit ln t_E and unit ln y, within u_0_limit.

        Raises
        ------
        InputError
            Unknown `y`.
        """
        one_of("y", y, ("pi_E", "theta_E"))
        grid = self._integrals.grid
        masses = distributions.MassGrid.deposit(grid.h, *self._model.by_masses())
        t, values, density = distributions.joint(grid, self._integrals.T, masses, y)
        unit = u.mas if y == "theta_E" else u.one
        named = {name: self.u_0_limit * d / u.yr for name, d in zip(self.classes, density)}
        return t * u.day, values * unit, named

    def reforecast(self, **changes):
        """Return the forecast under other kick laws, class masses or lens classes, from the integrals already done.

        Parameters
        ----------
        **changes
            Any of kicks, bh_kicks, ifmr, imf, lens_class, u_0_limit, as in `Scenario`. The source stars stay as they
            are. Anything else, or a kick where there was none, needs a new `sightline`; so does another u_0_limit of
            ``peak:`` sources, since it decides which stars are magnified enough.

        Returns
        -------
        Sightline

        Raises
        ------
        InputError
            A field that the integrals depend on, or an impossible value.
        """
        for key in changes:
            one_of("reforecast", key, LINEAR)
        scenario = self.scenario.replace(**changes)
        if scenario.u_0_limit != self.u_0_limit and isinstance(parse_rule(scenario.sources), PeakRule):
            raise InputError(
                f"reforecast: u_0_limit {scenario.u_0_limit:g} given; sources {scenario.sources} were weighed for "
                f"{self.u_0_limit:g}, the only one allowed here; run a new sightline"
            )
        if self._model.kicked is None and not scenario.unkicked and scenario.fields:
            raise InputError("reforecast: this forecast is unkicked and holds no fields; run a new sightline")
        model = self._model.changed(scenario)
        return Sightline.of(self.l, self.b, scenario, model, self._integrals, self.t_E_range)

    @cached_property
    def optical_depth_along(self):
        """Optical depth per kpc of lens distance by component: distances [kpc] (n,), dict of name to (n,)."""
        return optical_depth_along(self._model, self._integrals.ready)

    def plot(self, ax=None, kind="timescales", **style):
        """Draw the forecast.

        Parameters
        ----------
        ax : matplotlib Axes, optional
            Made if not given.
        kind : str
            "timescales" (by class, log axes), "stacked", "depth" (optical depth along the sightline), "pi_E" or
            "theta_E" (two-dimensional, by class); or "overview": timescales and depth side by side, on a figure of
            their own.
        **style
            Passed on to the drawing function.

        Returns
        -------
        matplotlib Axes, of an overview the Figure
        """
        import importlib

        # plots stands above this module, and only a drawing needs it
        return importlib.import_module("lensrate.plots").sightline(self, ax=ax, kind=kind, **style)

    def _repr_html_(self):
        l, b = self.l.to_value(u.deg), self.b.to_value(u.deg)
        name = escape(self.scenario.name)
        where = f"l = {l:g}, b = {b:g} deg, scenario {name} ({self.scenario.hash})"
        head = f"<p>lensrate: {where}; {escape(self.kick_words())}<br>{escape(self.header())}</p>"
        return head + _rounded(self.to_table())._repr_html_()

    def __repr__(self):
        total = self.lenses["all"]
        numbers = f"tau={total.optical_depth:.3g}, rate={total.rate:.3g}/yr, mean t_E={total.mean_t_E:.3g} d"
        name = f"'{self.scenario.name}' ({self.scenario.hash}), kicks {self.scenario.kicks}"
        return f"<Sightline l={self.l:.4g}, b={self.b:.4g}, scenario {name}: {self.header()}: {numbers}>"


def _rounded(table):
    for name in table.colnames:
        if table[name].dtype.kind == "f":
            table[name].info.format = ".4g"
    return table


def _none(x):
    return None if x is None or not np.isfinite(x) else float(x)
