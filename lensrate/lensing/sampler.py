"""Events of one sightline drawn from its rate: tables along the sightline, the envelope over them, blocks of draws."""

from dataclasses import dataclass

import numpy as np

from ..errors import ConvergenceError, InputError, one_of
from ..kernels import sampling as kernels
from ..parallel import run_map
from ..units import DAYS_PER_YEAR, KAPPA, MAS
from . import rates

__all__ = ["BLOCK", "Draws", "Sampler", "seeds"]

#: proposals that share one stream of random numbers; part of what a seed means
BLOCK = 8192
_GROUP = 16  # blocks of one task
_NEAREST = 2e-4  # kpc; nearer lenses are some 1e-7 of the rate
_NEAR = 0.04  # kpc, up to which cells grow by a fifth
_STEP = 0.03  # kpc
_BANDS = (1.0, 0.55, 0.28, 0.13, 0.05, 0.0)  # of 1 - D_L / D_S
_SOURCE_CELLS = 50
_SOURCE_WIDTH = 0.4  # kpc
_GUIDE = 1024  # entries of the tables that say where a search begins
_GAP = 3.0  # a mass node is spread no farther than this times the nearer neighbour's distance
_FEW = 4  # fewer mass nodes are masses by themselves


@dataclass(frozen=True, eq=False)
class Draws:
    """Events of one sightline, a number each in every array; heliocentric.

    Attributes
    ----------
    lens_class, element, component, row : ndarray of int, shape (n,)
        Index into the model's classes; into its elements; of the Galaxy's component; of the Gaussian of the lens's
        velocities (components first, then the kicked fields' rows).
    source_component : ndarray of int, shape (n,)
        Of the Galaxy; -1 where the sources are no stars of its own.
    M, D_L, D_S : ndarray, shape (n,)
        Msun, kpc, kpc.
    mu_rel_l, mu_rel_b : ndarray, shape (n,)
        Proper motion of the lens minus the source's, along l cos b and b [mas/yr].
    t_E, theta_E, pi_rel, pi_E : ndarray, shape (n,)
        Days, mas, mas, pure number.
    weight : ndarray, shape (n,)
        Events per source and year within u_0_limit; the sum is the sightline's total rate. A few weighted draws may
        have weight 0.
    mu_L_l, mu_L_b, mu_S_l, mu_S_b : ndarray or None
        Proper motions of lens and source [mas/yr], where asked for.
    rate : float
        Total rate of the deterministic integrals [1/yr per source].
    estimate, estimate_error : float
        The same from these draws alone before their weights were scaled to `rate`, and its standard error.
    proposals : int
        Draws from the envelope behind these events.
    """

    lens_class: np.ndarray
    element: np.ndarray
    component: np.ndarray
    row: np.ndarray
    source_component: np.ndarray
    M: np.ndarray
    D_L: np.ndarray
    D_S: np.ndarray
    mu_rel_l: np.ndarray
    mu_rel_b: np.ndarray
    t_E: np.ndarray
    theta_E: np.ndarray
    pi_rel: np.ndarray
    pi_E: np.ndarray
    weight: np.ndarray
    rate: float
    estimate: float
    estimate_error: float
    proposals: int
    mu_L_l: np.ndarray | None = None
    mu_L_b: np.ndarray | None = None
    mu_S_l: np.ndarray | None = None
    mu_S_b: np.ndarray | None = None

    @property
    def mu_rel(self):
        """Size of the relative proper motion [mas/yr]."""
        return np.hypot(self.mu_rel_l, self.mu_rel_b)

    @property
    def effective_share(self):
        """Effective over actual number of events, (sum w)^2 / (n sum w^2)."""
        return float(self.weight.sum() ** 2 / (self.weight.size * np.sum(self.weight**2)))

    def __len__(self):
        return self.weight.size


