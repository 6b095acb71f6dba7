"""Reads from the record system what a CDS Hooks call left out: from listed servers, with one deadline.

Source: CDS Hooks 2.0.1, "Prefetch Template", "FHIR Resource Access" and "Pagination"; SMART App Launch 2.2
and 1.0, "Scopes". What was not read in time, or may not be read, stays unknown and is said to be; nothing is
guessed. The client's token goes to its own server and nowhere else, and is held no longer than the call.
"""

from __future__ import annotations

import logging
import time
from collections.abc import Mapping, Sequence
from concurrent.futures import ThreadPoolExecutor, wait
from dataclasses import dataclass, field, replace
from typing import Any, Final
from urllib.parse import quote, urljoin

from fhirgallop.cards.discovery import Service, Wanted
from fhirgallop.cards.hooks import Authorisation, Call
from fhirgallop.cards.prefetch import Lack, as_asked, joined, next_page, query
from fhirgallop.codes import fhirjson
from fhirgallop.delivery.addresses import base_of, is_below, origin_of
from fhirgallop.delivery.client import Client, ClientError, Resolve, trust
from fhirgallop.errors import SettingsError
from fhirgallop.service.auth.scopes import Scope, read_scope
from fhirgallop.settings import Settings

log: Final = logging.getLogger("fhirgallop.service")

EVERYONE: Final = "*"
MAX_PAGES: Final = 10
_MAX_SCOPES: Final = 200
# requests at once, of all calls together; one that finds no thread in time is late
_AT_ONCE: Final = 32
_FORBIDDEN: Final = frozenset({401, 403})


class Charts:
    """The FHIR servers that may be read, by CDS client.

    Args:
        listed: bases by the name (`iss`) of a client; those of `*` are for every client.

    Raises:
        SettingsError: a base is no plain address.
    """

    def __init__(self, listed: Mapping[str, Sequence[str]]) -> None:
        self._bases = {client: frozenset(map(_base, bases)) for client, bases in listed.items()}
        self.origins: Final = frozenset(
            origin for bases in self._bases.values() for base in bases if (origin := origin_of(base))
        )

    def base(self, server: str, client: str) -> str | None:
        """The base of a server in its one spelling; None where this client may not have it read."""
        base = base_of(server)
        allowed = self._bases.get(EVERYONE, frozenset()) | self._bases.get(client, frozenset())
        return base if base in allowed else None


def _base(text: str) -> str:
    base = base_of(text)
    if base is None:
        raise SettingsError(f"FHIRGALLOP_CDS_CHARTS: {text!r} is no FHIR base; write https://host/path")
    return base


@dataclass(slots=True)
class _Reading:
    """One key on its way. A thread adds pages; those that are there at the deadline are used."""

    wanted: Wanted
    url: str
    pages: list[dict[str, Any]]
    lack: Lack | None = Lack.LATE
    read: int = field(default=0)

    def found(self) -> dict[str, Any]:
        """What was read, once there is a page."""
        return self.pages[0] if self.wanted.is_read else joined(list(self.pages))


@dataclass(frozen=True, slots=True)
class _Way:
    """How the server of one call is asked, and until when."""

    base: str
    patient: str
    headers: Mapping[str, str] = field(repr=False)
    until: float


