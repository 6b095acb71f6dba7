"""``python -m fhirgallop.conformance.editions PACKAGE...``: builds profiles/base/ again, byte for byte."""

from __future__ import annotations

import hashlib
import sys
from collections.abc import Sequence
from pathlib import Path

from fhirgallop import assets
from fhirgallop.conformance.editions.compile import compile_edition
from fhirgallop.conformance.editions.edition import NAMES
from fhirgallop.conformance.editions.package import Package, read_package
from fhirgallop.errors import FhirgallopError, PackageError

# package name -> editions it serves and its place (the edition's own package is first)
_CORE = {"hl7.fhir.r4.examples": "R4", "hl7.fhir.r4b.core": "R4B", "hl7.fhir.r5.core": "R5"}
_TERMINOLOGY = {"hl7.terminology.r4": ("R4", "R4B"), "hl7.terminology.r5": ("R5",)}


def build(paths: Sequence[Path], folder: Path) -> list[str]:
    """Compiles every edition whose core package is given; returns a line a file written.

    Raises:
        PackageError: a package is broken, unknown or missing.
    """
    cores: dict[str, Package] = {}
    terminologies: dict[str, Package] = {}
    lines = []
    for path in paths:
        package = read_package(path)
        if package.name in _CORE:
            cores[_CORE[package.name]] = package
        elif package.name in _TERMINOLOGY:
            terminologies.update(dict.fromkeys(_TERMINOLOGY[package.name], package))
        else:
            raise PackageError(f"{path.name}: {package.name} is none of the packages named in SOURCE.md")
        digest = hashlib.sha256(path.read_bytes()).hexdigest()
        lines.append(f"read  {package.name} {package.version} sha256 {digest}")
    for name in NAMES:
        if name not in cores:
            continue
        if name not in terminologies:
            raise PackageError(f"{name}: its terminology package is missing; see SOURCE.md")
        data = compile_edition(name, [cores[name], terminologies[name]])
        target = folder / f"{name}.json.gz"
        target.write_bytes(data)
        lines.append(f"wrote {target.name} {len(data)} bytes sha256 {hashlib.sha256(data).hexdigest()}")
    return lines


def main(arguments: Sequence[str]) -> int:
    """Entry point; 0 when everything named was built."""
    if not arguments:
        print(__doc__, file=sys.stderr)
        return 2
    try:
        for line in build([Path(a) for a in arguments], assets.path("profiles", "base")):
            print(line)
    except FhirgallopError as error:
        print(error, file=sys.stderr)
        return 1
    return 0


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
