"""The one HTTP client of this program: it speaks to listed origins only, and follows nobody elsewhere.

A name is resolved here, and the connection goes to an address that was judged, so that a name cannot point
elsewhere between the two (DNS rebinding). Redirects are never followed, no cookie is kept, no proxy is taken
from the environment. Sources: RFC 9110 (HTTP semantics), RFC 6454 (origins).
"""

from __future__ import annotations

import socket
import ssl
import threading
import time
from collections.abc import Callable, Iterable, Iterator, Mapping, Sequence
from concurrent.futures import ThreadPoolExecutor
from concurrent.futures import TimeoutError as WaitError
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from types import MappingProxyType
from typing import Any, Final, Literal
from urllib.parse import urlsplit

import httpcore

from fhirgallop.delivery.addresses import may_connect, origin_of
from fhirgallop.errors import FhirgallopError, SettingsError

Kind = Literal["not-allowed", "refused", "timed-out", "dropped", "too-large", "redirected", "tls"]
Resolve = Callable[[str, int], Sequence[str]]

_SAID: Final[Mapping[Kind, str]] = MappingProxyType(
    {
        "not-allowed": "the address, or what it stands for, is not on the list of those spoken to",
        "refused": "no connection could be made",
        "timed-out": "there was no complete answer in time",
        "dropped": "the connection broke, or what came was no HTTP",
        "too-large": "the answer is larger than is taken",
        "redirected": "the answer points to another address, and none is followed",
        "tls": "the certificate, or the encryption, cannot be trusted",
    }
)
_REDIRECTS: Final = frozenset({300, 301, 302, 303, 305, 307, 308})
_OURS: Final = frozenset({"host", "content-length", "transfer-encoding", "connection"})
_WRITTEN_AT_ONCE: Final = 16_384
_RESOLVERS: Final = 4
_KEPT_OPEN_SECONDS: Final = 15.0
_ORIGINS_KEPT_OPEN: Final = 4
_NO_HEADERS: Final[Mapping[str, str]] = MappingProxyType({})


class ClientError(FhirgallopError):
    """No answer: `kind` says why, `origin` of whom (empty where none may be asked).

    Only after `refused` and `not-allowed` it is sure that nothing was sent; after the others the other side
    may have acted. The text holds neither path nor query, for these may name a patient.
    """

    def __init__(self, kind: Kind, origin: str = "") -> None:
        self.kind: Final[Kind] = kind
        self.origin: Final = origin
        super().__init__(f"{origin}: {_SAID[kind]}" if origin else _SAID[kind])


@dataclass(frozen=True, slots=True)
class Answer:
    """An answer, whole; names of headers are in lower case, a repeated one is joined with a comma."""

    status: int
    headers: Mapping[str, str]
    body: bytes


