"""The codes that are known here: our own systems whole, of others the identifiers that the catalogue uses.

That a code of another system is not known here says nothing of it: it is told so, never called wrong.
Source: FHIR R4 terminology-service.html; snomedct.html (a SNOMED CT version is the URI of an edition).
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from functools import cache
from typing import Any, Final

from fhirgallop.codes import systems
from fhirgallop.conformance.registry import registry
from fhirgallop.exam import catalogue
from fhirgallop.observations.editions import Edition
from fhirgallop.service.fhir.published import shipped

# The edition that the identifiers belong to; which release is not known here. From memory: the identifier
# of the module of the International Edition.
SNOMED_EDITION: Final = "http://snomed.info/sct/900000000000207008"
_NAMES: Final = {systems.SNOMED: "SNOMED CT", systems.LOINC: "LOINC", systems.HPO: "Human Phenotype Ontology"}


@dataclass(frozen=True, slots=True)
class Code:
    """One code.

    Attributes:
        display: its words; empty where they are not known here.
        own_words: True where these are the only right ones.
    """

    display: str
    own_words: bool


@dataclass(frozen=True, slots=True)
class System:
    """One code system, as far as it is known here.

    Attributes:
        name: for people.
        version: of the codes; empty where it is not known.
        complete: whether every code of the system is here.
        codes: by code.
    """

    name: str
    version: str
    complete: bool
    codes: Mapping[str, Code]


@cache
def system(edition: Edition, url: str) -> System | None:
    """A code system; None where nothing of it is known here."""
    for artefact in shipped(edition)["CodeSystem"].values():
        if artefact.resource["url"] == url:
            codes = {c["code"]: Code(c["display"], own_words=True) for c in _concepts(artefact.resource)}
            return System(artefact.resource["title"], artefact.resource["version"], True, codes)
    used = _used().get(url)
    if used is not None:
        version = SNOMED_EDITION if url == systems.SNOMED else ""
        return System(_NAMES.get(url, url), version, False, used)
    return None


@dataclass(frozen=True, slots=True)
class Members:
    """The codes of a value set.

    Attributes:
        title: for people; empty where the set has none here.
        version: of the set; empty where it is not known.
        codes: (system, code) -> words, in the set's order; the words may be empty.
        open_systems: systems that belong to it whole and cannot be listed here.
    """

    title: str
    version: str
    codes: Mapping[tuple[str, str], str]
    open_systems: frozenset[str]


def members(edition: Edition, url: str) -> Members | None:
    """What is in a value set, ours or one of the base definitions; None where it is not known here."""
    for artefact in shipped(edition)["ValueSet"].values():
        if artefact.resource["url"] == url:
            return _own(edition, artefact.resource)
    known = registry(edition).value_set(url)
    if known is None:
        return None
    codes = {(s, code): "" for s, listed in sorted(known.systems.items()) for code in sorted(listed)}
    return Members("", "", codes, frozenset(known.open_systems))


def _own(edition: Edition, resource: Mapping[str, Any]) -> Members:
    codes: dict[tuple[str, str], str] = {}
    for include in resource["compose"]["include"]:
        known = system(edition, include["system"])
        for concept in include["concept"]:
            words = known.codes[concept["code"]].display if known else ""
            codes[include["system"], concept["code"]] = words
    return Members(resource["title"], resource["version"], codes, frozenset())


def _concepts(resource: Mapping[str, Any]) -> Iterator[Mapping[str, Any]]:
    yield from resource["concept"]


@cache
def _used() -> Mapping[str, Mapping[str, Code]]:
    """System -> the codes of it that the catalogue uses, with the words they were seen with."""
    known = catalogue.load()
    codings = [coding for finding in known.findings.values() for coding in finding.codings]
    for axis in known.axes.values():
        codings += axis.codings
        for value in axis.values.values():
            codings += value.codings
    found: dict[str, dict[str, Code]] = {}
    for coding in codings:
        if coding.confidence != "own":
            found.setdefault(coding.system, {}).setdefault(coding.code, Code(coding.display, own_words=False))
    return found
