"""Fuzzing of the screener: ``python -m tests.fuzzing.screener --runs 100000``.

Inputs are the hostile and the ordinary models and pieces of cards, mutated: bytes, lines, tokens and numbers
exchanged, doubled, cut and joined, each read as a model file and as an own circuit. With atheris installed,
``--atheris`` lets coverage guide the mutation instead. Allowed is a `ScreenedModel` in canonical grammar whose
screening gives the same text, or a `SpecError` with places; anything else, and anything that takes longer than the
time limit, is kept and ends the run.
"""

from __future__ import annotations

import argparse
import importlib
import os
import random
import re
import signal
import sys
import tempfile
import time
from collections import Counter
from pathlib import Path
from types import FrameType

from modepair.circuits import read_circuit
from modepair.circuits.screening import screen
from modepair.sweeps.faults import SpecError
from modepair.sweeps.stage_circuits import INSTANCE_NAME, PART_NAME

__all__ = ["CANONICAL", "check", "check_circuits", "corpus", "mutated"]

MOST_SUBCIRCUITS = 3
"""Subcircuits of a file that are read as circuits."""

TIME_LIMIT_S = 10.0
"""Processor time, so that a busy machine does not count."""
LONGEST = 30_000

_NODE = r"[a-z0-9_]+"
_NUMBER = r"-?[0-9]+(\.[0-9]+)?(e[+-][0-9]+)?"
_EXPRESSION = r"[a-z0-9_.+\-*/^<>=!&|?: (),]+"
_PAIRS = rf"( [a-z0-9]+={_NUMBER})*"
CANONICAL = re.compile(
    "|".join(
        (
            rf"\.model [a-z_]\w* (d|npn|pnp|njf|pjf|nmos|pmos)\(([a-z0-9]+={_NUMBER}( [a-z0-9]+={_NUMBER})*)?\)",
            rf"\.subckt [a-z0-9_.+\-/]+( {_NODE})+",
            r"\.ends [a-z0-9_.+\-/]+",
            rf"[rcl]\w+ {_NODE} {_NODE} {_NUMBER}{_PAIRS}",
            rf"k\w+ l\w+ l\w+ {_NUMBER}",
            rf"[vi]\w+ {_NODE} {_NODE} dc {_NUMBER}",
            rf"[eg]\w+ {_NODE} {_NODE} value=\{{{_EXPRESSION}\}}",
            rf"[eg]\w+ {_NODE} {_NODE} {_NODE} {_NODE} {_NUMBER}",
            rf"[efgh]\w+ {_NODE} {_NODE} poly\([0-9]+\)( {_NODE})+( {_NUMBER})+",
            rf"[fh]\w+ {_NODE} {_NODE} v\w+ {_NUMBER}",
            rf"b\w+ {_NODE} {_NODE} [vi]={_EXPRESSION}",
            rf"[dqjm]\w+( {_NODE}){{3,5}}{_PAIRS}( off)?",
            rf"x\w+( {_NODE})+ [a-z0-9_.+\-/]+",
        )
    )
)
"""Every line of screened text is one of these; nothing in them can carry a command or a file name."""

_HERE = Path(__file__).parent.parent
_PIECES = [
    *(
        ".subckt a p n",
        ".ends",
        ".end",
        "params: k=1 j={2*k}",
        ".model m1 d(is=1f)",
        ".model s1 sw(vt=1 ron=1)",
        "+",
    ),
    *(
        ".param a=1 b={a+1}",
        ".func f(x,y) {x*y+a}",
        "e1 p n value={",
        "}",
        "laplace {v(p)} = {1/(1+s)}",
        "poly(2) ",
    ),
    *(
        "table {v(p)} = (0,0) (1,1)",
        "if(v(p)>1,2,3)",
        "limit(v(p),0,1)",
        "v(p,n)",
        "i(v1)",
        "1meg",
        "4k7",
        "1e400",
    ),
    *(
        "{a}",
        "'a'",
        "'",
        "{",
        "(",
        ")",
        "[",
        "]",
        ",",
        "=",
        "==",
        "**",
        "^",
        "?",
        ":",
        "&&",
        "|",
        "!",
        "-",
        "\t",
        ";",
    ),
    *(
        "*#shell touch canary.txt",
        ".control",
        ".include x.inc",
        "`",
        "$ c",
        "// c",
        "\r",
        "\x0b",
        "\u2028",
        "µ",
        "\x00",
    ),
    *(
        "x1 p n a k=2",
        "x1 p n a",
        "k1 l1 l2 0.5",
        "q1 p n 0 m1 2",
        "s1 p n p 0 s1 on",
        "b1 p 0 v=",
        "0",
        "00",
        "gnd",
    ),
    *(
        "f(f(f(1,2),3),4)",
        "((((((((((",
        "))))))))))",
        "1?1:1?1:",
        "-1",
        "1e-400",
        "nan",
        "inf",
        "0x10",
        "dc 0 ac 1",
    ),
]


