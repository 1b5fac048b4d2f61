"""Events as the likelihood sees them: nodes of ln t_E for every event, and a weight of every part for its masses.

An event's own term holds no efficiency: that it was found is a fact about its data. What depends on things outside the
data, a measurement made or not, enters through declared probabilities by class.
"""

from dataclasses import dataclass

import numpy as np
from scipy.special import i0e

from ..errors import InputError
from ..events.fold import LN_T, STEP, assign, heliocentric
from ..lensing.distributions import MassGrid
from ..parallel import run_map
from ..units import DAYS_PER_YEAR, KAPPA
from .selection import STAGES, Selection
from .templates import _plan

__all__ = ["Data", "made", "mass_weight", "observed_data"]

_NODES, _WEIGHTS = np.polynomial.hermite_e.hermegauss(5)
_WEIGHTS = _WEIGHTS / np.sqrt(2 * np.pi)
_STEPS = (0.03, 0.06, 0.12)  # of ln M
_ROOT = np.sqrt(2 * np.pi)
# of pi_E: hardly a lens is beyond these; step in the logarithm where a measurement is wide
_LEAST, _MOST, _FINE = 1e-4, 30.0, 0.12


@dataclass(frozen=True, eq=False)
class Data:
    """Events ready for the likelihood.

    Attributes
    ----------
    field : ndarray of int, shape (n,)
    x, sigma : ndarray, shape (n,)
        ln t_E and its error.
    weight : ndarray, shape (n, R)
        Of each part, from the event's mass and its stage; ones where nothing but t_E is known.
    value : ndarray, shape (n, R)
        Rate of each part at the event's own data, errors of measurement integrated over.
    full : ndarray of bool, shape (n,)
        Whether `value` came from the joint distribution with parallax or angular radius, not from t_E and `weight`.
    names : tuple of str
    notes : tuple of str
    """

    field: np.ndarray
    x: np.ndarray
    sigma: np.ndarray
    weight: np.ndarray
    value: np.ndarray
    full: np.ndarray
    names: tuple = ()
    notes: tuple = ()

    @property
    def nodes(self):
        """ln t_E of the nodes of each event, (n, q)."""
        return self.x[:, None] + self.sigma[:, None] * _NODES

    def __len__(self):
        return self.x.size


def node_weights():
    """Return the weights of `Data.nodes`."""
    return _WEIGHTS


def made(templates, field, x, sigma, weight=None, joint=None, names=(), notes=()):
    """Return Data from arrays; `joint` is a dict of event to its values by part."""
    field, x, sigma = (np.asarray(v) for v in (field, x, sigma))
    R = len(templates.parts)
    weight = np.ones((x.size, R)) if weight is None else weight
    place = np.clip((x[:, None] + sigma[:, None] * _NODES - LN_T[0]) / STEP, 0, LN_T.size - 1.001)
    i = place.astype(int)
    s = place - i
    value = np.zeros((x.size, R))
    for q in range(_NODES.size):
        low, high = templates.rate[field, :, i[:, q]], templates.rate[field, :, i[:, q] + 1]
        value += _WEIGHTS[q] * (low + s[:, q, None] * (high - low))
    value *= weight
    full = np.zeros(x.size, dtype=bool)
    for k, v in (joint or {}).items():
        value[k], full[k] = weight[k] * v, True
    return Data(field, x, sigma, weight, value, full, tuple(names), tuple(notes))


def mass_weight(templates, ln_mass, error):
    """Return the density of measured ln M (n,) for every part, (n, R)."""
    mean = np.array([p.ln_mass for p in templates.parts])
    width = np.sqrt(error**2 + np.array([p.spread for p in templates.parts]) ** 2)
    return np.exp(-0.5 * ((np.asarray(ln_mass)[:, None] - mean) / width) ** 2) / (_ROOT * width)


