"""The heart cycle as SVG: ECG for orientation, a strip a site, the jugular wave, the diastolic pressure.

Present is filled, absent is an empty outline struck through, uncertain is dashed with a question mark, not
examined is a dotted bracket: told apart without colour. What was not said is not drawn, but for the first
and second sound, in grey, to guide the eye.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from html import escape
from typing import Final

from fhirgallop.drawing.cycle import A2, CYCLE, Beat, HeartCycle, Noise, Pressure, Strip, Vein
from fhirgallop.drawing.svg import element, number, path, words
from fhirgallop.drawing.wording import description, site_name
from fhirgallop.exam import catalogue
from fhirgallop.exam.presence import Presence

_LEFT, _WIDTH, _RIGHT = 150, 670, 20
_BEGIN, _END = -220, CYCLE + 60
_TOP, _STRIP, _ROW = 34, 98, 74
_AXIS = 60  # base line of a strip
_LINE = 14
_CHAR = 6.4  # width of an average letter at 11 px
INK, GREY, PALE, HEARD, VEIN = "#1b2733", "#5b6875", "#c9d1d8", "#8a2b3f", "#27548a"
# what a name stands on is left white around it
_HALO: Final[dict[str, str | float]] = {
    "paint_order": "stroke", "stroke": "#ffffff", "stroke_width": 3, "stroke_linejoin": "round",
}  # fmt: skip
_KEY: Final = (
    (Presence.PRESENT, "present"),
    (Presence.ABSENT, "absent"),
    (Presence.UNCERTAIN, "uncertain"),
    (Presence.NOT_EXAMINED, "not examined"),
)


def draw(cycle: HeartCycle, title: str = "Heart cycle") -> str:
    """The drawing as one SVG element, with the same told in words for those who do not see it."""
    rows: list[str] = []
    y = float(_TOP)
    for inside, height in _rows(cycle):
        rows.append(element("g", inside, transform=f"translate(0 {number(y)})"))
        y += height
    grid = _grid(y - 6)
    rows.append(element("g", _key(), transform=f"translate(0 {number(y + 10)})"))
    width, height = _LEFT + _WIDTH + _RIGHT, y + 56
    told = escape(" ".join(description(cycle)))
    return element(
        "svg",
        element("title", escape(title), id="heart-cycle-title"),
        element("desc", told, id="heart-cycle-desc"),
        element("rect", class_="paper", width=width, height=height, fill="#ffffff"),
        _patterns(),
        grid,
        *rows,
        xmlns="http://www.w3.org/2000/svg",
        viewBox=f"0 0 {number(width)} {number(height)}",
        role="img",
        aria_labelledby="heart-cycle-title heart-cycle-desc",
        class_="heart-cycle",
        font_family="system-ui, sans-serif",
        font_size=11,
        fill=INK,
    )


def _rows(cycle: HeartCycle) -> Iterable[tuple[str, float]]:
    yield _ecg(cycle), _ROW
    for strip in cycle.strips:
        marks = _Marks()
        inside = _strip(strip, marks)
        yield inside, _STRIP + max(marks.levels - 1, 0) * _LINE
    if cycle.vein:
        yield _vein(cycle.vein, cycle), _ROW + 8
    if cycle.pressure:
        yield _pressure(cycle.pressure, cycle), _ROW + 40


def _x(at: float) -> float:
    return _LEFT + (at - _BEGIN) / (_END - _BEGIN) * _WIDTH


def _grid(bottom: float) -> str:
    lines = [
        element("line", x1=_x(at), x2=_x(at), y1=_TOP - 8, y2=bottom, stroke=PALE, stroke_dasharray="2 3")
        for at in (0, A2, CYCLE)
    ]
    heads = [
        words((_x(a) + _x(b)) / 2, 18, text, text_anchor="middle", fill=GREY)
        for a, b, text in ((0, A2, "systole"), (A2, CYCLE, "diastole"))
    ]
    return element("g", *lines, *heads, class_="grid")


def _name(text: str, under: Sequence[str] = ()) -> str:
    lines = [words(8, 34, text, font_weight="600")]
    lines += [words(8, 34 + _LINE * place, line, fill=GREY) for place, line in enumerate(under, 1)]
    return "".join(lines)


def _ecg(cycle: HeartCycle) -> str:
    """A schematic ECG; without an organised atrial beat there is no P wave but a restless base line."""
    base, points = 46.0, []
    for at in range(_BEGIN, _END + 1, 4):
        up = _bump(at, 0 - 20, 9, 30) - _bump(at, -34, 6, 5) - _bump(at, 0, 7, 9) + _bump(at, 230, 42, 7)
        if cycle.atrium == "beats":
            up += _bump(at, -140, 24, 5)
        elif cycle.atrium == "none":
            up += 1.6 * math.sin(at / 11) + 1.1 * math.sin(at / 6.3 + 1)
        points.append((_x(at), base - up))
    known = catalogue.load().axes["rhythm"].values.get(cycle.rhythm)
    under = [known.label if known else "Rhythm not known", f"({cycle.rhythm_source})" if known else ""]
    if cycle.atrium == "none":
        under.append("no P wave")
    trace = path(points, fill="none", stroke=INK, stroke_width=1.3)
    blank = ""
    if cycle.atrium == "unknown":
        blank = "".join(_bracket(start, start + 80, base + 8, "P?") for start in (-190, CYCLE - 190))
    return _name("ECG, schematic", [line.strip() for line in under if line.strip()]) + trace + blank


def _bump(at: float, centre: float, width: float, height: float) -> float:
    """A wave that comes once a cycle."""
    from_centre = (at - centre + CYCLE / 2) % CYCLE - CYCLE / 2
    return height * math.exp(-((from_centre / width) ** 2))


@dataclass(slots=True)
class _Marks:
    """Labels above a strip, put where they do not cover each other."""

    ends: list[float]

    def __init__(self) -> None:
        self.ends = []

    @property
    def levels(self) -> int:
        return len(self.ends)

    def place(self, x: float, text: str) -> tuple[float, int]:
        """Left edge and level for a label centred on x."""
        half = len(text) * _CHAR / 2 + 5
        start = min(max(x - half, _LEFT), _LEFT + _WIDTH + _RIGHT - 2 * half)
        for level, end in enumerate(self.ends):
            if start >= end:
                self.ends[level] = start + 2 * half
                return start + half, level
        self.ends.append(start + 2 * half)
        return start + half, len(self.ends) - 1


def _strip(strip: Strip, marks: _Marks) -> str:
    """One site: its sounds as bars, its murmurs as areas, each with its name above."""
    labels: list[tuple[float, str]] = []
    shapes: list[str] = []
    for noise in strip.noises:
        shapes.append(_noise(noise))
        labels.append((_x(_middle(noise)), _told(noise.label, noise.presence, noise.remark, noise.spans)))
    for beat in strip.beats:
        shapes += [_beat(beat, at) for at in _twice(beat.at)]
        if beat.label:
            labels.append((_x(beat.at), _told(beat.label, beat.presence, beat.remark)))
    placed = [(marks.place(x, text), text) for x, text in sorted(labels)]
    lift = max(marks.levels - 1, 0) * _LINE
    names = [
        words(x, 10 + lift - level * _LINE, text, text_anchor="middle", **_HALO)
        for (x, level), text in placed
    ]
    leads = [
        _lead(x, lift - level * _LINE, lift)
        for (x, _), ((_, level), _) in zip(sorted(labels), placed, strict=True)
    ]
    axis = element("line", x1=_LEFT, x2=_LEFT + _WIDTH, y1=_AXIS, y2=_AXIS, stroke=PALE)
    drawn = element("g", axis, *shapes, transform=f"translate(0 {number(lift)})")
    label = element("g", _name(*site_name(strip.site)), transform=f"translate(0 {number(lift + 20)})")
    return label + "".join(leads) + drawn + "".join(names)


def _lead(x: float, top: float, lift: float) -> str:
    """A thin line from a name that had to move up down to what it names."""
    if top >= lift:
        return ""
    return element("line", x1=x, x2=x, y1=top + 13, y2=lift + 34, stroke=GREY, stroke_width=0.6)


def _twice(at: int) -> Iterable[int]:
    """A sound before the first sound, or at it, is seen again at the end of the drawing."""
    yield at
    if at + CYCLE <= _END - 20 and at <= 40:
        yield at + CYCLE
    if at - CYCLE >= _BEGIN + 20:
        yield at - CYCLE


def _told(
    label: str, presence: Presence | None, remark: str, spans: Sequence[tuple[int, int]] | None = None
) -> str:
    marks = {Presence.ABSENT: f"no {label}", Presence.UNCERTAIN: f"{label}?",
             Presence.NOT_EXAMINED: f"{label} not examined",
             Presence.NOT_EXAMINABLE: f"{label} could not be examined"}  # fmt: skip
    text = marks.get(presence, label) if presence else label
    if remark and presence in (Presence.PRESENT, Presence.UNCERTAIN):
        text += f" ({remark})"
    if spans is not None and not spans and presence is Presence.PRESENT:
        text += ", place in the cycle not stated"
    return text


def _beat(beat: Beat, at: int) -> str:
    """A bar whose height is its loudness: broad and round for a low sound, thin for a sharp one."""
    x, base = _x(at), float(_AXIS)
    width = {"sound": 6.0, "low": 11.0, "sharp": 3.0}[beat.form]
    if beat.presence in (Presence.NOT_EXAMINED, Presence.NOT_EXAMINABLE):
        return _bracket(at - 22, at + 22, base + 4, "")
    height = 30 * (beat.height or 0.6)
    round_ = width / 2 if beat.form == "low" else 0
    box = {"x": x - width / 2, "y": base - height, "width": width, "height": 2 * height * 0.66, "rx": round_}
    if beat.presence is None:
        return element("rect", **box, fill=PALE)
    if beat.presence is Presence.ABSENT or not beat.height:
        cross = element("line", x1=x - 9, x2=x + 9, y1=base + 8, y2=base - 8, stroke=GREY, stroke_width=1.4)
        return element("rect", **box, fill="none", stroke=GREY) + cross
    if beat.presence is Presence.UNCERTAIN:
        return element("rect", **box, fill="none", stroke=HEARD, stroke_dasharray="3 2", stroke_width=1.4)
    ordinary = beat.finding in ("heart-sound.s1", "heart-sound.s2", "A2", "P2")
    return element("rect", **box, fill=INK if ordinary else HEARD)


def _noise(noise: Noise) -> str:
    if noise.presence is Presence.ABSENT:
        return _no_noise(noise)
    if noise.presence in (Presence.NOT_EXAMINED, Presence.NOT_EXAMINABLE):
        places = noise.spans or ((10, A2),)
        return "".join(_bracket(begin, end, _AXIS + 14, "") for begin, end in places)
    look: dict[str, str | float] = {"stroke": HEARD, "stroke_width": 1.2}
    if noise.presence is Presence.PRESENT and noise.spans:
        look["fill"] = f"url(#pitch-{noise.pitch or 'unstated'})"
    else:
        look |= {"fill": "none", "stroke_dasharray": "4 3"}
    return "".join(
        path(_outline(noise, begin, end), closed=True, **look)
        for begin, end in noise.spans or ((10, CYCLE - 10),)
    )


def _no_noise(noise: Noise) -> str:
    """A murmur that was looked for and is not there: a small empty band, struck through, under its name."""
    x = _x(_middle(noise))
    band = element("rect", x=x - 17, y=_AXIS - 4, width=34, height=8, fill="#ffffff", stroke=GREY)
    stroke = element("line", x1=x - 12, x2=x + 12, y1=_AXIS + 9, y2=_AXIS - 9, stroke=GREY, stroke_width=1.4)
    return band + stroke


def _middle(noise: Noise) -> float:
    """Where the name of a murmur stands."""
    begin, end = noise.spans[0] if noise.spans else (0, CYCLE)
    return (begin + end) / 2


def _outline(noise: Noise, begin: int, end: int) -> list[tuple[float, float]]:
    """Both edges of a murmur; one whose shape was not stated is a plain band."""
    tall = 6 + 20 * (noise.loudness if noise.loudness is not None else 0.4)
    if noise.label == "rub":
        step = (end - begin) / 14
        return [(_x(begin + step * i), _AXIS - (tall if i % 2 else -tall)) for i in range(15)]
    heights = {
        "crescendo": (0.15, 1.0),
        "decrescendo": (1.0, 0.1),
        "crescendo-decrescendo": (0.1, 1.0, 0.1),
    }.get(noise.shape, (1.0, 1.0))
    top = [
        (_x(begin + (end - begin) * place / (len(heights) - 1)), height * tall)
        for place, height in enumerate(heights)
    ]
    return [(x, _AXIS - h) for x, h in top] + [(x, _AXIS + h * 0.66) for x, h in reversed(top)]


def _bracket(begin: float, end: float, y: float, text: str) -> str:
    left, right = _x(begin), _x(end)
    line = path(
        [(left, y - 5), (left, y), (right, y), (right, y - 5)],
        fill="none", stroke=GREY, stroke_dasharray="1.5 2.5", stroke_width=1.4,
    )  # fmt: skip
    return line + (words((left + right) / 2, y + 11, text, text_anchor="middle", fill=GREY) if text else "")


def _vein(vein: Vein, cycle: HeartCycle) -> str:
    """The jugular wave: what was described stands out; with nothing described there is no wave to draw."""
    under = description(cycle, only="jvp")[:3]
    name = _name("Jugular vein", under if len(vein.said) and not vein.waves else ())
    if not vein.waves:
        return name
    a = {"absent": 0.0, "giant": 24.0, "cannon": 30.0, "cannon-regular": 30.0, "cannon-irregular": 30.0}
    tall = {
        "a": 0.0 if cycle.atrium == "none" else a.get(vein.waves.get("a-wave", ""), 11.0),
        "v": {"prominent": 15.0, "giant": 24.0}.get(vein.waves.get("v-wave", ""), 8.0),
        "x": {"prominent": 15.0, "blunted": 4.0, "absent": 0.0}.get(vein.waves.get("x-descent", ""), 9.0),
        "y": {"rapid": 15.0, "slow": 3.0, "absent": 0.0}.get(vein.waves.get("y-descent", ""), 7.0),
    }
    at_a = 60 if vein.waves.get("a-wave", "").startswith("cannon") else -70
    points = []
    for at in range(_BEGIN, _END + 1, 6):
        up = (
            _bump(at, at_a, 40, tall["a"]) - _bump(at, 190, 75, tall["x"])
            + _bump(at, A2 + 40, 55, tall["v"]) - _bump(at, A2 + 150, 60, tall["y"])
        )  # fmt: skip
        points.append((_x(at), 50 - up))
    said = [
        words(_x(at), y, text, text_anchor="middle", fill=VEIN)
        for key, at, y, text in (
            ("a-wave", at_a, 12, "a"), ("x-descent", 190, 76, "x"), ("v-wave", A2 + 40, 12, "v"),
            ("y-descent", A2 + 150, 76, "y"),
        )
        if key in vein.waves
        for text in (f"{text}: {_label(key, vein.waves[key])}",)
    ]  # fmt: skip
    return name + path(points, fill="none", stroke=VEIN, stroke_width=1.5) + "".join(said)


def _label(axis: str, value: str) -> str:
    label = catalogue.load().axes[axis].values[value].label
    return label[:1].lower() + label[1:]


def _pressure(pressure: Pressure, cycle: HeartCycle) -> str:
    """Left ventricular pressure in diastole on a scale of 0 to 40 mmHg, its end-diastolic point marked."""
    bottom, top = 96.0, 12.0
    most = max(40.0, float(pressure.end) * 1.2)

    def y(mmhg: float) -> float:
        return bottom - (bottom - top) * min(max(mmhg, 0.0), most) / most

    end = float(pressure.end)
    early = float(pressure.early) if pressure.early is not None else min(end * 0.35, end)
    kick = 0.25 * (end - early) if cycle.atrium == "beats" else 0.0
    points = [(_x(A2 - 10), y(most))]
    for at in range(A2 + 90, CYCLE + 1, 10):
        part = (at - A2 - 90) / (CYCLE - A2 - 90)
        rise = early + (end - kick - early) * part**0.8
        points.append((_x(at), y(rise + kick * max(0.0, (part - 0.75) / 0.25))))
    points.append((_x(CYCLE + 18), y(most)))
    scale = [
        element("line", x1=_LEFT, x2=_LEFT + _WIDTH, y1=y(v), y2=y(v), stroke=PALE)
        + words(_LEFT - 6, y(v) + 4, str(v), text_anchor="end", fill=GREY)
        for v in range(0, int(most) + 1, 10)
    ]
    dashes = "none" if pressure.early is not None else "5 3"
    trace = path(points, fill="none", stroke=INK, stroke_width=1.5, stroke_dasharray=dashes)
    dot = element("circle", cx=_x(CYCLE), cy=y(end), r=4.5, fill=HEARD)
    note = words(
        _x(CYCLE) - 10, y(end) - 8, f"end-diastolic {pressure.end} mmHg", text_anchor="end", fill=HEARD
    )
    under = ["in diastole, mmHg", f"({pressure.source})"]
    if pressure.early is None:
        under.append("dashed: course not measured")
    return _name("Left ventricle", under) + "".join(scale) + trace + dot + note


def _patterns() -> str:
    """Close lines for a high pitch, wide ones for a low one."""
    found = []
    for pitch, gap, wide in (("high", 3, 1.2), ("medium", 5, 1.4), ("low", 9, 2.2)):
        line = element("line", x1=0, x2=0, y1=0, y2=gap, stroke=HEARD, stroke_width=wide)
        tint = element("rect", width=gap, height=gap, fill="#f3dfe3")
        found.append(
            element("pattern", tint, line, id=f"pitch-{pitch}", width=gap, height=gap,
                    patternUnits="userSpaceOnUse", patternTransform="rotate(20)")
        )  # fmt: skip
    plain = element("rect", width=8, height=8, fill="#e9c6cd")
    found.append(
        element("pattern", plain, id="pitch-unstated", width=8, height=8, patternUnits="userSpaceOnUse")
    )
    return element("defs", *found)


def _key() -> str:
    """What the forms mean."""
    parts, x = [words(8, 10, "Key", font_weight="600")], float(_LEFT)
    for presence, text in _KEY:
        beat = Beat("heart-sound.s4", "", 0, 0.4, "sound", presence)
        shape = element(
            "g", _beat(beat, 0), transform=f"translate({number(x + 14 - _x(0))} {number(6 - _AXIS)})"
        )
        parts += [shape, words(x + 34, 10, text)]
        x += 54 + len(text) * _CHAR
    x = float(_LEFT)
    for pitch in ("low", "medium", "high"):
        parts.append(
            element("rect", x=x, y=19, width=22, height=11, fill=f"url(#pitch-{pitch})", stroke=HEARD)
        )
        parts.append(words(x + 34, 28, f"{pitch} pitch"))
        x += 54 + (len(pitch) + 6) * _CHAR
    return "".join(parts)
