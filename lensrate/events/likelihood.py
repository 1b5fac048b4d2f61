"""From what is measured of an event to points at which the rate is wanted, with the likelihood as their weights.

Likelihoods are one at their peak, so degenerate solutions compare by their delta_chi2 and by how wide they are. Points
live in the data's frame; the rate is carried there, so errors never have to be.
"""

from dataclasses import dataclass, replace

import astropy.units as u
import numpy as np

from ..errors import InputError
from ..galaxy.frames import icrs_from_galactic
from ..lensing.earth import earth_velocity, from_north_east
from ..lensing.points import Points, SourceData
from ..units import DAYS_PER_YEAR

__all__ = ["DECADES", "Likelihood", "likelihood"]

#: decades over which a wrong number is spread, evenly in the logarithm
DECADES = 4.0
_LN_SPAN = DECADES * np.log(10.0)
_NARROW = 0.2  # relative error above which Gauss-Hermite nodes give way to even ones
_MOST_DRAWS = 2000
_ANGLES = 16
_POLAR_STEP = 0.16  # of ln pi_E
_FEWEST_TURNS = 36  # directions: the rate of cold lenses turns too
_CONDITIONED_ANGLES = 32
_ROOT = np.sqrt(2.0 * np.pi)


@dataclass(frozen=True, eq=False)
class Likelihood:
    """Points and weights of one solution, and what else it takes.

    Attributes
    ----------
    points : Points
    known : SourceData or None
    wrong : float
        Likelihood that replaces the main one's peak where everything but t_E is wrong: the log-uniform density of the
        measured numbers times the volume of their errors. 0 where only t_E is measured.
    t_only : (ndarray, ndarray)
        Timescales [d] and weights, each per ln t_E, of the same solution with t_E alone.
    draws : int
        Number of posterior samples that the points are, in order; 0 where they are none.
        The samples' scatter limits the answer.
    rests_on : tuple of str
        The quantities that enter.
    """

    points: Points
    known: SourceData | None
    wrong: float
    t_only: tuple
    draws: int
    rests_on: tuple


def likelihood(solution, event, direct=False):
    """Prepare one solution of an event.

    Parameters
    ----------
    solution : Solution
    event : Observed
        Says place and frame.
    direct : bool
        Take directions as points even where sizes alone would do; for tests.

    Returns
    -------
    Likelihood

    Raises
    ------
    InputError
        Nothing to go by, or an epoch outside the ephemeris.
    """
    known = _source(solution, event)
    earth = _earth(event)
    if solution.draws is not None:
        return _of_draws(solution, event, known, earth)
    m = solution.measured
    if "t_E" not in m:
        raise InputError(f"{event.name}: no t_E")
    t, w_t = _timescales(m["t_E"])
    directed = "pi_EN" in m
    wrong, rests = 1.0, ["t_E"]
    for name in ("theta_E", "mu_rel"):
        if name in m:
            wrong *= _ROOT * m[name].err / (_LN_SPAN * m[name].value)
            rests.append(name)
    measured_sizes = {k: m[k] for k in ("pi_E", "theta_E", "mu_rel") if k in m}
    if directed:
        rests.append("pi_E")
        size = max(np.hypot(m["pi_EN"].value, m["pi_EE"].value), m["pi_EN"].err, m["pi_EE"].err)
        volume = 2 * np.pi * m["pi_EN"].err * m["pi_EE"].err * np.sqrt(1 - solution.pi_E_corr**2)
        wrong *= volume / (2 * np.pi * size**2 * _LN_SPAN)
        points, used = _vector_points(solution, event, measured_sizes, t, w_t, earth)
    else:
        if "pi_E" in m:
            rests.append("pi_E")
            wrong *= _ROOT * m["pi_E"].err / (_LN_SPAN * max(m["pi_E"].value, m["pi_E"].err))
        used = min(measured_sizes, key=lambda k: _relative(m[k]), default=None)
        if used is None:
            X, w_X, used = *_open_nodes(), None
        else:
            X, w_X = _nodes(m[used], 9, 15)
            w_X = w_X / X
        if used == "mu_rel":
            points = _crossed(t, w_t, X, w_X, earth)
        else:
            points = _outer(t, w_t, X, w_X, None, earth, used == "theta_E")
        if direct or earth != (0.0, 0.0):
            # a frame that moves has no table
            points = replace(points, turns=_CONDITIONED_ANGLES if known is not None else _ANGLES)
    points = _with_terms(points, m, used)
    if known is not None:
        rests += ["source motion"] * (known.motion is not None) + ["source distance"] * (known.distance is not None)
    alone = len(rests) == 1
    return Likelihood(points, known, 0.0 if alone else wrong, (t, w_t), 0, tuple(rests))


