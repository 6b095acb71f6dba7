"""`fhirgallop serve`: the service."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from fhirgallop.cli.shared import Exit, complain


def command(
    host: Annotated[str | None, typer.Option(help="Address to listen on.")] = None,
    port: Annotated[int | None, typer.Option(help="Port to listen on.")] = None,
    maps: Annotated[Path | None, typer.Option(help="Folder with template maps.")] = None,
    database: Annotated[str | None, typer.Option(help="Database address.")] = None,
) -> None:
    """Start the service. Settings come from FHIRGALLOP_... variables; options go before them.

    Exit codes: 0 ended when asked to; 3 a setting or a map has faults; 4 the address could not be used.
    """
    from fhirgallop import settings  # noqa: PLC0415 - heavy together; --help stays quick
    from fhirgallop.service.app import create_app  # noqa: PLC0415
    from fhirgallop.service.logging import start_logging  # noqa: PLC0415
    from fhirgallop.service.server import serve  # noqa: PLC0415

    chosen = settings.load(host=host, port=port, maps=maps, database=database)
    start_logging(chosen.log_form, chosen.log_level)
    app = create_app(chosen)
    try:
        serve(app, chosen)
    except KeyboardInterrupt:
        return
    except SystemExit as ended:  # what the server says to an address that is taken, and what SIGTERM ends in
        if ended.code != Exit.ENDED:
            complain(f"port {chosen.port} of {chosen.host} cannot be used; name another with --port")
            raise typer.Exit(Exit.UNUSABLE) from None
