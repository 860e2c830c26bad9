"""Malformed specs as data: every fault of each at its line and column, in words that say what is allowed.

The kinds of trap (SPICE's meg, YAML's own guesses at numbers and truth values, tags that run code, alias bombs)
are common knowledge of SPICE's and YAML's users; no source. The expected lines are what the spec's writer sees.
"""

# ruff: noqa: E501 - the expected lines are quoted whole

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import pytest

from modepair.sweeps import Spec, SpecError, load_spec
from modepair.sweeps.words import listed

BASE = """\
stage:
  topology: difference
  parts: {R1: 10k, R3: 10k}
  gain: 10
  opamp: fast
frequency: {start: 1, stop: 1M, spots: [50]}
opamps:
  fast: {open_loop_gain: 120 dB, gain_bandwidth: 10M}
"""

KNOWN_KEYS = listed(Spec.model_fields)
"""The keys of a spec, as a message lists them."""


@dataclass(frozen=True)
class Malformed:
    """A spec's text, and its faults without the file's name; ``...`` stands for PyYAML's own words."""

    name: str
    text: str
    faults: list[str]


def spec(*changes: tuple[str, str], plus: str = "") -> str:
    text = BASE
    for old, new in changes:
        if old not in text:
            raise ValueError(f"the base spec holds no {old!r}")
        text = text.replace(old, new, 1)
    return text + plus


def resistor(value: str) -> str:
    return spec(("R1: 10k", f"R1: {value}"))


