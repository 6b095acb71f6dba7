"""`fhirgallop demo`: an invented examination on its whole way: sent, coded, judged, delivered, in cards."""

from __future__ import annotations

import tempfile
import threading
import uuid
from contextlib import closing
from datetime import UTC, datetime
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any, Final

import typer

from fhirgallop.cli.shared import Exit, complain

if TYPE_CHECKING:
    import httpx
    from rich.console import Console

    from fhirgallop.cli.demo_site import RecordSystem

MAP: Final = "fernwood-heart-form"
CHART: Final = "atrial-fibrillation-today.chart.json"
# half an hour after the example examination
REVIEWED: Final = datetime(2026, 3, 14, 9, 0, tzinfo=UTC)
_WIDTH: Final = 132


def command(
    once: Annotated[bool, typer.Option("--once", help="End after the demonstration.")] = False,
) -> None:
    """Start the service and a small record system here, send an examination, show what becomes of it.

    Exit codes: 0 shown; 1 the service refused something, or nothing was delivered; 4 it did not start.
    """
    import httpx  # noqa: PLC0415 - heavy together; --help stays quick
    from rich.console import Console  # noqa: PLC0415

    from fhirgallop import assets  # noqa: PLC0415
    from fhirgallop.cli.demo_site import PATIENCE, RecordSystem, running  # noqa: PLC0415
    from fhirgallop.codes import fhirjson  # noqa: PLC0415

    console = Console(highlight=False)
    if not console.is_terminal:
        console = Console(highlight=False, width=_WIDTH)
    record = assets.path("examples", "ehr", "fernwood-exam.json")
    chart, _ = fhirjson.read(assets.path("examples", "clinician", CHART).read_bytes())
    with (
        closing(RecordSystem(chart)) as record_system,
        tempfile.TemporaryDirectory(prefix="fhirgallop-demo-") as folder,
        running(Path(folder), record_system, REVIEWED) as base,
        httpx.Client(base_url=base, timeout=PATIENCE, trust_env=False) as client,
    ):
        console.print(f"fhirgallop is listening at {base} (this machine only); its addresses: {base}/docs")
        _walk(console, client, record, record_system)
        if once:
            return
        console.print("\nSend it yourself:", style="bold")
        console.print(
            f"curl -H 'Content-Type: application/json' --data-binary @{record} '{base}/exams?map={MAP}'",
            soft_wrap=True,
        )
        console.print("Ctrl-C ends both; what they stored goes with them.")
        try:
            threading.Event().wait()
        except KeyboardInterrupt:
            console.print("ended")


def _walk(console: Console, client: httpx.Client, record: Path, record_system: RecordSystem) -> None:
    from fhirgallop.cli.demo_show import show_cards, show_delivery, show_exam  # noqa: PLC0415
    from fhirgallop.cli.demo_site import PATIENCE  # noqa: PLC0415

    console.print("\n1. The clinic sends an examination in the words of its own form.", style="bold")
    answer = _told(client.post("/exams", params={"map": MAP}, content=record.read_bytes(), headers=_json()))
    show_exam(console, answer)

    console.print("\n2. The Bundle is held against the FHIR base specification.", style="bold")
    outcome = _told(client.post("/fhir/r4/$validate", json=answer["bundle"], headers=_json("fhir+json")))
    for issue in outcome["issue"]:
        console.print(f"{issue['severity']}: {issue['details']['text']}", markup=False)

    console.print("\n3. It is delivered to the record system, once, whatever happens.", style="bold")
    entries = record_system.arrived(PATIENCE)
    if not entries:
        complain("nothing arrived at the record system within half a minute")
        raise typer.Exit(Exit.REFUSED)
    show_delivery(console, entries)

    console.print(
        "\n4. The chart is opened; it has atrial fibrillation on today's ECG. CDS Hooks answers:",
        style="bold",
    )
    (service,) = [
        one for one in _told(client.get("/cds-services"))["services"] if one["hook"] == "patient-view"
    ]
    call = {
        "hook": "patient-view",
        "hookInstance": str(uuid.uuid4()),
        "context": {"userId": "Practitioner/s-31", "patientId": "p-20417", "encounterId": "v-8812"},
        "prefetch": record_system.prefetch(),
    }
    cards = _told(client.post(f"/cds-services/{service['id']}", json=call, headers=_json()))["cards"]
    show_cards(console, cards)


def _json(kind: str = "json") -> dict[str, str]:
    return {"Content-Type": f"application/{kind}"}


def _told(answer: httpx.Response) -> dict[str, Any]:
    """The answer's body."""
    if answer.status_code != 200:
        complain(f"the service answered {answer.status_code}: {answer.text[:2000]}")
        raise typer.Exit(Exit.REFUSED)
    body: dict[str, Any] = answer.json()
    return body
