"""Used tokens and sessions, on both kinds of database."""

from __future__ import annotations

from concurrent.futures import ThreadPoolExecutor

import pytest
from sqlalchemy import Engine, func, select

from fhirgallop.storage.engine import open_database
from fhirgallop.storage.submissions import StorageError
from fhirgallop.storage.tables import sessions, used_tokens
from fhirgallop.storage.tokens import Session, Sessions, UsedTokens


def counted(engine: Engine, table: object) -> int:
    with engine.connect() as connection:
        return connection.scalar(select(func.count()).select_from(table)) or 0  # type: ignore[arg-type]


def test_a_token_is_taken_once_however_many_ask_at_once(address: str) -> None:
    """Two processes' worth of engines, sixteen threads, one token: one of them gets it."""
    engines = [open_database(address) for _ in range(2)]
    stores = [UsedTokens(engine) for engine in engines]
    for n in range(5):

        def take(number: int, n: int = n) -> bool:
            return stores[number % 2].add("https://ehr.example", f"jti-{n}", until=200.0, now=100.0)

        with ThreadPoolExecutor(16) as pool:
            assert sum(pool.map(take, range(16))) == 1
    for engine in engines:
        engine.dispose()


def test_ids_are_each_issuers_own(engine: Engine) -> None:
    used = UsedTokens(engine)
    assert used.add("a", "b c", until=2, now=1)
    assert used.add("a b", "c", until=2, now=1)
    assert used.add("c", "b c", until=2, now=1)
    assert not used.add("a", "b c", until=2, now=1)


def test_what_is_over_is_forgotten_and_nothing_else(engine: Engine) -> None:
    used = UsedTokens(engine)
    for n in range(10):
        assert used.add("a", str(n), until=1000 + n, now=900)
    assert used.add("a", "late", until=2000, now=1005)
    assert counted(engine, used_tokens) == 6
    assert not used.add("a", "7", until=1007, now=1005.5)
    assert UsedTokens(engine).add("a", "0", until=3000, now=1006)


def test_sessions(engine: Engine) -> None:
    kept = Sessions(engine)
    kept.begin("secret", Session("s" * 64, frozenset({"operator", "informatician"}), 200.0), now=100.0)
    found = kept.find("secret", now=199.0)
    assert found == Session("s" * 64, frozenset({"operator", "informatician"}), 200.0)
    assert kept.find("secret", now=200.0) is None
    assert kept.find("Secret", now=100.0) is None
    kept.begin("another", Session("t" * 64, frozenset({"clinician"}), 900.0), now=500.0)
    assert counted(engine, sessions) == 1
    kept.end("another")
    kept.end("another")
    assert kept.find("another", now=500.0) is None
    with engine.connect() as connection:
        text = str(connection.execute(select(sessions)).all())
    assert "secret" not in text


def test_a_database_that_fails_is_said(engine: Engine) -> None:
    """Whoever cannot tell whether a token was used lets nobody in."""
    used_tokens.drop(engine)
    sessions.drop(engine)
    with pytest.raises(StorageError):
        UsedTokens(engine).add("a", "b", until=2, now=1)
    with pytest.raises(StorageError):
        Sessions(engine).find("x", now=1)
