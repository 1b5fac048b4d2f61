"""Microlensing forecasts for stars and dark remnants: optical depth, event rates, timescales toward any sightline.

Names are loaded on first use, so that ``lensrate --help`` stays instant.
"""

from ._version import __version__

_WHERE = {
    "Campaign": "surveys.campaign",
    "ConvergenceError": "errors",
    "DataFileError": "errors",
    "Family": "surveys.family",
    "Galaxy": "galaxy.model",
    "InputError": "errors",
    "LensrateError": "errors",
    "MockEvents": "events.mock",
    "Scenario": "scenario.record",
    "Sightline": "lensing.sightline",
    "SkyMap": "surveys.skyrecord",
    "Spread": "surveys.spread_result",
    "campaign": "surveys.yields",
    "Sample": "events.observed",
    "census": "remnants.census",
    "compare_sample": "events.versus",
    "constrain": "inference.constrain",
    "kick_yield": "surveys.kick_yield",
    "mass_forecast": "events.masses",
    "mock_events": "events.mock",
    "resolve": "scenario.model",
    "sightline": "lensing.sightline",
    "sightline_spread": "surveys.spread",
    "sightlines": "lensing.many",
    "skymap": "surveys.skymap",
    "spread": "surveys.spread",
    "synthesize": "remnants.synthesis",
}

__all__ = ["__version__", *_WHERE]  # noqa: PLE0604


def __getattr__(name):
    if name not in _WHERE:
        raise AttributeError(f"module 'lensrate' has no attribute '{name}' (known: {', '.join(sorted(__all__))})")
    from importlib import import_module

    value = getattr(import_module(f"lensrate.{_WHERE[name]}"), name)
    globals()[name] = value
    return value


def __dir__():
    return sorted(__all__)
