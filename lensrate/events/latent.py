"""What may lie behind one event, laid out for planning: points of t_E and pi_E by class and lens mass, with weights."""

from dataclasses import dataclass

import astropy.units as u
import numpy as np

from ..errors import ConvergenceError, InputError
from ..lensing.earth import to_heliocentric, to_north_east
from ..lensing.points import Points
from ..units import KAPPA
from . import likelihood as like_of
from .lens_limit import LensLimit
from .odds import _main, event_odds

__all__ = ["Latent", "latent"]

_POINTS = 768
_SHARE = 0.35  # of the spread of coarse points, width of the kernels around them
_TURN = 2.0 * np.pi
_NOTHING = 1e-7  # share of a class below which a mass at a point is left out


@dataclass(frozen=True, eq=False)
class Latent:
    """Everything that an event may be, given its data.

    Attributes
    ----------
    event : Observed
    classes : tuple of str
    t_E, pi_E, angle : ndarray, shape (N,)
        Points [d, -, rad from +l toward +b], in the frame of the data.
    weight : tuple of ndarray, shape (N, J) each
        By class: posterior weight at each point and mass where the fit is right; sums of all are its probability.
    theta_E : tuple of ndarray, shape (N, J) each
        [mas]
    wrong : ndarray, shape (classes,)
        Posterior weight where everything but t_E is wrong.
    probability : ndarray, shape (classes,)
        Sums to 1.
    running : bool
        Whether long events count for more because this one was caught running.
    effective : float
        Effective number of points, of the likeliest class.
    drawn : ndarray, shape (classes,)
        Weights of the classes as the points alone give them, over the deterministic ones; a check.
    """

    event: object
    classes: tuple
    t_E: np.ndarray
    pi_E: np.ndarray
    angle: np.ndarray
    weight: tuple
    theta_E: tuple
    wrong: np.ndarray
    probability: np.ndarray
    running: bool
    effective: float
    drawn: np.ndarray

    @property
    def main(self):
        """Weight of each class where the fit is right."""
        return np.array([w.sum() for w in self.weight])

    def quantiles(self, levels=(0.16, 0.5, 0.84), name=None):
        """Return quantiles of theta_E [mas], of one class or of all; None where there is nothing."""
        chosen = range(len(self.classes)) if name is None else [self.classes.index(name)]
        x = np.concatenate([self.theta_E[c].ravel() for c in chosen])
        w = np.concatenate([self.weight[c].ravel() for c in chosen])
        some = w > 0
        if not some.any():
            return None
        x, w = x[some], w[some]
        order = np.argsort(x)
        cum = np.cumsum(w[order])
        return [float(v) for v in np.interp(levels, (cum - 0.5 * w[order]) / cum[-1], x[order])]

    def timescales(self):
        """Return the weight of each point, all classes together, (N,)."""
        return sum(w.sum(axis=1) for w in self.weight)

    def vectors(self):
        """Return t_E [d], pi_EN, pi_EE (N,), heliocentric."""
        place = self.event.l * u.deg, self.event.b * u.deg
        north, east = to_north_east(np.cos(self.angle), np.sin(self.angle), *place)
        p_N, p_E, t_E = self.pi_E * north, self.pi_E * east, self.t_E
        if self.event.frame == "heliocentric":
            return t_E, p_N, p_E
        from ..galaxy.frames import icrs_from_galactic

        t, p_N, p_E = to_heliocentric(t_E * u.day, p_N, p_E, self.event.t_0par, *icrs_from_galactic(*place))
        return t.to_value(u.day), np.asarray(p_N), np.asarray(p_E)


