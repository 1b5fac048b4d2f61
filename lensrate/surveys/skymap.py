"""Maps of optical depth, rates and sources over a grid of Galactic coordinates or a list of fields."""

from dataclasses import replace

import astropy.units as u
import numpy as np

from .._version import __version__
from ..errors import InputError
from ..kernels._jit import KEY
from ..parallel import run_map
from ..scenario import Scenario, resolve
from ..units import check_range, strip
from . import mapfiles
from .campaign import Campaign
from .dust_map import DustMap
from .pixels import PixelWork
from .skygrid import MOST_PIXELS, SkyGrid
from .skyrecord import SkyMap
from .stars import field_scenario, field_stars

__all__ = ["SkyMap", "campaign_scenario", "campaign_skymap", "count", "seconds", "skymap"]

#: seconds of one core a pixel without fields, with fields, with a sightline's integrals, and more for an efficiency
_COST = {"stellar": 0.07, "kicked": 0.17, "precise": 1.2, "efficiency": 4.0}


def skymap(
    l, b, scenario="default", *, step=None, names=(), extinction=None, efficiency=None, precise=False, jobs=1,
    executor=None, progress=None, checkpoint=None, restart=False,
):  # fmt: skip
    """Map optical depth, rates and sources.

    Parameters
    ----------
    l, b : Quantity
        With `step`, two numbers each: the first and last pixel centre; 355 to 5 deg goes through l = 0. Without, the
        directions of fields, (n,).
    scenario : Scenario or str
        Every assumption.
    step : Quantity, optional
        Of the grid, in both coordinates.
    names : sequence of str, optional
        Of the fields.
    extinction : list of dict, optional
        Measured A by band [mag] of each field; an empty one leaves the scenario's own.
    efficiency : Efficiency, optional
        Adds detected rates; needs the distribution of t_E of every pixel, several times the work.
    precise : bool
        Take the integrals of `lensing.sightline`, some six times as long: the same numbers as the sightlines'. Else
        sources are gathered behind each lens, see Notes.
    jobs : int
        Local threads. The result does not depend on it.
    executor : object with ``map``, optional
        Instead of local threads.
    progress : callable, optional
        Called with the shares, 0 to 1, of the pixels done and of those found done before.
    checkpoint : str or Path, optional
        File that keeps finished pixels; a run with the same inputs takes them up again, with the identical result. It
        stays until it is deleted.
    restart : bool
        Drop what another map left in that file.

    Returns
    -------
    SkyMap

    Raises
    ------
    InputError
        A grid that is none, too many pixels, unequal lengths, an efficiency of other sources or another u_0 limit.
    ConvergenceError
        A rate came out negative or not finite.

    Notes
    -----
    How far a pixel is from the sightline there, see `lensing.gathered`. No distribution of t_E is made: the mean t_E is
    (2/pi) tau/Gamma, exact for u_0 < 1.
    """
    if not isinstance(scenario, Scenario):
        scenario = Scenario.read(scenario)
    ends = l, b
    grid, l, b = _pixels(l, b, step)
    extinction = [{}] * l.size if extinction is None else [dict(e) for e in extinction]
    for what, given in (("extinctions", extinction), ("names", names)):
        if len(given) not in ((0, l.size) if what == "names" else (l.size,)):
            raise InputError(f"skymap: {l.size} directions and {len(given)} {what} given; equal numbers are needed")
    notes = () if efficiency is None else _efficiency_notes(efficiency, scenario)
    notes += () if grid is None else _end_notes(grid, *ends)
    work = PixelWork(scenario, efficiency, precise)
    directions = [(float(x), float(y), e) for x, y, e in zip(l, b, extinction)]
    model = resolve(scenario)
    part = mapfiles.PartFile(checkpoint, _key(scenario, model, directions, efficiency, precise), restart)
    try:
        pixels = _run(work, directions, part, jobs, executor, progress)
    finally:
        part.close()
    return _gather(grid, l, b, tuple(map(str, names)), scenario, model, pixels, efficiency, notes)


