"""Settings of the service, from the environment (`FHIRGALLOP_...`), checked before anything starts."""

from __future__ import annotations

import json
import os
import re
from collections.abc import Iterator, Mapping
from difflib import get_close_matches
from pathlib import Path
from typing import Final, Literal, Self, get_origin
from urllib.parse import urlsplit

from pydantic import Field, ValidationError, ValidationInfo, field_validator, model_validator
from pydantic_settings import BaseSettings, SettingsConfigDict
from pydantic_settings import SettingsError as SourceError

from fhirgallop import listening
from fhirgallop.errors import SettingsError

PREFIX: Final = "FHIRGALLOP_"
_FILE: Final = "_FILE"
_DIGEST: Final = re.compile("[0-9a-f]{64}")
# what settings are about, by the first of them
_ABOUT: Final = {
    "host": "Service, storage and limits",
    "pages": "Cards",
    "keep_exams": "How long what is kept",
    "second_person": "Maps",
    "address": "Who may ask",
    "deliver_to": "Delivery to the record system",
    "certificate": "TLS and proxy",
    "log_form": "Operation",
}

# those of RFC 7518 and RFC 8037 with a public and a private key
Algorithm = Literal["ES256", "ES384", "ES512", "RS256", "RS384", "RS512", "PS256", "PS384", "PS512", "EdDSA"]


