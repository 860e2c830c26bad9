"""What tells the cases of a sweep apart: the axes that vary, with their values as the spec wrote them."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from typing import TYPE_CHECKING, Any, Protocol

if TYPE_CHECKING:
    import pandas as pd

LABEL_TOLERANCE = 1e-9
"""Relative distance within which a number read from cases.csv is the axis value that the spec wrote."""


class AxisValues(Protocol):
    """An axis as the sweep expands it: a path such as ``source.imbalance``, its values, and their texts."""

    @property
    def path(self) -> str:
        """Dotted path of the key that varies."""

    @property
    def values(self) -> Sequence[Any]:
        """Values: SI floats, or names."""

    @property
    def labels(self) -> Sequence[str]:
        """Text of each value as written in the spec."""


def axis_columns(cases: pd.DataFrame, axes: Iterable[AxisValues]) -> dict[str, list[str]]:
    """Write out the axis values of each case.

    Parameters
    ----------
    cases : DataFrame
        One row per case with a column per axis, named by its path.
    axes : iterable of AxisValues
        The sweep's axes, in the spec's order.

    Returns
    -------
    dict of str to list of str
        Path to one text per row: as the spec wrote it, or the number where it is none of the axis's values.

    Raises
    ------
    ValueError
        Where ``cases`` has no column for an axis.
    """
    columns = {}
    for axis in axes:
        if axis.path not in cases.columns:
            raise ValueError(
                f"cases must have a column for the axis {axis.path}; it has {', '.join(cases.columns)}"
            )
        written = {value: _label_of(value, axis) for value in cases[axis.path].unique().tolist()}
        columns[axis.path] = [written[value] for value in cases[axis.path].tolist()]
    return columns


def _label_of(value: Any, axis: AxisValues) -> str:
    for candidate, label in zip(axis.values, axis.labels, strict=True):
        if isinstance(value, (int, float)) and not isinstance(candidate, str):
            if abs(value - float(candidate)) <= LABEL_TOLERANCE * abs(float(candidate)):
                return label
        elif value == candidate:
            return label
    return f"{value:g}" if isinstance(value, float) else str(value)


def varying(columns: Mapping[str, Sequence[str]]) -> tuple[dict[str, list[str]], dict[str, str]]:
    """Part the axes that vary from those that have one value in every case.

    Parameters
    ----------
    columns : mapping of str to sequence of str
        Path to one text per case, as from `axis_columns`.

    Returns
    -------
    vary : dict of str to list of str
        The axes with more than one text.
    fixed : dict of str to str
        The others, with their text.
    """
    vary = {path: list(texts) for path, texts in columns.items() if len(set(texts)) > 1}
    fixed = {path: texts[0] for path, texts in columns.items() if len(set(texts)) == 1}
    return vary, fixed


def short_names(paths: Sequence[str]) -> dict[str, str]:
    """Shorten dotted paths as far as they stay different: ``source.imbalance`` becomes ``imbalance``.

    Parameters
    ----------
    paths : sequence of str
        Dotted paths, all different.

    Returns
    -------
    dict of str to str
        Path to its shortest ending that no other path shares.
    """
    names = {}
    for path in paths:
        keys = path.split(".")
        for length in range(1, len(keys) + 1):
            ending = ".".join(keys[-length:])
            if not any(other != path and f".{other}".endswith(f".{ending}") for other in paths):
                break
        names[path] = ending
    return names


def case_texts(
    columns: Mapping[str, Sequence[str]], joint: str = ", ", rows: Sequence[int] | None = None
) -> list[str]:
    """Write one text per case from the axes that vary: ``quiet-bipolar, imbalance 10``.

    Parameters
    ----------
    columns : mapping of str to sequence of str
        Path to one text per case, as from `axis_columns`.
    joint : str
        What stands between the axes.
    rows : sequence of int, optional
        The cases wanted, by their place; all where not given.

    Returns
    -------
    list of str
        One text per case wanted. A value that starts with a digit, a sign or a point carries its axis's name. Empty
        texts where no axis varies.
    """
    vary, _ = varying(columns)
    count = len(next(iter(columns.values()))) if columns else 0
    wanted = range(count) if rows is None else rows
    names = short_names(list(columns))
    texts: list[list[str]] = [[] for _ in wanted]
    for path, values in vary.items():
        for text, value in zip(texts, [values[row] for row in wanted], strict=True):
            named = value[:1].isdigit() or value[:1] in "+-.−"
            text.append(f"{names[path].replace('_', ' ')} {value}" if named else value)
    return [joint.join(text) for text in texts]
