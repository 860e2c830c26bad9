"""Screening of SPICE models and circuits: an own reader writes canonical text from an allow-list."""

from modepair.circuits.screening.circuit import OpampPlace, PlacedPart, Remainder
from modepair.circuits.screening.limits import Limits
from modepair.circuits.screening.screen import ScreenedCircuit, ScreenedModel, screen, screen_circuit

__all__ = [
    "Limits",
    "OpampPlace",
    "PlacedPart",
    "Remainder",
    "ScreenedCircuit",
    "ScreenedModel",
    "screen",
    "screen_circuit",
]
