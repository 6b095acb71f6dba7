"""What watches over the service, put together once: audit, limits, metrics, readiness, and the guard."""

from __future__ import annotations

import time
import uuid
from collections.abc import Callable
from datetime import datetime

from fastapi import FastAPI
from sqlalchemy import Engine

from fhirgallop.service.audit import Auditor
from fhirgallop.service.guard import Guard
from fhirgallop.service.limits import Limits
from fhirgallop.service.metrics import Metrics
from fhirgallop.service.readiness import Readiness
from fhirgallop.settings import Settings
from fhirgallop.storage.audit import AuditTrail


def new_id() -> str:
    """A random UUID."""
    return str(uuid.uuid4())


def watch_over(app: FastAPI, engine: Engine, settings: Settings, clock: Callable[[], datetime]) -> None:
    """Puts the guard around an application, and into its state what handlers and guard share."""
    app.state.audit = Auditor(AuditTrail(engine), clock, new_id)
    app.state.limits = Limits(
        rate=settings.rate,
        at_once=settings.at_once,
        clock=time.monotonic,
        coded_at_once=settings.coded_at_once,
        cards_at_once=settings.cards_at_once,
    )
    app.state.readiness = Readiness(engine, settings, clock, app.state.audit)
    app.state.metrics = Metrics()
    app.state.metrics.watch(app.state.readiness.readings)
    app.add_middleware(Guard, new_id=new_id)