def latent(event, line, rng, *, outlier=0.01, running=False, points=_POINTS):
    """Lay out what may lie behind an event.

    Parameters
    ----------
    event : Observed
        Its solutions are mixed by their evidence.
    line : EventRates
    rng : numpy Generator
    outlier : float
        As in `odds`.
    running : bool
        The event was caught running at some date: the chance of that goes with the time it runs, so rates are weighted
        by t_E (length bias).
    points : int
        How many, over all solutions.

    Returns
    -------
    Latent

    Raises
    ------
    InputError
        Posterior samples: they are no table of independent measurements.
    ConvergenceError
        Nothing explains the data.

    Notes
    -----
    One step of population Monte Carlo (Cappe+ 2004, J. Comput. Graph. Stat. 13, 907): the deterministic points of the
    odds, weighed so that every class has its share, are widened into a mixture, from which points are drawn; each
    weighs by target over mixture. The rate is exact at every point, masses are summed, not drawn, and each class is
    scaled to its deterministic probability.
    """
    result = event_odds(event, line, outlier)
    evidence = np.array([s.evidence for s in result.solutions])
    evidence = evidence / evidence.sum()
    blocks = []
    for s, share in zip(event.solutions, evidence):
        if share > 1e-3:
            chi2 = np.exp(-0.5 * s.delta_chi2)
            blocks.append(_solution(s, event, line, rng, max(int(points * share), 64), chi2, running))
    n = len(line.classes)
    t, pi, angle = (np.concatenate([b[k] for b in blocks]) for k in range(3))
    weight = [np.concatenate([b[3][c] for b in blocks]) for c in range(n)]
    theta = [np.concatenate([b[4][c] for b in blocks]) for c in range(n)]
    drawn = np.array([w.sum() for w in weight])
    if not drawn.sum() > 0:
        raise ConvergenceError(f"{event.name}: no lens of this scenario explains the data")
    main, wrong = _exact(event, line, outlier)
    plain = np.array([np.sum(w.sum(axis=1) / (t if running else 1.0)) for w in weight])
    check = np.divide((1 - outlier) * plain, main, out=np.full(n, np.nan), where=main > 0)
    # the length bias moves classes against each other only as far as t_E is uncertain
    longer = np.ones(n)
    if running:
        longer = np.divide(drawn, plain, out=longer, where=plain > 0) / event.t_E.value
    main, wrong = main * longer, wrong * longer
    total = main.sum() + wrong.sum()
    main, wrong = main / total, wrong / total
    weight = [np.where(w > _NOTHING * w.max(initial=0.0), w, 0.0) for w in weight]
    weight = [w * (m / w.sum()) if w.sum() > 0 else w for w, m in zip(weight, main)]
    best = weight[int(np.argmax(main))].sum(axis=1)
    effective = float(best.sum() ** 2 / max((best**2).sum(), 1e-300))
    # a class too rare to be met has no latents: its weight is what the wrong fits leave it
    lost = np.array([0.0 if w.sum() > 0 else m for w, m in zip(weight, main)])
    return Latent(
        event, result.classes, t, pi, angle, tuple(weight), tuple(theta), wrong + lost, main + wrong, running,
        effective, check,
    )  # fmt: skip


def _exact(event, line, outlier):
    """Class weights of right and wrong fits by the deterministic sums."""
    right, wrong = np.zeros(len(line.classes)), np.zeros(len(line.classes))
    for s in event.solutions:
        like = like_of.likelihood(s, event)
        chi2 = np.exp(-0.5 * s.delta_chi2)
        light = LensLimit(s.plain["I_lens_limit"], line) if "I_lens_limit" in s.plain else None
        right += chi2 * _main(like, line, light).sum(axis=1)
        if like.wrong > 0:
            factor = like.wrong * (1.0 if like.known is None else line.source_evidence(like.known))
            wrong += chi2 * factor * line.timescale_only(*like.t_only)
    return (1 - outlier) * right, outlier * wrong


