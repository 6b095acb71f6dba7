"""Ways to read that several tests of intake share."""

from __future__ import annotations

import io
from collections.abc import Callable, Sequence
from typing import Any

import openpyxl
import pytest

ORU = [
    "MSH|^~\\&|FORM|FERNWOOD|CODER|FERNWOOD|20260314||ORU^R01^ORU_R01|M-1|P|2.5.1||||||UNICODE UTF-8",
    "PID|1||P-17^^^FERNWOOD^MR",
    "PV1|1|O|||||||||||||||||V-9",
    "OBR|1|PL-1|FI-1|HEART^Heart examination^L|||20260314093000+0100"
    + "|" * 18
    + "F"
    + "|" * 7
    + "EX-1&Doe&J",
    "OBX|1|CWE|S4^Fourth sound^L||Y^yes^L||||||F",
    "OBX|2|NM|HR^Heart rate^L||72|/min^^UCUM|||||F",
]


@pytest.fixture
def oru() -> Callable[..., bytes]:
    """An ORU message of an invented clinic: lines to replace by their start, lines to add, line end."""

    def build(*more: str, without: str = "", end: str = "\r", **replaced: str) -> bytes:
        lines = [replaced.get(line[:3], line) for line in ORU if not (without and line.startswith(without))]
        return end.join([*lines, *more, ""]).encode()

    return build


@pytest.fixture
def response() -> dict[str, Any]:
    """A QuestionnaireResponse of an invented clinic."""
    return {
        "resourceType": "QuestionnaireResponse",
        "id": "r1",
        "questionnaire": "https://fernwood.example/Questionnaire/heart|1",
        "status": "completed",
        "identifier": {"system": "https://fernwood.example/exams", "value": "E-1"},
        "subject": {"reference": "Patient/p17"},
        "encounter": {"reference": "https://fernwood.example/fhir/Encounter/v9/_history/2"},
        "authored": "2026-03-14T09:30:00+01:00",
        "author": {"identifier": {"value": "EX-1"}},
        "item": [{"linkId": "s4", "answer": [{"valueCoding": {"code": "Y", "display": "yes"}}]}],
    }


@pytest.fixture
def book() -> Callable[..., bytes]:
    """An .xlsx file of rows; `change` may alter the sheet before it is saved."""

    def build(rows: Sequence[Sequence[Any]], change: Callable[[Any], None] | None = None) -> bytes:
        workbook = openpyxl.Workbook()
        for row in rows:
            workbook.active.append(list(row))
        if change:
            change(workbook.active)
        made = io.BytesIO()
        workbook.save(made)
        return made.getvalue()

    return build
