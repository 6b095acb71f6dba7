"""Puts the FHIR addresses into an application."""

from __future__ import annotations

import uuid
from collections.abc import Callable, Mapping
from datetime import datetime

from fastapi import FastAPI
from sqlalchemy import Engine

from fhirgallop.mapping.template_map import TemplateMap
from fhirgallop.service.fhir.published import Library
from fhirgallop.service.fhir.writing import Desk
from fhirgallop.service.routes import fhir, fhir_definitions, fhir_extraction
from fhirgallop.storage.maps import MapStore
from fhirgallop.storage.resource_search import Resources


def new_id() -> str:
    """An id for a resource that carries no identity of its own; it has no dashes, as those ids have."""
    return uuid.uuid4().hex


def open_fhir(
    app: FastAPI, engine: Engine, shelf: Mapping[str, TemplateMap], clock: Callable[[], datetime]
) -> None:
    """Adds the routes, and what they share; after the routes of operations, whose names look like types."""
    app.state.fhir = Desk(Resources(engine), clock, new_id)
    app.state.library = Library(shelf, MapStore(engine))
    app.include_router(fhir_definitions.router)
    app.include_router(fhir_extraction.router)
    app.include_router(fhir.router)
