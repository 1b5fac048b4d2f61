"""A scenario resolved: Galaxy, populations and source model built once and shared by everything that runs on it."""

from dataclasses import dataclass, replace
from functools import cached_property, lru_cache
from threading import Lock

import numpy as np

from ..datafiles import read_set
from ..errors import InputError
from ..galaxy.model import Galaxy
from ..remnants.classes import CLASSES, LensClass, MassSpectrum
from ..remnants.history import History
from ..remnants.ifmr import Ifmr
from ..remnants.imf import Imf
from ..remnants.kicked import KickedLenses, galaxy_numbers, read_with_checksum
from ..remnants.kicks import parse_kick
from ..remnants.lifetimes import Lifetimes
from ..remnants.population import population
from ..sources.extinction import DustDisc
from ..sources.luminosity import LuminosityFunction, luminosity_function
from ..sources.model import Sources
from ..sources.rules import ClumpRule, LimitRule, PeakRule, parse_rule

__all__ = ["Model", "resolve"]

_KEEP = 16  # resolved scenarios kept in memory
_resolved = {}
_lock = Lock()


@dataclass(frozen=True, eq=False)
class Model:
    """Everything a scenario means.

    Elements are the Galaxy's components in order, then each component's kick bins. A class rides on an element with a
    MassSpectrum: numbers per solar mass of the component's stated mass, times the share of the kick bin.

    Attributes
    ----------
    galaxy : Galaxy
    populations : tuple
        Population of each component, None where it is not made of stars.
    own : dict of str to LensClass
        Lens classes beyond the five.
    sources : Sources
    kicked : KickedLenses or None
        The remnants' own fields; None where they follow the stars.
    references, warnings : tuple of str
    """

    scenario: object
    galaxy: Galaxy
    populations: tuple
    own: dict
    sources: Sources
    kicked: KickedLenses | None
    references: tuple
    warnings: tuple = ()
    changed_from: object = None  # scenario of the model that this one was `changed` from

    @property
    def built_from(self):
        """Scenario whose sources and fields are in use."""
        return self.changed_from or self.scenario

    # what is sent to another process is the scenario: there it is built once and kept
    def __reduce__(self):
        return _rebuilt, (self.built_from, None if self.scenario is self.built_from else self.scenario)

    @property
    def classes(self):
        """The five classes and the user's own, in order."""
        return [*CLASSES, *self.own]

    @property
    def n_stellar(self):
        """Number of elements that are the Galaxy's components themselves."""
        return len(self.galaxy.components)

    @property
    def component_of(self):
        """Component index of every element, stellar ones first."""
        hosts = [] if self.kicked is None else list(self.kicked.host)
        return [*range(self.n_stellar), *hosts]

    @cached_property
    def _stellar(self):
        """Spectrum of each class on each component's own element; of remnants those that are not kicked."""
        out = {}
        for i, (component, pop) in enumerate(zip(self.galaxy.components, self.populations)):
            for name in CLASSES:
                out[name, i] = None if pop is None else pop.spectra[name]
            for name, own in self.own.items():
                rides = component.name in own.rides_on or component.element in own.rides_on
                out[name, i] = own.spectrum(pop) if rides else None
        for (name, i), numbers in self._binned.items():
            spectrum = self.populations[i].spectra[name]
            out[name, i] = MassSpectrum(spectrum.mass, numbers[0], spectrum.initial_mass)
        return out

    @cached_property
    def _spectra(self):
        out = dict(self._stellar)
        for (name, i), numbers in self._binned.items():
            spectrum, first = self.populations[i].spectra[name], self._first_bin(i)
            # bin 0 of the fields is the synthesised unkicked population: a check, not used
            out[name, first] = None
            for k in range(1, len(numbers)):
                out[name, first + k] = MassSpectrum(spectrum.mass, numbers[k], spectrum.initial_mass)
        return out

    def _first_bin(self, i):
        return self.n_stellar + self.kicked.host.index(i)

    @cached_property
    def _binned(self):
        """Numbers at the mass nodes in each kick bin, (bins + 1, n), by class and component that the fields hold."""
        bins = {} if self.kicked is None else self._bins
        return {(name, i): self.populations[i].spectra[name].number * share for (name, i), share in bins.items()}

    @cached_property
    def _bins(self):
        """Shares of the kick bins, as `_shares`, by class and component that the fields hold."""
        known, out = {}, {}
        for i in dict.fromkeys(self.kicked.host):
            if self.populations[i] is None:
                continue
            for name, law in self.laws.items():
                mass = self.populations[i].spectra[name].mass
                # components born alike share their masses
                if (name, id(mass)) not in known:
                    known[name, id(mass)] = _shares(law, mass, self.kicked.edges)
                out[name, i] = known[name, id(mass)]
        return out

    @cached_property
    def laws(self):
        """Kick law of neutron stars, and for black holes a law or (law, M_NS) of momentum scaling."""
        star = parse_kick(self.scenario.kicks)
        hole = self.scenario.bh_kicks
        if hole == "same":
            return {"neutron_star": star, "black_hole": star}
        if hole != "momentum":
            return {"neutron_star": star, "black_hole": parse_kick(hole)}
        number = sum(p.spectra["neutron_star"].moment(0) for p in self.populations if p is not None)
        mass = sum(p.spectra["neutron_star"].moment(1) for p in self.populations if p is not None)
        return {"neutron_star": star, "black_hole": (star, mass / number if number > 0 else 1.4)}

    def spectrum(self, name, i):
        """Return the MassSpectrum of a class on element i, or None."""
        return self._spectra.get((name, i))

    def spectra(self):
        """Return the MassSpectrum, or None, of each class (rows) on each element (columns)."""
        get, elements = self._spectra.get, range(len(self.component_of))
        return [[get((name, i)) for i in elements] for name in self.classes]

    def by_masses(self):
        """Return what `spectra` does with the kick bins of a class and component together, as `MassGrid.deposit` takes.

        Returns
        -------
        stellar : list of list of MassSpectrum or None
            By class and component.
        bins : list of (int, int, ndarray (n,), ndarray (k, n))
            Class, first element, masses, and numbers on this element and those that follow.
        """
        stellar = [[self._stellar.get((name, i)) for i in range(self.n_stellar)] for name in self.classes]
        bins = []
        for (name, i), numbers in self._binned.items():
            mass = self.populations[i].spectra[name].mass
            bins.append((CLASSES.index(name), self._first_bin(i) + 1, mass, numbers[1:]))
        return stellar, bins

    def without_fields(self):
        """Return the components of stars that the kick-resolved fields do not hold."""
        held = set(self.kicked.host)
        rows = enumerate(zip(self.galaxy.components, self.populations))
        return [c.element for i, (c, pop) in rows if pop is not None and i not in held]

    def escaped_at_birth(self, name):
        """Return the share of a class that is kicked faster than the fields' last bin."""
        born = kept = 0.0
        for (own, i), shares in self._bins.items():
            number = self.populations[i].spectra[name].number
            if own == name and number.size:
                born += number.sum()
                kept += number @ shares.sum(axis=0)
        return 1.0 - kept / born if born > 0 else 0.0

    def changed(self, scenario):
        """Return the model of a scenario that differs only in kick laws, masses or lens classes, sources kept."""
        old = self.scenario
        populations = self.populations
        if (scenario.ifmr, scenario.imf) != (old.ifmr, old.imf):
            populations = tuple(p for p, _ in _stars(scenario, self.galaxy, None))
        own = {**self.galaxy.lens_class, **scenario.lens_class}
        own = {name: LensClass.parse(name, table) for name, table in own.items()}
        references, warnings = _references(scenario, self.galaxy), self.warnings
        if populations is not self.populations:
            warnings = (*warnings, "re-weighted with other masses: the source stars are still those of the old ones")
        return replace(
            self, scenario=scenario, populations=populations, own=own, references=references, warnings=warnings,
            changed_from=self.built_from,
        )  # fmt: skip

    def kinematics(self, name):
        """Return the word for a class: stellar, kicked, unkicked, or mixed where fields hold some birth components."""
        if name not in ("neutron_star", "black_hole"):
            return "stellar"
        if self.kicked is None:
            return "unkicked"
        law = self.laws[name]
        if (law[0] if isinstance(law, tuple) else law).name == "none" or not self._bins:
            return "unkicked"
        return "mixed" if self.without_fields() else "kicked"

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