@dataclass(frozen=True, eq=False)
class Sampler:
    """Tables of one sightline from which events are drawn; build with `of`.

    Attributes
    ----------
    model : Model
    ready : Line
    class_rate : ndarray, shape (classes,)
        Rate of each class from the deterministic integrals [1/yr per source, within u_0_limit].
    """

    model: object
    ready: object
    class_rate: np.ndarray
    _pairs: dict
    _masses: tuple
    _tables: tuple
    _unit: float  # of weights: envelope to events per source and year
    _source_row: np.ndarray

    @classmethod
    def of(cls, made, model=None):
        """Make the tables of a sightline.

        Parameters
        ----------
        made : Sightline or Line
            A forecast, whose integrals are used again, or what `rates.prepare` gives.
        model : Model, optional
            Another model of the same Galaxy and sources, for example with another kick law.

        Returns
        -------
        Sampler

        Raises
        ------
        ConvergenceError
            No lens on this sightline.
        """
        forecast = hasattr(made, "_integrals")
        ready = made._integrals.ready if forecast else made
        model = model or (made._model if forecast else made.model)
        gamma = made._integrals.gamma if forecast else _rates(ready)
        u_0 = model.scenario.u_0_limit
        spectra = model.spectra()
        root = np.array([[0.0 if s is None else s.moment(0.5) for s in row] for row in spectra])
        class_rate = u_0 * root @ gamma
        if not class_rate.sum() > 0:
            raise ConvergenceError("events: this sightline has no lenses, so there is nothing to draw")
        element = np.arange(model.n_stellar)
        if ready.model.kicked is not None:
            element = np.concatenate([element, model.n_stellar + ready.model.kicked.element_of_row])
        used = np.flatnonzero(root.sum(axis=0)[element] > 0)
        tables, total, source_row = _tables(ready, used)
        masses, which = _masses(spectra)
        unit = 2.0 * np.sqrt(KAPPA) * MAS**2 * u_0
        pairs = _pairs(root, element[used], used, total, which)
        return cls(model, ready, class_rate, pairs, masses, tables, unit, source_row)

    @property
    def rate(self):
        """Total rate of the deterministic integrals [1/yr per source, within u_0_limit]."""
        return float(self.class_rate.sum())

    def draw(self, n, rng=None, full=False, weighted=True, tilt=None, jobs=1):
        """Draw events.

        Parameters
        ----------
        n : int
            How many.
        rng : int, SeedSequence or Generator, optional
            Source of randomness. The same seed gives the same events whatever `jobs`.
        full : bool
            Also draw the source's own proper motion, and so the lens's.
        weighted : bool
            Events with unequal weights; otherwise equal ones (within a class, with `tilt`), by rejection.
        tilt : dict of str to float or "equal", optional
            Draw a class so many times as often as its rate says, or all classes equally often. Weights undo it.
        jobs : int
            Threads.

        Returns
        -------
        Draws

        Raises
        ------
        InputError
            A number that is not whole or below 1, an unknown class, a tilt not above zero, no usable seed.
        """
        if isinstance(n, bool) or not isinstance(n, (int, np.integer)) or n < 1:
            raise InputError(f"n: {n!r} given, a whole number of events from 1 up is needed")
        n = int(n)
        factor = self._tilt(tilt)
        pair_tilt = factor[self._pairs["words"][:, 0]]
        weight = self._pairs["weight"] * pair_tilt
        share, other = np.empty(weight.size), np.empty(weight.size, dtype=np.int64)
        envelope = kernels.alias_table(weight, share, other) * self._unit
        root = seeds(rng)

        def run(job):
            """Blocks that write one after another into one pair of arrays."""
            blocks, floats, words, motion, start = job
            most = max(size for _, size in blocks)
            u, z, e = np.empty((most, kernels.UNIFORMS)), np.empty((most, 2)), np.empty(most)
            kept = start
            for seed, size in blocks:
                rng = np.random.Generator(np.random.SFC64(seed))
                rng.random(out=u[:size])
                rng.standard_normal(out=z[:size])
                rng.standard_exponential(out=e[:size])
                first = kept
                kept = kernels.draw(
                    u[:size], z[:size], e[:size], share, other, self._pairs["words"], pair_tilt, *self._masses,
                    *self._tables, KAPPA, DAYS_PER_YEAR, envelope, not weighted, first, floats, words,
                )  # fmt: skip
                if motion is not None:
                    rng.standard_normal(out=z[: kept - first])
                    D, lens, _, D_src, src, *_ = self._tables
                    kernels.source_motion(z[: kept - first], first, D, lens, D_src, src, floats, words, motion)
            return kept - start

        if weighted:
            arrays = _arrays(n, full)
            sizes = [BLOCK] * (n // BLOCK) + ([n % BLOCK] if n % BLOCK else [])
            blocks = list(zip(root.spawn(len(sizes)), sizes))
            run_map(run, [(blocks[i : i + _GROUP], *arrays, i * BLOCK) for i in range(0, len(blocks), _GROUP)], jobs)
            return self._draws(arrays, n, n)
        expected = float(factor @ self.class_rate) / envelope
        return self._draws(*_until(run, root, n, expected, full, jobs), n)

    def _draws(self, arrays, proposals, n):
        floats, words, motion = arrays
        # each proposal estimates the whole rate by its weight, zero where it was not kept
        weight = floats[9]
        estimate = float(weight.sum()) / proposals
        spread = float(weight @ weight) / proposals - estimate**2
        floats, words = floats[:, :n], words[:, :n]
        scale = self.rate / floats[9].sum()
        numbers = dict(zip(("M", "D_L", "D_S", "mu_rel_l", "mu_rel_b", "t_E", "theta_E", "pi_rel", "pi_E"), floats))
        extra = {}
        if motion is not None:
            mu_S = motion[:, :n]
            extra = {
                "mu_S_l": mu_S[0],
                "mu_S_b": mu_S[1],
                "mu_L_l": mu_S[0] + floats[3],
                "mu_L_b": mu_S[1] + floats[4],
            }
        return Draws(
            lens_class=words[0],
            element=words[1],
            component=np.array(self.model.component_of, dtype=np.int32)[words[1]],
            row=self._pairs["number"][words[2]],
            source_component=self._source_row[words[3]],
            weight=floats[9] * scale,
            rate=self.rate,
            estimate=estimate,
            estimate_error=float(np.sqrt(max(spread, 0.0) / proposals)),
            proposals=proposals,
            **numbers,
            **extra,
        )

    def _tilt(self, tilt):
        """Factor of each class."""
        classes = self.model.classes
        out = np.ones(len(classes))
        if tilt is None:
            return out
        if isinstance(tilt, str):
            one_of("tilt", tilt, ("equal",))
            return np.divide(self.rate, self.class_rate, out=out, where=self.class_rate > 0)
        for name, factor in dict(tilt).items():
            one_of("tilt", name, classes)
            if isinstance(factor, bool) or not np.isscalar(factor) or not 0 < factor < np.inf:
                raise InputError(f"tilt: {factor!r} given for {name}, must be a number above 0")
            out[classes.index(name)] = factor
        return out


def _arrays(n, full):
    return (
        np.empty((kernels.FLOATS, n)),
        np.empty((kernels.WORDS, n), dtype=np.int32),
        np.empty((2, n)) if full else None,
    )


def _until(run, root, n, share, full, jobs):
    """Run blocks in order until they hold n events, `share` of a block expected; `jobs` changes nothing."""
    parts, kept = [], 0
    while kept < n:
        # a little more than expected, so that one turn mostly does
        blocks = min(int(1.01 * (n - kept) / (share * BLOCK)) + 1, 1024)
        sizes = [_GROUP] * (blocks // _GROUP) + ([blocks % _GROUP] if blocks % _GROUP else [])
        tasks = [([(s, BLOCK) for s in root.spawn(m)], *_arrays(m * BLOCK, full), 0) for m in sizes]
        for task, made in zip(tasks, run_map(run, tasks, jobs)):
            if kept < n:
                parts.append((task[1:4], made, len(task[0]) * BLOCK))
                kept += made
    joined = [
        None if parts[0][0][i] is None else np.concatenate([arrays[i][:, :made] for arrays, made, _ in parts], axis=1)
        for i in range(3)
    ]
    return joined, sum(p[2] for p in parts)


def seeds(rng):
    """Return a SeedSequence of its own from an int, SeedSequence or Generator; from the system's entropy if None.

    Raises
    ------
    InputError
        Anything else, or a negative number.
    """
    try:
        if isinstance(rng, np.random.Generator):
            return rng.bit_generator.seed_seq.spawn(1)[0]
        if isinstance(rng, np.random.SeedSequence):
            return rng.spawn(1)[0]
        return np.random.SeedSequence(rng)
    except (TypeError, ValueError, AttributeError):
        raise InputError(
            f"seed: {rng!r} given, must be a whole number from 0 up, a SeedSequence or a numpy Generator"
        ) from None


def _rates(ready):
    gamma = rates.moments(ready)[1].sum(axis=1)
    if ready.model.kicked is not None:
        gamma = np.concatenate([gamma, rates.kicked_moments(ready)[1]])
    return gamma


def _nodes(ready, end):
    """Distances [kpc] of the tables, kinks of the model among them."""
    steps = [_NEAREST]
    while steps[-1] < _NEAR:
        steps.append(steps[-1] * 1.2)
    edges = ready.edges[(ready.edges > 1.5 * _NEAR) & (ready.edges < end * (1 - 1e-9))]
    out = [np.array(steps[:-1])]
    tangent = ready.line.tangent_distance()
    x, y, z = ready.line.xyz(max(tangent, 0.0))
    miss = float(np.sqrt(x * x + y * y + z * z))
    start = _NEAR
    for stop in [*edges, end]:
        d = start
        nodes = []
        while d < stop - 1e-9:
            nodes.append(d)
            step = _STEP * d if d < 1.0 else max(_STEP, 0.01 * (d - 7.0))
            if tangent > 0:
                # the middle of the Galaxy is as sharp as the sightline passes close to it
                step = min(step, max(0.1 * float(np.hypot(miss, d - tangent)), 0.003))
            d += step
        # even steps that end at the kink
        out.append(start + (stop - start) * np.array([(v - start) / (d - start) for v in nodes]))
        start = stop
    return np.append(np.concatenate(out), end)


def _table(profile, D, density):
    """The kernels' table with density and motion, scale of speeds 1, running integral still to do.

    Where there is nothing, the motion is that of the next place where there is something.
    """
    some = profile[0] > 0
    out = np.empty((*some.shape, kernels.COLUMNS))
    for q in range(5):
        np.multiply(profile[1 + q], D if q < 2 else D**2, out=out[:, :, 3 + q], where=some)
    if not some.all():
        i = np.arange(D.size)
        before = np.maximum.accumulate(np.where(some, i, -1), axis=1)
        after = np.minimum.accumulate(np.where(some, i, D.size)[:, ::-1], axis=1)[:, ::-1]
        near = np.where(before >= 0, before, after)
        for row in np.flatnonzero(~some.all(axis=1)):
            out[row] = out[row, near[row]] if near[row, 0] < D.size else 0.0
    out[..., 0] = density
    out[..., 2] = 1.0
    return out


def _integrate(table, step):
    """Fill the running integral of density times scale."""
    f = table[..., 0]
    table[:, 0, 1] = 0.0
    np.cumsum(0.5 * step * (f[:, 1:] + f[:, :-1]) * table[:, :-1, 2], axis=1, out=table[:, 1:, 1])


def _tables(ready, used):
    """Tables in the order of the drawing kernel, the envelope of each lens row in use, the component of source rows."""
    fixed = ready.sources.fixed_distance
    D = _nodes(ready, fixed or ready.edges[-1])
    D_src, src, cell = _source_table(ready, D)
    lit = np.flatnonzero(src[:, -1, 1] > 0)
    src = np.ascontiguousarray(src[lit])
    share = np.diff(src[..., 1])
    # the bound on speeds is tightest about the sources' own mean motion
    middle = 0.5 * (src[:, 1:, 3:5] / D_src[1:, None] + src[:, :-1, 3:5] / D_src[:-1, None])
    c = np.average(middle.reshape(-1, 2), axis=0, weights=share.ravel())
    speed_S, square_S = _bounds(D_src, src, c)
    profile = ready.model.galaxy.profile(ready.line, D)
    if ready.model.kicked is not None:
        profile = np.concatenate([profile, ready.kicked_table.at(D)], axis=1)
    profile = profile[:, used]
    lens = _table(profile, D, profile[0] * D**1.5)
    speed, square = _bounds(D, lens, c)
    lens[:, :-1, 2] = np.sqrt(square + np.average(square_S, weights=share))
    _integrate(lens, np.diff(D))
    band, root = _bands(D, D_src, cell)
    n = lit.size * root.size
    height, alias = np.empty((2, used.size, n), dtype=np.float32)
    other, total = np.empty((used.size, n), dtype=np.int16), np.empty(used.size)
    pieces = np.empty((n, 5), dtype=np.int16)
    kernels.envelope(
        lens, speed, square, src, speed_S, square_S, cell, band, root, height, total, alias, other, pieces
    )  # fmt: skip
    guide, guide_S = np.empty((used.size, _GUIDE), dtype=np.int16), np.empty((lit.size, _GUIDE), dtype=np.int16)
    kernels.guides(lens, guide)
    kernels.guides(src, guide_S)
    tables = (D, lens, guide, D_src, src, guide_S, height, alias, other, pieces)
    own = ready.src.shape[1] == len(ready.model.galaxy.components)
    return tables, total, np.asarray(lit if own else [-1] * lit.size, dtype=np.int32)


def _bounds(D, table, c):
    speed, square = np.empty((2, table.shape[0], D.size - 1))
    kernels.motion_bounds(D, table, c[0], c[1], speed, square)
    return speed, square


def _source_table(ready, D):
    """Nodes, table of each source row (density per kpc), and the nodes between cells of source distance."""
    if ready.sources.fixed_distance:
        D_src = np.full(2, ready.sources.fixed_distance)
        profile = np.repeat(ready.src, 2, axis=2)
        table = _table(profile, D_src, profile[0])
        _integrate(table, 1.0)
        return D_src, table, np.array([0, 1])
    profile = rates._source_rows(ready.model, ready.line, ready.sources, D)
    table = _table(profile, D, profile[0] / ready.norm)
    _integrate(table, np.diff(D))
    total = table[..., 1].sum(axis=0)
    cell = [max(int(np.argmax(total > 0)) - 1, 0)]
    for i in range(cell[0] + 1, D.size):
        if (
            total[i] - total[cell[-1]] > total[-1] / _SOURCE_CELLS
            or D[i] - D[cell[-1]] > max(_SOURCE_WIDTH, 0.05 * D[i])
            or i == D.size - 1
        ):
            cell.append(i)
    return D, table, np.array(cell)


def _bands(D, D_src, cell):
    """Lens nodes between bands of 1 - D_L / D_S, (J, K + 1), and the largest square root of it in each, (J, K)."""
    far = D_src[cell[1:]]
    edge = far[:, None] * (1.0 - np.array(_BANDS))
    band = np.minimum(np.searchsorted(D, edge * (1 - 1e-12)), D.size - 1)
    band[:, 0] = 0
    return band, np.sqrt(np.maximum(1.0 - D[band[:, :-1]] / far[:, None], 0.0))


def _pairs(root, element, used, total, which):
    """Class and lens row together: weight of the envelope, and what belongs to each."""
    weight = root[:, element] * total
    c, r = np.nonzero(weight > 0)
    words = np.stack([c, element[r], r, which[c, element[r]]], axis=1)
    return {"weight": weight[c, r], "words": words.astype(np.int32), "number": used.astype(np.int32)}


def _masses(spectra):
    """Alias tables of the masses of each class on each element, one after another, and the number of each table."""
    which = np.full((len(spectra), len(spectra[0])), -1)
    first, parts, known = [0], [], {}
    for c, row in enumerate(spectra):
        for e, s in enumerate(row):
            if s is None or not s.moment(0.5) > 0:
                continue
            key = (s.mass.tobytes(), s.number.tobytes())
            if key not in known:
                known[key] = len(first) - 1
                parts.append(_mass_nodes(s))
                first.append(first[-1] + parts[-1][0].size)
            which[c, e] = known[key]
    return (np.array(first), *(np.concatenate(p) for p in zip(*parts))), which


def _mass_nodes(spectrum):
    """Alias table by number sqrt(M), mass, and how far a node reaches to either side (twice over)."""
    some = spectrum.number > 0
    order = np.argsort(spectrum.mass[some])
    mass, number = spectrum.mass[some][order], spectrum.number[some][order]
    share, other = np.empty(mass.size), np.empty(mass.size, dtype=np.int64)
    kernels.alias_table(number * np.sqrt(mass), share, other)
    left, right = np.zeros(mass.size), np.zeros(mass.size)
    if mass.size >= _FEW:
        gap = np.diff(mass)
        left[1:], right[:-1] = gap, gap
        # the first and last node of a Gauss rule stand about so far from its ends
        left[0], right[-1] = 0.25 * gap[0], 0.25 * gap[-1]
        # no smearing over a gap between two groups of masses
        near = np.minimum(left, right)
        near[0], near[-1] = gap[0], gap[-1]
        left, right = np.minimum(left, _GAP * near), np.minimum(right, _GAP * near)
    return share, other, mass, left, right
