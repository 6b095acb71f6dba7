"""A real server for the tests of both faces, and sound records in every form."""

from __future__ import annotations

import json
import logging
import shutil
import threading
import time
from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path

import httpx
import pytest
import uvicorn

from fhirgallop import settings
from fhirgallop.service.app import create_app

# The same examination in every form; the cases change it.
FIELDS: Mapping[str, object] = {
    "pid": "P-1", "no": "E-1", "at": "2026-03-14T09:30:00+01:00",
    "hr": 78, "weight": 81.5, "s4": "yes", "words": "Quiet room.",
}  # fmt: skip


@dataclass(frozen=True)
class Server:
    """A running service."""

    base: str
    client: httpx.Client
    log: list[str]

    def post(self, body: bytes, kind: str, *, map_: str = "bedside", **more: str) -> httpx.Response:
        """Sends examinations."""
        accept = more.pop("accept", "*/*")
        return self.client.post(
            "/exams",
            params={"map": map_, **more},
            content=body,
            headers={"Content-Type": kind, "Accept": accept},
        )


class _Lines(logging.Handler):
    """Keeps what any logger says."""

    def __init__(self) -> None:
        super().__init__(logging.DEBUG)
        self.lines: list[str] = []

    def emit(self, record: logging.LogRecord) -> None:
        self.lines.append(self.format(record))


@pytest.fixture(scope="session")
def maps(tmp_path_factory: pytest.TempPathFactory, root: Path) -> Path:
    """A folder with the tests' map and those of the examples."""
    folder = tmp_path_factory.mktemp("maps")
    shutil.copy(root / "tests/cases/faces/maps/bedside.yaml", folder)
    for path in (root / "examples/informatician").glob("*.yaml"):
        shutil.copy(path, folder)
    return folder


@pytest.fixture
def server(tmp_path: Path, maps: Path) -> Iterator[Server]:
    """The service on a free port of this machine, with a database of its own and its finest log."""
    chosen = settings.load(port=0, maps=maps, database=f"sqlite:///{tmp_path / 'faces.sqlite3'}")
    handler, root_log = _Lines(), logging.getLogger()
    level = root_log.level
    root_log.addHandler(handler)
    root_log.setLevel(logging.DEBUG)
    config = uvicorn.Config(create_app(chosen), host=chosen.host, port=0, access_log=False, log_config=None)
    running = uvicorn.Server(config)
    thread = threading.Thread(target=running.run, daemon=True)
    thread.start()
    try:
        while not running.started and thread.is_alive():
            time.sleep(0.01)
        port = running.servers[0].sockets[0].getsockname()[1]
        base = f"http://127.0.0.1:{port}"
        with httpx.Client(base_url=base, timeout=60, trust_env=False) as client:
            yield Server(base, client, handler.lines)
    finally:
        running.should_exit = True
        thread.join(30)
        root_log.removeHandler(handler)
        root_log.setLevel(level)


@pytest.fixture(scope="session")
def sound() -> Callable[..., bytes]:
    """Text of the sound record in a form, with fields changed or left out."""

    def make(form: str, change: Mapping[str, object] | None = None, drop: tuple[str, ...] = ()) -> bytes:
        fields = {name: value for name, value in {**FIELDS, **(change or {})}.items() if name not in drop}
        return _WRITERS[form](fields)

    return make


def _json(fields: Mapping[str, object]) -> bytes:
    return json.dumps(fields).encode()


def _csv(fields: Mapping[str, object]) -> bytes:
    return f"{','.join(fields)}\n{','.join(str(v) for v in fields.values())}\n".encode()


def _hl7(fields: Mapping[str, object]) -> bytes:
    types = {"hr": "NM", "weight": "NM", "s4": "CWE", "words": "TX"}
    obx = [
        f"OBX|{n}|{types.get(name, 'ST')}|{name}||{value}||||||F"
        for n, (name, value) in enumerate(fields.items(), start=1)
        if name not in ("pid", "no", "at")
    ]
    head = [
        r"MSH|^~\&|FORM|W|GALLOP|W|20260314094500+0100||ORU^R01^ORU_R01|M-1|P|2.5.1|||||AUT|UNICODE UTF-8",
        f"PID|1||{fields['pid']}^^^BEDSIDE^MR",
        f"OBR|1||{fields['no']}^FORM|bedside^Bedside^L|||20260314093000+0100||||||||||||||||||F",
    ]
    return ("\r".join([*head, *obx]) + "\r").encode()


def _form(fields: Mapping[str, object]) -> bytes:
    def answer(value: object) -> dict[str, object]:
        return {"valueString": value} if isinstance(value, str) else {"valueDecimal": value}

    items = [
        {"linkId": name, "answer": [answer(value)]}
        for name, value in fields.items()
        if name not in ("pid", "no", "at")
    ]
    return json.dumps(
        {
            "resourceType": "QuestionnaireResponse",
            "identifier": {"system": "https://bedside.example/examinations", "value": fields["no"]},
            "status": "completed",
            "subject": {"reference": f"Patient/{fields['pid']}"},
            "authored": fields["at"],
            "item": items,
        }
    ).encode()


_WRITERS: Mapping[str, Callable[[Mapping[str, object]], bytes]] = {
    "json": _json,
    "csv": _csv,
    "hl7": _hl7,
    "form": _form,
}
