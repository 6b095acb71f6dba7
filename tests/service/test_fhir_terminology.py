"""$translate, $expand, $validate-code and $lookup, by the numbered requirements TX-1 to TX-12."""

from __future__ import annotations

from typing import Any

import pytest
from starlette.testclient import TestClient

from fhirgallop.conformance.validator import validate
from fhirgallop.exam import catalogue
from fhirgallop.observations.terminology import concept_map as catalogue_map
from fhirgallop.outcome import has_errors
from fhirgallop.service.fhir.translate import MATCHLESS, Match, told, translate

FHIR = {"Content-Type": "application/fhir+json"}
FINDINGS = "https://fhirgallop.org/fhir/CodeSystem/findings"
QUALIFIERS = "https://fhirgallop.org/fhir/CodeSystem/qualifiers"
FORM = "https://fernwood.example/heart-form"
FORM_MAP = "https://fhirgallop.org/fhir/ConceptMap/fernwood-heart-form"
FIELD = "https://fhirgallop.org/fhir/template-map/field"
SNOMED, LOINC = "http://snomed.info/sct", "http://loinc.org"
POSTURE = "https://fhirgallop.org/fhir/ValueSet/axis-posture"
STATUS = "http://hl7.org/fhir/ValueSet/observation-status"


def values(answer: Any, edition: str = "R4") -> dict[str, Any]:
    """Name -> value of the parameters that stand once; `match` -> list of such mappings."""
    assert answer.status_code == 200, answer.text
    assert not has_errors(validate(answer.content, edition))
    return _of(answer.json()["parameter"])


def _of(parts: list[dict[str, Any]]) -> dict[str, Any]:
    found: dict[str, Any] = {}
    for part in parts:
        value = next((v for k, v in part.items() if k != "name"), None)
        if "part" in part:
            found.setdefault(part["name"], []).append(_of(part["part"]))
        else:
            found[part["name"]] = value
    return found


def call(client: TestClient, address: str, *parameters: dict[str, Any]) -> Any:
    body = {"resourceType": "Parameters", "parameter": list(parameters)}
    return client.post(address, json=body, headers=FHIR)


def depends(field: str, edition: str = "r4") -> dict[str, Any]:
    if edition == "r5":
        parts = [{"name": "attribute", "valueUri": "field"}, {"name": "value", "valueString": field}]
    else:
        concept = {"coding": [{"code": field}]}
        parts = [{"name": "element", "valueUri": FIELD}, {"name": "concept", "valueCodeableConcept": concept}]
    return {"name": "dependency", "part": parts}


def test_three_ways_to_send_a_code(still: TestClient) -> None:
    coding = {"system": FINDINGS, "code": "heart-sound.s4"}
    address = "/fhir/r4/ConceptMap/$translate"
    by_code = still.get(address, params={"code": "heart-sound.s4", "system": FINDINGS})
    by_coding = call(still, address, {"name": "coding", "valueCoding": coding})
    by_concept = call(
        still, address, {"name": "codeableConcept", "valueCodeableConcept": {"coding": [coding]}}
    )
    assert values(by_code) == values(by_coding) == values(by_concept)
    found = values(by_code)
    assert found["result"] is True
    codes = {(match["concept"]["system"], match["concept"]["code"]) for match in found["match"]}
    assert (SNOMED, "4592006") in codes
    assert {match["source"].partition("|")[0] for match in found["match"]} == {
        "https://fhirgallop.org/fhir/ConceptMap/findings-to-standard-codes"
    }
    narrowed = still.get(
        address, params={"code": "heart-sound.s4", "system": FINDINGS, "targetsystem": SNOMED}
    )
    assert [match["concept"]["code"] for match in values(narrowed)["match"]] == ["4592006"]


