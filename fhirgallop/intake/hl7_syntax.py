r"""HL7 v2 messages as segments, fields, repetitions, components: the encoding rules, nothing of the meaning.

Source: HL7 v2.8.2 chapter 2, 2.5 (construction), 2.7 (escape sequences \F\ \S\ \T\ \R\ \E\ \P\ \H\ \N\
\Xhh\ and the formatting commands \.br\ \.sp\ \.in\ \.ti\ \.sk\ \.fi\ \.nf\ \.ce\); MSH-18 by table 0211.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Final, Protocol

from fhirgallop.intake.limits import DEFAULT, Limits
from fhirgallop.outcome import Issue, Severity

DELETE: Final = '""'
_FRAMING: Final = "\x0b\x1c"
_BLANK_LINES_MOST: Final = 20
_CHARSETS: Final = {
    "ASCII": "ascii",
    "UNICODE UTF-8": "utf-8",
    "UTF-8": "utf-8",
    "8859/1": "iso8859-1",
    "8859/2": "iso8859-2",
    "8859/3": "iso8859-3",
    "8859/4": "iso8859-4",
    "8859/5": "iso8859-5",
    "8859/6": "iso8859-6",
    "8859/7": "iso8859-7",
    "8859/8": "iso8859-8",
    "8859/9": "iso8859-9",
    "8859/15": "iso8859-15",
}


@dataclass(frozen=True, slots=True)
class Delimiters:
    """The separators that a message declares in MSH-1 and MSH-2."""

    field: str = "|"
    component: str = "^"
    repetition: str = "~"
    escape: str = "\\"
    subcomponent: str = "&"
    truncation: str = "#"


STANDARD: Final = Delimiters()


@dataclass(frozen=True, slots=True)
class Segment:
    """One segment: its name, its raw fields counted from 1, and its line in the source."""

    name: str
    fields: Sequence[str]
    line: int

    def field(self, number: int) -> str:
        """Raw field `number`; empty when it is not there."""
        return self.fields[number] if number < len(self.fields) else ""


@dataclass(frozen=True, slots=True)
class Message:
    """A message taken apart; `charset` decodes hexadecimal escapes."""

    segments: Sequence[Segment]
    delimiters: Delimiters
    charset: str

    def repetitions(self, raw: str) -> list[str]:
        """The repetitions of a raw field."""
        return raw.split(self.delimiters.repetition)

    def components(self, raw: str) -> list[str]:
        """The components of one repetition, unescaped; sub-components stay together as written."""
        return [self.text(part) for part in raw.split(self.delimiters.component)]

    def component(self, raw: str, number: int = 1) -> str:
        """Component `number` of the first repetition of a raw field, unescaped."""
        parts = self.components(self.repetitions(raw)[0])
        return "" if number > len(parts) or parts[number - 1] == DELETE else parts[number - 1].strip()

    def subcomponent(self, raw: str) -> str:
        """The first sub-component of the first component of the first repetition, unescaped."""
        first = self.repetitions(raw)[0].partition(self.delimiters.component)[0]
        return self.component(first.partition(self.delimiters.subcomponent)[0])

    def text(self, raw: str) -> str:
        """Raw text with its escape sequences resolved."""
        return unescaped(raw, self.delimiters, self.charset)[0]


def parse(
    data: bytes | str, *, line: int = 1, source: str = "", limits: Limits = DEFAULT
) -> tuple[Message | None, list[Issue]]:
    """One message taken apart, and what is wrong with its form; None when an issue is fatal."""
    issues: list[Issue] = []

    def fault(severity: Severity, rule: str, text: str, at: int = line) -> None:
        code = "too-long" if "too-" in rule else "structure"
        issues.append(Issue(severity, code, rule, text, source=source, line=at))

    if len(data) > limits.record_bytes:
        size = f"{limits.record_bytes:,}"
        fault("fatal", "hl7-too-large", f"The message is larger than {size} bytes; send it in parts.")
        return None, issues
    text, charset = _decoded(data, fault)
    if text is None:
        return None, issues
    lines = text.strip(_FRAMING + " \t\r\n").replace("\r\n", "\r").replace("\n", "\r").split("\r")
    marks = _delimiters(lines[0], fault)
    if marks is None:
        return None, issues
    segments: list[Segment] = []
    for number, content in enumerate(lines, start=line):
        whole = content.strip(_FRAMING)
        if not whole.strip():
            continue
        name = whole[:3]
        if not _is_name(name) or whole[3:4] not in ("", marks.field):
            fault(
                "error", "hl7-broken-segment",
                f"The line does not start with a segment name and {marks.field!r}; write line ends in "
                "text as \\.br\\ and use the separators that MSH declares.", number,
            )  # fmt: skip
            continue
        parts = whole.split(marks.field)
        if len(parts) > limits.fields or len(segments) > limits.fields:
            most = f"{limits.fields:,}"
            fault(
                "fatal", "hl7-too-many-fields", f"There are more than {most} segments or fields; send less."
            )
            return None, issues
        # MSH-1 is the separator itself, so that its fields count one further
        segments.append(Segment(name, [name, marks.field, *parts[1:]] if name == "MSH" else parts, number))
    return Message(segments, marks, charset), issues


def _is_name(text: str) -> bool:
    return len(text) == 3 and text.isascii() and text.isalnum() and text.isupper() and text[0].isalpha()


class _Fault(Protocol):
    def __call__(self, severity: Severity, rule: str, text: str) -> None: ...


def _decoded(data: bytes | str, fault: _Fault) -> tuple[str | None, str]:
    """The text and the name of its encoding; None when it cannot be decoded."""
    if isinstance(data, str):
        return data.removeprefix("\ufeff"), "utf-8"
    if data.startswith((b"\xff\xfe", b"\xfe\xff")):
        fault(
            "fatal", "hl7-utf16", "The message is UTF-16; send UTF-8 and name it in MSH-18 as UNICODE UTF-8."
        )
        return None, ""
    data = data.removeprefix(b"\xef\xbb\xbf")
    declared = _declared_charset(data)
    if declared and declared not in _CHARSETS:
        text = "The character set of MSH-18 is not supported; send UNICODE UTF-8."
        fault("fatal", "hl7-charset-unsupported", text)
        return None, ""
    charset = _CHARSETS.get(declared, "ascii")
    try:
        used = "utf-8" if charset == "ascii" else charset
        return data.decode(used), used
    except UnicodeDecodeError:
        if charset != "ascii":
            text = "The message is not in the character set that MSH-18 names; correct MSH-18 or the sender."
            fault("fatal", "hl7-charset-wrong", text)
            return None, ""
    text = (
        "MSH-18 names no character set that fits; the message was read as Windows-1252. Name the right one."
    )
    fault("warning", "hl7-charset-missing", text)
    return data.decode("cp1252", "replace"), "cp1252"


def _declared_charset(data: bytes) -> str:
    start = data[:8192].lstrip(b"\x0b \t\r\n")
    line = start.replace(b"\n", b"\r").partition(b"\r")[0].decode("latin-1")
    fields = line.split(line[3:4] or "|")
    repetition = line[5:6]
    declared = fields[17] if len(fields) > 17 else ""
    return (declared.partition(repetition)[0] if repetition else declared).strip().upper()


def _delimiters(line: str, fault: _Fault) -> Delimiters | None:
    if not line.startswith("MSH"):
        fault("fatal", "hl7-no-msh", "The message does not start with an MSH segment; send it whole.")
        return None
    separator = line[3:4]
    marks = line[4:].partition(separator)[0] if separator else ""
    used = separator + marks
    if len(marks) not in (4, 5) or len(set(used)) != len(used) or any(_is_no_mark(mark) for mark in used):
        text = (
            "MSH-1 and MSH-2 do not declare five or six different separators that are no letters, digits "
            "or blanks; the usual ones are |^~\\&."
        )
        fault("fatal", "hl7-separators", text)
        return None
    return Delimiters(separator, marks[0], marks[1], marks[2], marks[3], marks[4:])


def _is_no_mark(mark: str) -> bool:
    return mark.isalnum() or mark.isspace() or not mark.isprintable()


def unescaped(text: str, marks: Delimiters = STANDARD, charset: str = "utf-8") -> tuple[str, bool]:
    """`text` with its escape sequences resolved, and False when an unknown one stays as written."""
    if marks.escape not in text:
        return text, True
    parts: list[str] = []
    clean = True
    start = 0
    while (opening := text.find(marks.escape, start)) >= 0:
        closing = text.find(marks.escape, opening + 1)
        if closing < 0:
            clean = False
            break
        resolved = _resolved(text[opening + 1 : closing], marks, charset)
        parts.append(text[start:opening])
        if resolved is None:
            # not an escape sequence: this mark is text, and the next one may open a real one
            clean = False
            parts.append(marks.escape)
            start = opening + 1
        else:
            parts.append(resolved)
            start = closing + 1
    parts.append(text[start:])
    return "".join(parts), clean


def _resolved(code: str, marks: Delimiters, charset: str) -> str | None:
    """What an escape sequence stands for; None when it is none that is known."""
    simple = {
        "F": marks.field,
        "S": marks.component,
        "T": marks.subcomponent,
        "R": marks.repetition,
        "E": marks.escape,
        "P": marks.truncation,
        "H": "",
        "N": "",
    }
    if code in simple:
        return simple[code]
    if code.startswith("X") and len(code) > 1:
        try:
            data = bytes.fromhex(code[1:])
        except ValueError:
            return None
        return data.decode(charset, "replace").replace("\r\n", "\n").replace("\r", "\n")
    if code.startswith("."):
        return _formatted(code[1:3], code[3:].strip())
    return None


def _formatted(command: str, argument: str) -> str | None:
    """Formatting commands as plain text: new lines and blanks; indents and word wrap leave nothing."""
    digits = argument.lstrip("+-")
    if argument and not (digits.isascii() and digits.isdecimal() and len(digits) <= 3):
        return None
    count = min(int(digits or 1), _BLANK_LINES_MOST)
    match command:
        case "br" | "ce":
            return "\n"
        case "sp":
            return "\n" * count
        case "sk":
            return " " * count
        case "in" | "ti" | "fi" | "nf":
            return ""
        case _:
            return None


def escaped(text: str, marks: Delimiters = STANDARD) -> str:
    """`text` made fit for a field: separators escaped, line ends as .br."""
    table = {
        marks.escape: f"{marks.escape}E{marks.escape}",
        marks.field: f"{marks.escape}F{marks.escape}",
        marks.component: f"{marks.escape}S{marks.escape}",
        marks.subcomponent: f"{marks.escape}T{marks.escape}",
        marks.repetition: f"{marks.escape}R{marks.escape}",
        "\n": f"{marks.escape}.br{marks.escape}",
        "\r": "",
    }
    return "".join(table.get(letter, letter) for letter in text)
