"""What several threads keep at the same moment, in one transaction of an embedded database.

It has one writer, and a commit that survives a power cut takes as long for ten examinations as for one: who
comes while another commits joins the next transaction. A database server has many writers, and sees to this
itself.
"""

from __future__ import annotations

import threading
from collections import deque
from collections.abc import Callable
from dataclasses import dataclass
from typing import Final

from sqlalchemy import Connection, Engine

Act = Callable[[Connection], None]

_MOST: Final = 16  # who comes later need not wait for all of a long queue


@dataclass(slots=True, eq=False)
class _Job:
    """What one thread keeps, and what became of it."""

    act: Act
    done: bool = False
    error: BaseException | None = None


class Writer:
    """Runs what is given to it in transactions, of many threads together where that is quicker."""

    def __init__(self, engine: Engine) -> None:
        self._engine = engine
        self._joins = engine.dialect.name == "sqlite"
        self._turn = threading.Lock()
        self._waiting: deque[_Job] = deque()

    def keep(self, act: Act) -> None:
        """Runs `act` on a connection and commits; all of what it writes is kept, or nothing.

        Args:
            act: may be called by another thread, and twice: after a transaction that failed for the sake of
                others in it, once more by itself.

        Raises:
            whatever `act` or the database raised.
        """
        job = _Job(act)
        if not self._joins:
            self._run([job])
        else:
            self._waiting.append(job)
            with self._turn:
                while not job.done:  # unless whoever had the turn before took it along
                    most = min(len(self._waiting), _MOST)
                    self._run([self._waiting.popleft() for _ in range(most)])
        if job.error is not None:
            raise job.error

    def _run(self, jobs: list[_Job]) -> None:
        try:
            with self._engine.begin() as connection:
                for job in jobs:
                    job.act(connection)
        except BaseException as error:  # noqa: BLE001 - it is raised in the thread whose job it is
            if len(jobs) > 1:
                for job in jobs:
                    self._run([job])
                return
            jobs[0].error = error
        for job in jobs:
            job.done = True
