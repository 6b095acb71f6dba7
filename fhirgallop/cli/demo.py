"""`fhirgallop demo`: the real service on a free port, and an invented examination sent to it."""

from __future__ import annotations

import tempfile
import threading
import time
from collections.abc import Iterator
from contextlib import contextmanager
from datetime import UTC, datetime
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any, Final

import typer

from fhirgallop.cli.shared import Exit, complain

if TYPE_CHECKING:
    import uvicorn
    from rich.console import Console

MAP: Final = "fernwood-heart-form"
CHART: Final = "atrial-fibrillation-today.chart.json"
# half an hour after the example examination
REVIEWED: Final = datetime(2026, 3, 14, 9, 0, tzinfo=UTC)
_LOCAL: Final = "https://fernwood.example/heart-form"
_PATIENCE: Final = 30.0
_WIDTH: Final = 132


def command(
    once: Annotated[bool, typer.Option("--once", help="End after the demonstration.")] = False,
) -> None:
    """Start the service here with an embedded database, send it an examination, show the answer.

    Exit codes: 0 shown; 1 the service refused the examination; 4 the service did not start.
    """
    import httpx  # noqa: PLC0415 - heavy together; --help stays quick
    from rich.console import Console  # noqa: PLC0415

    from fhirgallop import assets  # noqa: PLC0415

    console = Console(highlight=False)
    if not console.is_terminal:
        console = Console(highlight=False, width=_WIDTH)
    record = assets.path("examples", "ehr", "fernwood-exam.json")
    with tempfile.TemporaryDirectory(prefix="fhirgallop-demo-") as folder, _running(Path(folder)) as base:
        console.print(f"fhirgallop is listening at {base} (this machine only); its addresses: {base}/docs")
        answer = httpx.post(
            f"{base}/exams",
            params={"map": MAP},
            content=record.read_bytes(),
            headers={"Content-Type": "application/json"},
            timeout=_PATIENCE,
        )
        if answer.status_code != httpx.codes.OK:
            complain(f"the service answered {answer.status_code}: {answer.text[:2000]}")
            raise typer.Exit(Exit.REFUSED)
        _show(console, answer.json())
        _review(console)
        if once:
            return
        console.print("\nSend it yourself:", style="bold")
        console.print(
            f"curl -H 'Content-Type: application/json' --data-binary @{record} '{base}/exams?map={MAP}'",
            soft_wrap=True,
        )
        console.print("Ctrl-C ends the service; what it stored goes with it.")
        try:
            threading.Event().wait()
        except KeyboardInterrupt:
            console.print("ended")


def _review(console: Console) -> None:
    """The same examination held against an example chart."""
    from fhirgallop import api, assets  # noqa: PLC0415
    from fhirgallop.cards.memory import Memory  # noqa: PLC0415
    from fhirgallop.cards.policy import decide  # noqa: PLC0415
    from fhirgallop.cards.sheet import sheet  # noqa: PLC0415
    from fhirgallop.chart.read import read_chart  # noqa: PLC0415
    from fhirgallop.codes import fhirjson  # noqa: PLC0415

    record = assets.path("examples", "ehr", "fernwood-exam.json").read_bytes()
    exam = api.process(record, assets.path("examples", "informatician", f"{MAP}.yaml")).exam
    chart, _ = fhirjson.read(assets.path("examples", "clinician", CHART).read_bytes())
    if exam is None:
        return
    read = read_chart(chart, exam, REVIEWED)
    found = api.review(exam, read.context)
    decision = decide(found, Memory(exam.patient.value), encounter=exam.identifier, now=REVIEWED)
    console.print(
        "\nThe same examination against a chart with atrial fibrillation on today's ECG:", style="bold"
    )
    console.print(sheet(exam, found, decision), markup=False, soft_wrap=True)


