"""A campaign's rate in the parts that parameters weigh: stellar classes, and remnants by mass group and kick bin.

A remnant class at any kick law is shares @ parts; a shift of the stars' timescales moves their parts along the grid.
"""

from dataclasses import dataclass
from functools import cached_property

import numpy as np

from ..errors import InputError
from ..events.fold import STEP, on_cells, on_grid
from ..lensing import distributions
from ..remnants.classes import MassSpectrum
from ..surveys.stars import field_curve
from ..units import DAYS_PER_YEAR

__all__ = ["DARK", "SLOPES", "STELLAR", "Part", "Templates"]

STELLAR = ("star", "brown_dwarf", "white_dwarf")
DARK = ("neutron_star", "black_hole")
#: changes of the low-mass slope at which the stars are kept; parabolas in between
SLOPES = (-0.3, 0.0, 0.3)
_SLOPE_BELOW = 0.5  # Msun, Kroupa (2001)
_GROUPS = 5  # of mass, in a remnant class with a spread of masses
_STAR_GROUPS = 8
_MOST = 4096  # shares that are kept
_DELTA = 0.02  # spread of ln M below which a class has one mass


@dataclass(frozen=True)
class Part:
    """What one row of `Templates.rate` holds: a class, its group of mass, and its bin of kick speed."""

    lens: str
    group: int
    bin: int  # -1 where there is none
    ln_mass: float  # rate-weighted mean
    spread: float  # of ln M within the part