def observed_data(sample, templates, selection=None, executor=None, only_t_E=False):
    """Return the events of a sample that lie in the templates' fields.

    Parameters
    ----------
    sample : Sample
    templates : Templates
    selection : Selection, optional
    executor : object with ``map``, optional
        For the events with a parallax or an angular radius, the slow ones.
    only_t_E : bool
        Take no value of a parallax or an angular radius: they still make geocentric timescales heliocentric, and say
        which stage an event reached.

    Returns
    -------
    Data

    Raises
    ------
    InputError
        No event, or none in a field; a sample of a stage that its events did not reach.
    """
    selection = selection or Selection()
    if not len(sample):
        raise InputError(f"sample '{sample.name}': no events")
    index = assign(sample.events, templates.forecast.campaign.fields)
    events = [e for e, i in zip(sample.events, index) if i >= 0]
    outside = [e for e, i in zip(sample.events, index) if i < 0]
    if not events:
        raise InputError(
            f"sample '{sample.name}': none of its {len(outside)} events lies in a field of campaign "
            f"'{templates.forecast.campaign.name}'"
        )
    field = index[index >= 0]
    x, sigma, parallax, notes = heliocentric(events)
    if outside:
        shown = ", ".join(e.name for e in outside[:8])
        notes.append(f"{len(outside)} events outside all fields are left out: {shown}")
    weight, known = np.ones((len(events), len(templates.parts))), []
    for i, (e, pi) in enumerate(zip(events, parallax)):
        theta = _theta(e)
        reached = "found" if pi is None else "mass" if theta is not None else "parallax"
        if selection.listed == "followed" and reached == "parallax":
            reached = "followed"  # being in such a sample says so
        if selection.listed != "found" and STAGES.index(selection.listed) > (
            -1 if reached == "found" else STAGES.index(reached)
        ):
            raise InputError(
                f"event '{e.name}': the sample is one of events with '{selection.listed}', which this one has not"
            )
        if selection.declared:
            by = {lens: selection.weight(lens, reached) for lens in templates.classes}
            weight[i] = [by[p.lens] for p in templates.parts]
        if not only_t_E and (pi is not None or theta is not None):
            known.append((i, (int(field[i]), float(x[i]), float(sigma[i]), pi, theta)))
    values = run_map(_Joints(templates), [job for _, job in known], executor=executor)
    joint = {i: v for (i, _), v in zip(known, values)}
    return made(templates, field, x, sigma, weight, joint, [e.name for e in events], [*sample.notes, *notes])


def _theta(event):
    """Angular Einstein radius [mas] and error of the best solution, also from a measured proper motion; or None."""
    best = event.best_solution
    if "theta_E" in best.measured:
        m = best.measured["theta_E"]
        return m.value, m.err
    if "mu_rel" in best.measured:
        m, t = best.measured["mu_rel"], event.t_E.value / DAYS_PER_YEAR
        return m.value * t, m.err * t
    if best.draws is not None and "theta_E" in best.draws.columns:
        low, middle, high = best.draws.quantiles("theta_E")
        return middle, 0.5 * (high - low)
    return None


class _Joints:
    """Values of all parts at events of any field."""

    def __init__(self, templates):
        self._templates, self._kept = templates, {}

    def __call__(self, job):
        field, *event = job
        if field not in self._kept:
            self._kept[field] = _Joint(self._templates, field)
        return self._kept[field].of(*event)


