"""fhirgallop: from the clinic's heart-examination form to coded, checked FHIR Observations.

Everything a program needs is here; each name is loaded when it is first used, so that importing is quick.
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any

from fhirgallop.version import VERSION as __version__  # noqa: N811 - as every package calls it

if TYPE_CHECKING:
    from fhirgallop.api import process, read_map, read_records, review
    from fhirgallop.conformance.validator import validate
    from fhirgallop.exam.exam import Exam
    from fhirgallop.intake.record import LocalRecord
    from fhirgallop.mapping.template_map import TemplateMap
    from fhirgallop.outcome import Issue
    from fhirgallop.pipeline import Result
    from fhirgallop.reasoning.review import Review

_HOMES = {
    "Exam": "fhirgallop.exam.exam",
    "Issue": "fhirgallop.outcome",
    "LocalRecord": "fhirgallop.intake.record",
    "Result": "fhirgallop.pipeline",
    "TemplateMap": "fhirgallop.mapping.template_map",
    "Review": "fhirgallop.reasoning.review",
    "process": "fhirgallop.api",
    "read_map": "fhirgallop.api",
    "read_records": "fhirgallop.api",
    "review": "fhirgallop.api",
    "validate": "fhirgallop.conformance.validator",
}

__all__ = [
    "Exam",
    "Issue",
    "LocalRecord",
    "Result",
    "Review",
    "TemplateMap",
    "__version__",
    "process",
    "read_map",
    "read_records",
    "review",
    "validate",
]


def __getattr__(name: str) -> Any:
    if name not in _HOMES:
        raise AttributeError(f"module 'fhirgallop' has no attribute {name!r}")
    return getattr(import_module(_HOMES[name]), name)
