"""The constraint that a planned campaign would give: Fisher information with the nuisances on, and mock samples."""

import math
from dataclasses import dataclass

import numpy as np
from scipy.special import ndtr

from .._version import __version__
from ..errors import InputError
from ..events.fold import LN_T, STEP
from ..parallel import run_map
from .calibrate import no_events
from .likelihood import Likelihood, moved, resloped
from .mocks import mock
from .posterior import grid_posterior, made_of, own_values

__all__ = ["Planned", "planned"]

_COARSE = 4  # cells of the grid taken together
_LN_M = np.arange(np.log(0.003), np.log(100.0), 0.12)
_Z95 = 1.959964
_NAMES = ("rate", "shift", "stretch", "slope")
_FREE = 1e-8  # information of no prior


@dataclass(frozen=True, eq=False)
class Planned:
    """What a campaign would say of parameters.

    Attributes
    ----------
    parameters : tuple of Parameter
    truth : tuple of float
        Where the forecast stands.
    sigma : dict of str to float
        Standard error, of ln where the prior is one of the logarithm, nuisances marginalised, without the prior.
    sigma_fixed : dict of str to float
        The same with every nuisance and other parameter held fixed: what no real sample gives.
    sigma_prior : dict of str to float
        Standard deviation of the prior alone.
    seasons : float
    seasons_for_two : dict of str to float
        Seasons of the same kind until the parameter is known to a factor of two at 95 % (infinite where never: the
        nuisances' priors stand in the way; nan where its prior is not one of the logarithm).
    events : dict of str to float
        Expected by class.
    measured : dict of str to float
        Expected numbers whose mass is measured, by class.
    mocks : dict or None
        From mock samples: median and 16 to 84 % of the posterior's half width at 95 %, and share that constrain.
    made : dict
    """

    parameters: tuple
    truth: tuple
    sigma: dict
    sigma_fixed: dict
    sigma_prior: dict
    seasons: float
    seasons_for_two: dict
    events: dict
    measured: dict
    nuisances: dict
    mocks: dict | None
    made: dict
    version: str = __version__

    def factor(self, name):
        """Return the factor at 95 % in a parameter of the logarithm; else 1.96 standard errors."""
        s = self.sigma[name]
        p = next(p for p in self.parameters if p.name == name)
        return float(np.exp(min(_Z95 * s, 500.0))) if p.prior.logarithmic else _Z95 * s

    def words(self, name):
        """Return a sentence that a proposal can quote."""
        p = next(p for p in self.parameters if p.name == name)
        what = {"kick_scale": "the kick scale", "slow_weight": "the share of slow kicks",
                "neutron_stars": "the number of neutron stars", "black_holes": "the number of black holes",
                "remnant_mass": "the remnants' masses"}.get(name, name)  # fmt: skip
        after = f"after {self.seasons:.3g} season{'s' * (self.seasons != 1)}"
        if self.sigma[name] >= self.sigma_prior[name]:
            more = self.seasons_for_two[name]
            when = f"; {more:.3g} seasons like these would give a factor 2" if np.isfinite(more) else ""
            return (
                f"{what}: not constrained {after}: the data alone leave {_spread(p, self.sigma[name])}, the prior "
                f"{p.prior.text} is narrower{when if p.prior.logarithmic else ''}"
            )
        if not p.prior.logarithmic:
            return f"{what} to +-{self.factor(name):.2g} at 95 % {after}"
        return f"a factor {self.factor(name):.2g} in {what} at 95 % {after}"

    def meta(self):
        """Return how this was made."""
        return {**self.made, "nuisances": self.nuisances, "seasons": self.seasons, "measured": self.measured}

    def to_table(self):
        """Return a QTable, a row per parameter."""
        from astropy.table import QTable

        table, names = QTable(), [p.name for p in self.parameters]
        table["parameter"], table["truth"] = names, list(self.truth)
        table["prior"] = [p.prior.text for p in self.parameters]
        for key in ("sigma", "sigma_fixed", "sigma_prior", "seasons_for_two"):
            table[key] = [getattr(self, key)[n] for n in names]
        table["words"] = [self.words(n) for n in names]
        table.meta.update(self.meta())
        return table

    def to_dict(self):
        """Return plain numbers under the keys of ``lensrate constrain --from --json``."""
        rows = {
            p.name: {
                "truth": t, "prior": p.prior.text, "logarithmic": p.prior.logarithmic, "sigma": self.sigma[p.name],
                "sigma_nuisances_fixed": self.sigma_fixed[p.name], "sigma_prior": self.sigma_prior[p.name],
                "factor_95": self.factor(p.name) if p.prior.logarithmic else None,
                "seasons_for_factor_two": self.seasons_for_two[p.name] if p.prior.logarithmic else None,
                "words": self.words(p.name),
                "mocks": None if self.mocks is None else self.mocks[p.name],
            }
            for p, t in zip(self.parameters, self.truth)
        }  # fmt: skip
        return {"parameters": rows, "events": self.events, "mass_measured": self.measured, "seasons": self.seasons,
                "nuisances": self.nuisances, **self.made, "version": self.version}  # fmt: skip