def test_the_fifth_edition_has_names_of_its_own(still: TestClient) -> None:
    coding = {"name": "sourceCoding", "valueCoding": {"system": FINDINGS, "code": "heart-sound.s4"}}
    found = values(call(still, "/fhir/r5/ConceptMap/$translate", coding), "R5")
    assert found["result"] is True
    assert all(set(match) == {"relationship", "concept", "originMap"} for match in found["match"])
    assert call(still, "/fhir/r5/ConceptMap/$translate", {**coding, "name": "coding"}).status_code == 400
    assert call(still, "/fhir/r4/ConceptMap/$translate", coding).status_code == 400


@pytest.mark.parametrize("edition", ["r4", "r4b", "r5"])
def test_a_local_wording_hangs_on_its_field(still: TestClient, edition: str) -> None:
    name = "sourceCoding" if edition == "r5" else "coding"
    coding = {"name": name, "valueCoding": {"system": FORM, "code": "left"}}
    address = f"/fhir/{edition}/ConceptMap/$translate"
    url = {"name": "url", "valueUri": FORM_MAP}
    alone = values(call(still, address, url, coding), edition.upper())
    assert alone["result"] is False
    said = alone["message"]
    cure = "(element and concept): https://fhirgallop.org/fhir/template-map/field."
    assert said.endswith("(attribute and value): field." if edition == "r5" else cure)
    assert "match" not in alone
    other = values(call(still, address, url, coding, depends("heart.s1", edition)), edition.upper())
    assert other["result"] is False
    met = values(call(still, address, url, coding, depends("heart.s4", edition)), edition.upper())
    assert met["result"] is True
    (match,) = met["match"]
    assert match["concept"] == {"system": QUALIFIERS, "code": "presence:present"}
    # every dependency and every product is given out
    said = match["dependsOn"][0]
    assert said.get("value", said.get("concept")) in ("heart.s4", {"code": "heart.s4"})
    product = match["product"][0]
    assert product.get("value", (product.get("concept") or {}).get("code")) in (
        "chamber:left", {"system": QUALIFIERS, "code": "chamber:left"},
    )  # fmt: skip


def test_no_match_is_given_out_and_is_no_result(still: TestClient) -> None:
    coding = {"name": "coding", "valueCoding": {"system": FORM, "code": "nothing"}}
    found = values(call(still, "/fhir/r4/ConceptMap/$translate", coding, depends("general.signs")))
    assert found["result"] is False
    assert [match["equivalence"] for match in found["match"]] == ["unmatched"]
    unknown = values(still.get("/fhir/r4/ConceptMap/$translate", params={"code": "x", "system": FORM}))
    assert unknown == {"result": False, "message": "No match is known here."}


# R4 names what the target is to the source, R5 what the source is to the target (TX-3).
OPPOSITES = {"equivalent": "equivalent", "wider": "source-is-narrower-than-target"}


def test_both_editions_say_the_same_in_their_words() -> None:
    fourth, fifth = (catalogue_map(catalogue.load(), edition) for edition in ("R4", "R5"))
    pairs = set()
    for old, new in zip(fourth["group"], fifth["group"], strict=True):
        for a, b in zip(old["element"], new["element"], strict=True):
            pairs.add((a["target"][0]["equivalence"], b["target"][0]["relationship"]))
    assert pairs == set(OPPOSITES.items())


def _map(unmapped: dict[str, Any] | None, *elements: dict[str, Any]) -> dict[str, Any]:
    group: dict[str, Any] = {"source": "urn:s", "target": "urn:t", "element": list(elements)}
    if unmapped:
        group["unmapped"] = unmapped
    return {"url": "urn:map", "group": [group]}


@pytest.mark.parametrize(
    ("code", "unmapped", "expected"),
    [
        ("b", {"mode": "provided"}, [("b", True)]),
        ("b", {"mode": "use-source-code"}, [("b", True)]),
        ("b", {"mode": "fixed", "code": "z"}, [("z", True)]),
        ("b", None, []),
        # the code is in the map as unmatched: the rule for what is not in it does not apply
        ("a", {"mode": "fixed", "code": "z"}, [(None, False)]),
    ],
)
def test_unmapped(code: str, unmapped: Any, expected: list[tuple[str | None, bool]]) -> None:
    concept_map = _map(unmapped, {"code": "a", "target": [{"equivalence": "unmatched"}]})
    matches, _ = translate([concept_map], [{"system": "urn:s", "code": code}], {})
    assert [(m.target.get("code"), m.relation not in MATCHLESS) for m in matches] == expected
    (result, *_) = told(matches, "R4", left_out=())
    assert result == ("result", "boolean", any(usable for _, usable in expected))


