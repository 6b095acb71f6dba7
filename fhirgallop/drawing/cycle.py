"""What of an examination has a place in the heart cycle, and where: the drawing before it is drawn.

Times are milliseconds after the first heart sound, for a cycle of 800 ms (75 beats a minute) with the aortic
component of the second sound at 320 ms. They are places in a scheme and no measurements; where an examiner
measured an interval, that interval is used. Their sources stand in `events.csv`.
"""

from __future__ import annotations

import csv
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from decimal import Decimal
from functools import cache
from importlib import resources
from types import MappingProxyType
from typing import Final, Literal

from fhirgallop.exam.context import Context, State
from fhirgallop.exam.entry import Entry, Grade
from fhirgallop.exam.exam import Exam
from fhirgallop.exam.presence import Presence

CYCLE: Final = 800
A2: Final = 320
UNSTATED: Final = ""
SITES: Final = ("aortic", "pulmonary", "erb", "tricuspid", "mitral")

Atrium = Literal["beats", "none", "unknown"]
Form = Literal["sound", "low", "sharp"]

# axis value -> (begin, end) of a murmur
_SPANS: Final[Mapping[str, tuple[tuple[int, int], ...]]] = MappingProxyType(
    {
        "early-systolic": ((20, 170),),
        "mid-systolic": ((50, 285),),
        "late-systolic": ((190, A2),),
        "holosystolic": ((10, A2 + 5),),
        "early-diastolic": ((A2 + 5, 560),),
        "mid-diastolic": ((410, 640),),
        "late-diastolic": ((665, 790),),
        "holodiastolic": ((A2 + 5, 790),),
        "continuous": ((20, 790),),
        "to-and-fro": ((50, 285), (A2 + 5, 600)),
    }
)
_WHOLE: Final[Mapping[str, tuple[int, int]]] = MappingProxyType(
    {"murmur.systolic": (10, A2), "murmur.diastolic": (A2 + 10, 790), "murmur.continuous": (20, 790)}
)
_RUB: Final[Mapping[str, tuple[tuple[int, int], ...]]] = MappingProxyType(
    {
        "1": ((60, 260),),
        "2": ((60, 260), (380, 520)),
        "3": ((60, 260), (380, 520), (680, 780)),
    }
)
_LOUDNESS: Final = MappingProxyType(
    {"loud": 1.4, "normal": 1.0, "soft": 0.5, "distant": 0.5, "tambour": 1.4, "absent": 0.0, "variable": 1.0}
)
# distance from A2 to P2
_SPLITS: Final = MappingProxyType(
    {"physiological": 30, "wide-mobile": 65, "wide-fixed": 50, "paradoxical": -40, "single": 0}
)
_NO_ATRIAL_BEAT: Final = frozenset({"atrial-fibrillation", "atrial-standstill"})
_UNTOLD_ATRIUM: Final = frozenset({"other", "supraventricular-arrhythmia", "atrial-flutter"})


@dataclass(frozen=True, slots=True)
class Beat:
    """A sound at one moment.

    Attributes:
        finding: catalogue id; "A2" and "P2" for the components of a split second sound.
        label: short name for the drawing.
        at: milliseconds after the first sound; negative before it.
        height: 1 is an ordinary first sound; 0 is one that was said to be missing.
        form: how it is drawn.
        presence: what was said; None for a first or second sound that nobody spoke of, to guide the eye.
        remark: what else was said, in words.
    """

    finding: str
    label: str
    at: int
    height: float
    form: Form
    presence: Presence | None
    remark: str = ""


@dataclass(frozen=True, slots=True)
class Noise:
    """A murmur, a rub or a hum: what lasts.

    Attributes:
        spans: begin and end of each part; empty when its place in the cycle was not said.
        shape: `shape` axis value; empty when it was not said.
        loudness: 0 to 1; None when no grade was said.
        pitch: `pitch` axis value; empty when it was not said.
    """

    finding: str
    label: str
    spans: tuple[tuple[int, int], ...]
    shape: str
    loudness: float | None
    pitch: str
    presence: Presence
    remark: str = ""