def _spread(p, sigma):
    if not p.prior.logarithmic:
        return f"+-{_Z95 * sigma:.2g} at 95 %"
    factor = _Z95 * sigma / math.log(10)
    return f"a factor {10**factor:.2g} at 95 %" if factor < 4 else f"a factor of 1e{factor:.0f} at 95 %"


def planned(templates, parameters, nuisances=None, *, sigma=0.05, measured=None, mass_error=0.2, counts="auto",
            mocks=0, seed=1, points=None, progress=None, executor=None):  # fmt: skip
    """Return the constraint that a campaign would give, its forecast being true.

    Parameters
    ----------
    templates : Templates
    parameters : tuple of Parameter
    nuisances : Nuisances, optional
    sigma : float
        Error of ln t_E of every event.
    measured : dict of str to float, optional
        Probability by class that the mass is measured; default nowhere: timescales alone.
    mass_error : float
        Error of ln M where it is.
    counts : str
        As `Likelihood`.
    mocks : int
        Mock samples on top, each inferred from in full.
    seed, points : int
        Of the mock samples; grid points a parameter.
    progress : callable, optional
        Called with the share of the mock samples done.
    executor : object with ``map``, optional
        For the mock samples.

    Returns
    -------
    Planned
    """
    if mocks and measured and any(p.name == "remnant_mass" for p in parameters):
        raise InputError(
            "remnant_mass: from mock samples with measured masses it is not inferred, since the values of such events "
            "hold the scenario's masses; leave out the mock samples (--mocks) or the measured masses (--measured)"
        )
    probe = Likelihood(templates, no_events(templates), parameters, nuisances, counts=counts)
    truth = tuple(own_values(probe))
    data, prior, n = _information(probe, parameters, truth, sigma, measured or {}, mass_error)
    names = [p.name for p in parameters]
    found = _errors(data, prior, n)
    fixed = {name: float(data[i, i] ** -0.5) if data[i, i] > 0 else np.inf for i, name in enumerate(names)}
    seasons = templates.seasons * len(templates.forecast.campaign.calendar.seasons)
    sd = {}
    for p in parameters:
        values, w = p.prior.grid(401)
        x = np.log(values) if p.prior.logarithmic else values
        sd[p.name] = float(np.sqrt(w @ x**2 - (w @ x) ** 2))
    expected = templates.expected * probe.part_weights(truth)
    by = {c: float(expected[:, templates.rows(c)].sum()) for c in templates.classes}
    return Planned(
        tuple(parameters), truth, dict(zip(names, map(float, found))), fixed, sd, seasons,
        {p.name: seasons * _times_for_two(data, prior, n, i) if p.prior.logarithmic else math.nan
         for i, p in enumerate(parameters)}, by,
        {c: by[c] * (measured or {}).get(c, 0.0) for c in templates.classes},
        {"prior_widths": probe.nuisances.to_dict(), "free": [_NAMES[i] for i in probe.active]},
        _mocks(templates, parameters, nuisances, truth, mocks, seed, points, counts, progress, executor,
               {"sigma": sigma, "mass_error": mass_error, "measured": measured}) if mocks else None,
        {**made_of({"plan": probe}), "sigma_ln_t_E": sigma, "mass_error": mass_error, "mocks": mocks, "seed": seed},
    )  # fmt: skip


