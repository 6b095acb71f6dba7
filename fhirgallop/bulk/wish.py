"""What a run is: its inputs, its map, how it writes. The same wish over the same files: the same bytes."""

from __future__ import annotations

import hashlib
from collections.abc import Sequence
from dataclasses import dataclass, replace
from datetime import datetime
from pathlib import Path
from typing import Any, Final

from fhirgallop.errors import FhirgallopError
from fhirgallop.intake.detect import Kind, kind_of
from fhirgallop.intake.limits import Limits
from fhirgallop.observations.editions import Edition
from fhirgallop.version import VERSION

# A file of a back-fill may hold as many records as it likes: it is read in parts, in flat memory.
LIMITS: Final = replace(Limits(), rows=10**15)


class BulkError(FhirgallopError):
    """A run cannot start or go on; the message says why and what to do."""


@dataclass(frozen=True, slots=True)
class Source:
    """One input file.

    Attributes:
        path: where it lies.
        kind: what it holds, once unpacked.
        packed: it is gzip, and can be read from its start only.
        size: bytes of the file.
        changed: time of its last change, in nanoseconds.
    """

    path: Path
    kind: Kind
    packed: bool
    size: int
    changed: int

    @property
    def in_parts(self) -> bool:
        """Whether it can be cut between its records."""
        return not self.packed and self.kind not in ("json", "workbook")

    def as_dict(self) -> dict[str, Any]:
        """What stands in run.json."""
        return {"file": str(self.path), "bytes": self.size, "changed": self.changed}


@dataclass(frozen=True, slots=True)
class Wish:
    """How records are coded and written.

    Attributes:
        map_text: the template map, as written.
        map_name: its name, for messages.
        recorded: the moment of conversion that every resource carries, with a zone.
        edition: FHIR edition to write.
        snomed: write SNOMED CT codings.
        bundles: write transaction Bundles, in place of a file for each resource type.
        packed: write gzip.
        findings: write Parquet, a row a finding.
        review_each: one examination in so many is held against the rules, for the report; 0 for none.
        wordings: keep wordings that the map does not know, which are patients' data, in the report.
        each: records of one part; parts are what is lost, and done again, when a run is killed.
    """

    map_text: bytes
    map_name: str
    recorded: datetime
    edition: Edition = "R4"
    snomed: bool = True
    bundles: bool = False
    packed: bool = False
    findings: bool = False
    review_each: int = 10
    wordings: bool = False
    each: int = 1000

    def as_dict(self) -> dict[str, Any]:
        """What stands in run.json: the map as a digest, everything else as it is."""
        return {
            "fhirgallop": VERSION,
            "map": {"name": self.map_name, "sha256": hashlib.sha256(self.map_text).hexdigest()},
            "recorded": self.recorded.isoformat(),
            "edition": self.edition,
            "snomed": self.snomed,
            "bundles": self.bundles,
            "gzip": self.packed,
            "findings": self.findings,
            "reviewEach": self.review_each,
            "wordings": self.wordings,
            "recordsPerPart": self.each,
        }


def sources(paths: Sequence[Path]) -> tuple[Source, ...]:
    """The input files: those named, and all of a known kind in the folders named, by name.

    Raises:
        BulkError: a file is of no known kind, is named twice, or there is none.
        OSError: a file or folder is not there.
    """
    found: list[Source] = []
    for path in paths:
        if path.is_dir():
            inside = sorted(p for p in path.rglob("*") if p.is_file() and _kind(p))
            found += [_source(p) for p in inside]
        else:
            found.append(_source(path))
    if not found:
        raise BulkError("there is no record file in what was given; name files, or folders that hold some")
    if len({source.path.resolve() for source in found}) < len(found):
        raise BulkError("a file is named twice; name each once")
    return tuple(found)


def _source(path: Path) -> Source:
    kind = _kind(path)
    if kind is None:
        raise BulkError(f"{path}: this kind of file is not known; it is told by the ending of its name")
    state = path.stat()
    return Source(path, kind, path.suffix == ".gz", state.st_size, state.st_mtime_ns)


def _kind(path: Path) -> Kind | None:
    return kind_of(name=path.stem if path.suffix == ".gz" else path.name)
