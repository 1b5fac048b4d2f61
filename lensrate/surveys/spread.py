"""The same forecast over a family of assumptions: what each of them moves, and how far."""

from dataclasses import dataclass, field

import astropy.units as u
import numpy as np

from ..errors import InputError
from ..scenario import Scenario
from .family import Family
from .shared import forecasts_under
from .spread_result import Row, Spread

__all__ = ["Outcome", "SightlineForecast", "sightline_spread", "spread"]

_NUMBERS = {"optical_depth": "", "rate": "1/yr", "mean_t_E": "d", "median_t_E": "d", "share_of_events": ""}
_TOLD = 3  # alternatives named behind a warning


@dataclass(frozen=True)
class Outcome:
    """What one scenario gives: numbers by lens class and name, and what to mind.

    Attributes
    ----------
    values : dict of str to dict of str to float
        For example ``{"neutron_star": {"rate": 1e-7}}``; the same keys for every scenario.
    warnings, references : tuple of str
    about : dict
        What stands above the table, taken from the base: ``header`` is a line for people.
    """

    values: dict
    warnings: tuple = ()
    references: tuple = ()
    about: dict = field(default_factory=dict)


@dataclass(frozen=True)
class SightlineForecast:
    """What `spread` calls to forecast one sightline: scenarios in, an Outcome each.

    Attributes
    ----------
    l, b : Quantity
    t_E_range : (Quantity, Quantity), optional
    exact : bool
        Mass functions change the source stars too; otherwise forecasts with other masses keep the base's sources.
    jobs : int
        Threads.
    progress : callable, optional
        Called with the share of the work done.
    """

    l: u.Quantity
    b: u.Quantity
    t_E_range: tuple | None = None
    exact: bool = False
    jobs: int = 1
    progress: object = None

    units = _NUMBERS

    def __call__(self, scenarios):
        """Return an Outcome of each scenario, the base first."""
        options = {"exact": self.exact, "t_E_range": self.t_E_range, "jobs": self.jobs, "progress": self.progress}
        return forecasts_under(self.l, self.b, scenarios, self._outcome, **options)

    def _outcome(self, result):
        values = {name: {n: float(getattr(x, n)) for n in _NUMBERS} for name, x in result.lenses.items()}
        about = {
            "l_deg": float(result.l.to_value(u.deg)),
            "b_deg": float(result.b.to_value(u.deg)),
            "header": result.header(),
            "frame": result.frame,
            "u_0_limit": result.u_0_limit,
            "t_E_range_d": list(result.t_E_range) if result.t_E_range else None,
            "sources": result.sources,
            "exact": self.exact,
        }
        return Outcome(values, result.warnings, result.references, about)


def sightline_spread(
    l, b, family="default", scenario="default", *, combinations=False, axes=None, exact=False, t_E_range=None,
    jobs=1, progress=None,
):  # fmt: skip
    """Forecast one sightline over a family of assumptions.

    Parameters
    ----------
    l, b : Quantity
        Galactic direction.
    family : Family or str
        A name or file is read.
    scenario : Scenario or str
        The base.
    combinations : bool
        All combinations besides one change at a time.
    axes : list of str, optional
        Only these axes.
    exact, t_E_range, jobs, progress
        As in `SightlineForecast`.

    Returns
    -------
    Spread

    Raises
    ------
    InputError, ConvergenceError
        As `spread` and `sightline`.
    """
    forecast = SightlineForecast(l, b, t_E_range, exact, jobs, progress)
    return spread(forecast, family, scenario, combinations=combinations, axes=axes)


