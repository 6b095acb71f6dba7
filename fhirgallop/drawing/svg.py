"""SVG by hand: escaped elements with short numbers. No scripts, no styles of its own, nothing fetched."""

from __future__ import annotations

from collections.abc import Iterable
from html import escape


def element(name: str, *inside: str, **attributes: str | float) -> str:
    """One element; `inside` is markup already. Attributes: `stroke_width` for `stroke-width`, `class_`."""
    written = "".join(
        f' {key.rstrip("_").replace("_", "-")}="{_value(value)}"' for key, value in attributes.items()
    )
    return f"<{name}{written}>{''.join(inside)}</{name}>" if inside else f"<{name}{written}/>"


def words(x: float, y: float, text: str, **attributes: str | float) -> str:
    """A line of text, escaped."""
    return element("text", escape(text), x=x, y=y, **attributes)


def path(points: Iterable[tuple[float, float]], *, closed: bool = False, **attributes: str | float) -> str:
    """Straight lines through points."""
    steps = " L".join(f"{number(x)} {number(y)}" for x, y in points)
    return element("path", d=f"M{steps}{'Z' if closed else ''}", **attributes)


def number(value: float) -> str:
    """A coordinate to a tenth, without idle zeros."""
    return f"{value:.1f}".removesuffix(".0")


def _value(value: str | float) -> str:
    return number(value) if isinstance(value, (int, float)) else escape(value, quote=True)
