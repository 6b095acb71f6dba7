"""Reads the tables of single faults: bases, the changes that spoil them, the one issue each must give."""

from __future__ import annotations

import functools
import io
import json
import re
import tarfile
from collections.abc import Callable, Iterator
from copy import deepcopy
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import pytest
from ruamel.yaml import YAML

CASES = Path(__file__).parents[2] / "cases" / "conformance" / "mutants"
TABLES = ("structure", "values", "invariants", "references", "bundles", "profiles")
EDITIONS = ("R4", "R4B", "R5")
CANONICAL = "https://clinic.example/StructureDefinition/"
FIELDS = frozenset({"base", "set", "remove", "text", "write", "severity", "rule", "at", "in", "profile"})


@dataclass(frozen=True, slots=True)
class Mutant:
    """One valid resource in one edition with one fault, and the issue it must give.

    Attributes:
        resource: the parsed resource with its fault; None when the fault is one of the text itself.
        text: the resource as bytes.
        expected: severity, rule and expression of the one issue.
        profiles: canonicals the caller asks for beside the base specification.
    """

    clause: str
    edition: str
    name: str
    resource: dict[str, Any] | None
    text: bytes
    expected: tuple[str, str, str] | None
    profiles: tuple[str, ...] = ()
    row: dict[str, Any] = field(default_factory=dict, compare=False, repr=False)


def _read(name: str) -> dict[str, Any]:
    found: dict[str, Any] = YAML(typ="safe").load(CASES / f"{name}.yaml")
    return found


def _step(value: Any, key: str) -> Any:
    return value[int(key)] if isinstance(value, list) else value[key]


def change(resource: dict[str, Any], row: dict[str, Any]) -> dict[str, Any]:
    """A copy with the row's `remove` and `set` done; a path that leads nowhere raises."""
    changed: dict[str, Any] = json.loads(json.dumps(resource))  # YAML's anchors are one object: undo that
    for path in row.get("remove", ()):
        *way, last = path.split(".")
        holder = functools.reduce(_step, way, changed)
        del holder[int(last) if isinstance(holder, list) else last]
    for path, value in row.get("set", {}).items():
        *way, last = path.split(".")
        holder = functools.reduce(_step, way, changed)
        if not isinstance(holder, list):
            holder[last] = deepcopy(value)
        elif int(last) == len(holder):
            holder.append(deepcopy(value))
        else:
            holder[int(last)] = deepcopy(value)
    return changed


@functools.cache
def bases() -> dict[tuple[str, str], dict[str, Any]]:
    """Every base by name and edition."""
    found = {}
    for name, base in _read("bases").items():
        if name == "said":
            continue
        assert set(base) <= {"resource", "in", "as"}, name
        for edition in base.get("in", EDITIONS):
            found[name, edition] = change(base["resource"], base.get("as", {}).get(edition, {}))
    return found


def _written(resource: dict[str, Any], row: dict[str, Any]) -> bytes:
    text = json.dumps(resource, ensure_ascii=False)
    if "text" in row:
        old, new = row["text"]
        assert text.count(old) == 1, f"{old!r} stands {text.count(old)} times in the base"
        text = text.replace(old, new)
    return text.encode(row.get("write", "utf-8"))


def mutants() -> Iterator[Mutant]:
    """Every row of every table, in each of its editions."""
    known = bases()
    for table in TABLES:
        for clause, rows in _read(table).items():
            for number, row in enumerate(rows, 1):
                assert set(row) <= FIELDS, row
                editions = row.get("in", [e for e in EDITIONS if (row["base"], e) in known])
                assert editions, row
                for edition in editions:
                    changed = change(known[row["base"], edition], row)
                    of_text = "text" in row or "write" in row
                    yield Mutant(
                        clause=clause,
                        edition=edition,
                        name=f"{clause.replace(' ', '-')}-{number}-{edition}",
                        resource=None if of_text else changed,
                        text=_written(changed, row),
                        expected=(row.get("severity", "error"), row["rule"], row["at"]),
                        profiles=tuple(CANONICAL + p for p in [row.get("profile")] if p),
                        row=row,
                    )


@functools.cache
def all_mutants() -> tuple[Mutant, ...]:
    return tuple(mutants())


