"""Specs broken at random, line by line, for the tests that a reader crashes on none."""

from __future__ import annotations

from collections.abc import Sequence

from hypothesis import strategies as st


def broken(data: st.DataObject, lines: Sequence[str], words: Sequence[str], letters: str, most: int) -> str:
    """Break some lines of a spec.

    Parameters
    ----------
    data : DataObject
        Draws what is done.
    lines : sequence of str
        The spec's lines, each with its end.
    words : sequence of str
        What stands in the place of a value.
    letters : str
        What is exchanged in a line.
    most : int
        Lines that are broken at the most.
    """
    changed = list(lines)
    for _ in range(data.draw(st.integers(1, most))):
        index = data.draw(st.integers(0, len(changed) - 1))
        change = data.draw(st.sampled_from(["drop", "value", "double", "cut", "key"]))
        line = changed[index]
        if change == "drop":
            changed[index] = ""
        elif change == "value":
            changed[index] = f"{line.partition(':')[0]}: {data.draw(st.sampled_from(words))}\n"
        elif change == "double":
            changed[index] = line + line
        elif change == "cut":
            changed[index] = line[: data.draw(st.integers(0, len(line)))] + "\n"
        else:
            changed[index] = line.replace(data.draw(st.sampled_from(list(letters))), "z", 1)
    return "".join(changed)
