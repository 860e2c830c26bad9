"""Device models: the types and parameters that are taken; ngspice 39 knows them and writes no file for
them."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

from modepair.circuits.screening.parsing import Expression
from modepair.circuits.screening.reading import Reader
from modepair.circuits.screening.source import Card
from modepair.sweeps.faults import shown

__all__ = ["Model", "read_model"]

_FAMILIES = {
    "d": "d", "npn": "q", "pnp": "q", "njf": "j", "pjf": "j", "nmos": "m", "pmos": "m",
    "r": "r", "res": "r", "c": "c", "cap": "c", "l": "l", "ind": "l",
    "vswitch": "s", "sw": "s", "iswitch": "w", "csw": "w",
}  # fmt: skip
_JUNCTIONS = "is js pb cbd cbs cj mj cjsw mjsw rsh rd rs fc"
_MOS = f"{_JUNCTIONS} level tnom vto vt0 kp gamma phi cgso cgdo cgbo tox nsub nss tpg ld uo u0 kf af"

_PARAMETERS: dict[str, frozenset[str]] = {
    family: frozenset(words.split())
    for family, words in {
        "d": "level tnom area is js jsw rs n ns tt cjo cj0 cjsw cjp vj pb php m mj mjsw fc fcs bv ibv nbv"
        " ikf ik ikr isr nr eg xti kf af trs trs1 trs2 tcv cta ctp",
        "q": "level tnom is iss ns bf nf vaf va ikf ik nk nkf ise ne br nr var vb ikr isc nc rb irb rbm re rc"
        " cje vje pe mje me cjc vjc pc mjc mc xcjc cjs ccs vjs ps mjs ms fc tf xtf vtf itf ptf tr"
        " rco vo gamma qco xtb eg xti kf af tre1 tre2 trb1 trb2 trc1 trc2 trm1",
        "j": "level tnom vto vt0 vtotc tcv beta betatce bex lambda b rd rs cgs cgd pb is fc kf af xti eg",
        "m1": f"{_MOS} lambda",
        "m2": f"{_MOS} lambda nfs xj ucrit uexp vmax neff delta",
        "m3": f"{_MOS} nfs xj vmax delta theta eta kappa alpha xd",
        "r": "r tc1 tc2",
        "c": "c tc1 tc2",
        "l": "l tc1 tc2",
        "s": "ron roff von voff vt vh",
        "w": "ron roff ion ioff it ih",
    }.items()
}

_LEFT_OUT: dict[str, dict[str, str]] = {
    "d": {
        **dict.fromkeys(("tbv1", "tbv2", "tikf"), "it changes nothing at 27 degrees"),
        **dict.fromkeys(("iave", "vpk", "mfg", "type"), "it is a rating or a label"),
        **dict.fromkeys(("ibvl", "nbvl"), "ngspice has no low-level breakdown"),
    },
    "q": dict.fromkeys(("mfg", "type"), "it is a label"),
    "j": dict.fromkeys(("isr", "nr", "alpha", "vk"), "ngspice has no such current of the gate"),
}

_POSITIVE = ("is", "n", "nf", "nr", "bf", "br", "vj", "pb", "vje", "vjc", "beta", "tox")
_FILES = (
    "file",
    "input_file",
    "output_file",
    "state_file",
    "rootfile",
    "in_file",
    "logfile",
    "ic_file",
    "ic.file",
    "paramchk",
)


@dataclass(frozen=True)
class Model:
    """A ``.model`` as it was read.

    Attributes
    ----------
    card : Card
        Its card.
    name : str
        Its name.
    kind : str
        Its type.
    parameters : mapping of str to Expression
        As written.
    """

    card: Card
    name: str
    kind: str
    parameters: Mapping[str, Expression]

    def checked(self, values: dict[str, float]) -> dict[str, float]:
        """Check parameters with their values put in.

        Parameters
        ----------
        values : dict of str to float
            Every parameter of the card.

        Returns
        -------
        dict of str to float
            Those that ngspice knows.

        Raises
        ------
        CardError
            For a level or a value that is not taken.
        """
        family = _FAMILIES[self.kind]
        level = values.get("level", 1.0)
        if level not in ((1.0, 2.0, 3.0) if family == "m" else (1.0,)):
            allowed = "1, 2 and 3 are taken" if family == "m" else "only 1 is taken"
            raise self.parameters["level"].refused(
                f"level {level:g} of {self.kind.upper()}: {allowed}; other levels write files or differ "
                f"between programs"
            )
        known = _PARAMETERS[f"m{level:.0f}" if family == "m" else family]
        kept = {}
        for key, value in values.items():
            if key not in known:
                if key in _LEFT_OUT.get(family, {}):
                    continue
                raise self.parameters[key].refused(
                    f"{key} is not a parameter of {self.kind.upper()} at level {level:g} that is taken; "
                    f"remove it"
                )
            if key in _POSITIVE and value <= 0:
                raise self.parameters[key].refused(f"{key} is {value:g}; it must be above zero")
            kept[key] = value
        return kept


def read_model(reader: Reader) -> Model:
    """Read a ``.model`` card: ``.model name NPN(IS=1e-16 BF=200)``.

    Parameters
    ----------
    reader : Reader
        The card, its first token taken.

    Returns
    -------
    Model
        With only parameters on the allow-list.
    """
    name = reader.name("the name of a model")
    token = reader.peek()
    if token is not None and token.text.startswith("ako:"):
        raise reader.refused(
            "AKO: takes over another model, which ngspice does not do; write the parameters out", token
        )
    kind = reader.name("the type of a model")
    if kind not in _FAMILIES:
        raise reader.refused(
            f"model type {shown(kind)} is not taken; take one of {', '.join(sorted(_FAMILIES)).upper()}",
            token,
        )
    family = _FAMILIES[kind]
    known = (
        _PARAMETERS[family] if family != "m" else _PARAMETERS["m1"] | _PARAMETERS["m2"] | _PARAMETERS["m3"]
    )
    left_out = _LEFT_OUT.get(family, {})
    parameters: dict[str, Expression] = {}
    while (token := reader.take()) is not None:
        key = token.text
        if key in _FILES:
            raise reader.refused(f"{shown(key)} makes ngspice read or write a file; remove it", token)
        if key in ("dev", "lot"):
            raise reader.refused(
                "tolerances DEV and LOT in a model are not taken; give tolerances in the spec", token
            )
        if token.kind != "word" or (key not in known and key not in left_out):
            raise reader.refused(
                f"{shown(key)} is not a parameter of {kind.upper()} that is taken; remove it", token
            )
        if not reader.take_sign("="):
            raise reader.refused(f"{key} has no value; write {key}=value", token)
        if key in parameters:
            raise reader.refused(f"{key} is given twice; programs take one or the other; keep one", token)
        if key in left_out and key in ("mfg", "type"):
            reader.take()
        else:
            parameters[key] = reader.value(f"the value of {key}")
        if key in left_out and key not in known:
            reader.findings.note(
                reader.card.place(token.begin), f"{key} of model {name} is left out: {left_out[key]}"
            )
    return Model(reader.card, name, kind, parameters)
