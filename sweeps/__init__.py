"""What is asked: the YAML spec of a sweep, its quantities and axes, and their expansion to cases."""

from modepair.sweeps.axes import Axis
from modepair.sweeps.cases import Block, Sweep, expand
from modepair.sweeps.faults import Fault, ModepairError, RefusedError, SpecError
from modepair.sweeps.parts import OPAMP_PARAMETERS, PARTS, TOPOLOGIES, resolve_parts
from modepair.sweeps.quantities import render
from modepair.sweeps.reader import load_spec, read_candidates
from modepair.sweeps.schema import Frequency, Opamp, Source, Stage
from modepair.sweeps.spec import Spec, json_schema

__all__ = [
    "OPAMP_PARAMETERS",
    "PARTS",
    "TOPOLOGIES",
    "Axis",
    "Block",
    "Fault",
    "Frequency",
    "ModepairError",
    "Opamp",
    "RefusedError",
    "Source",
    "Spec",
    "SpecError",
    "Stage",
    "Sweep",
    "expand",
    "json_schema",
    "load_spec",
    "read_candidates",
    "render",
    "resolve_parts",
]
