"""The record of a mock catalogue: columns with units and meanings, tables, how it was made."""

from dataclasses import dataclass, replace
from functools import cached_property

import astropy.units as u
import numpy as np

from .._version import __version__
from ..errors import InputError
from ..units import DAYS_PER_YEAR

__all__ = ["COLUMNS", "MockEvents"]

#: unit and meaning of every column; {band} stands for the band of the source rule
COLUMNS = {
    "event": ("", "number of the event, from 1"),
    "field": ("", "name of the campaign's field"),
    "lens": ("", "lens class"),
    "component": ("", "Galactic component that the lens was born in"),
    "M_L": ("Msun", "lens mass"),
    "D_L": ("kpc", "lens distance"),
    "D_S": ("kpc", "source distance"),
    "source_component": ("", "Galactic component of the source"),
    "mu_rel_l": ("mas/yr", "heliocentric proper motion of lens minus source along l (with cos b)"),
    "mu_rel_b": ("mas/yr", "the same along b"),
    "mu_rel_N": ("mas/yr", "the same toward North"),
    "mu_rel_E": ("mas/yr", "the same toward East (with cos dec)"),
    "mu_L_l": ("mas/yr", "heliocentric proper motion of the lens along l (with cos b)"),
    "mu_L_b": ("mas/yr", "the same along b"),
    "mu_S_l": ("mas/yr", "heliocentric proper motion of the source along l (with cos b)"),
    "mu_S_b": ("mas/yr", "the same along b"),
    "t_E": ("d", "heliocentric Einstein timescale"),
    "theta_E": ("mas", "angular Einstein radius"),
    "pi_E": ("", "microlens parallax"),
    "pi_EN": ("", "microlens parallax along the heliocentric motion, toward North"),
    "pi_EE": ("", "the same toward East"),
    "t_0": ("d", "time of peak, MJD (TDB): closest approach of the geocentric line, with t_0par = t_0"),
    "u_0": ("", "impact parameter of that line in Einstein radii; above 0: the lens has the source to its right"),
    "t_E_geo": ("d", "geocentric Einstein timescale, t_0par = t_0"),
    "pi_EN_geo": ("", "microlens parallax along the geocentric motion, t_0par = t_0, toward North"),
    "pi_EE_geo": ("", "the same toward East"),
    "{band}_S": ("mag", "source magnitude, extinction included; nan: not known of such sources"),
    "{band}_L": ("mag", "lens magnitude, extinction included; inf: no light (brown dwarfs and the dark)"),
    "{band}_base": ("mag", "magnitude at baseline: source, lens and stated blend"),
    "{band}_peak": ("mag", "magnitude at peak of a point source, lens and blend included"),
    "weight": ("", "what the event stands for"),
    "efficiency": ("", "chance that the campaign finds it"),
    "detected": ("", "whether it does"),
}


