"""Pictures; the only package that imports matplotlib. One file for each kind of result."""

from .campaigns import campaign, kick_yield, save_campaign, save_kick_yield
from .compare import comparison, comparison_page, ratio, save_comparison
from .constrain import marginal, mass_limits, posterior, save_mass_limits, save_posterior
from .events import events, save_events
from .followup import follow_up, kick, save_follow_up, save_kick
from .galaxy import maps, save_maps
from .masses import masses, save_masses
from .odds import odds, save_odds
from .sightlines import depth, joint, overview, save_picture, sightline, stacked, timescales
from .spread import save_spread, spread_overview, tornado

__all__ = [
    "campaign",
    "comparison",
    "comparison_page",
    "depth",
    "events",
    "follow_up",
    "joint",
    "kick",
    "kick_yield",
    "maps",
    "marginal",
    "mass_limits",
    "masses",
    "odds",
    "overview",
    "posterior",
    "ratio",
    "save_campaign",
    "save_comparison",
    "save_events",
    "save_follow_up",
    "save_kick",
    "save_kick_yield",
    "save_maps",
    "save_mass_limits",
    "save_masses",
    "save_odds",
    "save_picture",
    "save_posterior",
    "save_spread",
    "sightline",
    "spread_overview",
    "stacked",
    "timescales",
    "tornado",
]