class Client:
    """Sends requests to listed origins; may be used by several threads at once.

    Args:
        allowed: origins, such as `https://chart.example` or `https://chart.example:8443`.
        timeout: seconds for one exchange altogether, from the look-up of the name to the last byte.
        most_bytes: largest body of an answer that is taken.
        private: also hosts on this machine and in private networks, and plain http.
        verify: what certificates are trusted; see `trust`.
        resolve: from a host and a port to its addresses, by default the system's way.
        connections: most exchanges at once.

    Raises:
        SettingsError: an origin cannot be used.
    """

    def __init__(
        self,
        allowed: Iterable[str],
        *,
        timeout: float,
        most_bytes: int,
        private: bool = False,
        verify: ssl.SSLContext | None = None,
        resolve: Resolve | None = None,
        connections: int = 16,
    ) -> None:
        self.allowed: Final = frozenset(_listed(origin, private=private) for origin in allowed)
        self._timeout = timeout
        self._most = most_bytes
        self._deadline = _Deadline()
        self._network = _Judged(self._deadline, resolve or _by_system, private=private)
        self._trusted = verify or trust()
        self._room = threading.BoundedSemaphore(connections)
        # A pool that threads share may close a connection that one of them has just taken (httpcore 1.0.9:
        # what looks idle and has an answer waiting counts as ended); so each is one exchange's at a time.
        self._idle: list[httpcore.ConnectionPool] = []
        self._closed = False

    def send(
        self,
        method: str,
        url: str,
        *,
        headers: Mapping[str, str] = _NO_HEADERS,
        body: bytes | None = None,
        timeout: float | None = None,
    ) -> Answer:
        """One request and its whole answer, whatever its status but a redirection.

        Args:
            method: in capitals.
            url: absolute; its origin must be listed.
            headers: host, length and connection are set here and may not be given.
            body: what is sent.
            timeout: seconds for this exchange, instead of the client's.

        Raises:
            ClientError: there is no answer.
            ValueError: a header was given that is set here.
        """
        if strange := sorted(_OURS.intersection(map(str.lower, headers))):
            raise ValueError(f"set by the client itself: {', '.join(strange)}")
        origin = origin_of(url)
        if origin is None or origin not in self.allowed:
            raise ClientError("not-allowed")
        seconds = self._timeout if timeout is None else timeout
        self._deadline.at = time.monotonic() + seconds
        try:
            with self._pool(seconds) as pool:
                return self._exchange(pool, _request(method, url, origin, headers, body, seconds), origin)
        except httpcore.TimeoutException:
            raise ClientError("timed-out", origin) from None
        except _RefusedError:
            raise ClientError("not-allowed", origin) from None
        except httpcore.ConnectError as error:
            raise ClientError("tls" if _of_tls(error) else "refused", origin) from None
        except httpcore.LocalProtocolError:  # a header with a line break, say
            raise ClientError("not-allowed", origin) from None
        except (httpcore.NetworkError, httpcore.ProtocolError):
            raise ClientError("dropped", origin) from None

    @contextmanager
    def _pool(self, seconds: float) -> Iterator[httpcore.ConnectionPool]:
        """The connections that were used last, for one exchange."""
        if not self._room.acquire(timeout=max(0.0, seconds)):
            raise httpcore.PoolTimeout
        try:
            try:
                pool = self._idle.pop()
            except IndexError:
                pool = self._new_pool()
            try:
                yield pool
            finally:
                if self._closed:
                    pool.close()
                else:
                    self._idle.append(pool)
        finally:
            self._room.release()

    def _new_pool(self) -> httpcore.ConnectionPool:
        return httpcore.ConnectionPool(
            ssl_context=self._trusted,
            max_connections=_ORIGINS_KEPT_OPEN,
            keepalive_expiry=_KEPT_OPEN_SECONDS,
            network_backend=self._network,
        )

    def _exchange(self, pool: httpcore.ConnectionPool, request: dict[str, Any], origin: str) -> Answer:
        with pool.stream(**request) as response:
            headers: dict[str, str] = {}
            for raw_name, raw in response.headers:
                name, value = raw_name.decode("ascii").lower(), raw.decode("latin-1")
                headers[name] = f"{headers[name]}, {value}" if name in headers else value
            if response.status in _REDIRECTS:
                raise ClientError("redirected", origin)
            length = headers.get("content-length", "")
            if length.isdecimal() and int(length) > self._most and request["method"] != "HEAD":
                raise ClientError("too-large", origin)
            body = bytearray()
            for part in response.iter_stream():
                body += part
                if len(body) > self._most:
                    raise ClientError("too-large", origin)
            return Answer(response.status, headers, bytes(body))

    def close(self) -> None:
        """Closes what is open; the client cannot be used afterwards."""
        self._closed = True
        while self._idle:
            self._idle.pop().close()
        self._network.close()


def trust(authorities: Path | None = None) -> ssl.SSLContext:
    """What certificates are trusted: the system's authorities, or those of one file in their place.

    Raises:
        SettingsError: the file cannot be read as certificates.
    """
    try:
        return ssl.create_default_context(cafile=authorities)
    except OSError as error:
        raise SettingsError(
            f"{authorities}: no certificates can be read from it ({type(error).__name__})"
        ) from None


def _listed(origin: str, *, private: bool) -> str:
    found = origin_of(origin)
    parts = urlsplit(origin) if found else None
    if found is None or parts is None or parts.path not in ("", "/") or parts.query:
        raise SettingsError(f"{origin!r} is no origin; write https://host or https://host:port")
    if parts.scheme == "http" and not private:
        raise SettingsError(f"{origin!r} is not encrypted; use https")
    return found


