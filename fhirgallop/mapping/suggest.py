"""What a local field may mean: up to three findings, properties or record parts, each with the reasons.

Wordings of the catalogue and its synonyms are held against the field's name by rapidfuzz; what the field was
seen to hold (answers, numbers, units) and where it stands speak for or against. Nothing is accepted
here: a suggestion is a question to the informatician.
"""

from __future__ import annotations

import re
from collections import Counter
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from functools import cache
from math import log
from typing import Final

from rapidfuzz import fuzz

from fhirgallop.exam import catalogue
from fhirgallop.mapping.field_words import (
    IDLE,
    MURMUR_AXES,
    MURMUR_WORDINGS,
    PLAIN,
    RECORD_WORDINGS,
    SHORT,
    SIDES,
    UNITS,
)
from fhirgallop.mapping.suggest_values import Target, values_fit

RECORD: Final = "record"
MOST_VALUES: Final = 200
_MOST_CHARACTERS: Final = 200
_ALIKE: Final = 84.0
_LEAST: Final = 0.3

_SPLIT: Final = re.compile(r"[A-Z]?[a-z]+|[A-Z]+(?![a-z])|[0-9]+|[%+]")
_RUN: Final = re.compile(r"([A-Z]{2,4})([a-z]+)")  # PAmean
_RATIO: Final = re.compile(r"(?i)\be\s*/\s*e(?:['’]|\s*prime)")
_KEEP: Final = re.compile(r"(?i)\b(s[1-4]|[ap]2|a2os|e/?e'?|cm2|1st|2nd|3rd|4th)\b")


@dataclass(frozen=True, slots=True)
class Suggestion:
    """One thing that a field may mean.

    Attributes:
        target: what.
        score: above 0; comparable between the suggestions of one field only.
        reasons: why, in words for the informatician; no value of a record stands in them.
        side: `side` axis value that the field's name tells; else empty.
    """

    target: Target
    score: float
    reasons: tuple[str, ...]
    side: str = ""


def suggest(
    name: str, *, values: Iterable[str] = (), section: str = "", unit: str = "", most: int = 3
) -> list[Suggestion]:
    """Up to `most` suggestions for one field, the likeliest first.

    Args:
        name: the field's name or label, as the form has it.
        values: what it was seen to hold; at most 200 are looked at.
        section: the heading it stands under, or the first part of its path.
        unit: its unit, where a data dictionary tells it.
        most: how many at most.
    """
    asked = _Asked.of(name[:_MOST_CHARACTERS], section[:_MOST_CHARACTERS], unit)
    seen = [value.strip() for value, _ in zip(values, range(MOST_VALUES), strict=False) if value.strip()]
    found: list[Suggestion] = []
    for target, wordings in _targets().items():
        alike, wording = max((_alikeness(asked, one), one.text) for one in wordings)
        if alike < _LEAST:
            continue
        weight, reasons = _weighed(target, asked, seen)
        reason = f"the name is like \u201c{wording}\u201d"
        found.append(Suggestion(target, alike * weight, (reason, *reasons), asked.side))
    found.sort(key=lambda one: (-one.score, len(str(one.target)), str(one.target)))
    return found[:most]


@dataclass(frozen=True, slots=True)
class _Wording:
    text: str
    words: tuple[str, ...]
    joined: str
    short: bool


@dataclass(frozen=True, slots=True)
class _Asked:
    words: tuple[str, ...]
    joined: tuple[str, ...]
    section: frozenset[str]
    unit: str
    side: str

    @classmethod
    def of(cls, name: str, section: str, unit: str) -> _Asked:
        raw = _words(name)
        units = [UNITS[word] for word in raw if UNITS.get(word)]
        side = next((SIDES[word] for word in raw if word in SIDES and len(raw) > 1), "")
        told = [word for word in raw if word not in IDLE and word not in UNITS] or raw
        if side:
            told = [word for word in told if word not in SIDES] or told
        wide = [part for word in told for part in SHORT.get(word, word).split()]
        joined = tuple({"".join(told), "".join(raw)})
        return cls(
            tuple(dict.fromkeys([*told, *wide])),
            joined,
            frozenset(_wide(section)),
            unit or "".join(units[:1]),
            side,
        )


def _words(text: str) -> list[str]:
    """The words of a name: `JVP_cmAboveAngle` is jvp, cm, above, angle."""
    words: list[str] = []
    text = _RATIO.sub("e/e'", text)
    for piece in re.split(r"[\s_\-.:,;()\[\]#]+", text):
        if _KEEP.fullmatch(piece):
            words.append(piece.lower())
            continue
        for part in re.split(r"(?<=[a-z0-9])(?=[A-Z])|/", piece):
            lower = part.lower()
            known = _KEEP.fullmatch(lower) or lower in _abbreviations()
            run = _RUN.fullmatch(part)
            if known:
                words.append(lower)
            elif run and (run[2] in SHORT or run[2] in PLAIN):
                words += [run[1].lower(), run[2]]
            else:
                words += [w.lower() for w in _SPLIT.findall(part)]
    return [word for word in words if word]