class Settings(BaseSettings):
    """Every setting, with its meaning; the README's table is held against these descriptions by a test."""

    model_config = SettingsConfigDict(env_prefix=PREFIX, frozen=True, extra="forbid")

    host: str = Field(
        "127.0.0.1",
        description="Address to listen on; others than this machine's own need authorisation and TLS.",
    )
    port: int = Field(8470, ge=0, le=65535, description="Port to listen on; 0 takes a free one.")
    maps: Path = Field(Path("maps"), description="Folder with the published template maps (*.yaml).")
    database: str = Field(
        "sqlite:///fhirgallop.sqlite3",
        repr=False,
        description="Where all is kept: a file (sqlite:///...) or PostgreSQL (postgresql://user@host/name).",
    )
    durable: bool = Field(
        default=True,
        description="What was accepted survives a power cut; false is quicker, and may lose the last moments "
        "then. The death of the process loses nothing either way.",
    )
    edition: Literal["R4", "R4B", "R5"] = Field("R4", description="FHIR edition when a request names none.")
    snomed: bool = Field(
        default=True, description="Write SNOMED CT codings; needs the licence that applies where you are."
    )
    max_body: int = Field(
        8 * 1024 * 1024, ge=1024, le=64 * 1024 * 1024, description="Largest request body in bytes."
    )

    max_records: int = Field(
        1000,
        ge=1,
        le=100_000,
        description="Most examinations in one request; the command line has no such limit.",
    )
    batch_body: int = Field(
        64 * 1024 * 1024,
        ge=1024,
        le=512 * 1024 * 1024,
        description="Largest body in bytes of a request with `Prefer: respond-async`.",
    )
    batch_records: int = Field(
        100_000, ge=1, le=1_000_000, description="Most examinations in such a request."
    )
    batch_workers: int = Field(
        1,
        ge=0,
        le=16,
        description="Threads that code such requests; with 0 they wait for another process of the service.",
    )
    idempotency_hours: int = Field(
        24,
        ge=1,
        le=720,
        description="How long an answer is kept for a request that is sent again with its Idempotency-Key.",
    )
    max_depth: int = Field(
        32, ge=4, le=200, description="Deepest nesting of objects and lists in a JSON record."
    )
    names: frozenset[str] = Field(
        frozenset({"127.0.0.1", "::1", "localhost"}),
        description='Host names it may be called by (a JSON list); add that of a proxy: ["gallop.example"].',
    )
    pages: str = Field(
        "",
        max_length=500,
        description="Address under which users' browsers reach the service; cards link to nothing else, and "
        "to nothing at all where it is empty. Its host must be among the names.",
    )
    cards_critical: bool = Field(
        default=False, description="Mark urgent cards as critical for the record system; else as warnings."
    )
    cards_shadow: bool = Field(
        default=False, description="Work every card out and log it by rule, and show none."
    )
    # what CDS Hooks calls may have read (service/fetching.py)
    cds_charts: Mapping[str, tuple[str, ...]] = Field(
        {},
        description="FHIR bases that may be read for CDS Hooks calls that lack data, by the `iss` of the "
        "client; under `*` for every client. None: nothing is ever fetched.",
    )
    chart_milliseconds: int = Field(
        400, ge=50, le=5000, description="Time for all that one call has fetched; what is late stays unknown."
    )
    cds_system_actions: frozenset[str] = Field(
        frozenset(),
        description="CDS Hooks clients (`iss`) that asked for system actions: a Task to record today's "
        "rhythm, instead of the suggestion of one.",
    )

    # how long what is kept (storage/retention.py)
    keep_exams: int = Field(
        0,
        ge=0,
        description="Days that an examination and its resources are kept after its newest version, and while "
        "a delivery of it waits; 0: for ever.",
    )
    keep_cards: int = Field(
        365, ge=0, description="Days that cards, answers to them and memories of both are kept; 0: for ever."
    )
    keep_batches: int = Field(
        7, ge=0, description="Days that a finished batch and its results are kept; 0: for ever."
    )
    keep_samples: int = Field(
        30, ge=0, description="Days that sample records beside a draft of a map are kept; 0: for ever."
    )
    keep_audit: int = Field(0, ge=0, description="Days that the audit trail is kept; 0: for ever.")

    # the informatician's desk (service/desk)
    second_person: bool = Field(
        default=False,
        description="A map is used only when a second person has approved it; needs sign-in, so that two "
        "persons can be told apart.",
    )

    # who may ask (service/auth)
    address: str = Field(
        "",
        max_length=500,
        description="Address under which clients reach the service (https://gallop.example): what tokens "
        "must be made out for. Needed with authorisation; its host must be among the names.",
    )
    cds_clients: Mapping[str, tuple[str, ...]] = Field(
        {},
        description="CDS Hooks clients, by the `iss` of their tokens: where their public keys stand, as "
        "https addresses (a token's `jku` must be one of them) or as files (for tokens without).",
    )
    cds_algorithms: frozenset[Algorithm] = Field(
        frozenset({"ES384", "RS384"}), description="Signatures taken from CDS Hooks clients."
    )
    cds_token_seconds: int = Field(
        300, ge=10, le=3600, description="Longest life of a CDS Hooks client's token, from `iat` to `exp`."
    )
    authority: str = Field(
        "", max_length=500, description="Issuer (`iss`) of the access tokens for everything but CDS Hooks."
    )
    authority_keys: str = Field(
        "", max_length=500, description="Its public keys (JWKS), as an https address or a file."
    )
    authority_introspection: str = Field(
        "",
        max_length=500,
        description="Its introspection address (RFC 7662), for access tokens that are no JWTs; then no keys.",
    )
    authority_client: str = Field(
        "", max_length=200, description="Client id that the service introduces itself with there."
    )
    authority_secret: Path | None = Field(None, description="File with the secret of that client.")
    authority_tokens: str = Field(
        "", max_length=500, description="Its token address, for those who ask where to get a token."
    )
    authority_algorithms: frozenset[Algorithm] = Field(
        frozenset({"ES256", "ES384", "RS256", "RS384"}),
        description="Signatures taken from the authority, and from the sign-in.",
    )
    audiences: frozenset[str] = Field(
        frozenset(),
        description="What access tokens must be made out for (`aud`); empty: the address, or one of its FHIR "
        "bases.",
    )
    admin_token: str = Field(
        "",
        description="SHA-256 (hexadecimal) of a token that opens what operators and informaticians use; "
        "`fhirgallop token` makes both.",
    )
    sign_in: str = Field("", max_length=500, description="OpenID Connect issuer that people sign in with.")
    sign_in_client: str = Field("", max_length=200, description="Client id of this service there.")
    sign_in_secret: Path | None = Field(
        None, description="File with the secret of that client; none for a public client."
    )
    sign_in_claim: str = Field(
        "roles", max_length=100, description="Claim of the id token that names what somebody may."
    )
    sign_in_roles: Mapping[str, Literal["clinician", "informatician", "operator"]] = Field(
        {}, description="Role here by value of that claim; who has none is not let in."
    )
    session_minutes: int = Field(480, ge=5, le=1440, description="How long a sign-in lasts.")
    clock_skew: int = Field(60, ge=0, le=300, description="Seconds that clocks of others may be wrong by.")
    cors_origins: frozenset[str] = Field(
        frozenset(), description="Origins of web pages that may call from a browser (https://ehr.example)."
    )
    trusted: Path | None = Field(
        None,
        description="Certificates of the authorities that are trusted for every outgoing connection "
        "(PEM file), in place of the system's.",
    )
    private_network: bool = Field(
        default=False,
        description="Listed addresses of authorities, charts and receivers may lie in a private network.",
    )
    loopback_http: bool = Field(
        default=False, description="Listed addresses may be plain http on this machine; for tries only."
    )

    # what is sent to the record system (delivery)
    deliver_to: str = Field(
        "",
        max_length=500,
        description="FHIR endpoint of the record system (https://record.example/fhir) that coded "
        "examinations are sent to, in the edition and with the codings set above; empty: nothing is sent.",
    )
    deliver_client: str = Field(
        "", max_length=200, description="Our client id there (SMART backend services); empty: no token."
    )
    deliver_key: Path | None = Field(
        None, description="File with our private keys (JWK Set, or one key in PEM); the first signs."
    )
    deliver_token_url: str = Field(
        "", max_length=500, description="Token address; empty: found by discovery below the endpoint."
    )
    deliver_scope: str = Field(
        "system/Observation.cus system/DiagnosticReport.cus system/Provenance.cs",
        max_length=500,
        description="Scopes that are asked for.",
    )
    delivery_workers: int = Field(
        1,
        ge=0,
        le=32,
        description="Threads of each service process that send; 0: only `deliveries work` sends.",
    )
    delivery_timeout: float = Field(
        30, ge=0.5, le=600, description="Seconds that one exchange with the record system may take."
    )
    delivery_wait: float = Field(
        2, ge=0.01, le=3600, description="Longest wait before a second try; it doubles with each."
    )
    delivery_wait_most: float = Field(
        600, ge=0.01, le=86_400, description="Longest wait before any try, unless more is asked for."
    )
    delivery_tries: int = Field(
        20,
        ge=1,
        le=1000,
        description="Tries after which a delivery fails and waits for a person, while others get through.",
    )
    delivery_rest_after: int = Field(
        5,
        ge=1,
        le=1000,
        description="Failures in a row after which the record system counts as down and is probed by one "
        "delivery at a time.",
    )
    delivery_rest: float = Field(
        15, ge=0.01, le=3600, description="First rest of one that is down; it doubles with each failed probe."
    )

    # how it listens
    certificate: Path | None = Field(None, description="TLS certificate with its chain (PEM file).")
    certificate_key: Path | None = Field(None, description="Its private key (PEM file, no passphrase).")
    behind_proxy: bool = Field(
        default=False, description="A proxy in front ends TLS; nobody else can reach the service."
    )
    proxies: frozenset[str] = Field(
        frozenset({"127.0.0.1", "::1"}),
        description="Addresses of that proxy: whose X-Forwarded-For and -Proto are believed.",
    )

    # operation
    log_form: Literal["console", "json"] = Field(
        "console", description="How the log is written: for people, or a JSON object a line."
    )
    log_level: Literal["debug", "info", "warning", "error"] = Field(
        "info", description="The least that is logged; each request is `info`."
    )
    rate: float = Field(
        500,
        ge=0,
        description="Requests a second that one address, and one caller, may send to one process; twice as "
        "many may come at once. 0: no limit.",
    )
    at_once: int = Field(
        64,
        ge=1,
        le=10_000,
        description="Requests that one process works on at once, half of them from one address; more are "
        "refused.",
    )
    coded_at_once: int = Field(
        8,
        ge=1,
        le=64,
        description="Of these, examinations that are coded at once; the others wait their turn. Those that "
        "reach the database together share a transaction.",
    )
    cards_at_once: int = Field(
        2,
        ge=1,
        le=64,
        description="Of these, calls of CDS Hooks that are computed at once; the others wait their turn. "
        "More only lets all wait for the slowest.",
    )
    header_seconds: float = Field(
        10, gt=0, le=600, description="How long the head of a request may take to arrive."
    )
    idle_seconds: int = Field(
        15, ge=1, le=3600, description="How long a connection may lie idle between two requests."
    )
    notice_seconds: float = Field(
        0,
        ge=0,
        le=600,
        description="How long the service still takes requests after it was told to end, while `/ready` says "
        "no already, so that a balancer turns to another.",
    )
    finish_seconds: int = Field(
        20, ge=1, le=600, description="How long requests may then still run before they are cut off."
    )
    stuck_minutes: int = Field(15, ge=1, description="Age of the oldest delivery from which `/ready` warns.")
    free_disk: int = Field(
        256,
        ge=0,
        description="Megabytes that must be free beside an embedded database; with less the service is not "
        "ready.",
    )

    @field_validator("admin_token")
    @classmethod
    def _is_a_digest(cls, given: str) -> str:
        if given and not _DIGEST.fullmatch(given):
            raise ValueError(
                "give the SHA-256 of the token, 64 hexadecimal digits; `fhirgallop token` makes both"
            )
        return given

    @field_validator("pages")
    @classmethod
    def _links_home(cls, pages: str, info: ValidationInfo) -> str:
        """Cards may link only to hosts that were configured."""
        try:
            parts = urlsplit(pages)
            known = parts.scheme in ("http", "https") and parts.hostname in info.data.get("names", ())
            plain = not (parts.query or parts.fragment or parts.username) and pages.isprintable()
        except ValueError:
            known = plain = False
        if pages and not (known and plain and " " not in pages):
            raise ValueError("it must be an http or https address whose host is among the names")
        return pages

    @property
    def authorised(self) -> bool:
        """Whether callers have to say who they are: as soon as one way in is set."""
        return bool(self.cds_clients or self.authority or self.admin_token or self.sign_in)

    @model_validator(mode="after")
    def _safe(self) -> Self:
        """Without authorisation and TLS nothing but this machine may reach patient data."""
        if faults := list(listening.faults(self)):
            raise ValueError("; ".join(faults))
        return self


