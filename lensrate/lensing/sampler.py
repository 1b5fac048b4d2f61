"""Events of one sightline drawn from its rate: tables along the sightline, the envelope over them, blocks of draws."""

from dataclasses import dataclass

import numpy as np

from ..errors import ConvergenceError, InputError, kind_of, one_of
from ..kernels import draws
from ..kernels import sampling as kernels
from ..parallel import run_map
from ..units import DAYS_PER_YEAR, KAPPA, MAS
from . import rates
from .sampling_tables import masses, pairs, tables

__all__ = ["BLOCK", "Draws", "Sampler", "seeds"]

#: proposals that share one stream of random numbers; part of what a seed means
BLOCK = 8192
_GROUP = 16  # blocks of one task


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
        made, total, source_row = tables(ready, used)
        mass_tables, which = masses(spectra)
        unit = 2.0 * np.sqrt(KAPPA) * MAS**2 * u_0
        joined = pairs(root, element[used], used, total, which)
        return cls(model, ready, class_rate, joined, mass_tables, made, unit, source_row)

    @property
    def rate(self):
        """Total rate of the deterministic integrals [1/yr per source, within u_0_limit]."""
        return float(self.class_rate.sum())

    def draw(self, n, rng=None, full=False, weighted=True, tilt=None, jobs=1, executor=None):
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
        executor : object with ``map``, optional
            Instead of threads.

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
        alias = np.stack([share, other], axis=1)
        normals = draws.NORMALS if full else draws.NORMALS - 2
        root = seeds(rng)

        def run(job):
            """Blocks that write one after another into one pair of arrays."""
            blocks, floats, words, motion, start = job
            most = max(size for _, size in blocks)
            u, z, e = np.empty(draws.UNIFORMS * most), np.empty(normals * most), np.empty(most)
            kept = start
            for seed, size in blocks:
                rng = np.random.Generator(np.random.SFC64(seed))
                uniform, normal = u[: draws.UNIFORMS * size], z[: normals * size]
                rng.random(out=uniform)
                rng.standard_normal(out=normal[: 2 * size])
                rng.standard_exponential(out=e[:size])
                # last, so that the rest is the same with and without it
                rng.standard_normal(out=normal[2 * size :])
                kept = draws.draw(
                    uniform.reshape(-1, size), normal.reshape(-1, size), e[:size], alias, self._pairs["words"],
                    pair_tilt, *self._masses, *self._tables, KAPPA, DAYS_PER_YEAR, envelope, not weighted, kept, floats,
                    words, motion,
                )  # fmt: skip
            return kept - start

        def made(blocks):
            """Arrays of the events of some blocks."""
            arrays = _arrays(sum(size for _, size in blocks), full)
            kept = run((blocks, *arrays, 0))
            return [a[:, :kept] for a in arrays]

        if weighted:
            arrays = _arrays(n, full)
            sizes = [BLOCK] * (n // BLOCK) + ([n % BLOCK] if n % BLOCK else [])
            blocks = list(zip(root.spawn(len(sizes)), sizes))
            starts = range(0, len(blocks), _GROUP)
            if executor is None:
                run_map(run, [(blocks[i : i + _GROUP], *arrays, i * BLOCK) for i in starts], jobs)
            else:
                for i, part in zip(starts, executor.map(made, [blocks[i : i + _GROUP] for i in starts])):
                    for whole, piece in zip(arrays, part):
                        whole[:, i * BLOCK : i * BLOCK + piece.shape[1]] = piece
            return self._draws(arrays, n, n)
        expected = float(factor @ self.class_rate) / envelope
        return self._draws(*_until(made, root, n, expected, jobs, executor), n)

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
        if motion.size:
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
        for name, factor in kind_of("tilt", tilt, dict, "a table of factors by class, or 'equal',").items():
            one_of("tilt", name, classes)
            if isinstance(factor, bool) or not np.isscalar(factor) or not 0 < factor < np.inf:
                raise InputError(f"tilt: {factor!r} given for {name}, must be a number above 0")
            out[classes.index(name)] = factor
        return out


def _arrays(n, full):
    return (
        np.empty((draws.FLOATS, n)),
        np.empty((draws.WORDS, n), dtype=np.int32),
        np.empty((2, n if full else 0)),
    )


def _until(run, root, n, share, jobs, executor):
    """Run blocks in order until they hold n events, `share` of a block expected; where they run changes nothing."""
    parts, kept = [], 0
    while kept < n:
        # a little more than expected, so that one turn mostly does
        blocks = min(int(1.01 * (n - kept) / (share * BLOCK)) + 1, 1024)
        sizes = [_GROUP] * (blocks // _GROUP) + ([blocks % _GROUP] if blocks % _GROUP else [])
        tasks = [[(s, BLOCK) for s in root.spawn(m)] for m in sizes]
        for task, arrays in zip(tasks, run_map(run, tasks, jobs, executor)):
            if kept < n:
                parts.append((arrays, len(task) * BLOCK))
                kept += arrays[0].shape[1]
    joined = [np.concatenate([arrays[i] for arrays, _ in parts], axis=1) for i in range(3)]
    return joined, sum(p[1] for p in parts)


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