def campaign_skymap(survey, scenario=None, **options):
    """Map the fields of a campaign as the campaign sees them.

    Parameters
    ----------
    survey : Campaign or str
        A file or shipped name is read. Its source rule, u_0 limit, luminosity function, extinction (maps too) and
        stated stars enter; the efficiency does not, unless it is given.
    scenario : Scenario or str, optional
        Other assumptions; default those that the campaign names.
    **options
        Of `skymap`: efficiency, precise, jobs, executor, progress, checkpoint, restart.

    Returns
    -------
    SkyMap
        Rates per star are those of the field's centre; per area, its own sources and the mean rate over it count.

    Raises
    ------
    InputError
        Fields with different source rules, which make no one map; else as `skymap`.
    """
    if not isinstance(survey, Campaign):
        survey = Campaign.read(survey)
    base = survey.scenario if scenario is None else scenario
    base = base if isinstance(base, Scenario) else Scenario.read(base)
    fields = survey.fields
    shared = campaign_scenario(survey, base)
    dust = [DustMap.read(f.extinction_map) if f.extinction_map else None for f in fields]
    own = [field_scenario(base, survey, f, d) for f, d in zip(fields, dust)]
    stars = [field_stars(survey, i, *pair) for i, pair in enumerate(zip(own, dust))]
    made = skymap(
        np.array([f.l_deg for f in fields]) * u.deg, np.array([f.b_deg for f in fields]) * u.deg, shared,
        names=[f.name for f in fields], extinction=[s.extinction for s in own], **options,
    )  # fmt: skip
    notes = made.warnings
    if made.detected is None and survey.efficiency.name != "complete":
        notes = ("rates are those of all events, without the campaign's efficiency", *notes)
    return replace(
        made,
        source_density=np.array([s.density for s in stars]),
        rate_factor=np.array([s.rate_factor for s in stars]),
        area_deg2=np.array([s.area_deg2 for s in stars]),
        campaign={"campaign": survey.name, "campaign_hash": survey.hash, "campaign_text": survey.text},
        warnings=notes,
    )


def campaign_scenario(survey, base):
    """Return a scenario with what all fields of a campaign share: source rule, u_0 limit, luminosity function.

    Raises
    ------
    InputError
        The fields' source rules differ.
    """
    rules = list(dict.fromkeys(f.sources for f in survey.fields))
    if len(rules) > 1:
        raise InputError(
            f"campaign '{survey.name}': its fields have sources {', '.join(rules)}, and a map has one rule; put the "
            "fields of each rule into a file of their own"
        )
    changes = {"sources": rules[0], "u_0_limit": survey.u_0_limit}
    return base.replace(**changes, **({"luminosity": survey.luminosity} if survey.luminosity else {}))


def count(l, b, step=None):
    """Return the number of pixels that arguments of `skymap` make; they are checked."""
    grid, l, _ = _pixels(l, b, step)
    return l.size


def seconds(scenario, n, efficiency=False, precise=False, jobs=1):
    """Return a rough foretelling of the time [s] that a map of n pixels takes."""
    per = _COST["stellar" if scenario.unkicked or not scenario.fields else "kicked"]
    per = _COST["precise"] if precise else per
    return n * (per + (_COST["efficiency"] if efficiency else 0.0)) / max(jobs, 1)


def _pixels(l, b, step):
    l, b = (np.atleast_1d(strip(n, q, u.deg)) for n, q in (("l", l), ("b", b)))
    if step is None:
        check_range("b", b, "deg", -90.0, 90.0)
        if l.shape != b.shape or l.ndim != 1 or l.size == 0:
            raise InputError(f"skymap: {l.size} longitudes and {b.size} latitudes given; as many of both are needed")
        if l.size > MOST_PIXELS:
            raise InputError(f"skymap: {l.size} fields given, at most {MOST_PIXELS} are allowed; split the list")
        return None, l, b
    for name, q in (("l", l), ("b", b)):
        if q.shape != (2,):
            raise InputError(f"{name}: {q.size} numbers given, a grid needs two: its first and last pixel")
    grid = SkyGrid(*map(float, l), *map(float, b), strip("step", step, u.deg, shape=()))
    return grid, *grid.centres()


def _end_notes(grid, l, b):
    """Say where the grid ends if that is before the end asked for."""
    notes = []
    for name, asked, end in (("l", l, grid.l_end), ("b", b, grid.b_end)):
        asked = float(asked[1].to_value(u.deg))
        short = asked - end if name == "b" else (asked - end) % 360.0
        # once around, the last pixel is beside the first
        if 1e-6 * grid.step < short < grid.step * (1 - 1e-6):
            end = end % 360.0 if name == "l" and grid.l_start >= 0 else end
            notes.append(f"the last pixel is at {name} = {end:g}, not {asked:g}: that is no whole number of steps away")
    return tuple(notes)


