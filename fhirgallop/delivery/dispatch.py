"""Puts delivery together from the settings: who sends, to whom, and how failures are borne."""

from __future__ import annotations

import os
import random
import socket
import uuid
from collections.abc import Callable
from dataclasses import dataclass
from datetime import datetime

from sqlalchemy import Engine

from fhirgallop.delivery.auth import Access, Identity
from fhirgallop.delivery.client import Client
from fhirgallop.delivery.destination import Destination, client_for, destination
from fhirgallop.delivery.keys import SigningKey, read_keys
from fhirgallop.delivery.patience import Chance, Patience
from fhirgallop.delivery.post import Post
from fhirgallop.delivery.worker import Trail, Way, Workers, no_trail
from fhirgallop.settings import Settings
from fhirgallop.storage.outbox import Outbox


@dataclass(frozen=True, slots=True)
class Dispatch:
    """Delivery as the settings want it.

    Attributes:
        workers: threads of this process, not started yet; there may be none.
        client: closes its connections when the workers have stopped.
    """

    workers: Workers
    client: Client

    def stop(self, within: float) -> bool:
        """Stops the workers; False when some were not done in so many seconds."""
        done = self.workers.stop(within)
        if done:
            self.client.close()
        return done


def open_dispatch(
    settings: Settings,
    engine: Engine,
    clock: Callable[[], datetime],
    *,
    threads: int,
    trail: Trail = no_trail,
    chance: Chance = random.random,
    new_id: Callable[[], str] = lambda: str(uuid.uuid4()),
) -> Dispatch | None:
    """Delivery with so many threads; None when the settings name nowhere to deliver to.

    Raises:
        SettingsError: an address, the keys or the certificates cannot be used.
    """
    place = destination(settings)
    if place is None:
        return None
    keys = read_keys(settings.deliver_key) if settings.deliver_key else ()
    client = client_for(place, settings, threads)
    access = _access(settings, client, place, keys, clock, new_id) if keys else None
    way = Way(
        Outbox(engine),
        Post(client, place.base, access, new_id),
        patience(settings),
        round(settings.delivery_timeout * 1000),
        clock,
        chance,
        trail,
    )
    host = f"{socket.gethostname()[:24]}-{os.getpid()}"
    workers = Workers(way, [f"{host}-{n}-{new_id()[:8]}" for n in range(threads)])
    return Dispatch(workers, client)


def patience(settings: Settings) -> Patience:
    """How failures are borne, as the settings say."""
    return Patience(
        first=round(settings.delivery_wait * 1000),
        most=round(settings.delivery_wait_most * 1000),
        tries=settings.delivery_tries,
        after=settings.delivery_rest_after,
        rest=round(settings.delivery_rest * 1000),
    )


def _access(
    settings: Settings,
    client: Client,
    place: Destination,
    keys: tuple[SigningKey, ...],
    clock: Callable[[], datetime],
    new_id: Callable[[], str],
) -> Access:
    identity = Identity(settings.deliver_client, keys[0], settings.deliver_scope)
    return Access(client, place, identity, clock=clock, new_id=new_id)
