"""A scenario resolved: Galaxy, populations and source model built once and shared by everything that runs on it."""

from dataclasses import dataclass
from functools import cached_property

import numpy as np

from ..galaxy.model import Galaxy
from ..remnants.classes import CLASSES, LensClass
from ..remnants.history import History
from ..remnants.ifmr import Ifmr
from ..remnants.imf import Imf
from ..remnants.kicks import parse_kick
from ..remnants.lifetimes import Lifetimes
from ..remnants.population import population
from ..sources.extinction import DustDisc
from ..sources.luminosity import LuminosityFunction, luminosity_function
from ..sources.model import Sources
from ..sources.rules import LimitRule, parse_rule

__all__ = ["Model", "resolve"]

_KEEP = 16  # resolved scenarios kept in memory
_resolved = {}


@dataclass(frozen=True, eq=False)
class Model:
    """Everything a scenario means.

    Attributes
    ----------
    galaxy : Galaxy
    populations : tuple
        Population of each component, None where it is not made of stars.
    own : dict of str to LensClass
        Lens classes beyond the five.
    sources : Sources
    references : tuple of str
    """

    scenario: object
    galaxy: Galaxy
    populations: tuple
    own: dict
    sources: Sources
    references: tuple

    @property
    def classes(self):
        """The five classes and the user's own, in order."""
        return [*CLASSES, *self.own]

    @cached_property
    def _spectra(self):
        out = {}
        for i, (component, pop) in enumerate(zip(self.galaxy.components, self.populations)):
            for name in CLASSES:
                out[name, i] = None if pop is None else pop.spectra[name]
            for name, own in self.own.items():
                rides = component.name in own.rides_on or component.element in own.rides_on
                out[name, i] = own.spectrum(pop) if rides else None
        return out

    def spectrum(self, name, i):
        """Return the MassSpectrum of a class on component i, or None."""
        return self._spectra[name, i]

    def mass_note(self):
        """Return a line on what the stated masses count and the ratio of total to luminous mass."""
        parts = {}
        for component, pop in zip(self.galaxy.components, self.populations):
            if pop is not None:
                parts.setdefault(component.name, []).append((component.counts, pop.total_to_luminous))
        words = []
        for name, rows in parts.items():
            words.append(f"{name} counts {rows[0][0]} (total/luminous {np.mean([r[1] for r in rows]):.2f})")
        return "; ".join(words)


def resolve(scenario):
    """Build, or fetch, what a scenario means.

    Parameters
    ----------
    scenario : Scenario
        Checked assumptions.

    Returns
    -------
    Model

    Raises
    ------
    InputError
        A number, name or file that the scenario points at cannot be used.
    """
    key = scenario.hash
    if key not in _resolved:
        while len(_resolved) >= _KEEP:
            _resolved.pop(next(iter(_resolved)))
        _resolved[key] = _build(scenario)
    return _resolved[key]


def _build(scenario):
    galaxy = scenario.build_galaxy()
    lifetimes, ifmr = Lifetimes.read(scenario.lifetimes), Ifmr.read(scenario.ifmr)
    rule = parse_rule(scenario.sources)
    own = {name: LensClass.parse(name, table) for name, table in {**galaxy.lens_class, **scenario.lens_class}.items()}
    band = rule.band if isinstance(rule, LimitRule) else "I"
    users = LuminosityFunction.read(scenario.luminosity, band) if scenario.luminosity else None
    populations, luminosities, made = [], [], {}
    references = list(galaxy.references)
    for component in galaxy.components:
        if not component.stars:
            populations.append(None)
            luminosities.append(None)
            continue
        name = scenario.imf or component.imf
        key = (name, component.age, component.efold, component.counts)
        if key not in made:
            imf = Imf.read(name)
            history = History(*component.age, component.efold)
            pop = population(history, imf, lifetimes, ifmr, component.counts)
            shine = users if users else luminosity_function(band, history, pop, imf, lifetimes)
            made[key] = pop, shine
            references += imf.references
        populations.append(made[key][0])
        luminosities.append(made[key][1])
    sources = Sources(rule, tuple(luminosities), DustDisc.read(scenario.dust), scenario.extinction)
    references += [*lifetimes.references, *ifmr.references]
    for law in (scenario.kicks, scenario.bh_kicks):
        if law not in ("same", "momentum", "none"):
            references += parse_kick(law).references
    return Model(scenario, galaxy, tuple(populations), own, sources, tuple(dict.fromkeys(references)))
