"""The outbox: order, leases, the destination that rests, on SQLite and PostgreSQL."""

from __future__ import annotations

import random
from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor

import pytest
from sqlalchemy import Engine, delete, event, insert, select

from fhirgallop.storage.engine import open_database
from fhirgallop.storage.outbox import Claim, Outbox, Rest, Settled
from fhirgallop.storage.submissions import StorageError, Submission, Submissions
from fhirgallop.storage.tables import outbox, submissions

LEASE = 1000
AFTER = 3
DELIVERED = Settled("delivered", outcome=b"{}")
Put = Callable[..., None]


def take(box: Outbox, now: int = 10, worker: str = "w") -> Claim | None:
    return box.claim(worker, now, lease=LEASE, after=AFTER)


def exams(engine: Engine, box: Outbox, now: int = 10) -> list[str]:
    """Everything that can be taken at one moment, by exam."""
    found = []
    while claim := take(box, now):
        delivery = box.one(claim.id)
        assert delivery
        found.append(delivery.exam)
    return found


def test_what_is_enqueued_is_claimed_with_the_bundle_as_it_was_kept(engine: Engine, put: Put) -> None:
    box = Outbox(engine)
    assert take(box) is None
    put(engine, "a", bundle=b'{"entry":[1.20]}')
    claim = take(box)
    assert claim
    assert claim.bundle == b'{"entry":[1.20]}'
    assert (claim.attempts, claim.probe, claim.lease) == (1, False, 10 + LEASE)
    assert take(box) is None
    assert box.settle(claim, DELIVERED, None)
    assert take(box, 10**9) is None
    assert box.tally().counts["delivered"] == 1


def test_a_rolled_back_examination_leaves_no_delivery(engine: Engine, put: Put) -> None:
    put(engine, "a")
    row = Submission("a", "R4", True, 1, "m", "1", "0" * 64, "p", "2026-12-01T08:30:00Z", b"")
    called = []
    assert not Submissions(engine).add(row, lambda connection, number: called.append(number))
    assert not called
    with engine.connect() as connection:
        assert len(connection.execute(select(outbox)).all()) == 1


def test_of_a_patient_only_the_oldest_open_delivery_is_given_out(engine: Engine, put: Put) -> None:
    box = Outbox(engine)
    for exam, version, patient in [("a", 1, "p"), ("a", 2, "p"), ("b", 1, "p"), ("c", 1, "q")]:
        put(engine, exam, version=version, patient=patient)
    first, other = take(box), take(box)
    assert first
    assert other
    assert [box.one(one.id).exam for one in (first, other)] == ["a", "c"]  # type: ignore[union-attr]
    assert take(box) is None
    assert box.settle(first, Settled("waiting", "later", due=500), None)
    assert take(box, 499) is None, "the first one waits, and so do those behind it"
    again = take(box, 500)
    assert again
    assert (again.id, again.attempts) == (first.id, 2)
    assert box.settle(again, DELIVERED, None)
    second = take(box, 501)
    assert second
    assert box.settle(second, DELIVERED, None)
    assert exams(engine, box, 502) == ["b"]


def test_a_failed_delivery_holds_back_its_own_examination_alone(engine: Engine, put: Put) -> None:
    box = Outbox(engine)
    put(engine, "a", version=1)
    put(engine, "a", version=2)
    put(engine, "b")
    claim = take(box)
    assert claim
    assert box.settle(claim, Settled("failed", "answered 422"), None)
    other = take(box, 20)
    assert other
    assert box.one(other.id).exam == "b"  # type: ignore[union-attr]
    assert box.settle(other, DELIVERED, None)
    assert take(box, 30) is None
    tally = box.tally()
    assert (tally.counts["failed"], tally.counts["waiting"]) == (1, 1)
    assert box.again(None, 40) == 1
    again = take(box, 40)
    assert again
    assert (again.id, again.attempts) == (claim.id, 1), "tries start anew"
    assert box.settle(again, Settled("failed", "answered 422"), None)
    assert box.drop([claim.id]) == 1
    assert exams(engine, box, 50) == ["a"], "given up, it holds nothing back"