def sound() -> list[Mutant]:
    """The bases themselves, and with each profile that a row asks of them."""
    found = {}
    for mutant in all_mutants():
        # what cannot be judged is the profile's fault, which no base can cure
        for profiles in dict.fromkeys(((), () if mutant.clause == "not judged" else mutant.profiles)):
            key = (mutant.row["base"], mutant.edition, profiles)
            resource = bases()[key[0], key[1]]
            name = "-".join((key[0], key[1], *(p.removeprefix(CANONICAL) for p in profiles)))
            text = json.dumps(resource).encode()
            found[key] = Mutant("", key[1], name, resource, text, None, profiles)
    for (name, edition), resource in bases().items():
        text = json.dumps(resource).encode()
        found.setdefault((name, edition, ()), Mutant("", edition, f"{name}-{edition}", resource, text, None))
    return list(found.values())


def pytest_generate_tests(metafunc: pytest.Metafunc) -> None:
    """One test for each mutant and each base."""
    if "mutant" in metafunc.fixturenames:
        metafunc.parametrize("mutant", [pytest.param(m, id=m.name) for m in all_mutants()])
    if "base" in metafunc.fixturenames:
        metafunc.parametrize("base", [pytest.param(m, id=m.name) for m in sound()])


@pytest.fixture(scope="session")
def every_mutant() -> tuple[Mutant, ...]:
    return all_mutants()


@pytest.fixture(scope="session")
def every_base() -> dict[tuple[str, str], dict[str, Any]]:
    return bases()


@pytest.fixture(scope="session")
def packages(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, ...]:
    """The test profiles as a FHIR package, in the form packages are published in."""
    path = tmp_path_factory.mktemp("package") / "profiles.tgz"
    manifest = {"name": "clinic.example.profiles", "version": "0.1.0", "fhirVersions": ["4.0.1"]}
    files = {"package.json": json.dumps(manifest).encode()}
    for number, definition in enumerate(_read("definitions")):
        kind = definition["resourceType"]
        files[f"{kind}-{number}.json"] = json.dumps(definition).encode()
    with tarfile.open(path, "w:gz") as archive:
        for name, content in files.items():
            member = tarfile.TarInfo(f"package/{name}")
            member.size = len(content)
            archive.addfile(member, io.BytesIO(content))
    return (path,)


_URL = re.compile(r"https?://[A-Za-z0-9./_|:-]+", re.ASCII)


@pytest.fixture(scope="session")
def plain_url() -> re.Pattern[str]:
    """Addresses of definitions, which an issue may name."""
    return _URL


@dataclass(frozen=True, slots=True)
class Found:
    """A node that an expression leads to.

    Attributes:
        value: its JSON value; None when a primitive has only an `_x`.
        companion: that `_x`, or None.
        beside: whether the way leads through an `_x`, or ends at one that has no value.
    """

    value: Any
    companion: Any
    beside: bool


_STEP = re.compile(r"\.(`?)(\w+)\1(?:\.ofType\((\w+)\))?(?:\[(\d+)\])?")


@pytest.fixture(scope="session")
def nodes_at() -> Callable[[dict[str, Any], str], list[Found]]:
    """A reading of its own of the expressions an issue may hold, as an evaluator misses the `_x` of lists."""

    def find(resource: dict[str, Any], expression: str) -> list[Found]:
        kind, _, _ = expression.partition(".")
        assert resource["resourceType"] == kind
        assert _STEP.sub("", expression[len(kind) :]) == "", expression
        held: list[tuple[Any, Any, bool]] = [(resource, None, False)]
        for _, name, of_type, index in _STEP.findall(expression[len(kind) :]):
            key = name + of_type[:1].upper() + of_type[1:]
            held = [found for node in held for found in _below(node, key, int(index) if index else None)]
        return [Found(*node) for node in held]

    return find


def _below(node: tuple[Any, Any, bool], key: str, index: int | None) -> Iterator[tuple[Any, Any, bool]]:
    value, companion, beside = node
    for place, way in ((value, beside), (companion, True)):
        if not isinstance(place, dict) or not {key, "_" + key} & place.keys():
            continue
        plain, under = place.get(key), place.get("_" + key)
        if isinstance(plain, list) or isinstance(under, list):
            assert index is not None, f"{key} is a list"
            plain, under = _item(plain, index), _item(under, index)
            if plain is None and under is None:
                continue
        yield plain, under, way or plain is None


def _item(held: Any, index: int) -> Any:
    return held[index] if isinstance(held, list) and index < len(held) else None