def _open_nodes():
    step = 0.1 * np.log(10.0)
    X = np.exp(np.arange(np.log(1e-4), np.log(1e2), step))
    return X, np.full(X.size, step)


def _relative(measure):
    return max(measure.lo, measure.hi) / max(abs(measure.value), 1e-12)


def _timescales(measure):
    """Nodes over a timescale, in whose logarithm the rate is smooth, and their weights per ln t_E."""
    relative = _relative(measure)
    n = 1 if relative < 0.01 else 3 if relative < 0.1 else 5 if relative < 0.2 else 9
    t, w = _nodes(measure, n, n, wide=0.35)
    return t, w / t


def _nodes(measure, few, more, wide=_NARROW):
    """Nodes and weights of the integral over a likelihood whose peak is one."""
    relative, split = _relative(measure), max(measure.lo, measure.hi) / min(measure.lo, measure.hi)
    if relative < wide and split < 1.3:
        z, w = np.polynomial.hermite.hermgauss(few if relative < 0.05 else more)
        z = np.sqrt(2.0) * z
        sigma = np.where(z > 0, measure.hi, np.where(z < 0, measure.lo, measure.err))
        x = measure.value + z * sigma
        # the outermost nodes weigh nothing and may lie below zero
        kept = x > 0.05 * measure.value
        return x[kept], (np.sqrt(2.0) * w * sigma)[kept]
    lo = max(measure.value - 5 * measure.lo, 1e-3 * (measure.value + measure.hi))
    hi = measure.value + 5 * measure.hi
    z, w = np.polynomial.legendre.leggauss(12)
    middle = min(max(measure.value, lo), hi)
    x, weight = [], []
    for a, b in ((lo, middle), (middle, hi)):
        if b > a:
            x.append(0.5 * (a + b) + 0.5 * (b - a) * z)
            weight.append(0.5 * (b - a) * w)
    x, weight = np.concatenate(x), np.concatenate(weight)
    sigma = np.where(x > measure.value, measure.hi, measure.lo)
    return x, weight * np.exp(-0.5 * ((x - measure.value) / sigma) ** 2)


def _vector_points(solution, event, sizes, t, w_t, earth):
    """Points over timescale and parallax vector, and the size that they run over."""
    m = solution.measured
    north, east = m["pi_EN"], m["pi_EE"]
    own = max(north.err, east.err) / max(np.hypot(north.value, east.value), 1e-12)
    used = min((k for k in sizes if k != "pi_E"), key=lambda k: _relative(m[k]), default=None)
    if used is not None and _relative(m[used]) < 0.7 * own:
        # the vector then is a likelihood of mass and direction
        X, w_X = _nodes(m[used], 5, 9)
        turn, w_turn = _turns(north, east)
        n, e = np.tile(np.array([np.cos(turn), np.sin(turn)]), X.size)
        angle = np.tile(_angle(np.cos(turn), np.sin(turn), event), X.size)
        weight = np.repeat(w_X / X, turn.size) * np.tile(w_turn, X.size)
        X = np.repeat(X, turn.size)
        crossed = used == "mu_rel"
        points = _crossed(t, w_t, X, weight, earth) if crossed else _outer(t, w_t, X, weight, None, earth, True)
        vector = np.array([north.value, north.lo, north.hi, east.value, east.lo, east.hi, solution.pi_E_corr])
        return replace(
            points, angle=np.tile(angle, t.size), vector=vector, toward=np.tile(np.array([n, e]), t.size)
        ), used  # fmt: skip
    return parallax_points(solution, event, t, w_t, earth), "pi_E"