def test_a_lease_that_ran_out_gives_the_delivery_to_another(engine: Engine, put: Put) -> None:
    box = Outbox(engine)
    put(engine, "a")
    slow = take(box, 0, "slow")
    assert slow
    assert take(box, LEASE - 1, "other") is None
    taken = take(box, LEASE, "other")
    assert taken
    assert taken.attempts == 2
    assert not box.settle(slow, DELIVERED, None), "the slow worker's word no longer counts"
    assert box.tally().counts["sending"] == 1
    assert box.settle(taken, DELIVERED, None)


def test_after_failures_in_a_row_one_delivery_probes_the_destination(engine: Engine, put: Put) -> None:
    box, other = Outbox(engine), Outbox(engine)
    for number in range(8):
        put(engine, f"e{number}", patient=f"p{number}")
    rest = Rest(1, lambda failures: 5000 if failures >= AFTER else 0)
    claims = [take(box) for _ in range(AFTER + 1)]
    for claim in claims[:AFTER]:
        assert claim
        assert box.settle(claim, Settled("waiting", "refused", due=20), rest)
    assert box.tally().open_until == 5000
    assert take(other, 4999) is None, "nobody asks it while it rests"
    probe = take(other, 5000, "one")
    assert probe
    assert probe.probe
    assert take(box, 5000, "two") is None, "one asks, the others wait for what it hears"
    assert box.one(probe.id).attempts == probe.attempts == 0, "a probe is no try of the delivery"  # type: ignore[union-attr]
    assert other.settle(probe, DELIVERED, None)
    assert box.tally().failures == 0
    assert take(box, 5001)
    assert take(other, 5001)


def test_a_probe_that_failed_is_followed_by_a_rest_and_no_longer(engine: Engine, put: Put) -> None:
    box = Outbox(engine)
    put(engine, "a")
    claim = take(box)
    assert claim
    assert box.settle(claim, Settled("waiting", due=0), Rest(AFTER, lambda _: 100))
    probe = take(box, 100)
    assert probe
    assert box.settle(probe, Settled("waiting", due=0), Rest(1, lambda _: 150))
    assert box.tally().open_until == 150
    assert take(box, 149) is None
    assert take(box, 150)


def test_a_probe_that_died_is_followed_by_another(engine: Engine, put: Put) -> None:
    box = Outbox(engine)
    put(engine, "a")
    put(engine, "b", patient="q")
    claim = take(box)
    assert claim
    assert box.settle(claim, Settled("waiting", due=0), Rest(AFTER, lambda _: 100))
    probe = take(box, 100)
    assert probe
    assert probe.probe
    assert take(box, 100 + LEASE - 1) is None
    following = take(box, 100 + LEASE)
    assert following
    assert following.probe


def test_the_least_tried_delivery_probes(engine: Engine, put: Put) -> None:
    """One that the destination cannot take must not keep it shut for the others."""
    box = Outbox(engine)
    put(engine, "poison")
    for _ in range(AFTER):
        claim = take(box)
        assert claim
        assert box.settle(claim, Settled("waiting", "500", due=0), Rest(1, lambda n: 50 if n >= AFTER else 0))
    put(engine, "sound", patient="q", at=49)
    probe = take(box, 50)
    assert probe
    assert box.one(probe.id).exam == "sound"  # type: ignore[union-attr]


def test_a_rest_ends_when_a_person_says_so(engine: Engine, put: Put) -> None:
    box = Outbox(engine)
    put(engine, "a")
    assert not box.reopen(0)
    claim = take(box)
    assert claim
    assert box.settle(claim, Settled("waiting", due=0), Rest(AFTER, lambda _: 5000))
    assert box.reopen(100)
    probe = take(box, 100)
    assert probe
    assert probe.probe, "whether it is back is still to be seen"


def test_a_hold_asked_for_ends_by_itself(engine: Engine, put: Put) -> None:
    """429 with Retry-After: all wait, and after that all go on, without a probe."""
    box = Outbox(engine)
    put(engine, "a")
    put(engine, "b", patient="q")
    claim = take(box)
    assert claim
    assert box.settle(claim, Settled("waiting", "429", due=3000), Rest(1, lambda _: 3000))
    assert take(box, 2999) is None
    found = [take(box, 3000), take(box, 3000)]
    assert [one is not None and not one.probe for one in found] == [True, True]