@dataclass(frozen=True, slots=True)
class Strip:
    """What was heard at one site (`site` axis value; empty: site not stated)."""

    site: str
    beats: tuple[Beat, ...]
    noises: tuple[Noise, ...]


@dataclass(frozen=True, slots=True)
class Vein:
    """The jugular wave as described; values of the axes `a-wave`, `x-descent`, `v-wave`, `y-descent`."""

    waves: Mapping[str, str]
    said: tuple[Entry, ...]


@dataclass(frozen=True, slots=True)
class Pressure:
    """Left ventricular diastolic pressure in mmHg, with where each number comes from."""

    end: Decimal
    early: Decimal | None
    source: str


@dataclass(frozen=True, slots=True)
class HeartCycle:
    """Everything the drawing shows.

    Attributes:
        rhythm: `rhythm` axis value; empty when unknown.
        atrium: whether there is an organised atrial beat.
        rhythm_source: where the rhythm is known from.
        elsewhere: entries of auscultation that have no place in the cycle, to be told in words.
    """

    rhythm: str
    atrium: Atrium
    rhythm_source: str
    strips: tuple[Strip, ...]
    vein: Vein | None
    pressure: Pressure | None
    elsewhere: tuple[Entry, ...]


def heart_cycle(exam: Exam, context: Context | None = None) -> HeartCycle:
    """The heart cycle of an examination, with rhythm and pressures from the chart where the exam has none."""
    entries = _telling(exam)
    rhythm, source = _rhythm(entries, context)
    drawn = [entry for entry in entries if entry.finding in _DRAWN or entry.finding in _NOISES]
    sites = list(dict.fromkeys(site for entry in drawn for site in sites_of(entry)))
    order = {site: place for place, site in enumerate((*SITES, UNSTATED))}
    sites.sort(key=lambda site: order.get(site, len(order)))
    strips = tuple(_strip(site, entries) for site in sites) or (_strip(UNSTATED, entries),)
    elsewhere = tuple(
        e for e in entries
        if e.finding.startswith(("heart-sound.", "murmur")) and e.finding not in (_DRAWN | _NOISES | _SHAPING)
    )  # fmt: skip
    return HeartCycle(
        rhythm, _atrium(rhythm), source, strips, _vein(entries), _pressure(entries, context), elsewhere
    )


def _telling(exam: Exam) -> list[Entry]:
    """What counts: nothing taken back, and no bare "murmur" where one is said more closely."""
    entries = [entry for entry in exam.entries if not entry.withdrawn]
    closer = any(e.finding in _WHOLE and e.presence is Presence.PRESENT for e in entries)
    bare = [
        e for e in entries if e.finding == "murmur" and e.presence is Presence.PRESENT and not e.qualifiers
    ]
    return [entry for entry in entries if not (closer and entry in bare)]


def value_of(entry: Entry, axis: str) -> str:
    """The first value that an entry has on an axis; empty when none."""
    return next((q.value for q in entry.qualifiers if q.axis == axis and q.value), "")


def sites_of(entry: Entry) -> tuple[str, ...]:
    """The sites an entry was heard at; `("",)` when none was stated."""
    found = [q.value for q in entry.qualifiers if q.axis in ("site", "loudest-site") and q.value]
    return tuple(dict.fromkeys(found)) or (UNSTATED,)


@dataclass(frozen=True, slots=True)
class _Event:
    at: int
    label: str
    height: float
    form: Form


@cache
def _events() -> Mapping[str, _Event]:
    text = resources.files("fhirgallop.drawing").joinpath("events.csv").read_text(encoding="utf-8")
    forms: dict[str, Form] = {"sound": "sound", "low": "low", "sharp": "sharp"}
    return {
        row["finding"]: _Event(int(row["at"]), row["label"], float(row["height"]), forms[row["form"]])
        for row in csv.DictReader(text.splitlines())
    }


_SHAPING: Final = frozenset(
    f"heart-sound.{name}"
    for name in ("intensity", "s1-intensity", "s1-splitting", "s2", "s2-intensity", "s2-splitting",
                 "a2-intensity", "p2-intensity", "a2-os-interval", "s1-click-interval")
)  # fmt: skip
_NOISES: Final = frozenset({"murmur", *_WHOLE}) | {
    f"heart-sound.{name}" for name in ("pericardial-rub", "venous-hum", "mammary-souffle")
}
_DRAWN: Final = frozenset(_events()) | {"heart-sound.prosthetic"}


