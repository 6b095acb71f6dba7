"""What the record system's answer to a transaction means: delivered, later again, or a matter for a person.

Sources: FHIR R4 http.html (transaction: answered 200 with a `transaction-response` that has one entry for
each entry sent, in their order; conditional update: 412 where several match); RFC 9110 (status codes), RFC
6585 (429).
"""

from __future__ import annotations

import re
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, Final, Literal

from fhirgallop.codes import fhirjson
from fhirgallop.delivery.client import Answer, ClientError

Meaning = Literal["delivered", "later", "failed", "denied"]

_LATER: Final[Mapping[int, bool]] = {408: True, 409: True, 412: True, 425: True, 429: False, 503: False}
_WELL: Final = frozenset({409, 412})
_MOST_KEPT: Final = 65_536
_MOST_ISSUES: Final = 5
_LONGEST: Final = 500
_CODE: Final = re.compile(r"[a-z-]{1,40}")
# element names and indices below a type that we send; nothing that could carry a value of the record
_NAME: Final = r"\.[a-z][A-Za-z]{0,39}(?:\[[0-9]{1,4}\])?"
_PLACE: Final = re.compile(rf"(?:Bundle|Observation|DiagnosticReport|Provenance)(?:{_NAME}){{0,11}}")


@dataclass(frozen=True, slots=True)
class Verdict:
    """What one try came to.

    Attributes:
        meaning: `delivered`; `later` again; `failed`: the same would be refused again; `denied`: nothing can
            be delivered before somebody sees to the rights or the address.
        kind: short name of the reason, for counting.
        reason: why it is not delivered, without patient data.
        well: whether the destination answered as one that does its work.
        ends: whether too many tries of this kind make it a matter for a person.
        retry_after: header of that name; empty without.
        outcome: what is kept of the answer, as JSON: status, and of each entry status, location and etag.
        status: of the answer to the transaction; 0 without one.
        request: value of its X-Request-Id.
    """

    meaning: Meaning
    kind: str
    reason: str = ""
    well: bool = True
    ends: bool = True
    retry_after: str = ""
    outcome: bytes | None = None
    status: int = 0
    request: str = ""


def no_answer(error: ClientError) -> Verdict:
    """The verdict where there was no answer; the destination may still have done its work."""
    if error.kind in ("not-allowed", "redirected"):
        cure = "; one in a private network needs the setting private_network" * (error.kind == "not-allowed")
        return Verdict("denied", error.kind, f"{error}{cure}", well=False, ends=False)
    return Verdict("later", error.kind, str(error), well=False, ends=error.kind not in ("refused", "tls"))


def judge(answer: Answer, entries: int) -> Verdict:
    """The verdict on an answer to a transaction with so many entries."""
    if answer.status == 200:
        return _done(answer, entries)
    status = answer.status
    outcome, said = _refusal(answer)
    reason = f"answered {status}{said}"
    retry_after = answer.headers.get("retry-after", "")
    if status in (401, 403):
        # 403 may be about this one patient; 401 is about us
        return Verdict(
            "denied", str(status), reason, well=False, ends=status == 403,
            retry_after=retry_after, outcome=outcome,
        )  # fmt: skip
    if status in _LATER or status >= 500 or status < 300:
        return Verdict(
            "later", str(status), reason, well=status in _WELL, ends=_LATER.get(status, True),
            retry_after=retry_after, outcome=outcome,
        )  # fmt: skip
    return Verdict("failed", str(status), reason, outcome=outcome)


def _done(answer: Answer, entries: int) -> Verdict:
    """A 200 counts only with its whole transaction-response: anything may stand between us and the server."""
    body, _ = fhirjson.read(answer.body)
    if not isinstance(body, dict) or body.get("resourceType") != "Bundle":
        reason = "answered 200 without a Bundle; something else than a FHIR server may have answered"
        return Verdict("later", "no-bundle", reason, well=False)
    told = body.get("entry")
    if body.get("type") != "transaction-response" or not isinstance(told, list) or len(told) != entries:
        reason = f"answered 200 with a Bundle that is no transaction-response to {entries} entries"
        return Verdict("later", "no-response", reason)
    results = [_result(entry) for entry in told]
    outcome = fhirjson.write({"status": 200, "entry": results})
    if bad := [n for n, result in enumerate(results) if not result["status"].startswith("2")]:
        status = results[bad[0]]["status"][:3]
        reason = f"answered 200, but entry[{bad[0]}] with {status if status.isdigit() else 'no status'}"
        return Verdict("later", "entry", reason, outcome=outcome)
    return Verdict("delivered", "delivered", outcome=outcome)


def _result(entry: Any) -> dict[str, str]:
    """Status, location and etag of one entry; what could not be shown to a person is left out."""
    response = entry.get("response") if isinstance(entry, dict) else None
    said = response if isinstance(response, dict) else {}
    found = {name: said[name] for name in ("status", "location", "etag") if _is_plain(said.get(name))}
    return {"status": "", **found}


def _is_plain(said: Any) -> bool:
    return isinstance(said, str) and said.isprintable() and len(said) <= _LONGEST


def _refusal(answer: Answer) -> tuple[bytes, str]:
    """What is kept of a refusal, and its issues in words that cannot hold a patient's data."""
    body = fhirjson.read(answer.body)[0] if len(answer.body) <= _MOST_KEPT else None
    if not isinstance(body, dict) or body.get("resourceType") != "OperationOutcome":
        return fhirjson.write({"status": answer.status}), ""
    issues = body.get("issue")
    found = issues if isinstance(issues, list) else []
    told = list(dict.fromkeys(filter(None, map(_issue, found))))[:_MOST_ISSUES]
    outcome = fhirjson.write({"status": answer.status, "outcome": body})
    return outcome, f": {', '.join(told)}" if told else ""


def _issue(issue: Any) -> str:
    if not isinstance(issue, dict) or issue.get("severity") not in ("fatal", "error"):
        return ""
    code = issue.get("code")
    places = issue.get("expression")
    place = places[0] if isinstance(places, list) and places else ""
    named = code if isinstance(code, str) and _CODE.fullmatch(code) else "an issue"
    known = isinstance(place, str) and _PLACE.fullmatch(place)
    return f"{named} at {place}" if known else named
