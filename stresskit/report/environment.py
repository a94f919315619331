"""Templates of the report and how they are rendered: escaping on, undefined names refused, style inline."""

from __future__ import annotations

import functools
import re
from typing import Any

from jinja2 import Environment, PackageLoader, StrictUndefined
from markupsafe import Markup

from stresskit.report.headline import name_of
from stresskit.report.style import css_variables


def render(template: str, **context: Any) -> str:
    """A page as text; the template is given ``style`` besides."""
    environment = _environment()
    style = environment.loader.get_source(environment, "report.css")[0] if environment.loader else ""
    return environment.get_template(template).render(style=Markup(css_variables() + style), **context)


@functools.cache
def _environment() -> Environment:
    environment = Environment(
        loader=PackageLoader("stresskit.report", "templates"),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
        keep_trailing_newline=True,
    )
    environment.filters["name_of"] = name_of
    environment.filters["breakable"] = breakable
    return environment


def breakable(words: str) -> Markup:
    """The words escaped, with a place to break after the joints of long names."""
    parts = re.split(r"(?<=[_/:\[])", words)
    return Markup("<wbr>").join(parts)
