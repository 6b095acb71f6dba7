"""Compiles FHIR packages to the tables that `edition` opens: small, without prose, the same bytes each time.

Source: the packages named in profiles/base/SOURCE.md (CC0).
"""

from __future__ import annotations

import gzip
from collections.abc import Iterable, Mapping, Sequence
from itertools import chain
from typing import Any

import orjson

from fhirgallop.conformance.editions.edition import VERSIONS
from fhirgallop.conformance.editions.extensions import extension_rows
from fhirgallop.conformance.editions.package import Package
from fhirgallop.conformance.editions.profile_rows import profile_rows
from fhirgallop.conformance.editions.structures import SD, TypeTable
from fhirgallop.conformance.editions.valuesets import Expander

TYPE_PROFILES = ("SimpleQuantity", "MoneyQuantity")


def compile_edition(name: str, packages: Sequence[Package]) -> bytes:
    """The compiled file of an edition: gzip of JSON with sorted keys and no time stamp.

    Args:
        name: "R4", "R4B" or "R5".
        packages: the edition's own package first; those behind it fill what it lacks.
    """
    core = packages[0]
    value_sets: dict[str, Mapping[str, Any]] = {}
    code_systems: dict[str, Mapping[str, Any]] = {}
    for package in packages:
        for url, definition in package.value_sets.items():
            value_sets.setdefault(url, definition)
        for url, definition in package.code_systems.items():
            known = code_systems.get(url)
            if known is None or (
                known.get("content") != "complete" and definition.get("content") == "complete"
            ):
                code_systems[url] = definition
    types = TypeTable(name, core.structures)
    for profile in TYPE_PROFILES:
        types.add_type_profile(core.structures[SD + profile])
    extensions = extension_rows(core.structures)
    profiles = profile_rows(core.structures, types.rows)
    expander = Expander(value_sets, code_systems)
    rows, systems = _sets(expander, sorted(set(_bound(types.rows, extensions, profiles))))
    table = {
        "edition": name,
        "fhirVersion": VERSIONS[name],
        "types": types.rows,
        "invariants": types.invariants.rows,
        "valueSets": rows,
        "codeSystems": systems,
        "extensions": extensions,
        "profiles": profiles,
    }
    text = orjson.dumps(table, option=orjson.OPT_SORT_KEYS)
    return gzip.compress(text, compresslevel=9, mtime=0)


def _bound(
    types: Mapping[str, Any], extensions: Mapping[str, Any], profiles: Mapping[str, Any]
) -> Iterable[str]:
    """Canonicals of all value sets that some binding asks for."""
    bindings: Iterable[Sequence[str]] = chain(
        (e["b"] for row in types.values() for e in row.get("e", ()) if "b" in e),
        (row["b"] for row in extensions.values() if "b" in row),
    )
    for strength, url, *maximum in bindings:
        if strength in ("required", "extensible"):
            yield url
        yield from maximum
    for profile in profiles.values():
        for element in profile["snapshot"]["element"]:
            binding = element.get("binding", {})
            if binding.get("strength") in ("required", "extensible") and "valueSet" in binding:
                yield binding["valueSet"].partition("|")[0]


def _sets(expander: Expander, urls: Iterable[str]) -> tuple[dict[str, Any], dict[str, Any]]:
    """Value set rows, and the code systems which they take whole (written once)."""
    rows: dict[str, Any] = {}
    whole: dict[str, list[str]] = {}
    for url in urls:
        codes = expander.expand(url)
        if codes is None or not (codes.listed or codes.unlisted):
            continue
        row: dict[str, Any] = {}
        if codes.listed:
            row["s"] = {s: None if s in codes.whole else sorted(found) for s, found in codes.listed.items()}
        if codes.unlisted:
            row["o"] = sorted(codes.unlisted)
        rows[url] = row
        for system in codes.whole:
            whole[system] = sorted(expander.codes_of(system) or ())
    return rows, whole
