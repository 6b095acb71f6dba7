"""`$bulk-submit` (rows BK-1, BK-2, BK-9): what a receiver on loopback gets, and what is never sent."""

from __future__ import annotations

import json
import threading
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field, replace
from http.server import BaseHTTPRequestHandler, HTTPServer
from pathlib import Path
from typing import Any

import pytest

from fhirgallop.bulk.handover import Submission, parameters
from fhirgallop.bulk.wish import BulkError
from fhirgallop.conformance.validator import validate

SUBMISSION = Submission(
    ("https://millbrook.example/submitters", "millbrook"), "2026-1", "completed",
    "https://files.millbrook.example/out/manifest.json", "https://fhir.millbrook.example/r4",
)  # fmt: skip
WORDS = ("--submitter", "https://millbrook.example/submitters|millbrook", "--number", "2026-1")


@dataclass
class Receiver:
    """What was asked, and what is answered."""

    base: str = ""
    status: int = 202
    asked: list[tuple[str, dict[str, str], Any]] = field(default_factory=list)


@pytest.fixture
def receiver() -> Iterator[Receiver]:
    """A receiver of submissions on loopback."""
    kept = Receiver()

    class Handler(BaseHTTPRequestHandler):
        def do_POST(self) -> None:
            body = json.loads(self.rfile.read(int(self.headers["content-length"])))
            kept.asked.append((self.path, {k.lower(): v for k, v in self.headers.items()}, body))
            self.send_response(kept.status)
            self.send_header("content-length", "0")
            self.end_headers()

        def log_message(self, *_: Any) -> None:
            """Says nothing."""

    server = HTTPServer(("127.0.0.1", 0), Handler)
    kept.base = f"http://127.0.0.1:{server.server_port}/fhir"
    thread = threading.Thread(target=server.serve_forever)
    thread.start()
    yield kept
    server.shutdown()
    thread.join()
    server.server_close()


def test_the_parameters_are_valid_and_complete() -> None:
    made = parameters(SUBMISSION)
    assert not [issue for issue in validate(made, "R4") if issue.is_error]
    assert [part["name"] for part in made["parameter"]] == [
        "submitter", "submissionId", "submissionStatus", "manifestUrl", "fhirBaseUrl", "outputFormat",
    ]  # fmt: skip


@pytest.mark.parametrize(
    "broken",
    [
        replace(SUBMISSION, base=""),
        replace(SUBMISSION, number=""),
        replace(SUBMISSION, submitter=("", "x")),
        replace(SUBMISSION, manifest="out/manifest.json"),
        replace(SUBMISSION, manifest="", replaces="https://files.millbrook.example/old.json"),
    ],
)
def test_what_goes_together_must_be_there_together(broken: Submission) -> None:
    with pytest.raises(BulkError):
        parameters(broken)


def test_a_receiver_is_told(receiver: Receiver, call: Callable[..., Any], tmp_path: Path) -> None:
    token = tmp_path / "token"
    token.write_text("abc\n")
    where = ("--manifest", SUBMISSION.manifest, "--base", SUBMISSION.base)
    assert call("hand-over", receiver.base, *WORDS, *where, "--private", "--token-file", token).code == 0
    (path, headers, body), *more = receiver.asked
    assert not more
    assert path == "/fhir/$bulk-submit"
    assert body == parameters(SUBMISSION)
    assert headers["authorization"] == "Bearer abc"


def test_a_stopped_submission_needs_no_manifest_and_no_token_is_made_up(
    receiver: Receiver, call: Callable[..., Any]
) -> None:
    assert call("hand-over", receiver.base, *WORDS, "--status", "stopped", "--private").code == 0
    _, headers, body = receiver.asked[0]
    assert body["parameter"][2]["valueCoding"]["code"] == "stopped"
    assert "authorization" not in headers


def test_a_refusal_is_told(receiver: Receiver, call: Callable[..., Any]) -> None:
    receiver.status = 400
    done = call("hand-over", receiver.base, *WORDS, "--private")
    assert (done.code, "400" in done.err) == (4, True)
