"""No code without a seen source: every code of the catalogue, against form, check digit and evidence."""

from __future__ import annotations

import re
from collections.abc import Callable, Iterator

from fhirgallop.codes.checkdigits import loinc_ok, verhoeff_ok

Rows = list[dict[str, str]]

# Vital signs whose numbers the core profile fixes; displays as in HL7's published R4 examples (4.0.1).
CORE_VITALS = {
    "9279-1": "Respiratory rate",
    "2708-6": "Oxygen saturation in Arterial blood",
    "8310-5": "Body temperature",
    "39156-5": "Body mass index (BMI) [Ratio]",
}

# Seen without their name, superseded, disproved, swapped, of one country's extension, procedures, or
# situations that already say "absent".
FORBIDDEN = {
    "301132007",
    "2170000",
    "7036007",
    "46909005",
    "36680007",
    "15157000",
    "25311008",
    "37531003",
    "62967000",
    "22447003",
    "62436006",
    "369001",
    "248651005",
    "248652003",
    "62640008",
    "49864004",
    "248666008",
    "12929001",
    "449161000124101",
    "67741000119109",
    "373112006",
    "700428007",
    "60721002",
    "272519000",
    "395650008",
    "67683007",
    "29320008",
    "164873001",
    "8479-8",
    "80232-2",
    "33762-6",
    "8625-3",
    "8633-7",
    "10223-2",
    "LA9633-4",
    "jvp",
}


def _coded(rows: Rows, system: str) -> Iterator[tuple[str, dict[str, str]]]:
    for row in rows:
        if row.get(system):
            yield row.get("id") or f"{row['axis']}:{row['value']}", row


def test_every_code_has_display_mark_and_source(findings: Rows, qualifiers: Rows) -> None:
    for table in (findings, qualifiers):
        for row in table:
            where = row.get("id") or f"{row['axis']}:{row['value']}"
            for system, named in (("snomed", "SNOMED: "), ("loinc", "LOINC: ")):
                filled = {bool(row[system + part]) for part in ("", "_display", "_confidence")}
                assert len(filled) == 1, (where, system)
                assert not row[system] or row[system + "_confidence"] in {"high", "medium"}, where
                assert bool(row[system]) == (named in row["source"]), where
            assert bool(row["snomed"]) == (row["snomed_fit"] in {"exact", "broader"}), where
            assert bool(row["hpo"]) == bool(row["hpo_display"]) == ("HPO: " in row["source"]), where
            if "dicom" in row:
                assert bool(row["dicom"]) == bool(row["dicom_display"]) == ("DICOM: " in row["source"]), where


def test_check_digits_and_forms(findings: Rows, qualifiers: Rows) -> None:
    both = findings + qualifiers
    codes = {row["snomed"] for _, row in _coded(both, "snomed")}
    assert len(codes) > 150
    assert [code for code in codes if not verhoeff_ok(code)] == []
    # Partition 00: a concept of the International Edition, not a description, relationship or extension.
    assert [code for code in codes if code[-3:-1] != "00"] == []
    numbers = {row["loinc"] for _, row in _coded(both, "loinc")}
    assert len(numbers) > 40
    assert [number for number in numbers if not loinc_ok(number)] == []
    assert [r["hpo"] for _, r in _coded(both, "hpo") if not re.fullmatch(r"HP:\d{7}", r["hpo"])] == []
    assert [r["dicom"] for _, r in _coded(both, "dicom") if not re.fullmatch(r"\d{6}", r["dicom"])] == []


def test_no_forbidden_code_is_shipped(findings: Rows, qualifiers: Rows) -> None:
    shipped = {row.get(s, "") for row in findings + qualifiers for s in ("snomed", "loinc", "hpo", "dicom")}
    assert shipped & FORBIDDEN == set()


def test_an_exact_code_names_one_thing(findings: Rows) -> None:
    """An exact SNOMED CT code on two findings would merge them at the receiver."""
    exact: dict[str, list[str]] = {}
    for finding, row in _coded(findings, "snomed"):
        if row["snomed_fit"] == "exact":
            exact.setdefault(row["snomed"], []).append(finding)
    by_echo_and_catheter = {"276772001", "276755008"}  # the same pressure, measured in two ways
    shared = {code: ids for code, ids in exact.items() if len(ids) > 1}
    assert set(shared) == by_echo_and_catheter, shared


def test_every_snomed_loinc_and_dicom_code_was_seen(
    findings: Rows, qualifiers: Rows, evidence: Callable[[str], Rows]
) -> None:
    seen = {(row["system"], row["code"]): row for row in evidence("codes.tsv")}
    both = findings + qualifiers
    for column, system in (("snomed", "sct"), ("loinc", "loinc"), ("dicom", "dcm")):
        for where, row in _coded(both, column):
            if row[column] in CORE_VITALS:
                assert row["loinc_display"] == CORE_VITALS[row[column]], where
                continue
            proof = seen[system, row[column]]
            assert row[column + "_display"] == proof["display"], where
            assert row.get(column + "_confidence", "high") == proof["confidence"], where
            told = " ".join(proof.values())
            assert "FSN not seen" not in told, where
            assert "source label)" not in told, where


def test_findings_are_coded_with_findings_or_observables(
    findings: Rows, evidence: Callable[[str], Rows]
) -> None:
    """Never a procedure, a device, a body structure or a situation as what was observed."""
    tags = {row["code"]: row["semantic_tag"] for row in evidence("codes.tsv") if row["system"] == "sct"}
    for finding, row in _coded(findings, "snomed"):
        assert tags[row["snomed"]].startswith(("finding", "disorder", "observable entity")), finding


def test_every_hpo_term_was_seen(findings: Rows, qualifiers: Rows, evidence: Callable[[str], Rows]) -> None:
    told = "\n".join(row["sources"] for row in evidence("codes.tsv"))
    told += "\n" + "\n".join(row["hpo_id_if_any"] for row in evidence("codes_missing.tsv"))
    for where, row in _coded(findings + qualifiers, "hpo"):
        assert f"{row['hpo']} {row['hpo_display']}" in told, where