def parallax_points(solution, event, t, w_t, earth):
    """Points over timescale and parallax vector, with parallaxes as sizes."""
    north, east = solution.measured["pi_EN"], solution.measured["pi_EE"]
    if max(north.err, east.err) >= _NARROW * np.hypot(north.value, east.value):
        # the rate varies with the logarithm of a parallax, and near zero faster than the errors
        return _polar_points(solution, event, t, w_t, earth)
    X, angle, w_X = _parallax_nodes(solution, event)
    return _outer(t, w_t, X, w_X / X**2, angle, earth, False)


def _parallax_nodes(solution, event):
    """Sizes, angles from +l toward +b and weights (per pi_EN and pi_EE) over a parallax vector's likelihood."""
    north, east = solution.measured["pi_EN"], solution.measured["pi_EE"]
    if max(north.lo / north.hi, north.hi / north.lo, east.lo / east.hi, east.hi / east.lo) < 1.3:
        z, w = np.polynomial.hermite.hermgauss(5)
        z, w = np.sqrt(2.0) * z, np.sqrt(2.0) * w
    else:
        # even points: the trapezoid rule is exact for Gaussians
        z = np.linspace(-4.2, 4.2, 13)
        w = np.exp(-0.5 * z * z) * (z[1] - z[0])
    z1, z2 = (a.ravel() for a in np.meshgrid(z, z, indexing="ij"))
    weight = np.outer(w, w).ravel()
    rho = solution.pi_E_corr
    z_e = rho * z1 + np.sqrt(1 - rho**2) * z2
    s_n, s_e = (np.where(a > 0, m.hi, np.where(a < 0, m.lo, m.err)) for a, m in ((z1, north), (z_e, east)))
    p_n, p_e = north.value + z1 * s_n, east.value + z_e * s_e
    weight = weight * s_n * s_e * np.sqrt(1 - rho**2)
    X = np.maximum(np.hypot(p_n, p_e), 1e-9)
    keep = weight > 1e-9 * weight.max()
    return X[keep], _angle(p_n, p_e, event)[keep], weight[keep]


def _turns(north, east, size=None):
    """Directions from north toward east that a parallax vector (of a given size) may have, and their weights."""
    sigma = max(north.lo, north.hi, east.lo, east.hi)
    middle = np.hypot(north.value, east.value)
    if middle > 4.5 * sigma:
        x, w = np.polynomial.legendre.leggauss(12)
        reach = np.arcsin(4.5 * sigma / middle)
        return np.arctan2(east.value, north.value) + reach * x, reach * w
    # a trapezoid rule is good to 1e-4 where a Gaussian has a node for each 1.3 dispersions
    size = middle + sigma if size is None else size
    n = int(np.clip(np.ceil(2 * np.pi / 1.3 * size / min(north.err, east.err)), _FEWEST_TURNS, 120))
    return (np.arange(n) + 0.5) * (2 * np.pi / n), np.full(n, 2 * np.pi / n)


