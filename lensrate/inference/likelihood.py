"""The likelihood of a sample: Poisson in the fields, remnants linear in their shares, nuisances marginalised inside."""

from dataclasses import dataclass, fields

import numpy as np
from scipy.special import gammaln

from ..errors import InputError
from ..events.fold import LN_T, STEP
from ..kernels.shifted import shifted_sums
from ..remnants.kicks import parse_kick
from .data import node_weights
from .selection import Selection
from .templates import DARK, SLOPES, need_kicks

__all__ = ["Likelihood", "Nuisances", "moved", "resloped"]

_TINY = 1e-300
_STEPS = 25  # of the search for the nuisances
_SETTLED = 1e-4
_PIVOT = np.log(20.0)  # ln t_E about which the stars' timescales are stretched
_MASSES = np.linspace(np.log(0.5), np.log(2.0), 9)  # ln of mass factors, tabulated


@dataclass(frozen=True)
class Nuisances:
    """Widths of the priors of what is not asked for; 0 holds it fixed.

    Attributes
    ----------
    rate : float
        Of ln of one factor on all expected numbers. Published surveys differ by 1.2-1.5 in optical depth.
    field_rate : float
        Relative width of the Gamma prior of each field's own factor.
    shift : float
        Of a shift of the stars' ln t_E (0.07: 0.03 dex).
    stretch : float
        Of ln of a stretch of the stars' ln t_E about its mean.
    slope : float
        Of a change of the mass function's slope below 0.5 Msun.
    """

    rate: float = 0.3
    field_rate: float = 0.1
    shift: float = 0.07
    stretch: float = 0.05
    slope: float = 0.3

    def __post_init__(self):
        for f in fields(self):
            value = getattr(self, f.name)
            if isinstance(value, bool) or not isinstance(value, (int, float)) or not 0 <= value <= 3:
                raise InputError(f"nuisance {f.name}: {value!r} given, a width from 0 (fixed) to 3 is needed")

    @classmethod
    def fixed(cls):
        """Return nuisances that are all held fixed."""
        return cls(0.0, 0.0, 0.0, 0.0, 0.0)

    @property
    def widths(self):
        """Widths of (ln rate, shift, ln stretch, slope)."""
        return np.array([self.rate, self.shift, self.stretch, self.slope], dtype=float)

    def to_dict(self):
        """Return the widths by name."""
        return {f.name: getattr(self, f.name) for f in fields(self)}


def resloped(templates, slope):
    """Return stellar parts (F, R', n) and the factor of remnants' numbers (F,) at a change of the low-mass slope."""
    w = _mixture(slope)[0]
    return np.tensordot(w, templates.slope_rate, axes=1), w @ templates.slope_factor


def _mixture(slope):
    """Weights of the stars at `SLOPES`, a parabola, and their slopes."""
    d = SLOPES[2]
    u = slope / d
    return np.array([0.5 * u * (u - 1), 1 - u * u, 0.5 * u * (u + 1)]), np.array([u - 0.5, -2 * u, u + 0.5]) / d


def moved(rows, shift, stretch, pivot=_PIVOT):
    """Return distributions (..., n) shifted by `shift` in ln t_E and stretched about `pivot`, their totals kept."""
    i, s = _source(LN_T, shift, stretch, pivot)
    return np.maximum((1 - s) * rows[..., i] + s * rows[..., i + 1], 0.0) / stretch


def _source(x, shift, stretch, pivot=_PIVOT):
    place = np.clip((pivot + (x - pivot - shift) / stretch - LN_T[0]) / STEP, 0, LN_T.size - 1.001)
    i = place.astype(int)
    return i, place - i


