"""Our look: colours as CSS variables with a light and a dark value, and a mark per scenario.

Figures never carry a final colour. They are drawn with stand-in colours (:func:`stand_in`) that are
replaced by ``var(--name)`` afterwards, so one picture is readable on light, dark and paper.
Scenario colours are told apart under the three kinds of dichromacy (simulated by Machado, Oliveira &
Fernandes 2009) and every scenario has a mark of its own besides its colour.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from stresskit.runs.records import WEIGHTED

#: name -> (light, dark). "s0".. are scenarios in the order of the study.
COLOURS: dict[str, tuple[str, str]] = {
    "paper": ("#f6f4ee", "#14191b"),
    "card": ("#ffffff", "#1a2124"),
    "ink": ("#1b2326", "#e9e6df"),
    "soft": ("#55626a", "#a9b4b9"),
    "line": ("#ddd8cc", "#354045"),
    "wash": ("#efece3", "#222b2f"),
    "accent": ("#0d5560", "#79c9d2"),
    "band": ("#9fb4b8", "#5c7177"),
    "warn": ("#8f4300", "#ffb26b"),
    "good": ("#1c6a3a", "#7fd49c"),
    "s0": ("#1d5fa6", "#6ea8ff"),
    "s1": ("#d1440c", "#ff8a4c"),
    "s2": ("#12937f", "#a8f0dc"),
    "s3": ("#5b0f3f", "#d6478f"),
    "s4": ("#c9788f", "#f5e04a"),
    "s5": ("#8b3dff", "#9a5cff"),
}
N_SCENARIO_COLOURS = 6

#: matplotlib marker -> the same mark as an SVG path around (0, 0) for legends.
MARKERS: dict[str, str] = {
    "o": "M-3.4 0a3.4 3.4 0 1 0 6.8 0a3.4 3.4 0 1 0-6.8 0z",
    "s": "M-3-3H3V3H-3z",
    "^": "M0-4L3.8 3H-3.8z",
    "D": "M0-4.2L4.2 0L0 4.2L-4.2 0z",
    "v": "M0 4L3.8-3H-3.8z",
    "P": "M-1.3-4H1.3V-1.3H4V1.3H1.3V4H-1.3V1.3H-4V-1.3H-1.3z",
    "X": "M-4-2L-2-4L0-2L2-4L4-2L2 0L4 2L2 4L0 2L-2 4L-4 2L-2 0z",
}


@dataclass(frozen=True, slots=True)
class Mark:
    """How one scenario is drawn: name, CSS variable of its colour, matplotlib marker, dash pattern, place in the study."""

    name: str
    colour: str
    marker: str
    dotted: bool = False
    place: int = 0

    @property
    def path(self) -> str:
        """The mark for a legend, as an SVG path."""
        return MARKERS[self.marker]


def marks(scenarios: Sequence[str]) -> tuple[Mark, ...]:
    """A mark per scenario, by position; the weighted mean is a dotted line in the colour of the text.

    Beyond six scenarios colours come again, but with another marker (42 pairs before one repeats).
    """
    shapes = tuple(MARKERS)
    out = []
    k = 0
    for place, name in enumerate(scenarios):
        if name == WEIGHTED:
            out.append(Mark(name, "ink", "o", dotted=True, place=place))
            continue
        shape = shapes[(k + k // (N_SCENARIO_COLOURS * len(shapes))) % len(shapes)]
        out.append(Mark(name, f"s{k % N_SCENARIO_COLOURS}", shape, place=place))
        k += 1
    return tuple(out)


def stand_in(name: str) -> str:
    """The colour that stands for a CSS variable while a figure is drawn."""
    return f"#fe{list(COLOURS).index(name):02x}01"


def replace_stand_ins(svg: str) -> str:
    """Stand-in colours of a drawn figure become CSS variables."""
    for name in COLOURS:
        svg = svg.replace(stand_in(name), f"var(--{name})")
    return svg


def css_variables() -> str:
    """Light values for everything, dark ones for screens that ask for them; paper is always light."""
    light = "".join(f"--{name}:{pair[0]};" for name, pair in COLOURS.items())
    dark = "".join(f"--{name}:{pair[1]};" for name, pair in COLOURS.items())
    return (
        f":root{{color-scheme:light;{light}}}\n"
        f"@media screen and (prefers-color-scheme:dark){{:root{{color-scheme:dark;{dark}}}}}\n"
    )
