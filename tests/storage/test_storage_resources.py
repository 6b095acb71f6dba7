"""Versions of coded resources: kept once, found by columns, in order, on both databases."""

from __future__ import annotations

import threading
from typing import Any

import pytest
from sqlalchemy import Engine, func, select
from sqlalchemy.exc import IntegrityError

from fhirgallop.storage.resource_search import Name, Place, Resources, Span, Wanted
from fhirgallop.storage.resources import ChangedMeanwhileError, NewVersion, add_versions
from fhirgallop.storage.tables import resource_identifiers, resources


def replace(version: NewVersion, **changed: Any) -> NewVersion:
    return version._replace(**changed)


ONE = NewVersion("R4", "Observation", "a", "patient-1", "visit-1", "heart-sound.s4", 100, 199, b"1")


@pytest.fixture
def store(engine: Engine) -> Resources:
    return Resources(engine)


def ids(found: list) -> list[str]:
    return [kept.fhir_id for kept in found]


def find(
    store: Resources, order: str = "changed", after: Place | None = None, limit: int = 100, **parts: object
):
    wanted = Wanted("R4", "Observation", **parts)
    return store.find(wanted, order=order, after=after, limit=limit)


def test_only_another_body_makes_a_version(store: Resources) -> None:
    (first,) = store.write([ONE], at=10)
    (again,) = store.write([ONE], at=20)
    (changed,) = store.write([replace(ONE, body=b"2")], at=30)
    assert (first.version, first.updated, first.changed) == (1, 10, True)
    assert (again.version, again.updated, again.changed) == (1, 10, False)
    assert (changed.version, changed.updated) == (2, 30)
    assert store.read("R4", "Observation", "a").body == b"2"
    assert store.version("R4", "Observation", "a", 1).body == b"1"
    assert [kept.version for kept in store.history("R4", "Observation", "a", below=None, limit=9)] == [2, 1]
    assert [kept.version for kept in store.history("R4", "Observation", "a", below=2, limit=9)] == [1]
    assert [kept.version for kept in find(store)] == [2]


def test_editions_and_types_are_apart(store: Resources) -> None:
    store.write([ONE, replace(ONE, edition="R5"), replace(ONE, type="DiagnosticReport")], at=1)
    assert len(find(store)) == 1
    assert store.read("R4B", "Observation", "a") is None


def test_all_or_nothing(store: Resources) -> None:
    store.write([ONE], at=1)
    with pytest.raises(ChangedMeanwhileError):
        store.write([replace(ONE, fhir_id="b"), replace(ONE, body=b"2", follows=0)], at=2)
    assert ids(find(store)) == ["a"]


def test_what_is_done_beside_fails_with_it(store: Resources) -> None:
    def fails(_connection: object, _row: int) -> None:
        raise RuntimeError

    with pytest.raises(RuntimeError):
        store.write([ONE], at=1, also=[fails])
    assert find(store) == []


def test_taken_for_new_and_there_already(engine: Engine, store: Resources) -> None:
    store.write([ONE], at=1)
    with pytest.raises(IntegrityError), engine.begin() as connection:
        add_versions(connection, [replace(ONE, body=b"2")], at=2, submission=None, fresh=True)
    assert store.read("R4", "Observation", "a").version == 1


def test_two_at_once_follow_each_other_or_fail(store: Resources) -> None:
    store.write([ONE], at=1)
    start = threading.Barrier(4)
    done: list[str] = []

    def change(number: int) -> None:
        start.wait(10)
        try:
            store.write([replace(ONE, body=b"%d" % (number + 2), follows=1)], at=2)
            done.append("kept")
        except (IntegrityError, ChangedMeanwhileError):
            done.append("refused")

    threads = [threading.Thread(target=change, args=(number,)) for number in range(4)]
    for one in threads:
        one.start()
    for one in threads:
        one.join(20)
    assert sorted(done) == ["kept", "refused", "refused", "refused"]
    assert store.read("R4", "Observation", "a").version == 2
    assert len(find(store)) == 1


def test_by_patient_encounter_finding_and_id(store: Resources) -> None:
    other = replace(ONE, fhir_id="b", patient="patient-2", encounter="visit-2", finding="murmur")
    store.write([ONE, other], at=1)
    assert ids(find(store, patients=(("patient-1",),))) == ["a"]
    assert ids(find(store, encounters=(("visit-2", "visit-3"),))) == ["b"]
    assert ids(find(store, findings=(("murmur", ""),))) == ["b"]
    assert ids(find(store, ids=(("a", "b"), ("b", "c")))) == ["b"]
    assert ids(find(store, ids=((),))) == []
    assert store.count(Wanted("R4", "Observation")) == 2


