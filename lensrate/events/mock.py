"""Mock catalogues: events of a sightline or a campaign, drawn from the rate, with all that belongs to them."""

import os

import astropy.units as u
import numpy as np

from ..claims import check_memory
from ..errors import InputError
from ..galaxy.frames import icrs_from_galactic, sky_angle
from ..kernels import catalogue as kernels
from ..lensing.earth import EPOCHS, earth_on_sky
from ..lensing.sampler import Sampler, seeds
from ..lensing.sightline import Sightline, sightline
from ..parallel import run_map
from ..surveys.campaign import Campaign
from ..surveys.yields import CampaignForecast, campaign
from ..units import DAYS_PER_YEAR
from . import light
from .catalogue import COLUMNS, MockEvents

__all__ = ["COLUMNS", "MockEvents", "mock_events"]

_CHUNK = 65536  # events that share one stream of random numbers; part of what a seed means
_YEAR = (62502.0, 62867.0)  # MJD, the year 2030
_NUMBER = 1000
_MOST = 50_000_000
_BYTES = 1000  # of memory for an event: its columns, and their copies in a table that is written
_DRAWN = ("D_L", "D_S", "mu_rel_l", "mu_rel_b", "t_E", "theta_E", "pi_E", "mu_L_l", "mu_L_b", "mu_S_l", "mu_S_b")
_SKY = ("mu_rel_N", "mu_rel_E", "pi_EN", "pi_EE", "t_E_geo", "pi_EN_geo", "pi_EE_geo")


def mock_events(
    l, b=None, scenario="default", *, number=None, seed=None, weighted=False, tilt=None, jobs=1, blend=None, dates=None,
    executor=None,
):  # fmt: skip
    """Draw a mock catalogue.

    Parameters
    ----------
    l, b : Quantity
        Direction; or instead of both a SkyCoord, a Sightline, a Campaign (or its file or name) or a CampaignForecast.
    scenario : Scenario or str
        Assumptions, where no forecast is given; a campaign's own if left at "default".
    number : int, optional
        Events to draw, 1000 for a sightline. A campaign without a number is played once: a Poisson number of events in
        every field, each with weight 1; weighted, or with a tilt, it has 1000 a field.
    seed : int, SeedSequence or Generator, optional
        The same seed gives the same events whatever `jobs`; without it one is made and kept in the result.
    weighted : bool
        Events with unequal weights, which cost a third less; otherwise equal ones.
    tilt : dict of str to float or "equal", optional
        Draw a class so many times as often as its rate says, or all equally often; weights undo it.
    jobs : int
        Threads.
    blend : Quantity [mag], optional
        Further light in the source's place, the same for all.
    dates : (float, float), optional
        MJD between which a sightline's events peak, evenly; 2030 by default. A campaign has its seasons.
    executor : object with ``map``, optional
        Instead of threads: for chunks of events, and a campaign's fields.

    Returns
    -------
    MockEvents

    Raises
    ------
    InputError, ConvergenceError
        As `sightline`, `campaign` and `Sampler.draw`.

    Notes
    -----
    Events follow the heliocentric rate. t_0 and u_0 are drawn evenly (u_0 with a limit at peak by how many sources it
    brings over the limit) and are those of the geocentric line at t_0par = t_0, mu_geo = mu_hel - v_Earth pi_rel / au,
    so they give the light curve together with t_E_geo, pi_EN_geo, pi_EE_geo.
    """
    source, kept = _seed(seed)
    extra = None if blend is None else _magnitude(blend)
    forecast = _forecast(l, b, scenario, jobs, executor)
    if isinstance(forecast, CampaignForecast):
        if dates is not None:
            raise InputError("dates: a campaign has seasons of its own; leave them out")
        parts = _campaign(forecast, source, number, weighted, tilt, jobs, extra, executor)
        names, unit = [f.field.name for f in forecast.fields], ""
        first = forecast.fields[0].sightline
    else:
        span = _dates(dates)

        def when(uniform):
            return span[0] + (span[1] - span[0]) * uniform

        number = _NUMBER if number is None else number
        parts = [_catalogue(forecast, _number(number), source, weighted, tilt, jobs, extra, when, None, executor)]
        names, unit, first = [], "1/yr", forecast
    ready = first._integrals.ready
    if not parts:
        raise InputError("number: no event happened in this campaign; state a number, or play it with another seed")
    columns = {key: np.concatenate([p[key] for p in parts]) for key in parts[0]} if len(parts) > 1 else parts[0]
    return MockEvents(
        columns=columns,
        classes=list(first._model.classes),
        components=[c.name for c in first._model.galaxy.components],
        field_names=names,
        band=ready.sources.dust.band,
        weighted=weighted or tilt is not None,
        seed=kept,
        forecast=forecast,
        unit=unit,
        blend=extra,
    )