def test_every_dependency_has_to_be_met() -> None:
    both = [{"property": "urn:p", "value": "1"}, {"property": "urn:q", "value": "2"}]
    target = {"code": "x", "equivalence": "equal", "dependsOn": both}
    concept_map = _map(None, {"code": "a", "target": [target]})

    def ask(*met: tuple[str, str]) -> list[Match]:
        given = [
            [
                {"name": "element", "valueUri": name},
                {"name": "concept", "valueCodeableConcept": {"text": value}},
            ]
            for name, value in met
        ]
        return translate([concept_map], [{"system": "urn:s", "code": "a"}], {"dependency": given})[0]

    assert ask(("urn:p", "1")) == []
    assert ask(("urn:p", "1"), ("urn:q", "3")) == []
    assert len(ask(("urn:p", "1"), ("urn:q", "2"))) == 1


@pytest.mark.parametrize(
    ("query", "status"),
    [
        ({"code": "x"}, 400),
        ({}, 400),
        ({"code": "x", "system": FORM, "reverse": "true"}, 422),
        ({"code": "x", "system": FORM, "reverse": "maybe"}, 400),
        ({"code": "x", "system": FORM, "url": "https://a.example/none"}, 404),
        ({"code": "x", "system": FORM, "url": FORM_MAP, "conceptMapVersion": "0"}, 404),
        ({"code": "x", "system": FORM, "nonsense": "1"}, 400),
        ({"coding": "x"}, 400),
    ],
)
def test_translations_that_cannot_be_run(still: TestClient, query: dict[str, str], status: int) -> None:
    answer = still.get("/fhir/r4/ConceptMap/$translate", params=query)
    assert answer.status_code == status
    assert answer.json()["resourceType"] == "OperationOutcome"


def test_a_reverse_is_never_inferred(still: TestClient) -> None:
    found = values(still.get("/fhir/r4/ConceptMap/$translate", params={"code": "4592006", "system": SNOMED}))
    assert found["result"] is False


def test_on_one_map(still: TestClient) -> None:
    (entry,) = still.get("/fhir/r4/ConceptMap", params={"url": FORM_MAP}).json()["entry"]
    query = {"code": "vitals.hr", "system": FORM}
    found = values(still.get(f"{entry['fullUrl']}/$translate", params=query))
    assert [match["concept"]["code"] for match in found["match"]] == ["vital.heart-rate"]
    assert still.get("/fhir/r4/ConceptMap/nobody/$translate", params=query).status_code == 404


def test_expand(still: TestClient) -> None:
    whole = still.get("/fhir/r4/ValueSet/$expand", params={"url": POSTURE}).json()
    expansion = whole["expansion"]
    assert expansion["total"] == len(expansion["contains"]) > 5
    assert all(one["display"] for one in expansion["contains"])
    assert expansion["identifier"].startswith("urn:uuid:")
    assert expansion["timestamp"]
    assert {"name": "url", "valueUri": POSTURE} in expansion["parameter"]
    assert not has_errors(validate(whole))
    by_id = still.get("/fhir/r4/ValueSet/axis-posture/$expand").json()
    assert by_id["expansion"]["contains"] == expansion["contains"]
    paged = [
        still.get("/fhir/r4/ValueSet/$expand", params={"url": POSTURE, "count": 4, "offset": start}).json()
        for start in range(0, expansion["total"], 4)
    ]
    assert [one for page in paged for one in page["expansion"]["contains"]] == expansion["contains"]
    assert [page["expansion"]["offset"] for page in paged] == list(range(0, expansion["total"], 4))
    words = still.get("/fhir/r4/ValueSet/$expand", params={"url": POSTURE, "filter": "DECUB left"}).json()
    assert [one["code"] for one in words["expansion"]["contains"]] == ["posture:left-lateral"]
    none = still.get("/fhir/r4/ValueSet/$expand", params={"url": POSTURE, "filter": "zzz"}).json()
    assert (none["expansion"]["total"], "contains" in none["expansion"]) == (0, False)


