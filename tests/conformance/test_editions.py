"""The compiled editions, and the reading of packages that may be hostile."""

from __future__ import annotations

import gzip
import io
import json
import tarfile
from pathlib import Path
from typing import Any

import pytest

from fhirgallop import assets
from fhirgallop.conformance.editions import NAMES, VERSIONS, load
from fhirgallop.conformance.editions import package as packages
from fhirgallop.conformance.editions.__main__ import main
from fhirgallop.conformance.editions.compile import compile_edition
from fhirgallop.conformance.editions.package import read_package
from fhirgallop.conformance.registry import registry
from fhirgallop.conformance.validator import validate
from fhirgallop.errors import PackageError


@pytest.mark.parametrize("name", NAMES)
def test_every_type_opens_and_every_name_it_uses_is_known(name: str) -> None:
    edition = load(name)
    assert edition.fhir_version == VERSIONS[name]
    for type_name in edition.types:
        definition = edition.type(type_name)
        assert definition is not None
        assert not definition.base or definition.base in edition.types
        for key, child in definition.keys.items():
            assert child.type_name in edition.types, (type_name, key)
            assert child.code in edition.types, (type_name, key)


# the number of resource types that can be instantiated, by the resource lists of the three publications
@pytest.mark.parametrize(("name", "count"), [("R4", 146), ("R4B", 141), ("R5", 158)])
def test_number_of_resource_types(name: str, count: int) -> None:
    edition = load(name)
    assert len(edition.resources) == count
    assert "DomainResource" not in edition.resources


def test_the_three_editions_take_less_than_a_megabyte_and_carry_no_time_stamp() -> None:
    files = [assets.path("profiles", "base", f"{name}.json.gz") for name in NAMES]
    assert sum(file.stat().st_size for file in files) < 1_000_000
    for file in files:
        assert file.read_bytes()[4:8] == b"\0\0\0\0"
        text = gzip.decompress(file.read_bytes())
        assert (
            text
            == json.dumps(
                json.loads(text), sort_keys=True, separators=(",", ":"), ensure_ascii=False
            ).encode()
        )


@pytest.mark.parametrize("name", NAMES)
def test_the_clinical_status_codes_are_there(name: str) -> None:
    found = load(name).value_set("http://hl7.org/fhir/ValueSet/condition-clinical")
    assert found is not None
    codes = found.systems["http://terminology.hl7.org/CodeSystem/condition-clinical"]
    assert {"active", "recurrence", "relapse", "inactive", "remission", "resolved"} <= codes


@pytest.mark.parametrize(
    ("type_name", "key", "found"),
    [
        ("Observation", "component", "Observation.component"),
        ("Observation.component", "referenceRange", "Observation.referenceRange"),
        ("Observation.referenceRange", "low", "SimpleQuantity"),
        ("Observation", "valueQuantity", "Quantity"),
        ("Observation", "_valueString", "string"),
        ("Observation", "id", "id"),
        ("Element", "id", "string"),
        ("Bundle.entry", "resource", "Resource"),
        ("Observation", "valueCode", None),
        ("Observation", "_subject", None),
        ("Observation", "_id", None),
        ("Narrative", "_div", None),
    ],
)
@pytest.mark.parametrize("name", NAMES)
def test_what_stands_under_a_key(name: str, type_name: str, key: str, found: str | None) -> None:
    child = load(name).child(type_name, key)
    assert (child.type_name if child else None) == found


def test_an_unknown_edition_is_a_programmers_mistake() -> None:
    with pytest.raises(ValueError, match="R3"):
        validate({}, "R3")


PROFILE: dict[str, Any] = {
    "resourceType": "StructureDefinition",
    "url": "https://clinic.example/StructureDefinition/site",
    "type": "Observation",
    "kind": "resource",
    "derivation": "constraint",
    "baseDefinition": "http://hl7.org/fhir/StructureDefinition/Observation",
    "differential": {"element": [{"id": "Observation.method", "path": "Observation.method", "min": 1}]},
}
MANIFEST = {"name": "clinic.example", "version": "1.0.0", "fhirVersions": ["4.0.1"]}


def _pack(path: Path, files: dict[str, bytes], **attributes: Any) -> Path:
    with tarfile.open(path, "w:gz") as archive:
        for name, data in files.items():
            member = tarfile.TarInfo(name)
            member.size = len(data)
            for key, value in attributes.items():
                setattr(member, key, value)
            archive.addfile(member, io.BytesIO(data))
    return path


def _files(**more: bytes) -> dict[str, bytes]:
    return {
        "package/package.json": json.dumps(MANIFEST).encode(),
        "package/StructureDefinition-site.json": json.dumps(PROFILE).encode(),
        **{f"package/{name}": data for name, data in more.items()},
    }


