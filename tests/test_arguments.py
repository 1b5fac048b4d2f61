"""Public functions given numbers without units, other units or things of another kind: said at once, by argument."""

import astropy.units as u
import pytest

import lensrate
from lensrate import InputError
from lensrate.events.odds import class_probabilities
from lensrate.lensing.many import forecasts

PLACE = (1.0 * u.deg, -3.9 * u.deg)
T_E = {"t_E": ([20.0], [1.0])}


@pytest.mark.parametrize(
    "function, args, options, words",
    [
        (lensrate.sightline, (1.0, -3.9), {}, "l: 1.0 has no unit"),
        (lensrate.sightline, (1.0 * u.kpc, PLACE[1]), {}, "l: unit 'kpc'"),
        (lensrate.sightline, PLACE, {"extinction": {"I": 1 * u.kpc}}, "extinction.I: unit 'kpc'"),
        (lensrate.sightline, PLACE, {"extinction": 1.2}, "extinction: float given"),
        (lensrate.sightline, PLACE, {"t_E_range": (1, 2)}, "t_E_range: 1 has no unit"),
        (lensrate.sightlines, ([1.0], [-3.9]), {}, "has no unit"),
        (lensrate.sightlines, ([1.0] * u.kpc, [-3.9] * u.deg), {}, "l: unit 'kpc'"),
        (forecasts, ("a", "b"), {}, "l: 'a' has no unit"),
        (lensrate.mock_events, (1.0, -3.9), {}, "l: 1.0 has no unit"),
        (lensrate.mock_events, (1.0 * u.deg,), {}, "b: missing"),
        (lensrate.mock_events, PLACE, {"blend": 20.0}, "blend: 20.0 has no unit"),
        (lensrate.mock_events, PLACE, {"dates": 5}, "dates: 5 given"),
        (lensrate.skymap, ([1.0], [-3.9]), {}, "has no unit"),
        (lensrate.skymap, ("a", "b"), {}, "l: 'a' has no unit"),
        (lensrate.skymap, ([1, 2] * u.deg, [-4, -3] * u.deg), {"step": 1.0}, "step: 1.0 has no unit"),
        (lensrate.sightline_spread, (1.0, -3.9), {}, "l: 1.0 has no unit"),
        (class_probabilities, (1.0, -3.9, T_E), {}, "l: 1.0 has no unit"),
        (class_probabilities, (1.0 * u.kpc, PLACE[1], T_E), {}, "l: unit 'kpc'"),
        (lensrate.campaign, (5.0,), {}, "campaign: float given, a file or a shipped name"),
        (lensrate.campaign, (1 * u.deg,), {}, "campaign: Quantity given"),
        (lensrate.Sample.read, (5,), {}, "sample: int given, a file"),
        (lensrate.compare_sample, (5,), {}, "sample: int given, a Sample"),
        (lensrate.constrain, (5,), {}, "sample: int given, a Sample"),
        (lensrate.kick_yield, (5,), {}, "forecast: int given, a CampaignForecast"),
        (lensrate.mass_forecast, (5,), {}, "forecast: int given, a CampaignForecast"),
        (lensrate.spread, (5,), {}, "forecast: 5 given, something to call"),
    ],
)
def test_arguments_that_are_none(function, args, options, words):
    with pytest.raises(InputError) as told:
        function(*args, **options)
    assert words in str(told.value)


def test_a_list_of_quantities_is_one():
    with pytest.raises(InputError, match="b: 95 deg given"):
        lensrate.skymap([1 * u.deg, 60 * u.arcmin], [-3 * u.deg, 95 * u.deg])


@pytest.mark.parametrize(
    "size, words",
    [
        ({"height_deg": 1.0}, "height_deg is one of a rectangle and needs width_deg"),
        ({"radius_deg": 1.0, "angle_deg": 3.0}, "angle_deg is one of a rectangle"),
        ({"width_deg": 1.0}, "width_deg needs height_deg"),
    ],
)
def test_half_a_rectangle(size, words):
    from lensrate.surveys.sky import parse_shape

    with pytest.raises(InputError, match=words):
        parse_shape("field 'A'", size, 0.0, -3.0)
