"""From integrals over elements to what is reported by class, component and element."""

from dataclasses import dataclass, replace
from functools import partial

import numpy as np

from ..errors import ConvergenceError
from ..galaxy.density import CoredHalo, PowerHalo
from ..parallel import cores, run_map
from ..units import DAYS_PER_YEAR, FOUR_G_C2
from . import distributions, rates

__all__ = ["Integrals", "Lens", "assemble", "disc_share", "integrate", "optical_depth_along"]

_ROUGH = 3e-3  # difference of the quadratures that is worth a word
_FOREIGN = 20.0  # kpc, sources beyond are hardly the Galaxy's own
_EMPTY = 1e-2  # sources per square arcminute
_BEYOND = 0.01  # share of the sources with a limit past the end of the luminosity function, worth a word
_FAST = 1e-3  # share of remnants kicked beyond the last bin that is worth a word


@dataclass(frozen=True)
class Lens:
    """What one class (or component, or element) of lenses does on a sightline.

    Rates are per source star and year within u_0_limit; optical depth is for u < 1. Numbers that a t_E range limits
    say so in the Sightline's `t_E_range`.
    """

    optical_depth: float
    rate: float  # 1/yr
    mean_t_E: float = np.nan  # d
    median_t_E: float = np.nan  # d
    share_of_events: float = np.nan
    rate_standard_error: float | None = None  # sampling error of the fields; None for analytic ones
    kinematics: str = "stellar"


@dataclass(frozen=True, eq=False)
class Integrals:
    """What a sightline costs: everything of it that does not depend on masses, kick laws and numbers of lenses.

    Elements are those of `scenario.Model`: the Galaxy's components, then their kick bins.
    """

    ready: rates.Line
    tau: np.ndarray  # (E,) per stated Msun/kpc^3 of each element, lenses of 1 Msun
    gamma: np.ndarray  # (E,) 1/yr
    error: np.ndarray  # (E,) sampling error of gamma
    grid: object  # Isogrid
    T: np.ndarray  # (E, P, K)
    unit: np.ndarray  # (E, n) rate per ln t_E of 1 Msun lenses


def integrate(ready):
    """Do all integrals of a sightline.

    Parameters
    ----------
    ready : Line
        From `rates.prepare`.

    Returns
    -------
    Integrals
    """
    if ready.model.kicked is None:
        (grid, T), (tau, gamma, _) = _side_by_side(partial(rates.rate_density, ready), partial(rates.moments, ready))
        tau, gamma = tau.sum(axis=1), gamma.sum(axis=1)
        error = np.zeros(tau.size)
    else:
        # the longest first; it also makes the table of kicked lenses, for which the third would wait
        kicked_T, (grid, T), kicked, (tau, gamma, _) = _side_by_side(
            partial(rates.kicked_rate_density, ready, rates.isogrid(ready)),
            partial(rates.rate_density, ready),
            partial(rates.kicked_moments, ready),
            partial(rates.moments, ready),
        )
        tau, gamma = np.concatenate([tau.sum(axis=1), kicked[0]]), np.concatenate([gamma.sum(axis=1), kicked[1]])
        error = np.concatenate([np.zeros(tau.size - kicked[2].size), kicked[2]])
        T = np.concatenate([T, kicked_T])
    return Integrals(ready, tau, gamma, error, grid, T, distributions.unit_timescales(grid, T))


def _side_by_side(*parts):
    """Call the parts in two threads, where there are two: their kernels release the interpreter lock."""
    return run_map(_call, parts, jobs=min(len(parts), cores(), 2))


def _call(part):
    return part()