def _request(
    method: str, url: str, origin: str, headers: Mapping[str, str], body: bytes | None, seconds: float
) -> dict[str, Any]:
    parts = urlsplit(url)
    target = (parts.path or "/") + (f"?{parts.query}" if parts.query else "")
    sent = {"Host": origin.partition("://")[2], "Accept-Encoding": "identity", **headers}
    try:
        encoded = [(name.encode("ascii"), value.encode("ascii")) for name, value in sent.items()]
    except UnicodeEncodeError:
        raise ClientError("not-allowed", origin) from None
    return {
        "method": method,
        "url": httpcore.URL(scheme=parts.scheme, host=parts.hostname or "", port=parts.port, target=target),
        "headers": encoded,
        "content": body,
        "extensions": {"timeout": dict.fromkeys(("connect", "read", "write", "pool"), seconds)},
    }


def _of_tls(error: BaseException | None) -> bool:
    while error is not None:
        if isinstance(error, ssl.SSLError):
            return True
        error = error.__cause__ or error.__context__
    return False


def _by_system(host: str, port: int) -> list[str]:
    found = socket.getaddrinfo(host, port, type=socket.SOCK_STREAM)
    return list(dict.fromkeys(str(address[0]) for *_, address in found))


class _RefusedError(httpcore.ConnectError):
    """None of a name's addresses may be connected to."""


class _Deadline(threading.local):
    """When the exchange of this thread must be over; an exchange stays on its thread to the end."""

    at: float = float("inf")

    def left(self, at_most: float | None = None) -> float:
        left = self.at - time.monotonic()
        if left <= 0:
            raise httpcore.ReadTimeout
        return left if at_most is None else min(left, at_most)


class _Judged(httpcore.NetworkBackend):
    """Connects to addresses that were judged, not to names."""

    def __init__(self, deadline: _Deadline, resolve: Resolve, *, private: bool) -> None:
        self._deadline = deadline
        self._resolve = resolve
        self._private = private
        self._plain = httpcore.SyncBackend()
        # the system's look-up knows no timeout of ours
        self._resolvers = ThreadPoolExecutor(_RESOLVERS, thread_name_prefix="resolve")

    def connect_tcp(
        self,
        host: str,
        port: int,
        timeout: float | None = None,
        local_address: str | None = None,
        socket_options: Iterable[httpcore.SOCKET_OPTION] | None = None,
    ) -> httpcore.NetworkStream:
        addresses = [one for one in self._addresses(host, port) if may_connect(one, private=self._private)]
        failed: httpcore.ConnectError = _RefusedError()
        for address in addresses:
            left = self._deadline.left(timeout)
            try:
                stream = self._plain.connect_tcp(address, port, left, local_address, socket_options)
            except httpcore.ConnectError as error:
                failed = error
            else:
                return _Timed(stream, self._deadline)
        raise failed

    def _addresses(self, host: str, port: int) -> Sequence[str]:
        looking = self._resolvers.submit(self._resolve, host, port)
        try:
            return looking.result(self._deadline.left())
        except WaitError:
            looking.cancel()
            raise httpcore.ConnectTimeout from None
        except OSError:
            raise httpcore.ConnectError from None

    def close(self) -> None:
        self._resolvers.shutdown(wait=False, cancel_futures=True)


class _Timed(httpcore.NetworkStream):
    """A connection whose every step ends with the exchange's deadline, however slowly bytes drip."""

    def __init__(self, inner: httpcore.NetworkStream, deadline: _Deadline) -> None:
        self._inner = inner
        self._deadline = deadline

    def read(self, max_bytes: int, timeout: float | None = None) -> bytes:
        return self._inner.read(max_bytes, self._deadline.left(timeout))

    def write(self, buffer: bytes, timeout: float | None = None) -> None:
        for at in range(0, len(buffer), _WRITTEN_AT_ONCE):
            self._inner.write(buffer[at : at + _WRITTEN_AT_ONCE], self._deadline.left(timeout))

    def close(self) -> None:
        self._inner.close()

    def start_tls(
        self, ssl_context: ssl.SSLContext, server_hostname: str | None = None, timeout: float | None = None
    ) -> httpcore.NetworkStream:
        inner = self._inner.start_tls(ssl_context, server_hostname, self._deadline.left(timeout))
        return _Timed(inner, self._deadline)

    def get_extra_info(self, info: str) -> Any:
        return self._inner.get_extra_info(info)
