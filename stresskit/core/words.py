"""Text that comes from data or files, made harmless for a terminal."""

from __future__ import annotations


def visible(text: str, *, lines: bool = False) -> str:
    r"""The text with control characters written out (``\x1b`` for an escape), so that none can steer a terminal.

    Signs that turn the direction of writing or take no room count as control characters. ``lines`` keeps line ends.
    """
    kept = "\n" if lines else ""
    return "".join(c if c.isprintable() or c in kept else repr(c)[1:-1] for c in text)
