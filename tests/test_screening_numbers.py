"""Numbers of SPICE files, and the grammar of expressions.

Kind of truth: the scale factors of SPICE2 (closed form), and laws that hold for all numbers (hypothesis).
"""

from __future__ import annotations

import contextlib
import math
from pathlib import Path

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from modepair.circuits.screening import Limits
from modepair.circuits.screening.expressions import Number, show
from modepair.circuits.screening.folding import Folder
from modepair.circuits.screening.frames import Frame
from modepair.circuits.screening.numbers import NumberError, parse_number, show_number
from modepair.circuits.screening.parsing import parse_expression
from modepair.circuits.screening.places import CardError, Findings, Place
from modepair.circuits.screening.source import Card
from tests.fuzzing.screener import CANONICAL, check, corpus, run


@pytest.mark.parametrize(
    ("text", "value"),
    [
        ("1m", 1e-3), ("1meg", 1e6), ("2.5k", 2500.0), ("10p", 1e-11), ("1f", 1e-15), ("3g", 3e9), ("1t", 1e12),
        ("1mil", 25.4e-6), ("4.7u", 4.7e-6), (".5n", 5e-10), ("5.", 5.0), ("-12", -12.0), ("+3", 3.0), ("1e-3", 1e-3),
        ("1e3k", 1e6), ("10pf", 1e-11), ("50ohm", 50.0), ("5v", 5.0), ("5vdc", 5.0), ("1megohm", 1e6), ("1khz", 1e3),
        ("1uf", 1e-6), ("2mh", 2e-3), ("1ma", 1e-3), ("10ns", 1e-8), ("0", 0.0), ("-0", 0.0),
    ],
)  # fmt: skip
def test_numbers_are_read_as_spice_means_them(text: str, value: float) -> None:
    assert parse_number(text) == value
    assert math.copysign(1, parse_number(text)) == (1 if value >= 0 else -1)


@pytest.mark.parametrize(
    ("text", "reason"),
    [
        ("4k7", "scale factor inside"), ("1r5", "scale factor inside"), ("1meg5", "scale factor inside"),
        ("0x10", "hexadecimal"), ("10%", "per cent"), ("1d3", "exponent letter d"), ("1_000", "underscore"),
        ("1a", "atto, ampere or nothing"), ("2s", "is not a number"), ("1kk", "is not a number"),
        ("1e400", "too large"), ("1e-400", "too small"),
        ("1e", "is not a number"), ("1ff", "two units"), ("1" * 61, "too long"), ("5kelvin", "is not a number"),
    ],
)  # fmt: skip
def test_numbers_that_programs_read_differently_are_refused(text: str, reason: str) -> None:
    with pytest.raises(NumberError, match=reason):
        parse_number(text)


@given(st.floats(allow_nan=False, allow_infinity=False))
def test_a_number_written_is_read_back_as_the_same_float(value: float) -> None:
    assert parse_number(show_number(value)) == value


def folded(text: str, limits: Limits | None = None) -> str:
    findings = Findings(limits or Limits())
    card = Card(text, text, ((0, Place("text", 1, 1)),))
    return show(Folder(findings).fold(parse_expression(card, 0, len(text), findings), Frame(None, {}, {})))


ARITHMETIC = st.recursive(
    st.floats(min_value=1e-3, max_value=1e3).map(lambda value: show_number(value))
    | st.integers(0, 9).map(str),
    lambda inner: st.one_of(
        st.tuples(inner, st.sampled_from("+-*"), inner).map(
            lambda parts: f"({parts[0]}{parts[1]}{parts[2]})"
        ),
        inner.map(lambda text: f"(-{text})"),
        inner.map(lambda text: f"abs({text})"),
        st.tuples(inner, inner).map(lambda parts: f"max({parts[0]},{parts[1]})"),
    ),
    max_leaves=12,
)


@given(ARITHMETIC)
def test_constant_arithmetic_is_pythons(text: str) -> None:
    expected = float(eval(text, {"abs": abs, "max": max}))  # only what ARITHMETIC makes
    assert float(folded(text)) == expected


CIRCUITRY = st.recursive(
    st.sampled_from(["v(a)", "v(a,b)", "i(v1)", "2", "1k", "0.5meg", "pi", "temp"]),
    lambda inner: st.one_of(
        st.tuples(
            inner, st.sampled_from([" + ", "-", "*", "/", "**2*", " > ", "<=", "&&", " | ", "=="]), inner
        ).map("".join),
        inner.map(lambda text: f"({text})"),
        inner.map(lambda text: f"-({text})"),
        inner.map(lambda text: f"!({text})"),
        st.tuples(st.sampled_from(["sin", "exp", "sqrt", "u", "tanh", "ln", "stp"]), inner).map(
            lambda p: f"{p[0]}({p[1]})"
        ),
        st.tuples(inner, inner, inner).map(lambda p: f"if({p[0]},{p[1]},{p[2]})"),
        st.tuples(inner, inner, inner).map(lambda p: f"({p[0]} ? {p[1]} : {p[2]})"),
        inner.map(lambda text: f"limit({text},-1,2)"),
        inner.map(lambda text: f"table({text},-1,-3,0,0,5,7)"),
        inner.map(lambda text: f"pwrs({text},1.5)"),
    ),
    max_leaves=20,
)


@settings(max_examples=60, deadline=None)
@given(CIRCUITRY)
def test_expressions_fold_to_text_that_folds_to_itself(text: str) -> None:
    try:
        once = folded(text)
    except CardError:
        return
    assert folded(once) == once
    assert CANONICAL.fullmatch(f"e1 a b value={{{once}}}")


@settings(max_examples=100)
@given(st.text(alphabet="ab(),+-*/^<>=!&|?:.{}'v0123456789e \t", max_size=60))
def test_any_text_is_an_expression_or_refused(text: str) -> None:
    with contextlib.suppress(CardError):
        assert CANONICAL.fullmatch(f"e1 a b value={{{folded(text)}}}")


@settings(max_examples=200)
@given(
    st.binary(max_size=200) | st.text(max_size=200).map(lambda text: text.encode("utf-8", "surrogatepass"))
)
def test_any_bytes_are_screened_or_refused(tmp_path_factory: pytest.TempPathFactory, data: bytes) -> None:
    check(data, tmp_path_factory.getbasetemp())


def test_mutated_models_are_screened_or_refused(tmp_path: Path) -> None:
    """A short run of the fuzzer: ``python -m tests.fuzzing.screener`` makes long ones."""
    assert len(corpus()) > 100
    counts = run(300, 20, tmp_path)
    assert counts["screened"] + counts["refused"] == 300
    assert counts["screened"] >= 5


def test_the_deepest_expression_allowed_is_read_back(tmp_path: Path) -> None:
    depth = Limits().expression_depth
    text = "v(a)"
    for _ in range(depth - 1):
        text = f"-({text})"
    assert folded(folded(text)) == folded(text)
    with pytest.raises(CardError, match="brackets are too deep"):
        folded(f"-({text})")
    ladder = "".join(f"v(a)>{index} ? {index} : " for index in range(depth - 2)) + "0"
    assert folded(folded(ladder)) == folded(ladder)
    assert isinstance(Number(1.0).depth, int)
