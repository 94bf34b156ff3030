"""Turns a report's contents into one HTML page: no script, no outside resource, every text escaped."""

from __future__ import annotations

from importlib.resources import files
from typing import Any

#: stands in every page, so that only a report is ever overwritten by a report
GENERATOR = '<meta name="generator" content="halfdrop report">'


def render(contents: dict[str, Any]) -> str:
    """Return the page.

    Args:
        contents: as `report_contents` gathered them.
    """
    from jinja2 import Environment, FunctionLoader, StrictUndefined

    room = files("controller.report")
    environment = Environment(
        loader=FunctionLoader(lambda name: (room / name).read_text(encoding="utf-8")),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
        keep_trailing_newline=True,
        finalize=_visible,
    )
    return environment.get_template("page.html.j2").render(contents)


def _visible(value: Any) -> Any:
    """Control characters, among them those that turn the direction of text, become a replacement mark."""
    if type(value) is not str:  # a Markup is our own
        return value
    return "".join(c if c.isprintable() or c in "\n\t" else "\N{REPLACEMENT CHARACTER}" for c in value)
