"""Keeping examinations: the same one from many sides at once, and what counts as the same."""

from __future__ import annotations

from collections.abc import Iterator
from concurrent.futures import ThreadPoolExecutor
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import pytest
from sqlalchemy import Engine, select

from fhirgallop import api
from fhirgallop.codes import fhirjson
from fhirgallop.intake.record import LocalRecord
from fhirgallop.service.examinations import BusyError, Examinations, Wish
from fhirgallop.storage.engine import open_database
from fhirgallop.storage.submissions import Also, Seen, Submission, Submissions
from fhirgallop.storage.tables import submissions


@pytest.fixture
def engine(tmp_path: Path) -> Iterator[Engine]:
    opened = open_database(f"sqlite:///{tmp_path / 'desk.sqlite3'}")
    yield opened
    opened.dispose()


def now() -> datetime:
    return datetime(2026, 12, 1, 8, 30, tzinfo=UTC)


def record_of(value: dict[str, Any], tmp_path: Path) -> LocalRecord:
    path = tmp_path / "one.json"
    path.write_bytes(fhirjson.write(value))
    (read,) = api.read_records(path)
    assert isinstance(read, LocalRecord)
    return read


def test_changes_from_many_sides_become_versions_one_after_the_other(
    engine: Engine, example: Any, root: Path, tmp_path: Path
) -> None:
    template = api.read_map(root / "examples/informatician/fernwood-heart-form.yaml")
    desk = Examinations(Submissions(engine), now)
    records = [record_of(example(vitals={"hr": rate}), tmp_path) for rate in (70, 71, 72, 73)]
    with ThreadPoolExecutor(4) as pool:
        coded = list(pool.map(lambda record: desk.code(record, Wish(template, "R4", snomed=True)), records))
    with engine.connect() as connection:
        rows = connection.execute(select(submissions.c.version, submissions.c.bundle)).all()
    assert sorted(row.version for row in rows) == [1, 2, 3, 4]
    assert {row.bundle for row in rows} == {one.bundle for one in coded}


def test_a_name_that_looks_alike_is_not_the_same_patient(
    engine: Engine, example: Any, root: Path, tmp_path: Path
) -> None:
    template = api.read_map(root / "examples/informatician/fernwood-heart-form.yaml")
    desk = Examinations(Submissions(engine), now)
    for number in ("F-1", "F-2"):
        desk.code(record_of(example(patient={"number": number}), tmp_path), Wish(template, "R4", snomed=True))
    with engine.connect() as connection:
        assert len(set(connection.scalars(select(submissions.c.exam)))) == 2


def test_what_is_kept_beside_the_bundle_does_not_tell_the_patient(
    engine: Engine, example: Any, root: Path, tmp_path: Path
) -> None:
    template = api.read_map(root / "examples/informatician/fernwood-heart-form.yaml")
    wish = Wish(template, "R4", snomed=True)
    Examinations(Submissions(engine), now).code(record_of(example(), tmp_path), wish)
    with engine.connect() as connection:
        row = dict(connection.execute(select(submissions)).one()._mapping)
    row.pop("bundle")
    assert "F-20417" not in str(row)
    assert "E-2026-0314-07" not in str(row)


def test_endless_changes_by_others_are_given_up(example: Any, root: Path, tmp_path: Path) -> None:
    class Contested(Submissions):
        def __init__(self) -> None:
            self.tries = 0

        def latest(self, exam: str, edition: str, *, snomed: bool) -> Submission | None:
            return None

        def seen(self, exam: str, number: str, patient: str) -> list[Seen]:
            return []

        def add(self, submission: Submission, *also: Also) -> bool:
            self.tries += 1
            return False

    store = Contested()
    template = api.read_map(root / "examples/informatician/fernwood-heart-form.yaml")
    with pytest.raises(BusyError):
        Examinations(store, now).code(record_of(example(), tmp_path), Wish(template, "R4", snomed=True))
    assert 1 < store.tries < 10
