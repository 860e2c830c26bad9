"""Lines of alterations: they say what differs, in every copy, to the last digit, and no more."""

from __future__ import annotations

from itertools import pairwise

import numpy as np
from hypothesis import given
from hypothesis import strategies as st

from modepair.circuits.deck import Deck
from modepair.runner.alterations import Alterations
from modepair.runner.engine import LINE_LENGTH

COUNT = 60
DECK = Deck("", tuple((f"alter r{n}_c=", f"alter r{n}_d=") for n in range(COUNT)), np.zeros(COUNT))

VALUES = st.lists(
    st.one_of(st.just(1.0), st.floats(allow_nan=False, allow_infinity=False)), min_size=COUNT, max_size=COUNT
)


@given(VALUES, VALUES)
def test_what_differs_is_set_in_both_copies_and_reads_back_the_same(
    old: list[float], new: list[float]
) -> None:
    lines = Alterations(DECK).between(np.array(old), np.array(new))
    assert all(len(line) <= LINE_LENGTH for line in lines)
    commands = [command.partition("=") for line in lines for command in line.split(";")]
    expected = [
        (f"alter r{n}_{copy}", value)
        for n, (was, value) in enumerate(zip(old, new, strict=True))
        if was != value
        for copy in "cd"
    ]
    assert [(name, float(value)) for name, _, value in commands] == expected


def test_a_pattern_seen_before_takes_the_values_of_its_own_case() -> None:
    alterations = Alterations(DECK)
    first, second, third = (np.full(COUNT, value) for value in (1.0, 2.0, 3.0))
    assert alterations.between(first, second) != alterations.between(second, third)
    assert alterations.between(third, third) == []
    lone = third.copy()
    lone[7] = -0.1
    assert alterations.between(third, lone) == [
        "alter r7_c=-0.10000000000000001;alter r7_d=-0.10000000000000001"
    ]


def test_lines_are_filled() -> None:
    lines = Alterations(DECK).between(np.zeros(COUNT), np.full(COUNT, -1.2345678901234567e-300))
    assert len(lines) > 1
    for line, following in pairwise(lines):
        assert len(f"{line};{following.split(';')[0]}") >= LINE_LENGTH