def load(**given: object) -> Settings:
    """Settings from the environment, with `given` ones on top.

    A text setting may also stand in a file that `FHIRGALLOP_<NAME>_FILE` names, so that a password need not
    stand in the environment.

    Raises:
        SettingsError: names every setting that cannot be used, and why; never what it was set to.
    """
    texts, faults = _from_files()
    known = {f"{PREFIX}{name}".upper() for name in Settings.model_fields}
    files = {f"{PREFIX}{name}{_FILE}".upper() for name in _texts()}
    for name in sorted(os.environ):
        if name.upper().startswith(PREFIX) and name.upper() not in known | files:
            near = get_close_matches(name.upper(), known, 1, 0.0)
            faults.append(f"{name}: no such setting; did you mean {near[0]}?")
    # an option that is not given (None) leaves the file's text in force
    chosen = texts | {name: value for name, value in given.items() if value is not None}
    try:
        settings = Settings(**chosen)  # type: ignore[arg-type]
    except SourceError:
        faults += _no_json()
    except ValidationError as error:
        faults += [
            _fault(fault["loc"], fault["msg"])
            for fault in error.errors(include_input=False, include_url=False)
        ]
    if faults:
        raise SettingsError("; ".join(faults))
    return settings


def _no_json() -> Iterator[str]:
    """The lists and tables in the environment that are no JSON; the library names one, and no cure."""
    for name, field in Settings.model_fields.items():
        given = os.environ.get(f"{PREFIX}{name}".upper())
        if given is None or get_origin(field.annotation) is None:
            continue
        try:
            json.loads(given)
        except ValueError:
            yield f"{PREFIX}{name.upper()}: this is no JSON; write it like " + (
                '{"name": ["value"]}' if get_origin(field.annotation) is Mapping else '["one", "another"]'
            )


