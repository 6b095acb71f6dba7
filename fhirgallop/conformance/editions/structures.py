"""Cuts StructureDefinitions of types to rows: path, bounds, types, bindings, constraints; no prose.

Defects of the published definitions are put right here, each with its reason.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

Definition = Mapping[str, Any]
Row = dict[str, Any]

SD = "http://hl7.org/fhir/StructureDefinition/"
_FHIR_TYPE = SD + "structuredefinition-fhir-type"
_REGEX = SD + "regex"
_MAX_VALUE_SET = SD + "elementdefinition-maxValueSet"
_SYSTEM = "http://hl7.org/fhirpath/System."

_DATE = r"([0-9]([0-9]([0-9][1-9]|[1-9]0)|[1-9]00)|[1-9]000)"
_TIME = r"([01][0-9]|2[0-3]):[0-5][0-9]:([0-5][0-9]|60)(\.[0-9]{1,9})?"
_ZONE = r"(Z|(\+|-)((0[0-9]|1[0-3]):[0-5][0-9]|14:00))"
PATTERNS: Mapping[tuple[str, str], str] = {
    # R5 publishes a stray brace after the exponent; the bounds of digits are R5's.
    ("R5", "decimal"): r"-?(0|[1-9][0-9]{0,17})(\.[0-9]{1,17})?([eE][+-]?[0-9]{1,9})?",
    # R5's published expression takes a zone after a bare date, and a time without one, against its text.
    ("R5", "dateTime"): rf"{_DATE}(-(0[1-9]|1[0-2])(-(0[1-9]|[1-2][0-9]|3[0-1])(T{_TIME}{_ZONE})?)?)?",
    # White space on both sides of each group of four makes R4's expression explode; this one takes the same.
    ("R4", "base64Binary"): r"(\s*[0-9a-zA-Z+/=]\s*)+",
    ("R4B", "base64Binary"): r"(\s*[0-9a-zA-Z+/=]\s*)+",
    ("R5", "string"): r"[\s\S]+",
    ("R5", "markdown"): r"[\s\S]+",
}
JSON_KINDS = {
    "boolean": "boolean",
    "integer": "integer",
    "unsignedInt": "integer",
    "positiveInt": "integer",
    "decimal": "decimal",
}
# xhtml is a string with rules of its own; a code in JSON stays a string, and so does integer64 (R5, 64 bits).


class Invariants:
    """The table of constraints: each (key, severity, expression, text) stands once."""

    def __init__(self) -> None:
        self.rows: list[list[str]] = []
        self._index: dict[tuple[str, ...], int] = {}

    def indices(self, constraints: Any) -> list[int]:
        """Row numbers of an element's constraints; those without an expression are left."""
        found = []
        for constraint in constraints or ():
            expression = constraint.get("expression")
            if not expression:
                continue
            row = (
                constraint["key"],
                constraint["severity"],
                expression,
                " ".join(constraint["human"].split()),
            )
            if row not in self._index:
                self._index[row] = len(self.rows)
                self.rows.append(list(row))
            found.append(self._index[row])
        return found


