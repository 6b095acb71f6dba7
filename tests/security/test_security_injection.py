"""SQL, paths, templates and HTML where words are expected: nothing is run, found, shown or told back."""

from __future__ import annotations

import html
import json
import re
from collections.abc import Iterator
from pathlib import Path
from typing import Any
from urllib.parse import quote

import pytest
from sqlalchemy import create_engine, inspect
from starlette.testclient import TestClient

import fhirgallop
from fhirgallop import settings
from fhirgallop.service.app import create_app

Json = dict[str, Any]
HOSTILE = [
    "' OR '1'='1",
    "'; DROP TABLE submissions; --",
    '" OR 1=1 --',
    "1) UNION SELECT text FROM maps --",
    "%' OR '%'='",
    "../../../../etc/passwd",
    "..%2f..%2fetc%2fpasswd",
    "....//....//etc/passwd",
    "/etc/passwd",
    "C:\\windows\\win.ini",
    "\x00",
    "a\x00b",
    "\r\nSet-Cookie: x=1",
    "${7*7}",
    "{{7*7}}",
    "<script>alert(1)</script>",
    "%s%s%n",
    "$(id)",
    "`id`",
    "\u202eabc",
    "A" * 3000,
    "-1",
    "9" * 400,
    "NaN",
    "[]",
    "*",
    "%",
    "_",
    "\ud7ff",
    "|",
    "||",
    "a|b|c",
    "\\",
]
HOME = str(Path(fhirgallop.__file__).parent)
TELLTALE = ("root:", "alert(1)", "sqlite3", "psycopg", "Traceback", HOME, "site-packages", "SELECT ")
# parameters of searches, which the description of the addresses does not list one by one
SEARCH = (
    "_id",
    "code",
    "category",
    "date",
    "identifier",
    "patient:identifier",
    "patient",
    "subject",
    "encounter",
    "_lastUpdated",
    "_count",
    "_sort",
    "_total",
    "_tag",
    "_format",
    "_summary",
    "page",
    "cursor",
)


@pytest.fixture(scope="module")
def service(tmp_path_factory: pytest.TempPathFactory, root: Path) -> Iterator[tuple[TestClient, Path]]:
    """One service for all, with an examination in it, and its database."""
    path = tmp_path_factory.mktemp("injection") / "x.sqlite3"
    chosen = settings.load(maps=root / "examples/informatician", database=f"sqlite:///{path}", rate=0)
    with TestClient(create_app(chosen), base_url="http://localhost", raise_server_exceptions=False) as client:
        text = (root / "examples/ehr/fernwood-exam.json").read_bytes()
        sent = {"Content-Type": "application/json"}
        assert client.post("/exams?map=fernwood-heart-form", content=text, headers=sent).status_code == 200
        yield client, path


OUTWARD = [
    "../settings.py",
    "..%2fsettings.py",
    "%2e%2e/%2e%2e/settings.py",
    "..%5c..%5csettings.py",
    "/etc/passwd",
    "%2fetc%2fpasswd",
    "style.css%00.html",
    "....//settings.py",
]


def sound(answer: Any, sent: str) -> None:
    """No failure, no telltale, and nothing of what was sent in an error."""
    assert answer.status_code < 500, answer.text
    if answer.status_code >= 400:
        assert answer.headers["content-type"] == "application/fhir+json"
        text = answer.text
        assert not any(sign in text for sign in TELLTALE), text
        if len(sent) > 4:
            assert sent not in text
    assert "set-cookie" not in answer.headers


def test_every_parameter_takes_hostile_words(service: tuple[TestClient, Path]) -> None:
    """Each path and query parameter of the description, one hostile word after the other."""
    client, path = service
    described = client.get("/openapi.json").json()["paths"]
    asked = 0
    for pattern, methods in described.items():
        for method, operation in methods.items():
            names = {one["name"]: one["in"] for one in operation.get("parameters", ())}
            for name, where in names.items():
                for number, word in enumerate(HOSTILE):
                    # every word is tried somewhere, and every parameter sees a third of them
                    if (number + asked) % 3:
                        asked += 1
                        continue
                    given = {"edition": "r4", "resource_type": "Observation", name: quote(word, safe="")}
                    filled = re.sub(r"\{(\w+)\}", lambda f, g=given: g.get(f[1], "x"), pattern)
                    query = {name: word} if where == "query" else {}
                    sound(client.request(method, filled, params=query), word)
                    asked += 1
    assert asked > 300
    assert {"submissions", "resources", "maps"} <= set(
        inspect(create_engine(f"sqlite:///{path}")).get_table_names()
    )


def test_a_search_finds_no_more_by_hostile_words(service: tuple[TestClient, Path]) -> None:
    client, _ = service
    base = "/fhir/r4/Observation"
    whole = client.get(base).json()
    assert whole["entry"]
    for name in SEARCH:
        for word in HOSTILE:
            answer = client.get(base, params={name: word})
            sound(answer, word)
            if answer.status_code == 200 and name in ("_id", "code", "identifier", "patient:identifier"):
                found = [e for e in answer.json().get("entry", ()) if e["search"]["mode"] == "match"]
                assert not found, (name, word)


def test_no_path_leads_out_of_the_static_files_and_the_maps(service: tuple[TestClient, Path]) -> None:
    client, _ = service
    for base in ("/static/", "/maps/", "/rules/", "/hooks/", "/fhir/r4/", "/fhir/r4/StructureDefinition/"):
        for word in OUTWARD:
            answer = client.get(base + word)
            assert answer.status_code in (400, 404, 405, 406), (base, word)
            sound(answer, word)


def test_html_in_a_record_is_text_in_the_narrative(service: tuple[TestClient, Path], root: Path) -> None:
    """What a clinician wrote is shown as it was written, and is no mark-up."""
    client, _ = service
    record: Json = json.loads((root / "examples/ehr/fernwood-exam.json").read_text("utf-8"))
    evil = '<script>alert(1)</script><img src=x onerror="alert(2)"> & "quoted" <b>'
    remarks = [(group, name) for group, boxes in record.items() if isinstance(boxes, dict)
               for name, value in boxes.items() if isinstance(value, str) and len(value) > 25]  # fmt: skip
    assert remarks, "the example has a remark in words"
    for group, name in remarks:
        record[group][name] = evil
    answer = client.post("/exams?map=fernwood-heart-form", json=record)
    assert answer.status_code == 200, answer.text
    bundle = answer.json()["bundle"]
    texts = [e["resource"]["text"]["div"] for e in bundle["entry"] if "text" in e["resource"]]
    assert texts
    told = "".join(texts)
    assert not re.search(r"<\s*(script|img|b)\b", told)
    assert "onerror=" not in re.sub(r">[^<]*<", "><", told), "no attribute is made of it"
    assert html.escape("<script>alert(1)</script>", quote=False) in told
    judged = client.post("/fhir/r4/$validate", json=bundle).json()
    assert not [one for one in judged["issue"] if one["severity"] in ("error", "fatal")]


def test_pages_show_nothing_that_was_sent(service: tuple[TestClient, Path]) -> None:
    client, _ = service
    for path in ("/docs", "/sign-in", "/health"):
        answer = client.get(path, params={"x": "<script>alert(1)</script>"})
        assert "alert(1)" not in answer.text
        assert "script" not in answer.headers["content-security-policy"]
