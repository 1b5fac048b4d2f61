"""Every assumption of a run: the text that states it (record) and the models built from it (model)."""

from .model import Model, resolve
from .record import Scenario

__all__ = ["Model", "Scenario", "resolve"]