def _polar_points(solution, event, t, w_t, earth):
    """Points even in angle and logarithm of size, for a parallax vector with large errors.

    Sizes go with 1 / t_E, so that points of all timescales share few motions.
    """
    north, east = solution.measured["pi_EN"], solution.measured["pi_EE"]
    sigma = max(north.lo, north.hi, east.lo, east.hi)
    size = np.hypot(north.value, east.value)
    lo, hi = max(size - 4.5 * sigma, min(0.03 * sigma, 3e-3)), size + 4.5 * sigma
    # neither the rate nor the shorter of the errors may be stepped over
    step = float(np.clip(1.3 * min(north.err, east.err) / max(size, 1e-12), 0.04, _POLAR_STEP))
    middle = np.sqrt(t.min() * t.max())
    # a trapezoid rule: the integrand fades out at both ends
    sizes = np.exp(np.arange(np.log(lo * t.min() / middle), np.log(hi * t.max() / middle) + step, step))
    rings = [_turns(north, east, x) for x in sizes]
    X, turn, w = (
        np.concatenate(a) for a in zip(*((np.full(turn.size, x), turn, w) for x, (turn, w) in zip(sizes, rings)))
    )
    T, turn, weight = np.repeat(t, X.size), np.tile(turn, t.size), np.outer(w_t, w * step).ravel()
    X = np.tile(X, t.size) * (middle / T)
    p_n, p_e = X * np.cos(turn), X * np.sin(turn)
    z_n, z_e = ((p - m.value) / np.where(p > m.value, m.hi, m.lo) for p, m in ((p_n, north), (p_e, east)))
    rho = solution.pi_E_corr
    like = np.exp(-0.5 * (z_n**2 - 2 * rho * z_n * z_e + z_e**2) / (1 - rho**2))
    keep = like > 1e-5 * like.max()
    return Points(T[keep], X[keep], (weight * like)[keep], False, _angle(p_n, p_e, event)[keep], earth)


def _angle(north, east, event):
    along_l, along_b = from_north_east(north, east, event.l * u.deg, event.b * u.deg)
    return np.arctan2(along_b, along_l)


def _outer(t, w_t, X, w_X, angle, earth, on_theta):
    """All pairs of timescales and sizes (or vectors)."""
    T, XX = np.repeat(t, X.size), np.tile(X, t.size)
    weight = np.outer(w_t, w_X).ravel()
    return Points(T, XX, weight, on_theta, None if angle is None else np.tile(angle, t.size), earth)


def _crossed(t, w_t, mu, w_mu, earth):
    """Timescales and motions, as Einstein radii."""
    T, M = np.repeat(t, mu.size), np.tile(mu, t.size)
    return Points(T, M * T / DAYS_PER_YEAR, np.outer(w_t, w_mu).ravel(), True, None, earth)


def _with_terms(points, measured, used):
    """Add the likelihood of what is measured beside the size that the points run over."""
    terms = np.zeros((3, len(points), 3))
    for k, name in enumerate(("theta_E", "pi_E", "mu_rel")):
        if name in measured and name != used and not (name == "pi_E" and "pi_EN" in measured):
            m = measured[name]
            terms[k] = m.value, m.lo, m.hi
    return replace(points, terms=terms)


def _source(solution, event):
    """What is known of the source, in Galactic components."""
    m = solution.measured
    motion = distance = None
    if "mu_S_N" in m:
        north, east = m["mu_S_N"], m["mu_S_E"]
        place = event.l * u.deg, event.b * u.deg
        v_l, v_b = from_north_east(north.value, east.value, *place)
        c_n, s_n = from_north_east(1.0, 0.0, *place)
        c_e, s_e = from_north_east(0.0, 1.0, *place)
        n2, e2 = north.err**2, east.err**2
        cov = (c_n**2 * n2 + c_e**2 * e2, c_n * s_n * n2 + c_e * s_e * e2, s_n**2 * n2 + s_e**2 * e2)
        motion = np.array([v_l, v_b, *cov], dtype=float)
    if "D_S" in m:
        distance = (m["D_S"].value, m["D_S"].lo, m["D_S"].hi)
    return SourceData(motion, distance) if motion is not None or distance is not None else None


def _earth(event):
    """Earth's velocity along l and b [au/yr] in the event's frame."""
    if event.frame == "heliocentric":
        return (0.0, 0.0)
    place = event.l * u.deg, event.b * u.deg
    north, east = earth_velocity(event.t_0par, *icrs_from_galactic(*place))
    along_l, along_b = from_north_east(north.value, east.value, *place)
    return (float(along_l), float(along_b))