def assemble(model, integrals, u_0, limits, where):
    """Weigh the integrals with masses, numbers and kick laws.

    Parameters
    ----------
    model : Model
        Supplies the mass spectrum of each class on each element.
    integrals : Integrals
        From `integrate`, for the same Galaxy and sources.
    u_0 : float
        Largest impact parameter.
    limits : (float, float) or None
        Range of t_E [d] that is reported.
    where : str
        Direction, for complaints.

    Returns
    -------
    dict
        Fields of `Sightline`.

    Raises
    ------
    ConvergenceError
        A rate came out negative or not finite.
    """
    masses = distributions.MassGrid.deposit(integrals.grid.h, *model.by_masses())
    t, pdf, pdf_e = distributions.timescales(integrals.grid, integrals.unit, masses, limits is not None)
    tau, gamma = masses.mass * integrals.tau, u_0 * masses.root * integrals.gamma  # (C, E)
    error = u_0 * np.sqrt(np.sum((masses.root * integrals.error) ** 2, axis=1))
    pdf, pdf_e = u_0 * pdf, u_0 * pdf_e
    if not (all(np.all(np.isfinite(x)) for x in (tau, gamma, pdf)) and np.all(gamma >= 0) and np.all(tau >= 0)):
        raise ConvergenceError(
            f"sightline {where}: a rate or an optical depth is negative or not finite; check the scenario's numbers"
        )
    total = gamma.sum()
    quadrature = abs(np.sum(pdf) * integrals.grid.h / total - 1.0) if total > 0 else 0.0
    rows = _rows(t, pdf, tau.sum(axis=1), gamma.sum(axis=1), limits, u_0)
    everything = _rows(t, pdf.sum(axis=0)[None], [tau.sum()], [total], limits, u_0)[0]
    lenses = {}
    for name, row, e in zip(model.classes, rows, error):
        kind = model.kinematics(name)
        share = row.rate / everything.rate if everything.rate > 0 else np.nan
        # inside a range of t_E the sampling error keeps its ratio to the rate
        e = float(e * row.rate / max(gamma[len(lenses)].sum(), 1e-300)) if kind in ("kicked", "mixed") else None
        lenses[name] = replace(row, share_of_events=share, kinematics=kind, rate_standard_error=e)
    kinds = {lens.kinematics for lens in lenses.values() if lens.rate > 0}
    errors = [lens.rate_standard_error for lens in lenses.values() if lens.rate_standard_error is not None]
    lenses["all"] = replace(
        everything,
        # the parts are sums of the same numbers, rounded: the whole is their sum
        optical_depth=sum(lens.optical_depth for lens in lenses.values()),
        rate=sum(lens.rate for lens in lenses.values()),
        share_of_events=1.0 if everything.rate > 0 else np.nan,
        kinematics=kinds.pop() if len(kinds) == 1 else "mixed",
        rate_standard_error=float(np.hypot.reduce(errors)) if errors else None,
    )
    elements, components = _parts(model, t, pdf_e, tau.sum(axis=0), gamma.sum(axis=0), limits, u_0)
    return {
        "lenses": lenses,
        "components": components,
        "elements": elements,
        "t_E": t,
        "rate_per_ln_t_E": pdf,
        "quadrature_error": float(quadrature),
        "field_mismatch": _mismatch(model, integrals),
        "warnings": (
            *integrals.ready.sources.warnings,
            *model.warnings,
            *class_notes(model, lenses),
            *line_notes(integrals.ready, float(quadrature)),
        ),
    }


def _rows(t, pdf, tau, gamma, limits, u_0):
    """A Lens for each row, limited to a range of t_E if asked."""
    out = []
    for f, a, g in zip(pdf, tau, gamma):
        a, g = float(a), float(g)
        if not g > 0:
            out.append(Lens(a, 0.0))
            continue
        q = distributions.Quantiles(t, f)
        if limits is None:
            out.append(Lens(a, g, 2.0 / np.pi * a * u_0 / g * DAYS_PER_YEAR, q.quantile(0.5)))
            continue
        whole = q.rate()
        kept = q.rate(*limits) / whole if whole > 0 else 0.0
        mean = q.mean(*limits)
        # an event's share of the optical depth goes with its duration
        a *= kept * mean / q.mean() if kept > 0 else 0.0
        out.append(Lens(a, g * kept, mean, q.quantile(0.5, *limits)))
    return out


def _parts(model, t, pdf_e, tau_e, gamma_e, limits, u_0):
    """Optical depth and rate by element of the Galaxy and by component, kick bins added to their component."""
    if limits is not None:
        rows = _rows(t, pdf_e, tau_e, gamma_e, limits, u_0)
        tau_e, gamma_e = (np.array([getattr(r, key) for r in rows]) for key in ("optical_depth", "rate"))
    host, members = np.array(model.component_of), model.galaxy.components
    tau, rate = (np.bincount(host, x, minlength=len(members)) for x in (tau_e, gamma_e))
    elements = {c.element: Lens(float(a), float(g)) for c, a, g in zip(members, tau, rate)}
    components = {}
    for c, a, g in zip(members, tau, rate):
        old = components.get(c.name, Lens(0.0, 0.0))
        components[c.name] = Lens(old.optical_depth + float(a), old.rate + float(g))
    return elements, components


def _mismatch(model, integrals):
    """Synthesised unkicked optical depth over the stars' own, minus one, weighted as neutron stars are born."""
    if model.kicked is None:
        return None
    m, host = model.n_stellar, list(model.kicked.host)
    wanted = found = 0.0
    for i, pop in enumerate(model.populations):
        if i in host:
            weight = pop.spectra["neutron_star"].moment(1.0)
            wanted += weight * integrals.tau[i]
            found += weight * integrals.tau[m + host.index(i)]
    return found / wanted - 1.0 if wanted > 0 else None