def test_a_site_package_is_judged_by(tmp_path: Path, observation: dict[str, Any]) -> None:
    path = _pack(tmp_path / "site.tgz", _files())
    found = validate(observation, profiles=[PROFILE["url"]], packages=[path])
    assert [(i.rule, i.expression) for i in found] == [("cardinality-min", "Observation")]
    found = validate(observation, profiles=[PROFILE["url"]])
    assert [(i.severity, i.rule) for i in found] == [("warning", "profile-unknown")]


def test_only_files_of_the_package_folder_are_read(tmp_path: Path) -> None:
    files = _files() | {
        "package/../../evil-StructureDefinition.json": b"no JSON",
        "/etc/StructureDefinition-x.json": b"no JSON",
        "package/other/StructureDefinition-x.json": b"no JSON",
        "package/Patient-example.json": b"no JSON",
    }
    read = read_package(_pack(tmp_path / "site.tgz", files))
    assert list(read.structures) == [PROFILE["url"]]
    assert list(tmp_path.iterdir()) == [tmp_path / "site.tgz"]


@pytest.mark.parametrize(
    ("files", "reason"),
    [
        ({}, "no package/package.json"),
        ({"package/package.json": b"{"}, "not JSON"),
        ({"package/package.json": b"[]"}, "not a JSON object"),
        ({"package/package.json": b"{}"}, "no package and version"),
        (_files(**{"ValueSet-x.json": b"{"}), "ValueSet-x.json is not JSON"),
    ],
)
def test_a_broken_package_is_refused_with_file_and_reason(
    tmp_path: Path, files: dict[str, bytes], reason: str
) -> None:
    path = _pack(tmp_path / "broken.tgz", files)
    with pytest.raises(PackageError, match=rf"broken\.tgz.*{reason}"):
        registry("R4", (path,))


@pytest.mark.parametrize(
    "data", [b"", b"not a package", gzip.compress(b"not a tar"), gzip.compress(b"x" * 5000)[:40]]
)
def test_what_is_no_archive_is_refused(tmp_path: Path, data: bytes) -> None:
    path = tmp_path / "broken.tgz"
    path.write_bytes(data)
    with pytest.raises(PackageError, match=r"broken\.tgz"):
        read_package(path)
    with pytest.raises(PackageError, match=r"missing\.tgz"):
        read_package(tmp_path / "missing.tgz")


@pytest.mark.parametrize(("limit", "value"), [("MAX_FILES", 1), ("MAX_TOTAL", 100), ("MAX_FILE", 100)])
def test_limits_of_a_package(tmp_path: Path, monkeypatch: pytest.MonkeyPatch, limit: str, value: int) -> None:
    path = _pack(tmp_path / "large.tgz", _files())
    monkeypatch.setattr(packages, limit, value)
    with pytest.raises(PackageError, match=r"large\.tgz"):
        read_package(path)


def test_links_in_a_package_are_not_followed(tmp_path: Path) -> None:
    path = tmp_path / "links.tgz"
    with tarfile.open(path, "w:gz") as archive:
        for name, data in _files().items():
            member = tarfile.TarInfo(name)
            member.size = len(data)
            archive.addfile(member, io.BytesIO(data))
        link = tarfile.TarInfo("package/StructureDefinition-link.json")
        link.type, link.linkname = tarfile.SYMTYPE, "/etc/passwd"
        archive.addfile(link)
    assert list(read_package(path).structures) == [PROFILE["url"]]


def _core() -> dict[str, bytes]:
    def definition(name: str, elements: list[dict[str, Any]], **more: Any) -> bytes:
        return json.dumps(
            {
                "resourceType": "StructureDefinition",
                "id": name,
                "url": f"http://hl7.org/fhir/StructureDefinition/{name}",
                "type": name,
                "kind": "complex-type",
                "derivation": "specialization",
                "snapshot": {"element": elements},
                **more,
            }
        ).encode()

    root = [{"path": "Quantity", "id": "Quantity", "min": 0, "max": "*"}]
    simple = {"type": "Quantity", "derivation": "constraint"}
    return {
        "package/package.json": json.dumps(MANIFEST).encode(),
        "package/StructureDefinition-Quantity.json": definition("Quantity", root),
        "package/StructureDefinition-SimpleQuantity.json": definition("SimpleQuantity", root, **simple),
        "package/StructureDefinition-MoneyQuantity.json": definition("MoneyQuantity", root, **simple),
    }


def test_compiling_gives_the_same_bytes_whatever_the_order_in_the_package(tmp_path: Path) -> None:
    files = _core()
    one = compile_edition("R4", [read_package(_pack(tmp_path / "a.tgz", files))])
    other = compile_edition("R4", [read_package(_pack(tmp_path / "b.tgz", dict(reversed(files.items()))))])
    assert one == other
    assert set(json.loads(gzip.decompress(one))["types"]) == {"Quantity", "SimpleQuantity", "MoneyQuantity"}


def test_the_rebuild_command_says_what_it_cannot_use(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    path = _pack(tmp_path / "site.tgz", _files())
    assert main([str(path)]) == 1
    assert "clinic.example is none of the packages" in capsys.readouterr().err
    assert main([]) == 2
