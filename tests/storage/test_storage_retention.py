"""What was kept long enough goes, what still has to be sent stays, and one patient's data go altogether."""

from __future__ import annotations

import threading
from collections.abc import Callable, Mapping
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any

import pytest
from sqlalchemy import Engine, func, insert, select

from fhirgallop.storage import outbox as line
from fhirgallop.storage import retention
from fhirgallop.storage.engine import open_database
from fhirgallop.storage.hooks import HookStore, KeptCard, KeptFeedback, KeptMemory
from fhirgallop.storage.resources import NewVersion, add_versions
from fhirgallop.storage.retention import Keeping, clear_away, forget, prune, unfinished_batches
from fhirgallop.storage.submissions import StorageError, Submission, Submissions
from fhirgallop.storage.tables import (
    audit,
    batch_results,
    batches,
    draft_samples,
    drafts,
    hook_cards,
    hook_feedback,
    hook_instances,
    hook_memories,
    idempotent_answers,
    metadata,
    outbox,
    schema_version,
    sessions,
    submissions,
    used_tokens,
)

NOW = datetime(2026, 12, 1, 12, tzinfo=UTC)
DAY = timedelta(days=1)
DRAFT = {"title": "", "address": "", "zone": "", "step": 0, "changed": 0, "dictionary": b""}
SAMPLE = {"media_type": "", "content": b"records"}


def ms(moment: datetime) -> int:
    return int(moment.timestamp() * 1000)


def instant(moment: datetime) -> str:
    return moment.strftime("%Y-%m-%dT%H:%M:%SZ")


def counts(engine: Engine) -> Mapping[str, int]:
    """Rows by table, without the empty ones."""
    with engine.connect() as connection:
        found = {
            table.name: connection.scalar(select(func.count()).select_from(table)) or 0
            for table in metadata.sorted_tables
            if table is not schema_version
        }
    return {name: number for name, number in found.items() if number}


@pytest.fixture
def keep(engine: Engine, submission: Callable[..., Submission]) -> Callable[..., None]:
    """Keeps an examination: `keep("urn:a", age=days, state="waiting")`."""

    def add(
        exam: str, version: int = 1, *, age: float, state: str = "", patient: str = "p", edition: str = "R4"
    ) -> None:
        at = NOW - age * DAY
        name = exam.removeprefix("urn:")
        body = f"{name}{version}".encode()
        resource = NewVersion(edition, "Observation", name, patient, "", "", None, None, body, ("t" * 64,))

        def also(connection: Any, row: int) -> None:
            add_versions(connection, [resource], at=ms(at), submission=row)
            if state:
                line.enqueue(
                    connection, destination="d", submission=row, exam=exam, patient=patient, at=ms(at)
                )
                changed = outbox.update().where(outbox.c.submission == row).values(state=state)
                connection.execute(changed)

        one = submission(exam, version, received=instant(at), patient=patient, edition=edition)
        assert Submissions(engine).add(one, also)

    return add


def exams(engine: Engine) -> list[str]:
    with engine.connect() as connection:
        return sorted(set(connection.scalars(select(submissions.c.exam))))


def test_nothing_goes_where_everything_is_kept_for_ever(engine: Engine, keep: Callable[..., None]) -> None:
    keep("urn:old", age=9999, state="delivered")
    before = counts(engine)
    assert prune(engine, Keeping(), NOW) == {}
    assert counts(engine) == before


def test_an_examination_goes_whole_when_its_newest_version_is_old(
    engine: Engine, keep: Callable[..., None]
) -> None:
    keep("urn:old", 1, age=40, state="delivered")
    keep("urn:old", 2, age=31, state="dropped")
    keep("urn:old", 1, age=35, edition="R5")
    keep("urn:amended", 1, age=40)
    keep("urn:amended", 2, age=29)
    keep("urn:other-edition", 1, age=40)
    keep("urn:other-edition", 1, age=1, edition="R5")
    for state in ("waiting", "sending", "failed"):
        keep(f"urn:{state}", age=400, state=state)
    gone = prune(engine, Keeping(exams=30), NOW)
    assert gone == {"submissions": 3, "resources": 3, "outbox": 2}
    assert exams(engine) == ["urn:amended", "urn:failed", "urn:other-edition", "urn:sending", "urn:waiting"]
    assert counts(engine) == {
        "submissions": 7, "resources": 7, "resource_identifiers": 7, "outbox": 3,
    }  # fmt: skip
    assert prune(engine, Keeping(exams=30), NOW) == {}