def class_notes(model, lenses):
    notes = []
    dark = [n for n in ("neutron_star", "black_hole") if lenses[n].rate > 0 and lenses[n].kinematics == "unkicked"]
    if dark:
        who = " and ".join(n.replace("_", " ") + "s" for n in dark)
        notes.append(f"{who} are unkicked: they ride on the stellar field of their birth component")
    if model.kicked is not None:
        without = model.without_fields()
        if without:
            names = ", ".join(without)
            notes.append(f"the fields hold no {names}: neutron stars and black holes born there are unkicked")
        for name in model.laws:
            lost = model.escaped_at_birth(name)
            if lost > _FAST:
                notes.append(
                    f"{lost:.1%} of {name.replace('_', ' ')}s are kicked faster than {model.kicked.edges[-1]:g} km/s: "
                    "counted as escaped"
                )
    return notes


def line_notes(ready, quadrature):
    """What is particular to this direction and its sources."""
    notes, far = [], ready.mean_distance()
    if quadrature > _ROUGH:
        notes.append(
            f"the two quadratures differ by {quadrature:.1%} in the total rate: medians may be off by as much; "
            "smaller numerics.step_dex and more numerics.nodes in the scenario cure it"
        )
    if ready.sources.fixed_distance and far > _FOREIGN:
        notes.append(f"sources at {far:g} kpc move as the Galaxy's own stars there, not as another galaxy's")
    faintest, share = ready.sources.beyond_faintest(ready.D_S, ready.src[0].sum(axis=0))
    if share > _BEYOND:
        notes.append(
            f"'{ready.sources.rule.text}' is fainter than the last star of the luminosity function (absolute magnitude "
            f"{faintest:.1f}) where {share:.0%} of the sources are: stars beyond it are not counted"
        )
    density = ready.per_arcmin2() if ready.sources.counts_stars else 1.0
    if density < _EMPTY:
        notes.append(f"only {density:.1e} sources per square arcminute pass '{ready.sources.rule.text}' here")
    if ready.model.kicked is not None:
        grid = ready.model.kicked.field.grid
        D = np.linspace(0.0, far, 200)
        x, y, z = ready.line.xyz(D)
        outside = (np.hypot(x, y) > grid.R_max) | (np.abs(z) > grid.z_max)
        if np.mean(outside) > 0.3:
            notes.append(
                f"beyond {D[np.argmax(outside)]:.1f} kpc this sightline is outside the fields (R < {grid.R_max:g}, "
                f"|z| < {grid.z_max:g} kpc): kicked remnants there are left out"
            )
    return notes


def disc_share(ready):
    """Return the share of sources in the discs, or None where the sources are no stars of the Galaxy."""
    components, shares = ready.model.galaxy.components, ready.source_shares()
    if len(shares) != len(components):
        return None
    halos = (CoredHalo, PowerHalo)
    return float(sum(s for s, c in zip(shares, components) if not c.bulge and not isinstance(c.density, halos)))


def optical_depth_along(model, ready, n=400):
    """Return optical depth per kpc of lens distance by component.

    Parameters
    ----------
    model : Model
    ready : Line
    n : int
        Points.

    Returns
    -------
    D, parts : ndarray (n,), dict of str to ndarray (n,)
        Distances [kpc], optical depth per kpc.
    """
    far = ready.edges[-1] if ready.sources.fixed_distance else 12.0
    D = np.linspace(0.0, far, n + 1)[1:]
    density = ready.model.galaxy.profile(ready.line, D)[0]
    if model.kicked is not None:
        rows = model.kicked.profile(ready.line, D)[0]
        density = np.concatenate([density, rows.reshape(len(model.kicked.host), -1, n).sum(axis=1)])
    w, D_S = ready.src[0].sum(axis=0), ready.D_S
    inverse = np.array([np.sum(w[D_S > d] * (1.0 / d - 1.0 / D_S[D_S > d])) for d in D])
    geometry = np.pi * FOUR_G_C2 * D**2 * inverse
    mass = np.array([[0.0 if s is None else s.moment(1.0) for s in row] for row in model.spectra()]).sum(axis=0)
    out = {}
    for i, weight, rho in zip(model.component_of, mass, density):
        name = model.galaxy.components[i].name
        out[name] = out.get(name, 0.0) + weight * geometry * rho
    # at the observer itself there is none
    return np.concatenate([[0.0], D]), {name: np.concatenate([[0.0], f]) for name, f in out.items()}