class _Joint:
    """Values of all parts of one field at events with a parallax, an angular radius, or both."""

    def __init__(self, templates, field):
        f = templates.forecast.fields[field]
        self._integrals = f.sightline._integrals
        self._exposure = templates.exposure[field]
        model = f.sightline._model
        _, build = _plan(templates.forecast.fields[0].sightline._model)
        self._spectra = build(model, 0.0)
        self._laid = {}

    def _masses(self, step):
        if step not in self._laid:
            grid = MassGrid.deposit(0.5 * step, self._spectra)
            self._laid[step] = np.exp(step * (grid.k0 + np.arange(grid.weight.shape[2]))), grid.weight
        return self._laid[step]

    def of(self, x, sigma, pi, theta):
        """Rate of every part at the data, per ln t_E and per unit of each other datum."""
        width = np.inf
        if pi is not None and theta is not None:
            width = np.hypot(min(pi[1] / max(pi[0], 1e-9), 3.0), theta[1] / theta[0])
        step = next((s for s in reversed(_STEPS) if s <= 0.5 * width), _STEPS[0])
        mass, weight = self._masses(step)
        grid, T = self._integrals.grid, self._integrals.T
        flat = T.reshape(T.shape[0], -1)
        K = grid.mu.size
        t = np.exp(x + sigma * _NODES) / DAYS_PER_YEAR
        found = np.zeros((mass.size, T.shape[0]))
        for m, M in enumerate(mass):
            nodes, likely = _parallax_nodes(M, pi, theta)
            if nodes is None:
                continue
            # cells of (ln pi_rel, ln mu_rel) at every pair of parallax and timescale
            a = (np.log(KAPPA * M * nodes**2 / grid.pi[0]) / (2 * grid.h))[:, None] + 0 * t
            c = np.log(KAPPA * M * nodes[:, None] / t / grid.mu[0]) / grid.h
            w = likely[:, None] * _WEIGHTS * 2.0 * np.sqrt(M)
            inside = (a >= 0) & (a < grid.pi.size - 1) & (c >= 0) & (c < K - 1)
            if not inside.any():
                continue
            a, c, w = a[inside], c[inside], w[inside]
            i, k = a.astype(int), c.astype(int)
            s, r = a - i, c - k
            for di, wi in ((0, 1 - s), (1, s)):
                for dk, wk in ((0, 1 - r), (1, r)):
                    found[m] += flat[:, (i + di) * K + k + dk] @ (w * wi * wk)
        # the spectra's weights hold sqrt(M) already
        found /= np.sqrt(mass)[:, None]
        return np.maximum(self._exposure * np.einsum("rem,me->r", weight, found), 0.0)


def _parallax_nodes(M, pi, theta):
    """Nodes of pi_E for lenses of one mass, and the likelihood of parallax and radius times d ln pi_E."""
    parts = []
    if pi is not None:
        parts.append((pi[0], pi[1]))
    if theta is not None:
        parts.append((theta[0] / (KAPPA * M), theta[1] / (KAPPA * M)))
    inverse = sum(1 / s**2 for _, s in parts)
    centre, width = sum(v / s**2 for v, s in parts) / inverse, inverse**-0.5
    if any(abs(v - centre) > 8 * s for v, s in parts):
        return None, None
    if centre > 4.5 * width:
        nodes = centre + width * np.linspace(-4, 4, 13)
        step = (nodes[1] - nodes[0]) / nodes
    else:
        low = max(centre - 5 * width, min(1e-2 * width, _LEAST))
        high = min(max(centre, 0.0) + 5 * width, _MOST)
        nodes = np.geomspace(low, max(high, 1.1 * low), 8 + int(np.log(max(high / low, 1.0)) / _FINE))
        step = np.full(nodes.size, np.log(nodes[1] / nodes[0]))
    likely = step
    if pi is not None:
        value, error, vector = pi
        if vector:
            a, b = value / error, nodes / error
            # both components, the direction of motion unknown
            likely = likely * i0e(a * b) * np.exp(-0.5 * (a - b) ** 2) / (2 * np.pi * error**2)
        else:
            likely = likely * np.exp(-0.5 * ((value - nodes) / error) ** 2) / (_ROOT * error)
    if theta is not None:
        likely = likely * np.exp(-0.5 * ((theta[0] - KAPPA * M * nodes) / theta[1]) ** 2) / (_ROOT * theta[1])
    return nodes, likely