def _rhythm(entries: Iterable[Entry], context: Context | None) -> tuple[str, str]:
    for entry in entries:
        if entry.finding == "rhythm.diagnosis" and entry.answers:
            return entry.answers[0], "this examination"
    facts = context.facts if context else ()
    today = [f for f in facts if f.id == "rhythm.diagnosis" and f.state is State.PRESENT and f.answers]
    if not today:
        return "", ""
    newest = max(today, key=lambda fact: fact.time)
    return newest.answers[0], f"{newest.source.value}, {newest.time[:10] or 'time unknown'}"


def _atrium(rhythm: str) -> Atrium:
    if rhythm in _NO_ATRIAL_BEAT:
        return "none"
    return "unknown" if not rhythm or rhythm in _UNTOLD_ATRIUM else "beats"


def _strip(site: str, entries: Sequence[Entry]) -> Strip:
    here = [entry for entry in entries if site in sites_of(entry)]
    beats = [*_first(entries), *_second(entries)]
    for entry in here:
        if entry.finding == "heart-sound.prosthetic":
            beats += _prosthetic(entry)
        elif entry.finding in _events() and entry.finding != "heart-sound.s1":
            beats.append(_beat(entry, entries))
    noises = tuple(_noise(entry) for entry in here if entry.finding in _NOISES)
    return Strip(site, tuple(sorted(beats, key=lambda beat: beat.at)), noises)


def _beat(entry: Entry, entries: Iterable[Entry]) -> Beat:
    event = _events()[entry.finding]
    at = event.at
    measured = {"heart-sound.opening-snap": ("heart-sound.a2-os-interval", A2),
                "heart-sound.mid-systolic-click": ("heart-sound.s1-click-interval", 0)}  # fmt: skip
    if entry.finding in measured:
        interval, since = measured[entry.finding]
        for other in entries:
            if other.finding == interval and other.measure:
                at = since + min(int(other.measure.value), 250)
    chamber = {"left": "left-sided", "right": "right-sided"}.get(value_of(entry, "chamber"), "")
    return Beat(entry.finding, event.label, at, event.height, event.form, entry.presence, chamber)


def _answer(entries: Iterable[Entry], finding: str) -> str:
    said = (e for e in entries if e.finding == finding and e.answers and e.presence is Presence.PRESENT)
    return next((entry.answers[0] for entry in said), "")


def _said(entries: Iterable[Entry], *findings: str) -> Presence | None:
    """What was said of a sound, or of one of its properties, whichever comes first."""
    for finding in findings:
        for entry in entries:
            if entry.finding == finding:
                return entry.presence
    return None


def _first(entries: Sequence[Entry]) -> list[Beat]:
    said = _said(entries, "heart-sound.s1", "heart-sound.s1-intensity", "heart-sound.s1-splitting")
    loud = _answer(entries, "heart-sound.s1-intensity")
    gap = {"narrow": 25, "wide": 50}.get(_answer(entries, "heart-sound.s1-splitting"), 0)
    height = _LOUDNESS.get(loud or _answer(entries, "heart-sound.intensity"), 1.0)
    remark = "" if loud in ("", "normal") else loud
    beat = Beat("heart-sound.s1", "S1", 0, height, "sound", said, remark)
    return [beat, Beat("heart-sound.s1", "", gap, height * 0.8, "sound", said)] if gap else [beat]


