"""The template maps that the service may use: those of the folder, and over them those published at the desk.

Maps of the folder are read and checked at the start. What is published at the desk is in use at once in the
process that published it, and within a second in every other. Where both have a map of one name, the desk's
counts: publishing is the later decision, with an author and a reason.
"""

from __future__ import annotations

import logging
import time
from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Final

from fhirgallop.errors import SettingsError
from fhirgallop.mapping.document import MAX_BYTES
from fhirgallop.mapping.reading import read_map
from fhirgallop.mapping.template_map import TemplateMap
from fhirgallop.outcome import has_errors
from fhirgallop.storage.maps import MapStore
from fhirgallop.storage.publications import Publications
from fhirgallop.storage.submissions import StorageError

log: Final = logging.getLogger("fhirgallop.service")

_STALE_SECONDS: Final = 1.0


@dataclass(frozen=True, slots=True)
class Published:
    """A map and the text it was read from."""

    template: TemplateMap
    text: bytes


def load_shelf(folder: Path) -> Mapping[str, Published]:
    """Every map of a folder, by its name.

    Raises:
        SettingsError: there is no such folder, a map has faults, or two maps have one name.
    """
    if not folder.is_dir():
        raise SettingsError(f"the maps folder {folder} does not exist; make it, or name another with --maps")
    found: dict[str, Published] = {}
    for path in sorted(folder.glob("*.yaml")):
        try:
            with path.open("rb") as file:
                text = file.read(MAX_BYTES + 1)
        except OSError as error:
            raise SettingsError(f"the map {path.name} cannot be read ({error.strerror})") from None
        template, issues = read_map(text, name=str(path))
        if template is None or has_errors(issues):
            faults = "\n  ".join(str(issue) for issue in issues)
            raise SettingsError(f"the map {path.name} cannot be used:\n  {faults}") from None
        if template.name in found:
            raise SettingsError(f"two maps in {folder} are named {template.name}; rename one of them")
        found[template.name] = Published(template, text)
    return found


def keep_versions(shelf: Mapping[str, Published], store: MapStore, *, at: str) -> None:
    """Keeps every version that is on the shelf, so that what was coded by it can be explained ever after.

    Args:
        shelf: from `load_shelf`.
        store: where versions are kept.
        at: now, as a FHIR instant.

    Raises:
        SettingsError: a version that was used before has another text now, or the database failed.
    """
    try:
        changed = [
            one.template
            for one in shelf.values()
            if not store.keep(one.template.name, one.template.version, one.text, at=at)
        ]
    except StorageError as error:
        raise SettingsError(f"the maps cannot be kept in the database ({error})") from None
    if changed:
        names = ", ".join(f"{template.name} {template.version}" for template in changed)
        raise SettingsError(
            f"this version of a map was used before with another text: {names}; raise `version` in the file, "
            "or take back the change"
        )


class Shelf(Mapping[str, TemplateMap]):
    """Every map in use, by name; looks, when used, whether another process has published one.

    Raises StorageError from any use when the database failed: an outdated map is not used in silence.
    """

    def __init__(
        self,
        folder: Mapping[str, TemplateMap],
        publications: Publications,
        monotonic: Callable[[], float] = time.monotonic,
    ) -> None:
        self.folder = folder
        self._publications = publications
        self._monotonic = monotonic
        self._looked = float("-inf")
        self._newest = -1
        self._maps = dict(folder)

    def __getitem__(self, name: str) -> TemplateMap:
        return self._current()[name]

    def __iter__(self) -> Iterator[str]:
        return iter(self._current())

    def __len__(self) -> int:
        return len(self._current())

    def look(self) -> None:
        """Takes up at once what has been published."""
        self._looked = self._monotonic()
        newest = self._publications.newest()
        if newest == self._newest:
            return
        found = dict(self.folder)
        for name, (version, text) in self._publications.in_use().items():
            held = self._maps.get(name)
            if held is None or held.version != version or held is self.folder.get(name):
                held = _read_published(name, text)
            if held is not None:
                found[name] = held
        self._maps, self._newest = found, newest

    def _current(self) -> dict[str, TemplateMap]:
        if self._monotonic() - self._looked >= _STALE_SECONDS:
            self.look()
        return self._maps


def _read_published(name: str, text: bytes) -> TemplateMap | None:
    template, issues = read_map(text, name=name)
    if template is None or has_errors(issues):
        # it was without fault when it was published: a newer program reads maps otherwise
        log.error("the published map %s cannot be read by this program; publish it anew", name)
        return None
    return template
