"""`fhirgallop serve`: the service, on this machine."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from fhirgallop.cli.shared import Exit, complain


def command(
    host: Annotated[str | None, typer.Option(help="Address to listen on (this machine only).")] = None,
    port: Annotated[int | None, typer.Option(help="Port to listen on.")] = None,
    maps: Annotated[Path | None, typer.Option(help="Folder with template maps.")] = None,
    database: Annotated[str | None, typer.Option(help="Database address.")] = None,
) -> None:
    """Start the service. Settings come from FHIRGALLOP_... variables; options go before them.

    Exit codes: 0 ended when asked to; 3 a setting or a map has faults; 4 the address could not be used.
    """
    import logging  # noqa: PLC0415 - heavy together; --help stays quick

    import uvicorn  # noqa: PLC0415

    from fhirgallop import settings  # noqa: PLC0415
    from fhirgallop.service.app import create_app  # noqa: PLC0415

    chosen = settings.load(host=host, port=port, maps=maps, database=database)
    logging.basicConfig(level=logging.INFO, format="%(asctime)s %(levelname)s %(name)s %(message)s")
    app = create_app(chosen)
    try:
        uvicorn.run(
            app, host=chosen.host, port=chosen.port, access_log=False, server_header=False, log_config=None
        )
    except KeyboardInterrupt:
        return
    except SystemExit as ended:  # what uvicorn says to an address that is taken, and what SIGTERM ends in
        if ended.code != Exit.ENDED:
            complain(f"port {chosen.port} of {chosen.host} cannot be used; name another with --port")
            raise typer.Exit(Exit.UNUSABLE) from None
