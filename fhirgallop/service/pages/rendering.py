"""Pages for people: templates, and the answer around them. Everything a page shows is escaped."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any, Final

from fastapi import Request
from jinja2 import Environment, PackageLoader, StrictUndefined
from starlette.responses import HTMLResponse

from fhirgallop.outcome import Issue
from fhirgallop.service.auth.caller import STRANGER, Caller
from fhirgallop.service.auth.people import FORM_FIELD
from fhirgallop.version import VERSION

# a page may load what lies here beside it, and nothing from anywhere else
POLICY: Final = (
    "default-src 'none'; style-src 'self'; script-src 'self'; img-src 'self' data:; connect-src 'self'; "
    "form-action 'self'; frame-ancestors 'none'; base-uri 'none'"
)
# address, name, and the roles it is for
_WAYS: Final = (
    ("/desk", "Maps", frozenset({"informatician"})),
    ("/exams", "Examinations", frozenset({"clinician", "informatician"})),
    ("/deliveries", "Deliveries", frozenset({"operator"})),
    ("/knowledge", "Knowledge", frozenset({"operator", "informatician", "clinician"})),
)

_templates: Final = Environment(
    loader=PackageLoader("fhirgallop.service.pages"),
    autoescape=True,
    undefined=StrictUndefined,
    trim_blocks=True,
    lstrip_blocks=True,
)


def moment(written: str) -> str:
    """A FHIR dateTime as a person reads it: day, time of day and offset, as they were written."""
    day, _, clock = written.partition("T")
    zone = "UTC" if clock.endswith("Z") else clock[-6:] if "+" in clock or "-" in clock else ""
    return " ".join(filter(None, (day, clock[:5], zone)))


_templates.filters["moment"] = moment


def page(request: Request, template: str, *, status: int = 200, **values: Any) -> HTMLResponse:
    """A page for whoever asks.

    Args:
        request: the request, let in already.
        template: name of a file in `templates/`.
        status: HTTP status.
        values: what the template needs; one that is missing is an error.
    """
    # with no referrer at all a browser would not say either that a form comes from here
    headers = {"Content-Security-Policy": POLICY, "Referrer-Policy": "same-origin"}
    return HTMLResponse(render(request, template, **values), status, headers)


def fault_page(
    request: Request, status: int, issues: Sequence[Issue], headers: Mapping[str, str] | None = None
) -> HTMLResponse:
    """What went wrong, and what to do, for a person; with the status and headers of the refusal."""
    if not hasattr(request.state, "caller"):
        request.state.caller = STRANGER
    answer = page(request, "fault.html", status=status, code=status, issues=issues)
    answer.headers.update(headers or {})
    return answer


def render(request: Request, template: str, **values: Any) -> str:
    """The text of a page, or of a part of one."""
    caller: Caller = request.state.caller
    token = getattr(request.state, "form_token", "")
    ways = [
        (address, name) for address, name, roles in _WAYS if caller.kind == "nobody" or roles & caller.roles
    ]
    return _templates.get_template(template).render(
        caller=caller,
        form_field=FORM_FIELD,
        form_token=token,
        here=request.url.path,
        ways=ways,
        version=VERSION,
        **values,
    )
