"""The pages people open: templates, style sheets and scripts of our own, without a build step."""

from __future__ import annotations

import re
from collections.abc import Mapping
from functools import cache
from importlib.resources import files
from typing import Any

from jinja2 import DictLoader, Environment, StrictUndefined
from markupsafe import Markup, escape

_CODE = re.compile(r"`([^`]+)`")


def read(name: str) -> bytes:
    """A file of this package."""
    return files("assignable.web").joinpath(name).read_bytes()


def render(template: str, values: Mapping[str, Any]) -> str:
    """A page; whatever is put into it is escaped, unless it is Markup."""
    return _environment().get_template(template).render(values)


def marked(text: str) -> Markup:
    """A text of the contract, whose only marks are names between backticks."""
    return Markup(_CODE.sub(r"<code>\1</code>", str(escape(text))))  # noqa: S704 - escaped before


@cache
def _environment() -> Environment:
    folder = files("assignable.web").joinpath("templates")
    texts = {file.name: file.read_text(encoding="utf-8") for file in folder.iterdir()}
    made = Environment(
        loader=DictLoader(texts),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    made.filters["marked"] = marked
    return made
