"""The stars that a field monitors: their assumptions, their number, and how their rate changes over the field."""

from dataclasses import replace
from typing import NamedTuple

import numpy as np

from ..errors import InputError
from ..lensing import rates
from ..scenario import resolve
from ..scenario.numerics import Numerics
from ..sources.rules import DistanceRule, LimitRule, parse_rule

__all__ = ["FieldStars", "field_curve", "field_scenario", "field_stars", "magnitude_share"]

_ARCMIN2_PER_DEG2 = 3600.0


class FieldStars(NamedTuple):
    """Sources of a field.

    Attributes
    ----------
    number : float
        Monitored, those shared with an earlier field left out where the campaign says so.
    density : float
        Per square arcminute of the area that counts; NaN where sources are not counted.
    rate_factor : float
        Source-weighted mean rate over the field against that at its centre, from the stars' own fields.
    counted : str
        "stated", or "source model".
    area_deg2 : float
        That counts.
    """

    number: float
    density: float
    rate_factor: float
    counted: str
    area_deg2: float


def field_scenario(base, survey, f, dust=None):
    """Return the scenario of one field: source rule, extinction, luminosity and u_0 limit laid over a base.

    Parameters
    ----------
    base : Scenario
    survey : Campaign
    f : Field
    dust : DustMap, optional
        Of the field; its mean is the extinction.
    """
    changes = {"sources": f.sources, "u_0_limit": survey.u_0_limit}
    if f.extinction:
        changes["extinction"] = f.extinction
    if dust is not None:
        changes["extinction"] = {parse_rule(f.sources).band: dust.mean(f)}
    if survey.luminosity:
        changes["luminosity"] = survey.luminosity
    return base.replace(**changes)


def field_stars(survey, i, scenario, dust=None):
    """Return the sources of a campaign's field.

    Parameters
    ----------
    survey : Campaign
    i : int
        Of its fields.
    scenario : Scenario
        The field's own, from `field_scenario`.
    dust : DustMap, optional

    Returns
    -------
    FieldStars
    """
    f, kept = survey.fields[i], survey.kept_share(i)
    area = f.area_deg2 * kept
    density, factor = _over_field(f, scenario, dust)
    counted = "source model"
    if f.monitored_stars is not None:
        number, counted = f.monitored_stars * kept, "stated"
        density = f.monitored_stars / (f.area_deg2 * _ARCMIN2_PER_DEG2)
    elif f.star_density is not None:
        density, counted = f.star_density, "stated"
        number = density * area * _ARCMIN2_PER_DEG2
    else:
        number = density * area * _ARCMIN2_PER_DEG2
    return FieldStars(float(number), float(density), float(factor), counted, float(area))


def _over_field(f, scenario, dust):
    """Mean source density [1/arcmin2] over a field, and source-weighted mean rate against the centre's.

    Only the stars' own rate is followed over the field: remnants' kicked fields vary more slowly.
    """
    if isinstance(parse_rule(scenario.sources), DistanceRule):
        return np.nan, 1.0
    l, b, w = f.directions()
    model, numerics = resolve(scenario), Numerics(**scenario.numerics)
    roots = np.array([0.0 if p is None else p.spectra["star"].moment(0.5) for p in model.populations])

    def at(local, l, b):
        """Source density, and the stars' rate."""
        direction = np.radians([l, b])
        toward = local.sources.toward(*direction, local.galaxy)
        line = rates.prepare(local, local.galaxy.sightline(*direction), toward, numerics)
        return line.per_arcmin2(), float(roots @ rates.moments(line)[1].sum(axis=1))

    def mean(points, w):
        """Mean density, and mean rate of all sources, both over those of the centre."""
        density, rate = np.array(points).T
        whole = w @ density
        return whole / middle[0], w @ (density * rate) / whole / middle[1]

    middle = at(model, f.l_deg, f.b_deg)
    density, factor = (1.0, 1.0) if l.size == 1 else mean([at(model, *point) for point in zip(l, b)], w)
    if dust is not None:
        # patches of dust are taken to know nothing of the gradient over the field
        band, values = parse_rule(f.sources).band, dust.patches(f)
        points = [at(resolve(scenario.replace(extinction={band: float(a)})), f.l_deg, f.b_deg) for a in values]
        patchy = mean(points, np.full(values.size, 1.0 / values.size))
        density, factor = density * patchy[0], factor * patchy[1]
    return float(middle[0] * density), float(factor)


def field_curve(efficiency, u_0_limit, ready):
    """Return an efficiency against t_E alone: averaged over u_0 up to a limit, or over the magnitudes of the sources.

    Parameters
    ----------
    efficiency : Efficiency
    u_0_limit : float
    ready : Line
        Whose sources count.

    Returns
    -------
    Efficiency
    """
    curve = efficiency.up_to(u_0_limit)
    return curve.averaged(magnitude_share(ready)) if curve.second == "I_S" else curve


def magnitude_share(ready):
    """Return a function: share of a sightline's sources brighter than apparent magnitudes.

    Raises
    ------
    InputError
        The source rule says nothing of magnitudes.
    """
    rule = ready.sources.rule
    if not isinstance(rule, LimitRule) or rule.band != "I":
        raise InputError(f"efficiency: one that depends on I_S needs sources with a limit like I=21, not '{rule.text}'")
    D, weight = ready.D_S, ready.src[0]
    whole = ready.sources.per_msun(D)

    def share(magnitude):
        out = []
        for m in np.atleast_1d(magnitude):
            brighter = replace(ready.sources, rule=replace(rule, magnitude=float(min(m, rule.magnitude))))
            part = brighter.per_msun(D)
            out.append(np.sum(weight * np.divide(part, whole, out=np.zeros_like(part), where=whole > 0)))
        return np.array(out)

    return share