@dataclass(frozen=True, eq=False)
class MockEvents:
    """A mock catalogue.

    Attributes
    ----------
    columns : dict of str to ndarray, (n,) each
        As `COLUMNS`, in its units; lens, component, source_component and field as indices into the lists below; and
        birth, the uniform number behind the age of a white dwarf, which no table shows.
    classes, components, field_names : list of str
    band : str
        Of the magnitudes.
    weighted : bool
        Whether weights differ.
    seed : int or str
        Gives the same catalogue again, whatever the number of threads.
    forecast : Sightline or CampaignForecast
        What the events were drawn from.
    unit : str
        Of the weight: "1/yr", events per source and year, or "", expected events of the campaign.
    blend : float or None
        Further light in the source's place [mag].
    selected : str
        Which of the drawn events these are; empty: all.
    """

    columns: dict
    classes: list
    components: list
    field_names: list
    band: str
    weighted: bool
    seed: object
    forecast: object
    unit: str
    blend: float | None = None
    selected: str = ""
    frame: str = "heliocentric; t_0, u_0 and columns on _geo: geocentric with t_0par = t_0"
    version: str = __version__

    def __len__(self):
        return self.columns["weight"].size

    def __getitem__(self, name):
        """Return a column as floats, or as words for lens, component, source_component and field."""
        words = {
            "lens": self.classes,
            "component": self.components,
            "source_component": [*self.components, ""],
            "field": self.field_names,
        }
        if name == "event":
            return np.arange(1, len(self) + 1)
        if name not in self.columns:
            raise InputError(f"events: no column '{name}' (known: {', '.join(self.names)})")
        return np.array(words[name])[self.columns[name]] if name in words else self.columns[name]

    @property
    def names(self):
        """Names of the columns, in order."""
        named = (key.format(band=self.band) for key in COLUMNS)
        return ["event", *(key for key in named if key in self.columns)]

    @cached_property
    def by_class(self):
        """Number of events, weight and weight of those detected by lens class, (classes, 3)."""
        lens, weight = self.columns["lens"], self.columns["weight"]
        found = self.columns.get("detected", np.ones(len(self), dtype=bool))
        n = len(self.classes)
        each = (np.ones(len(self)), weight, weight * found)
        return np.column_stack([np.bincount(lens, w, minlength=n) for w in each])

    def select(self, chosen, words="a selection"):
        """Return a catalogue of some events only; numbers and weights stay as they are.

        Parameters
        ----------
        chosen : ndarray of bool or int
            As an index of the columns.
        words : str
            Which they are, for header and metadata.

        Returns
        -------
        MockEvents
        """
        said = ", ".join(filter(None, [self.selected, words]))
        return replace(self, columns={key: column[chosen] for key, column in self.columns.items()}, selected=said)

    def found(self):
        """Return the events that the campaign finds.

        Raises
        ------
        InputError
            A sightline's catalogue, of which nothing says what is found.
        """
        if "detected" not in self.columns:
            raise InputError("events: no campaign says which events are found")
        return self.select(self["detected"], "only those that the campaign finds")

    def expected(self):
        """Return the integrated number by class behind the draws: rate per source and year, or a campaign's events.

        A campaign's are those that happen, found or not.
        """
        if self.unit:
            return {name: self.forecast.lenses[name].rate for name in self.classes}
        survey, total = self.forecast.campaign, np.zeros(len(self.classes))
        years = survey.calendar.exposure(survey.efficiency.includes).sum() / DAYS_PER_YEAR
        for f in self.forecast.fields:
            rate = np.array([f.sightline.lenses[name].rate for name in self.classes])
            total += f.sources * f.rate_factor * years * rate
        return dict(zip(self.classes, map(float, total)))

    def header(self):
        """Return what stands above every table."""
        kind = "weighted" if self.weighted else "unweighted"
        made = f"{len(self)} {kind} events{', ' * bool(self.selected)}{self.selected}, seed {self.seed}"
        drawn = {} if self.selected or not self.field_names else {"drawn": True}
        return f"{made}; {self.forecast.header(**drawn)}; t_0, u_0, *_geo geocentric at t_0"

    def meta(self):
        """Return how this was made, for the metadata of tables and pictures."""
        words = {"1/yr": "events per source star and year", "": "events of the campaign, found or not"}
        return {
            **self.forecast.meta(),
            "header": self.header(),
            "seed": self.seed,
            "number": len(self),
            "weighted": self.weighted,
            "selected": self.selected or "all",
            "weight": words[self.unit],
            "band": self.band,
            "blend_mag": self.blend,
            "frame": self.frame,
            "t_0": "MJD (TDB)",
            "t_0par": "t_0",
        }

    def to_table(self):
        """Return the catalogue, a row per event.

        Returns
        -------
        astropy.table.QTable
            Columns of `COLUMNS` with units and descriptions.
        """
        from astropy.table import QTable

        table = QTable()
        described = {key.format(band=self.band): row for key, row in COLUMNS.items()}
        for name in self.names:
            unit, text = described[name]
            unit = self.unit if name == "weight" else unit
            table[name] = self[name] << u.Unit(unit) if unit else self[name]
            table[name].info.description = text if name != "weight" else self.meta()["weight"]
        table.meta.update(self.meta())
        return table

    def to_pandas(self):
        """Return the catalogue as a pandas DataFrame indexed by event, units dropped.

        Returns
        -------
        pandas.DataFrame
        """
        import pandas as pd

        return pd.DataFrame({name: self[name] for name in self.names}).set_index("event")

    def to_dict(self):
        """Return plain numbers, what ``lensrate events --json`` prints.

        Returns
        -------
        dict
        """
        described = {key.format(band=self.band): row for key, row in COLUMNS.items()}
        meta = self.meta()
        keep = ("seed", "number", "weighted", "selected", "weight", "frame", "t_0", "t_0par")
        each, expected = dict(zip(self.classes, self.by_class.tolist())), self.expected()
        return {
            **{key: meta[key] for key in ("campaign", "campaign_hash", "campaign_text") if key in meta},
            **self.forecast.scenario.made(),
            **{key: meta[key] for key in keep},
            "header": self.header(),
            "lenses": {
                name: {"events": int(n), "weight": w, "detected": d, "expected": expected[name]}
                for name, (n, w, d) in each.items()
            },
            "units": {name: self.unit if name == "weight" else described[name][0] for name in self.names},
            "columns": {name: self[name].tolist() for name in self.names},
            "warnings": meta["warnings"],
            "references": meta["references"],
            "version": self.version,
        }

    def plot(self, ax=None, **style):
        """Draw the events in the plane of t_E and pi_E by lens class; returns Axes."""
        import importlib

        # plots stands above this module, and only a drawing needs it
        return importlib.import_module("lensrate.plots").events(self, ax=ax, **style)

    def _repr_html_(self):
        from html import escape

        return f"<p>{escape(self.header())}</p>" + self.to_table()[:20]._repr_html_()

    def __repr__(self):
        return f"<MockEvents {self.header()}>"
