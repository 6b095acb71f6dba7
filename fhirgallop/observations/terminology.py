"""The catalogue as FHIR terminology: our code systems, value sets, and maps to SNOMED CT, LOINC and HPO.

`python -m fhirgallop.observations.terminology` writes the files in terminology/codesystem and
terminology/valuesets anew; a test holds them against the catalogue.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from pathlib import Path
from typing import Any, Final

from fhirgallop import assets
from fhirgallop.codes import fhirjson, systems
from fhirgallop.codes.coding import Coding
from fhirgallop.exam.catalogue import Catalogue, load
from fhirgallop.exam.entry import Grade
from fhirgallop.observations.editions import Edition
from fhirgallop.observations.fragments import grade_code
from fhirgallop.version import VERSION

GRADE_DENOMINATORS: Final = (4, 6)
_DATE: Final = "2026-12-01"
_LICENCE: Final = "Apache-2.0"
_FOREIGN_LICENCE: Final = (
    "Contains identifiers of SNOMED CT (SNOMED International), LOINC (Regenstrief Institute) and HPO; "
    "see NOTICE.md."
)


def code_systems(catalogue: Catalogue) -> dict[str, dict[str, Any]]:
    """File name -> CodeSystem: the findings, and the qualifiers with their values and grades."""
    findings = [{"code": f.id, "display": f.label} for f in catalogue.findings.values()]
    qualifiers: list[dict[str, str]] = []
    for axis in catalogue.axes.values():
        qualifiers.append({"code": axis.id, "display": axis.label})
        qualifiers += [{"code": f"{axis.id}:{v.id}", "display": v.label} for v in axis.values.values()]
    qualifiers += [{"code": grade_code("grade", g), "display": f"Grade {g}"} for g in grades()]
    return {
        "findings.json": _code_system("findings", systems.FINDINGS, "Bedside cardiac findings", findings),
        "qualifiers.json": _code_system(
            "qualifiers", systems.QUALIFIERS, "Qualifiers and answers of bedside cardiac findings", qualifiers
        ),
    }


def value_sets(catalogue: Catalogue) -> dict[str, dict[str, Any]]:
    """File name -> ValueSet: the findings by section, and the values of each axis."""
    found: dict[str, dict[str, Any]] = {}
    sections = dict.fromkeys(f.section for f in catalogue.findings.values())
    for section in sections:
        codes = [f.id for f in catalogue.findings.values() if f.section == section]
        name = f"findings-{section}"
        found[f"{name}.json"] = _value_set(name, f"Findings: {section}", systems.FINDINGS, codes)
    for axis in catalogue.axes.values():
        if axis.values:
            name = f"axis-{axis.id.replace('.', '-')}"
            codes = [f"{axis.id}:{value}" for value in axis.values]
            found[f"{name}.json"] = _value_set(name, f"Values: {axis.label}", systems.QUALIFIERS, codes)
    return found


def concept_map(catalogue: Catalogue, edition: Edition) -> dict[str, Any]:
    """ConceptMap from our findings to the standard code systems; R5 renamed the kinds of relation."""
    groups: dict[tuple[str, str], list[dict[str, Any]]] = {}
    for finding in catalogue.findings.values():
        _add_targets(groups, systems.FINDINGS, finding.id, finding.label, finding.codings, edition)
    for axis in catalogue.axes.values():
        _add_targets(groups, systems.QUALIFIERS, axis.id, axis.label, axis.codings, edition)
        for value in axis.values.values():
            code = f"{axis.id}:{value.id}"
            _add_targets(groups, systems.QUALIFIERS, code, value.label, value.codings, edition)
    head = _head("ConceptMap", "findings-to-standard-codes", "Findings to standard codes")
    head["copyright"] = _FOREIGN_LICENCE
    head["group"] = [
        {"source": source, "target": target, "element": elements}
        for (source, target), elements in sorted(groups.items())
    ]
    return head


def grades() -> Iterable[Grade]:
    """Every murmur grade and range of grades there can be."""
    for of in GRADE_DENOMINATORS:
        for low in range(1, of + 1):
            for high in range(low, of + 1):
                yield Grade(low, high, of)


def _add_targets(
    groups: dict[tuple[str, str], list[dict[str, Any]]],
    source: str,
    code: str,
    label: str,
    codings: Iterable[Coding],
    edition: Edition,
) -> None:
    for coding in codings:
        if coding.confidence == "own":
            continue
        target: dict[str, Any] = {
            "code": coding.code,
            "display": coding.display,
            **_relation(coding, edition),
        }
        element = {"code": code, "display": label, "target": [target]}
        groups.setdefault((source, coding.system), []).append(element)


def _relation(coding: Coding, edition: Edition) -> Mapping[str, str]:
    exact = coding.fit == "exact"
    comment = {"comment": f"Seen with {coding.confidence} confidence; confirm in your own release."}
    if edition == "R5":
        return {"relationship": "equivalent" if exact else "source-is-narrower-than-target", **comment}
    return {"equivalence": "equivalent" if exact else "wider", **comment}


def _head(resource_type: str, id_: str, title: str) -> dict[str, Any]:
    return {
        "resourceType": resource_type,
        "id": id_,
        "url": f"{systems.BASE}/{resource_type}/{id_}",
        "version": VERSION,
        "name": "".join(part.capitalize() for part in id_.split("-")),
        "title": title,
        "status": "active",
        "experimental": False,
        "date": _DATE,
        "publisher": "fhirgallop",
    }


def _code_system(id_: str, url: str, title: str, concepts: list[dict[str, str]]) -> dict[str, Any]:
    return {
        **_head("CodeSystem", id_, title),
        "url": url,
        "copyright": _LICENCE,
        "caseSensitive": True,
        "content": "complete",
        "count": len(concepts),
        "concept": concepts,
    }


def _value_set(id_: str, title: str, system: str, codes: list[str]) -> dict[str, Any]:
    include = {"system": system, "concept": [{"code": code} for code in codes]}
    return {**_head("ValueSet", id_, title), "copyright": _LICENCE, "compose": {"include": [include]}}


def files(catalogue: Catalogue) -> dict[str, bytes]:
    """Path below terminology/ -> content, of every published file."""
    made = {f"codesystem/{name}": resource for name, resource in code_systems(catalogue).items()}
    made |= {f"valuesets/{name}": resource for name, resource in value_sets(catalogue).items()}
    made["codesystem/findings-to-standard-codes.r4.json"] = concept_map(catalogue, "R4")
    made["codesystem/findings-to-standard-codes.r5.json"] = concept_map(catalogue, "R5")
    return {path: fhirjson.pretty(resource) + b"\n" for path, resource in made.items()}


def publish(folder: Path) -> list[str]:
    """Writes every file below `folder`; returns their paths."""
    made = files(load())
    for path, content in made.items():
        target = folder / path
        target.parent.mkdir(parents=True, exist_ok=True)
        target.write_bytes(content)
    return sorted(made)


if __name__ == "__main__":
    publish(assets.path("terminology"))
