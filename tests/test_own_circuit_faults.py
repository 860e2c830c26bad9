"""Faults of own circuits: in the spec's keys, and in the circuit's file, each where it stands.

Kind of truth: behaviour. The file is hostile until it is screened; the corpus of hostile files is
`tests/test_screening_hostile.py`, which goes through the reader of circuits here.
"""

from __future__ import annotations

import re
import shutil
from pathlib import Path

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from modepair.circuits import candidates, read_circuit
from modepair.circuits.own_circuits import MOST_PARTS
from modepair.runner.specs import read_spec
from modepair.sweeps import SpecError, expand, load_spec
from modepair.sweeps.stage_circuits import PORTS
from tests.broken_specs import broken
from tests.test_screening_hostile import EXPECTED, MODELS, SECRET

CIRCUIT = """* a circuit
.subckt amp p n ref out
RIN p a 1k
Rguard n a 2k
CX a ref 1n
L1 a b 1m
XA1 a b out oa
XA2 b out out oa
.ends
.subckt other x y z
R1 x y 1k
R2 y z 1k
.ends
"""

SPEC = """stage:
  topology: netlist
  file: a.cir
  subcircuit: amp
  ports: [plus, minus, reference, output]
  opamp: fast-jfet
frequency: {start: 1, stop: 10}
"""

PARTS_KNOWN = "its parts are RREF, RL, RIN, RGUARD, CX and L1"
SUPPLY_PORT = SPEC.replace("reference", "positive_supply")


def replaced(old: str, new: str, text: str = SPEC) -> str:
    assert old in text
    return text.replace(old, new)


def with_line(line: str, text: str = SPEC) -> str:
    return replaced("  opamp: fast-jfet\n", f"  {line}\n  opamp: fast-jfet\n", text)


@pytest.fixture
def folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    monkeypatch.chdir(tmp_path)
    return tmp_path


def faults(spec: str, circuit: str = CIRCUIT) -> list[str]:
    Path("a.cir").write_text(circuit)
    Path("spec.yaml").write_text(spec)
    with pytest.raises(SpecError, match=r"^(spec\.yaml|a\.cir)") as caught:
        read_spec("spec.yaml")
    return [str(fault) for fault in caught.value.faults]


