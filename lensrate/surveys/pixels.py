"""One pixel of a map: rates only, without the distributions that a sightline also has, unless an efficiency asks."""

from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np

from ..errors import ConvergenceError
from ..lensing import distributions, gathered, rates
from ..lensing.forecast import line_notes
from ..lensing.quadrature import LN10
from ..scenario import resolve
from ..scenario.numerics import Numerics

__all__ = ["Pixel", "PixelWork"]

_COARSE = 2.0  # step of t_E under an efficiency, over the scenario's own
_WIDEST = 0.2  # dex


@dataclass(frozen=True)
class Pixel:
    """Numbers of one direction; classes in the order of `Model.classes`.

    Rates are per source star and year within u_0_limit.
    """

    optical_depth: tuple
    rate: tuple
    rate_standard_error: tuple  # NaN for classes that follow the stars
    detected: tuple  # rate times efficiency; empty without one
    source_density: float  # per square arcminute; NaN where the rule does not count stars
    mean_source_distance: float  # kpc
    extinction: float  # mag; NaN where no dust is used
    warnings: tuple = ()

    def to_list(self):
        """Return plain lists and numbers, for a line of JSON."""
        return [list(v) if isinstance(v, tuple) else v for v in vars(self).values()]

    @classmethod
    def from_list(cls, values):
        """Read back `to_list`."""
        return cls(*(tuple(v) if isinstance(v, list) else v for v in values))


