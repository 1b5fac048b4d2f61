"""How much a planned measurement would say about the lens's class: bits, chances of certainty, false alarms."""

from dataclasses import dataclass

import numpy as np

from ..kernels import followup as kernels
from ..lensing.points import Points, SourceData
from .lens_limit import LensLimit

__all__ = ["SURE", "Outcomes", "Worth", "of_source_motion", "of_widths", "unseen", "worth"]

SURE = 0.95
_LN_SPAN = 4.0 * np.log(10.0)
_TINY = 1e-300
_MEMBERS = 40  # points that stand for an event where its source's motion is planned


@dataclass(frozen=True)
class Worth:
    """What a planned measurement is expected to say.

    Attributes
    ----------
    bits, bits_error : float
        Mutual information between the lens's class and the outcome, and its Monte Carlo error: of the outcomes, and of
        the points (one over the root of their effective number).
    target_bits, target_error : float
        The same between outcome and whether the lens is of the target class.
    sure, sure_error : float
        Chance that some class then exceeds 0.95.
    target_sure, target_sure_error : float
        Chance that the target class does.
    false_alarm : float
        Share of those in which the lens is then of another class, wrong fits included; NaN where there are none.
    """

    bits: float
    bits_error: float
    target_bits: float
    target_error: float
    sure: float
    sure_error: float
    target_sure: float
    target_sure_error: float
    false_alarm: float

    def to_dict(self):
        """Return plain numbers."""
        return {k: (None if v != v else v) for k, v in self.__dict__.items()}


@dataclass(frozen=True, eq=False)
class Outcomes:
    """Simulated outcomes.

    Attributes
    ----------
    true, stratum : ndarray of int, shape (K,)
        True class, and number of the stratum (class, and whether the fit is right).
    weight : ndarray, shape (K,)
        Probability that each stands for, the same within a stratum.
    chance : ndarray, shape (V, K)
        Of each variant of an outcome: one, or the lens dark and shining.
    posterior : ndarray, shape (V, K, classes)
        Probabilities after it.
    """

    true: np.ndarray
    stratum: np.ndarray
    weight: np.ndarray
    chance: np.ndarray
    posterior: np.ndarray


def of_widths(latent, sharp, rng, number=128, dark=None):
    """Simulate a measurement with Gaussian errors of t_E, pi_E and theta_E, and of whether the lens shines.

    Parameters
    ----------
    latent : Latent
    sharp : list of ndarray, shape (3, N, J)
        From `plans.sharpness`.
    rng : numpy Generator
    number : int
        Outcomes of each class, and of fits that are wrong.
    dark : list of ndarray, shape (N, J), optional
        By class: chance that the lens is not seen; its light is then looked for as well.

    Returns
    -------
    Outcomes

    Notes
    -----
    Outcomes are drawn from the posterior, class by class; each is then judged by sums over all points and masses. In
    fits that are wrong, new values of pi_E and theta_E too are log-uniform over four decades, as in the odds. That
    nothing could be measured is an outcome too.
    """
    n = len(latent.classes)
    ln_t = np.log(latent.t_E)
    rows, outcomes = [], {}  # (true class, weight, outcomes, chance of a dark lens) of each stratum
    for c in range(n):
        cells = _pick(latent.weight[c].ravel(), number, rng)
        z = rng.standard_normal((number, 3))
        if cells is None:
            continue
        point = cells // latent.weight[c].shape[1]
        value = np.column_stack([ln_t[point], latent.pi_E[point], latent.theta_E[c].ravel()[cells]])
        s = sharp[c].reshape(3, -1)[:, cells].T
        outcomes[c] = np.where(s > 0, value + z / np.where(s > 0, s, 1.0), np.nan)
        unseen = np.ones(number) if dark is None else dark[c].ravel()[cells]
        rows.append((c, latent.weight[c].sum(), outcomes[c], unseen))
    middle = [float(np.median(latent.pi_E)), latent.quantiles((0.5,))[0]]
    unlit = np.array([1.0 if dark is None or not w.sum() > 0 else np.sum(w * d) / w.sum()
                      for w, d in zip(latent.weight, dark or latent.weight)])  # fmt: skip
    if latent.wrong.sum() > 0:
        made = outcomes[int(np.argmax(latent.main))].copy()
        for k in (1, 2):
            spread = middle[k - 1] * np.exp(_LN_SPAN * (rng.random(number) - 0.5))
            made[:, k] = np.where(np.isnan(made[:, k]), np.nan, spread)
        rows += [(c, latent.wrong[c], made, np.full(number, unlit[c])) for c in range(n) if latent.wrong[c] > 0]
    y = np.ascontiguousarray(np.concatenate([r[2] for r in rows]))
    variants = [(None, None)] if dark is None else [(dark, unlit), ([1 - d for d in dark], 1 - unlit)]
    wrong = _wrong_density(latent, sharp, y, middle) if latent.wrong.sum() > 0 else np.zeros(len(y))
    posterior = np.empty((len(variants), len(y), n))
    for v, (share, mean) in enumerate(variants):
        right = latent.wrong[:, None] * wrong * (1.0 if mean is None else mean[:, None])
        for c in range(n):
            if latent.weight[c].sum() > 0:
                out = np.empty(len(y))
                w = latent.weight[c] * (1.0 if share is None else share[c])
                kernels.judged(w, ln_t, latent.pi_E, latent.theta_E[c], sharp[c], y, out)
                right[c] += out
        total = right.sum(axis=0)
        posterior[v] = np.where(total > 0, right / np.maximum(total, _TINY), latent.probability[:, None]).T
    unseen = np.concatenate([r[3] for r in rows])
    repeat = np.repeat(np.arange(len(rows)), number)
    return Outcomes(
        true=np.array([r[0] for r in rows])[repeat],
        stratum=repeat,
        weight=np.array([r[1] for r in rows])[repeat] / number,
        chance=np.ones((1, len(y))) if dark is None else np.array([unseen, 1 - unseen]),
        posterior=posterior,
    )


