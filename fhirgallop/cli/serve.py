"""`fhirgallop serve`: the service, on this machine."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer


def command(
    host: Annotated[str | None, typer.Option(help="Address to listen on (this machine only).")] = None,
    port: Annotated[int | None, typer.Option(help="Port to listen on.")] = None,
    maps: Annotated[Path | None, typer.Option(help="Folder with template maps.")] = None,
    database: Annotated[str | None, typer.Option(help="Database address.")] = None,
) -> None:
    """Start the service. Settings come from FHIRGALLOP_... variables; options go before them."""
    import logging  # noqa: PLC0415 - heavy together; --help stays quick

    import uvicorn  # noqa: PLC0415

    from fhirgallop import settings  # noqa: PLC0415
    from fhirgallop.service.app import create_app  # noqa: PLC0415

    chosen = settings.load(host=host, port=port, maps=maps, database=database)
    logging.basicConfig(level=logging.INFO, format="%(asctime)s %(levelname)s %(name)s %(message)s")
    uvicorn.run(
        create_app(chosen), host=chosen.host, port=chosen.port, access_log=False, server_header=False,
        log_config=None,
    )  # fmt: skip
