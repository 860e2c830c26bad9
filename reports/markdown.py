"""Markdown: text escaped, and columns as a table."""

from __future__ import annotations

import re
from collections.abc import Sequence

from modepair.reports.tables import Column

__all__ = ["escape_markdown", "markdown_table"]

_MARKS = re.compile(r"([\\`*_\[\]<>|~&$])")


def escape_markdown(text: object) -> str:
    """Escape a text so that Markdown shows it as it is, on one line, inside a table too.

    Parameters
    ----------
    text : object
        Anything with a text.

    Returns
    -------
    str
        The text with white space runs as one blank and a backslash before each character that Markdown or
        HTML could take as a mark; where it starts the text, before that of a heading or a list too.
    """
    line = " ".join(str(text).split())
    line = _MARKS.sub(r"\\\1", line)
    line = re.sub(r"^(\d+)([.)])(?=\s|$)", r"\1\\\2", line)
    return re.sub(r"^([-+](?!\d)|[=#])", r"\\\1", line)


def markdown_table(columns: Sequence[Column]) -> str:
    """Write columns as a table.

    Parameters
    ----------
    columns : sequence of Column
        Plain text; it is escaped here.

    Returns
    -------
    str
        Markdown, without a newline at its end.
    """
    rows = [[escape_markdown(column.header) for column in columns]]
    rows.append([":---" if column.justify == "left" else "---:" for column in columns])
    cells = zip(*(column.cells for column in columns), strict=True)
    rows += [[escape_markdown(cell) for cell in row] for row in cells]
    return "\n".join(f"| {' | '.join(row)} |" for row in rows)