@pytest.mark.parametrize("seed", range(3))
def test_many_workers_give_each_delivery_to_one_and_keep_order(engine: Engine, put: Put, seed: int) -> None:
    chance = random.Random(seed)
    many = 60
    for number in range(many):
        put(engine, f"e{number}", patient=f"p{chance.randrange(8)}")
    sent: list[tuple[int, str]] = []

    def work(name: str) -> None:
        box, mine = Outbox(engine), random.Random(f"{seed}{name}")
        while box.tally().counts["delivered"] < many:
            claim = take(box, 10, name)
            if claim is None:
                continue
            if mine.random() < 0.3:
                assert box.settle(claim, Settled("waiting", "500", due=5), None)
                continue
            sent.append((claim.id, name))
            assert box.settle(claim, DELIVERED, None)

    with ThreadPoolExecutor(4) as pool:
        list(pool.map(work, "abcd"))
    assert sorted(number for number, _ in sent) == list(range(1, many + 1))
    with engine.connect() as connection:
        patients = {row.id: row.patient for row in connection.execute(select(outbox.c.id, outbox.c.patient))}
    for patient in set(patients.values()):
        ids = [number for number, _ in sent if patients[number] == patient]
        assert ids == sorted(ids)


def test_deleting_a_submission_deletes_its_delivery(engine: Engine, put: Put) -> None:
    put(engine, "a")
    with engine.begin() as connection:
        connection.execute(delete(submissions))
    assert Outbox(engine).tally().oldest is None
    assert take(Outbox(engine)) is None


def test_the_tally_names_every_state_and_the_oldest_that_is_open(engine: Engine, put: Put) -> None:
    box = Outbox(engine)
    assert box.tally().counts == {"waiting": 0, "sending": 0, "delivered": 0, "failed": 0, "dropped": 0}
    put(engine, "a", at=3)
    put(engine, "b", at=7, patient="q")
    assert box.tally().oldest == 3
    claim = take(box)
    assert claim
    assert box.tally().oldest == 3
    assert box.settle(claim, DELIVERED, None)
    assert box.tally().oldest == 7


def test_a_list_is_read_in_pages(engine: Engine, put: Put) -> None:
    box = Outbox(engine)
    for number in range(5):
        put(engine, f"e{number}")
    first = box.look(["waiting"], limit=3)
    rest = box.look(["waiting"], limit=3, after=first[-1].id)
    assert [one.exam for one in (*first, *rest)] == [f"e{n}" for n in range(5)]
    assert box.look(["failed"], limit=3) == []
    assert box.one(99) is None


def test_a_full_disk_keeps_the_outbox_as_it_was(tmp_path: object, put: Put) -> None:
    """SQLite tells a page limit that is reached as it tells a full disk (SQLITE_FULL)."""
    engine = open_database(f"sqlite:///{tmp_path}/full.sqlite3")
    put(engine, "a")
    box = Outbox(engine)
    claim = take(box)
    assert claim
    with engine.connect() as connection:
        pages = connection.exec_driver_sql("PRAGMA page_count").scalar()

    def limit(connection: object, _: object) -> None:
        connection.execute(f"PRAGMA max_page_count={pages}")  # type: ignore[attr-defined]

    engine.dispose()
    event.listen(engine, "connect", limit)
    large = Settled("delivered", outcome=b"x" * 400_000)
    with pytest.raises(StorageError):
        box.settle(claim, large, None)
    assert box.tally().counts["sending"] == 1
    assert box.settle(claim, DELIVERED, None), "with less to write it goes on"
    engine.dispose()


def test_one_that_may_go_is_found_behind_thousands_that_wait_for_others(
    sqlite_engine: Engine, put: Put
) -> None:
    box = Outbox(sqlite_engine)
    put(sqlite_engine, "first")
    claim = take(box)
    assert claim
    behind = [
        {"destination": "record-system", "submission": 1, "exam": f"e{number}", "patient": "p",
         "state": "waiting", "attempts": 0, "created": 1, "due": 1, "worker": "", "lease": 0, "reason": ""}
        for number in range(2100)
    ]  # fmt: skip
    with sqlite_engine.begin() as connection:
        connection.execute(insert(outbox), behind)
    assert take(box) is None
    put(sqlite_engine, "other", patient="q", at=2)
    found = take(box)
    assert found
    assert found.exam == "other"
