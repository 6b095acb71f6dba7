"""Everything that was accepted arrives once in effect and in order, whoever dies when.

The real service, killed again and again, delivers to a record system that misbehaves and is killed too. Sizes
come from the environment; the full size is

    DELIVERY_EXAMS=10000 DELIVERY_KILLS=50 pytest -s tests/delivery/test_exactly_once.py
"""

from __future__ import annotations

import json
import os
import random
import signal
import socket
import subprocess
import sys
import threading
import time
import urllib.error
import urllib.request
from collections import Counter, defaultdict
from collections.abc import Callable
from dataclasses import dataclass, field
from hashlib import sha256
from itertools import groupby
from pathlib import Path
from typing import Any

import pytest
from sqlalchemy import select

from fhirgallop.storage.engine import open_database
from fhirgallop.storage.outbox import Outbox
from fhirgallop.storage.tables import outbox, submissions

EXAMS = int(os.environ.get("DELIVERY_EXAMS", "150"))
KILLS = int(os.environ.get("DELIVERY_KILLS", "5"))
FAULTS = os.environ.get("DELIVERY_FAULTS", "0.1")  # share of deliveries that the record system spoils
SENDERS = 4
PATIENT_SHARE = 5  # examinations of each patient
SECONDS = 300 + EXAMS // 2 + 20 * KILLS  # patience, not a measure

FORM = """
template-map: 1
name: short-form
version: "1"
title: An invented clinic's short form
record:
  patient:    {field: patient, system: "https://fernwood.example/patients"}
  identifier: {field: exam, system: "https://fernwood.example/examinations"}
  time:       {fields: [day, clock], format: YYYY-MM-DD, zone: Europe/Vienna}
  examiner:   {field: examiner, system: "https://fernwood.example/staff"}
  status:     {field: state, choice: {signed: final, changed: amended}}
blank-means: not-recorded
unknown-values: refuse
local-system: "https://fernwood.example/short-form"
sections:
  Vital signs: {}
lines:
  - finding: vital.heart-rate
    section: Vital signs
    field: hr
    number: {unit: /min}
"""


@dataclass
class Program:
    """A process of the service, or a worker's; killed without warning and started again."""

    words: list[str]
    env: dict[str, str]
    log: Path
    process: subprocess.Popen[bytes] | None = None

    def start(self) -> None:
        with self.log.open("ab") as log:
            words = [sys.executable, "-m", "fhirgallop", *self.words]
            self.process = subprocess.Popen(words, env=self.env, stdout=log, stderr=log)

    def kill(self, how: signal.Signals = signal.SIGKILL) -> None:
        assert self.process
        self.process.send_signal(how)
        self.process.wait(60)


@dataclass
class Site:
    """The programs of a site, and those who send examinations to it."""

    ports: list[int]
    programs: list[Program]
    accepted: int = 0
    repeated: int = 0
    lock: threading.Lock = field(default_factory=threading.Lock)

    def post(self, record: dict[str, Any], chance: random.Random) -> None:
        """Sends until it is answered 200, to whichever process answers."""
        while True:
            url = f"http://127.0.0.1:{chance.choice(self.ports)}/exams?map=short-form&review=none"
            asked = urllib.request.Request(
                url, json.dumps(record).encode(), {"Content-Type": "application/json"}
            )
            try:
                with urllib.request.urlopen(asked, timeout=20) as answer:
                    assert answer.status == 200
                    answer.read()
            except urllib.error.HTTPError as error:
                if error.code not in (409, 429, 503):
                    raise
                error.close()
            except (OSError, ValueError, EOFError):
                pass
            except Exception as error:
                if type(error).__module__ != "http.client":
                    raise
            else:
                with self.lock:
                    self.accepted += 1
                return
            with self.lock:
                self.repeated += 1
            time.sleep(0.05)