def test_by_tokens_of_the_current_version_only(engine: Engine, store: Resources) -> None:
    store.write([replace(ONE, tokens=("t1", "t2", "t1"))], at=1)
    assert ids(find(store, names=((Name("t1"),),))) == ["a"]
    assert ids(find(store, patients=(("t2",),))) == ["a"]  # a second way to name the patient
    store.write([replace(ONE, body=b"2", tokens=("t3",))], at=2)
    assert find(store, names=((Name("t1"),),)) == []
    assert ids(find(store, names=((Name("t1", fhir_id="a"),),))) == ["a"]
    with engine.connect() as connection:
        assert connection.scalar(select(func.count()).select_from(resource_identifiers)) == 3


# Source: FHIR R4 search.html, "Prefixes", with a resource that means the moments 100 to 199.
@pytest.mark.parametrize(
    ("prefix", "start", "end", "found"),
    [
        ("eq", 100, 199, True), ("eq", 0, 500, True), ("eq", 150, 160, False), ("eq", 101, 199, False),
        ("ne", 100, 199, False), ("ne", 150, 160, True),
        ("gt", 150, 160, True), ("gt", 199, 300, False), ("gt", 50, 60, True), ("gt", 100, 199, False),
        ("lt", 150, 160, True), ("lt", 100, 199, False), ("lt", 300, 400, True),
        ("ge", 100, 199, True), ("ge", 150, 160, True), ("ge", 200, 300, False),
        ("le", 100, 199, True), ("le", 0, 99, False), ("le", 150, 160, True),
        ("sa", 50, 99, True), ("sa", 50, 100, False), ("eb", 200, 300, True), ("eb", 199, 300, False),
        ("overlaps", 199, 300, True), ("overlaps", 200, 300, False),
    ],
)  # fmt: skip
def test_prefixes(store: Resources, prefix: str, start: int, end: int, found: bool) -> None:
    store.write([ONE, replace(ONE, fhir_id="undated", date_from=None, date_to=None)], at=1)
    assert ids(find(store, dates=((Span(prefix, start, end),),))) == (["a"] if found else [])


def test_by_time_of_change(store: Resources) -> None:
    store.write([ONE], at=10)
    store.write([replace(ONE, fhir_id="b")], at=20)
    assert ids(find(store, updates=((Span("gt", 10, 10),),))) == ["b"]
    assert ids(find(store, updates=((Span("eq", 10, 10), Span("eq", 20, 20)),))) == ["a", "b"]


@pytest.mark.parametrize(
    ("order", "expected"),
    [("changed", "abcdef"), ("-changed", "fedcba"), ("date", "edacfb"), ("-date", "bfcade")],
)
def test_pages_in_every_order_hold_each_resource_once(store: Resources, order: str, expected: str) -> None:
    dates = {"a": 2, "b": 5, "c": 2, "d": 1, "e": None, "f": 4}
    for fhir_id, date in dates.items():
        store.write([replace(ONE, fhir_id=fhir_id, date_from=date, date_to=date)], at=1)
    seen: list[str] = []
    after: Place | None = None
    while page := find(store, order=order, after=after, limit=2):
        seen += ids(page)
        after = page[-1].place(order)
        if len(seen) == 2:  # one that is added while somebody pages breaks nothing
            store.write([replace(ONE, fhir_id="late", edition="R5")], at=2)
    assert "".join(seen) == expected


def test_many_at_once(store: Resources) -> None:
    many = [replace(ONE, fhir_id=f"n{number}", tokens=(f"t{number}",)) for number in range(900)]
    assert all(one.version == 1 for one in store.write(many, at=1))
    assert not any(one.changed for one in store.write(many, at=2))
    assert ids(find(store, names=((Name("t777"),),))) == ["n777"]


def test_a_deleted_patient_takes_the_tokens_along(engine: Engine, store: Resources) -> None:
    store.write([replace(ONE, tokens=("t1",))], at=1)
    with engine.begin() as connection:
        connection.execute(resources.delete().where(resources.c.patient == "patient-1"))
    with engine.connect() as connection:
        assert connection.scalar(select(func.count()).select_from(resource_identifiers)) == 0