class Fetcher:
    """Completes calls.

    Args:
        charts: which servers may be read.
        client: speaks to their origins.
        seconds: time for everything that one call needs.
        most_bytes: most that is read for one key, all pages together.
    """

    def __init__(self, charts: Charts, client: Client, *, seconds: float, most_bytes: int) -> None:
        self._charts = charts
        self._client = client
        self._seconds = seconds
        self._most = most_bytes
        self._threads = ThreadPoolExecutor(_AT_ONCE, thread_name_prefix="fetch")

    def complete(self, call: Call, service: Service, client: str) -> Call:
        """The call with what could be read of what it lacks, and without its token.

        Args:
            call: as it was sent.
            service: what it calls.
            client: name of the CDS client; empty where there is no authorisation.
        """
        kept = replace(call, authorisation=None)
        base = self._charts.base(call.server, client)
        if base is None or not (call.prefetch.absent or call.prefetch.paged):
            return kept
        lent = call.authorisation
        way = _way(call, base, self._seconds)
        readings = _readings(call, service, base)
        permitted = {key: permission(lent, one.wanted, call.patient) for key, one in readings.items()}
        lacks = {key: lack for key, lack in permitted.items() if lack and key in call.prefetch.absent}
        going = {key: one for key, one in readings.items() if permitted[key] is not Lack.FORBIDDEN}
        self._read(going, way)
        found: dict[str, Any] = {}
        for key, reading in going.items():
            if reading.pages:
                found[key] = reading.found()
            elif reading.lack:
                lacks[key] = reading.lack
        _log(service, going, lacks)
        return replace(kept, prefetch=call.prefetch.knowing(found, lacks))

    def patient_id(self, base: str, system: str, value: str) -> str | None:
        """The FHIR id of the one Patient with this identifier; None where there is none, or not just one.

        Args:
            base: of a listed server, in its one spelling.
            system: of the identifier; may be empty.
            value: of the identifier.
        """
        asked = quote(f"{system}|{value}" if system else value, safe="")
        headers = {"Accept": "application/fhir+json"}
        try:
            answer = self._client.send(
                "GET", f"{base}/Patient?identifier={asked}&_count=2", headers=headers, timeout=self._seconds
            )
        except ClientError:
            return None
        bundle, _ = fhirjson.read(answer.body) if answer.status == 200 else (None, [])
        entries = bundle.get("entry") if isinstance(bundle, dict) else None
        resources: list[Any] = [e.get("resource") for e in entries or () if isinstance(e, dict)]
        ids: set[str] = {one["id"] for one in resources if _is_named(one, system, value)}
        return ids.pop() if len(ids) == 1 else None

    def _read(self, readings: Mapping[str, _Reading], way: _Way) -> None:
        started = [self._threads.submit(self._pages, reading, way) for reading in readings.values()]
        done, late = wait(started, timeout=max(0.0, way.until - time.monotonic()))
        for one in late:
            one.cancel()
        for one in done:
            one.result()  # a mistake of ours is no gap in the chart

    def _pages(self, reading: _Reading, way: _Way) -> None:
        """Reads until there is no further page, a limit is met, or the time is over."""
        while reading.url and len(reading.pages) < MAX_PAGES:
            try:
                page = self._page(reading, way)
            except ClientError as error:
                reading.lack = Lack.LATE if error.kind == "timed-out" else Lack.UNFETCHED
                return
            if isinstance(page, Lack):
                reading.lack = page
                return
            reading.pages.append(page)
            reading.url = "" if reading.wanted.is_read else _following(page, reading.url)
        reading.lack = None

    def _page(self, reading: _Reading, way: _Way) -> dict[str, Any] | Lack:
        if not is_below(way.base, reading.url):
            return Lack.UNFETCHED
        left = way.until - time.monotonic()
        answer = self._client.send("GET", reading.url, headers=way.headers, timeout=left)
        if answer.status in _FORBIDDEN:
            return Lack.FORBIDDEN
        reading.read += len(answer.body)
        if answer.status != 200 or reading.read > self._most:
            return Lack.UNFETCHED
        value, _ = fhirjson.read(answer.body)
        if not as_asked(value, reading.wanted):
            return Lack.UNFETCHED
        if reading.wanted.is_read and value.get("id") != way.patient:
            return Lack.UNFETCHED
        page: dict[str, Any] = value
        return page

    def close(self) -> None:
        """Ends what is on its way."""
        self._threads.shutdown(wait=False, cancel_futures=True)
        self._client.close()


