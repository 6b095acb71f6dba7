"""Phrases to findings: which finding, which answer, qualifiers and number; and what may be coded of it."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Final

from fhirgallop.exam.catalogue import Catalogue, FindingDefinition
from fhirgallop.exam.checks import ALSO_OF_ABSENT
from fhirgallop.exam.entry import Entry, Qualifier
from fhirgallop.exam.presence import Presence
from fhirgallop.phrases import measures
from fhirgallop.phrases.clauses import Phrase
from fhirgallop.phrases.items import Item
from fhirgallop.phrases.scan import Scan
from fhirgallop.phrases.scope import strong
from fhirgallop.phrases.vocabulary import Head, Vocabulary

PRESENCE: Final = {
    "": Presence.PRESENT,
    "yes": Presence.PRESENT,
    "no": Presence.ABSENT,
    "maybe": Presence.UNCERTAIN,
    "not-examined": Presence.NOT_EXAMINED,
    "not-examinable": Presence.NOT_EXAMINABLE,
}
_PRESSURES: Final = ("pressure.systolic", "pressure.diastolic")
_TIMED: Final = (("systolic", "systolic"), ("diastolic", "diastolic"))


@dataclass(slots=True)
class Built:
    """What one phrase says."""

    entries: list[Entry]
    rule: str
    issue: str = ""


class Builder:
    """Builds the entries of phrases in one language."""

    def __init__(self, catalogue: Catalogue, vocabulary: Vocabulary) -> None:
        self._known = catalogue
        self._opposites = vocabulary.opposites

    def build(self, phrase: Phrase) -> Built:
        """The entries of a phrase; items that went into them are marked as used."""
        if phrase.head is None or phrase.anchor is None:
            return Built([], "")
        findings = self._refined(phrase)
        number = self._number(phrase)
        if number is not None:
            return number
        answers, qualifiers = self._described(phrase, findings)
        if answers:
            return self._answered(phrase, findings, answers, qualifiers)
        return self._signed(phrase, findings, qualifiers)

    # Which finding: murmur + systolic is murmur.systolic.

    def _refined(self, phrase: Phrase) -> list[FindingDefinition]:
        head = phrase.head
        assert head is not None  # noqa: S101 - build() asks first
        findings = list(head.findings)
        kinds = [item for item in (*phrase.items, *phrase.extra) if "kind" in item.sense.plain]
        found: list[FindingDefinition] = []
        for item in kinds:
            for one in findings:
                found += self._kind(item, one)
        if found:
            return list(dict.fromkeys(found))
        timings = [value for axis, value in head.qualifiers if axis == "timing"]
        for item in (*phrase.items, *phrase.extra):
            timings += [value for axis, value in item.sense.values if axis == "timing"]
        for one in findings[:1]:
            for timing in timings:
                for part, kind in _TIMED:
                    child = self._known.findings.get(f"{one.id}.{kind}")
                    if child is not None and (timing.endswith(f"-{part}") or timing == f"holo{part}"):
                        return [child]
        return findings

    def _kind(self, item: Item, one: FindingDefinition) -> list[FindingDefinition]:
        """`systolic` + murmur; `systolic or` + diastolic murmur are both."""
        kind = item.plain("kind")
        child = self._known.findings.get(f"{one.id}.{kind}")
        beside = self._known.findings.get(f"{one.parent}.{kind}") if one.parent else None
        if child is None and beside is None:
            return []
        item.used = True
        return [child] if child is not None else [beside, one] if beside is not None else []

    # Numbers.

    def _number(self, phrase: Phrase) -> Built | None:
        anchor, head = phrase.anchor, phrase.head
        assert anchor is not None  # noqa: S101 - build() asks first
        assert head is not None  # noqa: S101
        item = next(
            (i for i in phrase.items if i.first > anchor.first and (i.number is not None or i.fraction)), None
        )
        pair = any(one.id == "vital.blood-pressure" for one in head.findings)
        quantities = [one for one in head.findings if one.kind == "quantity"]
        if item is None or not (pair or quantities):
            if item is not None and item.number is not None:
                return self._class(phrase, item)
            return None
        if pair:
            return self._pressures(phrase, item)
        if item.number is None:
            return (
                Built([], "", "phrase-number-implausible") if len(quantities) == len(head.findings) else None
            )
        fitting = [(one, measure) for one in quantities if (measure := measures.measure(item, one))]
        if not fitting:
            lone = len(quantities) == len(head.findings)
            if item.unit is None and item.number is not None and (lone or not self._other(phrase)):
                return Built([], "", "phrase-unit-missing")
            return Built([], "", "phrase-number-implausible")
        finding, measure = fitting[0]
        if not measures.plausible(measure, finding):
            return Built([], "", "phrase-number-implausible")
        return self._measured(phrase, item, [Entry(finding.id, measure=measure)], [finding])

    def _other(self, phrase: Phrase) -> bool:
        head = phrase.head
        return head is not None and any(
            one.answers == axis
            for one in head.findings
            for item in phrase.items
            for axis, _ in item.sense.values
        )

    def _class(self, phrase: Phrase, item: Item) -> Built | None:
        """NYHA III: an answer that is a number."""
        head = phrase.head
        for one in head.findings if head else ():
            value = str(item.number)
            if item.high is None and not item.unit and value in self._known.answers(one):
                if phrase.said not in ("", "yes"):
                    return Built([], "", "phrase-denied-answer")
                item.used = True
                _take(phrase)
                return Built([Entry(one.id, answers=(value,))], "answer")
        return None

    def _pressures(self, phrase: Phrase, item: Item) -> Built:
        findings = [self._known.findings[one] for one in _PRESSURES]
        if item.fraction is None:
            return Built([], "", "phrase-number-implausible")
        parts = []
        for finding, value in zip(findings, item.fraction, strict=True):
            one = Item(item.first, item.last)
            one.number, one.unit = value, item.unit
            parts.append(measures.measure(one, finding))
        upper, lower = parts
        if upper is None or lower is None or upper.value <= lower.value:
            return Built([], "", "phrase-number-implausible")
        if not (measures.plausible(upper, findings[0]) and measures.plausible(lower, findings[1])):
            return Built([], "", "phrase-number-implausible")
        entries = [Entry(f.id, measure=m) for f, m in zip(findings, (upper, lower), strict=True)]
        return self._measured(phrase, item, entries, findings)

    def _measured(
        self, phrase: Phrase, item: Item, entries: list[Entry], findings: list[FindingDefinition]
    ) -> Built:
        if phrase.said not in ("", "yes"):
            return Built([], "", "phrase-denied-answer")
        if _stranger(phrase, item.first):
            return Built([], "", "phrase-unknown-word")
        item.used = True
        answers, qualifiers = self._described(phrase, [*findings, *self._choices(phrase)])
        _take(phrase)
        said = {one.id: one for one in findings}
        measured = [replace(e, qualifiers=_fitting(said[e.finding], qualifiers)) for e in entries]
        return Built([*measured, *(Entry(one, answers=tuple(v)) for one, v in answers.items())], "number")

    def _choices(self, phrase: Phrase) -> list[FindingDefinition]:
        """`pulse 72 regular`: the same name with a number and with an answer."""
        return [one for one in phrase.head.findings if one.kind == "choice"] if phrase.head else []

    # Answers and qualifiers.

    def _described(
        self, phrase: Phrase, findings: list[FindingDefinition]
    ) -> tuple[dict[str, list[str]], list[Qualifier]]:
        """Answers by finding, and qualifiers that at least one of the findings takes."""
        head = phrase.head
        assert head is not None  # noqa: S101 - build() asks first
        answers: dict[str, list[str]] = {}
        if head.answers:
            answers[findings[0].id] = list(head.answers)
        qualifiers = [Qualifier(axis, value) for axis, value in head.qualifiers]
        scan = Scan(findings, answers, qualifiers)
        for item in (*phrase.items, *phrase.extra):
            if item is not phrase.anchor:
                scan.item(item)
        scan.end()
        return answers, qualifiers

    def _answered(
        self,
        phrase: Phrase,
        findings: list[FindingDefinition],
        answers: dict[str, list[str]],
        qualifiers: list[Qualifier],
    ) -> Built:
        said = phrase.said
        if said not in ("", "yes"):
            if said != "no":
                return self._unsure(phrase, answers)
            turned = {
                finding: [self._opposites.get((finding, value), "") for value in values]
                for finding, values in answers.items()
            }
            if not all(all(values) for values in turned.values()):
                return Built([], "", "phrase-denied-answer")
            answers = turned
        last = max((i.first for i in phrase.items if i.used and i.sense.values), default=-1)
        if _stranger(phrase, last):
            return self._unsure(phrase, answers, "phrase-unknown-word")
        _take(phrase)
        by_id = {one.id: one for one in findings}
        entries = []
        for finding, values in answers.items():
            own = _fitting(by_id[finding], qualifiers)
            entries.append(Entry(finding, answers=tuple(dict.fromkeys(values)), qualifiers=own))
        return Built(entries, "answer")

    def _unsure(
        self, phrase: Phrase, answers: dict[str, list[str]], issue: str = "phrase-uncertain-answer"
    ) -> Built:
        """`possibly loud P2`: that it is uncertain is kept, the answer is not."""
        presence = PRESENCE[phrase.said] if phrase.said not in ("", "yes", "no") else Presence.UNCERTAIN
        _take(phrase)
        return Built([Entry(finding, presence) for finding in answers], phrase.rule or "doubted", issue)

    # Signs.

    def _signed(
        self, phrase: Phrase, findings: list[FindingDefinition], qualifiers: list[Qualifier]
    ) -> Built:
        head, said = phrase.head, phrase.said
        assert head is not None  # noqa: S101 - build() asks first
        signs = [one for one in findings if one.kind == "sign"]
        if said in ("not-examined", "not-examinable"):
            _take(phrase)
            chosen = signs[:1] if findings[0].kind == "sign" else findings[:1]
            return Built([Entry(one.id, PRESENCE[said]) for one in chosen], said)
        if not signs or findings[0].kind != "sign":
            return self._missing(phrase, findings)
        if head.denied == "all":
            signs = _one_of(signs, qualifiers, said)
            if not signs:
                return Built([], "", "phrase-which")
        elif len(head.findings) > 1:
            signs = signs[:1]
        if head.presence and said not in ("", "yes"):
            return Built([], "", "phrase-denied-answer")
        presence = Presence(head.presence) if head.presence else PRESENCE[said]
        rule, issue = phrase.rule or "said", ""
        if rule == "scope-doubtful":
            issue = "phrase-scope-doubtful"
        sure = presence is Presence.ABSENT or (presence is Presence.PRESENT and not strong(phrase))
        if sure and _stranger(phrase):
            presence, rule, issue = Presence.UNCERTAIN, "scope-doubtful", "phrase-unknown-word"
        if presence is Presence.ABSENT:
            qualifiers = _of_absent(head, qualifiers)
            if _detailed(qualifiers):
                presence, rule, issue = Presence.UNCERTAIN, "scope-doubtful", "phrase-denied-detail"
        if len(signs) > 1 and presence is Presence.PRESENT and _either(phrase):
            presence, rule = Presence.UNCERTAIN, "doubted"
        _take(phrase)
        entries = [Entry(one.id, presence, qualifiers=_fitting(one, qualifiers)) for one in signs]
        return Built(entries, rule, issue)

    def _missing(self, phrase: Phrase, findings: list[FindingDefinition]) -> Built:
        """`P2 absent`, `no a wave`: an answer of its own."""
        if phrase.said == "no":
            for one in findings:
                if "absent" in self._known.answers(one):
                    _take(phrase)
                    return Built([Entry(one.id, answers=("absent",))], "answer")
        if phrase.said == "maybe" and findings[0].kind == "choice":
            return Built([], "", "phrase-uncertain-answer")
        return Built([], "")


def _of_absent(head: Head, qualifiers: list[Qualifier]) -> list[Qualifier]:
    """`no ankle oedema` denies oedema there: what the wording implies is then not a detail."""
    if head.denied != "absent":
        return qualifiers
    implied = {Qualifier(axis, value) for axis, value in head.qualifiers}
    return [qualifier for qualifier in qualifiers if qualifier not in implied]


def _detailed(qualifiers: list[Qualifier]) -> bool:
    return any(qualifier.axis not in ALSO_OF_ABSENT for qualifier in qualifiers)


def _one_of(
    signs: list[FindingDefinition], qualifiers: list[Qualifier], said: str
) -> list[FindingDefinition]:
    """`no click` denies every kind of click; a click that is there must be said to be of one kind."""
    if said == "no" and not qualifiers:
        return signs
    fitting = [one for one in signs if {q.axis for q in qualifiers} <= one.qualifiers]
    return fitting if len(fitting) == 1 else []


def _take(phrase: Phrase) -> None:
    """Marks the name and the cues as read."""
    if phrase.anchor is not None:
        phrase.anchor.used = True
    dated = any(means in ("today", "no-today") for _, means, _ in phrase.cues())
    for _, means, item in phrase.cues():
        item.used = item.used or not (dated and means == "past")


def _stranger(phrase: Phrase, before: int | None = None) -> bool:
    """Whether an unknown word, or a bare number (`oedema 0`, `murmur 0/6`), may turn the meaning round."""
    return any(
        (item.unknown or (before is None and (item.number is not None or _is_nought(item))))
        and (before is None or item.first < before)
        for item in phrase.items
        if not item.used
    )


def _is_nought(item: Item) -> bool:
    return item.fraction is not None and item.fraction[0] == 0


def _fitting(finding: FindingDefinition, qualifiers: list[Qualifier]) -> tuple[Qualifier, ...]:
    return _in_order([one for one in qualifiers if one.axis in finding.qualifiers])


def _either(phrase: Phrase) -> bool:
    return any(item.plain("link") in ("or", "vs", "slash") for item in phrase.items)


def _in_order(qualifiers: list[Qualifier]) -> tuple[Qualifier, ...]:
    return tuple(sorted(dict.fromkeys(qualifiers), key=lambda q: (q.axis, q.value)))
