"""One sample record tried with a draft: what is coded, in plain words, and what is wrong or worth a look."""

from __future__ import annotations

import html
import re
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from datetime import datetime
from typing import Any, Final

from fhirgallop.cards.opinion import opine
from fhirgallop.cards.policy import Policy
from fhirgallop.codes import systems
from fhirgallop.intake.record import LocalRecord
from fhirgallop.mapping.run import UnknownValue
from fhirgallop.mapping.template_map import TemplateMap
from fhirgallop.mapping.wordings import words_of
from fhirgallop.observations.editions import Edition
from fhirgallop.outcome import Issue
from fhirgallop.phrases import reader
from fhirgallop.phrases.findings import ReadLine
from fhirgallop.pipeline import process
from fhirgallop.reasoning.rulebook import Rulebook

_TAG: Final = re.compile(r"<[^<>]*>")
_SYSTEMS: Final = {systems.SNOMED: "SNOMED CT", systems.LOINC: "LOINC", systems.HPO: "HPO"}


@dataclass(frozen=True, slots=True)
class Said:
    """One coded Observation: in plain words, and its codes as (system, code, display)."""

    words: str
    codes: tuple[tuple[str, str, str], ...]


@dataclass(frozen=True, slots=True)
class ReadWords:
    """A box with a line of text, in parts: each with `found` (read), `left` (not read) or nothing."""

    field: str
    parts: tuple[tuple[str, str], ...]


@dataclass(frozen=True, slots=True)
class Tried:
    """What became of one record.

    Attributes:
        fields: name and what it holds, in words; those without content too.
        said: the Observations; none where an issue is an error.
        issues: everything noticed.
        lines: boxes whose words were read.
        unread: fields that no line read.
        unknown: values that no line knows.
        review: what the rules say of it, as JSON; None where there is no examination.
    """

    fields: tuple[tuple[str, str], ...]
    said: tuple[Said, ...]
    issues: tuple[Issue, ...]
    lines: tuple[ReadWords, ...]
    unread: tuple[str, ...]
    unknown: tuple[UnknownValue, ...]
    review: Mapping[str, Any] | None


def tried(
    record: LocalRecord,
    template: TemplateMap,
    *,
    now: datetime,
    edition: Edition,
    snomed: bool,
    rules: Rulebook,
    policy: Policy,
) -> Tried:
    """A record through every stage; nothing is kept."""
    result = process(record, template, recorded=now, edition=edition, snomed=snomed)
    review = None
    if result.bundle is not None and result.exam is not None:
        review = opine(result.exam, None, now, rules=rules, policy=policy, full=False)[0]
    return Tried(
        held(record),
        tuple(_said(result.bundle)),
        result.issues,
        tuple(_read(record, template)),
        result.unread,
        result.unknown,
        review,
    )


def held(record: LocalRecord) -> tuple[tuple[str, str], ...]:
    """The fields of a record with what they hold, in words."""
    return tuple(
        (name, "; ".join(words_of(value) for value in field.values)) for name, field in record.fields.items()
    )


def _read(record: LocalRecord, template: TemplateMap) -> Iterator[ReadWords]:
    """Every box that the map reads as a line of text, with its words told apart."""
    for line in template.lines:
        field = record.fields.get(line.field)
        for value in field.values if field and line.words else ():
            read = reader(line.words.language).read(words_of(value)) if line.words else None
            if read is not None and read.text.strip():
                yield ReadWords(line.field, tuple(_parts(read)))


def _parts(read: ReadLine) -> Iterator[tuple[str, str]]:
    spans = [(one.start, one.end, "found") for one in read.findings]
    spans += [(one.start, one.end, "left") for one in read.unread]
    at = 0
    for start, end, kind in sorted(spans):
        if start > at:
            yield read.text[at:start], ""
        if end > at:
            yield read.text[max(start, at) : end], kind
        at = max(at, end)
    if at < len(read.text):
        yield read.text[at:], ""


def _said(bundle: Mapping[str, Any] | None) -> Iterator[Said]:
    for entry in bundle["entry"] if bundle else ():
        resource = entry["resource"]
        if resource["resourceType"] != "Observation" or "hasMember" in resource:
            continue
        codes = [*resource["code"].get("coding", ())]
        value = resource.get("valueCodeableConcept")
        codes += value.get("coding", ()) if value else ()
        yield Said(
            _words(resource["text"]["div"]),
            tuple(
                (_SYSTEMS[one["system"]], one["code"], one.get("display", ""))
                for one in codes
                if one.get("system") in _SYSTEMS
            ),
        )


def _words(div: str) -> str:
    return html.unescape(_TAG.sub("", div))
