"""JSON records: one object is one examination, its entries are the fields.

Source: RFC 8259 (JSON); one JSON text a line for many records (NDJSON, common practice).
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import replace
from decimal import Decimal
from typing import Any, BinaryIO, Final

from fhirgallop.codes import fhirjson
from fhirgallop.intake.limits import DEFAULT, Limits
from fhirgallop.intake.lines import numbered
from fhirgallop.intake.midway import START, Midway
from fhirgallop.intake.reading import Read, Reading, refused
from fhirgallop.intake.record import Field, LocalRecord, Value
from fhirgallop.outcome import Issue, has_errors

Convert = Callable[[Any, str, Limits], Reading]
_BLANK: Final = object()


def read_json(
    text: bytes | str | Mapping[str, Any] | Sequence[Any], *, source: str = "", limits: Limits = DEFAULT
) -> Reading:
    """The record (an object) or records (a list of objects) of one JSON text, or of what was read from one.

    Objects are flattened to dotted names (`heart.s4`), a list of plain values is several values of one field,
    other lists get their place in the name (`murmurs[0].grade`). Numbers keep their digits. `null`, an empty
    string, list or object is a blank field.
    """
    if not isinstance(text, (bytes, str)):
        return records_of(text, source, limits)
    value, issues = fhirjson.read(text, max_bytes=limits.record_bytes, source=source)
    if has_errors(issues):
        return Reading(issues=tuple(issues))
    reading = records_of(value, source, limits)
    return replace(reading, issues=(*issues, *reading.issues)) if issues else reading


def read_ndjson(
    stream: BinaryIO,
    *,
    source: str = "",
    limits: Limits = DEFAULT,
    convert: Convert | None = None,
    since: Midway = START,
) -> Iterator[Read]:
    """One JSON text a line; a bad line is rejected and the next one is read.

    Args:
        stream: opened for bytes.
        source: file name, for issues.
        limits: bounds.
        convert: makes records of a JSON value; plain local records by default.
        since: the place in the file that the stream starts at.
    """
    make = convert or records_of
    for number, line in numbered(stream, limits.record_bytes, since.line):
        if number > limits.rows:
            yield refused(source, number, "fatal", "file-too-many-rows",
                          f"The file has more than {limits.rows:,} lines; send it in parts.")  # fmt: skip
            return
        if line is None:
            yield refused(source, number, "error", "json-too-large",
                          f"The line is longer than {limits.record_bytes:,} bytes; "
                          "send each examination on a line of its own.")  # fmt: skip
            continue
        if not line.strip():
            continue
        value, issues = fhirjson.read(line, source=source)
        reading = Reading() if has_errors(issues) else make(value, source, limits)
        reading = replace(reading, issues=(*issues, *reading.issues))
        for read in reading.stream(source):
            yield _at_line(read, number)


def _at_line(read: Read, number: int) -> Read:
    issues = tuple(replace(issue, line=number) for issue in read.issues)
    return replace(read, line=number, issues=issues)


def records_of(value: Any, source: str = "", limits: Limits = DEFAULT) -> Reading:
    """Records of a JSON value that is already read: an object, or a list of objects."""
    if isinstance(value, Mapping):
        record, issues = _record(value, source, limits)
        return Reading((record,) if record else (), tuple(issues))
    if not isinstance(value, Sequence) or isinstance(value, (str, bytes)):
        text = "A record is a JSON object with one entry a field, or a list of such objects; send that."
        return Reading(issues=(Issue("fatal", "structure", "json-not-a-record", text, source=source),))
    records: list[LocalRecord] = []
    issues = []
    for place, item in enumerate(value):
        record, faults = None, list[Issue]()
        if isinstance(item, Mapping):
            record, faults = _record(item, source, limits)
        else:
            text = "This place of the list holds no JSON object; each record is one, with an entry a field."
            faults = [Issue("error", "structure", "json-not-a-record", text, source=source)]
        issues += [replace(i, field=f"[{place}]{'.' if i.field else ''}{i.field}") for i in faults]
        if record:
            records.append(record)
    if not value:
        text = "The list holds no record."
        issues.append(Issue("warning", "not-found", "json-no-record", text, source=source))
    return Reading(tuple(records), tuple(issues))


def _record(value: Mapping[str, Any], source: str, limits: Limits) -> tuple[LocalRecord | None, list[Issue]]:
    flat = _Flattener(source, limits)
    flat.members(value, "", 1)
    if has_errors(flat.issues):
        return None, flat.issues
    return LocalRecord("json", flat.fields, source=source, issues=tuple(flat.issues)), []


class _Flattener:
    """Gathers the fields of one object, and everything that is wrong with them."""

    def __init__(self, source: str, limits: Limits) -> None:
        self.fields: dict[str, Field] = {}
        self.issues: list[Issue] = []
        self._source = source
        self._limits = limits
        self._full = False

    def members(self, value: Mapping[Any, Any], prefix: str, depth: int) -> None:
        """Every member of an object; `depth` counts the objects and lists around it, itself included."""
        if depth > self._limits.depth:
            self._too_deep(prefix)
            return
        if self._overfull(len(value)):
            return
        for key, inner in value.items():
            name = f"{prefix}.{key}" if prefix else key
            if not isinstance(key, str) or not key or len(name) > self._limits.name:
                text = f"A name is empty or longer than {self._limits.name} characters; name each field."
                self._fault("structure", "record-bad-name", text, str(name)[:64])
            elif type(inner) is str and len(inner) <= self._limits.text and name not in self.fields:
                # the common case, without the detours of the others
                self.fields[name] = Field(name, (inner,) if inner and not inner.isspace() else ())
            else:
                self._entry(name, inner, depth)

    def _entry(self, name: str, value: Any, depth: int) -> None:
        plain = self._plain(name, value)
        if plain is not None:
            self._add(name, () if plain is _BLANK else (plain,))
        elif isinstance(value, Mapping) and value:
            self.members(value, name, depth + 1)
        elif isinstance(value, (list, tuple)):
            self._list(name, value, depth + 1)
        elif isinstance(value, Mapping):
            self._add(name, ())
        else:
            text = "This is not a JSON value; send text, a number, true, false, null, an object or a list."
            self._fault("structure", "json-not-a-value", text, name)

    def _list(self, name: str, value: Sequence[Any], depth: int) -> None:
        if depth > self._limits.depth:
            self._too_deep(name)
        elif self._overfull(len(value)):
            return
        elif any(isinstance(item, (Mapping, list, tuple)) for item in value):
            for place, item in enumerate(value):
                self._entry(f"{name}[{place}]", item, depth)
        else:
            values: list[Value] = []
            for item in value:
                plain = self._plain(name, item)
                if plain is None:
                    self._entry(name, item, depth)
                elif plain is not _BLANK:
                    values.append(plain)
            self._add(name, tuple(values))

    def _plain(self, name: str, value: Any) -> Any:
        """A field's value; _BLANK for a blank one; None when it is no plain value."""
        if isinstance(value, str):
            if len(value) > self._limits.text:
                text = f"The text is longer than {self._limits.text:,} characters; shorten it."
                self._fault("too-long", "record-text-too-long", text, name)
                return _BLANK
            return value if value and not value.isspace() else _BLANK
        if value is None:
            return _BLANK
        if isinstance(value, (bool, Decimal)):
            return value
        if isinstance(value, int):
            return Decimal(value)
        if isinstance(value, float) and math.isfinite(value):
            return Decimal(repr(value))
        return None

    def _add(self, name: str, values: tuple[Value, ...]) -> None:
        if name in self.fields:
            text = "Two entries come out under the same dotted name; rename one of them."
            self._fault("structure", "record-name-twice", text, name)
        self.fields[name] = Field(name, values)

    def _overfull(self, more: int) -> bool:
        """Whether `more` entries are too many, which is said once."""
        if not self._full and len(self.fields) + more > self._limits.fields:
            self._full = True
            text = f"The record has more than {self._limits.fields:,} fields; send one examination a record."
            self._fault("too-long", "record-too-many-fields", text, "")
        return self._full

    def _too_deep(self, name: str) -> None:
        text = f"Objects and lists are nested more than {self._limits.depth} deep; flatten them."
        self._fault("too-long", "json-too-deep", text, name[:64])

    def _fault(self, code: str, rule: str, text: str, name: str) -> None:
        self.issues.append(Issue("error", code, rule, text, field=name, source=self._source))
