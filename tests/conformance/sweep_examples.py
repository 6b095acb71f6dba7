"""Judges every resource of HL7's example packages: ``python sweep_examples.py PACKAGE.tgz...``.

An example with an error must stand in faulty_examples.csv with the rule that it breaks (a file's name there
may hold `*`); a row of that list that no longer applies is told too. Exit code 1 when
either happens. `--list` prints the rows as found.
"""

from __future__ import annotations

import csv
import sys
import tarfile
from collections.abc import Iterator, Sequence
from fnmatch import fnmatch
from pathlib import Path

from fhirgallop.conformance import validate

EDITIONS = {"hl7.fhir.r4.examples": "R4", "hl7.fhir.r4b.examples": "R4B", "hl7.fhir.r5.examples": "R5"}
LIST = Path(__file__).parent / "faulty_examples.csv"


def resources(path: Path) -> Iterator[tuple[str, bytes]]:
    """Name and text of each resource in a package."""
    with tarfile.open(path, "r|gz") as archive:
        for member in archive:
            name = member.name.removeprefix("package/")
            if (
                member.isfile()
                and name.endswith(".json")
                and "/" not in name
                and name not in ("package.json", ".index.json")
            ):
                stream = archive.extractfile(member)
                if stream is not None:
                    yield name, stream.read()


def sweep(path: Path) -> tuple[str, int, set[tuple[str, str, str]]]:
    """Edition, number of resources, and (edition, file, rule) of each error."""
    edition = EDITIONS[path.name.rpartition("-")[0]]
    count = 0
    found: set[tuple[str, str, str]] = set()
    for name, text in resources(path):
        if b'"resourceType"' not in text:
            continue
        count += 1
        found |= {(edition, name, issue.rule) for issue in validate(text, edition) if issue.is_error}
    return edition, count, found


def _meant(row: tuple[str, str, str], item: tuple[str, str, str]) -> bool:
    return row[0] == item[0] and row[2] == item[2] and fnmatch(row[1], item[1])


def main(arguments: Sequence[str]) -> int:
    """Entry point."""
    with LIST.open(encoding="utf-8", newline="") as stream:
        listed = {(row["edition"], row["file"], row["rule"]) for row in csv.DictReader(stream)}
    wrong = 0
    for argument in arguments:
        if argument == "--list":
            continue
        edition, count, found = sweep(Path(argument))
        expected = {row for row in listed if row[0] == edition}
        if "--list" in arguments:
            for row in sorted(found):
                print(",".join(row))
            continue
        unlisted = sorted(row for row in found if not any(_meant(row, item) for item in expected))
        idle = sorted(item for item in expected if not any(_meant(row, item) for row in found))
        print(f"{edition}: {count} resources, {len({f for _, f, _ in found})} with errors")
        for row in unlisted:
            print("  not listed:", *row)
        for row in idle:
            print("  listed, but not found:", *row)
        wrong += bool(unlisted or idle)
    return 1 if wrong else 0


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
