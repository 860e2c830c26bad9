"""Imported op-amps: a screened model file's subcircuit in the place of a macromodel."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING

from modepair.circuits.deck import Bias
from modepair.circuits.elements import GROUND, Instance
from modepair.sweeps import Fault, Opamp, SpecError
from modepair.sweeps.words import listed, suggestion

if TYPE_CHECKING:
    from modepair.circuits.screening import ScreenedModel

__all__ = ["ImportedModel", "Models", "imported_models", "model_texts", "models_of", "supply_nodes"]


@dataclass(frozen=True)
class ImportedModel:
    """An op-amp candidate's model, screened.

    Attributes
    ----------
    name : str
        The candidate.
    text : str
        Canonical SPICE text, with names that no other candidate's text has.
    subcircuit : str
        Its subcircuit in that text.
    pins : tuple of str
        What each port is connected to: words of `modepair.sweeps.imported.CONNECTIONS`.
    supplies : tuple of float
        Positive and negative supply in volts; empty for a model without.
    """

    name: str
    text: str
    subcircuit: str
    pins: tuple[str, ...]
    supplies: tuple[float, ...]

    def instance(
        self, name: str, plus: str, minus: str, out: str, positive: str = "", negative: str = ""
    ) -> Instance:
        """Put the model between nodes.

        Parameters
        ----------
        name : str
            Name of the instance.
        plus, minus, out : str
            Its nodes.
        positive, negative : str
            Nodes of the supplies; the shared ones of `supply_nodes` where not given.

        Returns
        -------
        Instance
            Each open pin has a node of its own.
        """
        nodes = {"plus": plus, "minus": minus, "output": out, "ground": GROUND}
        if self.supplies:
            nodes["positive_supply"] = positive or supply_node(self.supplies[0])
            nodes["negative_supply"] = negative or supply_node(self.supplies[1])
        return Instance(
            name,
            tuple(nodes.get(pin, f"{name.lower()}_open{index}") for index, pin in enumerate(self.pins)),
            self.subcircuit,
        )

    def bias(self, name: str, plus: str, minus: str, out: str) -> Bias:
        """What is to be checked of its operating point.

        Parameters
        ----------
        name : str
            Name of the instance.
        plus, minus, out : str
            Its nodes.

        Returns
        -------
        Bias
            With the supplies, where it has any.
        """
        return Bias(name, plus, minus, out, self.supplies)


Models = Mapping[str, ImportedModel]
"""By instance, such as "A1"; an instance with a macromodel has no key."""


def supply_node(volts: float) -> str:
    """Name the node that carries a supply voltage, for every op-amp that has it."""
    return "supply" + repr(volts).replace("-", "n").replace(".", "p").replace("+", "")


def supply_nodes(models: Iterable[ImportedModel]) -> dict[str, float]:
    """Give the supply nodes of some models and their voltages."""
    return {supply_node(volts): volts for model in models for volts in model.supplies}


def model_texts(models: Iterable[ImportedModel]) -> str:
    """Join the texts of some models, each once."""
    return "".join(dict.fromkeys(model.text for model in models))


_screened: dict[tuple[Path, Path, str], tuple[tuple[tuple[Path, int, int], ...], ScreenedModel]] = {}
"""Screened files, with the size and the time of each file read: screening takes some milliseconds a time."""


def _signature(files: Iterable[Path]) -> tuple[tuple[Path, int, int], ...]:
    states = ((path, path.stat()) for path in files)
    return tuple((path, state.st_size, state.st_mtime_ns) for path, state in states)


def _screen(path: Path, root: Path, prefix: str) -> ScreenedModel:
    key = (path.absolute(), root.absolute(), prefix)
    if key in _screened:
        signature, model = _screened[key]
        try:
            if signature == _signature(model.files):
                return model
        except OSError:
            pass
    # Not at the top: most sweeps import no models, and the reader of models takes as long to import as a spec's.
    from modepair.circuits.screening import screen

    model = screen(path, root, prefix=prefix)
    _screened[key] = (_signature(model.files), model)
    return model


def imported_models(names: Iterable[str], candidates: Mapping[str, Opamp]) -> dict[str, ImportedModel]:
    """Screen the models of those candidates that are imported.

    Parameters
    ----------
    names : iterable of str
        Candidates in use.
    candidates : mapping of str to Opamp
        All candidates by name.

    Returns
    -------
    dict of str to ImportedModel
        By candidate's name; a macromodel has no key.

    Raises
    ------
    SpecError
        With every fault of the files, and of what the candidates say of them.
    """
    numbers = {
        name: index for index, name in enumerate(sorted(n for n, o in candidates.items() if o.file), 1)
    }
    found = {}
    faults: list[Fault] = []
    for name in dict.fromkeys(names):
        if name in numbers:
            try:
                found[name] = _imported(name, candidates[name], f"m{numbers[name]}_")
            except SpecError as error:
                faults += error.faults
    if faults:
        raise SpecError(list(dict.fromkeys(faults)))
    return found


def _imported(name: str, opamp: Opamp, prefix: str) -> ImportedModel:
    path = opamp.folder / (opamp.file or "")
    if not path.is_file():
        raise SpecError(
            [opamp.fault("file", f"{opamp.file} is no file that can be read (looked for {path})")]
        )
    screened = _screen(path, opamp.folder, prefix)
    subcircuit = f"{prefix}{(opamp.subcircuit or '').lower()}"
    if subcircuit not in screened.subcircuits:
        offered = [key.removeprefix(prefix) for key in screened.subcircuits]
        near = suggestion(opamp.subcircuit or "", offered) or f"; it has {listed(offered) or 'none'}"
        raise SpecError(
            [opamp.fault("subcircuit", f"{opamp.file} has no subcircuit {opamp.subcircuit}{near}")]
        )
    ports = screened.subcircuits[subcircuit]
    pins = opamp.pins or ()
    if len(ports) != len(pins):
        message = (
            f"{len(pins)} pins are given, {opamp.subcircuit} has {len(ports)} ports: {', '.join(ports)}; "
            "say of each, in this order, what it is connected to"
        )
        raise SpecError([opamp.fault("pins", message)])
    return ImportedModel(name, screened.text, subcircuit, pins, opamp.supplies or ())


def models_of(opamps: Mapping[str, str], candidates: Mapping[str, Opamp]) -> dict[str, ImportedModel]:
    """Give the imported models of a stage's op-amps.

    Parameters
    ----------
    opamps : mapping of str to str
        Candidate's name by instance.
    candidates : mapping of str to Opamp
        All candidates by name.

    Returns
    -------
    dict of str to ImportedModel
        By instance.

    Raises
    ------
    SpecError
        As `imported_models`.
    """
    if not any(candidates[name].file for name in opamps.values()):
        return {}
    models = imported_models(opamps.values(), candidates)
    return {instance: models[name] for instance, name in opamps.items() if name in models}
