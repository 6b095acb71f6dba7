"""Over a real connection, down to the rows: one examination from many sides, and a database that fails."""

from __future__ import annotations

import json
import sqlite3
import zlib
from collections.abc import Callable, Iterator
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path
from typing import Any

import pytest

FHIR = "application/fhir+json"


def unpacked(kept: bytes) -> bytes:
    """A text as it was before it was compressed to be kept."""
    return zlib.decompress(kept.removeprefix(b"\0z"))


@pytest.fixture
def ask(server: Any, tmp_path: Path) -> Iterator[Callable[[str], list[Any]]]:
    """Asks the running service's database, as somebody else at the same file."""
    with sqlite3.connect(tmp_path / "faces.sqlite3", isolation_level=None) as other:
        yield lambda statement: other.execute(statement).fetchall()
    other.close()


def test_the_same_examination_from_many_sides_is_one_version(server: Any, sound: Any, ask: Any) -> None:
    with ThreadPoolExecutor(8) as pool:
        answers = list(
            pool.map(lambda _: server.post(sound("json"), "application/json", accept=FHIR), range(16))
        )
    assert {answer.status_code for answer in answers} == {200}
    assert len({answer.content for answer in answers}) == 1
    assert ask("SELECT version FROM submissions") == [(1,)]


def test_what_is_answered_is_what_is_kept(server: Any, sound: Any, ask: Any) -> None:
    answer = server.post(sound("hl7"), "application/hl7-v2", accept=FHIR)
    assert [unpacked(bundle) for (bundle,) in ask("SELECT bundle FROM submissions")] == [answer.content]


def test_of_a_batch_the_good_ones_are_kept_and_of_the_bad_ones_nothing(
    server: Any, sound: Any, ask: Any
) -> None:
    numbers = {"E-1": "yes", "E-2": "galloping", "E-3": "no"}
    body = b"\n".join(sound("json", {"no": number, "s4": s4}) for number, s4 in numbers.items())
    told = server.post(body, "application/x-ndjson").json()
    assert [one["status"] for one in told["results"]] == ["coded", "refused", "coded"]
    kept = [json.loads(unpacked(bundle)) for (bundle,) in ask("SELECT bundle FROM submissions ORDER BY id")]
    assert kept == [one["bundle"] for one in told["results"] if "bundle" in one]


def test_a_database_that_fails_keeps_nothing_and_is_got_over(server: Any, sound: Any, ask: Any) -> None:
    """Its table is gone, as after a restore that went wrong; later it is there again."""
    ask("ALTER TABLE submissions RENAME TO elsewhere")
    answer = server.post(sound("json"), "application/json")
    assert (answer.status_code, answer.headers["content-type"]) == (503, FHIR)
    assert int(answer.headers["retry-after"]) > 0
    (issue,) = answer.json()["issue"]
    assert (issue["severity"], issue["code"]) == ("fatal", "transient")
    batch = server.post(b"[" + b",".join([sound("json")] * 3) + b"]", "application/json").json()
    assert [one["status"] for one in batch["results"]] == ["not-stored"] * 3
    log = "\n".join(server.log)
    assert "storage failed" in log
    assert not [secret for secret in ("P-1", "E-1", "Quiet room", "submissions", "81.5") if secret in log]
    ask("ALTER TABLE elsewhere RENAME TO submissions")
    assert ask("SELECT count(*) FROM submissions") == [(0,)]
    assert server.post(sound("json"), "application/json").status_code == 200
    assert ask("SELECT version FROM submissions") == [(1,)]