def test_expand_of_the_base_definitions(still: TestClient) -> None:
    found = still.get("/fhir/r4/ValueSet/$expand", params={"url": STATUS}).json()["expansion"]
    # Source: FHIR R4 value set observation-status
    assert {one["code"] for one in found["contains"]} == {
        "registered", "preliminary", "final", "amended", "corrected", "cancelled", "entered-in-error",
        "unknown",
    }  # fmt: skip


@pytest.mark.parametrize(
    ("query", "status", "code"),
    [
        ({"url": "http://hl7.org/fhir/ValueSet/mimetypes"}, 422, "too-costly"),
        ({"url": "https://a.example/none"}, 404, "not-found"),
        ({}, 400, "required"),
        ({"url": POSTURE, "count": "-1"}, 400, "value"),
        ({"url": f"{POSTURE}|99"}, 404, "not-found"),
    ],
)
def test_expansions_that_cannot_be_made(
    still: TestClient, query: dict[str, str], status: int, code: str
) -> None:
    answer = still.get("/fhir/r4/ValueSet/$expand", params=query)
    assert (answer.status_code, answer.json()["issue"][0]["code"]) == (status, code)


SUPINE = {"system": QUALIFIERS, "code": "posture:supine"}


@pytest.mark.parametrize(
    ("query", "result", "display"),
    [
        ({**SUPINE}, True, "Supine"),
        ({**SUPINE, "display": "supine"}, True, "Supine"),
        ({**SUPINE, "display": "Standing"}, False, "Supine"),
        ({"code": "posture:supine"}, True, "Supine"),
        ({"system": QUALIFIERS, "code": "site:apex"}, False, None),
        ({"system": SNOMED, "code": "posture:supine"}, False, None),
    ],
)
def test_code_of_a_value_set(
    still: TestClient, query: dict[str, str], result: bool, display: str | None
) -> None:
    found = values(still.get("/fhir/r4/ValueSet/$validate-code", params={"url": POSTURE, **query}))
    assert (found["result"], found.get("display")) == (result, display)
    assert ("message" in found) is not result
    if not result:
        (issue,) = found["issues"]["issue"]
        assert issue["severity"] == "error"
        assert issue["expression"] == ["display" if display else "code"]


def test_code_of_a_base_value_set(still: TestClient) -> None:
    address = "/fhir/r4/ValueSet/$validate-code"
    system = "http://hl7.org/fhir/observation-status"
    assert (
        values(still.get(address, params={"url": STATUS, "system": system, "code": "final"}))["result"]
        is True
    )
    assert (
        values(still.get(address, params={"url": STATUS, "system": system, "code": "done"}))["result"]
        is False
    )
    open_ = {"url": "http://hl7.org/fhir/ValueSet/mimetypes", "code": "text/plain"}
    answer = still.get(address, params=open_)
    assert answer.status_code == 422


def test_concepts_with_several_codings(still: TestClient) -> None:
    concept = {"coding": [{"system": SNOMED, "code": "999"}, {**SUPINE, "display": "wrong"}, SUPINE]}
    parameters = (
        {"name": "url", "valueUri": POSTURE},
        {"name": "codeableConcept", "valueCodeableConcept": concept},
    )
    found = values(call(still, "/fhir/r4/ValueSet/$validate-code", *parameters))
    assert found["result"] is True
    # each issue says which coding it is about
    places = [issue["expression"] for issue in found["issues"]["issue"]]
    assert sorted(places) == [["CodeableConcept.coding[0].code"], ["CodeableConcept.coding[1].display"]]


