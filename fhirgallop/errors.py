"""The exceptions of fhirgallop, for mistakes of a programmer or an operator only.

What is wrong in *data* is never an exception but an `fhirgallop.outcome.Issue`.

    FhirgallopError
    ├── AssetError        a file that is shipped with fhirgallop is missing or broken
    ├── SettingsError     a setting is missing, contradictory or out of range
    ├── MapError          a template map has faults and cannot be used (carries them all)
    ├── PackageError      a FHIR package cannot be used (names the file and the reason)
    └── BackupError       a backup, or the database to fill from it, cannot be used
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from fhirgallop.outcome import Issue


class FhirgallopError(Exception):
    """Base of every exception that fhirgallop raises on purpose."""


class AssetError(FhirgallopError):
    """A shipped file is missing or broken: the installation should be renewed."""


class SettingsError(FhirgallopError):
    """A setting cannot be used; the message names the setting and the cure."""


class PackageError(FhirgallopError):
    """A FHIR package cannot be used; the message names the file and the reason."""


class BackupError(FhirgallopError):
    """A backup, or the database to fill from it, cannot be used; the message says why and what to do."""


class MapError(FhirgallopError):
    """A template map has faults; `issues` holds all of them, each with its line and cure."""

    def __init__(self, name: str, issues: Sequence[Issue]) -> None:
        self.name = name
        self.issues = tuple(issues)
        count = len(self.issues)
        first = f"; the first: {self.issues[0].text}" if self.issues else ""
        super().__init__(f"template map {name} has {count} fault{'s' * (count != 1)}{first}")
