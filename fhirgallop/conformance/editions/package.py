"""Reads a FHIR package: the .tgz in which HL7 and others publish definitions.

Nothing is unpacked to disk. A package is foreign input: its size, number of files and names are limited.
Source: the npm form of FHIR packages (folder `package/`, `package.json` with name, version, fhirVersions).
"""

from __future__ import annotations

import re
import tarfile
import zlib
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import orjson

from fhirgallop.errors import PackageError

KINDS = ("StructureDefinition", "ValueSet", "CodeSystem")
MAX_FILES = 50_000
MAX_FILE = 64 * 1024 * 1024
MAX_TOTAL = 1024 * 1024 * 1024

_NAME = re.compile(r"package/[A-Za-z0-9_.%~+ -]{1,200}\.json", re.ASCII)


@dataclass(frozen=True, slots=True)
class Package:
    """What a package holds, as far as it is used for judging.

    Attributes:
        name: e.g. "hl7.fhir.r4b.core".
        version: e.g. "4.3.0".
        fhir_versions: FHIR versions it says it is for.
        structures: StructureDefinitions by canonical.
        value_sets: ValueSets by canonical.
        code_systems: CodeSystems by canonical.
    """

    name: str
    version: str
    fhir_versions: tuple[str, ...]
    structures: Mapping[str, Mapping[str, Any]]
    value_sets: Mapping[str, Mapping[str, Any]]
    code_systems: Mapping[str, Mapping[str, Any]]


def read_package(path: Path) -> Package:
    """Reads the definitions of a package.

    Raises:
        PackageError: it cannot be used; the message names the file and the reason.
    """
    try:
        files = _files(path)
    except (OSError, EOFError, tarfile.TarError, zlib.error) as error:
        raise PackageError(f"{path.name}: not a readable .tgz file ({type(error).__name__})") from error
    manifest = files.pop("package/package.json", None)
    if manifest is None:
        raise PackageError(f"{path.name}: no package/package.json; this is not a FHIR package")
    head = _parse(path, "package.json", manifest)
    name, version = head.get("name"), head.get("version")
    if not isinstance(name, str) or not isinstance(version, str):
        raise PackageError(f"{path.name}: package.json names no package and version")
    declared = head.get("fhirVersions") or head.get("fhir-version-list") or []
    found: dict[str, dict[str, Mapping[str, Any]]] = {kind: {} for kind in KINDS}
    for file in sorted(files):
        resource = _parse(path, file, files.pop(file))
        kind, url = resource.get("resourceType"), resource.get("url")
        if kind in found and isinstance(url, str):
            found[kind].setdefault(url, resource)
    return Package(
        name=name,
        version=version,
        fhir_versions=tuple(v for v in declared if isinstance(v, str)) if isinstance(declared, list) else (),
        structures=found["StructureDefinition"],
        value_sets=found["ValueSet"],
        code_systems=found["CodeSystem"],
    )


def _files(path: Path) -> dict[str, bytes]:
    """The package's JSON files that may hold definitions, by name; read in one pass over the stream."""
    kept: dict[str, bytes] = {}
    total = count = 0
    with tarfile.open(path, "r|gz") as archive:
        for member in archive:
            count += 1
            total += member.size
            if count > MAX_FILES:
                raise PackageError(f"{path.name}: more than {MAX_FILES} files")
            if total > MAX_TOTAL:
                raise PackageError(f"{path.name}: more than {MAX_TOTAL // 2**20} MB unpacked")
            if not member.isfile() or not _NAME.fullmatch(member.name) or not _wanted(member.name):
                continue
            if member.size > MAX_FILE:
                raise PackageError(f"{path.name}: {member.name} is larger than {MAX_FILE // 2**20} MB")
            stream = archive.extractfile(member)
            if stream is not None:
                kept[member.name] = stream.read()
    return kept


def _wanted(name: str) -> bool:
    """Published packages name files Type-id.json; a name of any other form is opened to see what it is."""
    kind, dash, _ = name.removeprefix("package/").partition("-")
    return not dash or kind in KINDS or not kind[:1].isupper()


def _parse(path: Path, file: str, text: bytes) -> dict[str, Any]:
    try:
        value = orjson.loads(text.removeprefix(b"\xef\xbb\xbf"))
    except ValueError as error:
        raise PackageError(f"{path.name}: {file} is not JSON") from error
    if not isinstance(value, dict):
        raise PackageError(f"{path.name}: {file} is not a JSON object")
    return value