IN_THE_SPEC = {
    "file without netlist": (
        replaced("topology: netlist", "topology: difference\n  parts: {R1: 1k, R2: 1k, R3: 1k, R4: 1k}"),
        [
            f"spec.yaml:{line}:3: stage.{key}: {key} has no effect without topology netlist; give that topology, or "
            "remove it"
            for line, key in ((4, "file"), (5, "subcircuit"), (6, "ports"))
        ],
    ),
    "no file": (
        replaced("  file: a.cir\n", ""),
        ["spec.yaml:1:1: stage: file is missing; it takes a circuit file in the spec's folder or below it, such as "
         "circuits/mine.cir"],
    ),
    "no subcircuit": (
        replaced("  subcircuit: amp\n", ""),
        ["spec.yaml:1:1: stage: subcircuit is missing; it takes the name of a subcircuit of the file"],
    ),
    "no ports": (
        replaced("  ports: [plus, minus, reference, output]\n", ""),
        ["spec.yaml:1:1: stage: ports is missing; it takes what each port of the subcircuit is, in order, such as "
         "[plus, minus, reference, output]"],
    ),
    "gain": (
        with_line("gain: 10"),
        ["spec.yaml:6:3: stage.gain: gain sets no part of an own circuit; remove it, and give its parts their values"],
    ),
    "gain as an axis": (
        SPEC + "vary: {stage.gain: [1, 10]}\n",
        ["spec.yaml:8:8: vary.stage.gain: gain sets no part of an own circuit; remove it, and give its parts their "
         "values"],
    ),
    "too few ports": (
        replaced("reference, ", ""),
        ["spec.yaml:5:10: stage.ports: 3 ports are given, amp has 4: p, n, ref, out; say of each, in this order, what "
         "it is"],
    ),
    "no plus": (
        replaced("[plus, ", "[reference, "),
        ["spec.yaml:5:10: stage.ports: plus is not among them; ports takes each of plus, minus and output once"],
    ),
    "a port twice": (
        replaced("[plus, minus", "[plus, plus"),
        ["spec.yaml:5:10: stage.ports: plus is there 2 times; ports takes each of plus, minus and output once",
         "spec.yaml:5:10: stage.ports: minus is not among them; ports takes each of plus, minus and output once"],
    ),
    "an unknown word": (
        replaced("reference", "referense"),
        ["spec.yaml:5:24: stage.ports[2]: referense is not anything that a port can be; did you mean reference? ports "
         f"takes {', '.join(PORTS[:-1])} or {PORTS[-1]}"],
    ),
    "supplies missing": (
        SUPPLY_PORT,
        ["spec.yaml:1:1: stage: supplies is missing, which port positive_supply needs; it takes two voltages, such as "
         "[15, -15]"],
    ),
    "supplies without a port": (
        with_line("supplies: [15, -15]"),
        ["spec.yaml:6:3: stage.supplies: supplies has no effect, as no port is positive_supply or negative_supply; "
         "remove it, or name the port"],
    ),
    "supplies upside down": (
        with_line("supplies: [-15, 15]", SUPPLY_PORT),
        ["spec.yaml:6:13: stage.supplies: [-15, 15] is no pair of supplies; supplies takes the positive, then the "
         "lower negative voltage"],
    ),
    "a reference's resistance without a reference": (
        with_line("reference_resistance: 10", replaced("reference", "ground")),
        ["spec.yaml:6:3: stage.reference_resistance: reference_resistance has no effect, as no port is reference; "
         "remove it, or name the port"],
    ),
    "an op-amp that the circuit lacks": (
        replaced("opamp: fast-jfet", "opamps: {A1: fast-jfet, A2: fast-jfet, A3: fast-jfet}"),
        ["spec.yaml:6:42: stage.opamps.A3: the netlist stage has no A3; its op-amps are A1 and A2"],
    ),
    "no candidate for an op-amp": (
        replaced("opamp: fast-jfet", "opamps: {A1: fast-jfet}"),
        ["spec.yaml:6:3: stage.opamps: the netlist stage needs op-amps A1 and A2; name one for A2 too"],
    ),
    "no candidate at all": (
        replaced("  opamp: fast-jfet\n", ""),
        ["spec.yaml:1:1: stage: opamp is missing; name a candidate for every op-amp, or one for each under opamps"],
    ),
    "a candidate for nothing": (
        replaced("reference, ", "", replaced("subcircuit: amp", "subcircuit: other")),
        ["spec.yaml:6:3: stage.opamp: opamp has no effect, as the stage has no op-amp; remove it"],
    ),
    "parts that it lacks": (
        with_line("parts: {rguard: 3k, RGARD: 3k, R4: 1k, A3.cmrr: 90 dB}"),
        ["spec.yaml:6:11: stage.parts.rguard: rguard is not among the known parts of the stage; did you mean RGUARD?",
         "spec.yaml:6:23: stage.parts.RGARD: RGARD is not among the known parts of the stage; did you mean RGUARD?",
         f"spec.yaml:6:34: stage.parts.R4: the netlist stage has no R4; {PARTS_KNOWN}",
         "spec.yaml:6:42: stage.parts.A3.cmrr: the netlist stage has no A3; its op-amps are A1 and A2"],
    ),
    "tolerances of parts that it lacks": (
        SPEC + "tolerance: {draws: 10, parts: [{of: [rguard], absolute: 1 %}, {of: [R4], absolute: 1 %}]}\n",
        ["spec.yaml:8:38: tolerance.parts[0].of[0]: rguard is no part; did you mean RGUARD? of takes names of parts or "
         "op-amp parameters, such as R1, CCP or A1.gain_bandwidth",
         "spec.yaml:8:69: tolerance.parts[1].of[0]: the netlist stage has no R4; its parts are RIN, RGUARD, CX, L1, "
         "RREF and RL"],
    ),
    "a matched set of two kinds": (
        SPEC + "tolerance: {draws: 10, parts: [{of: [L1, CX], absolute: 1 %, matching: 0.1 %}]}\n",
        ["spec.yaml:8:32: tolerance.parts[0]: parts of different kinds cannot form a matched set; give each kind an "
         "entry of its own"],
    ),
    "axes that it lacks": (
        SPEC + "vary: {stage.parts.rguard: [1k, 2k], stage.file: [a.cir, b.cir]}\n",
        ["spec.yaml:8:8: vary.stage.parts.rguard: there is no setting stage.parts.rguard to vary; did you mean "
         "stage.parts.RGUARD?",
         "spec.yaml:8:38: vary.stage.file: stage.file cannot vary, as a spec has one circuit; write a spec for each, "
         "and compare their runs"],
    ),
    "values of another kind": (
        with_line("parts: {L1: 10k ohm, CX: 1k}"),
        ["spec.yaml:6:15: stage.parts.L1: 10k ohm is a resistance; L1 takes an inductance, such as 10m",
         "spec.yaml:6:28: stage.parts.CX: 1k is out of range; CX takes 0 or a capacitance from 1 aF to 1 F, such as "
         "100p"],
    ),
    "an unknown subcircuit": (
        replaced("subcircuit: amp", "subcircuit: ampp"),
        ["spec.yaml:4:15: stage.subcircuit: there is no subcircuit ampp in the file; did you mean amp?"],
    ),
    "a subcircuit like none": (
        replaced("subcircuit: amp", "subcircuit: zzz"),
        ["spec.yaml:4:15: stage.subcircuit: there is no subcircuit zzz in the file; it has amp and other"],
    ),
    "no such file": (
        replaced("file: a.cir", "file: b.cir"),
        ["spec.yaml:3:9: stage.file: b.cir is no file that can be read (looked for b.cir)"],
    ),
    "a folder": (
        replaced("file: a.cir", "file: ."),
        ["spec.yaml:3:9: stage.file: . is no file that can be read (looked for .)"],
    ),
    "an empty name": (
        replaced("file: a.cir", 'file: ""'),
        ["spec.yaml:3:9: stage.file: no value is given; a file name is needed"],
    ),
}  # fmt: skip