def _wide(text: str) -> list[str]:
    return [part for word in _words(text) for part in SHORT.get(word, word).split()]


@cache
def _abbreviations() -> frozenset[str]:
    return frozenset(one.wording.lower() for one in catalogue.load().synonyms if one.kind == "abbreviation")


@cache
def _targets() -> Mapping[Target, tuple[_Wording, ...]]:
    """Everything a field can mean, with its wordings."""
    known = catalogue.load()
    said: dict[Target, dict[str, bool]] = {}
    for finding in known.findings.values():
        texts = said.setdefault(Target(finding.id), {})
        texts[finding.label] = False
        texts[" ".join(finding.id.replace("-", " ").split("."))] = False
    for synonym in known.synonyms:
        if ":" not in synonym.id:
            target = Target(synonym.id)
            if target in said:
                said[target][synonym.wording] = synonym.kind == "abbreviation"
    for axis in MURMUR_AXES:
        label = known.axes[axis].label
        texts = said.setdefault(Target("murmur", axis), {})
        for text in (label, f"murmur {axis.replace('response.', '').replace('-', ' ')}", f"murmur {label}"):
            texts[text] = False
        texts |= dict.fromkeys(MURMUR_WORDINGS.get(axis, ()), False)
    for part, texts_ in RECORD_WORDINGS.items():
        said[Target(RECORD, part)] = dict.fromkeys(texts_, False)
    return {
        target: tuple(_wording(*item, whole=target.finding == RECORD) for item in texts.items())
        for target, texts in said.items()
    }


def _wording(text: str, short: bool, *, whole: bool) -> _Wording:
    raw = _words(text)
    told = raw if whole else [word for word in raw if word not in IDLE] or raw
    wide = [part for word in told for part in SHORT.get(word, word).split()]
    return _Wording(text, tuple(dict.fromkeys(wide)), "".join(raw), short)


@cache
def _rarity() -> Mapping[str, float]:
    """How much a word tells: one that stands in many wordings tells little."""
    counts = Counter(
        word for wordings in _targets().values() for word in {w for one in wordings for w in one.words}
    )
    total = len(_targets())
    return {word: log(1 + total / count) for word, count in counts.items()}


def _alikeness(asked: _Asked, wording: _Wording) -> float:
    if wording.short:
        if wording.joined in asked.joined:
            return 1.0
        if wording.joined in asked.words:
            return 0.9 if len(wording.joined) > 1 else 0.4
        return 0.0
    if any(fuzz.ratio(joined, wording.joined) >= 90 for joined in asked.joined):
        return 1.0
    weights = _rarity()
    common = log(1 + len(_targets()))
    met = sum(weights.get(word, common) * _met(word, asked.words) for word in wording.words)
    if not met:
        return 0.0
    whole = sum(weights.get(word, common) for word in wording.words)
    told = sum(
        min(weights.get(word, 2.0), common) for word in asked.words if not _is_short_for(word, asked.words)
    )
    used = sum(
        weights.get(word, common) * _met(word, wording.words)
        for word in asked.words if not _is_short_for(word, asked.words)
    )  # fmt: skip
    recall, precision = met / whole, used / told if told else 0.0
    return 2 * recall * precision / (recall + precision) if recall and precision else 0.0


def _is_short_for(word: str, words: Sequence[str]) -> bool:
    """Whether a word is there a second time, written out."""
    return word in SHORT and all(part in words for part in SHORT[word].split()) and SHORT[word] != word


def _met(word: str, words: Iterable[str]) -> float:
    best = 0.0
    for other in words:
        if other == word:
            return 1.0
        if len(word) > 3 and len(other) > 3:
            if word.startswith(other) or other.startswith(word):
                best = max(best, 0.9)
            elif (ratio := fuzz.ratio(word, other)) >= _ALIKE:
                best = max(best, ratio / 100)
    return best


def _weighed(target: Target, asked: _Asked, seen: Sequence[str]) -> tuple[float, list[str]]:
    """How much what is known beside the name speaks for a target, and why."""
    known = catalogue.load()
    definition = known.findings.get(target.finding)
    weight = 1.0
    reasons: list[str] = []
    if definition is None:
        near = asked.section & {target.axis, "exam" if target.axis == "identifier" else target.axis}
        return (1.2, ["its section fits"]) if near else (weight, reasons)
    about = set(_words(f"{definition.section} {definition.label} {definition.id}"))
    about |= {"vitals"} if definition.section in ("vital", "pressure") else set()
    if asked.section & about:
        weight *= 1.12
        reasons.append("its section fits")
    if target.axis and asked.section & {"murmur", "murmurs"}:
        weight *= 1.25
    if asked.unit and definition.unit:
        same = asked.unit == definition.unit
        weight *= 1.2 if same else 0.8
        reasons += [f"the unit {definition.unit} fits"] if same else []
    if seen:
        fit, reason = values_fit(definition, target.axis, seen)
        weight *= fit
        reasons += [reason] if reason else []
    if asked.side and "side" in definition.qualifiers and not target.axis:
        weight *= 1.05
    return weight, reasons
