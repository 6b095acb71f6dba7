"""The template maps that the service may use, read and checked when it starts."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path

from fhirgallop.errors import MapError, SettingsError
from fhirgallop.mapping.reading import load_map
from fhirgallop.mapping.template_map import TemplateMap


def load_shelf(folder: Path) -> Mapping[str, TemplateMap]:
    """Every map of a folder, by its name.

    Raises:
        SettingsError: there is no such folder, a map has faults, or two maps have one name.
    """
    if not folder.is_dir():
        raise SettingsError(f"the maps folder {folder} does not exist; make it, or name another with --maps")
    found: dict[str, TemplateMap] = {}
    for path in sorted(folder.glob("*.yaml")):
        try:
            template = load_map(path)
        except MapError as error:
            faults = "\n  ".join(str(issue) for issue in error.issues)
            raise SettingsError(f"the map {path.name} cannot be used:\n  {faults}") from None
        if template.name in found:
            raise SettingsError(f"two maps in {folder} are named {template.name}; rename one of them")
        found[template.name] = template
    return found
