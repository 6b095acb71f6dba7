"""Requests made up from the OpenAPI description: nothing breaks, and every answer is one that is described.

Source of what is made up: OpenAPI 3.1 (paths, parameters, request bodies) and JSON Schema 2020-12, as far as
the service's own description uses them. Refusals: FHIR "Managing return error codes" (OperationOutcome).
"""

from __future__ import annotations

import json
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any
from urllib.parse import quote

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from starlette.testclient import TestClient

from fhirgallop.service.app import create_app
from fhirgallop.settings import load

MAP = "fernwood-heart-form"
JSON_VALUES = st.recursive(
    st.none() | st.booleans() | st.integers() | st.floats(allow_nan=False) | st.text(max_size=20),
    lambda inner: st.lists(inner, max_size=4) | st.dictionaries(st.text(max_size=12), inner, max_size=4),
    max_leaves=12,
)
# a header or an address cannot carry these, so that no client sends them
SENDABLE = st.characters(blacklist_categories=("Cs",))


def fitting(schema: dict[str, Any]) -> st.SearchStrategy[Any]:
    """Values that meet the schema of a parameter."""
    if "enum" in schema:
        return st.sampled_from(schema["enum"])
    if "anyOf" in schema:
        return st.one_of([fitting(one) for one in schema["anyOf"] if one.get("type") != "null"])
    if schema["type"] == "boolean":
        return st.sampled_from(["true", "false"])
    if schema["type"] == "integer":
        return st.integers(schema.get("minimum"), schema.get("maximum"))
    assert schema["type"] == "string", schema
    return st.text(SENDABLE, max_size=min(schema.get("maxLength", 40), 40))


@st.composite
def changed(draw: st.DrawFn, text: str) -> bytes:
    """A real body in which one value, at any depth, is another or gone; or with a piece of its text lost."""
    if draw(st.integers(0, 4)) == 0:
        start = draw(st.integers(0, len(text)))
        return (text[:start] + text[start + draw(st.integers(0, 9)) :]).encode()
    value: Any = json.loads(text)
    owner, key = draw(st.sampled_from(list(places(value))))
    if draw(st.booleans()):
        owner[key] = draw(JSON_VALUES)
    else:
        del owner[key]
    return json.dumps(value).encode()


def places(value: Any) -> Iterator[tuple[Any, Any]]:
    """Owner and key (or index) of every value inside."""
    for key, inner in list(value.items() if isinstance(value, dict) else enumerate(value)):
        yield value, key
        if isinstance(inner, dict | list):
            yield from places(inner)


@st.composite
def requests(draw: st.DrawFn, path: str, operation: dict[str, Any], bodies: list[str]) -> dict[str, Any]:
    """What the test client sends: parameters as described or any, a made-up body or a changed real one."""
    query: dict[str, Any] = {}
    for parameter in operation.get("parameters", ()):
        made_up = draw(
            fitting(parameter["schema"]) if draw(st.booleans()) else st.text(SENDABLE, max_size=30)
        )
        if parameter["in"] == "path":
            # an empty part, or dots, would make it the path of another operation
            made_up = "x" if str(made_up).strip(".") == "" else made_up
            path = path.replace(f"{{{parameter['name']}}}", quote(str(made_up), safe=""))
        elif parameter["in"] == "query" and (parameter.get("required") or draw(st.booleans())):
            query[parameter["name"]] = made_up
    if "map" in query and draw(st.booleans()):
        query["map"] = MAP  # else no made-up body would ever be read
    sent: dict[str, Any] = {"url": path, "params": query}
    content = operation.get("requestBody", {}).get("content")
    if content:
        kind = draw(st.sampled_from(sorted(content)))
        body = st.one_of(
            st.binary(max_size=60), JSON_VALUES.map(json.dumps).map(str.encode), *(changed(b) for b in bodies)
        )
        sent |= {"content": draw(body), "headers": {"content-type": kind}}
    return sent


def describes(responses: dict[str, Any], status: int) -> bool:
    """Whether the description of an address knows this status."""
    return str(status) in responses or f"{status // 100}XX" in responses


@pytest.fixture(scope="module")
def fuzzed(tmp_path_factory: pytest.TempPathFactory, root: Path) -> Iterator[TestClient]:
    folder = tmp_path_factory.mktemp("fuzz")
    chosen = load(maps=root / "examples/informatician", database=f"sqlite:///{folder / 'fuzz.sqlite3'}")
    with TestClient(create_app(chosen), base_url="http://localhost", raise_server_exceptions=False) as client:
        yield client


@pytest.fixture(scope="module")
def bodies(root: Path) -> list[str]:
    """A record of the clinic's form, and the first Observation of a chart."""
    chart = json.loads((root / "examples/clinician/atrial-fibrillation-today.chart.json").read_text("utf-8"))
    resources = [entry["resource"] for entry in chart["entry"]]
    observation = next(r for r in resources if r["resourceType"] == "Observation")
    return [(root / "examples/ehr/fernwood-exam.json").read_text("utf-8"), json.dumps(observation)]


@pytest.fixture(scope="module")
def operations(fuzzed: TestClient) -> dict[str, tuple[str, str, dict[str, Any]]]:
    """Label -> path, method and description of each operation."""
    paths = fuzzed.get("/openapi.json").json()["paths"]
    return {
        f"{method.upper()} {path}": (path, method, operation)
        for path, found in paths.items()
        for method, operation in found.items()
    }


@pytest.fixture(scope="module")
def fuzz(
    fuzzed: TestClient, bodies: list[str], operations: dict[str, tuple[str, str, dict[str, Any]]]
) -> Callable[[str, int], None]:
    """Sends so many made-up requests to an operation."""

    def run(label: str, examples: int) -> None:
        path, method, operation = operations[label]

        @settings(
            max_examples=examples,
            deadline=None,
            database=None,
            derandomize=True,
            suppress_health_check=list(HealthCheck),
        )
        @given(request=requests(path, operation, bodies))
        def send(request: dict[str, Any]) -> None:
            answer = fuzzed.request(method, **request)
            assert answer.status_code < 500, answer.text
            assert describes(operation["responses"], answer.status_code), answer.status_code
            if answer.status_code >= 400:
                assert answer.headers["content-type"] == "application/fhir+json"
                assert answer.json()["resourceType"] == "OperationOutcome"

        send()

    return run


def test_made_up_examinations(fuzz: Callable[[str, int], None]) -> None:
    fuzz("POST /exams", 150)


def test_made_up_requests_to_every_operation(
    fuzz: Callable[[str, int], None], operations: dict[str, Any], subtests: pytest.Subtests
) -> None:
    assert len(operations) > 20
    for label in operations:
        with subtests.test(label):
            fuzz(label, 15)