def _efficiency_notes(efficiency, scenario):
    """Refuse an efficiency of other events; say what else does not match."""
    theirs = efficiency.u_0_limit
    if efficiency.second == "I_S":
        raise InputError(
            "efficiency: it depends on source magnitude, whose mix differs between pixels; give a curve against t_E "
            "alone, or use a campaign"
        )
    if abs(theirs - scenario.u_0_limit) > 1e-9:
        raise InputError(
            f"efficiency: it is one of events with u_0 < {theirs:g}, the scenario's are u_0 < {scenario.u_0_limit:g}; "
            f"add --u-0-limit {theirs:g}"
        )
    notes = []
    if efficiency.per == "catalogued_object":
        notes.append(
            "the efficiency is per catalogued object, the map's sources are real stars: blends hold several of those"
        )
    efficiency.check_sources("skymap", scenario.sources)
    return tuple(notes)


def _key(scenario, model, directions, efficiency, precise):
    """Checksum of what decides every number of a map."""
    curve = None
    if efficiency is not None:
        curve = [x.tolist() for x in (efficiency.t_E, efficiency.values, efficiency.grid)]
        curve += [efficiency.binned, efficiency.second, list(efficiency.includes), efficiency.u_0_limit]
    made = {
        "version": __version__,
        "kernels": KEY,
        "scenario": scenario.hash,
        "fields": None if model.kicked is None else model.kicked.sha256,
        "directions": directions,
        "efficiency": curve,
        "precise": precise,
    }
    return mapfiles.digest(made)


def _run(work, directions, part, jobs, executor, progress):
    """Compute the pixels that are not there yet; return all in order."""
    done = dict(part.found)
    n, found = len(directions), len(done)

    def tell(i, pixel):
        done[i] = pixel
        part.add(i, pixel)
        if progress is not None:
            progress(len(done) / n, found / n)

    todo = [i for i in range(n) if i not in done]
    if todo and executor is None:
        # the first alone, so that threads do not compile the same kernels at once
        tell(todo[0], work(directions[todo[0]]))
        todo = todo[1:]
    numbers = iter(todo)
    run_map(work, [directions[i] for i in todo], jobs, executor, lambda _, pixel: tell(next(numbers), pixel))
    return [done[i] for i in range(n)]


def _gather(grid, l, b, names, scenario, model, pixels, efficiency, notes):
    def column(name):
        values = np.array([getattr(p, name) for p in pixels]).T
        return values

    tau, rate, error = (column(n) for n in ("optical_depth", "rate", "rate_standard_error"))
    detected = column("detected") if efficiency is not None else None
    sampled = np.sqrt(np.nansum(error**2, axis=0))
    sampled[~np.isfinite(error).any(axis=0)] = np.nan

    def with_all(values):
        # added up in order, as a sightline does
        return np.concatenate([values, np.array([sum(v) for v in values.T])[None]])

    own = {n: model.kinematics(n) for n in model.classes}
    counted = np.nansum(rate, axis=1)
    used = any(np.isfinite(p.extinction) for p in pixels)
    words = _model_notes(model, dict(zip(model.classes, counted)))
    return SkyMap(
        l=l * u.deg,
        b=b * u.deg,
        names=names,
        grid=grid,
        scenario=scenario,
        classes=(*model.classes, "all"),
        optical_depth=with_all(tau),
        rate=with_all(rate),
        rate_standard_error=np.concatenate([error, sampled[None]]),
        detected=None if detected is None else with_all(detected),
        source_density=column("source_density"),
        mean_source_distance=column("mean_source_distance"),
        extinction=column("extinction"),
        extinction_band=model.sources.band if used else "",
        efficiency="" if efficiency is None else efficiency.describe(),
        kinematics=own,
        fields=None if model.kicked is None else {"name": scenario.fields, "sha256": model.kicked.sha256},
        warnings=(*notes, *model.warnings, *words, *_together(pixels, l, b, names)),
        references=model.references,
    )


def _model_notes(model, rates):
    from types import SimpleNamespace

    from ..lensing.forecast import class_notes

    lenses = {n: SimpleNamespace(rate=r, kinematics=model.kinematics(n)) for n, r in rates.items()}
    return class_notes(model, lenses)


def _together(pixels, l, b, names):
    """Each kind of warning once, for its first pixel, with the number of pixels it holds for."""
    kinds = {}
    for i, pixel in enumerate(pixels):
        for text in pixel.warnings:
            kinds.setdefault("".join(c for c in text if not c.isdigit()), []).append((i, text))
    what = "fields" if names else "pixels"
    out = []
    for rows in kinds.values():
        i, text = rows[0]
        where = f"field {names[i]}" if names else f"l = {l[i]:g}, b = {b[i]:g}"
        more = f" and {len(rows) - 1} more {what}" if len(rows) > 1 else ""
        out.append(f"{text} ({where}{more})")
    return out
