"""Settings of the service, from the environment (`FHIRGALLOP_...`), checked before anything starts."""

from __future__ import annotations

import ipaddress
import json
import os
from pathlib import Path
from typing import Final, Literal, Self
from urllib.parse import urlsplit

from pydantic import Field, ValidationError, ValidationInfo, field_validator, model_validator
from pydantic_settings import BaseSettings, SettingsConfigDict
from pydantic_settings import SettingsError as SourceError

from fhirgallop.errors import SettingsError

PREFIX: Final = "FHIRGALLOP_"


class Settings(BaseSettings):
    """Every setting, with its meaning; the README's table is held against these descriptions by a test."""

    model_config = SettingsConfigDict(env_prefix=PREFIX, frozen=True, extra="forbid")

    host: str = Field(
        "127.0.0.1", description="Address to listen on; only this machine's own may be given yet."
    )
    port: int = Field(8470, ge=0, le=65535, description="Port to listen on; 0 takes a free one.")
    maps: Path = Field(Path("maps"), description="Folder with the published template maps (*.yaml).")
    database: str = Field(
        "sqlite:///fhirgallop.sqlite3", description="Where examinations are kept (an SQLAlchemy address)."
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

    @model_validator(mode="after")
    def _stays_at_home(self) -> Self:
        """Without authorisation nothing but this machine may reach patient data."""
        home = self.host == "localhost"
        if not home:
            try:
                home = ipaddress.ip_address(self.host).is_loopback
            except ValueError:
                home = False
        if not home:
            message = (
                "host must be a loopback address (127.0.0.1, ::1, localhost): there is no authorisation yet, "
                "so no other machine may reach the service. Put an authorising proxy in front of it."
            )
            raise ValueError(message)
        return self


def load(**given: object) -> Settings:
    """Settings from the environment, with `given` ones on top.

    Raises:
        SettingsError: names every setting that cannot be used, and why.
    """
    known = {f"{PREFIX}{name}".upper() for name in Settings.model_fields}
    if strange := sorted(
        name for name in os.environ if name.upper().startswith(PREFIX) and name.upper() not in known
    ):
        raise SettingsError(f"{', '.join(strange)}: no such setting; there are {', '.join(sorted(known))}")
    try:
        return Settings(**{name: value for name, value in given.items() if value is not None})  # type: ignore[arg-type]
    except SourceError as error:
        raise SettingsError(str(error)) from None
    except ValidationError as error:
        faults = [
            f"{PREFIX}{'_'.join(map(str, fault['loc'])).upper() or 'HOST'}: {fault['msg']}"
            for fault in error.errors(include_input=False, include_url=False)
        ]
        raise SettingsError("; ".join(faults)) from None


def table() -> str:
    """Every setting as a table in Markdown, as it stands in the README."""
    lines = ["| setting | default | meaning |", "|---|---|---|"]
    for name, field in Settings.model_fields.items():
        default = field.default
        shown = json.dumps(sorted(default) if isinstance(default, frozenset) else default, default=str)
        lines.append(f"| `{PREFIX}{name.upper()}` | `{shown.strip(chr(34))}` | {field.description} |")
    return "\n".join(lines)