def _solution(s, event, line, rng, n, chi2, running):
    """Points of one solution: t, pi, angle and for each class weights and theta_E, (n, J)."""
    if s.draws is not None:
        raise InputError(f"{event.name}: posterior samples cannot be planned for yet; give their means and errors")
    m = s.measured
    known, earth = like_of._source(s, event), like_of._earth(event)
    light = LensLimit(s.plain["I_lens_limit"], line) if "I_lens_limit" in s.plain else None
    directed = "pi_EN" in m
    t, X, angle, density = _proposal(s, event, line, rng, n, earth)
    terms = np.zeros((3, n, 3))
    for k, name in enumerate(("theta_E", "pi_E", "mu_rel")):
        if name in m and not (name == "pi_E" and directed):
            terms[k] = m[name].value, m[name].lo, m[name].hi
    L = _split(t, m["t_E"])
    if directed:
        north, east = to_north_east(X * np.cos(angle), X * np.sin(angle), event.l * u.deg, event.b * u.deg)
        z_n, z_e = ((p - v.value) / np.where(p > v.value, v.hi, v.lo) for p, v in
                    ((north, m["pi_EN"]), (east, m["pi_EE"])))  # fmt: skip
        rho = s.pi_E_corr
        # the rate is per ln t, ln X and radian; the likelihood is a density over t_E, pi_EN and pi_EE
        L = L * np.exp(-0.5 * (z_n**2 - 2 * rho * z_n * z_e + z_e**2) / (1 - rho**2))
    turning = directed or known is not None or earth != (0.0, 0.0)
    W = chi2 * L / density * (t if running else 1.0) / n
    if not directed:
        angle = _TURN * rng.random(n)
    if turning and not directed:
        W = W * _TURN
    points = Points(t, X, W, False, angle if turning else None, earth, terms)
    weight, theta = [], []
    for rate, ln_M in line.by_mass(points, known, light):
        weight.append(rate)
        theta.append(KAPPA * X[:, None] * np.exp(ln_M))
    return t, X, angle, weight, theta


def _split(x, measure):
    return np.exp(-0.5 * ((x - measure.value) / np.where(x > measure.value, measure.hi, measure.lo)) ** 2)


def _proposal(s, event, line, rng, n, earth):
    """Draw n points, and return them with their density per ln t, ln X (and radian where there is a direction)."""
    m = s.measured
    t, w_t = like_of._nodes(m["t_E"], 3, 9, wide=0.35)
    if "pi_EN" in m:
        coarse = like_of.parallax_points(s, event, t, w_t / t, earth)
    else:
        X, w_X = like_of._nodes(m["pi_E"], 9, 15) if "pi_E" in m else like_of._open_nodes()
        w_X = w_X / X if "pi_E" in m else w_X
        coarse = like_of._outer(t, w_t / t, X, w_X, None, (0.0, 0.0), False)
    coarse = like_of._with_terms(coarse, m, "pi_E")
    rates = line.evaluate(coarse)
    sums = rates.sum(axis=1, keepdims=True)
    if not sums.sum() > 0:
        raise ConvergenceError(f"{event.name}: no lens of this scenario explains the data")
    # every class has its share of the points, rare ones too
    share = np.sqrt(np.maximum(sums / sums.sum(), 0.0)) * (sums > 1e-12 * sums.sum())
    p = (share * rates / np.where(sums > 0, sums, 1.0)).sum(axis=0)
    p /= p.sum()
    T, X = coarse.t_E, coarse.X
    columns = [np.log(T)]
    if coarse.angle is None:
        columns.append(np.log(X))
    else:
        columns += [X * np.cos(coarse.angle), X * np.sin(coarse.angle)]
    at = np.array(columns)
    mean = at @ p
    width = np.sqrt(((at - mean[:, None]) ** 2) @ p)
    width = np.maximum(_SHARE * width, 1e-3 * np.maximum(np.abs(mean), 1e-3))
    if coarse.angle is None and "pi_E" not in m:
        width[1] = max(width[1], 0.15)
    scale = np.repeat(width[:, None], T.size, axis=1)
    if coarse.angle is not None:
        # a wide vector reaches from nothing to its error: near zero the kernels are narrower
        scale[1:] = np.minimum(scale[1:], np.maximum(0.5 * X, 0.02 * width[1:].max()))
    pick = rng.choice(T.size, n, p=p)
    y = at[:, pick] + scale[:, pick] * rng.standard_normal((at.shape[0], n))
    density = np.zeros(n)
    used = np.flatnonzero(p > 1e-9)
    norm = p[used] / np.prod(np.sqrt(_TURN) * scale[:, used], axis=0)
    for i in range(0, n, 256):
        z = (y[:, i : i + 256, None] - at[:, None, used]) / scale[:, None, used]
        density[i : i + 256] = np.exp(-0.5 * (z**2).sum(axis=0)) @ norm
    t = np.exp(y[0])
    if coarse.angle is None:
        return t, np.exp(y[1]), np.zeros(n), density
    size = np.maximum(np.hypot(y[1], y[2]), 1e-9)
    return t, size, np.arctan2(y[2], y[1]), density * size**2
