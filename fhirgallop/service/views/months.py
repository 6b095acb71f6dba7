"""Counts by month as a drawing: raised, shown and answered, as bars beside each other."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Final

from fhirgallop.drawing.svg import element, words
from fhirgallop.service.views.knowledge import Fared

_WIDTH, _HEIGHT, _LEFT, _TOP, _FOOT = 720, 190, 46, 26, 24
_KINDS: Final = (("raised", "raised"), ("shown", "shown"), ("overridden", "answered with a reason"))
_STEPS: Final = (1, 2, 5)


def months(fared: Sequence[tuple[str, Fared]], title: str) -> str:
    """The drawing as one SVG element, empty where nothing was counted; the numbers stand beside it.

    Args:
        fared: each month (`2026-12`) with its counts.
        title: its name for those who do not see it.
    """
    most = max((max(one.raised, one.shown, one.overridden) for _, one in fared), default=0)
    if not any(one != Fared() for _, one in fared):
        return ""
    step = _step(most)
    top = max(step, -(-most // step) * step)
    room = (_WIDTH - _LEFT) / max(len(fared), 1)
    bars = [
        _bar(_LEFT + room * place + room * (0.14 + 0.24 * index), room * 0.22, getattr(one, kind) / top, kind)
        for place, (_, one) in enumerate(fared)
        for index, (kind, _) in enumerate(_KINDS)
    ]
    names = [
        words(_LEFT + room * (place + 0.5), _HEIGHT - 6, _month(month), text_anchor="middle", class_="soft")
        for place, (month, _) in enumerate(fared)
    ]
    return element(
        "svg",
        element("title", title),
        *_scale(top, step),
        *bars,
        *names,
        *_key(),
        viewBox=f"0 0 {_WIDTH} {_HEIGHT}",
        role="img",
        aria_label=title,
        class_="months",
        font_size=11,
    )


def _bar(x: float, width: float, part: float, kind: str) -> str:
    tall = (_HEIGHT - _TOP - _FOOT) * part
    return element("rect", x=x, y=_HEIGHT - _FOOT - tall, width=width, height=tall, class_=f"count {kind}")


def _scale(top: int, step: int) -> list[str]:
    found = []
    for value in range(0, top + 1, step):
        y = _HEIGHT - _FOOT - (_HEIGHT - _TOP - _FOOT) * value / top
        found.append(element("line", x1=_LEFT, x2=_WIDTH, y1=y, y2=y, class_="scale"))
        found.append(words(_LEFT - 6, y + 4, f"{value}", text_anchor="end", class_="soft"))
    return found


def _key() -> list[str]:
    found, x = [], float(_LEFT)
    for kind, name in _KINDS:
        found.append(element("rect", x=x, y=4, width=11, height=11, class_=f"count {kind}"))
        found.append(words(x + 16, 14, name))
        x += 36 + 6.4 * len(name)
    return found


def _step(most: int) -> int:
    """A round step that gives at most five lines."""
    size = 1
    while True:
        for step in _STEPS:
            if step * size * 5 >= most:
                return step * size
        size *= 10


def _month(month: str) -> str:
    return f"{month[5:]}/{month[2:4]}"
