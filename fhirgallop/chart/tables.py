"""Which code says what, and which document a resource is: terminology/chart-codes.csv and chart-sources.csv.

The exact codes of the catalogue and of chart.csv are known without a row; a row adds a code, or replaces what
a code says in one use. A broader code identifies nothing. A site may add rows of its own.
"""

from __future__ import annotations

import csv
import io
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from functools import cache
from types import MappingProxyType
from typing import Final

from fhirgallop import assets
from fhirgallop.chart.elements import Code
from fhirgallop.chart.known import Known, known
from fhirgallop.codes import systems
from fhirgallop.errors import AssetError
from fhirgallop.exam import catalogue
from fhirgallop.exam.context import Source
from fhirgallop.exam.entry import Qualifier
from fhirgallop.outcome import Issue

USES: Final = frozenset({"observation", "value", "condition", "device", "procedure", "question", "presence"})
_STATES: Final = frozenset({"present", "absent", "uncertain"})
_SYSTEMS: Final = {"snomed": systems.SNOMED, "loinc": systems.LOINC, "hpo": systems.HPO}
_COLUMNS: Final = ("system", "code", "use", "id", "state", "answers", "qualifiers", "contextual")
# In a Condition a diagnosis is meant, where a code could also be a finding of an examination.
_DIAGNOSES: Final = ("condition.", "lesion.", "device.", "procedure.")
MAX_SITE_ROWS: Final = 20_000


@dataclass(frozen=True, slots=True)
class Statement:
    """What a code says when it is affirmed.

    Attributes:
        id: finding or fact.
        answers: values of a choice.
        qualifiers: what the code says besides.
        present: False for a code that itself says absent.
        contextual: the code says absent or history; denying it would be a double negative, and is not read.
    """

    id: str
    answers: tuple[str, ...] = ()
    qualifiers: tuple[Qualifier, ...] = ()
    present: bool = True
    contextual: bool = False


Statements = Mapping[Code, tuple[Statement, ...]]


@dataclass(frozen=True)
class Tables:
    """The look-ups, by use; `values` gives the answers a code stands for as the value of a choice."""

    uses: Mapping[str, Statements]
    values: Mapping[tuple[str, Code], tuple[Statement, ...]]
    presence: Mapping[Code, str]
    questions: frozenset[Code]
    axes: Mapping[Code, str]
    axis_values: Mapping[tuple[str, Code], str]
    sources: Mapping[tuple[str, str], Mapping[Code, Source]]


@cache
def shipped() -> Tables:
    """The shipped tables.

    Raises:
        AssetError: a row is broken.
    """
    tables, issues = _tables(())
    if tables is None:
        raise AssetError("chart-codes.csv: " + "; ".join(str(issue) for issue in issues[:5]))
    return tables


def with_site(text: str, name: str) -> tuple[Tables | None, list[Issue]]:
    """The shipped tables with a site's rows over them, or None and everything that is wrong with the rows.

    Args:
        text: CSV with the columns of terminology/chart-codes.csv; `system` may be the full address of the
            site's own code system.
        name: file name, for the issues.
    """
    return _tables(csv.DictReader(io.StringIO(text)), name)


def _tables(site: Iterable[Mapping[str, str]], name: str = "") -> tuple[Tables | None, list[Issue]]:
    reader = _Reader()
    with assets.path("terminology", "chart-codes.csv").open(encoding="utf-8", newline="") as file:
        for line, shipped_row in enumerate(csv.DictReader(file), 2):
            reader.row(shipped_row, "chart-codes.csv", line)
    replaced: set[tuple[str, Code]] = set()
    for line, row in enumerate(site, 2):
        if line > MAX_SITE_ROWS:
            reader.fault(name, line, f"more than {MAX_SITE_ROWS:,} rows; leave out what is not used")
            break
        reader.row(row, name, line, replaced)
    if reader.issues:
        return None, reader.issues
    return _assembled(reader), []