@pytest.mark.parametrize("name", IN_THE_SPEC)
def test_faults_of_the_spec(name: str, folder: Path) -> None:
    spec, expected = IN_THE_SPEC[name]
    assert faults(spec) == expected


IN_THE_FILE = {
    "names that are taken": (
        CIRCUIT.replace("RIN", "RSP").replace("CX", "CCB").replace("L1", "RL").replace("Rguard", "RREF"),
        ["a.cir:3:1: rsp: RSP is the name of a part of the source network; rename it",
         "a.cir:4:1: rref: RREF is the name of the resistance at the reference; rename it",
         "a.cir:5:1: ccb: CCB is the name of a part of the source network; rename it",
         "a.cir:6:1: rl: RL is the name of the load; rename it"],
    ),
    "a name inside an op-amp": (
        CIRCUIT.replace("RIN", "RA1G"),
        ["a.cir:3:1: ra1g: RA1G is the name of an element inside op-amp A1; rename it"],
    ),
    "an op-amp without a letter": (
        CIRCUIT.replace("XA2", "X2"),
        ["a.cir:8:1: x2: x2 is an op-amp's place, whose name in a spec is what follows the X; rename it, with a letter "
         "first, then letters, digits and _, such as XA1"],
    ),
    "a name that a spec cannot write": (
        CIRCUIT.replace("RIN", "R.1"),
        ["a.cir:3:1: r.1: r.1 cannot be the name of a part in a spec; rename it, with at most 32 letters, digits and "
         "_"],
    ),
    "names that differ in case only": (
        CIRCUIT.replace("CX a", "RGUARD a"),
        ["a.cir:5:1: rguard: element rguard is defined at a.cir:4 already; programs take the first or the last; keep "
         "one"],
    ),
    "a value out of range": (
        CIRCUIT.replace("n a 2k", "n a 1e-9"),
        ["a.cir:4:1: rguard: 1 nΩ is out of range; RGUARD takes a resistance from 1 µΩ to 1 PΩ, such as 10k"],
    ),
    "a value that is no number": (
        CIRCUIT.replace("p a 1k", "p a {v(p)}"),
        ["a.cir:3:10: rin: this value depends on a voltage or a current; a number belongs here (or write E, G or B "
         "with VALUE)"],
    ),
    "a value that is negative": (
        CIRCUIT.replace("p a 1k", "p a -1k"),
        ["a.cir:3:9: rin: a resistance is -1000; it must be above zero"],
    ),
    "several in parallel": (
        CIRCUIT.replace("p a 1k", "p a 1k m=2"),
        ["a.cir:3:14: rin: m has no place in a part of the circuit; write the value of all in one"],
    ),
    "a place of four nodes": (
        CIRCUIT.replace("a b out oa", "a b c out oa"),
        ["a.cir:7:1: xa1: subcircuit oa is not defined; define it or include its file, or give an op-amp's place three "
         "nodes (plus minus output) or five (plus minus vpos vneg output), not 4"],
    ),
    "a place with parameters": (
        CIRCUIT.replace("a b out oa", "a b out oa gain=3"),
        ["a.cir:7:21: xa1: an op-amp's place takes no parameters; give them to the op-amp's candidate in the spec"],
    ),
    "a place inside a nested subcircuit": (
        CIRCUIT.replace("XA2 b out out oa\n.ends", "XN b out inner\n.ends\n.subckt inner a b\nX1 a b b oa\n.ends"),
        ["a.cir:11:1: x1: subcircuit oa is not defined; define it or include its file"],
    ),
    "an output that hangs": (
        CIRCUIT.replace("a b out oa", "a b o oa").replace("b out out oa", "b o o oa"),
        ["spec.yaml:5:35: stage.ports[3]: out is connected to nothing in amp, so it cannot be output; correct the "
         "file, or name another port"],
    ),
    "nothing": (
        CIRCUIT.replace(CIRCUIT[CIRCUIT.index("RIN") : CIRCUIT.index(".ends")], ""),
        ["a.cir:2:1: amp: subcircuit amp is empty; write its elements"],
    ),
}  # fmt: skip


