"""The templates of reports and hand-overs, from inside the package, zipped or not."""

from __future__ import annotations

import re
from collections.abc import Mapping
from datetime import datetime
from functools import cache
from importlib.resources import files
from typing import TYPE_CHECKING, Any

from diag.record.narrate import percent

if TYPE_CHECKING:
    from jinja2 import Environment

_MARKDOWN = re.compile(r"([\\`*_\[\]<>#|~])")
_UNSAFE = re.compile(r"[\x00-\x08\x0b-\x1f\x7f-\x9f]")


def rendered(template: str, values: Mapping[str, Any]) -> str:
    """A template of `diag/record/templates` filled in; HTML and SVG escape every value."""
    return _environment().get_template(template).render(values)


@cache
def _environment() -> Environment:
    # Imported on first use: most sessions never make a report.
    from jinja2 import Environment, FunctionLoader, StrictUndefined

    environment = Environment(
        loader=FunctionLoader(_source),
        autoescape=lambda name: name is not None and not name.endswith(".md.j2"),
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
        keep_trailing_newline=True,
    )
    environment.filters |= {"percent": percent, "md": plain_markdown, "moment": moment}
    return environment


def _source(name: str) -> str | None:
    file = files("diag.record") / "templates" / name
    return file.read_text(encoding="utf-8") if file.is_file() else None


def plain_markdown(text: object) -> str:
    """Text as it is, in Markdown: nothing in it marks up, links or breaks a table."""
    escaped = _MARKDOWN.sub(r"\\\1", _UNSAFE.sub("\N{REPLACEMENT CHARACTER}", str(text)))
    escaped = escaped.replace("&", "&amp;")
    return " ".join(escaped.split())


def moment(when: datetime) -> str:
    """A time with its zone, to the minute."""
    return when.isoformat(sep=" ", timespec="minutes")
