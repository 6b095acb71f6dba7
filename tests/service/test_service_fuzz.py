"""Requests made up from the OpenAPI description: no 500, and every answer as described."""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest
import schemathesis
from hypothesis import HealthCheck, given, settings, strategies
from schemathesis import GenerationMode
from starlette.testclient import TestClient

from fhirgallop.service.app import create_app
from fhirgallop.settings import load

FITTING, UNFITTING = GenerationMode.POSITIVE, GenerationMode.NEGATIVE


@pytest.fixture(scope="module")
def fuzzed(tmp_path_factory: pytest.TempPathFactory, root: Path) -> Iterator[TestClient]:
    folder = tmp_path_factory.mktemp("fuzz")
    chosen = load(maps=root / "tests/cases/faces/maps", database=f"sqlite:///{folder / 'fuzz.sqlite3'}")
    with TestClient(create_app(chosen), base_url="http://localhost", raise_server_exceptions=False) as client:
        yield client


@pytest.mark.parametrize(
    ("label", "mode"),
    [
        ("POST /exams", FITTING),
        ("POST /exams", UNFITTING),
        ("GET /maps/{name}", FITTING),
        ("POST /fhir/{edition}/$validate", FITTING),
        ("POST /fhir/{edition}/{resource_type}/$validate", FITTING),
        ("GET /maps", FITTING),
        ("GET /health", FITTING),
    ],
)
def test_made_up_requests(fuzzed: TestClient, label: str, mode: GenerationMode) -> None:
    described = schemathesis.openapi.from_dict(fuzzed.get("/openapi.json").json())
    (operation,) = [found.ok() for found in described.get_all_operations() if found.ok().label == label]
    cases = operation.as_strategy(generation_mode=mode)
    known = {"GET /maps": {200, 400}, "GET /health": {200}}.get(label)

    @settings(
        max_examples=80 if "exams" in label else 15,
        deadline=None,
        database=None,
        derandomize=True,
        suppress_health_check=list(HealthCheck),
    )
    @given(case=cases, known_map=strategies.booleans())
    def send(case: Any, known_map: bool) -> None:
        if known_map and "map" in case.query:
            case.query["map"] = "bedside"  # else no made-up body would ever be read
        sent = case.as_transport_kwargs(base_url="http://localhost")
        allowed = ("method", "url", "headers", "params", "json", "data", "content")
        wanted = {name: value for name, value in sent.items() if name in allowed}
        data = wanted.pop("data", None)
        if data is not None:
            wanted["content"] = data
        answer = fuzzed.request(**wanted)
        assert answer.status_code < 500, answer.text
        assert known is None or answer.status_code in known
        assert operation_describes(operation.definition.raw["responses"], answer.status_code)
        if answer.status_code >= 400:
            assert answer.headers["content-type"] == "application/fhir+json"
            assert answer.json()["resourceType"] == "OperationOutcome"

    send()


def operation_describes(responses: dict[str, Any], status: int) -> bool:
    """Whether the description of an address knows this status."""
    return str(status) in responses or f"{status // 100}XX" in responses