def _forecast(l, b, scenario, jobs, executor):
    if isinstance(l, (Sightline, CampaignForecast)):
        return l
    if isinstance(l, (Campaign, str, os.PathLike)):
        return campaign(l, None if scenario == "default" else scenario, jobs=jobs, executor=executor)
    return sightline(l, b, scenario)


def _seed(seed):
    """A root of all random numbers, and what to write down so that it can be had again."""
    if seed is None:
        # short enough to be typed again
        seed = int(np.random.SeedSequence().generate_state(1)[0])
    root = seeds(seed)
    if isinstance(seed, (int, np.integer)):
        return root, int(seed)
    if root.spawn_key:
        return root, f"{root.entropy}, spawn key {list(root.spawn_key)}"
    return root, int(root.entropy)


def _number(number):
    if isinstance(number, bool) or not isinstance(number, (int, np.integer)) or not 1 <= number <= _MOST:
        raise InputError(f"number: {number!r} given, must be a whole number from 1 to {_MOST}")
    check_memory(f"number: {number}", _BYTES * int(number), "draw fewer, or several catalogues with seeds of their own")
    return int(number)


def _magnitude(blend):
    from ..units import strip

    return strip("blend", blend, u.mag, low=-30.0, high=60.0, shape=())


def _dates(given):
    if given is None:
        return _YEAR
    try:
        start, end = (float(getattr(t, "mjd", t)) for t in given)
    except (TypeError, ValueError):
        raise InputError(f"dates: {given!r} given, two MJD numbers or Times are needed") from None
    if not EPOCHS[0] <= start < end <= EPOCHS[1]:
        raise InputError(f"dates: {start:g} to {end:g} given, must rise within MJD {EPOCHS[0]:g} to {EPOCHS[1]:g}")
    return start, end


def _campaign(forecast, root, number, weighted, tilt, jobs, blend, executor):
    """Events of every field that has any."""
    survey = forecast.campaign
    years = survey.calendar.exposure(survey.efficiency.includes).sum() / DAYS_PER_YEAR
    happen = np.array([f.sources * f.rate_factor * f.sightline.lenses["all"].rate * years for f in forecast.fields])
    own, *children = root.spawn(len(happen) + 1)
    rng = np.random.default_rng(own)
    weight = happen.copy()
    if weighted or tilt is not None:
        share = _NUMBER if number is None else _number(number) * happen / happen.sum()
        counts = np.maximum(np.round(share * np.ones(happen.size)).astype(int), 1)
    elif number is None:
        counts = rng.poisson(happen)
        weight = counts.astype(float)
    else:
        counts = rng.multinomial(_number(number), happen / happen.sum())
        weight = counts * happen.sum() / number
    if counts.sum() > _MOST:
        raise InputError(f"number: {counts.sum()} events would happen, at most {_MOST} are drawn; state a number")

    def when(uniform):
        return survey.calendar.draw(uniform, survey.efficiency.includes)

    parts = []
    for i, f in enumerate(forecast.fields):
        if counts[i] == 0:
            continue
        part = _catalogue(
            f.sightline, int(counts[i]), children[i], weighted, tilt, jobs, blend, when, survey.efficiency, executor
        )
        if weighted or tilt is not None:
            part["weight"] *= weight[i] / part["weight"].sum()
        else:
            part["weight"][:] = weight[i] / counts[i]
        parts.append({"field": np.full(counts[i], i, dtype=np.int32), **part})
    return parts