def spread(forecast, family="default", base="default", *, combinations=False, axes=None, units=None):
    """Put anything that a scenario decides through a family of assumptions.

    Parameters
    ----------
    forecast : callable
        Takes a list of scenarios, the base first, and returns for each an Outcome, or only its `values`.
    family : Family or str
        A name or file is read.
    base : Scenario or str
        What the alternatives are alternatives to.
    combinations : bool
        All combinations besides one change at a time.
    axes : list of str, optional
        Only these axes; every one of them is combined.
    units : dict of str to str, optional
        Unit of each number; by default what ``forecast.units`` says.

    Returns
    -------
    Spread

    Raises
    ------
    InputError
        Unknown family, axis or key; an alternative that makes no scenario; too many combinations; a forecast that
        gives no or different numbers.
    """
    if not callable(forecast):
        raise InputError(f"forecast: {forecast!r} given, something to call with a list of scenarios is needed")
    base = base if isinstance(base, Scenario) else Scenario.read(base)
    whole = family if isinstance(family, Family) else Family.read(family)
    whole = whole if not axes else whole.only(axes)
    here = whole.for_base(base)
    singles = whole.cases(base)
    every = whole.cases(base, combine=True) if combinations else []
    # what a combination repeats is forecast once
    place = {case.choices: i for i, case in enumerate(singles)}
    more = [case for case in every if case.choices not in place]
    cases = [*singles, *more]
    outcomes = [o if isinstance(o, Outcome) else Outcome(o) for o in forecast([c.scenario for c in cases])]
    _check_outcomes(outcomes, cases)
    sources = {(a.name, x.name): x for a in here.axes for x in a.alternatives}
    rows = [Row("base", "", outcomes[0].values, base.hash)]
    for case, outcome in zip(singles[1:], outcomes[1:]):
        axis, name = case.choices[0]
        x = sources[axis, name]
        rows.append(Row(axis, name, outcome.values, case.scenario.hash, x.changes, x.source, x.weight))
    combined = None
    if combinations:
        place |= {case.choices: len(singles) + i for i, case in enumerate(more)}
        order = [place[case.choices] for case in every]
        pairs = [(lens, n) for lens, row in outcomes[0].values.items() for n in row]
        combined = {(lens, n): np.array([outcomes[i].values[lens][n] for i in order]) for lens, n in pairs}
    references = [*here.references, *(r for o in outcomes[: len(singles)] for r in o.references)]
    return Spread(
        family=here,
        base=base,
        rows=tuple(rows),
        units=dict(units if units is not None else getattr(forecast, "units", {})),
        combined=combined,
        combined_labels=tuple(case.label for case in every),
        combined_weights=tuple(case.weight for case in every),
        left_out=tuple(a.name for a in whole.axes if a.name not in {x.name for x in here.axes}),
        about=dict(outcomes[0].about),
        warnings=_gathered([o.warnings for o in outcomes], cases),
        references=tuple(dict.fromkeys(references)),
    )


def _check_outcomes(outcomes, cases):
    if len(outcomes) != len(cases):
        raise InputError(f"forecast: {len(outcomes)} results for {len(cases)} scenarios; one of each is needed")
    wanted = {lens: list(row) for lens, row in outcomes[0].values.items()}
    for case, outcome in zip(cases, outcomes):
        if {lens: list(row) for lens, row in outcome.values.items()} != wanted:
            raise InputError(
                f"forecast: '{case.label}' gives other classes or numbers than the base; lens classes and numbers "
                "must be the same throughout a family"
            )


def _gathered(warnings, cases):
    """Each warning once, with the alternatives that have it where the base has not; numbers are of the first one."""
    kinds, alone = {}, set()
    for lines, case in zip(warnings, cases):
        for line in lines:
            kind = "".join(c for c in line if not c.isdigit())
            if len(case.choices) < 2:
                alone.add(kind)
            # a combination repeats what its parts were warned of
            if len(case.choices) < 2 or kind not in alone:
                kinds.setdefault(kind, []).append((line, case.label))
    out = []
    for seen in kinds.values():
        line, label = seen[0]
        names = list(dict.fromkeys(name for _, name in seen))
        if label != "base":
            more = f" and {len(names) - _TOLD} more" if len(names) > _TOLD else ""
            others = ", ".join(names[1:_TOLD]) + more
            joint = "; with other numbers " if any(text != line for text, _ in seen) else ", "
            line += f" (under {names[0]}{joint + others if others else ''})"
        out.append(line)
    return tuple(out)