MALFORMED = [
    Malformed(
        "capacitance for a resistor",
        resistor("10 pF"),
        ["3:15: stage.parts.R1: 10 pF is a capacitance; R1 takes a resistance, such as 10k"],
    ),
    Malformed(
        "ppm for a resistor",
        resistor("50 ppm"),
        ["3:15: stage.parts.R1: 50 ppm is a fraction; R1 takes a resistance, such as 10k"],
    ),
    Malformed(
        "spice meg",
        resistor("1meg"),
        ["3:15: stage.parts.R1: 1meg has SPICE's meg for mega; write 1M; R1 takes a resistance, such as 10k"],
    ),
    Malformed(
        "comma",
        spec(("{R1: 10k, R3: 10k}", '{R1: "10,5k", R3: 10k}')),
        [
            "3:15: stage.parts.R1: 10,5k has a comma; write a decimal point, and nothing between thousands; R1 takes a resistance, such as 10k"
        ],
    ),
    Malformed(
        "infinite by exponent",
        resistor("1e400"),
        [
            "3:15: stage.parts.R1: 1e400 is not a finite number; R1 takes a resistance from 1 µΩ to 1 PΩ, such as 10k"
        ],
    ),
    Malformed(
        "underflow",
        resistor("1e-400"),
        [
            "3:15: stage.parts.R1: 1e-400 is too small for a number; R1 takes a resistance from 1 µΩ to 1 PΩ, such as 10k"
        ],
    ),
    Malformed(
        "nan",
        resistor(".nan"),
        ["3:15: stage.parts.R1: .nan is not a finite number; R1 takes a resistance, such as 10k"],
    ),
    Malformed(
        "inf",
        resistor("inf"),
        ["3:15: stage.parts.R1: inf is not a finite number; R1 takes a resistance, such as 10k"],
    ),
    Malformed(
        "sexagesimal",
        resistor('"1:30"'),
        ["3:15: stage.parts.R1: 1:30 has a colon and is not a number; R1 takes a resistance, such as 10k"],
    ),
    Malformed(
        "sexagesimal plain",
        spec(("gain: 10", "gain: 1:30")),
        ["4:9: stage.gain: 1:30 has a colon and is not a number; gain takes a gain, such as 100"],
    ),
    Malformed("octal", resistor("010"), ["3:15: stage.parts.R1: 010 begins with a zero; write 10"]),
    Malformed(
        "hexadecimal",
        resistor("0x10"),
        [
            "3:15: stage.parts.R1: 0x10 is not a quantity: 'x10' is neither a prefix nor a unit; R1 takes a resistance, such as 10k"
        ],
    ),
    Malformed(
        "underscore",
        resistor("10_000"),
        [
            "3:15: stage.parts.R1: 10_000 is not a quantity: '_000' is neither a prefix nor a unit; R1 takes a resistance, such as 10k"
        ],
    ),
    Malformed(
        "truth value",
        resistor("no"),
        ["3:15: stage.parts.R1: no is not a number; R1 takes a resistance, such as 10k"],
    ),
    Malformed(
        "no value",
        resistor(""),
        ["3:14: stage.parts.R1: no value is given; R1 takes a resistance, such as 10k"],
    ),
    Malformed(
        "full-width digits",
        resistor("１０k"),
        [
            "3:15: stage.parts.R1: １０k is not a number (the character １ U+FF11 is not taken; write plain digits and signs); R1 takes a resistance, such as 10k"
        ],
    ),
    Malformed(
        "arabic digits",
        resistor("١٠k"),
        [
            "3:15: stage.parts.R1: ١٠k is not a number (the character ١ U+0661 is not taken; write plain digits and signs); R1 takes a resistance, such as 10k"
        ],
    ),
    Malformed(
        "zero resistor",
        resistor("0"),
        ["3:15: stage.parts.R1: 0 is zero; R1 takes a resistance from 1 µΩ to 1 PΩ, such as 10k"],
    ),
    Malformed(
        "negative resistor",
        resistor("-10k"),
        ["3:15: stage.parts.R1: -10k is negative; R1 takes a resistance from 1 µΩ to 1 PΩ, such as 10k"],
    ),
    Malformed(
        "absurd resistor",
        resistor("1e30"),
        ["3:15: stage.parts.R1: 1e30 is out of range; R1 takes a resistance from 1 µΩ to 1 PΩ, such as 10k"],
    ),
    Malformed(
        "list for a value",
        resistor("[10k, 11k]"),
        ["3:15: stage.parts.R1: this is a list; R1 takes a resistance, such as 10k"],
    ),
    Malformed(
        "mapping for a value",
        resistor("{value: 10k}"),
        ["3:15: stage.parts.R1: this is a mapping; R1 takes a resistance, such as 10k"],
    ),
    Malformed(
        "milli for mega",
        spec(("R3: 10k}", "R3: 10k, C2: 10M}")),
        [
            "3:33: stage.parts.C2: 10M is out of range; C2 takes 0 or a capacitance from 1 aF to 1 F, such as 100p"
        ],
    ),
    Malformed(
        "exponent and prefix",
        resistor("1e3k"),
        [
            "3:15: stage.parts.R1: 1e3k has both an exponent and a prefix; write one of them; R1 takes a resistance, such as 10k"
        ],
    ),
    Malformed(
        "hertz in lower case",
        spec(("stop: 1M", "stop: 1 Mhz")),
        [
            "6:29: frequency.stop: 1 Mhz has its unit in the wrong case; write Hz; stop takes a frequency, such as 50 Hz"
        ],
    ),
    Malformed(
        "bare dB",
        spec(("gain_bandwidth: 10M", "gain_bandwidth: 10M, cmrr: 120")),
        [
            "8:61: opamps.fast.cmrr: 120 has no unit; write 120 dB if dB is meant; cmrr takes a CMRR in dB, such as 100 dB"
        ],
    ),
    Malformed(
        "ambiguous ratio",
        spec(("120 dB", "120")),
        [
            "8:26: opamps.fast.open_loop_gain: 120 could be dB or a ratio; write 120 dB, or 41.58 dB if the ratio is meant"
        ],
    ),
    Malformed(
        "phase margin",
        spec(("gain_bandwidth: 10M", "gain_bandwidth: 10M, phase_margin: 95")),
        [
            "8:69: opamps.fast.phase_margin: 95 is out of range; phase_margin takes a phase margin in degrees from 20 to 89.9, such as 60"
        ],
    ),
    Malformed(
        "sign",
        spec(("gain_bandwidth: 10M", "gain_bandwidth: 10M, cmrr: 100 dB, cmrr_sign: 2")),
        ["8:80: opamps.fast.cmrr_sign: 2 is not among the values; cmrr_sign takes 1 or -1"],
    ),
    Malformed(
        "corner without cmrr",
        spec(("gain_bandwidth: 10M", "gain_bandwidth: 10M, cmrr_corner: 1k")),
        [
            "8:55: opamps.fast.cmrr_corner: cmrr_corner has no effect without cmrr; give cmrr too, or remove it"
        ],
    ),
    Malformed(
        "missing op-amp parameter",
        spec((", gain_bandwidth: 10M", "")),
        ["8:3: opamps.fast: gain_bandwidth is missing; it takes a frequency, such as 8 MHz"],
    ),
    Malformed(
        "unknown op-amp parameter",
        spec(("gain_bandwidth", "gainbandwidth")),
        [
            "8:3: opamps.fast: gain_bandwidth is missing; it takes a frequency, such as 8 MHz",
            "8:34: opamps.fast.gainbandwidth: gainbandwidth is not a known key; did you mean gain_bandwidth?",
        ],
    ),
    Malformed(
        "negative price",
        spec(("gain_bandwidth: 10M", "gain_bandwidth: 10M, unit_price: -1")),
        [
            "8:67: opamps.fast.unit_price: -1 is negative; unit_price takes 0 or a number from 1e-09 to 1e+09, such as 1.25"
        ],
    ),
    Malformed(
        "unknown top key",
        spec(plus="varry: {}\n"),
        ["9:1: varry: varry is not a known key; did you mean vary?"],
    ),
    Malformed(
        "unknown key, nothing near",
        spec(plus="zzz: 1\n"),
        [f"9:1: zzz: zzz is not a known key; known keys: {KNOWN_KEYS}"],
    ),
    Malformed(
        "unknown stage key",
        spec(("topology", "topologie")),
        [
            "1:1: stage: topology is missing; give one of difference, buffered-difference, two-opamp, three-opamp and netlist",
            "2:3: stage.topologie: topologie is not a known key; did you mean topology?",
        ],
    ),
    Malformed(
        "unknown topology",
        spec(("difference", "diference")),
        [
            "2:13: stage.topology: diference is not a topology; did you mean difference? topology takes difference, buffered-difference, two-opamp, three-opamp or netlist"
        ],
    ),
    Malformed(
        "unknown filter key",
        spec(plus="source:\n  filter: {resistence: 1k}\n"),
        ["10:12: source.filter.resistence: resistence is not a known key; did you mean resistance?"],
    ),
    Malformed(
        "unknown part",
        spec(("R3: 10k}", "R3: 10k, R9: 10k}")),
        [
            "3:29: stage.parts.R9: R9 is not among the known parts of the stage; known parts of the stage: R1, R2, R3, R4, RG, RF1, RF2, RREF, RL, C2, C4, CF1 and CF2"
        ],
    ),
    Malformed(
        "part of another stage",
        spec(("R3: 10k}", "R3: 10k, RF1: 10k}")),
        [
            "3:29: stage.parts.RF1: the difference stage has no RF1; its parts are R1, R2, R3, R4, RREF, RL, C2 and C4"
        ],
    ),
    Malformed(
        "op-amp instance of another stage",
        spec(("R3: 10k}", "R3: 10k, A2.cmrr: 90 dB}")),
        ["3:29: stage.parts.A2.cmrr: the difference stage has no A2; its op-amps are A1"],
    ),
    Malformed(
        "missing part",
        spec((", R3: 10k", "")),
        ["3:3: stage.parts: the difference stage needs R3; give a value for each in parts"],
    ),
    Malformed(
        "missing parts and gain",
        spec(("  parts: {R1: 10k, R3: 10k}\n  gain: 10\n", "")),
        [
            "1:1: stage: the difference stage needs R1, R2, R3 and R4 (or gain, which sets R2 and R4); give a value for each in parts"
        ],
    ),
    Malformed(
        "gain and its part",
        spec(("R3: 10k}", "R3: 10k, R2: 10k}")),
        [
            "3:29: stage.parts.R2: gain sets R2 of the difference stage, which is also given; leave one of them out"
        ],
    ),
    Malformed(
        "gain too low",
        spec(
            ("difference", "two-opamp"), ("R3: 10k}", "R3: 10k, R2: 10k, R4: 10k}"), ("gain: 10", "gain: 1.5")
        ),
        [
            "4:9: stage.gain: a gain of 1.5 is below 2, the least that the two-opamp stage has with these resistors (without RG)"
        ],
    ),
    Malformed(
        "gain out of reach",
        spec(("gain: 10", "gain: 1e7"), ("R1: 10k", "R1: 1e10")),
        [
            "4:9: stage.gain: a gain of 1e+07 needs R2 = 100 PΩ, out of range; R2 takes a resistance from 1 µΩ to 1 PΩ, such as 10k"
        ],
    ),
    Malformed(
        "missing topology",
        spec(("  topology: difference\n", "")),
        [
            "1:1: stage: topology is missing; give one of difference, buffered-difference, two-opamp, three-opamp and netlist"
        ],
    ),
    Malformed(
        "missing opamp",
        spec(("  opamp: fast\n", "")),
        ["1:1: stage: opamp is missing; name a candidate for every op-amp, or one for each under opamps"],
    ),
    Malformed(
        "unknown candidate",
        spec(("opamp: fast", "opamp: fats")),
        ["5:10: stage.opamp: there is no op-amp candidate fats; did you mean fast?"],
    ),
    Malformed(
        "both opamp and opamps",
        spec(("opamp: fast", "opamp: fast\n  opamps: {A1: fast}")),
        ["5:3: stage.opamp: opamp and opamps are both given; leave one of them out"],
    ),
    Malformed(
        "opamps not all",
        spec(("difference", "buffered-difference"), ("opamp: fast", "opamps: {A1: fast, A3: fast}")),
        ["5:3: stage.opamps: the buffered-difference stage needs op-amps A1, A2 and A3; name one for A2 too"],
    ),
    Malformed(
        "opamps too many",
        spec(("opamp: fast", "opamps: {A1: fast, A2: fast}")),
        ["5:22: stage.opamps.A2: the difference stage has no A2; its op-amps are A1"],
    ),
    Malformed(
        "unknown instance",
        spec(("opamp: fast", "opamps: {A1: fast, A7: fast}")),
        ["5:22: stage.opamps.A7: A7 is not among the known instances; known instances: A1, A2 and A3"],
    ),
    Malformed(
        "control text in a name",
        spec(("opamp: fast", 'opamp: "fa\\e[31mst"')),
        [
            "5:10: stage.opamp: fa\\x1b[31mst is not a name; opamp takes an op-amp name of at most 64 lower-case letters a-z, digits, - and _, starting with a letter or digit, such as quiet-bipolar"
        ],
    ),
    Malformed(
        "line break in a name",
        spec(("  fast:", '  "fast\\n.end":')),
        [
            "5:10: stage.opamp: there is no op-amp candidate fast; give it under opamps or in one of the opamp_files",
            "8:3: opamps.fast\\n.end: fast\\n.end is not a name; a candidate takes an op-amp name of at most 64 lower-case letters a-z, digits, - and _, starting with a letter or digit, such as quiet-bipolar",
        ],
    ),
    Malformed(
        "braces in a name",
        spec(("  fast:", '  "fast{x}":')),
        [
            "5:10: stage.opamp: there is no op-amp candidate fast; give it under opamps or in one of the opamp_files",
            "8:3: opamps.fast{x}: fast{x} is not a name; a candidate takes an op-amp name of at most 64 lower-case letters a-z, digits, - and _, starting with a letter or digit, such as quiet-bipolar",
        ],
    ),
    Malformed(
        "unknown caution",
        spec(plus="cautions: [medical, mainz]\n"),
        [
            "9:21: cautions[1]: mainz is not a caution; did you mean mains? cautions takes medical, mains or safety"
        ],
    ),
    Malformed(
        "escape in title",
        'title: "a\\x07b"\n' + BASE,
        [
            "1:8: title: a\\x07b holds the character U+0007; title takes printable text in one line, at most 200 characters"
        ],
    ),
    Malformed(
        "long title",
        f"title: {'x' * 300}\n" + BASE,
        [
            "1:8: title: xxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxx... has 300 characters; title takes printable text in one line, at most 200 characters"
        ],
    ),
    Malformed(
        "zero frequency",
        spec(("start: 1", "start: 0")),
        ["6:20: frequency.start: 0 is zero; start takes a frequency from 1 µHz to 1 THz, such as 50 Hz"],
    ),
    Malformed(
        "backward frequencies",
        spec(("start: 1, stop: 1M", "start: 1M, stop: 1")),
        ["6:30: frequency.stop: 1 is below start, 1M; stop takes a frequency from start upwards"],
    ),
    Malformed(
        "spot outside",
        spec(("[50]", "[50, 2M]")),
        ["6:45: frequency.spots[1]: 2M lies outside start..stop; spots lie within 1 to 1M"],
    ),
    Malformed(
        "spot twice",
        spec(("[50]", "[50, 50 Hz]")),
        ["6:45: frequency.spots[1]: 50 Hz is among the spots twice; remove one of them"],
    ),
    Malformed(
        "spots not a list",
        spec(("[50]", "50")),
        ["6:40: frequency.spots: 50 is a single value; spots takes a list"],
    ),
    Malformed(
        "points",
        spec(("[50]", "[50], points_per_decade: 2.5")),
        [
            "6:65: frequency.points_per_decade: 2.5 is not a whole number; points_per_decade takes points per decade from 1 to 1000, such as 20"
        ],
    ),
    Malformed(
        "no frequency",
        spec(("frequency: {start: 1, stop: 1M, spots: [50]}\n", "")),
        ["1:1: the frequencies are missing; give frequency, such as {start: 1, stop: 1M, spots: [50, 60]}"],
    ),
    Malformed(
        "no stop",
        spec(("stop: 1M, ", "")),
        ["6:1: frequency: stop is missing; it takes a frequency, such as 1 MHz"],
    ),
    Malformed(
        "section is text",
        spec(plus="source: 350\n"),
        ["9:9: source: 350 is a single value; source takes a mapping of keys"],
    ),
    Malformed(
        "section is empty",
        spec(plus="source:\n"),
        ["9:8: source: no value is given; source takes a mapping of keys"],
    ),
    Malformed(
        "section is a list",
        spec(plus="source: [350]\n"),
        ["9:9: source: this is a list; source takes a mapping of keys"],
    ),
    Malformed(
        "parts is a list",
        spec(("{R1: 10k, R3: 10k}", "[10k, 10k]")),
        ["3:10: stage.parts: this is a list; parts takes a mapping of parts of the stage"],
    ),
    Malformed(
        "source key without effect",
        spec(plus="source: {imbalance: 10, parts: {RI: 5}}\n"),
        ["9:10: source.imbalance: this has no effect, as source.parts gives RI; leave one of them out"],
    ),
    Malformed(
        "unknown axis",
        spec(plus="vary:\n  stage.opam: [fast]\n"),
        ["10:3: vary.stage.opam: there is no setting stage.opam to vary; did you mean stage.opamp?"],
    ),
    Malformed(
        "axis of frequency",
        spec(plus="vary:\n  frequency.start: [1, 2]\n"),
        [
            "10:3: vary.frequency.start: there is no setting frequency.start to vary; paths are such as stage.opamp, stage.parts.R1 or source.imbalance"
        ],
    ),
    Malformed(
        "axis value",
        spec(plus="vary:\n  source.imbalance: [0, 10, 10 pF]\n"),
        ["10:29: vary.source.imbalance[2]: 10 pF is a capacitance; imbalance takes a resistance, such as 10"],
    ),
    Malformed(
        "axis twice",
        spec(plus="vary:\n  stage.parts.R1: [10k, 1e4]\n"),
        ["10:25: vary.stage.parts.R1[1]: 1e4 is on this axis twice (as 10k); remove one of them"],
    ),
    Malformed(
        "axis not a list",
        spec(plus="vary:\n  stage.parts.R1: 10k\n"),
        ["10:19: vary.stage.parts.R1: 10k is a single value; an axis takes a list of values, such as [a, b]"],
    ),
    Malformed(
        "axis empty",
        spec(plus="vary:\n  stage.parts.R1: []\n"),
        ["10:19: vary.stage.parts.R1: the list is empty; an axis takes at least one value"],
    ),
    Malformed(
        "axis candidate",
        spec(plus="vary:\n  stage.opamp: [fast, quick]\n"),
        ["10:23: vary.stage.opamp[1]: there is no op-amp candidate quick; known candidates: fast"],
    ),
    Malformed(
        "axis part of another stage",
        spec(plus="vary:\n  stage.parts.RG: [1k, 2k]\n"),
        [
            "10:3: vary.stage.parts.RG: the difference stage has no RG; its parts are R1, R2, R3, R4, RREF, RL, C2 and C4"
        ],
    ),
    Malformed(
        "axis of an unused candidate",
        spec(
            plus="  slow: {open_loop_gain: 100 dB, gain_bandwidth: 1M}\nvary:\n  opamps.slow.gain_bandwidth: [1M, 2M]\n"
        ),
        [
            "11:3: vary.opamps.slow.gain_bandwidth: no op-amp of the stage is slow, so this axis has no effect; remove it"
        ],
    ),
    Malformed(
        "axis gain too low",
        spec(
            ("difference", "two-opamp"),
            ("R3: 10k}", "R3: 10k, R2: 10k, R4: 10k}"),
            plus="vary:\n  stage.gain: [10, 1.5, 20]\n",
        ),
        [
            "10:20: vary.stage.gain[1]: a gain of 1.5 is below 2, the least that the two-opamp stage has with these resistors (without RG)"
        ],
    ),
    Malformed(
        "vary is a list",
        spec(plus="vary: [stage.opamp]\n"),
        ["9:7: vary: this is a list; vary takes a mapping of keys"],
    ),
    Malformed(
        "four million cases",
        spec(
            plus="vary:\n"
            + "".join(
                f"  source.parts.{p}: [{', '.join(f'{i}p' for i in range(1, 201))}]\n" for p in ("CCP", "CCN")
            )
            + f"  source.imbalance: [{', '.join(map(str, range(100)))}]\n"
        ),
        [
            "9:1: vary: the axes make 4,000,000 cases (200 x 200 x 100); at most 200,000 are taken, so shorten an axis"
        ],
    ),
    Malformed(
        "duplicate key",
        spec(("R1: 10k", "R1: 10k, R1: 20k")),
        ["3:20: stage.parts.R1: this key is given twice, first at 3:11; remove one of them"],
    ),
    Malformed(
        "duplicate section",
        spec(plus="frequency: {start: 1, stop: 2}\n"),
        ["9:1: frequency: this key is given twice, first at 6:1; remove one of them"],
    ),
    Malformed(
        "python object",
        spec(("gain: 10", 'gain: !!python/object/apply:os.system ["true"]')),
        [
            "4:9: the tag tag:yaml.org,2002:python/object/apply:os.system is not taken; write the plain value",
            "4:9: stage.gain: this is a list; gain takes a gain, such as 100",
        ],
    ),
    Malformed("local tag", resistor("!ohm 10k"), ["3:15: the tag !ohm is not taken; write the plain value"]),
    Malformed(
        "anchor and alias",
        spec(("R1: 10k, R3: 10k", "R1: &r 10k, R3: *r")),
        [
            "3:15: the anchor &r is not taken; remove it and write values out",
            "3:27: the alias *r is not taken; write the value out",
        ],
    ),
    Malformed("undefined alias", resistor("*r"), ["3:15: the alias *r is not taken; write the value out"]),
    Malformed(
        "alias bomb",
        "a: &a [x, x]\nb: &b [*a, *a]\nc: &c [*b, *b]\n",
        [
            "1:1: the stage is missing; give stage with topology, parts and opamp",
            "1:1: the frequencies are missing; give frequency, such as {start: 1, stop: 1M, spots: [50, 60]}",
            f"1:1: a: a is not a known key; known keys: {KNOWN_KEYS}",
            "1:4: the anchor &a is not taken; remove it and write values out",
            f"2:1: b: b is not a known key; known keys: {KNOWN_KEYS}",
            "2:4: the anchor &b is not taken; remove it and write values out",
            "2:8: the alias *a is not taken; write the value out",
            "2:12: the alias *a is not taken; write the value out",
            f"3:1: c: c is not a known key; known keys: {KNOWN_KEYS}",
            "3:4: the anchor &c is not taken; remove it and write values out",
            "3:8: the alias *b is not taken; write the value out",
            "3:12: the alias *b is not taken; write the value out",
        ],
    ),
    Malformed(
        "merge key",
        spec(("  gain: 10", "  <<: {gain: 10}")),
        [
            "3:3: stage.parts: the difference stage needs R2 and R4 (or gain, which sets R2 and R4); give a value for each in parts",
            "4:3: the merge key << is not taken; write the keys out",
        ],
    ),
    Malformed(
        "second document",
        BASE + "---\n" + BASE,
        ["9:1: a second document begins here; a file holds one, so remove this ---"],
    ),
    Malformed(
        "directive", "%YAML 1.1\n---\n" + BASE, ["1:1: YAML directives (%) are not taken; remove them"]
    ),
    Malformed(
        "tag directive",
        "%TAG ! tag:example.org,2000:\n---\n" + BASE,
        ["1:1: YAML directives (%) are not taken; remove them"],
    ),
    Malformed(
        "complex key",
        "? [a, b]\n: 1\n" + BASE,
        ["1:3: a mapping or list stands as a key; keys are plain text"],
    ),
    Malformed("null key", ": 1\n" + BASE, ["1:1: not YAML: ..."]),
    Malformed("tab", spec(("  gain", "\tgain")), ["4:1: a tab is not taken here; indent with spaces"]),
    Malformed(
        "second colon",
        spec(("gain: 10", "gain: 10: 5")),
        ["4:11: not YAML: a second colon in one line; put the value in quotes, or check the indentation"],
    ),
    Malformed("unclosed", spec(("R3: 10k}", "R3: 10k")), ["4:7: not YAML: ..."]),
    Malformed("unclosed quote", 'title: "abc\n' + BASE, ["10:1: not YAML: ..."]),
    Malformed("bad escape", 'title: "\\q"\n' + BASE, ["1:10: not YAML: ..."]),
    Malformed(
        "escape out of range", 'title: "\\UFFFFFFFF"\n' + BASE, ["1:1: what begins here is not YAML: ..."]
    ),
    Malformed(
        "surrogate",
        'title: "\\uD800"\n' + BASE,
        [
            "1:8: title: \\ud800 holds the character U+D800; title takes printable text in one line, at most 200 characters"
        ],
    ),
    Malformed(
        "huge version", "%YAML 1." + "9" * 5000 + "\n---\na: 1\n", ["1:1: what begins here is not YAML: ..."]
    ),
    Malformed("at sign", spec(("opamp: fast", "opamp: @fast")), ["5:10: not YAML: ..."]),
    Malformed("deep nesting", "a: " + "[" * 40 + "]" * 40 + "\n", ["1:15: nested more than 12 levels deep"]),
    Malformed("empty", "", ["1:1: the file is empty; it takes a mapping of keys"]),
    Malformed("only comments", "# nothing\n", ["1:1: the file is empty; it takes a mapping of keys"]),
    Malformed("only a marker", "---\n", ["1:1: the file is empty; it takes a mapping of keys"]),
    Malformed(
        "null",
        "null\n",
        ["1:1: the top of the file is the text null; it takes a mapping of keys, such as title: ..."],
    ),
    Malformed(
        "list at the top",
        "- stage\n",
        ["1:1: the top of the file is a list; it takes a mapping of keys, such as title: ..."],
    ),
    Malformed(
        "text at the top",
        "stage\n",
        ["1:1: the top of the file is the text stage; it takes a mapping of keys, such as title: ..."],
    ),
    Malformed(
        "bell",
        spec(("gain: 10", "gain: 1\x070")),
        ["4:10: the character U+0007 is not taken in a spec; remove it"],
    ),
    Malformed(
        "line separator",
        "title: a\u2028b\n" + BASE,
        ["1:9: the character U+2028 is not taken in a spec; remove it"],
    ),
    Malformed(
        "right-to-left override",
        "title: a\u202eb\n" + BASE,
        ["1:9: the character U+202E is not taken in a spec; remove it"],
    ),
    Malformed(
        "opamp_files text",
        spec(plus="opamp_files: mine.yaml\n"),
        ["9:14: opamp_files: mine.yaml is a single value; opamp_files takes a list"],
    ),
    Malformed(
        "opamp_files missing",
        spec(plus="opamp_files: [mine.yaml]\n"),
        [
            "9:15: opamp_files[0]: mine.yaml cannot be used: no such file (looked for mine.yaml; paths start at the spec's folder)"
        ],
    ),
    Malformed(
        "opamp_files empty name",
        spec(plus="opamp_files: ['']\n"),
        ["9:15: opamp_files[0]: no value is given; a file name is needed"],
    ),
    Malformed(
        "several",
        spec(
            ("R1: 10k", "R1: 10 pF"),
            ("gain: 10", "gain: ten"),
            ("stop: 1M", "stop: 0"),
            ("opamp: fast", "opamp: fats"),
        ),
        [
            "3:15: stage.parts.R1: 10 pF is a capacitance; R1 takes a resistance, such as 10k",
            "4:9: stage.gain: ten is not a number; gain takes a gain, such as 100",
            "5:10: stage.opamp: there is no op-amp candidate fats; did you mean fast?",
            "6:29: frequency.stop: 0 is zero; stop takes a frequency from 1 µHz to 1 THz, such as 50 Hz",
        ],
    ),
]


@pytest.mark.parametrize("malformed", MALFORMED, ids=lambda malformed: malformed.name)
def test_every_fault_is_reported_at_its_place(
    malformed: Malformed, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.chdir(tmp_path)
    Path("spec.yaml").write_text(malformed.text, encoding="utf-8")
    with pytest.raises(SpecError, match=r"^spec\.yaml:") as caught:
        load_spec("spec.yaml")
    lines = [str(fault) for fault in caught.value.faults]
    expected = [f"spec.yaml:{fault}" for fault in malformed.faults]
    cut = [
        f"{line[: len(wanted) - 3]}..." if wanted.endswith("...") else line
        for line, wanted in zip(lines, expected, strict=False)
    ]
    assert [*cut, *lines[len(cut) :]] == expected


def test_the_base_of_the_malformed_specs_is_well_formed(tmp_path: Path) -> None:
    path = tmp_path / "spec.yaml"
    path.write_text(BASE)
    assert load_spec(path).stage.gain == 10.0


def test_names_of_malformed_specs_are_distinct() -> None:
    names = [malformed.name for malformed in MALFORMED]
    assert len(set(names)) == len(names) >= 45