@dataclass(frozen=True, eq=False)
class Templates:
    """Parts of a campaign's rate.

    Attributes
    ----------
    forecast : CampaignForecast
    classes : list of str
        The five, then the user's own.
    parts : tuple of Part
    rate : ndarray, shape (F, R, n)
        Events per ln t_E with every event found, on `events.fold.LN_T`: of a stellar or own part as the scenario says,
        of a remnant part if all of the class's group were kicked into its bin (bin 0: not kicked).
    slope_rate : ndarray, shape (3, F, R', n)
        Of the stellar parts, at the changes `SLOPES` of the low-mass slope of the mass function.
    slope_factor : ndarray, shape (3, F)
        Of the remnants' numbers, at the same: the stated mass of a component is kept.
    efficiency : ndarray, shape (F, n)
    exposure : ndarray, shape (F,)
        Stars times years times the u_0 limit, the rate's change over the field in it.
    anchored : ndarray of bool, shape (F,)
    edges : ndarray or None
        Kick bins [km/s].
    mean_ns_mass : float
        Msun, what black holes' momentum is scaled from.
    seasons : float
        Factor of the campaign's exposure.
    """

    forecast: object
    classes: list
    parts: tuple
    rate: np.ndarray
    slope_rate: np.ndarray
    slope_factor: np.ndarray
    efficiency: np.ndarray
    exposure: np.ndarray
    anchored: np.ndarray
    edges: np.ndarray | None
    mean_ns_mass: float
    seasons: float = 1.0

    @classmethod
    def of(cls, forecast, seasons=1.0):
        """Build from a forecast.

        Parameters
        ----------
        forecast : CampaignForecast
            From `surveys.yields.campaign`, with kick-resolved fields where kicks are asked.
        seasons : float
            Factor of the exposure.

        Returns
        -------
        Templates
        """
        survey = forecast.campaign
        years = seasons * survey.calendar.exposure(survey.efficiency.includes).sum() / DAYS_PER_YEAR
        first = forecast.fields[0].sightline._model
        parts, build = _plan(first)
        rates, slopes, factors, curves, exposures = [], [], [], [], []
        for f in forecast.fields:
            exposure = f.sources * f.rate_factor * years * survey.u_0_limit
            exposures.append(exposure)
            integrals, model = f.sightline._integrals, f.sightline._model
            n = sum(p.lens in STELLAR for p in parts)  # the first ones
            made = [
                exposure * _rows(integrals, [row[: model.n_stellar] for row in build(model, d)[:n]]) for d in SLOPES
            ]
            rates.append(np.concatenate([made[1], exposure * _rows(integrals, build(model, 0.0)[n:])]))
            slopes.append(made)
            white = [i for i in range(n) if parts[i].lens == "white_dwarf"]
            total = [m[white].sum() for m in made]
            factors.append([t / total[1] if total[1] > 0 else 1.0 for t in total])
            curves.append(on_cells(field_curve(survey.efficiency, survey.u_0_limit, integrals.ready)))
        kicked = first.kicked
        number = sum(p.spectra["neutron_star"].moment(0) for p in first.populations if p is not None)
        mass = sum(p.spectra["neutron_star"].moment(1) for p in first.populations if p is not None)
        return cls(
            forecast, list(first.classes), tuple(parts), np.array(rates), np.array(slopes).transpose(1, 0, 2, 3),
            np.array(factors).T, np.array(curves), np.array(exposures),
            np.array([f.counted == "stated" for f in forecast.fields]),
            None if kicked is None else np.asarray(kicked.edges), mass / number if number > 0 else 1.4,
            float(seasons),
        )  # fmt: skip

    @property
    def names(self):
        """Names of the fields."""
        return tuple(f.field.name for f in self.forecast.fields)

    def rows(self, lens):
        """Return the indices of a class's parts."""
        return np.array([i for i, p in enumerate(self.parts) if p.lens == lens], dtype=int)

    @cached_property
    def stellar(self):
        """Indices of the stellar parts."""
        return np.array([i for i, p in enumerate(self.parts) if p.lens in STELLAR], dtype=int)

    @cached_property
    def expected(self):
        """Events found by field and part, (F, R)."""
        return np.einsum("frn,fn->fr", self.rate, self.efficiency) * STEP

    def shares(self, lens, law, momentum=False):
        """Return the weight of each of a remnant class's parts under a kick law, (its parts,).

        Parameters
        ----------
        lens : str
        law : KickLaw
            Of neutron stars where `momentum`, else the class's own.
        momentum : bool
            Whether speeds go as 1/M.
        """
        mine = self.rows(lens)
        if self.edges is None:
            return np.ones(mine.size)
        key = (lens, law, momentum)
        if key in self._known:
            return self._known[key].copy()
        out, kept = np.empty(mine.size), {}
        for j, i in enumerate(mine):
            part = self.parts[i]
            if part.group not in kept:
                own = law.scaled(self.mean_ns_mass / np.exp(part.ln_mass)) if momentum else law
                weights = own.bin_weights(self.edges)
                kept[part.group] = np.append(weights.unkicked, weights.inside)
            out[j] = kept[part.group][part.bin]
        if len(self._known) >= _MOST:
            self._known.clear()
        self._known[key] = out
        return out.copy()

    @cached_property
    def _known(self):
        """Shares already worked out: the points of a grid serve many samples."""
        return {}


def _plan(model):
    """The parts, and a function that gives the spectra of their rows for a model and a change of slope."""
    members = [i for i, p in enumerate(model.populations) if p is not None]
    bins = 1 if model.kicked is None else len(model.kicked.edges)
    cuts = {}
    for lens in (*STELLAR, *DARK):
        spectra = [model.populations[i].spectra[lens] for i in members]
        mass = np.concatenate([s.mass for s in spectra])
        weight = np.concatenate([s.number * np.sqrt(s.mass) for s in spectra])
        cuts[lens] = _cuts(mass, weight, _STAR_GROUPS if lens in STELLAR else _GROUPS)
    parts, keys = [], []
    for lens in (*STELLAR, *DARK):
        spectra = [model.populations[i].spectra[lens] for i in members]
        for g in range(len(cuts[lens]) - 1):
            mean, spread = _moments(spectra, cuts[lens][g], cuts[lens][g + 1])
            for k in range(bins) if lens in DARK else (-1,):
                parts.append(Part(lens, g, k, mean, spread))
                keys.append((lens, cuts[lens][g], cuts[lens][g + 1], k))
    for name, own in model.own.items():
        m, share = own._nodes()
        mean = float(share @ np.log(m))
        parts.append(Part(name, 0, -1, mean, float(np.sqrt(max(share @ np.log(m) ** 2 - mean**2, 0.0)))))
        keys.append((name, 0.0, np.inf, -1))

    def build(model, change):
        hosts = [] if model.kicked is None else list(model.kicked.host)
        kept = {i: _resloped(model.populations[i], change) for i in members}
        out = [[None] * len(model.component_of) for _ in keys]
        for row, (lens, low, high, k) in zip(out, keys):
            if lens in model.own:
                for i in range(model.n_stellar):
                    row[i] = model.spectrum(lens, i)
                continue
            for i in members:
                place = model.n_stellar + hosts.index(i) + k if k > 0 and i in hosts else i
                row[place] = _cut(kept[i][lens], low, high)
        return out

    return parts, build