@pytest.mark.parametrize("name", IN_THE_FILE)
def test_faults_of_the_file(name: str, folder: Path) -> None:
    circuit, expected = IN_THE_FILE[name]
    assert faults(SPEC, circuit) == expected


def test_faults_of_the_file_stand_where_the_spec_names_it(folder: Path) -> None:
    """Between those of the keys before and behind; what asks for parts of the circuit is left out, being unknown."""
    spec = SPEC.replace("stage:", "titel: x\nstage:").replace("start: 1,", "start: 1x,")
    spec += "vary: {stage.parts.RZ: [1k, 2k]}\n"
    spec = with_line("parts: {RG7: 3k}", spec)
    circuit = CIRCUIT.replace("CX a", ".control\nCX a") + ".include /etc/passwd\n"
    found = faults(spec, circuit)
    assert [fault.partition(" ")[0] for fault in found] == [
        "spec.yaml:1:1:", "a.cir:5:1:", "a.cir:15:1:", "spec.yaml:9:20:"
    ]  # fmt: skip
    assert (
        "a.cir:5:1: .control: .control is not taken in a model or circuit file: it runs commands" in found[1]
    )
    assert "/etc/passwd is not a relative file name" in found[2]


def test_a_file_outside_the_specs_folder_is_refused(folder: Path) -> None:
    (folder / "secret.cir").write_text(CIRCUIT)
    inner = folder / "spec"
    inner.mkdir()
    (inner / "link.cir").symlink_to(folder / "secret.cir")
    for name in ("../secret.cir", "link.cir", str(folder / "secret.cir")):
        (inner / "spec.yaml").write_text(SPEC.replace("a.cir", name))
        with pytest.raises(SpecError, match=r"stage\.file: \S+ lies outside the spec's folder; copy it into"):
            read_spec(inner / "spec.yaml")


@pytest.mark.parametrize("name", sorted(EXPECTED))
def test_a_hostile_file_is_refused_as_a_circuit_too(name: str, folder: Path) -> None:
    root = folder / "spec"
    root.mkdir()
    for place in (folder, root):
        (place / "secret.txt").write_text(SECRET)
    shutil.copy(MODELS / name, root / name)
    before = set(folder.rglob("*"))
    line, reason = EXPECTED[name]
    text = (MODELS / name).read_bytes().decode("latin-1")
    subcircuits = [word for word in re.findall(r"(?im)^\.subckt (\w+)", text) if word != "amp"]
    found = []
    for subcircuit in ("amp", *subcircuits):
        with pytest.raises(SpecError, match=r"\S") as caught:
            read_circuit(root, name, subcircuit)
        assert SECRET not in str(caught.value)
        found += caught.value.faults
        if any(fault.line == line and reason in fault.message for fault in found):
            break
    else:
        pytest.fail(str(found))
    assert set(folder.rglob("*")) == before, "a file appeared"


def test_nothing_of_the_files_own_text_reaches_the_deck(folder: Path) -> None:
    text = CIRCUIT.replace("RIN p a 1k", "RIN p a 1k ; marker $ marker\n* marker\nD1 a 0 dx")
    (folder / "a.cir").write_text(text.replace("* a circuit", "* marker\n.model dx d(is=1f) // marker"))
    circuit = read_circuit(folder, "a.cir", "amp")
    assert "marker" not in repr(circuit)
    assert circuit.remainder is not None
    assert (
        circuit.remainder.text
        == ".model own_dx d(is=1e-15)\n.subckt own_amp_2 a\nd1 a 0 own_dx\n.ends own_amp_2\n"
    )
    assert not circuit.remainder.linear


