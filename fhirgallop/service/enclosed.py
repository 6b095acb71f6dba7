"""An examination and the patient's chart in one body: multipart/form-data with the parts `record`, `chart`.

Source: RFC 7578 (form data), RFC 2046 section 5.1 (multipart).
"""

from __future__ import annotations

from dataclasses import dataclass, field
from email.message import Message
from typing import Final

from python_multipart.exceptions import FormParserError
from python_multipart.multipart import MultipartParser

from fhirgallop.intake.detect import BY_CONTENT_TYPE, kind_of
from fhirgallop.service.answers import refusal

FORM: Final = "multipart/form-data"
RECORD: Final = "record"
CHART: Final = "chart"
_MOST_HEADERS: Final = 8
_LONGEST_HEADER: Final = 1000
_UNSAID: Final = ("", "application/octet-stream")
_NAMES: Final = frozenset({RECORD, CHART})


@dataclass(slots=True)
class Part:
    """One part: its headers by name in lower case, and its content."""

    headers: dict[str, str] = field(default_factory=dict)
    content: bytearray = field(default_factory=bytearray)

    @property
    def name(self) -> str:
        """Name of the form's field."""
        return str(_parsed("content-disposition", self.headers).get_param("name", "", "content-disposition"))

    @property
    def content_type(self) -> str:
        """Media type, in lower case: as the part says, else by the ending of its file's name, else JSON."""
        given = self.headers.get("content-type", "").partition(";")[0].strip().lower()
        if given not in _UNSAID:
            return given
        named = kind_of(name=_parsed("content-disposition", self.headers).get_filename("")) or "json"
        return next(media for media, kind in BY_CONTENT_TYPE.items() if kind == named)


def parts(body: bytes, content_type: str) -> dict[str, Part]:
    """The parts of a form by name: `record` and `chart`.

    Raises:
        RefusalError: the body is no such form, lacks one, has one twice, or holds something else.
    """
    boundary = _parsed("content-type", {"content-type": content_type}).get_param("boundary")
    if not isinstance(boundary, str) or not 0 < len(boundary) <= 70 or not boundary.isascii():
        raise _refused("The Content-Type names no boundary.")
    reading = _Reading()
    parser = MultipartParser(boundary, reading.callbacks())  # type: ignore[arg-type]
    try:
        parser.write(body)
        parser.finalize()
    except FormParserError:
        raise _refused("The form is cut off, or not built as its Content-Type says.") from None
    if not reading.whole:
        raise _refused("The form is cut off.")
    found: dict[str, Part] = {}
    for part in reading.parts:
        name = part.name
        if name not in _NAMES or name in found:
            raise _refused(f"The form has the parts {RECORD} and {CHART}, each once, and no others.")
        found[name] = part
    if len(found) < len(_NAMES):
        raise _refused(f"The form has the parts {RECORD} and {CHART}, each once, and no others.")
    return found


class _Reading:
    """Gathers the parts while the parser goes through the body."""

    def __init__(self) -> None:
        self.parts: list[Part] = []
        self.whole = False
        self._name = bytearray()
        self._value = bytearray()

    def callbacks(self) -> dict[str, object]:
        return {
            "on_part_begin": self._begin,
            "on_header_field": lambda data, start, end: self._header(self._name, data[start:end]),
            "on_header_value": lambda data, start, end: self._header(self._value, data[start:end]),
            "on_header_end": self._header_end,
            "on_part_data": lambda data, start, end: self.parts[-1].content.extend(data[start:end]),
            "on_end": self._end,
        }

    def _begin(self) -> None:
        if len(self.parts) == len(_NAMES):
            raise _refused(f"The form has the parts {RECORD} and {CHART}, each once, and no others.")
        self.parts.append(Part())

    @staticmethod
    def _header(into: bytearray, data: bytes) -> None:
        into.extend(data)
        if len(into) > _LONGEST_HEADER:
            raise _refused("A header of a part is too long.")

    def _header_end(self) -> None:
        headers = self.parts[-1].headers
        headers[self._name.decode("latin-1").lower()] = self._value.decode("latin-1")
        if len(headers) > _MOST_HEADERS:
            raise _refused("A part has too many headers.")
        self._name.clear()
        self._value.clear()

    def _end(self) -> None:
        self.whole = True


def _parsed(name: str, headers: dict[str, str]) -> Message:
    message = Message()
    message[name] = headers.get(name, "").replace("\r", " ").replace("\n", " ")
    return message


def _refused(why: str) -> Exception:
    text = f"{why} Send {FORM} with the examination as the part {RECORD} and a FHIR Bundle as {CHART}."
    return refusal(400, "structure", "http-form", text)
