"""The reader: one line of text in, findings, unread words and issues out. Never raises on what is written."""

from __future__ import annotations

from functools import cache
from typing import Final

from fhirgallop import assets
from fhirgallop.exam import catalogue
from fhirgallop.exam.catalogue import Catalogue
from fhirgallop.exam.entry import Entry
from fhirgallop.exam.presence import Presence
from fhirgallop.outcome import Issue, Severity
from fhirgallop.phrases.building import Builder
from fhirgallop.phrases.clauses import Phrase, clauses
from fhirgallop.phrases.findings import ReadFinding, ReadLine, Unread
from fhirgallop.phrases.items import Item, items
from fhirgallop.phrases.scope import OUTSIDE, settle
from fhirgallop.phrases.sharing import share
from fhirgallop.phrases.tokens import Token, tokens
from fhirgallop.phrases.vocabulary import Vocabulary, load

MAX_CHARACTERS: Final = 1_000_000

_TEXTS: Final[dict[str, tuple[Severity, str]]] = {
    "phrase-scope-doubtful": (
        "warning",
        (
            "It is doubtful how far a denial or doubt reaches; this finding is kept as uncertain. Repeat "
            "the word, or join the list with 'or'."
        ),
    ),
    "phrase-denied-detail": (
        "warning",
        (
            "A described kind of this finding is denied, which does not deny the finding; it is kept as "
            "uncertain."
        ),
    ),
    "phrase-denied-answer": (
        "warning",
        (
            "An answer or number is denied or doubted, and what is so instead is not said; the words were "
            "not read."
        ),
    ),
    "phrase-uncertain-answer": (
        "warning",
        "What is said of this finding is uncertain; no answer was taken from it.",
    ),
    "phrase-number-implausible": (
        "warning",
        "The number is outside what is plausible, or its unit does not fit; it was not read. Check it.",
    ),
    "phrase-unknown-word": (
        "warning",
        "A word beside this finding is not known and may change what is meant; nothing certain was read.",
    ),
    "phrase-unit-missing": (
        "warning",
        "The number has no unit, and there is no customary one; it was not read. Add the unit.",
    ),
    "phrase-which": (
        "warning",
        "Several findings have this name, and it is not said which is meant; it was not read.",
    ),
    "phrase-contradiction": (
        "error",
        "The line says of one finding that it is present and that it is absent; keep what is true.",
    ),
    "phrase-too-long": (
        "error",
        "The text is longer than a line of an examination can be; it was not read. Shorten it.",
    ),
}


class LineReader:
    """Reads lines of one language."""

    def __init__(self, vocabulary: Vocabulary, known: Catalogue) -> None:
        self._vocabulary = vocabulary
        self._known = known
        self._builder = Builder(known, vocabulary)

    def read(self, text: str) -> ReadLine:
        """One line, or several: findings in the order in which they are written.

        Args:
            text: what the clinician wrote, at most `MAX_CHARACTERS` characters.
        """
        if len(text) > MAX_CHARACTERS:
            whole = (Unread(0, len(text)),)
            return ReadLine(text, (), whole, (_issue("phrase-too-long"),))
        cut = tokens(text)
        found = items(text, cut, self._vocabulary)
        parsed = clauses(found, cut)
        findings: list[ReadFinding] = []
        issues: list[Issue] = []
        why: dict[int, str] = {}
        for clause in parsed:
            share(clause)
            settle(clause)
            for phrase in clause:
                self._phrase(phrase, cut, findings, issues, why)
            _reasons(clause, findings, text, cut)
        findings.sort(key=lambda one: (one.start, one.end))
        issues += self._contradictions(findings)
        return ReadLine(text, tuple(findings), _unread(found, cut, why), tuple(dict.fromkeys(issues)))

    def _phrase(
        self,
        phrase: Phrase,
        cut: list[Token],
        findings: list[ReadFinding],
        issues: list[Issue],
        why: dict[int, str],
    ) -> None:
        if phrase.said in OUTSIDE:
            for item in (*phrase.items, *phrase.extra):
                for place in range(item.first, item.unit_last + 1):
                    why[place] = OUTSIDE[phrase.said]
            return
        built = self._builder.build(phrase)
        if built.issue:
            finding = built.entries[0].finding if built.entries else ""
            issues.append(_issue(built.issue, self._known.findings[finding].label if finding else ""))
        if not built.entries:
            for item in (*phrase.items, *phrase.extra):
                item.used = False
                if built.issue:
                    why[item.first] = "doubtful"
            return
        used = [item for item in (*phrase.items, *phrase.extra) if item.used]
        start = min(cut[item.first].start for item in used)
        end = max(cut[_last(item)].end for item in used)
        findings += [ReadFinding(entry, start, end, built.rule) for entry in built.entries]

    def _contradictions(self, findings: list[ReadFinding]) -> list[Issue]:
        said: dict[str, set[Presence]] = {}
        for one in findings:
            said.setdefault(one.entry.finding, set()).add(one.entry.presence)
        return [
            _issue("phrase-contradiction", self._known.findings[finding].label)
            for finding, presences in said.items()
            if {Presence.PRESENT, Presence.ABSENT} <= presences
        ]


def languages() -> tuple[str, ...]:
    """The languages that there are files for."""
    return tuple(sorted(path.stem for path in assets.path("terminology", "phrases").glob("*.csv")))


@cache
def reader(language: str = "en") -> LineReader:
    """The reader of a language.

    Raises:
        AssetError: no file of wordings for it.
    """
    return LineReader(load(language), catalogue.load())


def _issue(rule: str, label: str = "") -> Issue:
    severity, text = _TEXTS[rule]
    return Issue(severity, "business-rule", rule, f"{label}: {text}" if label else text)


def _last(item: Item) -> int:
    return item.unit_last if item.unit is not None else item.last


def _reasons(clause: list[Phrase], findings: list[ReadFinding], text: str, cut: list[Token]) -> None:
    """`unable to assess JVP due to habitus`: the words after `due to` are the reason."""
    for phrase in clause:
        if phrase.said not in ("not-examined", "not-examinable") or not phrase.items:
            continue
        since = next((n for n, item in enumerate(phrase.items) if "since" in item.sense.plain), None)
        if since is None or since + 1 >= len(phrase.items):
            continue
        told = phrase.items[since:]
        for item in told:
            item.used = True
        start, end = cut[told[1].first].start, cut[_last(told[-1])].end
        last = findings[-1]
        entry = last.entry
        reasoned = Entry(entry.finding, entry.presence, reason=text[start:end])
        findings[-1] = ReadFinding(reasoned, last.start, max(last.end, end), last.rule)


def _unread(found: list[Item], cut: list[Token], why: dict[int, str]) -> tuple[Unread, ...]:
    """Runs of words that went into no finding; small words between two such runs belong to them."""
    runs: list[Unread] = []
    start = end = -1
    reason = "unknown"
    filled = False

    def close() -> None:
        nonlocal start, filled, reason
        if start >= 0 and filled:
            runs.append(Unread(cut[start].start, cut[end].end, reason))
        start, filled, reason = -1, False, "unknown"

    for item in found:
        outside = why.get(item.first, "")
        idle = item.sense.silent and not item.sense.heads and outside not in OUTSIDE.values()
        if item.used or cut[item.first].word in ",;.\n()":
            close()
            if item.used and item.unit_last > _last(item):
                start, end, filled = _last(item) + 1, item.unit_last, True
            continue
        if idle:
            continue
        start = item.first if start < 0 else start
        end, filled = item.unit_last, True
        reason = outside or reason
    close()
    return tuple(runs)
