"""Tokens that were used, and people who are signed in; both known by digests only."""

from __future__ import annotations

import hashlib
import threading
from dataclasses import dataclass
from typing import Final

from sqlalchemy import Connection, Engine, Table, delete, insert, select
from sqlalchemy.exc import IntegrityError

from fhirgallop.storage.submissions import told
from fhirgallop.storage.tables import sessions, used_tokens

_SWEEP_SECONDS: Final = 60.0


@dataclass(frozen=True, slots=True)
class Session:
    """Somebody signed in.

    Attributes:
        subject: digest of who it is.
        roles: what that person may.
        until: when the sign-in ends, in seconds since 1970.
    """

    subject: str
    roles: frozenset[str]
    until: float


class UsedTokens:
    """Remembers tokens that may be used once, until they expire."""

    def __init__(self, engine: Engine) -> None:
        self._engine = engine
        self._sweep = _Sweep(used_tokens)

    def add(self, issuer: str, id_: str, *, until: float, now: float) -> bool:
        """Takes a token down as used; False when it was used before.

        Args:
            issuer: who made it.
            id_: its id, unique with that issuer.
            until: when it may be forgotten, in seconds since 1970.
            now: seconds since 1970.

        Raises:
            StorageError: the database failed.
        """
        row = {"token": _digest("token", issuer, id_), "until": _ms(until)}
        try:
            with told(), self._engine.begin() as connection:
                self._sweep.of(connection, now)
                connection.execute(insert(used_tokens).values(**row))
        except IntegrityError:
            return False
        return True


class Sessions:
    """Keeps who is signed in; a session is known by a secret that only the browser has.

    Every method raises StorageError when the database failed.
    """

    def __init__(self, engine: Engine) -> None:
        self._engine = engine
        self._sweep = _Sweep(sessions)

    def begin(self, secret: str, session: Session, *, now: float) -> None:
        """Keeps a new session."""
        row = {
            "session": _digest("session", secret),
            "subject": session.subject,
            "roles": " ".join(sorted(session.roles)),
            "until": _ms(session.until),
        }
        with told(), self._engine.begin() as connection:
            self._sweep.of(connection, now)
            connection.execute(insert(sessions).values(**row))

    def find(self, secret: str, *, now: float) -> Session | None:
        """The session of a secret, unless it is over."""
        query = select(sessions.c.subject, sessions.c.roles, sessions.c.until).where(
            sessions.c.session == _digest("session", secret), sessions.c.until > _ms(now)
        )
        with told(), self._engine.connect() as connection:
            row = connection.execute(query).one_or_none()
        return Session(row.subject, frozenset(row.roles.split()), row.until / 1000) if row else None

    def end(self, secret: str) -> None:
        """Forgets a session."""
        with told(), self._engine.begin() as connection:
            connection.execute(delete(sessions).where(sessions.c.session == _digest("session", secret)))


class _Sweep:
    """Takes out what is over, now and then, on somebody's write."""

    def __init__(self, table: Table) -> None:
        self._table = table
        self._due = 0.0
        self._lock = threading.Lock()

    def of(self, connection: Connection, now: float) -> None:
        with self._lock:
            if now < self._due:
                return
            self._due = now + _SWEEP_SECONDS
        connection.execute(delete(self._table).where(self._table.c.until < _ms(now)))


def _ms(seconds: float) -> int:
    return int(seconds * 1000)


def _digest(*parts: str) -> str:
    # repr() keeps the parts apart whatever characters they hold
    return hashlib.sha256(repr(parts).encode("utf-8", "replace")).hexdigest()
