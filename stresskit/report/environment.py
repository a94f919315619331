"""Templates of the report and how they are rendered: escaping on, undefined names refused, style inline."""

from __future__ import annotations

import functools
import re
from typing import Any

from jinja2 import Environment, PackageLoader, StrictUndefined
from markupsafe import Markup

from stresskit.report.reading import name_of
from stresskit.report.style import css_variables

#: Characters of names that would act on the page instead of being seen: control characters get their pictures, those that
#: turn the direction of writing for all that follows a replacement mark.
_SEEN = {k: 0x2400 + k for k in range(32) if chr(k) not in "\n\t"} | {0x7F: 0x2421}
_SEEN |= dict.fromkeys([*range(0x80, 0xA0), *range(0x202A, 0x202F), *range(0x2066, 0x206A)], 0xFFFD)


def render(template: str, **context: Any) -> str:
    """A page as text; the template is given ``style`` besides."""
    style = Markup(css_variables() + source("report.css"))
    return _environment().get_template(template).render(style=style, **context).translate(_SEEN)


def source(name: str) -> str:
    """A file of the templates as it stands."""
    environment = _environment()
    if environment.loader is None:
        raise ValueError("the report's templates have no loader")
    return environment.loader.get_source(environment, name)[0]


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
