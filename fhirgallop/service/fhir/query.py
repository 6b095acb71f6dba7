"""A search as its parameters say it: what the database looks for, what is left to look at in each resource.

Source: FHIR R4 search.html (parameter types, prefixes, modifiers, escaping, unknown parameters); R5 says the
same of what is offered here. A modifier or prefix that is not served is refused, whatever is preferred.
"""

from __future__ import annotations

import re
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field, replace
from datetime import datetime
from typing import Any, Final, Literal, cast, get_args

from fhirgallop.outcome import Issue, Severity
from fhirgallop.service.fhir import dates
from fhirgallop.service.fhir.address import is_id
from fhirgallop.service.fhir.coded import party_key
from fhirgallop.service.fhir.negotiation import GENERAL
from fhirgallop.service.fhir.tokens import Token, findings_of, has_coding, identifier_name, tag_name
from fhirgallop.storage.keys import encounter_key, patient_key
from fhirgallop.storage.resource_search import Order, Prefix, Span, Wanted

Check = Callable[[Mapping[str, Any]], bool]
Total = Literal["none", "estimate", "accurate"]
Parameters = Sequence[tuple[str, str]]

DEFAULT_COUNT: Final = 50
MOST_COUNT: Final = 200
MOST_PARAMETERS: Final = 50
MOST_VALUES: Final = 100
LONGEST: Final = 4000  # characters of one parameter
CURSOR: Final = "_cursor"

_REFERENCES: Final = {"patient": ("subject", "Patient"), "subject": ("subject", "Patient"),
                      "encounter": ("encounter", "Encounter")}  # fmt: skip
_TOKENS: Final = ("code", "category", "status")
_PREFIX: Final = re.compile(r"(eq|ne|gt|lt|ge|le|sa|eb|ap)?(\d.*)", re.ASCII | re.DOTALL)
_STATUS_SYSTEMS: Final = {
    "Observation": "http://hl7.org/fhir/observation-status",
    "DiagnosticReport": "http://hl7.org/fhir/diagnostic-report-status",
}
_PIECES: Final = re.compile(r"[^,|\\]+|[,|\\]")
_ESCAPED: Final = re.compile(r"\\([,|$\\])")
_ORDERS: Final[dict[str, Order]] = {
    "_lastUpdated": "changed", "-_lastUpdated": "-changed", "date": "date", "-date": "-date",
    "recorded": "date", "-recorded": "-date",
}  # fmt: skip

# What may be asked for of each type that is kept, with its search parameter type.
OFFERED: Final[dict[str, dict[str, str]]] = {
    "Observation": {
        "_id": "token", "_lastUpdated": "date", "category": "token", "code": "token", "date": "date",
        "encounter": "reference", "identifier": "token", "patient": "reference", "status": "token",
        "subject": "reference",
    },
    "DiagnosticReport": {
        "_id": "token", "_lastUpdated": "date", "category": "token", "code": "token", "date": "date",
        "encounter": "reference", "identifier": "token", "patient": "reference", "status": "token",
        "subject": "reference",
    },
    "Provenance": {
        "_id": "token", "_lastUpdated": "date", "_tag": "token", "patient": "reference", "recorded": "date",
    },
}  # fmt: skip


@dataclass(slots=True)
class Query:
    """A search that was understood.

    Attributes:
        wanted: what the database looks for.
        checks: what is asked of each resource beside; all must hold.
        order: the order of the answer.
        count: most resources on a page; 0 asks for their number alone.
        total: how exact the total must be; None leaves it to us.
        cursor: where the page starts; empty for the first.
        applied: the parameters that were used, for the address of the page itself.
        issues: what was left out, or refused.
    """

    wanted: Wanted
    checks: list[Check] = field(default_factory=list)
    order: Order = "changed"
    count: int = DEFAULT_COUNT
    total: Total | None = None
    cursor: str = ""
    applied: list[tuple[str, str]] = field(default_factory=list)
    issues: list[Issue] = field(default_factory=list)

    @property
    def narrowed(self) -> bool:
        """Whether anything in particular is asked for."""
        return bool(self.checks) or self.wanted != Wanted(self.wanted.edition, self.wanted.type)