def _texts() -> list[str]:
    return [name for name, field in Settings.model_fields.items() if field.annotation is str]


def _from_files() -> tuple[dict[str, str], list[str]]:
    """Settings that stand in files of their own, and what is wrong with these files."""
    found: dict[str, str] = {}
    faults = []
    for name in _texts():
        variable = f"{PREFIX}{name}".upper()
        path = os.environ.get(variable + _FILE)
        if path is None:
            continue
        if variable in os.environ:
            faults.append(f"{variable}{_FILE}: {variable} is set too; leave one of them out")
        try:
            found[name] = Path(path).read_text("utf-8").strip()
        except (OSError, UnicodeDecodeError) as error:
            said = error.strerror if isinstance(error, OSError) else "no UTF-8 text"
            faults.append(f"{variable}{_FILE}: the file cannot be read ({said})")
    return found, faults


def _fault(place: tuple[int | str, ...], text: str) -> str:
    text = text.removeprefix("Value error, ")
    return f"{PREFIX}{'_'.join(map(str, place)).upper()}: {text}" if place else text


def table() -> str:
    """Every setting in tables by what it is about, in Markdown, as the README has them."""
    lines = []
    for name, field in Settings.model_fields.items():
        if name in _ABOUT:
            lines += ["", f"**{_ABOUT[name]}**", "", "| setting | default | meaning |", "|---|---|---|"]
        default = "" if field.default is None else field.default
        shown = json.dumps(sorted(default) if isinstance(default, frozenset) else default, default=str)
        lines.append(f"| `{PREFIX}{name.upper()}` | `{shown.strip(chr(34))}` | {field.description} |")
    return "\n".join(lines[1:])