class _Reader:
    """Reads rows into statements, and keeps every fault."""

    def __init__(self) -> None:
        self.issues: list[Issue] = []
        self.statements: dict[str, dict[Code, list[Statement]]] = {use: {} for use in USES}

    def fault(self, source: str, line: int, text: str) -> None:
        """One fault, in a sentence."""
        self.issues.append(Issue("error", "structure", "chart-codes", text, source=source, line=line))

    def row(
        self, row: Mapping[str, str], source: str, line: int, replaced: set[tuple[str, Code]] | None = None
    ) -> None:
        """One row; the first row of a site about a code replaces what was shipped for it."""
        if any(row.get(column) is None for column in _COLUMNS):
            self.fault(source, line, f"the row lacks one of the columns {', '.join(_COLUMNS)}")
            return
        code = Code(_SYSTEMS.get(row["system"], row["system"]), row["code"])
        uses = row["use"].split()
        if (
            not code.system
            or not code.code
            or not uses
            or not USES.issuperset(uses)
            or row["state"] not in _STATES
        ):
            self.fault(source, line, "system, code, use or state is missing or not one of the known words")
            return
        statement = (
            self._statement(row, source, line)
            if row["id"]
            else Statement("", (), (), row["state"] == "present")
        )
        if statement is None or (not row["id"] and not {"question", "presence"}.issuperset(uses)):
            if statement is not None:
                self.fault(source, line, "the row names no id")
            return
        if "presence" in uses:
            statement = Statement(row["state"])
        for use in uses:
            held = self.statements[use].setdefault(code, [])
            if replaced is not None and (use, code) not in replaced:
                replaced.add((use, code))
                held.clear()
            held.append(statement)

    def _statement(self, row: Mapping[str, str], source: str, line: int) -> Statement | None:
        definition = known().get(row["id"])
        if definition is None:
            self.fault(source, line, f"there is no id {row['id'][:64]}")
            return None
        answers = tuple(row["answers"].split())
        if not definition.answers.issuperset(answers):
            self.fault(source, line, f"an answer is not one of {definition.id}")
            return None
        qualifiers = []
        for part in row["qualifiers"].split():
            axis, _, value = part.partition(":")
            if axis not in definition.qualifiers or value not in catalogue.load().axes[axis].values:
                self.fault(source, line, f"{definition.id} has no property {part[:64]}")
                return None
            qualifiers.append(Qualifier(axis, value))
        return Statement(
            definition.id, answers, tuple(qualifiers), row["state"] == "present", row["contextual"] == "yes"
        )


def _assembled(reader: _Reader) -> Tables:
    uses = {use: _from_catalogue(use) for use in ("observation", "condition", "device", "procedure")}
    for use, found in uses.items():
        found.update({code: tuple(said) for code, said in reader.statements[use].items()})
    values = _values()
    for code, said in reader.statements["value"].items():
        for statement in said:
            values[statement.id, code] = (*values.get((statement.id, code), ()), statement)
    presence = _presence()
    presence.update({code: said[-1].id for code, said in reader.statements["presence"].items()})
    axes, axis_values = _axes()
    return Tables(
        MappingProxyType({use: MappingProxyType(found) for use, found in uses.items()}),
        MappingProxyType(values),
        MappingProxyType(presence),
        frozenset(reader.statements["question"]),
        MappingProxyType(axes),
        MappingProxyType(axis_values),
        _sources(),
    )


def _from_catalogue(use: str) -> dict[Code, tuple[Statement, ...]]:
    found: dict[Code, list[Statement]] = {}
    for definition in known().values():
        if not _fits(definition, use):
            continue
        for coding in definition.codings:
            if coding.fit == "exact" and not (
                coding.system == systems.LOINC and _borrowed(definition, coding.code)
            ):
                found.setdefault(Code(coding.system, coding.code), []).append(Statement(definition.id))
        if use in ("observation", "device") and definition.axis and _own_axis(definition):
            for value in catalogue.load().axes[definition.axis].values.values():
                for coding in value.codings:
                    # an HPO term of a person's phenotype is a history, not what was observed
                    if coding.fit == "exact" and coding.system == systems.SNOMED:
                        code = Code(coding.system, coding.code)
                        found.setdefault(code, []).append(Statement(definition.id, (value.id,)))
    if use == "condition":
        return {code: tuple(_diagnoses(said)) for code, said in found.items()}
    return {code: tuple(_findings(said)) for code, said in found.items()}