def parse(edition: str, type_: str, parameters: Parameters, *, strict: bool, now: datetime) -> Query:
    """What a search asks for.

    Args:
        edition: FHIR edition.
        type_: one of the types offered.
        parameters: as sent, in order, with repetitions.
        strict: a parameter without meaning is an error, else a warning.
        now: for `ap` dates.

    Returns:
        The query; where its issues hold an error it must not be run.
    """
    reading = _Reading(Query(Wanted(edition, type_)), OFFERED[type_], strict, now)
    if len(parameters) > MOST_PARAMETERS:
        text = f"A search may have {MOST_PARAMETERS} parameters; ask for less at a time."
        reading.refuse("too-costly", "search-too-many-parameters", "", text)
        return reading.query
    for name, value in parameters:
        reading.take(name, value)
    return reading.finished()


class _Reading:
    """Parameter by parameter."""

    def __init__(self, query: Query, offered: Mapping[str, str], strict: bool, now: datetime) -> None:
        self.query = query
        self._offered = offered
        self._strict = strict
        self._now = dates.ms(now)
        self._parts: dict[str, list[Any]] = {}

    def refuse(self, code: str, rule: str, name: str, text: str) -> None:
        """What makes the whole search wrong."""
        self._note("error", code, rule, name, text)

    def take(self, name: str, value: str) -> None:
        """One parameter as it was sent."""
        stem, colon, modifier = name.partition(":")
        if name in GENERAL:
            return
        if not value:
            self._without_meaning(name, "has no value")
        elif len(value) > LONGEST:
            self.refuse("too-long", "search-too-long", stem, f"A parameter has at most {LONGEST} characters.")
        elif name in ("_count", "_total", "_sort", CURSOR):
            self._control(name, value)
        elif stem not in self._offered:
            self._without_meaning(stem, "has no meaning here")
        elif colon and not self._modified(stem, modifier):
            text = f"The modifier of {stem} is not served; leave it out, or ask in another way."
            self.refuse("not-supported", "search-modifier", stem, text)
        else:
            self._criterion(stem, modifier, value)
            self.query.applied.append((name, value))

    def finished(self) -> Query:
        """The query, with what the database looks for."""
        query = self.query
        parts: dict[str, Any] = {name: tuple(found) for name, found in self._parts.items()}
        query.wanted = replace(query.wanted, **parts)
        return query

    def _modified(self, stem: str, modifier: str) -> bool:
        if stem in _REFERENCES:
            return modifier == "identifier"
        return modifier == "not" and stem in _TOKENS

    def _criterion(self, stem: str, modifier: str, value: str) -> None:
        values = _values(value)
        if len(values) > MOST_VALUES:
            self.refuse("too-costly", "search-too-many-values", stem,
                        f"A parameter may have {MOST_VALUES} values; ask for less at a time.")  # fmt: skip
        elif stem == "_id":
            # what is no id is nobody's
            self._add("ids", tuple(filter(is_id, map(_plain, values))))
        elif stem in ("_lastUpdated", "date", "recorded"):
            spans = [span for one in values if (span := self._span(stem, _plain(one)))]
            self._add("updates" if stem == "_lastUpdated" else "dates", tuple(spans))
        elif stem in _REFERENCES:
            self._party(stem, modifier, values)
        elif stem in ("identifier", "_tag"):
            tokens = [_token(one) for one in values]
            if not all(token.code for token in tokens):
                text = f"A value of {stem} names a system alone; name the value too: system|value."
                self.refuse("not-supported", "search-system-alone", stem, text)
            make = tag_name if stem == "_tag" else identifier_name
            self._add("names", tuple(make(token) for token in tokens))
        else:
            self._codes(stem, [_token(one) for one in values], negated=modifier == "not")

    def _codes(self, stem: str, tokens: list[Token], *, negated: bool) -> None:
        def holds(resource: Mapping[str, Any]) -> bool:
            if stem == "status":
                found = any(token.fits(_status_system(resource), resource.get("status")) for token in tokens)
            else:
                found = any(has_coding(resource.get(stem), token) for token in tokens)
            return found is not negated

        self.query.checks.append(holds)
        if stem == "code" and not negated:
            possible = [findings_of(token) for token in tokens]
            if all(one is not None for one in possible):
                self._add("findings", tuple(sorted({id_ for one in possible for id_ in one or ()})))

    def _party(self, stem: str, modifier: str, values: list[str]) -> None:
        element, type_ = _REFERENCES[stem]
        digest = encounter_key if stem == "encounter" else patient_key
        part = "encounters" if stem == "encounter" else "patients"
        if modifier:
            tokens = [_token(one) for one in values]
            if not all(token.system and token.code for token in tokens):
                text = (
                    f"An identifier says nothing without the system that gave it; "
                    f"ask by {stem}:identifier=system|value."
                )
                self.refuse("value", "search-identifier-system", stem, text)
            self._add(part, tuple(digest(token.system or "", token.code) for token in tokens))
            return
        if "subject" not in self._offered:
            text = "A Provenance names no patient; ask by patient:identifier=system|value."
            self.refuse("not-supported", "search-patient-by-id", stem, text)
            return
        addresses = [one if "/" in one else f"{type_}/{one}" for one in map(_plain, values)]
        self._add(part, tuple(party_key({"reference": one}, digest) for one in addresses))
        # the digest of an id is also that of an identifier without a system: only the address itself counts
        self.query.checks.append(lambda resource: _address(resource, element) in addresses)
        hint = (
            f"Found by address only. Where {stem} is known by an identifier, as the clinics send it, ask by "
            f"{stem}:identifier=system|value."
        )
        self._note("information", "informational", "search-by-address", stem, hint)

    def _span(self, stem: str, text: str) -> Span | None:
        found = _PREFIX.fullmatch(text)
        meant = dates.interval(found[2].replace(" ", "+")) if found else None
        if found is None or meant is None:
            said = f"A value of {stem} is no date such as 2026-03, ge2026-03-14 or lt2026-03-14T10:00:00Z."
            self.refuse("value", "search-date", stem, said)
            return None
        start, end = meant
        if found[1] != "ap":
            return Span(cast("Prefix", found[1] or "eq"), start, end)
        margin = max(abs(self._now - start) // 10, 0)
        return Span("overlaps", start - margin, end + margin)

    def _control(self, name: str, value: str) -> None:
        query = self.query
        if name == CURSOR:
            query.cursor = value
            return
        if name == "_count" and value.isascii() and value.isdigit() and len(value) < 10:
            query.count = min(int(value), MOST_COUNT)
            query.applied.append((name, str(query.count)))
        elif name == "_total" and value in get_args(Total):
            query.total = cast("Total", value)
            query.applied.append((name, value))
        elif name == "_sort" and value in _ORDERS and value.lstrip("-") in self._offered:
            query.order = _ORDERS[value]
            query.applied.append((name, value))
        elif name == "_sort":
            self._without_meaning(name, "names an order that is not served")
        else:
            self.refuse("value", "search-control", name, f"The value of {name} is none that it may have.")

    def _without_meaning(self, name: str, why: str) -> None:
        offered = ", ".join(self._offered)
        text = f"A parameter {why} and was left out; searched by are {offered}."
        severity: Severity = "error" if self._strict else "warning"
        self._note(severity, "not-supported", "search-unknown-parameter", name, text)

    def _note(self, severity: Severity, code: str, rule: str, name: str, text: str) -> None:
        # the name comes from the client: only one of ours is repeated
        known = name in self._offered or name.startswith("_")
        field_ = name if known and name.replace("_", "").isalpha() and len(name) < 40 else ""
        self.query.issues.append(Issue(severity, code, rule, text, field=field_))

    def _add(self, part: str, alternatives: tuple[Any, ...]) -> None:
        self._parts.setdefault(part, []).append(alternatives)


def _values(text: str) -> list[str]:
    """The alternatives between commas that are not escaped."""
    return [one for one in _split(text, ",") if one]


def _split(text: str, mark: str) -> list[str]:
    """The parts between marks; a mark after a backslash is none. Escapes stay as they are."""
    parts = [""]
    escaped = False
    for piece in _PIECES.findall(text):
        if piece == mark and not escaped:
            parts.append("")
        else:
            parts[-1] += piece
        escaped = piece == "\\" and not escaped
    return parts


def _plain(text: str) -> str:
    return _ESCAPED.sub(r"\1", text)


def _token(text: str) -> Token:
    first, *rest = _split(text, "|")
    if not rest:
        return Token(None, _plain(first))
    return Token(_plain(first), _plain("|".join(rest)))


def _address(resource: Mapping[str, Any], element: str) -> Any:
    party = resource.get(element)
    return party.get("reference") if isinstance(party, Mapping) else None


def _status_system(resource: Mapping[str, Any]) -> str:
    return _STATUS_SYSTEMS.get(str(resource.get("resourceType")), "")
