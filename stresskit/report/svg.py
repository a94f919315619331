"""matplotlib to a small inline SVG that carries no colour, font, date or identifier of its own.

A canvas object is used directly (no pyplot, no global state that outlives a call), with matplotlib's
defaults restored inside the call, so that a user's matplotlibrc changes nothing. Text stays text. No
string from data is drawn: names stand in the HTML around the picture, where they are escaped and can wrap.
"""

from __future__ import annotations

import html
import io
import re
from collections.abc import Iterator
from contextlib import contextmanager
from typing import Any

from markupsafe import Markup
from matplotlib import rc_context, rcdefaults, rcParams
from matplotlib.axes import Axes
from matplotlib.backends.backend_svg import FigureCanvasSVG
from matplotlib.figure import Figure
from matplotlib.ticker import FuncFormatter, MaxNLocator

from stresskit.report.readout import Readout
from stresskit.report.style import replace_stand_ins, stand_in

_SETTINGS: Any = {
    "svg.hashsalt": "stresskit",
    "svg.fonttype": "none",
    "font.family": ["DejaVu Sans"],
    "font.size": 12.0,
    "path.simplify_threshold": 0.2,
    "axes.formatter.use_mathtext": False,
    "text.parse_math": False,
    "figure.dpi": 72.0,
}
_NO_METADATA = {"Date": None, "Creator": None, "Format": None, "Type": None}


@contextmanager
def settings() -> Iterator[None]:
    """matplotlib's defaults and ours, put back afterwards."""
    with rc_context():
        rcdefaults()
        rcParams.update(_SETTINGS)
        yield


def canvas(width: int, height: int) -> tuple[Figure, Axes]:
    """An empty panel of that many pixels with our axes: only lines across, ticks as plain text."""
    figure = Figure(figsize=(width / 72, height / 72), dpi=72)
    FigureCanvasSVG(figure)
    left, right, bottom, top = 48 / width, 14 / width, 30 / height, 10 / height
    axes = figure.add_axes((left, bottom, 1 - left - right, 1 - bottom - top))
    for side in ("top", "right", "left"):
        axes.spines[side].set_visible(False)
    axes.spines["bottom"].set_color(stand_in("soft"))
    axes.grid(axis="y", color=stand_in("line"), linewidth=1)
    axes.set_axisbelow(True)
    axes.tick_params(axis="y", length=0, labelcolor=stand_in("soft"), pad=6)
    axes.tick_params(axis="x", length=4, color=stand_in("soft"), labelcolor=stand_in("soft"))
    axes.yaxis.set_major_locator(MaxNLocator(nbins=max(4, height // 50)))
    axes.xaxis.set_major_locator(MaxNLocator(nbins=max(3, width // 75), integer=True, steps=[1, 2, 5, 10]))
    axes.xaxis.set_major_formatter(FuncFormatter(lambda x, _: f"{x:.0f}"))
    return figure, axes


def percent_axis(axes: Axes) -> None:
    """y ticks of shares as percent, with as many decimals as the ticks need."""
    axes.yaxis.set_major_formatter(FuncFormatter(lambda y, _: f"{round(100 * y, 6):g}%"))


def finish(figure: Figure, *, key: str, alt: str, values: Readout | None = None) -> Markup:
    """The figure as inline SVG. ``key`` makes its ids unique in the page; ``alt`` is its text in words.

    values  what a pointer or the arrow keys read from it where the page's script runs
    """
    text = io.StringIO()
    figure.savefig(text, format="svg", transparent=True, metadata=_NO_METADATA)
    plot = "" if values is None else f" data-plot='{values.attribute(figure.axes[0])}'"
    return Markup(_inline(text.getvalue(), key=key, alt=alt, plot=plot))


def of_scenario(place: int) -> str:
    """The group id by which a switch finds what belongs to the scenario at that place; see ``_identifier``."""
    return f"scenario-{place}"


def _identifier(name: str, *, key: str, used: set[str]) -> str:
    if name.startswith("scenario-"):
        return f' data-s="{name.removeprefix("scenario-")}"'
    return f' id="{key}-{name}"' if name in used else ""


def _inline(svg: str, *, key: str, alt: str, plot: str) -> str:
    box = re.search(r'viewBox="([^"]+)"', svg)
    if box is None:
        raise ValueError("matplotlib wrote an SVG without a viewBox")
    body = svg[svg.index(">", svg.index("<svg")) + 1 : svg.rindex("</svg>")]
    body = re.sub(r"<style.*?</style>", "", body, flags=re.S)
    used = set(re.findall(r'(?:xlink:href="#|url\(#)([^")]+)', body))
    body = re.sub(r' id="([^"]*)"', lambda m: _identifier(m[1], key=key, used=used), body)
    body = body.replace('xlink:href="#', f'href="#{key}-').replace("url(#", f"url(#{key}-")
    body = re.sub(r" font-family: [^;\"]*;", "", body)
    body = re.sub(r' transform="rotate\(-0 [^"]*"', "", body)
    body = re.sub(r'(?<= )((?:d|x|y|width|height)="[^"]*")', lambda m: _shorter(m[1]), body)
    body = re.sub(r"\s*\n\s*", " ", body)
    body = re.sub(r"(?<=>) (?=<)|<defs> ?</defs>", "", body)
    body = _without_empty_groups(body)
    words = html.escape(alt, quote=True)
    body = replace_stand_ins(body.strip())
    return f'<svg viewBox="{box[1]}" role="img" aria-label="{words}"{plot}>{body}</svg>'


def _shorter(attribute: str) -> str:
    """Coordinates to a tenth of a pixel's tenth: two decimals."""
    return re.sub(r"-?\d+\.\d{3,}", lambda m: f"{float(m[0]):.2f}".rstrip("0").rstrip("."), attribute)


def _without_empty_groups(body: str) -> str:
    while True:
        less = re.sub(r"<g>((?:(?!<g[ >])(?!</g>).)*)</g>", r"\1", body, flags=re.S)
        if less == body:
            return body
        body = less
