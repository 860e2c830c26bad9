"""Curves of cases as plots take them: what they refuse, and which cases are the lowest and the highest."""

import numpy as np
import pytest

from modepair.reports.case_curves import CaseCurves
from modepair.reports.pairs import ModePair
from tests.synthetic_cases import one_pole_cases


def test_gains_and_labels_must_fit():
    made = one_pole_cases(1, 2)
    with pytest.raises(ValueError, match=r"of the shape \(n, F\) with n at least 1, not \(123,\)"):
        CaseCurves(
            ModePair(made.pair.frequency_hz, made.pair.common_gain[0], made.pair.differential_gain[0]), {}
        )
    with pytest.raises(ValueError, match=r"labels of stage\.opamp must be one per case, 2, not 1"):
        CaseCurves(made.pair, {"stage.opamp": ["a"]})


def test_cases_are_numbered_from_1_where_nothing_else_is_said():
    pair = one_pole_cases(1, 2).pair
    assert list(CaseCurves(pair, {}).numbers) == [1, 2]
    assert list(CaseCurves(pair, {}, case=[7, 9]).numbers) == [7, 9]
    assert CaseCurves(pair, {}).texts == ["", ""]


def test_a_case_at_the_floor_is_the_highest_only_if_all_are():
    pair = one_pole_cases(1, 3, perfect=(2,)).pair
    lowest, highest = CaseCurves(pair, {}).extremes
    below = pair.cmrr_db.min(axis=1)
    assert lowest == np.argmin(below)
    assert np.argmax(below) == 1 != highest
    every = one_pole_cases(1, 3, perfect=(1, 2, 3)).pair
    assert CaseCurves(every, {}).extremes[1] == np.argmax(every.cmrr_db.min(axis=1))


def test_a_rank_decides():
    pair = one_pole_cases(1, 3).pair
    assert CaseCurves(pair, {}, rank_db=[5.0, 1.0, 9.0]).extremes == (1, 2)
