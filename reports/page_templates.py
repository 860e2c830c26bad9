"""The templates that pages are made from, and what stands beside them."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from functools import cache
from importlib.resources import files
from typing import Any

from jinja2 import Environment, FunctionLoader, StrictUndefined, Template
from markupsafe import Markup

__all__ = ["page_source", "page_template"]


@cache
def page_source(name: str) -> str:
    """Read a file beside the templates, such as a page's style.

    Parameters
    ----------
    name : str
        Its name.

    Returns
    -------
    str
        Its text.
    """
    return files("modepair.reports").joinpath("templates", name).read_text(encoding="utf-8")


def page_template(name: str, *, html: bool, filters: Mapping[str, Callable[..., Any]] = {}) -> Template:
    """Compile a template; a name that it uses and does not get is an error.

    Parameters
    ----------
    name : str
        Its file. In it, ``raw(name)`` is the text of a file beside it, not escaped.
    html : bool
        Whether the page is HTML: what is put in is escaped, and lines of tags alone leave no blank lines. Markdown is
        escaped by who fills it in.
    filters : mapping of str to callable
        What it calls by name.

    Returns
    -------
    jinja2.Template
        To render; keep it, as compiling takes longer.
    """
    environment = Environment(
        loader=FunctionLoader(page_source),
        autoescape=html,
        trim_blocks=html,
        lstrip_blocks=html,
        keep_trailing_newline=not html,
        undefined=StrictUndefined,
    )
    environment.filters.update(filters)
    environment.globals["raw"] = lambda beside: Markup(page_source(beside))
    return environment.get_template(name)