def _cuts(mass, weight, groups):
    """Edges of mass between which groups have equal weights."""
    if mass.size == 0 or np.ptp(np.log(mass)) < _DELTA:
        return [0.0, np.inf]
    order = np.argsort(mass)
    share = (np.cumsum(weight[order]) - 0.5 * weight[order]) / weight.sum()
    inner = np.interp(np.arange(1, groups) / groups, share, mass[order])
    return [0.0, *np.unique(inner), np.inf]


def _moments(spectra, low, high):
    """Rate-weighted mean and spread of ln M between two masses."""
    parts = [_cut(s, low, high) for s in spectra]
    mass = np.concatenate([p.mass for p in parts])
    if mass.size == 0:
        return 0.0, 0.0
    weight = np.concatenate([p.number * np.sqrt(p.mass) for p in parts])
    mean = weight @ np.log(mass) / weight.sum()
    return float(mean), float(np.sqrt(max(weight @ np.log(mass) ** 2 / weight.sum() - mean**2, 0.0)))


def _cut(spectrum, low, high):
    keep = (spectrum.mass >= low) & (spectrum.mass < high)
    if keep.all():
        return spectrum
    return MassSpectrum(spectrum.mass[keep], spectrum.number[keep], spectrum.initial_mass[keep])


def _resloped(population, change):
    """Spectra of a population whose mass function is steeper by `change` below 0.5 Msun, its stated mass kept."""
    if change == 0:
        return population.spectra
    from ..remnants.population import COUNTS

    out, counted = {}, 0.0
    for name, s in population.spectra.items():
        factor = np.where(s.initial_mass < _SLOPE_BELOW, (s.initial_mass / _SLOPE_BELOW) ** -change, 1.0)
        out[name] = MassSpectrum(s.mass, s.number * factor, s.initial_mass)
        counted += out[name].moment(1) if name in COUNTS[population.counts] else 0.0
    before = sum(population.spectra[name].moment(1) for name in COUNTS[population.counts])
    return {name: MassSpectrum(s.mass, s.number * before / counted, s.initial_mass) for name, s in out.items()}


def _rows(integrals, spectra):
    """Rate per source, year and ln t_E of rows of spectra, on the grid, totals exact."""
    masses = distributions.MassGrid.deposit(integrals.grid.h, spectra)
    n = masses.weight.shape[1]
    t, pdf, _ = distributions.timescales(integrals.grid, integrals.unit[:n], masses, False)
    pdf = on_grid(t, pdf)
    total, wanted = pdf.sum(axis=1) * STEP, np.sum(masses.root * integrals.gamma[:n], axis=1)
    return pdf * np.divide(wanted, total, out=np.zeros_like(total), where=total > 0)[:, None]


def need_kicks(templates, what):
    """Raise unless a forecast is kick-resolved."""
    if templates.edges is None:
        raise InputError(f"{what}: the forecast is unkicked; choose a kick law and fields in the scenario")
