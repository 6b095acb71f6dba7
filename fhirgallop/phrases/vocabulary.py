"""The wordings of one language: terminology/phrases/<language>.csv, and for English the catalogue's own.

Columns of the file: `use`, `wording`, `means`, `denied`; terminology/phrases/README.md tells of each use.
"""

from __future__ import annotations

import csv
import re
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field, replace
from functools import cache
from typing import Final

from fhirgallop import assets
from fhirgallop.errors import AssetError
from fhirgallop.exam import catalogue
from fhirgallop.exam.catalogue import Catalogue, FindingDefinition
from fhirgallop.phrases.tokens import words

Pair = tuple[str, str]

_POLARITIES: Final = frozenset(
    {
        "no",
        "maybe",
        "yes",
        "not-examined",
        "not-examinable",
        "past",
        "family",
        "if",
        "patient",
        "today",
        "no-today",
    }
)
_PLAIN_USES: Final = ("kind", "where", "way", "manoeuvre", "link", "stop", "idle", "grade", "not", "since")
_SILENT: Final = frozenset({"idle", "link", "stop"})
_CUES: Final = ("before", "after", "beside")
# What an examination line does not state: complaints, and diagnoses made elsewhere.
_ELSEWHERE: Final = ("symptom.", "lesion.", "device.", "patient.", "exam.")


@dataclass(frozen=True, slots=True)
class Head:
    """A finding that a wording names; several ids where what is said beside it decides which one is meant."""

    findings: tuple[FindingDefinition, ...]
    presence: str = ""
    answers: tuple[str, ...] = ()
    qualifiers: tuple[Pair, ...] = ()
    denied: str = ""


@dataclass(frozen=True, slots=True)
class Sense:
    """Everything that one wording can mean; `silent` when it says nothing by itself."""

    heads: tuple[Head, ...] = ()
    values: tuple[Pair, ...] = ()
    plain: Mapping[str, str] = field(default_factory=dict)
    cues: tuple[Pair, ...] = ()
    silent: bool = field(init=False, default=False)

    def __post_init__(self) -> None:
        object.__setattr__(self, "silent", not self.plain.keys().isdisjoint(_SILENT))

    def also(self, other: Sense) -> Sense:
        """Both senses of one wording."""
        heads = self.heads
        if len(heads) == len(other.heads) == 1:
            ids = dict.fromkeys((*heads[0].findings, *other.heads[0].findings))
            heads = (replace(heads[0], findings=tuple(ids)),)
        else:
            heads = heads or other.heads
        values = tuple(dict.fromkeys((*self.values, *other.values)))
        cues = tuple(dict.fromkeys((*self.cues, *other.cues)))
        return Sense(heads, values, {**self.plain, **other.plain}, cues)


# First word -> second word (empty for none) -> further words and sense, longest first.
Entries = Mapping[str, Mapping[str, tuple[tuple[tuple[str, ...], Sense], ...]]]


@dataclass(frozen=True)
class Vocabulary:
    """One language. `entries` finds the longest wording at a place."""

    language: str
    entries: Entries
    opposites: Mapping[Pair, str]
    decimal: str


@cache
def load(language: str) -> Vocabulary:
    """The wordings of a language, such as `en`.

    Raises:
        AssetError: there is no such file, or a row of it is wrong.
    """
    if not re.fullmatch(r"[a-z]{2}", language):
        raise AssetError(f"{language!r} is no language code; write two letters, such as en")
    known = catalogue.load()
    with assets.path("terminology", "phrases", f"{language}.csv").open(encoding="utf-8", newline="") as file:
        rows = list(csv.DictReader(file))
    found: dict[tuple[str, ...], Sense] = {}
    dropped = {row["wording"] for row in rows if row["use"] == "drop"}
    plural = next((row["wording"] for row in rows if row["use"] == "plural"), "")
    own = {words(row["wording"]) for row in rows}
    if language == "en":
        for wording, sense in _of_catalogue(known, plural):
            key = words(wording)
            if key and key not in own and wording.casefold() not in dropped and len(wording) > 1:
                found[key] = found[key].also(sense) if key in found else sense
    opposites: dict[Pair, str] = {}
    decimal = "."
    for row in rows:
        use = row["use"]
        if use == "opposite":
            finding, _, answer = row["means"].partition("=")
            opposites[finding, answer] = row["denied"]
        elif use == "decimal":
            decimal = row["wording"]
        elif use not in ("drop", "plural"):
            sense, key = _sense(row, known, f"phrases/{language}.csv"), words(row["wording"])
            found[key] = found[key].also(sense) if key in found else sense
    return Vocabulary(language, _by_first_words(found), opposites, decimal)