def _fits(definition: Known, use: str) -> bool:
    if use == "observation":
        return definition.kind in ("sign", "choice", "quantity")
    if use == "condition":
        return definition.kind == "sign" and not definition.id.startswith("procedure.")
    return definition.id.startswith(f"{use}.")


def _borrowed(definition: Known, loinc: str) -> bool:
    """True for a LOINC number of several findings that this one carries only as a kind of another."""
    return len(_carriers()[loinc]) > 1 and any(
        c.system == systems.SNOMED and c.fit == "broader" for c in definition.codings
    )


@cache
def _carriers() -> Mapping[str, list[str]]:
    found: dict[str, list[str]] = {}
    for definition in known().values():
        for coding in definition.codings:
            if coding.system == systems.LOINC:
                found.setdefault(coding.code, []).append(definition.id)
    return found


def _own_axis(definition: Known) -> bool:
    return sum(other.axis == definition.axis for other in known().values()) == 1


def _diagnoses(said: list[Statement]) -> list[Statement]:
    preferred = [statement for statement in said if statement.id.startswith(_DIAGNOSES)]
    return preferred or said


def _findings(said: list[Statement]) -> list[Statement]:
    """A code that is a finding by itself is not read as an answer, nor as a diagnosis."""
    plain = [statement for statement in said if not statement.answers]
    found = plain or said
    return [s for s in found if not s.id.startswith("condition.")] or found


def _values() -> dict[tuple[str, Code], tuple[Statement, ...]]:
    found: dict[tuple[str, Code], tuple[Statement, ...]] = {}
    for definition in known().values():
        if definition.kind != "choice":
            continue
        if definition.axis:
            for value in catalogue.load().axes[definition.axis].values.values():
                for coding in value.codings:
                    if coding.fit == "exact":
                        key = (definition.id, Code(coding.system, coding.code))
                        found[key] = (Statement(definition.id, (value.id,)),)
        for answer in definition.answers:
            # facts of chart.csv have no axis: their answers are our codes `id:answer`
            found.setdefault(
                (definition.id, Code(systems.FINDINGS, f"{definition.id}:{answer}")),
                (Statement(definition.id, (answer,)),),
            )
    return found


def _presence() -> dict[Code, str]:
    return {
        Code(coding.system, coding.code): value.id
        for value in catalogue.load().axes["presence"].values.values()
        for coding in value.codings
        if coding.fit == "exact"
    }


def _axes() -> tuple[dict[Code, str], dict[tuple[str, Code], str]]:
    heads: dict[Code, str] = {}
    values: dict[tuple[str, Code], str] = {}
    for axis in catalogue.load().axes.values():
        heads.update({Code(c.system, c.code): axis.id for c in axis.codings if c.fit == "exact"})
        for value in axis.values.values():
            values.update(
                {(axis.id, Code(c.system, c.code)): value.id for c in value.codings if c.fit == "exact"}
            )
    return heads, values


def _sources() -> Mapping[tuple[str, str], Mapping[Code, Source]]:
    found: dict[tuple[str, str], dict[Code, Source]] = {}
    with assets.path("terminology", "chart-sources.csv").open(encoding="utf-8", newline="") as file:
        for row in csv.DictReader(file):
            try:
                source = Source(row["source"])
            except ValueError:
                raise AssetError(f"chart-sources.csv: there is no source {row['source']!r}") from None
            found.setdefault((row["resource"], row["by"]), {})[Code(row["system"], row["key"])] = source
    return MappingProxyType(found)
