"""The service without a socket, with a database of its own, and the example examination."""

from __future__ import annotations

import json
from collections.abc import Callable, Iterator
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any

import pytest
from fastapi import FastAPI
from starlette.testclient import TestClient

from fhirgallop import settings
from fhirgallop.service.app import create_app


class Clock:
    """Gives a later minute each time it is asked."""

    def __init__(self) -> None:
        self.at = datetime(2026, 12, 1, 8, 0, tzinfo=UTC)

    def __call__(self) -> datetime:
        self.at += timedelta(minutes=1)
        return self.at


@pytest.fixture
def application(tmp_path: Path, root: Path) -> FastAPI:
    """The service with the examples' maps."""
    chosen = settings.load(
        maps=root / "examples/informatician",
        database=f"sqlite:///{tmp_path / 'service.sqlite3'}",
        max_records=50,
    )
    return create_app(chosen, Clock())


@pytest.fixture
def client(application: FastAPI) -> Iterator[TestClient]:
    """Speaks to the service; what breaks inside comes as the answer a client would get."""
    base = "http://localhost:8470"
    with TestClient(application, base_url=base, raise_server_exceptions=False) as speaking:
        yield speaking


@pytest.fixture(scope="session")
def example(root: Path) -> Callable[..., dict[str, Any]]:
    """The Fernwood examination, with boxes changed: `example(heart={"s4": "no"})`."""
    text = (root / "examples/ehr/fernwood-exam.json").read_text("utf-8")

    def make(**groups: dict[str, Any]) -> dict[str, Any]:
        record: dict[str, Any] = json.loads(text)
        for name, boxes in groups.items():
            record[name] = {**record[name], **boxes}
        return record

    return make