def _is_named(resource: Any, system: str, value: str) -> bool:
    """Whether it is a Patient with an id and this identifier, whatever the server took the search for."""
    if not isinstance(resource, dict) or resource.get("resourceType") != "Patient":
        return False
    given = resource.get("identifier")
    named = [one for one in given if isinstance(one, dict)] if isinstance(given, list) else []
    fits = any(one.get("value") == value and one.get("system", "") == system for one in named)
    return fits and isinstance(resource.get("id"), str)


def open_fetcher(settings: Settings, resolve: Resolve | None = None) -> Fetcher | None:
    """The fetcher of these settings; None where no server is listed, and nothing is fetched.

    Raises:
        SettingsError: a base or the authorities cannot be used.
    """
    if not settings.cds_charts:
        return None
    charts = Charts(settings.cds_charts)
    seconds = settings.chart_milliseconds / 1000
    client = Client(
        charts.origins,
        timeout=seconds,
        most_bytes=settings.max_body,
        private=settings.private_network or settings.loopback_http,
        verify=trust(settings.trusted),
        resolve=resolve,
        connections=_AT_ONCE,
    )
    return Fetcher(charts, client, seconds=seconds, most_bytes=settings.max_body)


def permission(lent: Authorisation | None, wanted: Wanted, patient: str) -> Lack | None:
    """What keeps a key from being read by the scopes of a call: nothing (None), all, or a part of it.

    Without an authorisation the server may be an open one, and decides itself.
    """
    if lent is None:
        return None
    if lent.seconds <= 0:
        return Lack.FORBIDDEN
    letter = "r" if wanted.is_read else "s"
    scopes = [
        scope
        for word in lent.scope.split(" ")[:_MAX_SCOPES]
        if (scope := read_scope(word)) and _permits(scope, letter, wanted.type)
        # a patient scope is for the patient it was launched with
        if scope.context != "patient" or lent.patient == patient
    ]
    if not scopes:
        return Lack.FORBIDDEN
    return None if any(not scope.categories for scope in scopes) else Lack.IN_PART


def _permits(scope: Scope, letter: str, type_: str) -> bool:
    return letter in scope.does and scope.type in (type_, "*")


def _way(call: Call, base: str, seconds: float) -> _Way:
    lent = call.authorisation
    headers = {"Accept": "application/fhir+json"}
    if lent is not None:
        headers["Authorization"] = f"Bearer {lent.token}"
        seconds = min(seconds, lent.seconds)
    return _Way(base, call.patient, headers, time.monotonic() + seconds)


def _readings(call: Call, service: Service, base: str) -> dict[str, _Reading]:
    """What is to be read: keys that were left out, from their template, and the further pages of others."""
    context = {"patientId": call.patient, "encounterId": call.encounter, "userId": call.user}
    readings: dict[str, _Reading] = {}
    for key, wanted in service.prefetch.items():
        if key in call.prefetch.absent:
            readings[key] = _Reading(wanted, f"{base}/{query(wanted, context)}", [])
        elif key in call.prefetch.paged:
            first = call.prefetch.usable[key]
            readings[key] = _Reading(wanted, _following(first, f"{base}/"), [first])
    return readings


def _following(page: Mapping[str, Any], url: str) -> str:
    """Address of the page after this one, which itself stood at `url`; empty when there is none."""
    following = next_page(page)
    try:
        return urljoin(url, following) if following else ""
    except ValueError:  # no address; nothing is asked, and the page stays open
        return ""


def _log(service: Service, readings: Mapping[str, _Reading], lacks: Mapping[str, Lack]) -> None:
    """What became of each key: names and reasons, no address."""
    fates = {key: f"{len(reading.pages)} pages" for key, reading in readings.items()}
    fates |= {key: lack.value for key, lack in lacks.items()}
    log.info("hook %s fetched: %s", service.id, "; ".join(f"{key}: {fates[key]}" for key in sorted(fates)))