@pytest.mark.parametrize(
    ("query", "status", "result"),
    [
        ({"url": FINDINGS, "code": "heart-sound.s4"}, 200, True),
        ({"url": FINDINGS, "code": "nonsense"}, 200, False),
        ({"url": FINDINGS, "code": "heart-sound.s4", "display": "Third heart sound"}, 200, False),
        ({"url": SNOMED, "code": "364075005"}, 200, True),
        ({"url": SNOMED, "code": "364075005", "display": "Pulse rate, perhaps"}, 200, True),
        ({"url": LOINC, "code": "8867-4"}, 200, True),
        # not among those known here: nothing is said of it, and it is not called wrong
        ({"url": SNOMED, "code": "22298006"}, 422, None),
        ({"url": "https://a.example/codes", "code": "x"}, 422, None),
        ({"code": "x"}, 400, None),
    ],
)
def test_code_of_a_code_system(
    still: TestClient, query: dict[str, str], status: int, result: bool | None
) -> None:
    answer = still.get("/fhir/r4/CodeSystem/$validate-code", params=query)
    assert answer.status_code == status
    if result is None:
        assert answer.json()["resourceType"] == "OperationOutcome"
    else:
        assert values(answer)["result"] is result


def test_a_display_of_another_system_is_not_judged(still: TestClient) -> None:
    query = {"url": SNOMED, "code": "364075005", "display": "Another term"}
    found = values(still.get("/fhir/r4/CodeSystem/$validate-code", params=query))
    assert found["display"] == "Heart rate"
    assert found["issues"]["issue"][0]["severity"] == "warning"


@pytest.mark.parametrize("edition", ["r4", "r4b", "r5"])
def test_lookup(still: TestClient, edition: str) -> None:
    address = f"/fhir/{edition}/CodeSystem/$lookup"
    found = values(still.get(address, params={"system": SNOMED, "code": "364075005"}), edition.upper())
    assert found["name"] == "SNOMED CT"
    assert found["display"] == "Heart rate"
    # TX-12: for SNOMED CT the version is the URI of an edition
    assert found["version"].startswith("http://snomed.info/sct/")
    own = values(
        call(still, address, {"name": "coding", "valueCoding": {"system": FINDINGS, "code": "murmur"}})
    )
    assert own["display"] == catalogue.load().findings["murmur"].label
    assert still.get(address, params={"system": SNOMED, "code": "1"}).status_code == 404
    assert still.get(address, params={"system": "https://a.example", "code": "1"}).status_code == 404
    assert still.get(address, params={"code": "1"}).status_code == 400


def _one(parameters: bytes) -> bytes:
    return b'{"resourceType": "Parameters", "parameter": [%b]}' % parameters


@pytest.mark.parametrize(
    "body",
    [
        b"{}", b"[]", b"{", b'{"resourceType": "Patient"}',
        b'{"resourceType": "Parameters", "parameter": {"name": "code"}}',
        b'{"resourceType": "Parameters", "parameter": [1]}',
        _one(b'{"name": "code"}'),
        _one(b'{"name": "code", "valueCode": 7}'),
        _one(b'{"name": "coding", "valueCoding": "x"}'),
        _one(b'{"name": "coding", "valueCoding": {"code": 7}}'),
        _one(b'{"name": "codeableConcept", "valueCodeableConcept": {}}'),
        _one(b'{"name": "codeableConcept", "valueCodeableConcept": {"coding": [7]}}'),
        _one(b'{"name": "code", "valueCode": "a"}, {"name": "code", "valueCode": "b"}'),
    ],
)  # fmt: skip
def test_parameters_that_cannot_be_read(still: TestClient, body: bytes) -> None:
    for address in ("ConceptMap/$translate", "ValueSet/$expand", "ValueSet/axis-posture/$validate-code",
                    "CodeSystem/$validate-code", "CodeSystem/$lookup"):  # fmt: skip
        answer = still.post(f"/fhir/r4/{address}", content=body, headers=FHIR)
        assert answer.status_code in (400, 422), (address, answer.text)
        assert answer.json()["resourceType"] == "OperationOutcome"