def _pick(weight, number, rng):
    total = weight.sum()
    if not total > 0:
        return None
    cum = np.cumsum(weight)
    at = (np.arange(number) + rng.random(number)) / number * total
    return np.minimum(np.searchsorted(cum, at), weight.size - 1)


def _wrong_density(latent, sharp, y, middle):
    """Density of each outcome where the fit is wrong: t_E as it is, the others log-uniform."""
    best = int(np.argmax(latent.main))
    w = latent.timescales()
    s, ln_t = sharp[best][0][:, 0], np.log(latent.t_E)
    out = np.zeros(len(y))
    some = np.isfinite(y[:, 0])
    if some.any():
        z = (y[some, :1] - ln_t) * s
        out[some] = np.exp(-0.5 * np.minimum(z * z, 200.0)) @ (w * s / np.sqrt(2 * np.pi)) / w.sum()
    out[~some] = 1.0 if not (s > 0).all() else 0.0
    for k in (1, 2):
        v = y[:, k]
        inside = (v > 0.01 * middle[k - 1]) & (v < 100.0 * middle[k - 1])
        density = np.where(inside, 1.0 / (np.where(inside, v, 1.0) * _LN_SPAN), 0.0)
        out *= np.where(np.isnan(v), 1.0, density)
    return out


def worth(latent, outcomes, target, base=None):
    """Sum up simulated outcomes.

    Parameters
    ----------
    latent : Latent
    outcomes : Outcomes
    target : str
        Lens class asked for.
    base : Outcomes, optional
        Outcomes of what is measured anyhow, drawn with the same random numbers: bits are then those gained over it.

    Returns
    -------
    Worth
    """
    c = latent.classes.index(target)
    true, w = outcomes.true, outcomes.weight / outcomes.weight.sum()
    prior = np.maximum(latent.probability, _TINY)
    before = np.where(true == c, prior[c], max(1.0 - prior[c], _TINY))

    def terms(o):
        p = np.maximum(o.posterior, _TINY)
        every = np.log2(p[:, np.arange(true.size), true] / prior[true])
        mine = np.where(true == c, p[:, :, c], np.maximum(1.0 - p[:, :, c], _TINY))
        return [(o.chance * x).sum(axis=0) for x in (every, np.log2(mine / before))]

    bits, own = terms(outcomes)
    if base is not None:
        b, o = terms(base)
        bits, own = bits - b, own - o
    top = (outcomes.chance * (outcomes.posterior.max(axis=2) > SURE)).sum(axis=0)
    alarm = (outcomes.chance * (outcomes.posterior[:, :, c] > SURE)).sum(axis=0)
    surely = outcomes.posterior[:, :, c]
    hit = float(w @ alarm)
    # by the probabilities themselves: less noisy than counting the few that were wrong
    wrong = float(w @ (outcomes.chance * (surely > SURE) * (1.0 - surely)).sum(axis=0))
    means = [_mean(x, w, outcomes.stratum) for x in (bits, own, top, alarm)]
    # the points that stand for the event are a sample too
    means = [(x, float(np.hypot(error, x / np.sqrt(latent.effective)))) for x, error in means]
    return Worth(*(x for pair in means for x in pair), wrong / hit if hit > 0 else np.nan)


def _mean(x, w, stratum):
    """Weighted mean and its standard error, strata apart."""
    variance = 0.0
    for s in np.unique(stratum):
        mine = stratum == s
        variance += w[mine].sum() ** 2 * x[mine].var() / max(mine.sum() - 1, 1)
    return float(w @ x), float(np.sqrt(variance))