def corpus() -> list[bytes]:
    """Return the files that mutation starts from; the ordinary ones often enough to be met as often as the
    others."""
    ordinary = sorted((_HERE / "ordinary_models").glob("**/*.[li][in][bc]"))
    ordinary += sorted((_HERE.parent / "sweeps" / "examples" / "circuits").iterdir())
    hostile = sorted((_HERE / "hostile" / "models").iterdir())
    times = max(1, 2 * len(hostile) // len(ordinary))
    return [path.read_bytes()[:LONGEST] for path in (*(ordinary * times), *hostile)]


def mutated(random_: random.Random, files: list[bytes]) -> bytes:
    """Return a mutated file."""
    data = random_.choice(files)
    for _ in range(random_.choice((1, 1, 1, 2, 2, 3, 5, 12))):
        data = _mutation(random_, data, files)
    return data[:LONGEST]


def _mutation(random_: random.Random, data: bytes, files: list[bytes]) -> bytes:
    kind = random_.randrange(9)
    at = random_.randrange(len(data) + 1)
    if kind == 0:
        return data[:at] + bytes([random_.randrange(256)]) + data[at + random_.randrange(2) :]
    if kind == 1:
        return data[:at] + data[at + random_.choice((1, 1, 2, 5, 20, 200)) :]
    if kind == 2:
        return data[:at] + random_.choice(_PIECES).encode() + data[at:]
    if kind == 3:
        return (
            data[:at]
            + b"\n"
            + random_.choice(_PIECES).encode()
            + b" "
            + random_.choice(_PIECES).encode()
            + b"\n"
            + data[at:]
        )
    lines = data.split(b"\n")
    line = random_.randrange(len(lines))
    if kind == 4:
        other = random_.choice(files).split(b"\n")
        lines.insert(line, random_.choice(other))
    elif kind == 5:
        lines.insert(line, lines[random_.randrange(len(lines))])
    elif kind == 6:
        del lines[line]
    else:
        tokens = re.split(rb"([ =(){},*/+-])", lines[line])
        index = random_.randrange(len(tokens))
        if kind == 7:
            tokens[index] = random_.choice(_PIECES).encode()
        else:
            other_tokens = re.split(rb"([ =(){},*/+-])", random_.choice(lines))
            tokens[index] = random_.choice(other_tokens)
        lines[line] = b"".join(tokens)
    return b"\n".join(lines)


def check(data: bytes, folder: Path) -> str:
    """Screen `data` as a file in `folder`; return ``screened`` or ``refused``.

    Raises
    ------
    AssertionError
        When what comes out is neither in canonical grammar nor an error with places.
    """
    path = folder / "fuzzed.lib"
    path.write_bytes(data)
    try:
        text = screen(path, folder).text
    except SpecError as error:
        _demand(_is_plain(error), f"a refusal without a place or with control characters: {error!r}")
        return "refused"
    for line in text.splitlines():
        _demand(CANONICAL.fullmatch(line) is not None, f"not canonical: {line!r}")
    _demand(text.isascii(), "not ASCII")
    path.write_text(text)
    try:
        again = screen(path, folder).text
    except SpecError as error:
        raise AssertionError(f"canonical text is refused: {error}\n{text}") from error
    _demand(again == text, f"not the same when screened again:\n{text}\n{again}")
    return "screened"


def check_circuits(data: bytes, folder: Path) -> int:
    """Read each of the first subcircuits of `data` as an own circuit; return how many are taken.

    Raises
    ------
    AssertionError
        When what else a circuit holds is not in canonical grammar, a name or a value is none of a spec, or an error is
        without a place.
    """
    (folder / "fuzzed.lib").write_bytes(data)
    names = re.findall(rb"(?im)^[ \t]*\.subckt[ \t]+([a-z0-9_]+)", data)
    taken = 0
    for name in dict.fromkeys(names[:MOST_SUBCIRCUITS]):
        try:
            circuit = read_circuit(folder, "fuzzed.lib", name.decode())
        except SpecError as error:
            _demand(_is_plain(error), f"a refusal without a place or with control characters: {error!r}")
            continue
        taken += 1
        for line in circuit.remainder.text.splitlines() if circuit.remainder else ():
            _demand(CANONICAL.fullmatch(line) is not None, f"not canonical: {line!r}")
        nodes = [node for some in (*circuit.part_nodes, *circuit.opamp_nodes) for node in some]
        _demand(all(re.fullmatch(_NODE, node) for node in nodes), f"not nodes: {nodes}")
        _demand(all(PART_NAME.fullmatch(part) for part, _ in circuit.values), f"not parts: {circuit.values}")
        _demand(all(0 < value < 1e16 for _, value in circuit.values), f"not values: {circuit.values}")
        _demand(all(map(INSTANCE_NAME.fullmatch, circuit.opamps)), f"not op-amps: {circuit.opamps}")
    return taken


def _is_plain(error: SpecError) -> bool:
    printable = all(character.isprintable() or character == "\n" for character in str(error))
    # A fault without a file is about a key of the spec, which it names.
    return printable and bool(error.faults) and all((f.file or f.key) and f.message for f in error.faults)


def _demand(holds: bool, message: str) -> None:
    if not holds:
        raise AssertionError(message)


def _late(signal_number: int, frame: FrameType | None) -> None:
    raise TimeoutError(f"longer than {TIME_LIMIT_S} s")


def run(runs: int, seed: int, folder: Path) -> Counter[str]:
    """Check `runs` mutated inputs; the first failure is kept in ``failure.lib`` and raised."""
    random_ = random.Random(seed)
    files = corpus()
    counts: Counter[str] = Counter()
    slowest = 0.0
    before = {path.name for path in folder.iterdir()} | {"fuzzed.lib"}
    signal.signal(signal.SIGPROF, _late)
    for _ in range(runs):
        data = mutated(random_, files)
        begun = time.perf_counter()
        signal.setitimer(signal.ITIMER_PROF, TIME_LIMIT_S)
        try:
            counts[check(data, folder)] += 1
            counts["circuits"] += check_circuits(data, folder)
        except BaseException:
            Path("failure.lib").write_bytes(data)
            raise
        finally:
            signal.setitimer(signal.ITIMER_PROF, 0)
        slowest = max(slowest, time.perf_counter() - begun)
    appeared = {path.name for path in folder.iterdir()} - before
    if appeared:
        raise AssertionError(f"files appeared: {appeared}")
    counts["slowest_ms"] = round(1000 * slowest)
    return counts


def main() -> None:
    """Run the fuzzer from the command line."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--runs", type=int, default=10_000)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--atheris", action="store_true", help="let atheris mutate, guided by coverage")
    options = parser.parse_args()
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name) / "work"
        folder.mkdir()
        if options.atheris:
            _guided(options.runs, folder)
            return
        begun = time.perf_counter()
        home = Path.cwd()
        counts = run(options.runs, options.seed, folder)
        assert Path.cwd() == home
        print(f"{options.runs} inputs in {time.perf_counter() - begun:.0f} s: {dict(counts)}")


def _guided(runs: int, folder: Path) -> None:
    try:
        atheris = importlib.import_module("atheris")
    except ImportError:
        sys.exit("atheris is not installed; run without --atheris, or install it: pip install atheris")
    seeds = folder.parent / "seeds"
    seeds.mkdir()
    for index, data in enumerate(corpus()):
        (seeds / f"{index}").write_bytes(data)
    atheris.instrument_all()
    arguments = [
        sys.argv[0],
        f"-runs={runs}",
        f"-timeout={TIME_LIMIT_S:.0f}",
        f"-max_len={LONGEST}",
        os.fspath(seeds),
    ]
    atheris.Setup(arguments, lambda data: check(data, folder) and None)
    atheris.Fuzz()


if __name__ == "__main__":
    main()
