"""The desk: drafts with their samples, and maps from draft to use."""

from __future__ import annotations

import hashlib
import threading
from collections import OrderedDict
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from datetime import datetime
from typing import Any, Final

from sqlalchemy import Engine

from fhirgallop.codes import fhirjson
from fhirgallop.mapping.editing import new_map
from fhirgallop.mapping.reading import read_map
from fhirgallop.mapping.template_map import TemplateMap
from fhirgallop.observations.bundle import instant
from fhirgallop.outcome import Issue, has_errors
from fhirgallop.service.desk import brought
from fhirgallop.service.desk.brought import Brought
from fhirgallop.service.desk.dictionary import Described
from fhirgallop.service.desk.workbench import Bench, bench
from fhirgallop.service.shelf import Shelf
from fhirgallop.storage.drafts import Draft, Drafts
from fhirgallop.storage.maps import MapStore
from fhirgallop.storage.publications import DECLINED, USED, WAITING, Publication, Publications

_HELD: Final = 8  # drafts whose samples are kept read, in memory
_TAKEN: Final = Issue(
    "error", "duplicate", "map-version-taken",
    "This version of this map is kept already with another text; raise the version.", field="version",
)  # fmt: skip


@dataclass(frozen=True, slots=True)
class Begun:
    """What a new draft is made of: `samples` are (media type, content)."""

    name: str
    title: str
    address: str
    zone: str
    samples: Sequence[tuple[str, bytes]] = ()
    described: Sequence[Described] = ()
    text: str = ""


class Desk:
    """Drafts and publications; every method raises StorageError when the database failed."""

    def __init__(
        self,
        engine: Engine,
        shelf: Shelf,
        clock: Callable[[], datetime],
        new_id: Callable[[], str],
        *,
        second_person: bool,
    ) -> None:
        self.drafts = Drafts(engine)
        self.publications = Publications(engine)
        self.maps = MapStore(engine)
        self.shelf = shelf
        self.second_person = second_person
        self._clock = clock
        self._new_id = new_id
        self._read: OrderedDict[tuple[str, tuple[int, ...]], Brought] = OrderedDict()
        self._lock = threading.Lock()

    def now(self) -> datetime:
        """The moment, with a zone."""
        return self._clock()

    def begin(self, given: Begun) -> str:
        """Keeps a new draft; returns its id."""
        draft = Draft(
            self._new_id(), given.title, given.address, given.zone, 0, "brought in",
            given.text or new_map(given.name, given.title), 0, self._ms(), brought.written(given.described),
        )  # fmt: skip
        self.drafts.begin(draft, given.samples)
        return draft.id

    def brought(self, draft: Draft) -> Brought:
        """The sample records and fields of a draft; a few drafts are kept read."""
        # what was deleted, here or by another process, is not shown from memory
        key = (draft.id, self.drafts.sample_ids(draft.id))
        with self._lock:
            if (held := self._read.get(key)) is not None:
                self._read.move_to_end(key)
                return held
            self._forget(draft.id)
        samples = [one for one in self.drafts.samples(draft.id) if one.id in key[1]]
        found = brought.gather(samples, brought.read_written(draft.dictionary))
        with self._lock:
            self._read[key] = found
            while len(self._read) > _HELD:
                self._read.popitem(last=False)
        return found

    def bench(self, draft: Draft, field: str = "") -> Bench:
        """A draft as its page shows it."""
        return bench(draft, self.brought(draft), field)

    def change(self, draft: Draft, text: str, did: str) -> bool:
        """A further step; False when somebody else has changed the draft meanwhile."""
        return text == draft.text or self.drafts.change(draft.id, draft.step, text, did, at=self._ms())

    def move(self, draft: Draft, by: int) -> bool:
        """A step back or forth; False when there is none, or somebody else has changed the draft."""
        return self.drafts.move(draft.id, draft.step, draft.step + by, at=self._ms())

    def add_samples(self, draft: Draft, samples: Sequence[tuple[str, bytes]]) -> None:
        """Keeps further sample records."""
        for media_type, content in samples:
            self.drafts.add_sample(draft.id, media_type, content, at=self._ms())

    def delete_samples(self, id_: str) -> None:
        """Deletes the samples of a draft, also from memory."""
        self.drafts.delete_samples(id_)
        self._forget(id_)

    def delete(self, id_: str) -> None:
        """Deletes a draft and its samples."""
        self.drafts.delete(id_)
        self._forget(id_)

    def publish(
        self,
        template: TemplateMap,
        text: str,
        *,
        author: str,
        key: str,
        note: str,
        checked: Mapping[str, Any],
    ) -> tuple[str, list[Issue]]:
        """Puts a version into use, or lays it before a second person; returns its state, or why not."""
        at = instant(self._clock())
        if not self.maps.keep(template.name, template.version, text.encode(), at=at):
            return "", [_TAKEN]
        state = WAITING if self.second_person else USED
        one = Publication(
            template.name, template.version, "publish", state, author, digest(key), "", note,
            fhirjson.write(checked), at,
        )  # fmt: skip
        self.publications.add(one)
        self.shelf.look()
        return state, []

    def settle(self, one: Publication, *, approve: bool, person: str, key: str) -> bool:
        """A second person's answer; False where it is the author, or where nothing waits any more."""
        if one.state != WAITING or digest(key) == one.author_key:
            return False
        state = USED if approve else DECLINED
        settled = self.publications.settle(one, state, person, at=instant(self._clock()))  # type: ignore[arg-type]
        self.shelf.look()
        return settled

    def back(self, name: str, version: str, *, author: str, key: str, note: str) -> str:
        """Puts an earlier version into use again; returns its state, or nothing where it cannot be read."""
        text = self.maps.text(name, version)
        template, issues = read_map(text, name=name) if text else (None, [])
        if template is None or has_errors(issues):
            return ""
        state = WAITING if self.second_person else USED
        at = instant(self._clock())
        one = Publication(name, version, "back", state, author, digest(key), "", note, b"{}", at)
        self.publications.add(one)
        self.shelf.look()
        return state

    def version(self, name: str, version: str) -> tuple[TemplateMap, str] | None:
        """A kept version of a map, and its text; None where there is none that can be read."""
        text = self.maps.text(name, version)
        template = read_map(text, name=name)[0] if text else None
        return (template, text.decode()) if template and text else None

    def _forget(self, id_: str) -> None:
        for key in [key for key in self._read if key[0] == id_]:
            self._read.pop(key, None)

    def _ms(self) -> int:
        return int(self._clock().timestamp() * 1000)


def digest(key: str) -> str:
    """Who somebody is, not readable as that."""
    return hashlib.sha256(repr(("person", key)).encode("utf-8", "replace")).hexdigest()
