"""The acknowledgement of an HL7 v2 message: what was taken, or everything that was wrong with it.

Sources: HL7 v2.8.2 chapter 2, 2.9 (acknowledgement), 2.14 (MSH, MSA, ERR), tables 0008, 0357 and 0516; the
codes of table 0357 are written from memory of the standard.
"""

from __future__ import annotations

from collections.abc import Sequence
from datetime import datetime
from typing import Final

from fhirgallop.intake.hl7_syntax import STANDARD, Delimiters, escaped, parse
from fhirgallop.outcome import Issue, has_errors, ordered

_REFUSED: Final = (
    "hl7-no-msh",
    "hl7-separators",
    "hl7-message-type",
    "hl7-too-large",
    "hl7-charset",
    "hl7-utf16",
)
_CONDITIONS: Final = {
    "hl7-message-type": "200",
    "hl7-no-obr": "100",
    "hl7-broken-segment": "100",
    "hl7-no-msh": "100",
}
_BY_TYPE: Final = {"required": "101", "value": "102", "code-invalid": "103"}
_SEVERITIES: Final = {"fatal": "E", "error": "E", "warning": "W", "information": "I"}


def ack(message: bytes | str, issues: Sequence[Issue], *, control_id: str, now: datetime) -> bytes:
    """The ACK for `message`: AA; AE with errors in the data; AR when it is no message that is taken here.

    Args:
        message: the message as it came.
        issues: all that was noticed, from reading on.
        control_id: MSH-10 of the answer.
        now: time of the answer, with its zone.
    """
    parsed, _ = parse(message)
    marks = parsed.delimiters if parsed else STANDARD
    if has_errors(issues):
        refused = any(issue.rule.startswith(_REFUSED) for issue in issues if issue.is_error)
        code = "AR" if refused else "AE"
    else:
        code = "AA"
    header = parsed.segments[0] if parsed else None
    there = [header.field(number) if header else "" for number in range(19)]
    encoding = marks.component + marks.repetition + marks.escape + marks.subcomponent
    if parsed:
        encoding += marks.truncation  # only what the sender declared: before 2.7 there is no such mark
    trigger = parsed.component(there[9], 2) if parsed else ""
    kind = ("ACK", escaped(trigger, marks), "ACK") if trigger else ("ACK",)
    lines = [
        ["MSH", encoding, there[5], there[6], there[3], there[4], now.strftime("%Y%m%d%H%M%S%z"), "",
         marks.component.join(kind), escaped(control_id, marks), there[11] or "P",
         there[12] or "2.5.1", "", "", "", "", "", "UNICODE UTF-8"],
        ["MSA", code, there[10]],
        *(_error(issue, marks) for issue in ordered(issues)),
    ]  # fmt: skip
    return "".join(marks.field.join(line) + "\r" for line in lines).encode()


def _error(issue: Issue, marks: Delimiters) -> list[str]:
    """ERR: table 0357 condition, severity, rule and place for the developer, words for the user."""
    condition = _CONDITIONS.get(issue.rule) or _BY_TYPE.get(issue.code, "207")
    coded = marks.component.join((condition, escaped(issue.rule, marks), "HL70357"))
    place = escaped(f"{issue.rule}: {issue.place()}", marks)
    return ["ERR", "", "", coded, _SEVERITIES[issue.severity], "", "", place, escaped(issue.text, marks)]
