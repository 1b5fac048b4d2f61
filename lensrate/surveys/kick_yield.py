"""The yield of a campaign against kick speed: expected events per remnant born, any kick law laid over it."""

from dataclasses import dataclass

import astropy.units as u
import numpy as np

from .._version import __version__
from ..errors import InputError, kind_of, one_of
from ..galaxy.density import stellar_mass
from ..lensing import distributions
from ..remnants.classes import MassSpectrum
from ..remnants.kicks import parse_kick
from ..units import DAYS_PER_YEAR
from .stars import field_curve
from .yields import CampaignForecast

__all__ = ["KickYield", "kick_yield"]

_NAMED = ("hobbs2005", "igoshev2020", "verbunt2017", "disbergmandel2025")


@dataclass(frozen=True, eq=False)
class KickYield:
    """Expected events per remnant born against kick speed.

    Attributes
    ----------
    lens : str
        "neutron_star" or "black_hole".
    edges : ndarray, shape (n + 1,)
        Edges of the kick bins [km/s].
    per_born : ndarray, shape (n + 1,)
        Events per remnant born with such a kick anywhere in the Galaxy: first the unkicked, then each bin.
    sampling : ndarray, shape (n + 1,)
        Sampling error of the fields.
    born : float
        Remnants of this class ever born in the Galaxy, by the scenario.
    law : str
        The scenario's own law; `events` gives its expected number.
    """

    lens: str
    edges: np.ndarray
    per_born: np.ndarray
    sampling: np.ndarray
    born: float
    law: str
    made: dict
    version: str = __version__

    def shares(self, law):
        """Return the share of remnants in each bin under a law, (n + 1,); what is missing from one is faster still.

        Parameters
        ----------
        law : str
            As ``--kicks``.
        """
        weights = parse_kick(law).bin_weights(self.edges)
        return np.append(weights.unkicked, weights.inside)

    def events(self, law):
        """Return the expected events under a law, every remnant of the class born with it."""
        return float(self.born * self.shares(law) @ self.per_born)

    def named(self):
        """Return expected events under each published law, by name."""
        return {name: self.events(name) for name in _NAMED}

    def to_table(self):
        """Return a QTable, a row per bin: speeds, events per remnant born, their error, shares of published laws."""
        from astropy.table import QTable

        table = QTable()
        # the first row is the unkicked, from 0 to 0
        table["kick_low"] = np.append(0.0, self.edges[:-1]) * u.km / u.s
        table["kick_high"] = self.edges * u.km / u.s
        table["events_per_born"] = self.per_born
        table["sampling_error"] = self.sampling
        for name in _NAMED:
            table[f"share_{name}"] = self.shares(name)
            table[f"share_{name}"].info.description = f"share of remnants born in the bin under {name}"
        table[
            "events_per_born"
        ].info.description = f"expected events per {self.lens.replace('_', ' ')} born with such a kick"
        table.meta.update({**self.made, "lens": self.lens, "born": self.born, "events": self.named(), "law": self.law})
        return table

    def to_dict(self):
        """Return plain numbers."""
        return {
            "lens": self.lens,
            "kick_edges_km_s": [0.0, *map(float, self.edges)],
            "events_per_born": list(map(float, self.per_born)),
            "sampling_error": list(map(float, self.sampling)),
            "born": self.born,
            "law": self.law,
            "events_by_law": self.named(),
            **self.made,
        }

    def plot(self, ax=None, **style):
        """Draw the yield with published laws laid over it; returns matplotlib Axes."""
        import importlib

        return importlib.import_module("lensrate.plots").kick_yield(self, ax=ax, **style)


def kick_yield(forecast, lens="neutron_star"):
    """Return the yield of a campaign against kick speed.

    Parameters
    ----------
    forecast : CampaignForecast
        From `campaign`, of a scenario with kick-resolved fields.
    lens : str
        "neutron_star" or "black_hole".

    Returns
    -------
    KickYield

    Raises
    ------
    InputError
        Another class, or a forecast without fields.

    Notes
    -----
    The expected number of events is linear in the shares of the kick bins, so the yield of a bin is the forecast with
    all remnants in it, over the number born; summed with a law's shares it is that law's forecast.
    """
    one_of("lens", lens, ("neutron_star", "black_hole"))
    kind_of("forecast", forecast, CampaignForecast, "a CampaignForecast, from `campaign`,")
    first = forecast.fields[0].sightline._model
    if first.kicked is None:
        raise InputError("kick_yield: the forecast is unkicked; choose a kick law and fields in the scenario")
    edges, hosts = first.kicked.edges, list(first.kicked.host)
    bins = len(edges)
    members = [i for i, p in enumerate(first.populations) if p is not None]
    R0 = first.galaxy.R0
    number = {i: first.populations[i].spectra[lens].moment(0) for i in members}
    born = sum(number[i] * stellar_mass(first.galaxy.components[i].density, R0) for i in members)
    per_born, error = np.zeros(bins), np.zeros(bins)
    for f in forecast.fields:
        integrals, model = f.sightline._integrals, f.sightline._model
        spectra = [[None] * len(model.component_of) for _ in range(bins)]
        for i in members:
            spectrum = model.populations[i].spectra[lens]
            spectrum = MassSpectrum(spectrum.mass, spectrum.number / born, spectrum.initial_mass)
            spectra[0][i] = spectrum
            for k in range(1, bins):
                # a component without fields of its own stays unkicked, as in the forecast
                spectra[k][model.n_stellar + hosts.index(i) + k if i in hosts else i] = spectrum
        masses = distributions.MassGrid.deposit(integrals.grid.h, spectra)
        t, pdf, _ = distributions.timescales(integrals.grid, integrals.unit, masses, False)
        curve = field_curve(forecast.campaign.efficiency, forecast.campaign.u_0_limit, integrals.ready)
        mean = np.array([curve.mean(t, part)[0] for part in pdf])
        years = forecast.campaign.calendar.exposure(curve.includes).sum() / DAYS_PER_YEAR
        exposure = f.sources * f.rate_factor * years * forecast.campaign.u_0_limit
        per_born += exposure * mean * np.sum(masses.root * integrals.gamma, axis=1)
        # the fields share the tracers, so their errors add up as they are
        error += exposure * mean * np.sqrt(np.sum((masses.root * integrals.error) ** 2, axis=1))
    law = forecast.scenario.kicks if lens == "neutron_star" else forecast.scenario.bh_kicks
    return KickYield(lens, np.asarray(edges), per_born, error, float(born), law, forecast.meta())
