"""Issue: one diagnostic in FHIR's sense, from any stage, and the OperationOutcome made of many.

Source: FHIR R4 OperationOutcome (value sets issue-severity and issue-type).
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from typing import Any, Literal

Severity = Literal["fatal", "error", "warning", "information"]

SEVERITIES: tuple[Severity, ...] = ("fatal", "error", "warning", "information")
RULE_SYSTEM = "https://fhirgallop.org/fhir/CodeSystem/issue-rule"

_RANK = {severity: rank for rank, severity in enumerate(SEVERITIES)}
_LINE_EXTENSION = "http://hl7.org/fhir/StructureDefinition/operationoutcome-issue-line"
_COLUMN_EXTENSION = "http://hl7.org/fhir/StructureDefinition/operationoutcome-issue-col"


@dataclass(frozen=True, slots=True)
class Issue:
    """One thing that is wrong, or worth knowing, about data.

    Attributes:
        severity: fatal, error, warning or information.
        code: FHIR issue type (structure, required, value, invariant, code-invalid, not-found ...).
        rule: stable id of the rule: the published key where there is one (`obs-6`), else ours.
        text: what is wrong and how to cure it, in plain words, without any patient data.
        expression: FHIRPath of the one node meant, where the thing judged is a FHIR resource.
        field: name of the local field meant, where the thing judged is a record or a map.
        source: file name, sheet or message segment the place belongs to.
        line: line in the source text, from 1; 0 when unknown.
        column: column in that line, from 1; 0 when unknown.
    """

    severity: Severity
    code: str
    rule: str
    text: str
    expression: str = ""
    field: str = ""
    source: str = ""
    line: int = 0
    column: int = 0

    @property
    def is_error(self) -> bool:
        """True when the data must not go on as they are."""
        return self.severity in ("fatal", "error")

    def place(self) -> str:
        """Where it is, for a person: file, line and column, field or expression."""
        parts = []
        if self.source:
            parts.append(self.source)
        if self.line:
            parts.append(f"line {self.line}" + (f" column {self.column}" if self.column else ""))
        if self.field:
            parts.append(f"field {self.field}")
        if self.expression:
            parts.append(self.expression)
        return ", ".join(parts)

    def __str__(self) -> str:
        place = self.place()
        return f"{self.severity}: {place + ': ' if place else ''}{self.text} [{self.rule}]"


def ordered(issues: Iterable[Issue]) -> list[Issue]:
    """Most severe first, then by place; the order is stable and duplicates are gone."""
    return sorted(
        dict.fromkeys(issues),
        key=lambda i: (_RANK[i.severity], i.source, i.line, i.column, i.expression, i.field, i.rule, i.text),
    )


def has_errors(issues: Iterable[Issue]) -> bool:
    """True when any issue is an error or worse."""
    return any(issue.is_error for issue in issues)


def operation_outcome(issues: Iterable[Issue], *, all_well: str = "No issues found.") -> dict[str, Any]:
    """FHIR OperationOutcome (the same in R4, R4B and R5) with at least one issue, as the standard asks."""
    entries = [_outcome_issue(issue) for issue in ordered(issues)]
    if not entries:
        entries = [{"severity": "information", "code": "informational", "details": {"text": all_well}}]
    return {"resourceType": "OperationOutcome", "issue": entries}


def _outcome_issue(issue: Issue) -> dict[str, Any]:
    entry: dict[str, Any] = {}
    position = [
        {"url": url, "valueInteger": number}
        for url, number in ((_LINE_EXTENSION, issue.line), (_COLUMN_EXTENSION, issue.column))
        if number
    ]
    if position:
        entry["extension"] = position
    entry["severity"] = issue.severity
    entry["code"] = issue.code
    entry["details"] = {"coding": [{"system": RULE_SYSTEM, "code": issue.rule}], "text": issue.text}
    where = Issue(issue.severity, "", "", "", field=issue.field, source=issue.source, line=issue.line).place()
    if where:
        entry["diagnostics"] = where
    if issue.expression:
        entry["expression"] = [issue.expression]
    return entry