@dataclass(frozen=True, eq=False)
class PixelWork:
    """What every pixel shares; called with a direction, it returns a `Pixel`. May be sent to other processes.

    Parameters
    ----------
    scenario : Scenario
    efficiency : Efficiency, optional
    precise : bool
        The integrals of a sightline, several times as long; else those of `lensing.gathered`.
    """

    scenario: object
    efficiency: object = None
    precise: bool = False

    def __getstate__(self):
        # what is computed from these is made again where it is needed
        return {"scenario": self.scenario, "efficiency": self.efficiency, "precise": self.precise}

    @cached_property
    def model(self):
        """The resolved scenario."""
        return resolve(self.scenario)

    @cached_property
    def numerics(self):
        """Steps of the quadratures."""
        return Numerics(**self.scenario.numerics)

    @cached_property
    def masses(self):
        """Mass spectra of classes on elements, on the grid of the t_E distribution."""
        return distributions.MassGrid.deposit(self._step * LN10, *self.model.by_masses())

    @property
    def _step(self):
        return min(_COARSE * self.numerics.step_dex, max(_WIDEST, self.numerics.step_dex))

    @cached_property
    def _live(self):
        """Kicked elements that some class rides on, and the model with no others among its fields."""
        model = self.model
        if model.kicked is None:
            return np.arange(0), model
        live = self.masses.mass[:, model.n_stellar :].any(axis=0)
        return _only(model, live)

    def __call__(self, direction):
        """Integrate one direction.

        Parameters
        ----------
        direction : (float, float, dict)
            l, b [deg] and the measured extinction by band [mag], empty for the scenario's own.

        Returns
        -------
        Pixel
        """
        l, b, measured = direction
        live, model = self._live
        sources = replace(model.sources, measured=measured) if measured else model.sources
        toward = sources.toward(np.radians(l), np.radians(b), model.galaxy)
        dust = next(iter(toward.extinction.values()), np.nan)
        try:
            ready = rates.prepare(model, model.galaxy.sightline(np.radians(l), np.radians(b)), toward, self.numerics)
        except ConvergenceError:
            return self._dark(dust, toward)
        tau, gamma, error = self._moments(ready, live)
        masses, u_0 = self.masses, self.scenario.u_0_limit
        rate = (u_0 * masses.root * gamma).sum(axis=1)
        if not (np.all(np.isfinite(tau)) and np.all(np.isfinite(rate)) and np.all(rate >= 0)):
            raise ConvergenceError(
                f"skymap l = {l:g}, b = {b:g}: a rate is negative or not finite; check the scenario's numbers"
            )
        sampled = u_0 * np.sqrt(np.sum((masses.root * error) ** 2, axis=1))
        kicked = np.array([self.model.kinematics(name) in ("kicked", "mixed") for name in self.model.classes])
        return Pixel(
            optical_depth=_plain((masses.mass * tau).sum(axis=1)),
            rate=_plain(rate),
            rate_standard_error=_plain(np.where(kicked, sampled, np.nan)),
            detected=_plain(rate * self._found(ready, live)) if self.efficiency is not None else (),
            source_density=float(ready.per_arcmin2()) if toward.counts_stars else float("nan"),
            mean_source_distance=ready.mean_distance(),
            extinction=float(dust),
            warnings=(*toward.warnings, *line_notes(ready, 0.0)),
        )

    def _moments(self, ready, live):
        """Optical depth, rate and sampling error of every element; zero for those without lenses."""
        m = self.model.n_stellar
        out = np.zeros((3, len(self.model.component_of)))
        if self.precise:
            tau, gamma, _ = rates.moments(ready)
            out[:2, :m] = tau.sum(axis=1), gamma.sum(axis=1)
            if live.size:
                out[:, m + live] = rates.kicked_moments(ready)
        else:
            found = gathered.moments(ready)
            out[:, :m], out[:, m + live] = found[:, :m], found[:, m:]
        return out

    def _found(self, ready, live):
        """Share of each class's events that the efficiency lets through."""
        coarse = replace(ready, numerics=replace(self.numerics, step_dex=self._step))
        grid, T = rates.rate_density(coarse)
        unit = np.zeros((len(self.model.component_of), grid.pi.size + grid.mu.size - 1))
        unit[: len(T)] = distributions.unit_timescales(grid, T)
        if live.size:
            unit[len(T) + live] = distributions.unit_timescales(grid, rates.kicked_rate_density(coarse, grid))
        masses = self.masses
        if abs(grid.h / (self._step * LN10) - 1) > 1e-9:
            # one source distance has a finer grid of its own
            masses = distributions.MassGrid.deposit(grid.h, *self.model.by_masses())
        t, pdf, _ = distributions.timescales(grid, unit, masses, by_element=False)
        return np.array([self.efficiency.mean(t, f)[0] for f in pdf])

    def _dark(self, dust, toward):
        none = (float("nan"),) * len(self.model.classes)
        detected = none if self.efficiency is not None else ()
        counts = 0.0 if toward.counts_stars else float("nan")
        note = "no star passes the source rule here: rates are left empty"
        return Pixel(none, none, none, detected, counts, float("nan"), float(dust), (*toward.warnings, note))


def _only(model, live):
    """Positions of live kicked elements, and a model whose fields hold no kick bin that is nowhere live."""
    kicked = model.kicked
    bins = len(kicked.edges)
    by_component = live.reshape(-1, bins)
    keep_bins = np.flatnonzero(by_component.any(axis=0))
    if keep_bins.size == 0:
        return np.arange(0), replace(model, kicked=None)
    hosts = [kicked.host[i * bins] for i in range(len(by_component))]
    positions = (np.arange(len(by_component))[:, None] * bins + keep_bins).ravel()
    if keep_bins.size == bins:
        return positions, model
    field, elements = kicked.field, kicked.elements[positions]
    places = np.array([e // bins for e in elements[:: keep_bins.size]])
    part = {
        name: np.ascontiguousarray(getattr(field, name)[places][:, keep_bins])
        for name in ("ln_rho", "four", "two", "batches")
    }
    parts = kicked.rows.size // len(kicked.host)
    fewer = replace(
        kicked,
        field=replace(field, **part),
        host=tuple(h for h in hosts for _ in keep_bins),
        mass=kicked.mass[positions],
        rows=np.arange(parts * positions.size),
    )
    return positions, replace(model, kicked=fewer)


def _plain(values):
    return tuple(float(v) for v in values)
