"""Stars and gravity of the Milky Way: frames, density, kinematics, potential, and the Galaxy that holds them."""

from .model import Component, Galaxy

__all__ = ["Component", "Galaxy"]