class Likelihood:
    """ln of the probability of a sample given parameters, nuisances profiled or marginalised.

    Parameters
    ----------
    templates : Templates
    data : Data
    parameters : tuple of Parameter
    nuisances : Nuisances
    selection : Selection
    counts : str
        "auto": expected numbers count in fields that state their stars; "shape": nowhere; "absolute": everywhere.

    Raises
    ------
    InputError
        A kick parameter without kick-resolved fields; a slow component where the law has one; absolute counts where
        nothing anchors them.
    """

    def __init__(self, templates, data, parameters, nuisances=None, selection=None, counts="auto"):
        self.templates, self.data, self.parameters = templates, data, tuple(parameters)
        self.nuisances = nuisances or Nuisances()
        self.selection = selection or Selection()
        self.anchored = anchors(templates, counts)
        self.n = np.bincount(data.field, minlength=len(templates.names)).astype(float)
        scenario = templates.forecast.scenario
        self._law, self._hole = parse_kick(scenario.kicks), scenario.bh_kicks
        self.names = [p.name for p in self.parameters]
        check_kicks(self.names, templates, self._law)
        kept = np.array([self.selection.kept(p.lens) for p in templates.parts])
        self._eff = templates.efficiency
        self._kept = kept
        self._dark = np.concatenate([templates.rows(lens) for lens in DARK])
        self._own = np.array([i for i, p in enumerate(templates.parts) if p.bin < 0 and i not in templates.stellar],
                             dtype=int)  # fmt: skip
        self._tables()
        self._prepare_stars()
        self.active = np.flatnonzero(self.nuisances.widths > 0)
        if not self.anchored.any():
            self.active = self.active[self.active != 0]
        self._bins = np.array([i for i, n in enumerate(self.names) if n.startswith("kick_bin_")], dtype=int)
        self._bin_of = np.array([templates.parts[i].bin for i in templates.rows("neutron_star")], dtype=int)
        free = {"kick_scale", "slow_weight"} & set(self.names)
        self._fixed_dark = None if free else self._shares({})

    # what does not change -------------------------------------------------------------------------------------------

    def _tables(self):
        """Event values and expected numbers of remnant and own parts, at masses times exp(`_MASSES`) if they vary."""
        t, d = self.templates, self.data
        rows = np.concatenate([self._dark, self._own])
        self._shifted = "remnant_mass" in self.names
        self._V, self._E = [], []
        if self._shifted and (d.full.any() or (len(d) and np.ptp(d.weight, axis=1).max() > 0)):
            raise InputError(
                "remnant_mass: this sample has events with measured masses or parallaxes, whose values hold the "
                "scenario's masses; leave the parameter out, or the measurements (--timescales-only)"
            )
        for ln_mass in _MASSES if self._shifted else (0.0,):
            rate, value = t.rate[:, rows], d.value[:, rows]
            if ln_mass:
                dark = slice(0, self._dark.size)
                rate, value = rate.copy(), value.copy()
                rate[:, dark] = np.exp(0.5 * ln_mass) * moved(rate[:, dark], 0.5 * ln_mass, 1.0)
                value[:, dark] = self._at_nodes(rate[:, dark]) * d.weight[:, rows[dark]]
            self._V.append(value)
            self._E.append(np.einsum("frn,fn->fr", rate, self._eff) * STEP * self._kept[rows])
        self._V, self._E = np.array(self._V), np.array(self._E)

    def _at_nodes(self, rate):
        d = self.data
        i, s = _source(d.nodes, 0.0, 1.0)
        pick = d.field[:, None]
        low, high = rate[pick, :, i], rate[pick, :, i + 1]
        return np.einsum("nqr,q->nr", (1 - s)[..., None] * low + s[..., None] * high, node_weights())

    def _prepare_stars(self):
        """Stellar rates against ln t_E, a row for each way in which events of a field weigh the parts."""
        t, d = self.templates, self.data
        stellar = t.stellar
        plain = np.einsum("sfrn->fns", t.slope_rate)
        weight = np.where(d.full[:, None], 1.0, d.weight[:, stellar])
        key = np.concatenate([d.field[:, None], weight], axis=1)
        kinds, self._row = np.unique(key, axis=0, return_inverse=True)
        self._row = np.asarray(self._row).ravel()
        self._star = np.empty((len(kinds), LN_T.size, len(SLOPES)))
        rows = np.ascontiguousarray(t.slope_rate.transpose(1, 3, 0, 2))  # (F, n, 3, R')
        for f in np.unique(d.field):
            mine = kinds[:, 0] == f
            self._star[mine] = np.moveaxis(rows[f] @ kinds[mine, 1:].T, 2, 0)
        # events with the joint distribution keep their values but for the change of the rate at their t_E
        self._times = np.ones(len(d))
        if d.full.any():
            base = self._at_nodes(plain[:, None, :, 1])[:, 0]
            value = d.value[:, stellar].sum(axis=1)
            self._times = np.where(d.full, np.divide(value, base, out=np.zeros_like(base), where=base > 0), 1.0)
        self._nodes, self._node_weights = d.nodes, node_weights()[None]
        self._found = np.ascontiguousarray(np.einsum("sfrn,r->fns", t.slope_rate, self._kept[stellar]))
        self._cells, self._cell_weights = np.tile(LN_T, (len(self._found), 1)), self._eff * STEP

    # one evaluation -------------------------------------------------------------------------------------------------

    def _shares(self, values):
        """Weights of the remnant parts, but for numbers."""
        law = self._law
        if "slow_weight" in values:
            slow = int(np.argmin(law.values))
            weights = [0.0, 0.0]
            weights[slow], weights[1 - slow] = values["slow_weight"], 1 - values["slow_weight"]
            from dataclasses import replace

            law = replace(law, weights=tuple(weights))
        scale = values.get("kick_scale", 1.0)
        law = law.scaled(scale) if scale != 1 else law
        out = [self.templates.shares("neutron_star", law)]
        if self._hole == "momentum":
            out.append(self.templates.shares("black_hole", law, momentum=True))
        else:
            hole = law if self._hole == "same" else parse_kick(self._hole)
            out.append(self.templates.shares("black_hole", hole))
        return np.concatenate(out)

    def part_weights(self, theta):
        """Return the weight of every part at parameter values, (R,); stellar ones are 1."""
        values = dict(zip(self.names, theta))
        dark = self._shares(values) if self._fixed_dark is None else self._fixed_dark.copy()
        first = self._bin_of.size
        if self._bins.size:
            # the unkicked keep their share; the whole keeps its number
            new = dark[:first] * np.exp(np.concatenate([[0.0], np.asarray(theta)[self._bins]]))[self._bin_of]
            dark[:first] = new * dark[:first].sum() / new.sum()
        dark[:first] *= values.get("neutron_stars", 1.0)
        dark[first:] *= values.get("black_holes", 1.0)
        out = np.ones(len(self.templates.parts))
        out[self._dark] = dark
        for i in self._own:
            out[i] = values.get(f"class:{self.templates.parts[i].lens}", 1.0)
        return out

    def kick_bins(self):
        """Return the edges of the kick bins [km/s] and the law's shares of neutron stars, the unkicked first.

        None where the bins are not free.
        """
        if not self._bins.size:
            return None
        first = [p.group for p in self.templates.parts if p.lens == "neutron_star"]
        return self.templates.edges, self._fixed_dark[: self._bin_of.size][np.array(first) == first[0]]

    def remnants(self, theta):
        """Return rate at each event, and expected number by field, of remnants and own classes: shares @ parts."""
        w = self.part_weights(theta)[np.concatenate([self._dark, self._own])]
        split = self._dark.size
        V, E = self._V[0], self._E[0]
        if self._shifted:
            place = np.interp(np.log(theta[self.names.index("remnant_mass")]), _MASSES, np.arange(_MASSES.size))
            k = min(int(place), _MASSES.size - 2)
            s = place - k
            V, E = ((1 - s) * a[k] + s * a[k + 1] for a in (self._V, self._E))
        return (V[:, :split] @ w[:split], E[:, :split] @ w[:split], V[:, split:] @ w[split:], E[:, split:] @ w[split:])

    def terms(self, remnants, nu):
        """Return rate at each event (n,) and expected numbers (F,), but for the common rate factor.

        Parameters
        ----------
        remnants : tuple
            From `remnants`.
        nu : array_like, shape (4,)
            ln rate, shift, ln stretch, slope.
        """
        return self._terms_and_slopes(remnants, nu)[:2]

    def _terms_and_slopes(self, remnants, nu):
        """As `terms`, with the slopes of both in shift, ln stretch and slope: (3, n) and (3, F)."""
        d, (v, e, own_v, own_e) = self.data, remnants
        mix, mix_slope = _mixture(nu[3])
        factor, change = mix @ self.templates.slope_factor, mix_slope @ self.templates.slope_factor
        star, found = np.empty((4, len(d))), np.empty((4, len(self._found)))
        how = (LN_T[0], STEP, _PIVOT, float(nu[1]), float(nu[2]), mix, mix_slope)
        shifted_sums(self._star, self._row, self._nodes, self._node_weights, *how, star)
        shifted_sums(self._found, np.arange(len(self._found)), self._cells, self._cell_weights, *how, found)
        star *= self._times
        star[3] += change[d.field] * v
        found[3] += change * e
        rate, mu = star[0] + factor[d.field] * v + own_v, found[0] + factor * e + own_e
        return np.maximum(rate, _TINY), np.maximum(mu, _TINY), star[1:], found[1:]

    def _fields(self, mu, ln_rate):
        """Sum over fields of what counts say, each field's own factor integrated over its Gamma prior."""
        m, n = mu * np.exp(ln_rate), self.n
        shape = n * np.log(mu)
        width = self.nuisances.field_rate
        if width > 0:
            k = width**-2
            full = (k * np.log(k) - gammaln(k) + gammaln(k + n) - (k + n) * np.log(k + m) + n * ln_rate)
        else:
            full = n * ln_rate - m
        return float(np.sum(np.where(self.anchored, full, -shape)))

    def ln(self, theta, nu=(0.0, 0.0, 0.0, 0.0)):
        """Return ln L at parameters and nuisances (priors not in it)."""
        rate, mu = self.terms(self.remnants(theta), nu)
        return float(np.sum(np.log(rate))) + self._fields(mu, nu[0])

    def ln_prior_nu(self, nu):
        """Return the ln prior density of the nuisances that are free."""
        sd = self.nuisances.widths[self.active]
        z = np.asarray(nu)[self.active] / sd
        return float(-0.5 * z @ z - np.sum(np.log(sd)) - 0.5 * z.size * np.log(2 * np.pi))

    def marginal(self, theta, start=None):
        """Return ln of the likelihood integrated over the nuisances (Laplace), and where they are likeliest.

        Parameters
        ----------
        theta : array_like
        start : ndarray, optional
            First guess of the nuisances.

        Returns
        -------
        ln_marginal, nu
        """
        fixed = self.remnants(theta)
        nu = np.zeros(4) if start is None else np.array(start, dtype=float)
        active, sd = self.active, self.nuisances.widths

        def value(nu):
            terms = self._terms_and_slopes(fixed, nu)
            return float(np.sum(np.log(terms[0]))) + self._fields(terms[1], nu[0]) + self.ln_prior_nu(nu), terms

        best, terms = value(nu)
        if not active.size:
            return best, nu
        for _ in range(_STEPS):
            g, H = self._slopes(nu, *terms)
            step = np.linalg.solve(H, g)
            if 0.5 * g @ step < _SETTLED:
                break
            size = 1.0
            while size > 1e-3:
                new = nu.copy()
                new[active] += size * np.clip(step, -2 * sd[active], 2 * sd[active])
                new[2:] = np.clip(new[2:], [-0.5, -0.9], [0.5, 0.9])
                new_best, new_terms = value(new)
                if new_best > best:
                    break
                size *= 0.4
            else:
                break
            nu, best, terms = new, new_best, new_terms
        det = np.linalg.slogdet(H)[1]
        return best + 0.5 * active.size * np.log(2 * np.pi) - 0.5 * det, nu

    def _slopes(self, nu, rate, mu, rate_slope, mu_slope):
        """Gradient of ln posterior in the free nuisances, and its information matrix.

        Squares of the slopes of each event's share of its field, plus what the field's number says: never negative,
        however far the numbers are from those expected.
        """
        active, sd = self.active, self.nuisances.widths
        ln = np.concatenate([self.anchored[self.data.field][None], rate_slope / rate])[active]
        a = np.concatenate([self.anchored[None], mu_slope / mu])[active]
        m, n, width = mu * np.exp(nu[0]), self.n, self.nuisances.field_rate
        if width > 0:
            k = width**-2
            pull, curve = (k + n) * m / (k + m), (k + n) * k * m / (k + m) ** 2
        else:
            pull, curve = m, m
        pull, curve = np.where(self.anchored, pull, n), np.where(self.anchored, curve, 0.0)
        g = ln.sum(axis=1) - a @ pull - np.array(nu)[active] / sd[active] ** 2
        share = ln - a[:, self.data.field]
        return g, share @ share.T + (a * curve) @ a.T + np.diag(1 / sd[active] ** 2)


def anchors(templates, counts):
    """Return which fields' expected numbers count; see `Likelihood`."""
    from ..errors import one_of
    from ..events.compare import COUNTS

    one_of("counts", counts, COUNTS)
    if counts == "absolute" and not templates.anchored.all():
        names = ", ".join(np.array(templates.names)[~templates.anchored][:5])
        raise InputError(
            f"counts: nothing anchors the number of events in {names}; state monitored_stars there, or use shapes "
            "(counts = 'shape')"
        )
    return np.zeros(len(templates.names), dtype=bool) if counts == "shape" else templates.anchored.copy()


def check_kicks(names, templates, law):
    """Raise where a kick parameter has nothing to act on."""
    for name in ("kick_scale", "slow_weight"):
        if name in names:
            need_kicks(templates, name)
    if "slow_weight" in names and len(law.values) != 2:
        raise InputError(
            f"slow_weight: kick law '{law.text}' has no slow component; take one with two, for example "
            "kicks = 'igoshev2020' or 'two-maxwell:56,336,0.2'"
        )
