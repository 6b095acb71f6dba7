"""`fhirgallop hand-over`: tells a receiver that a back-fill can be fetched."""

from __future__ import annotations

from enum import StrEnum
from pathlib import Path
from typing import Annotated, Final

import typer

from fhirgallop.cli.shared import complain

_SECONDS: Final = 30.0
_MOST_BYTES: Final = 1024 * 1024


class StatusName(StrEnum):
    """How far a submission is, for the command line."""

    IN_PROGRESS = "in-progress"
    COMPLETED = "completed"
    STOPPED = "stopped"


def command(  # noqa: PLR0913, PLR0917 - one argument an option
    receiver: Annotated[str, typer.Argument(help="FHIR base address of the receiver.")],
    submitter: Annotated[str, typer.Option(help="Our identifier there, as SYSTEM|VALUE.")],
    number: Annotated[str, typer.Option(help="Number of the submission, ours.")],
    manifest: Annotated[str, typer.Option(help="Address under which manifest.json is served.")] = "",
    base: Annotated[str, typer.Option(help="FHIR base address that references are relative to.")] = "",
    replaces: Annotated[str, typer.Option(help="Address of the manifest that this one stands in for.")] = "",
    status: Annotated[StatusName, typer.Option(help="How far the submission is.")] = StatusName.COMPLETED,
    token: Annotated[Path | None, typer.Option("--token-file", help="File with an access token.")] = None,
    private: Annotated[bool, typer.Option(help="Also hosts in private networks, and plain http.")] = False,
) -> None:
    """Tell a receiver, by $bulk-submit, where the manifest of a back-fill lies; it fetches the files itself.

    Exit codes: 0 it was taken; 2 the call was wrong; 4 it was not taken, or there was no answer.
    """
    from fhirgallop.bulk.handover import Submission, hand_over  # noqa: PLC0415 - heavy; --help stays quick
    from fhirgallop.delivery.addresses import origin_of  # noqa: PLC0415
    from fhirgallop.delivery.client import Client  # noqa: PLC0415

    system, _, value = submitter.rpartition("|")
    submission = Submission((system, value), number, status.value, manifest, base, replaces)
    secret = token.read_text(encoding="ascii").strip() if token else ""
    origin = origin_of(receiver) or receiver
    client = Client([origin], timeout=_SECONDS, most_bytes=_MOST_BYTES, private=private)
    try:
        hand_over(client, receiver, submission, secret)
    finally:
        client.close()
    complain(f"submission {number}: taken ({status.value})")