class TypeTable:
    """Rows of all types of an edition, written so that what is inherited stands once."""

    def __init__(self, edition: str, structures: Mapping[str, Definition]) -> None:
        self.edition = edition
        self.invariants = Invariants()
        self.rows: dict[str, Row] = {}
        self._structures = {
            d["type"]: d
            for d in structures.values()
            if d.get("kind") in ("resource", "complex-type", "primitive-type")
            and d.get("derivation") != "constraint"
            and d.get("url") == SD + str(d.get("type"))
            and "snapshot" in d
        }
        self._all: dict[str, dict[str, Row]] = {}
        self._held: dict[str, set[str]] = {}
        for name in sorted(self._structures):
            self._add(name)
        self._own_invariants()

    def _add(self, name: str) -> None:
        if name in self._all:
            return
        definition = self._structures[name]
        base = str(definition.get("baseDefinition", "")).removeprefix(SD)
        base = base if base in self._structures else ""
        if base:
            self._add(base)
        kind = {"resource": "resource", "primitive-type": "primitive"}.get(definition["kind"], "complex")
        parts: dict[str, list[Definition]] = {}
        for element in definition["snapshot"]["element"]:
            parts.setdefault(element["path"].rpartition(".")[0], []).append(element)
        root = parts.pop("")[0]
        nested = {e["path"]: e for p in parts.values() for e in p if e["path"] in parts}
        self._type(name, base, kind, root, parts.get(name, []))
        if definition.get("abstract"):
            self.rows[name]["a"] = 1
        if kind == "primitive":
            self.rows[name].update(_primitive(self.edition, name, parts.get(name, [])))
        for path, element in nested.items():
            self._type(path, element["type"][0]["code"], "nested", element, parts[path])

    def _type(self, name: str, base: str, kind: str, root: Definition, parts: list[Definition]) -> None:
        if base and base not in self._all and base in self._structures:
            self._add(base)
        inherited = self._all.get(base, {})
        own: dict[str, Row] = {}
        for element in parts:
            row = self._element(element, kind)
            if row["n"] == "value" and kind == "primitive":
                continue
            if inherited.get(row["n"]) != row:
                own[row["n"]] = row
        self._all[name] = {**inherited, **own}
        row = {"k": kind, "e": list(own.values()), "constraints": root.get("constraint", [])}
        if base:
            row["b"] = base
        self.rows[name] = row

    def _element(self, element: Definition, kind: str) -> Row:
        name = element["path"].rpartition(".")[2]
        row: Row = {"n": name}
        if element["min"]:
            row["m"] = element["min"]
        if element["max"] != "1":
            row["x"] = -1 if element["max"] == "*" else int(element["max"])
        reference = element.get("contentReference", "")
        types = element.get("type", ())
        if reference:
            row["s"] = reference.partition("#")[2]
            row["t"] = ["BackboneElement"]
        else:
            row["t"] = [_type_ref(t, name, kind, row) for t in types]
        if any(t["code"] in ("BackboneElement", "Element") for t in types):
            row["s"] = element["path"]
        binding = binding_row(element.get("binding"))
        if binding:
            row["b"] = binding
        row["constraints"] = element.get("constraint", [])
        return row

    def _own_invariants(self) -> None:
        """Replaces constraints by row numbers, each standing where it is first said and not again below."""
        for name in sorted(self.rows, key=lambda n: (len(self._line(n)), n)):
            row = self.rows[name]
            above = set().union(*(self._held.get(t, set()) for t in self._line(name)[1:]))
            own = [c for c in row.pop("constraints") if _constraint_id(c) not in above]
            self._held[name] = {_constraint_id(c) for c in own}
            indices = self.invariants.indices(own)
            if indices:
                row["i"] = indices
        for row in self.rows.values():
            for element in row["e"]:
                self._element_invariants(element)
            if not row["e"]:
                del row["e"]

    def _element_invariants(self, element: Row) -> None:
        names = (
            [element["s"]] if "s" in element else [t if isinstance(t, str) else t[0] for t in element["t"]]
        )
        held: list[set[str]] = [
            set().union(*(self._held.get(step, set()) for step in self._line(name))) for name in names
        ]
        common = set.intersection(*held) if held else set()
        indices = self.invariants.indices(
            c for c in element.pop("constraints") if _constraint_id(c) not in common
        )
        if indices:
            element["i"] = indices

    def _line(self, name: str) -> list[str]:
        line = []
        while name in self.rows:
            line.append(name)
            name = self.rows[name].get("b", "")
        return line

    def add_type_profile(self, definition: Definition) -> None:
        """A core profile on a data type that elements ask for: its base, plus its constraints."""
        name, base = definition["id"], definition["type"]
        held = set().union(*(self._held.get(step, set()) for step in self._line(base)))
        root = definition["snapshot"]["element"][0]
        own = [c for c in root.get("constraint", []) if _constraint_id(c) not in held]
        self.rows[name] = {"k": "complex", "b": base, "i": self.invariants.indices(own)}


def _constraint_id(constraint: Definition) -> str:
    """One constraint is printed with small differences where it is inherited: its key tells it."""
    return str(constraint["key"])


def _type_ref(ref: Definition, name: str, kind: str, row: Row) -> Any:
    code = str(ref["code"])
    if code.startswith(_SYSTEM):
        row["a"] = 1
        said = next((e.get("valueUrl") for e in ref.get("extension", ()) if e["url"] == _FHIR_TYPE), None)
        if name == "id":
            # R4 says string for Resource.id against its text; R5 says id for ElementDefinition.id, whose
            # published ids hold ':'. A resource's id is an id, an element's id is a string.
            return "id" if kind == "resource" else "string"
        return said or code.removeprefix(_SYSTEM).lower()
    if code == "xhtml":
        row["a"] = 1
    profiles = [str(p) for p in ref.get("profile", ())]
    targets = sorted(_short(str(t)) for t in ref.get("targetProfile", ()))
    return [code, profiles, targets] if profiles or targets else code


def _short(canonical: str) -> str:
    name = canonical.removeprefix(SD)
    return name if name[:1].isupper() and name.isalnum() else canonical


def binding_row(binding: Definition | None) -> list[str] | None:
    """Value set and strength of a binding as a compact row; None where there is none worth keeping."""
    if not binding:
        return None
    maximum = next(
        (
            str(e.get("valueCanonical") or e.get("valueUri") or e.get("valueReference", {}).get("reference"))
            for e in binding.get("extension", ())
            if e.get("url") == _MAX_VALUE_SET
        ),
        "",
    ).partition("|")[0]
    strength = binding["strength"]
    url = str(binding.get("valueSet", "")).partition("|")[0]
    if not maximum and (strength in ("preferred", "example") or not url):
        return None
    return [strength, url, maximum] if maximum else [strength, url]


def _primitive(edition: str, name: str, parts: list[Definition]) -> Row:
    value = next(e for e in parts if e["path"] == f"{name}.value")
    published = next(
        (e.get("valueString") for t in value["type"] for e in t.get("extension", ()) if e["url"] == _REGEX),
        None,
    )
    row: Row = {"j": JSON_KINDS.get(name, "string")}
    pattern = PATTERNS.get((edition, name), published)
    if pattern and row["j"] != "boolean":
        row["p"] = pattern
    if value.get("maxLength"):
        row["l"] = value["maxLength"]
    return row
