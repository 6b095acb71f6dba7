"""Drafts of template maps: every step of the work, the sample records beside it, and what is in use."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Final

from sqlalchemy import Connection, Engine, delete, func, insert, select, update
from sqlalchemy.exc import IntegrityError

from fhirgallop.storage.submissions import told
from fhirgallop.storage.tables import draft_samples, draft_steps, drafts

_MOST_STEPS: Final = 500


@dataclass(frozen=True, slots=True)
class Draft:
    """A draft as it stands.

    Attributes:
        id: its own.
        title: name of the form, for people.
        address: where the clinic's numbers belong (`https://clinic.example`).
        zone: time zone of times of day that are written without one.
        step: number of the step that counts, from 0.
        did: what that step did, in words.
        text: the map at that step.
        last: number of the last step; larger than `step` when steps were undone.
        changed: milliseconds since 1970 (UTC).
        dictionary: what a data dictionary says, as it was kept.
    """

    id: str
    title: str
    address: str
    zone: str
    step: int
    did: str
    text: str
    last: int
    changed: int
    dictionary: bytes


@dataclass(frozen=True, slots=True)
class Sample:
    """Records as they were brought in; patients' data."""

    id: int
    media_type: str
    content: bytes


class Drafts:
    """Keeps the drafts; every method raises StorageError when the database failed."""

    def __init__(self, engine: Engine) -> None:
        self._engine = engine

    def begin(self, draft: Draft, samples: Sequence[tuple[str, bytes]]) -> None:
        """Keeps a new draft at its first step, with (media type, content) of its sample records."""
        row = {
            "id": draft.id, "title": draft.title, "address": draft.address, "zone": draft.zone, "step": 0,
            "changed": draft.changed, "dictionary": draft.dictionary,
        }  # fmt: skip
        with told(), self._engine.begin() as connection:
            connection.execute(insert(drafts).values(**row))
            _add_step(connection, draft.id, 0, draft.did, draft.text)
            for media_type, content in samples:
                connection.execute(
                    insert(draft_samples).values(
                        draft=draft.id, media_type=media_type, content=content, at=draft.changed
                    )
                )

    def all(self) -> list[tuple[Draft, int]]:
        """Every draft, the last changed first, each with the number of its samples."""
        counts = select(func.count()).where(draft_samples.c.draft == drafts.c.id).scalar_subquery()
        with told(), self._engine.connect() as connection:
            ids = connection.execute(select(drafts.c.id, counts).order_by(drafts.c.changed.desc())).all()
            found = [(_draft(connection, id_), count) for id_, count in ids]
        return [(draft, count) for draft, count in found if draft]

    def find(self, id_: str) -> Draft | None:
        """One draft; None where there is none of that id."""
        with told(), self._engine.connect() as connection:
            return _draft(connection, id_)

    def change(self, id_: str, step: int, text: str, did: str, *, at: int) -> bool:
        """Adds a step after `step`, which takes the place of those that were undone.

        Returns:
            False when the draft is at another step meanwhile; nothing is then changed.
        """
        try:
            with told(), self._engine.begin() as connection:
                moved = _moved(connection, id_, step, step + 1, at)
                if moved:
                    later = draft_steps.c.step > step
                    connection.execute(delete(draft_steps).where(draft_steps.c.draft == id_, later))
                    _add_step(connection, id_, step + 1, did, text)
                    old = draft_steps.c.step <= step - _MOST_STEPS
                    connection.execute(delete(draft_steps).where(draft_steps.c.draft == id_, old))
        except IntegrityError:  # another process added the same step
            return False
        return moved

    def move(self, id_: str, step: int, to: int, *, at: int) -> bool:
        """Makes another kept step the one that counts; False when it is not there, or the draft has moved."""
        there = select(draft_steps.c.step).where(draft_steps.c.draft == id_, draft_steps.c.step == to)
        with told(), self._engine.begin() as connection:
            return connection.scalar(there) is not None and _moved(connection, id_, step, to, at)

    def delete(self, id_: str) -> None:
        """Deletes a draft with its steps and samples."""
        with told(), self._engine.begin() as connection:
            for table in (draft_samples, draft_steps):
                connection.execute(delete(table).where(table.c.draft == id_))
            connection.execute(delete(drafts).where(drafts.c.id == id_))

    def samples(self, id_: str) -> list[Sample]:
        """The sample records of a draft, in the order in which they came."""
        columns = (draft_samples.c.id, draft_samples.c.media_type, draft_samples.c.content)
        query = select(*columns).where(draft_samples.c.draft == id_).order_by(draft_samples.c.id)
        with told(), self._engine.connect() as connection:
            return [Sample(*row) for row in connection.execute(query)]

    def sample_ids(self, id_: str) -> tuple[int, ...]:
        """Which sample records a draft has."""
        query = select(draft_samples.c.id).where(draft_samples.c.draft == id_).order_by(draft_samples.c.id)
        with told(), self._engine.connect() as connection:
            return tuple(connection.scalars(query))

    def add_sample(self, id_: str, media_type: str, content: bytes, *, at: int) -> None:
        """Keeps further sample records."""
        row = {"draft": id_, "media_type": media_type, "content": content, "at": at}
        with told(), self._engine.begin() as connection:
            connection.execute(insert(draft_samples).values(**row))

    def delete_samples(self, id_: str) -> None:
        """Deletes the sample records of a draft."""
        with told(), self._engine.begin() as connection:
            connection.execute(delete(draft_samples).where(draft_samples.c.draft == id_))


def _draft(connection: Connection, id_: str) -> Draft | None:
    row = connection.execute(
        select(drafts, draft_steps.c.did, draft_steps.c.text)
        .join(draft_steps, (draft_steps.c.draft == drafts.c.id) & (draft_steps.c.step == drafts.c.step))
        .where(drafts.c.id == id_)
    ).first()
    if row is None:
        return None
    last = connection.scalar(select(func.max(draft_steps.c.step)).where(draft_steps.c.draft == id_))
    return Draft(
        row.id, row.title, row.address, row.zone, row.step, row.did, row.text.decode(), last or 0,
        row.changed, row.dictionary,
    )  # fmt: skip


def _moved(connection: Connection, id_: str, step: int, to: int, at: int) -> bool:
    change = update(drafts).where(drafts.c.id == id_, drafts.c.step == step).values(step=to, changed=at)
    return connection.execute(change).rowcount == 1


def _add_step(connection: Connection, id_: str, step: int, did: str, text: str) -> None:
    row = {"draft": id_, "step": step, "did": did[:200], "text": text.encode()}
    connection.execute(insert(draft_steps).values(**row))