def _second(entries: Sequence[Entry]) -> list[Beat]:
    said = _said(entries, "heart-sound.s2", "heart-sound.s2-splitting", "heart-sound.s2-intensity")
    split = _answer(entries, "heart-sound.s2-splitting")
    loud = _answer(entries, "heart-sound.s2-intensity")
    single = loud == "single" or split == "single"
    whole = _LOUDNESS.get(loud or _answer(entries, "heart-sound.intensity"), 1.0)
    aortic = _answer(entries, "heart-sound.a2-intensity")
    pulmonary = _answer(entries, "heart-sound.p2-intensity")
    if single or not (_SPLITS.get(split) or aortic or pulmonary):
        remark = "single" if single else loud if loud not in ("", "normal") else ""
        return [Beat("heart-sound.s2", "S2", A2, whole, "sound", said, remark)]
    gap = _SPLITS.get(split) or 30
    remarks = {"physiological": "wider in inspiration", "wide-mobile": "wide", "wide-fixed": "wide and fixed",
               "paradoxical": "paradoxical"}  # fmt: skip
    heard = said or Presence.PRESENT
    return [
        Beat("A2", "A2", A2, _LOUDNESS.get(aortic, whole), "sound", heard, _remark(aortic)),
        Beat("P2", "P2", A2 + gap, 0.7 * _LOUDNESS.get(pulmonary, whole), "sound", heard,
             remarks.get(split, "") or _remark(pulmonary)),
    ]  # fmt: skip


def _remark(answer: str) -> str:
    return "" if answer == "normal" else answer


def _prosthetic(entry: Entry) -> list[Beat]:
    valve, event = value_of(entry, "valve"), value_of(entry, "valve-event")
    places = {("mitral", "closing"): 0, ("tricuspid", "closing"): 0, ("mitral", "opening"): A2 + 80,
              ("tricuspid", "opening"): A2 + 80, ("aortic", "opening"): 60, ("pulmonary", "opening"): 60,
              ("aortic", "closing"): A2, ("pulmonary", "closing"): A2}  # fmt: skip
    remark = entry.answers[0] if entry.answers else ""
    found = [at for (name, when), at in places.items() if name == valve and event in ("", when)]
    return [
        Beat(entry.finding, "valve click", at, 0.9, "sharp", entry.presence, remark) for at in sorted(found)
    ]


def _noise(entry: Entry) -> Noise:
    timing = value_of(entry, "timing")
    spans = _SPANS.get(timing, ())
    label = "murmur"
    if entry.finding == "heart-sound.pericardial-rub":
        label = "rub"
        spans = _RUB.get(value_of(entry, "rub-components"), ())
    elif entry.finding == "heart-sound.venous-hum":
        label, spans = "venous hum", ((0, CYCLE),)
    elif entry.finding == "heart-sound.mammary-souffle":
        label, spans = "mammary souffle", ((40, 600),)
    elif not spans and entry.finding in _WHOLE:
        spans = (_WHOLE[entry.finding],)
    grade = next((q.grade for q in entry.qualifiers if q.grade), None)
    words = [value_of(entry, "quality"), f"{grade}" if grade else ""]
    return Noise(
        entry.finding,
        label,
        spans,
        value_of(entry, "shape"),
        _loudness(grade),
        value_of(entry, "pitch"),
        entry.presence,
        ", ".join(word for word in words if word),
    )


def _loudness(grade: Grade | None) -> float | None:
    return None if grade is None or grade.of < 1 else min((grade.low + grade.high) / 2 / grade.of, 1.0)


def _vein(entries: Sequence[Entry]) -> Vein | None:
    said = tuple(entry for entry in entries if entry.finding.startswith("jvp."))
    waves = {
        name: entry.answers[0]
        for name in ("a-wave", "x-descent", "v-wave", "y-descent")
        for entry in said
        if entry.finding == f"jvp.{name}" and entry.answers
    }
    return Vein(MappingProxyType(waves), said) if said else None


def _pressure(entries: Iterable[Entry], context: Context | None) -> Pressure | None:
    found: dict[str, tuple[Decimal, str]] = {}
    names = ("catheter.lv-end-diastolic-pressure", "catheter.lv-early-diastolic-pressure")
    for fact in sorted(context.facts if context else (), key=lambda fact: fact.time):
        if fact.id in names and fact.measure and fact.state is State.PRESENT:
            found[fact.id] = fact.measure.value, f"{fact.source.value}, {fact.time[:10] or 'time unknown'}"
    for entry in entries:
        if entry.finding in names and entry.measure and entry.presence is Presence.PRESENT:
            found[entry.finding] = entry.measure.value, "this examination"
    end, early = found.get(names[0]), found.get(names[1])
    return Pressure(end[0], early[0] if early else None, end[1]) if end else None
