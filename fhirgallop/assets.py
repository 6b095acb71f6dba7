"""Finds the files that travel with the package: in a wheel, or in a checkout."""

from __future__ import annotations

from pathlib import Path

from fhirgallop.errors import AssetError

_PACKAGE = Path(__file__).resolve().parent


def path(*parts: str) -> Path:
    """Path of a shipped file, e.g. ``path("terminology", "findings.csv")``.

    Raises:
        AssetError: no such file is shipped.
    """
    for root in (_PACKAGE / "_assets", _PACKAGE.parent):
        found = root.joinpath(*parts)
        if found.exists():
            return found
    raise AssetError(f"{'/'.join(parts)} is not among the installed files; install fhirgallop again")
