"""Parts of the hooks without a service: escaping, made-up bodies, feedback."""

from __future__ import annotations

import json
from typing import Any

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from markdown_it import MarkdownIt

from fhirgallop.cards.build import MAX_SUMMARY, escaped, summary
from fhirgallop.cards.discovery import SERVICES, find
from fhirgallop.cards.feedback import read_feedback
from fhirgallop.cards.hooks import read_call
from fhirgallop.outcome import has_errors

MADE_UP = settings(max_examples=300, deadline=None, derandomize=True, suppress_health_check=list(HealthCheck))
LEAF = st.none() | st.booleans() | st.integers() | st.text(max_size=20) | st.sampled_from(
    ["Bundle", "Patient", "Observation", "Condition", "searchset", "Practitioner/7", "p1", "patient-view",
     "d1577c69-dfbe-44ad-ba6d-3e05e953b2ea", "https://a.example", "accepted", "overridden"]
)  # fmt: skip
NAMES = st.sampled_from(
    ["hook", "hookInstance", "fhirServer", "fhirAuthorization", "context", "prefetch", "userId", "patientId",
     "encounterId", "draftObservations", "record", "map", "patient", "exam", "resourceType", "type", "entry",
     "resource", "id", "clinicalStatus", "feedback", "card", "outcome", "outcomeTimestamp", "overrideReason",
     "reason", "code", "system", "userComment", "acceptedSuggestions", "extension"]
) | st.text(max_size=5)  # fmt: skip
JSON = st.recursive(
    LEAF, lambda inner: st.lists(inner, max_size=4) | st.dictionaries(NAMES, inner, max_size=6), max_leaves=40
)
PATHS = [
    ("hook",), ("hookInstance",), ("context",), ("context", "userId"), ("context", "patientId"),
    ("prefetch",), ("prefetch", "patient"), ("prefetch", "exam"), ("fhirServer",), ("fhirAuthorization",),
]  # fmt: skip
CALL = {
    "hook": "patient-view",
    "hookInstance": "d1577c69-dfbe-44ad-ba6d-3e05e953b2ea",
    "context": {"userId": "Practitioner/7", "patientId": "p1"},
    "prefetch": {"patient": None, "exam": None},
}


@MADE_UP
@given(JSON, st.sampled_from(SERVICES))
def test_no_made_up_body_breaks_the_reader(value: Any, service: Any) -> None:
    call, issues = read_call(value, service)
    assert (call is None) == has_errors(issues)
    assert read_feedback(value, service.id)[1]


@MADE_UP
@given(st.sampled_from(PATHS), JSON)
def test_no_made_up_part_breaks_the_reader(path: tuple[str, ...], value: Any) -> None:
    body = json.loads(json.dumps(CALL))
    held = body
    for name in path[:-1]:
        held = held[name]
    held[path[-1]] = value
    service = find("exam-review-patient-view")
    assert service is not None
    call, issues = read_call(body, service)
    assert (call is None) == has_errors(issues)


@MADE_UP
@given(st.text(alphabet=st.sampled_from(list("ab\\`*_[]()<>&|~#!@:/.w\n\t\u202e\u0000 -+1")), max_size=40))
def test_escaped_text_is_shown_as_it_stands(text: str) -> None:
    """Rendered inside a list item by an independent CommonMark library: no element but the item's own."""
    page = MarkdownIt("gfm-like", {"html": True, "linkify": False}).render(f"- Label: {escaped(text)}")
    assert page.count("<") == 4
    assert "<ul>\n<li>Label:" in page


@pytest.mark.parametrize(
    "address", ["http://a.example", "https://a.example", "HTTPS://a.example", "www.a.example"]
)
def test_a_bare_address_is_broken(address: str) -> None:
    assert address not in escaped(f"see {address} now")
    assert "\\" in escaped(address)


def test_control_characters_and_lines_become_blanks() -> None:
    assert escaped("a\n\n# b\u0007\u202ec") == "a \\# b c"


def test_a_summary_takes_the_first_that_fits() -> None:
    assert summary("Title", "Is it so? Listen again.", "text.") == "Is it so?"
    assert summary("Title", "x" * 150 + "?", "A text. Another.") == "A text."
    assert summary("Title", "", "x" * 200) == "Title"
    assert len(summary("T" * 300, "", "")) == MAX_SUMMARY