def _of_draws(solution, event, known, earth):
    """Posterior samples as points: weights over the sampling prior."""
    draws, m = solution.draws, solution.measured
    pick = np.arange(draws.size)
    weight = draws.weight
    if draws.size > _MOST_DRAWS:
        # evenly in the cumulative weight: the same share of the posterior for each
        ends = np.cumsum(weight)
        pick = np.searchsorted(ends, (np.arange(_MOST_DRAWS) + 0.5) / _MOST_DRAWS * ends[-1])
        weight = np.ones(_MOST_DRAWS)
        pick = np.minimum(pick, draws.size - 1)
    else:
        weight = weight[pick]
    weight = weight / weight.sum()
    column = {k: v[pick] for k, v in draws.columns.items()}
    values = np.array(list(column.values()))
    mean = values @ weight
    spread = (values - mean[:, None]) * np.sqrt(weight)
    cov = spread @ spread.T
    k = mean.size
    ln_prior = draws.ln_prior[pick]
    # volume of the posterior times the prior in it turns its normalisation into a likelihood of peak one
    volume = np.sqrt((2 * np.pi) ** k * max(np.linalg.det(cov), 1e-300))
    base = ln_prior @ weight
    W = weight * np.exp(base - ln_prior) * volume
    t, rests, angle = column["t_E"], ["t_E"], None
    terms = np.zeros((3, t.size, 3))
    wrong = 1.0
    size = column.get("pi_E")
    if "pi_EN" in column:
        size = np.hypot(column["pi_EN"], column["pi_EE"])
        angle = _angle(column["pi_EN"], column["pi_EE"], event)
        W = W / (t * size**2)
        wrong /= 2 * np.pi * np.median(size) ** 2 * _LN_SPAN
        rests.append("pi_E")
    elif size is not None:
        W = W / (t * size)
        wrong /= np.median(size) * _LN_SPAN
        rests.append("pi_E")
    on_theta, X, used = False, size, "pi_E"
    if X is None:
        used = "theta_E" if "theta_E" in column else "mu_rel" if "mu_rel" in column else None
        if used is None:
            raise InputError(f"{event.name}: samples of t_E alone; give t_E and t_E_err in a table instead")
        on_theta = True
        X = column["theta_E"] if used == "theta_E" else column["mu_rel"] * t / DAYS_PER_YEAR
        W = W / (t * column[used])
        wrong /= np.median(column[used]) * _LN_SPAN
        rests.append(used)
    for j, name in enumerate(("theta_E", "pi_E", "mu_rel")):
        if name in column and name != used:
            # a sample stands for its neighbourhood: width by Silverman's rule in the logarithm
            ln = np.log(column[name])
            width = 1.06 * np.sqrt(max(weight @ (ln - weight @ ln) ** 2, 1e-12)) * t.size**-0.2
            terms[j, :, 0] = column[name]
            terms[j, :, 1:] = (width * column[name])[:, None]
            W = W / (_ROOT * width * column[name])
            wrong /= np.median(column[name]) * _LN_SPAN
            rests.append(name)
        elif name in m and name not in column and not (name == "pi_E" and "pi_EN" in column):
            terms[j] = m[name].value, m[name].lo, m[name].hi
            wrong *= _ROOT * m[name].err / (_LN_SPAN * max(m[name].value, m[name].err))
            rests.append(name)
    s_t = np.sqrt(cov[list(column).index("t_E"), list(column).index("t_E")])
    wrong *= volume / (_ROOT * s_t)
    points = Points(t, X, W, on_theta, angle, earth, terms)
    if known is not None:
        rests += ["source motion"] * (known.motion is not None) + ["source distance"] * (known.distance is not None)
    if angle is None and earth != (0.0, 0.0):
        points = replace(points, turns=_CONDITIONED_ANGLES if known is not None else _ANGLES)
    t_nodes, w_nodes = _nodes(_measure_of(mean[list(column).index("t_E")], s_t), 3, 5)
    return Likelihood(points, known, wrong, (t_nodes, w_nodes / t_nodes), t.size, tuple(rests))


def _measure_of(value, sigma):
    from .observed import Measure

    return Measure(float(value), float(sigma), float(sigma))