def test_too_many_parts_are_refused(folder: Path) -> None:
    many = "".join(f"R{i} p n 1k\n" for i in range(MOST_PARTS + 1))
    (folder / "a.cir").write_text(f".subckt amp p n out\n{many}.ends\n")
    with pytest.raises(
        SpecError, match=r"a\.cir:502:1: r500: there are 501 parts and op-amps; at most 500 are taken"
    ):
        read_circuit(folder, "a.cir", "amp")


def test_other_subcircuits_of_the_file_may_have_places_too(folder: Path) -> None:
    (folder / "a.cir").write_text(CIRCUIT + CIRCUIT.replace("amp p", "second p").replace("other", "third"))
    assert read_circuit(folder, "a.cir", "SECOND").opamps == ("A1", "A2")


def test_coupled_inductors_are_no_parts(folder: Path) -> None:
    (folder / "a.cir").write_text(
        CIRCUIT.replace("L1 a b 1m", "L1 a b 1m\nL2 a b 1m\nL3 b 0 1m\nK1 L1 L2 0.9")
    )
    circuit = read_circuit(folder, "a.cir", "amp")
    assert [name for name, _ in circuit.values] == ["RIN", "RGUARD", "CX", "L3"]
    assert circuit.remainder is not None
    assert circuit.remainder.linear


def test_temperature_coefficients_are_left_out(folder: Path) -> None:
    (folder / "a.cir").write_text(CIRCUIT.replace("p a 1k", "p a 1k tc1=1m"))
    assert dict(read_circuit(folder, "a.cir", "amp").values)["RIN"] == 1e3


def test_a_spec_with_a_circuit_needs_a_reader_of_circuits(folder: Path) -> None:
    (folder / "a.cir").write_text(CIRCUIT)
    (folder / "spec.yaml").write_text(SPEC)
    message = r"stage\.file: a\.cir cannot be read here: load_spec was given nothing that reads circuit files"
    with pytest.raises(SpecError, match=message):
        load_spec("spec.yaml", candidates())


LINES = """stage:
  topology: netlist
  file: a.cir
  subcircuit: amp
  ports: [plus, minus, reference, output]
  opamps: {A1: fast-jfet, A2: zero-drift}
  parts: {RGUARD: 3k, L1: 2m, A1.cmrr: 90 dB}
frequency: {start: 1, stop: 10}
vary:
  stage.parts.CX: [1n, 2n]
  stage.topology: [netlist]
tolerance: {draws: 10, parts: [{of: [RIN, RGUARD], absolute: 1 %, matching: 0.1 %}]}
""".splitlines(keepends=True)
WORDS = [
    "",
    "{}",
    "[]",
    "[a, b]",
    "{a: 1}",
    "netlist",
    "difference",
    "amp",
    "a.cir",
    "/dev/zero",
    "1e400",
    "!!str x",
    "é",
]


@settings(suppress_health_check=[HealthCheck.function_scoped_fixture], max_examples=60, deadline=None)
@given(st.data())
def test_a_spec_with_a_circuit_with_parts_broken_is_read_or_refused(
    folder: Path, data: st.DataObject
) -> None:
    (folder / "a.cir").write_text(CIRCUIT)
    (folder / "spec.yaml").write_text(broken(data, LINES, WORDS, "RAaupCe:[{,1", most=3))
    try:
        spec = read_spec("spec.yaml")
    except SpecError as error:
        found = error.faults
        assert all(fault.message.isprintable() and fault.line >= 1 for fault in found)
        places = [(fault.line, fault.column) for fault in found if fault.file == "spec.yaml"]
        assert places == sorted(places)
    else:
        assert expand(spec).count >= 1


def test_op_amps_whose_inner_elements_would_share_names(folder: Path) -> None:
    told = "a.cir:{}: xa1b: xa1b and xa1 are op-amps whose inner elements would have the same names; rename one of them"
    circuit = CIRCUIT.replace("XA2 b out out oa", "XA1B b out out oa")
    (fault,) = faults(SPEC, circuit)
    line = circuit.splitlines().index("XA1B b out out oa") + 1
    assert fault == told.format(f"{line}:1")


def test_a_missing_op_amp_is_not_told_of_a_circuit_that_nobody_can_read(folder: Path) -> None:
    found = faults(SPEC.replace("  opamp: fast-jfet\n", ""), CIRCUIT.replace("1k", "7k1"))
    assert found
    assert not [fault for fault in found if "opamp is missing" in fault]
