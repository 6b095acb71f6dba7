"""The template maps that the service may use: read and checked at its start, and kept version by version."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path

from fhirgallop.errors import SettingsError
from fhirgallop.mapping.document import MAX_BYTES
from fhirgallop.mapping.reading import read_map
from fhirgallop.mapping.template_map import TemplateMap
from fhirgallop.outcome import has_errors
from fhirgallop.storage.maps import MapStore
from fhirgallop.storage.submissions import StorageError


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