def _information(probe, parameters, truth, sigma, measured, mass_error):
    """Information of the data and of the priors in (parameters, nuisances, ln field factors); number of the first."""
    t, active = probe.templates, probe.active
    edges = np.append(LN_T - 0.5 * STEP, LN_T[-1] + 0.5 * STEP)
    smooth = np.diff(ndtr((edges[:, None] - LN_T) / sigma), axis=0)
    p = np.array([measured.get(q.lens, 0.0) for q in t.parts])
    width = np.sqrt(mass_error**2 + np.array([q.spread for q in t.parts]) ** 2)
    mean = np.array([q.ln_mass for q in t.parts])

    def masses(shift):
        """Shares of each part's measured ln M, remnants' masses moved."""
        moved_mean = mean.copy()
        moved_mean[probe._dark] += shift
        density = np.exp(-0.5 * ((_LN_M - moved_mean[:, None]) / width[:, None]) ** 2)
        return density / density.sum(axis=1, keepdims=True)

    own = masses(0.0)

    def cells(theta, nu):
        """Expected events by field and cell: timescales of events without a mass, then timescale and mass."""
        rows = t.rate.copy()
        stellar, factor = resloped(t, nu[3])
        rows[:, t.stellar] = moved(stellar, nu[1], math.exp(nu[2]))
        values = dict(zip(probe.names, theta))
        dark, density = probe._dark, own
        if "remnant_mass" in values:
            m = math.log(values["remnant_mass"])
            density = masses(m)
            rows[:, dark] = math.exp(0.5 * m) * moved(rows[:, dark], 0.5 * m, 1.0)
        rows[:, dark] *= factor[:, None, None]
        rows *= t.efficiency[:, None, :] * probe.part_weights(theta)[:, None] * math.exp(nu[0]) * STEP
        seen = (rows @ smooth.T)[..., : LN_T.size // _COARSE * _COARSE]
        seen = seen.reshape(*seen.shape[:2], -1, _COARSE).sum(axis=3)
        plain = np.einsum("frn,r->fn", seen, 1 - p)
        parts = [plain]
        if p.any():
            some = p > 0
            both = np.einsum("frn,rm->fnm", seen[:, some] * p[some, None], density[some])
            parts.append(both.reshape(len(seen), -1))
        return np.concatenate(parts, axis=1)

    def point(u):
        theta = [math.exp(v) if q.prior.logarithmic else v for v, q in zip(u, parameters)]
        nu = np.zeros(4)
        nu[active] = u[len(parameters) :]
        return cells(theta, nu)

    centre = np.array([math.log(v) if q.prior.logarithmic else v for v, q in zip(truth, parameters)])
    centre = np.concatenate([centre, np.zeros(active.size)])
    base = point(centre)
    slopes = []
    for j in range(centre.size):
        h = 0.02
        up, down = centre.copy(), centre.copy()
        up[j] += h
        down[j] -= h
        d = (point(up) - point(down)) / (2 * h)
        slopes.append(d)
    F = len(t.names)
    for f in range(F):
        d = np.zeros_like(base)
        d[f] = base[f]
        slopes.append(d)
    slopes = np.array([s.ravel() for s in slopes])
    some = base.ravel() > 1e-12 * base.max()
    data = (slopes[:, some] / base.ravel()[some]) @ slopes[:, some].T
    w = probe.nuisances.field_rate
    factors = np.where(probe.anchored, w**-2 if w > 0 else 1e12, _FREE)
    prior = np.concatenate([np.full(len(parameters), _FREE), probe.nuisances.widths[active] ** -2.0, factors])
    return data, np.diag(prior), len(parameters)


def _errors(data, prior, n):
    # scaled to a unit diagonal: field factors without a prior stand beside widths of a hundredth
    total = data + prior
    scale = np.sqrt(np.diag(total))
    inverse = np.linalg.pinv(total / np.outer(scale, scale), rcond=1e-12)
    return np.sqrt(np.maximum(np.diag(inverse), 0.0))[:n] / scale[:n]


def _times_for_two(data, prior, n, i):
    """Exposure, in units of the campaign, at which 1.96 standard errors are ln 2."""
    wanted = math.log(2.0) / _Z95
    times = np.geomspace(1e-2, 1e6, 161)
    sigma = np.array([_errors(k * data, prior, n)[i] for k in times])
    good = np.flatnonzero(sigma <= wanted)
    return float(times[good[0]]) if good.size else math.inf


def _mocks(templates, parameters, nuisances, truth, n, seed, points, counts, progress, executor, options):
    """Posterior widths at 95 % of mock samples."""
    one = _Mock(templates, tuple(parameters), nuisances, truth, points, counts, options)
    done = []

    def tell(item, row):
        done.append(row)
        if progress is not None:
            progress(len(done) / n)

    run_map(one, np.random.SeedSequence(seed).spawn(n), executor=executor, progress=tell)
    half, constrained = (np.array(v) for v in zip(*done))
    low, middle, high = np.quantile(half, [0.16, 0.5, 0.84], axis=0)
    return {
        p.name: {"half_width_95": float(middle[i]), "p16": float(low[i]), "p84": float(high[i]),
                 "share_constrained": float(np.mean(constrained[:, i])), "samples": n}
        for i, p in enumerate(parameters)
    }  # fmt: skip


@dataclass(frozen=True)
class _Mock:
    """One mock sample, inferred from in full."""

    templates: object
    parameters: tuple
    nuisances: object
    truth: tuple
    points: int | None
    counts: str
    options: dict

    def __call__(self, seed):
        t, how = self.templates, (self.parameters, self.nuisances)
        probe = Likelihood(t, no_events(t), *how, counts=self.counts)
        data, _ = mock(t, probe.part_weights(self.truth), np.random.default_rng(seed), **self.options)
        made = grid_posterior({"mock": Likelihood(t, data, *how, counts=self.counts)}, points=self.points)
        half = []
        for i, p in enumerate(self.parameters):
            low, high = made.quantile(i, [0.025, 0.975])
            half.append(0.5 * math.log(high / low) if p.prior.logarithmic else 0.5 * (high - low))
        return half, [made.learned[p.name].constrained for p in self.parameters]
