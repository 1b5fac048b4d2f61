"""The likelihood of a sample: Poisson in the fields, remnants linear in their shares, nuisances marginalised inside."""

from dataclasses import dataclass, fields

import numpy as np
from scipy.special import gammaln

from ..errors import InputError
from ..events.fold import LN_T, STEP
from ..remnants.kicks import parse_kick
from .data import Selection, node_weights
from .templates import DARK, SLOPES, need_kicks

__all__ = ["Likelihood", "Nuisances", "moved", "resloped"]

_TINY = 1e-300
_STEPS = 25  # of the search for the nuisances
_SETTLED = 1e-4
_FEW = 8  # patterns of weights that are cheap to sum for all fields
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
    d = SLOPES[2]
    u = slope / d
    w = np.array([0.5 * u * (u - 1), 1 - u * u, 0.5 * u * (u + 1)])
    return np.tensordot(w, templates.slope_rate, axes=1), w @ templates.slope_factor


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
        free = any(n in ("kick_scale", "slow_weight") or n.startswith("kick_bin_") for n in self.names)
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
        """Groups of events that weigh the stellar parts alike: their sums are made once."""
        t, d = self.templates, self.data
        stellar = t.stellar
        weight = d.weight[:, stellar]
        patterns, which, count = np.unique(weight, axis=0, return_inverse=True, return_counts=True)
        which = np.asarray(which).ravel()
        if not len(d):
            patterns, count = np.ones((1, stellar.size)), np.ones(1)
        # what only one event has (a measured mass) is summed for that event alone
        shared = (count > 1) | (len(patterns) <= _FEW)
        self._alone = np.flatnonzero(~shared[which]) if len(d) else np.zeros(0, dtype=int)
        self._which = np.where(shared, np.cumsum(shared) - 1, 0)[which] if len(d) else which
        self._star = np.einsum("sfrn,pr->spfn", t.slope_rate, patterns[shared]) if shared.any() else np.zeros(
            (3, 1, len(t.names), LN_T.size)
        )
        self._alone_weight = weight[self._alone]
        self._alone_rows = np.ascontiguousarray(t.slope_rate.transpose(0, 1, 3, 2)) if self._alone.size else None
        self._star_found = np.einsum("sfrn,r->sfn", t.slope_rate, self._kept[stellar])
        # events with the joint distribution keep their values but for the change of the rate at their t_E
        self._joint = d.full.any()
        if self._joint:
            self._star_value = d.value[:, stellar].sum(axis=1)
            self._star_plain = np.einsum("sfrn->sfn", t.slope_rate)
            base = self._at_nodes(self._star_plain[1][:, None])[:, 0]
            self._star_base = np.where(base > 0, base, 1.0)

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
        change = [v for n, v in values.items() if n.startswith("kick_bin_")]
        if change:
            # the unkicked keep their share; the whole keeps its number
            bins = np.array([self.templates.parts[i].bin for i in self.templates.rows("neutron_star")])
            new = out[0] * np.exp(np.concatenate([[0.0], change]))[bins]
            out[0] = new * out[0].sum() / new.sum()
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
        first = self.templates.rows("neutron_star").size
        dark[:first] *= values.get("neutron_stars", 1.0)
        dark[first:] *= values.get("black_holes", 1.0)
        out = np.ones(len(self.templates.parts))
        out[self._dark] = dark
        for i in self._own:
            out[i] = values.get(f"class:{self.templates.parts[i].lens}", 1.0)
        return out

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
        d, (v, e, own_v, own_e) = self.data, remnants
        _, shift, ln_stretch, slope = nu
        stretch = float(np.exp(ln_stretch))
        u = slope / SLOPES[2]
        w = np.array([0.5 * u * (u - 1), 1 - u * u, 0.5 * u * (u + 1)])
        factor = w @ self.templates.slope_factor
        i, s = _source(d.nodes, shift, stretch)
        pick = d.field[:, None]
        table, p = np.tensordot(w, self._star, axes=1), self._which[:, None]
        near = (1 - s) * table[p, pick, i] + s * table[p, pick, i + 1]
        if self._alone.size:
            rows = np.tensordot(w, self._alone_rows, axes=1)  # (F, n, R')
            k, f = i[self._alone], pick[self._alone]
            r = s[self._alone][..., None]
            near[self._alone] = np.einsum("nqr,nr->nq", (1 - r) * rows[f, k] + r * rows[f, k + 1], self._alone_weight)
        star = near @ node_weights() / stretch
        if self._joint:
            plain = np.tensordot(w, self._star_plain, axes=1)
            now = ((1 - s) * plain[pick, i] + s * plain[pick, i + 1]) @ node_weights() / stretch
            star = np.where(d.full, self._star_value * now / self._star_base, star)
        found = np.tensordot(w, self._star_found, axes=1)
        mu = np.einsum("fn,fn->f", moved(found, shift, stretch), self._eff) * STEP
        return np.maximum(star + factor[d.field] * v + own_v, _TINY), np.maximum(mu + factor * e + own_e, _TINY)

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
            rate, mu = self.terms(fixed, nu)
            return float(np.sum(np.log(rate))) + self._fields(mu, nu[0]) + self.ln_prior_nu(nu), rate, mu

        best, rate, mu = value(nu)
        if not active.size:
            return best, nu
        for _ in range(_STEPS):
            g, H = self._slopes(fixed, nu, rate, mu)
            step = np.linalg.solve(H, g)
            if 0.5 * g @ step < _SETTLED:
                break
            size = 1.0
            while size > 1e-3:
                new = nu.copy()
                new[active] += size * np.clip(step, -2 * sd[active], 2 * sd[active])
                new[2:] = np.clip(new[2:], [-0.5, -0.9], [0.5, 0.9])
                new_best, new_rate, new_mu = value(new)
                if new_best > best:
                    break
                size *= 0.4
            else:
                break
            nu, best, rate, mu = new, new_best, new_rate, new_mu
        det = np.linalg.slogdet(H)[1]
        return best + 0.5 * active.size * np.log(2 * np.pi) - 0.5 * det, nu

    def _slopes(self, fixed, nu, rate, mu):
        """Gradient of ln posterior in the free nuisances, and its information matrix (squares of first slopes)."""
        active, sd = self.active, self.nuisances.widths
        ln = np.zeros((active.size, rate.size))
        a = np.zeros((active.size, mu.size))
        for j, q in enumerate(active):
            if q == 0:
                ln[j], a[j] = self.anchored[self.data.field], self.anchored
                continue
            h = 1e-2 * min(sd[q], 0.3)
            up, down = np.array(nu), np.array(nu)
            up[q] += h
            down[q] -= h
            (r1, m1), (r0, m0) = self.terms(fixed, up), self.terms(fixed, down)
            ln[j], a[j] = np.log(r1 / r0) / (2 * h), np.log(m1 / m0) / (2 * h)
        m, n, width = mu * np.exp(nu[0]), self.n, self.nuisances.field_rate
        if width > 0:
            k = width**-2
            pull, curve = (k + n) * m / (k + m), (k + n) * m**2 / (k + m) ** 2
        else:
            pull, curve = m, np.zeros_like(m)
        pull, curve = np.where(self.anchored, pull, n), np.where(self.anchored, curve, n)
        g = ln.sum(axis=1) - a @ pull - np.array(nu)[active] / sd[active] ** 2
        H = ln @ ln.T - (a * curve) @ a.T + np.diag(1 / sd[active] ** 2)
        return g, H


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
