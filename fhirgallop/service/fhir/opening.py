"""Puts the FHIR addresses into an application."""

from __future__ import annotations

import uuid
from collections.abc import Callable
from datetime import datetime

from fastapi import FastAPI
from sqlalchemy import Engine

from fhirgallop.service.fhir.writing import Desk
from fhirgallop.service.routes import fhir
from fhirgallop.storage.resource_search import Resources


def new_id() -> str:
    """An id for a resource that carries no identity of its own; it has no dashes, as those ids have."""
    return uuid.uuid4().hex


def open_fhir(app: FastAPI, engine: Engine, clock: Callable[[], datetime]) -> None:
    """Adds the routes, and what they share; after the routes of operations, whose names look like types."""
    app.state.fhir = Desk(Resources(engine), clock, new_id)
    app.include_router(fhir.router)