def _by_first_words(found: Mapping[tuple[str, ...], Sense]) -> Entries:
    grouped: dict[str, dict[str, list[tuple[tuple[str, ...], Sense]]]] = {}
    for key, sense in found.items():
        if key:
            second = key[1] if len(key) > 1 else ""
            grouped.setdefault(key[0], {}).setdefault(second, []).append((key[2:], sense))
    return {
        first: {
            second: tuple(sorted(rest, key=lambda one: -len(one[0]))) for second, rest in by_second.items()
        }
        for first, by_second in grouped.items()
    }


def _of_catalogue(known: Catalogue, plural: str) -> Iterator[tuple[str, Sense]]:
    """Labels and synonyms of the catalogue, so that suggestions and lines use the same wordings."""
    for finding in known.findings.values():
        if _readable(finding):
            yield from _forms(re.sub(r"\s*\(.*?\)", "", finding.label), finding, plural)
    for synonym in known.synonyms:
        axis, colon, value = synonym.id.partition(":")
        if not colon:
            definition = known.findings.get(synonym.id)
            if definition and _readable(definition):
                yield from _forms(synonym.wording, definition, plural)
        elif axis in ("rhythm", "ventricular-conduction", "av-conduction"):
            yield synonym.wording, _standing_alone(known, axis, value)
    for axis in ("rhythm", "ventricular-conduction", "av-conduction"):
        for one in known.axes[axis].values.values():
            if one.id not in ("normal", "other", "bigeminy", "trigeminy"):
                yield re.sub(r"\s*\(.*?\)", "", one.label), _standing_alone(known, axis, one.id)


def _standing_alone(known: Catalogue, axis: str, value: str) -> Sense:
    """An answer that names its finding by itself, such as atrial fibrillation."""
    finding = next(one for one in known.findings.values() if one.answers == axis)
    return Sense(heads=(Head((finding,), answers=(value,)),))


def _readable(finding: FindingDefinition) -> bool:
    if finding.kind in ("text", "panel") or finding.id.startswith(_ELSEWHERE):
        return False
    return finding.section != "haemodynamic" or finding.kind == "quantity"


def _forms(wording: str, finding: FindingDefinition, plural: str) -> Iterator[tuple[str, Sense]]:
    sense = Sense(heads=(Head((finding,)),))
    yield wording, sense
    if plural and finding.kind == "sign" and not wording.endswith(plural):
        yield wording + plural, sense


def _sense(row: Mapping[str, str], known: Catalogue, file: str) -> Sense:
    use, means = row["use"], row["means"]
    try:
        if use in ("finding", "answer"):
            return Sense(heads=(_head(means.split(), row["denied"], known, answer=use == "answer"),))
        if use == "list":
            return Sense(heads=tuple(_head([one], "", known, answer=False) for one in means.split()))
        if use == "value":
            pairs = tuple(_pair(one.partition(":"), known) for one in means.split())
            return Sense(values=pairs)
    except KeyError as wrong:
        raise AssetError(f"{file}: {row['wording']!r} means {wrong}, which the catalogue lacks") from None
    if use in _CUES and means in _POLARITIES:
        return Sense(cues=((use, means),))
    if use in _PLAIN_USES:
        return Sense(plain={use: means or use})
    raise AssetError(f"{file}: the row of {row['wording']!r} has an unknown use or meaning")


def _head(parts: list[str], denied: str, known: Catalogue, *, answer: bool) -> Head:
    ids = [part for part in parts if "=" not in part]
    pairs = [part.partition("=") for part in parts if "=" in part]
    answers: tuple[str, ...] = ()
    if answer:
        finding, _, value = pairs.pop(0)
        ids = [finding]
        answers = (_pair((known.findings[finding].answers, "", value), known)[1],)
    presence = next((value for axis, _, value in pairs if axis == "presence"), "")
    qualifiers = tuple(_pair(pair, known) for pair in pairs if pair[0] != "presence")
    return Head(tuple(known.findings[one] for one in ids), presence, answers, qualifiers, denied)


def _pair(pair: tuple[str, str, str], known: Catalogue) -> Pair:
    axis, _, value = pair
    return axis, known.axes[axis].values[value].id
