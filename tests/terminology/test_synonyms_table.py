"""synonyms.csv, whole."""

from __future__ import annotations

from collections import Counter
from collections.abc import Callable

Rows = list[dict[str, str]]


def test_every_wording_names_something_that_exists(
    findings: Rows, qualifiers: Rows, rows: Callable[[str], Rows]
) -> None:
    synonyms = rows("synonyms.csv")
    assert list(synonyms[0]) == ["id", "wording", "kind"]
    known = {row["id"] for row in findings} | {f"{r['axis']}:{r['value']}" for r in qualifiers if r["value"]}
    for row in synonyms:
        assert row["id"] in known, row["id"]
        assert row["wording"] == row["wording"].strip() != "", row["id"]
        assert row["kind"] in {"abbreviation", "spelling", "lay"}, row["id"]


def test_there_are_enough_wordings_of_every_kind(rows: Callable[[str], Rows]) -> None:
    kinds = Counter(row["kind"] for row in rows("synonyms.csv"))
    assert sum(kinds.values()) >= 300
    assert kinds["abbreviation"] >= 100
    assert kinds["lay"] >= 30


def test_no_wording_means_two_things_in_one_place(
    findings: Rows, qualifiers: Rows, rows: Callable[[str], Rows]
) -> None:
    """Among findings, and within an axis, a wording or label leads to one id only."""
    meant: dict[tuple[str, str], set[str]] = {}
    for row in findings:
        meant.setdefault(("", row["label"].casefold()), set()).add(row["id"])
    for row in qualifiers:
        if row["value"]:
            meant.setdefault((row["axis"], row["label"].casefold()), set()).add(
                f"{row['axis']}:{row['value']}"
            )
    for row in rows("synonyms.csv"):
        axis = row["id"].partition(":")[0] if ":" in row["id"] else ""
        meant.setdefault((axis, row["wording"].casefold()), set()).add(row["id"])
    assert {key: ids for key, ids in meant.items() if len(ids) > 1} == {}


def test_a_value_named_like_another_is_not_a_wording_of_it(
    qualifiers: Rows, rows: Callable[[str], Rows]
) -> None:
    """`soft` may be a wording of one value only where no other value of that axis is called `soft`."""
    values = {(row["axis"], row["value"]) for row in qualifiers if row["value"]}
    for row in rows("synonyms.csv"):
        axis, colon, value = row["id"].partition(":")
        named = row["wording"].casefold().replace(" ", "-")
        if colon and (axis, named) in values:
            assert named == value, row


def test_clinicians_abbreviations_lead_home(rows: Callable[[str], Rows]) -> None:
    found = {(row["wording"], row["id"]) for row in rows("synonyms.csv")}
    assert found >= {
        ("S4", "heart-sound.s4"),
        ("atrial gallop", "heart-sound.s4"),
        ("S3", "heart-sound.s3"),
        ("JVP", "jvp.height"),
        ("HJR", "jvp.abdominojugular-reflux"),
        ("RV heave", "heave.right-ventricular"),
        ("MSM", "timing:mid-systolic"),
        ("PSM", "timing:holosystolic"),
        ("EDM", "timing:early-diastolic"),
        ("AV", "site:aortic"),
        ("MV", "site:mitral"),
        ("Phc", "site:other"),
        ("leg edema", "oedema.lower-limb"),
        ("short of breath", "symptom.dyspnoea"),
    }
