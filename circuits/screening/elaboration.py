"""Elaboration: subcircuits written with their parameters put in, one text for each set of values."""

from __future__ import annotations

from dataclasses import dataclass

from modepair.circuits.screening.folding import Folder
from modepair.circuits.screening.frames import Frame
from modepair.circuits.screening.inside import Element, FindModel, Inside, ModelUse, Spellings, plain_names
from modepair.circuits.screening.models import Model
from modepair.circuits.screening.numbers import show_number
from modepair.circuits.screening.passives import PASSIVE_MODELS
from modepair.circuits.screening.places import CardError, Findings, KnownError, Place
from modepair.circuits.screening.scopes import Instance, Scope, Subcircuit
from modepair.circuits.screening.switches import SWITCH_MODELS
from modepair.sweeps.faults import shown

__all__ = ["Elaboration"]

_NOT_WRITTEN = frozenset(
    kind for kinds in (*PASSIVE_MODELS.values(), *SWITCH_MODELS.values()) for kind in kinds
)


@dataclass(eq=False)
class _Built:
    """A subcircuit with its parameters put in."""

    name: str
    elements: int
    outer: frozenset[str]


class Elaboration:
    """Writes the subcircuits of a file and the models they use.

    Parameters
    ----------
    top : Scope
        The file's definitions.
    findings : Findings
        Gets the faults.
    prefix : str
        Put before the name of every subcircuit and model.

    Attributes
    ----------
    models, subcircuits : list of str
        Canonical text, in the order of writing.
    ports : dict of str to tuple of str
        Ports of each subcircuit that the file offers, by its name in the text.
    """

    def __init__(self, top: Scope, findings: Findings, prefix: str = "") -> None:
        self.top, self.findings, self.prefix = top, findings, prefix
        self.folder = Folder(findings)
        self.models: list[str] = []
        self.subcircuits: list[str] = []
        self.ports: dict[str, tuple[str, ...]] = {}
        self._top_frame = Frame(None, top.parameters, top.functions, frozenset(top.spoilt))
        self._built: dict[tuple[int, int, tuple[tuple[str, float], ...]], _Built | None] = {}
        self._made: dict[tuple[int, int], ModelUse] = {}
        self._frames: list[Frame] = []
        self._names = Spellings(top.subcircuits)
        self._model_names = Spellings()
        self._active: list[Subcircuit] = []

    def run(self) -> None:
        """Write every subcircuit of the file with its own values of parameters."""
        with_arguments = _instantiated(self.top)
        self._check_parameters()
        for subcircuit in self.top.subcircuits.values():
            mark = self.findings.mark()
            built = self._build(subcircuit, self._top_frame, {})
            if built is not None:
                self.ports[built.name] = subcircuit.ports
            elif subcircuit.name in with_arguments and not subcircuit.faulty:
                # Others use it with values of their own; with its defaults it is not offered.
                self.findings.rewind(mark)
                self.findings.note(
                    subcircuit.card.place(),
                    f"subcircuit {subcircuit.name} has no meaning with its own values of parameters and "
                    f"is used by others only",
                )
        if not self.ports and not self.findings.faults:
            raise CardError(Place(""), "there is no subcircuit in this file; name a file with a .subckt")

    def _check_parameters(self) -> None:
        for name, value in self.top.parameters.items():
            try:
                self.folder.parameter(name, self._top_frame)
            except CardError as refused:
                self.findings.refuse(refused, value.card.text.split(" ")[0])
            except KnownError:
                pass

    def _build(self, subcircuit: Subcircuit, around: Frame, arguments: dict[str, float]) -> _Built | None:
        """Write a subcircuit, once for each set of values; None where it has a fault."""
        key = (id(subcircuit), id(around), tuple(sorted(arguments.items())))
        if key in self._built:
            return self._built[key]
        if subcircuit in self._active:
            chain = " in ".join(
                inner.name for inner in reversed(self._active[self._active.index(subcircuit) :])
            )
            raise CardError(
                subcircuit.card.place(),
                f"subcircuit {subcircuit.name} holds itself ({chain}); remove the instance",
            )
        if len(self._active) >= self.findings.limits.subcircuit_depth:
            raise CardError(
                subcircuit.card.place(),
                "subcircuits are used too deep inside each other; write them side by side",
            )
        if len(self._built) >= self.findings.limits.instances:
            raise CardError(
                subcircuit.card.place(), "too many different sets of parameters of subcircuits; write fewer"
            )
        frame = Frame(
            around, subcircuit.parameters, subcircuit.functions, frozenset(subcircuit.spoilt), dict(arguments)
        )
        self._frames.append(frame)
        self._active.append(subcircuit)
        try:
            built = self._written(subcircuit, frame, bool(arguments))
        finally:
            self._active.pop()
        self._built[key] = built
        return built

    def _written(self, subcircuit: Subcircuit, frame: Frame, given: bool) -> _Built | None:
        lines: list[str] = []
        count, outer, clean = 0, set[str](), not subcircuit.faulty
        self.folder.charge(subcircuit.card.place(), len(subcircuit.elements))
        try:
            for name in subcircuit.parameters:
                self.folder.parameter(name, frame)
            inside = Inside(
                subcircuit, list(subcircuit.elements.values()), frame, self.folder, self._model(subcircuit)
            )
        except CardError as refused:
            self.findings.refuse(refused, subcircuit.name)
            return None
        except KnownError:
            return None
        for element in subcircuit.elements.values():
            try:
                if isinstance(element, Instance):
                    line, inner = self._instance(element, subcircuit, inside)
                    lines.append(line)
                    count += inner.elements
                    outer |= inner.outer
                    self._check_hidden(element, subcircuit, inner)
                else:
                    written = list(element.lines(inside))
                    lines += written
                    count += len(written)
                self._check_count(element, count)
            except CardError as refused:
                self.findings.refuse(refused, element.name)
                clean = False
            except KnownError:
                clean = False
        if not lines and clean:
            self.findings.refuse(
                CardError(
                    subcircuit.card.place(), f"subcircuit {subcircuit.name} is empty; write its elements"
                ),
                ".subckt",
            )
            return None
        if not clean:
            return None
        own = subcircuit.parent is self.top and not given
        name = self.prefix + (subcircuit.name if own else self._names.free(subcircuit.name))
        ports = " ".join(inside.node(port, subcircuit.card.place()) for port in subcircuit.ports)
        self.subcircuits.append("\n".join((f".subckt {name} {ports}", *lines, f".ends {name}")))
        return _Built(name, count, frozenset(outer | frame.outer))

    @staticmethod
    def _check_hidden(element: Instance, subcircuit: Subcircuit, inner: _Built) -> None:
        hidden = sorted(name for name in inner.outer if name in subcircuit.parameters)
        if hidden:
            raise CardError(
                element.card.place(),
                f"parameter {hidden[0]} of the file is used in {element.subcircuit} and has "
                f"another value in {subcircuit.name}; programs take one or the other; rename one",
            )

    def _check_count(self, element: Element, count: int) -> None:
        if count > self.findings.limits.elements:
            raise CardError(
                element.card.place(),
                f"more than {self.findings.limits.elements} elements once all subcircuits are "
                f"put in; use fewer",
            )

    def _instance(self, element: Instance, subcircuit: Subcircuit, inside: Inside) -> tuple[str, _Built]:
        place = element.card.place()
        scope: Scope | None = subcircuit
        frame: Frame | None = inside.frame
        while scope is not None and element.subcircuit not in scope.subcircuits:
            if element.subcircuit in scope.spoilt:
                raise KnownError
            scope, frame = scope.parent, frame.parent if frame else None
        if scope is None or frame is None:
            raise CardError(
                place, f"subcircuit {shown(element.subcircuit)} is not defined; define it or include its file"
            )
        definition = scope.subcircuits[element.subcircuit]
        if definition.faulty and not definition.ports:
            raise KnownError
        if len(element.nodes) != len(definition.ports):
            raise CardError(
                place,
                f"{element.name} gives {len(element.nodes)} nodes to {definition.name}, which has "
                f"{len(definition.ports)} ports; give one for each",
            )
        arguments: dict[str, float] = {}
        for name, expression in element.arguments.items():
            if name not in definition.defaults:
                raise expression.refused(
                    f"{name} is not a parameter of subcircuit {definition.name}; correct the name"
                )
            arguments[name] = inside.value(expression)
        built = self._build(definition, frame, arguments)
        if built is None:
            raise KnownError
        return f"{inside.nodes(element)} {built.name}", built

    def _model(self, subcircuit: Subcircuit) -> FindModel:
        """Return what finds a model by its name as seen from inside a subcircuit."""

        def found(name: str, place: Place, kinds: tuple[str, ...], what: str, inside: Inside) -> ModelUse:
            scope: Scope | None = subcircuit
            frame: Frame | None = inside.frame
            while scope is not None and name not in scope.models:
                if name in scope.spoilt:
                    raise KnownError
                scope, frame = scope.parent, frame.parent if frame else None
            if scope is None or frame is None:
                raise CardError(place, f"model {shown(name)} is not defined; define it or include its file")
            model = scope.models[name]
            if model.kind not in kinds:
                raise CardError(
                    place, f"model {name} is of type {model.kind.upper()} and not {what}; correct the name"
                )
            return self._put_in(model, frame)

        return found

    def _put_in(self, model: Model, frame: Frame) -> ModelUse:
        key = (id(model), id(frame))
        if key not in self._made:
            values = model.checked(
                {name: self.folder.value(expression, frame) for name, expression in model.parameters.items()}
            )
            name = model.name
            if model.kind not in _NOT_WRITTEN:
                name = self.prefix + self._model_names.free(plain_names([model.name], "m")[model.name])
                pairs = " ".join(f"{key}={show_number(value)}" for key, value in values.items())
                self.models.append(f".model {name} {model.kind}({pairs})")
            self._made[key] = ModelUse(model.kind, name, values)
        return self._made[key]


def _instantiated(scope: Scope) -> set[str]:
    """Return the names of subcircuits that some instance gives values to."""
    names: set[str] = set()
    for element in scope.elements.values():
        if isinstance(element, Instance) and element.arguments:
            names.add(element.subcircuit)
    for inner in scope.subcircuits.values():
        names |= _instantiated(inner)
    return names
