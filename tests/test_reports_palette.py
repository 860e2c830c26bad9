"""Curve styles: told apart by lightness and dashes, and by hue also with colour-blindness."""

import itertools

import numpy as np
import pytest

from modepair.reports.palette import DASHES, HUES, RAMP, SHADED_HUES, curve_styles, mix

# Full protanopia and deuteranopia in linear RGB: Machado, Oliveira and Fernandes, 2009 (from memory).
SIGHTS = {
    "normal": np.eye(3),
    "protanopia": np.array(
        [[0.152286, 1.052583, -0.204868], [0.114503, 0.786281, 0.099216], [-0.003882, -0.048116, 1.051998]]
    ),
    "deuteranopia": np.array(
        [[0.367322, 0.860646, -0.227968], [0.280085, 0.672501, 0.047413], [-0.011820, 0.042940, 0.968881]]
    ),
}


def lab(colour: str, sight: str = "normal") -> np.ndarray:
    """CIELAB (D65) of an sRGB colour (IEC 61966-2-1 and CIE 15, from memory)."""
    coded = np.array([int(colour[i : i + 2], 16) for i in (1, 3, 5)]) / 255
    linear = np.where(coded <= 0.04045, coded / 12.92, ((coded + 0.055) / 1.055) ** 2.4)
    seen = np.clip(SIGHTS[sight] @ linear, 0, 1)
    to_xyz = np.array([[0.4124, 0.3576, 0.1805], [0.2126, 0.7152, 0.0722], [0.0193, 0.1192, 0.9505]])
    xyz = to_xyz @ seen
    f = np.cbrt(xyz / [0.9505, 1.0, 1.089])
    return np.array([116 * f[1] - 16, 500 * (f[0] - f[1]), 200 * (f[1] - f[2])])


def test_white_and_black():
    assert lab("#ffffff") == pytest.approx([100, 0, 0], abs=0.1)


@pytest.mark.parametrize("sight", SIGHTS)
def test_hues_differ_in_every_sight(sight):
    # A delta E of 10 is told apart at a glance (common practice, no source); thin lines need more.
    for one, other in itertools.combinations(HUES, 2):
        assert np.linalg.norm(lab(one, sight) - lab(other, sight)) > 20


def test_hues_part_in_grey():
    lightness = sorted(lab(colour)[0] for colour in HUES)
    assert np.diff(lightness).min() > 6
    assert lightness[-1] < 80  # a thin line still shows on white


def test_the_first_three_hues_part_well_in_grey():
    assert np.diff(sorted(lab(colour)[0] for colour in HUES[:3])).min() > 15


def test_shading_keeps_the_hue_of_the_first_axis():
    assert sorted(SHADED_HUES) == sorted(HUES)
    styles = curve_styles([(a, str(b)) for a in "xyz" for b in range(9)])
    for first in range(3):
        lightness = [lab(style.colour)[0] for style in styles[9 * first : 9 * first + 9]]
        assert np.all(np.diff(lightness) > 0)


def test_ramp_gets_lighter():
    assert np.diff([lab(colour)[0] for colour in RAMP]).min() > 6


def test_one_curve_is_solid():
    (style,) = curve_styles([()])
    assert style.dashes == ()


def test_hue_follows_the_first_axis_and_dashes_the_others():
    keys = [(a, b) for a in "xyz" for b in "12"]
    styles = curve_styles(keys)
    assert [s.colour for s in styles] == [HUES[i] for i in (0, 0, 1, 1, 2, 2)]
    assert [s.dashes for s in styles] == [DASHES[i] for i in (0, 1, 0, 1, 0, 1)]


def test_one_axis_sets_both():
    styles = curve_styles([(a,) for a in "abcde"])
    assert len({s.colour for s in styles}) == len({s.dashes for s in styles}) == 5


@pytest.mark.parametrize(("first", "second"), [(1, 1), (2, 6), (3, 10), (8, 5), (10, 4), (30, 1), (4, 9)])
def test_every_curve_has_its_own_style(first, second):
    keys = [(str(a), str(b)) for a in range(first) for b in range(second)]
    assert len(set(curve_styles(keys))) == len(keys)


def test_mix():
    assert mix("#000000", "#ffffff", 0.0) == "#000000"
    assert mix("#000000", "#ffffff", 1.0) == "#ffffff"
    assert mix("#102030", "#304050", 0.5) == "#203040"