def _catalogue(forecast, n, root, weighted, tilt, jobs, blend, when, efficiency=None, executor=None):
    """Columns of one sightline's events."""
    first, second = root.spawn(2)
    model, sources = forecast._model, forecast._integrals.ready.sources
    draws = Sampler.of(forecast).draw(n, first, full=True, weighted=weighted, tilt=tilt, jobs=jobs, executor=executor)
    band = sources.dust.band
    columns = {
        "lens": draws.lens_class,
        "component": draws.component,
        "source_component": draws.source_component,
        "M_L": draws.M,
        **{name: getattr(draws, name) for name in _DRAWN},
        "weight": draws.weight,
    }
    made = [*_SKY, "t_0", "u_0"]
    made += [f"{band}_{what}" for what in ("S", "L", "base", "peak")]
    made += ["birth"]
    made += ["efficiency", "detected"] if efficiency is not None else []

    def room(n):
        return {name: np.empty(n, dtype=bool if name == "detected" else float) for name in made}

    first_day, earth = _earth(forecast, when(np.array([0.0, 1.0 - 1e-12])))
    angle = float(sky_angle(forecast.l, forecast.b).to_value(u.rad))
    cosine, sine = np.cos(angle), np.sin(angle)

    def fill(job):
        """What was drawn of a chunk, and room for the rest, which is filled."""
        c, seed = job
        rng = np.random.Generator(np.random.SFC64(seed))
        u_0, t_0, star, born, found = rng.random((5, c["t_E"].size))
        side = np.where(u_0 < 0.5, -1.0, 1.0)
        u_0 = np.abs(2.0 * u_0 - 1.0) * forecast.u_0_limit
        c["t_0"][:] = when(t_0)
        kernels.sky(
            c["mu_rel_l"], c["mu_rel_b"], c["theta_E"], c["pi_E"], c["t_0"], cosine, sine, first_day, earth,
            DAYS_PER_YEAR, *(c[name] for name in _SKY),
        )  # fmt: skip
        faint, u_0 = light.source_magnitude(
            sources, c["source_component"], c["D_S"], star, rng.standard_normal(star.size), u_0, forecast.u_0_limit
        )
        _light(c, band, faint, u_0, blend, light.lens_magnitude(
            model, sources, c["lens"], c["component"], c["M_L"], c["D_L"], born
        ))  # fmt: skip
        c["u_0"][:], c["birth"][:] = side * u_0, born
        if efficiency is not None:
            second = {"": None, "I_S": faint, "u_0": u_0}[efficiency.second]
            c["efficiency"][:] = efficiency.of(c["t_E"], second)
            c["detected"][:] = found < c["efficiency"]

    def filled(job):
        drawn, seed = job
        c = {**drawn, **room(drawn["t_E"].size)}
        fill((c, seed))
        return {name: c[name] for name in made}

    def chunk(columns, k):
        return {name: column[k : k + _CHUNK] for name, column in columns.items()}

    starts = range(0, n, _CHUNK)
    streams = second.spawn(len(starts))
    whole = room(n)
    if executor is None:
        run_map(fill, [(chunk({**columns, **whole}, k), s) for k, s in zip(starts, streams)], jobs)
    else:
        parts = executor.map(filled, [(chunk(columns, k), s) for k, s in zip(starts, streams)])
        for k, part in zip(starts, parts):
            for name, values in part.items():
                whole[name][k : k + _CHUNK] = values
    return {**columns, **whole}


def _earth(forecast, days):
    """Earth's place and velocity on the sky at whole days around an event's possible times of peak."""
    ra, dec = icrs_from_galactic(forecast.l, forecast.b)
    first = np.clip(np.floor(days[0]) - 1.0, *EPOCHS)
    nodes = np.minimum(np.arange(first, np.ceil(days[1]) + 2.0), EPOCHS[1])
    return first, np.stack(earth_on_sky(nodes, float(ra.to_value(u.rad)), float(dec.to_value(u.rad))), axis=-1)


def _light(c, band, source, u_0, blend, lens):
    """Fill the magnitudes."""
    c[f"{band}_S"][:], c[f"{band}_L"][:] = source, lens
    kernels.together(source, lens, np.inf if blend is None else blend, u_0, c[f"{band}_base"], c[f"{band}_peak"])