def _exact_worth(latent, table, target):
    """Worth from a table of outcomes: joint probability of class (rows) and outcome (columns), without sampling."""
    joint = np.maximum(table, 0.0) / table.sum()
    seen = joint.sum(axis=0)
    after = joint / np.maximum(seen, _TINY)
    c = latent.classes.index(target)
    before = joint.sum(axis=1)

    def entropy(p):
        return -np.sum(np.where(p > 0, p * np.log2(np.maximum(p, _TINY)), 0.0), axis=0)

    bits = float(entropy(before) - seen @ entropy(after))
    two = np.array([after[c], 1 - after[c]])
    own = float(entropy(np.array([before[c], 1 - before[c]])) - seen @ entropy(two))
    alarm = after[c] > SURE
    hit = float(seen @ alarm)
    false = float((joint.sum(axis=0) - joint[c]) @ alarm) / hit if hit > 0 else np.nan
    return Worth(bits, 0.0, own, 0.0, float(seen @ (after.max(axis=0) > SURE)), 0.0, hit, 0.0, false)


def unseen(latent, line, limit):
    """Return the chance that the lens is fainter than a limit in I, by class (N, J); unrelated stars are left out."""
    chosen = np.arange(latent.t_E.size)
    points = _points(latent, chosen)
    shown, hidden = line.by_mass(points), line.by_mass(points, light=LensLimit(limit, line))
    return [
        np.clip(np.divide(b, a, out=np.ones_like(a), where=a > 0), 0.0, 1.0) for (a, _), (b, _) in zip(shown, hidden)
    ]


def of_source_motion(latent, line, error, target, rng, number=20):
    """Return the Worth of measuring the source's proper motion to `error` [mas/yr] along each axis.

    Outcomes are drawn from all sources of the sightline and weighed: the class rates at what the event may be, given
    the motion, over those without.
    """
    chosen, share = _members(latent, rng)
    points = _points(latent, chosen, turned=True)
    plain = line.evaluate(points)
    ratio = []
    src = line.ready.src
    flat = src.reshape(6, -1)
    pick = rng.choice(flat.shape[1], number, p=flat[0] / flat[0].sum())
    for i in pick:
        mean, cov = flat[1:3, i], np.array([[flat[3, i], flat[4, i]], [flat[4, i], flat[5, i]]])
        y = rng.multivariate_normal(mean, cov + error**2 * np.eye(2))
        known = SourceData(np.array([*y, error**2, 0.0, error**2]))
        given = line.evaluate(points, known)
        density = np.array([
            share[c] @ np.divide(given[c], plain[c], out=np.zeros(chosen.size), where=plain[c] > 0)
            for c in range(len(latent.classes))
        ])  # fmt: skip
        ratio.append(density / line.source_evidence(known))
    p = latent.probability
    table = p[:, None] * np.array(ratio).T
    # every class's outcomes are those of all sources, weighed: their sums are 1 but for the sample
    table *= (p / np.maximum(table.sum(axis=1), _TINY))[:, None]
    found = _exact_worth(latent, table, target)
    parts = [_exact_worth(latent, _scaled(table, np.arange(number) % 4 != k, p), target) for k in range(4)]
    errors = [
        float(np.sqrt(0.75 * np.sum([(getattr(x, name) - getattr(found, name)) ** 2 for x in parts])))
        for name in ("bits", "target_bits", "sure", "target_sure")
    ]
    return Worth(
        found.bits, errors[0], found.target_bits, errors[1], found.sure, errors[2], found.target_sure, errors[3],
        found.false_alarm,
    )  # fmt: skip


def _scaled(table, keep, p):
    part = table[:, keep]
    return part * (p / np.maximum(part.sum(axis=1), _TINY))[:, None]


def _points(latent, chosen, turned=False):
    event = latent.event
    from .likelihood import _earth

    earth = _earth(event)
    directed = turned or earth != (0.0, 0.0)
    return Points(
        latent.t_E[chosen], latent.pi_E[chosen], np.ones(chosen.size), False,
        latent.angle[chosen] if directed else None, earth,
    )  # fmt: skip


def _members(latent, rng):
    """Few points that stand for the event, and the share of each class at them, (classes, n)."""
    shares = np.array([w.sum(axis=1) / w.sum() if w.sum() > 0 else np.zeros(w.shape[0]) for w in latent.weight])
    lead = np.average(shares, axis=0, weights=latent.probability + 0.02)
    q = 0.5 * lead / lead.sum() + 0.5 * shares.sum(axis=0) / max(shares.sum(), _TINY)
    cells = _pick(q, _MEMBERS, rng)
    share = shares[:, cells] / q[cells]
    return cells, share / np.maximum(share.sum(axis=1, keepdims=True), _TINY)
