"""Pictures; the only package that imports matplotlib. One file for each kind of result."""

from .galaxy import maps, save_maps
from .sightlines import depth, joint, overview, save_picture, sightline, stacked, timescales

__all__ = ["depth", "joint", "maps", "overview", "save_maps", "save_picture", "sightline", "stacked", "timescales"]
