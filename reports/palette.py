"""Colours and dashes of curves: told apart by lightness and line style as well as by hue.

The eight colours were searched for the largest least colour difference, CIELAB delta E, as seen with normal
sight, with protanopia and with deuteranopia (the simulation matrices of Machado, Oliveira and Fernandes,
2009, from memory); their lightness values stand in even steps, so that they also part in grey print.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

HUES = ("#008a9e", "#551400", "#69ba7e", "#6352bb", "#ad8a38", "#652153", "#75cad5", "#7d3b43")
"""Colours for the values of the first axis, in the order of use: the first ones part best in grey."""

SHADED_HUES = ("#008a9e", "#551400", "#6352bb", "#ad8a38", "#69ba7e", "#652153", "#75cad5", "#7d3b43")
"""The same, in the order of use where lightness tells other axes: the first ones part best in hue."""

RAMP = ("#551400", "#652153", "#6352bb", "#008a9e", "#75cad5")
"""Dark to light, for more values than there are hues."""

DASHES: tuple[tuple[float, ...], ...] = (
    (),
    (5.0, 2.0),
    (1.0, 1.4),
    (7.0, 2.0, 1.0, 2.0),
    (9.0, 3.0),
    (4.0, 1.5, 1.0, 1.5, 1.0, 1.5),
)
"""On and off lengths in line widths; the empty one is a solid line."""


@dataclass(frozen=True)
class CurveStyle:
    """How a curve is drawn.

    Parameters
    ----------
    colour : str
        ``#rrggbb``.
    dashes : tuple of float
        On and off lengths in line widths; empty for a solid line.
    """

    colour: str
    dashes: tuple[float, ...] = ()


def curve_styles(keys: Sequence[tuple[str, ...]]) -> list[CurveStyle]:
    """Give each curve a style by its axis values.

    Parameters
    ----------
    keys : sequence of tuple of str
        Per curve, its text on each axis that varies, in the spec's order; empty tuples where none varies.

    Returns
    -------
    list of CurveStyle
        The hue follows the first axis; the line style follows the others where there are few of their values,
        and the lightness where there are more. One axis alone sets hue and line style together.
    """
    firsts = list(dict.fromkeys(key[:1] for key in keys))
    others = list(dict.fromkeys(key[1:] for key in keys))
    colours = _colours(len(firsts), shaded=len(others) > len(DASHES))
    styles = []
    for key in keys:
        first, other = firsts.index(key[:1]), others.index(key[1:])
        colour = colours[first]
        if len(others) == 1:
            dashes = DASHES[first % len(DASHES)] if len(firsts) > 1 else ()
        elif len(others) <= len(DASHES):
            dashes = DASHES[other]
        else:
            dashes = ()
            colour = _shade(colour, other / (len(others) - 1))
        styles.append(CurveStyle(colour, dashes))
    return styles


def _colours(count: int, shaded: bool) -> list[str]:
    if count <= len(HUES):
        return list((SHADED_HUES if shaded else HUES)[:count])
    return [_along(RAMP, index / (count - 1)) for index in range(count)]


def _along(stops: Sequence[str], share: float) -> str:
    place = share * (len(stops) - 1)
    index = min(int(place), len(stops) - 2)
    return mix(stops[index], stops[index + 1], place - index)


def _shade(colour: str, share: float) -> str:
    """Darken (share 0) or lighten (share 1) a colour."""
    return mix(mix(colour, "#000000", 0.3), mix(colour, "#ffffff", 0.55), share)


def mix(first: str, second: str, share: float) -> str:
    """Mix two colours.

    Parameters
    ----------
    first, second : str
        ``#rrggbb``.
    share : float
        Share of the second, 0 to 1.

    Returns
    -------
    str
        ``#rrggbb``, linear in the coded values.
    """
    pairs = [(int(first[i : i + 2], 16), int(second[i : i + 2], 16)) for i in (1, 3, 5)]
    return "#" + "".join(f"{round(a + (b - a) * share):02x}" for a, b in pairs)