@contextmanager
def _running(folder: Path) -> Iterator[str]:
    """The service on a free port, with its database in `folder`; gives its address."""
    import uvicorn  # noqa: PLC0415

    from fhirgallop import assets, settings  # noqa: PLC0415
    from fhirgallop.service.app import create_app  # noqa: PLC0415

    chosen = settings.load(
        host="127.0.0.1", port=0, maps=assets.path("examples", "informatician"),
        database=f"sqlite:///{folder / 'demo.sqlite3'}",
    )  # fmt: skip
    config = uvicorn.Config(
        create_app(chosen),
        host=chosen.host,
        port=chosen.port,
        access_log=False,
        log_level="warning",
        server_header=False,
    )
    server = uvicorn.Server(config)
    thread = threading.Thread(target=server.run, daemon=True)
    thread.start()
    try:
        yield f"http://{chosen.host}:{_port(server)}"
    finally:
        server.should_exit = True
        thread.join(_PATIENCE)


def _port(server: uvicorn.Server) -> int:
    deadline = time.monotonic() + _PATIENCE
    while not server.started:
        if time.monotonic() > deadline:
            complain("the service did not start within half a minute")
            raise typer.Exit(Exit.UNUSABLE)
        time.sleep(0.02)
    port: int = server.servers[0].sockets[0].getsockname()[1]
    return port


def _show(console: Console, answer: dict[str, Any]) -> None:
    from rich.table import Table  # noqa: PLC0415

    table = Table(
        "field", "finding", "presence", "code", "value", title="One examination, coded", title_justify="left"
    )
    resources = [entry["resource"] for entry in answer["bundle"]["entry"]]
    for resource in resources:
        if resource["resourceType"] == "Observation" and "hasMember" not in resource:
            for part in _parts(resource):
                table.add_row(*part)
    console.print(table)
    console.print(f"{len(resources)} resources in one transaction Bundle.")
    for issue in answer["outcome"]["issue"]:
        console.print(f"{issue['severity']}: {issue['details']['text']}", markup=False)
    for name in answer["unread"]:
        console.print(f"not read: {name}", markup=False)


def _parts(resource: dict[str, Any]) -> Iterator[tuple[str, str, str, str, str]]:
    """Rows of one Observation: itself, or the parts of a panel."""
    field = next((c["code"] for c in resource["code"]["coding"] if c["system"] == _LOCAL), "")
    parts = resource.get("component", ())
    if not any(name.startswith("value") or name == "dataAbsentReason" for name in resource):
        yield field, resource["code"]["text"], "", _code(resource), ""
        for part in parts:
            yield "", f"  {part['code']['text']}", *_said(part)
        return
    described = "; ".join(f"{part['code']['text']}: {_value(part)}" for part in parts)
    presence, code, value = _said(resource)
    yield field, resource["code"]["text"], presence, code, "; ".join(filter(None, (value, described)))


def _said(part: dict[str, Any]) -> tuple[str, str, str]:
    concept = part.get("valueCodeableConcept", part.get("dataAbsentReason", {}))
    own = [c["code"] for c in concept.get("coding", ()) if c.get("code", "").startswith("presence:")]
    presence = own[0].removeprefix("presence:") if own else ""
    return presence, _code(part), "" if presence else _value(part)


def _code(part: dict[str, Any]) -> str:
    coding = part["code"]["coding"][0]
    names = {"http://snomed.info/sct": "SNOMED CT", "http://loinc.org": "LOINC",
             "http://human-phenotype-ontology.org": "HPO"}  # fmt: skip
    return f"{names.get(coding['system'], 'own')} {coding['code']}"


def _value(part: dict[str, Any]) -> str:
    if "valueQuantity" in part:
        quantity = part["valueQuantity"]
        return f"{quantity.get('comparator', '')}{quantity['value']} {quantity['unit']}"
    if "valueRange" in part:
        low, high = part["valueRange"]["low"], part["valueRange"]["high"]
        return f"{low['value']} to {high['value']} {high['unit']}"
    concept = part.get("valueCodeableConcept") or part.get("dataAbsentReason") or {}
    return str(concept.get("text", part.get("valueString", "")))