def _shares(law, mass, edges):
    """Share of each kick bin for remnants of each mass: unkicked, the bins; (bins + 1, n). The rest escaped."""
    return _known_shares(law, np.asarray(mass, dtype=float).tobytes(), tuple(edges))


@lru_cache(maxsize=1024)
def _known_shares(law, mass, edges):
    """`_shares` with masses as bytes: components born alike have the same, whatever else changes."""
    mass, edges = np.frombuffer(mass), np.array(edges)
    law, heaviness = (law[0], mass / law[1]) if isinstance(law, tuple) else (law, None)
    if heaviness is None or law.name == "none":
        one = law.bin_weights(edges)
        out = np.repeat([[one.unkicked], *([x] for x in one.inside)], mass.size, axis=1)
    elif law.kind == "fixed":
        each = [law.scaled(1 / m).bin_weights(edges) for m in heaviness]
        out = np.array([[w.unkicked, *w.inside] for w in each]).reshape(mass.size, edges.size).T
    else:
        # speeds that fall with the mass pass an edge where the law itself passes mass times it
        below = law.cdf(edges[:, None] * heaviness)
        out = np.concatenate([below[:1], np.diff(below, axis=0)])
    out.setflags(write=False)
    return out


def _rebuilt(base, changed):
    model = resolve(base)
    return model if changed is None else model.changed(changed)


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
    with _lock:
        if key in _resolved:
            return _resolved[key]
    # a field's own extinction changes nothing but the sources: the rest is shared
    if scenario.extinction:
        plain = resolve(scenario.replace(extinction={}))
        model = replace(plain, scenario=scenario, sources=replace(plain.sources, measured=scenario.extinction))
    else:
        model = _build(scenario)
    with _lock:
        while len(_resolved) >= _KEEP:
            _resolved.pop(next(iter(_resolved)))
        _resolved[key] = model
    return model


