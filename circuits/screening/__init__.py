"""Screening of imported SPICE models: an own reader writes canonical text from an allow-list."""

from modepair.circuits.screening.limits import Limits
from modepair.circuits.screening.screen import ScreenedModel, screen

__all__ = ["Limits", "ScreenedModel", "screen"]