def test_more_than_one_transaction_goes_all_the_same(
    engine: Engine, keep: Callable[..., None], monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(retention, "_ROWS", 2)
    for number in range(7):
        keep(f"urn:{number}", age=40, state="waiting" if number in (0, 3) else "")
    with engine.begin() as connection:
        rows = [{"token": str(number), "until": ms(NOW) - 1} for number in range(7)]
        connection.execute(insert(used_tokens), rows)
    assert prune(engine, Keeping(exams=30), NOW) == {"submissions": 5, "resources": 5, "used_tokens": 7}
    assert exams(engine) == ["urn:0", "urn:3"]


def test_a_version_that_comes_meanwhile_waits_and_stays_whole(
    engine: Engine, keep: Callable[..., None], monkeypatch: pytest.MonkeyPatch
) -> None:
    """An amendment is sent just when the old version was chosen to go."""
    keep("urn:a", 1, age=40)
    delete, chosen, coming = retention._delete_exams, threading.Event(), []

    def slowly(connection: Any, exams: Any) -> Any:
        chosen.set()
        coming[0].join(0.3)  # it would be through by then, could it go on
        return delete(connection, exams)

    def amend() -> None:
        chosen.wait()
        keep("urn:a", 2, age=0, state="waiting")

    monkeypatch.setattr(retention, "_delete_exams", slowly)
    coming.append(threading.Thread(target=amend))
    coming[0].start()
    prune(engine, Keeping(exams=30), NOW)
    coming[0].join()
    assert counts(engine) == {"submissions": 1, "resources": 1, "resource_identifiers": 1, "outbox": 1}
    with engine.connect() as connection:
        assert connection.scalar(select(submissions.c.version)) == 2


def test_resources_that_came_alone_go_when_their_newest_version_is_old(engine: Engine) -> None:
    with engine.begin() as connection:
        for name, ages in (("old", (50, 40)), ("changed", (50, 10))):
            for age in ages:
                new = NewVersion(
                    "R4", "Observation", name, "p", "", "", None, None, str(age).encode(), ("t" * 64,)
                )
                add_versions(connection, [new], at=ms(NOW - age * DAY), submission=None)
    assert prune(engine, Keeping(exams=30), NOW) == {"resources": 2}
    assert counts(engine) == {"resources": 2, "resource_identifiers": 2}


def test_what_has_an_end_of_its_own_goes_then(engine: Engine) -> None:
    moments = {"old": NOW - 8 * DAY, "new": NOW - 6 * DAY}
    with engine.begin() as connection:
        for name, at in moments.items():
            until = NOW + (DAY if name == "new" else -DAY)
            connection.execute(insert(used_tokens).values(token=name, until=ms(until)))
            connection.execute(insert(sessions).values(session=name, subject="s", roles="", until=ms(until)))
            connection.execute(insert(audit).values(at=ms(at), patient="", event=b"{}"))
            connection.execute(insert(drafts).values(id=name, **DRAFT))
            connection.execute(insert(draft_samples).values(draft=name, at=ms(at), **SAMPLE))
            answer = {"request": "r", "status": 200, "media_type": "", "headers": b"{}", "answer": b"",
                      "patient": ""}  # fmt: skip
            connection.execute(insert(idempotent_answers).values(key=name, at=ms(at), **answer))
            for state in ("done", "cancelled", "waiting", "coding"):
                batch = {"id": name + state, "owner": "o", "state": state, "created": ms(at), "worker": "",
                         "lease": 0, "wish": b"", "request": b"", "total": 1, "done": 0}  # fmt: skip
                connection.execute(insert(batches).values(**batch))
                result = {"position": 0, "patient": "", "status": "coded", "submission": None, "result": b""}
                connection.execute(insert(batch_results).values(batch=name + state, **result))
    assert prune(engine, Keeping(batches=7, audit=7, answers=7 * 24, samples=7), NOW) == {
        "used_tokens": 1, "sessions": 1, "idempotent_answers": 1, "batches": 2, "draft_samples": 1,
        "audit": 1,
    }  # fmt: skip
    with engine.connect() as connection:
        for table in (used_tokens, sessions, idempotent_answers):
            assert connection.scalars(select(*table.primary_key)).all() == ["new"]
        left = sorted(connection.scalars(select(batch_results.c.batch)))
    assert left == ["newcancelled", "newcoding", "newdone", "newwaiting", "oldcoding", "oldwaiting"]


def remember(engine: Engine, patient: str, card: str, age: float, *, comment: str = "") -> None:
    """A memory, a card and an answer to it."""
    store, at = HookStore(engine), instant(NOW - age * DAY)
    known = store.memory(patient)
    memory = KeptMemory(patient, known.version if known else 0, b"memory")
    kept = KeptCard(card, "s", patient, "e", b"shown", at)
    assert store.keep(memory, instance="i" + card, before=b"before", cards=[kept])
    report = KeptFeedback("k" + card, "s", card, True, "overridden", b"[]", "", "", comment, at, at)
    assert store.add_feedback([report])


def test_cards_go_with_their_answers_and_memories_with_the_last_card(engine: Engine) -> None:
    remember(engine, "gone", "a", 40)
    remember(engine, "stays", "b", 40)
    remember(engine, "stays", "c", 10)
    unknown = KeptFeedback("k", "s", "z", False, "accepted", b"[]", "", "", "", "", instant(NOW - 40 * DAY))
    assert HookStore(engine).add_feedback([unknown])
    assert prune(engine, Keeping(cards=30), NOW) == {
        "hook_feedback": 3, "hook_cards": 2, "hook_instances": 2, "hook_memories": 1,
    }  # fmt: skip
    with engine.connect() as connection:
        assert connection.scalars(select(hook_memories.c.patient)).all() == ["stays"]
        assert connection.scalars(select(hook_cards.c.card)).all() == ["c"]
        assert connection.scalars(select(hook_feedback.c.card)).all() == ["c"]
        assert connection.scalars(select(hook_instances.c.instance)).all() == ["ic"]


def test_one_patients_data_go_from_every_table(engine: Engine, keep: Callable[..., None]) -> None:
    for patient in ("mine", "other"):
        keep(f"urn:{patient}", 1, age=3, state="delivered", patient=patient)
        keep(f"urn:{patient}", 2, age=1, state="waiting", patient=patient)
        remember(engine, "chart" + patient, patient, 1, comment="of " + patient)
        with engine.begin() as connection:
            new = NewVersion(
                "R4", "Observation", "alone" + patient, patient, "", "", None, None, b"x", ("t",)
            )
            add_versions(connection, [new], at=ms(NOW), submission=None)
            answer = {"request": "r", "status": 200, "media_type": "", "headers": b"{}", "answer": b"",
                      "at": 0}  # fmt: skip
            connection.execute(insert(idempotent_answers).values(key=patient, patient=patient, **answer))
            batch = {"id": patient, "owner": "o", "state": "done", "created": 0, "worker": "", "lease": 0,
                     "wish": b"", "request": b"", "total": 1, "done": 1}  # fmt: skip
            connection.execute(insert(batches).values(**batch))
            result = {"position": 0, "patient": patient, "status": "coded", "submission": None, "result": b""}
            connection.execute(insert(batch_results).values(batch=patient, **result))
            connection.execute(insert(audit).values(at=0, patient=patient, event=b"{}"))
    with engine.begin() as connection:
        connection.execute(insert(drafts).values(id="a", **DRAFT))
        connection.execute(insert(draft_samples).values(draft="a", at=0, **SAMPLE))
        connection.execute(insert(idempotent_answers).values(key="list", patient="", **answer))
    before = counts(engine)

    def note(connection: Any, _row: int) -> None:
        connection.execute(insert(audit).values(at=1, patient="mine", event=b"{}"))

    gone = forget(engine, ["mine", "chartmine"], note)
    assert gone == {
        "submissions": 2, "resources": 3, "resource_identifiers": 3, "outbox": 2, "batch_results": 1,
        "idempotent_answers": 2, "draft_samples": 1, "hook_memories": 1, "hook_instances": 1, "hook_cards": 1,
        "hook_feedback": 1,
    }  # fmt: skip
    after = counts(engine)
    assert {n: m - after.get(n, 0) for n, m in before.items() if m != after.get(n, 0)} == {
        **gone,
        "audit": -1,
    }
    # nothing of the other one went, and nothing of this one is left but the trail
    with engine.connect() as connection:
        for table in metadata.sorted_tables:
            if "patient" in table.columns and table is not audit:
                left = set(connection.scalars(select(table.c.patient)))
                assert left <= {"other", "chartother"}, table.name
                assert left, table.name
        assert connection.scalars(select(audit.c.patient).order_by(audit.c.id)).all() == [
            "mine", "other", "mine",
        ]  # fmt: skip
    assert forget(engine, ["mine", "chartmine"]) == {}


def test_a_deletion_that_fails_deletes_nothing(engine: Engine, keep: Callable[..., None]) -> None:
    keep("urn:mine", age=1, state="waiting", patient="mine")
    before = counts(engine)

    def fails(connection: Any, _row: int) -> None:
        connection.exec_driver_sql("SELECT * FROM nowhere")

    with pytest.raises(StorageError):
        forget(engine, ["mine"], fails)
    assert counts(engine) == before


def test_batches_that_still_hold_records_are_counted(engine: Engine) -> None:
    assert unfinished_batches(engine) == 0
    with engine.begin() as connection:
        for name, request in (("a", b"records"), ("b", b"")):
            batch = {"id": name, "owner": "o", "state": "coding", "created": 0, "worker": "", "lease": 0,
                     "wish": b"", "request": request, "total": 1, "done": 0}  # fmt: skip
            connection.execute(insert(batches).values(**batch))
    assert unfinished_batches(engine) == 1


def test_deleted_bytes_are_gone_from_sqlites_files(
    tmp_path: Path, submission: Callable[..., Submission]
) -> None:
    path = tmp_path / "store.sqlite3"
    engine = open_database(f"sqlite:///{path}")
    store, secret = Submissions(engine), b"Evergreen-4711"
    for number in range(40):
        body = (secret if number == 20 else b"Juniper-0815") * 900
        new = NewVersion("R4", "Observation", str(number), f"p{number}", "", "", None, None, body)

        def also(connection: Any, row: int, new: NewVersion = new) -> None:
            add_versions(connection, [new], at=0, submission=row)

        assert store.add(submission(f"urn:{number}", patient=f"p{number}"), also)

    def found() -> bool:
        return any(secret in file.read_bytes() for file in tmp_path.iterdir())

    assert found()
    with engine.connect() as reader:  # somebody who still sees what was there before
        reader.exec_driver_sql("BEGIN")
        reader.execute(select(func.count()).select_from(submissions))
        assert forget(engine, ["p20"]) == {"submissions": 1, "resources": 1}
        reader.rollback()
    assert clear_away(engine)
    assert not found()
    assert counts(engine)["submissions"] == 39
    engine.dispose()


def test_postgres_frees_the_space(postgres: str, submission: Callable[..., Submission]) -> None:
    engine = open_database(postgres)

    def size() -> int:
        with engine.connect() as connection:
            return int(connection.exec_driver_sql("SELECT pg_relation_size('submissions')").scalar_one())

    assert Submissions(engine).add(submission())
    assert size() > 0
    assert forget(engine, ["p" * 64]) == {"submissions": 1}
    assert clear_away(engine)
    assert size() == 0
    engine.dispose()