def _stars(scenario, galaxy, band):
    """Population and luminosity function (None where no band is asked) of each component; None, None without stars."""
    lifetimes, ifmr = Lifetimes.read(scenario.lifetimes), Ifmr.read(scenario.ifmr)
    users = _users_function(scenario, band) if scenario.luminosity and band else None
    made, out = {}, []
    for component in galaxy.components:
        key = (scenario.imf or component.imf, component.age, component.efold, component.counts)
        if component.stars and key not in made:
            imf, history = Imf.read(key[0]), History(*component.age, component.efold)
            pop = population(history, imf, lifetimes, ifmr, component.counts)
            made[key] = pop, users or (luminosity_function(band, history, pop, imf, lifetimes) if band else None)
        out.append(made[key] if component.stars else (None, None))
    return out


def _users_function(scenario, band):
    """A luminosity function of the user's own, in the band of the source rule."""
    shine = LuminosityFunction.read(scenario.luminosity)
    if shine.band != band:
        raise InputError(
            f"luminosity: '{scenario.luminosity}' is in {shine.band} and the source rule in {band}; "
            f"take a table in {band}, or a rule like limit:{shine.band}=21"
        )
    return shine


def _build(scenario):
    galaxy = scenario.build_galaxy()
    rule = parse_rule(scenario.sources)
    if isinstance(rule, PeakRule):
        rule = replace(rule, u_0_limit=scenario.u_0_limit)
    own = {**galaxy.lens_class, **scenario.lens_class}
    own = {name: LensClass.parse(name, table) for name, table in own.items()}
    stars = _stars(scenario, galaxy, rule.band if isinstance(rule, (LimitRule, PeakRule)) else "I")
    luminosities = tuple(shine for _, shine in stars)
    if isinstance(rule, ClumpRule) and any(s is not None and np.isnan(s.clump_per_msun) for s in luminosities):
        raise InputError(
            f"luminosity: '{scenario.luminosity}' does not say clump_per_msun, which the rule '{rule.text}' needs; "
            "state it in the table's header"
        )
    sources = Sources(rule, luminosities, DustDisc.read(scenario.dust), scenario.extinction)
    populations = [pop for pop, _ in stars]
    kicked, warnings = _kicked(scenario, galaxy)
    references = _references(scenario, galaxy)
    return Model(scenario, galaxy, tuple(populations), own, sources, kicked, references, tuple(warnings))


def _references(scenario, galaxy):
    out = list(galaxy.references)
    for name in dict.fromkeys(scenario.imf or c.imf for c in galaxy.components if c.stars):
        out.append(read_set("imf", name)["reference"])
    # what is in them was looked at when they were read for their numbers
    out += [read_set("lifetimes", scenario.lifetimes)["reference"], read_set("ifmr", scenario.ifmr)["reference"]]
    for name in ("dwarf_sequence", "giants", "extinction_law", scenario.dust):
        if not (scenario.luminosity and name in ("dwarf_sequence", "giants")):
            out.append(read_set("sources", name)["reference"])
    if galaxy.potential:
        out.append(read_set("potential", galaxy.potential)["reference"])
    for law in (scenario.kicks, scenario.bh_kicks):
        if law not in ("same", "momentum", "none"):
            out += parse_kick(law).references
    return tuple(dict.fromkeys(out))


def _kicked(scenario, galaxy):
    """The remnants' own fields, where the scenario has any, and what to say about them."""
    if scenario.unkicked or not scenario.fields:
        return None, []
    field, sha256 = read_with_checksum(scenario.fields)
    kicked = KickedLenses.make(field, galaxy, sha256)
    if kicked is None:
        return None, [f"fields '{scenario.fields}' hold no component of galaxy '{galaxy.name}': all is unkicked"]
    warnings = []
    if field.provenance.get("galaxy_numbers") != galaxy_numbers(galaxy):
        warnings.append(
            f"fields '{scenario.fields}' were synthesised for other numbers of the Galaxy than this scenario's; "
            "remnants follow those; make your own with 'lensrate synthesize'"
        )
    return kicked, warnings