def send_all(site: Site, sender: int) -> None:
    """The examinations of this sender's patients, each patient's in order; some are amended."""
    chance = random.Random(f"sender {sender}")
    patients = range(sender, -(-EXAMS // PATIENT_SHARE), SENDERS)
    for patient in patients:
        for exam in range(patient * PATIENT_SHARE, min((patient + 1) * PATIENT_SHARE, EXAMS)):
            for version in range(1 + (exam % 3 == 0) + (exam % 6 == 0)):
                site.post(
                    {
                        "patient": f"P-{patient}", "exam": f"E-{exam}", "day": "2026-11-30", "clock": "09:30",
                        "examiner": "S-1", "state": "changed" if version else "signed", "hr": 60 + version,
                    },
                    chance,
                )  # fmt: skip


def expected_posts() -> int:
    return sum(1 + (exam % 3 == 0) + (exam % 6 == 0) for exam in range(EXAMS))


def free_port() -> int:
    with socket.socket() as taken:
        taken.bind(("127.0.0.1", 0))
        return int(taken.getsockname()[1])


def environment(folder: Path, address: str, base: str) -> dict[str, str]:
    maps = folder / "maps"
    maps.mkdir()
    (maps / "short-form.yaml").write_text(FORM, "utf-8")
    settings = {
        "MAPS": str(maps), "DATABASE": address, "DELIVER_TO": base, "LOOPBACK_HTTP": "true", "RATE": "0",
        "LOG_LEVEL": "warning", "DELIVERY_TIMEOUT": "1", "DELIVERY_WAIT": "0.05", "DELIVERY_WAIT_MOST": "1",
        "DELIVERY_REST": "0.2", "DELIVERY_TRIES": "1000", "DELIVERY_WORKERS": "3", "FREE_DISK": "0",
        "DURABLE": "false",
    }  # fmt: skip
    return {**os.environ, **{f"FHIRGALLOP_{name}": value for name, value in settings.items()}}


def disturb(site: Site, peer: Any, done: threading.Event, chance: random.Random) -> Counter[str]:
    """Kills programs at random moments, spread over the whole of the sending and the delivering."""
    killed: Counter[str] = Counter()
    total = 2 * expected_posts()
    for number in range(KILLS):
        # at a random point of each of so many equal parts of the work
        at = (number + chance.random()) / KILLS * total * 0.97
        while site.accepted + peer.rows("SELECT count(*) FROM events")[0][0] < at and not done.wait(0.02):
            pass
        done.wait(chance.random() * 0.3)
        program = chance.choice(site.programs)
        program.kill()
        killed["service" if "serve" in program.words else "worker"] += 1
        if number % 5 == 4:
            peer.kill()
            killed["record system"] += 1
            time.sleep(chance.random() * 0.3)
            peer.start()
        program.start()
    return killed


def await_all(engine: Any, deadline: float) -> None:
    box = Outbox(engine)
    while time.monotonic() < deadline:
        counts = box.tally().counts
        if counts["waiting"] + counts["sending"] == 0:
            return
        time.sleep(0.2)
    pytest.fail(f"not delivered in time: {box.tally()}")


def check(engine: Any, peer: Any) -> dict[str, int]:
    """Everything once, in order, whole."""
    with engine.connect() as connection:
        noted = connection.execute(
            select(outbox.c.id, outbox.c.state, submissions.c.bundle, submissions.c.exam)
            .join(submissions, outbox.c.submission == submissions.c.id)
            .order_by(outbox.c.id)
        ).all()
    assert len(noted) == expected_posts(), (
        "an accepted examination was noted once, a repeated post not at all"
    )
    assert len({row.exam for row in noted}) == EXAMS
    assert {row.state for row in noted} == {"delivered"}
    digests = [sha256(row.bundle).hexdigest() for row in noted]
    assert len(set(digests)) == len(digests)

    events = peer.rows("SELECT patient, exam, digest, created + updated FROM events ORDER BY id")
    effects = Counter(digest for *_, digest, changed in events if changed)
    assert effects == Counter(digests), "each version had its effect once"
    order, seen = defaultdict(list), defaultdict(list)
    patients = {digest: patient for patient, _, digest, _ in events}
    for digest in digests:
        order[patients[digest]].append(digest)
    for patient, _, digest, _ in events:
        seen[patient].append(digest)
    for patient, found in seen.items():
        assert [digest for digest, _ in groupby(found)] == order[patient], "in the order of acceptance"

    resources = peer.rows("SELECT count(*), count(DISTINCT type || ' ' || key) FROM resources")
    assert resources[0][0] == resources[0][1]
    (reports,) = peer.rows("SELECT count(*) FROM resources WHERE type = 'DiagnosticReport'")[0]
    assert reports == EXAMS
    (rates,) = peer.rows(
        "SELECT count(*) FROM resources WHERE type = 'Observation' AND CAST(body AS TEXT) LIKE '%8867-4%'"
    )[0]  # fmt: skip
    assert rates == EXAMS
    return {"deliveries": len(noted), "applied": len(events), "of which again": len(events) - len(noted)}


@pytest.mark.slow
@pytest.mark.parametrize("kind", ["sqlite", "postgresql", "two services and three workers"])
def test_everything_arrives_once_and_in_order(
    kind: str, tmp_path: Path, receiver: Callable[..., Any], request: pytest.FixtureRequest
) -> None:
    sqlite = kind == "sqlite"
    address = f"sqlite:///{tmp_path / 's.sqlite3'}" if sqlite else request.getfixturevalue("postgres")
    peer = receiver("--faults", FAULTS, "--late", "1.3", "--seed", "11")
    env = environment(tmp_path, address, peer.base)
    many = kind.startswith("two")
    ports = [free_port() for _ in range(2 if many else 1)]
    log = tmp_path / "log"
    programs = [Program(["serve", "--port", str(port)], env, log) for port in ports]
    programs += [Program(["deliveries", "work"], env, log) for _ in range(3 if many else 0)]
    site = Site(ports, programs)
    begin = time.monotonic()
    open_database(address).dispose()
    for program in programs:
        program.start()
    done = threading.Event()
    engine = open_database(address)
    try:
        senders = [threading.Thread(target=send_all, args=(site, n), daemon=True) for n in range(SENDERS)]
        for sender in senders:
            sender.start()
        killed = disturb(site, peer, done, random.Random(f"{kind} {EXAMS}"))
        for sender in senders:
            sender.join(max(begin + SECONDS - time.monotonic(), 1))
        assert site.accepted == expected_posts(), log.read_text()[-3000:]
        await_all(engine, begin + SECONDS)
        faults = dict(peer.rows("SELECT fault, count(*) FROM seen WHERE fault <> '' GROUP BY fault"))
        told = check(engine, peer)
    finally:
        done.set()
        for program in programs:
            program.kill(signal.SIGTERM)
        engine.dispose()
    assert killed.total() - killed["record system"] == KILLS
    took = time.monotonic() - begin
    print(f"\n{kind}: {EXAMS} examinations in {took:.0f} s; {told}; repeated posts {site.repeated}")
    print(f"  killed {dict(killed)}; misbehaved {faults}")
