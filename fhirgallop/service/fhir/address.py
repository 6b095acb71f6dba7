"""The FHIR addresses: one base an edition, the types that stand there, and what an id may look like."""

from __future__ import annotations

import re
from dataclasses import dataclass
from typing import Final, Literal

from fastapi import Request

from fhirgallop.conformance.registry import registry
from fhirgallop.observations.editions import Edition
from fhirgallop.service import answers
from fhirgallop.settings import Settings

EditionPath = Literal["r4", "r4b", "r5"]
NAMES: Final[dict[str, Edition]] = {"r4": "R4", "r4b": "R4B", "r5": "R5"}
FHIR_VERSIONS: Final[dict[Edition, str]] = {"R4": "4.0", "R4B": "4.3", "R5": "5.0"}

# Types whose resources are kept here: coded findings, their report, and where they come from.
KEPT: Final = ("Observation", "DiagnosticReport", "Provenance")
# Types whose resources come with this program (and the template maps): read and searched only.
PUBLISHED: Final = ("CodeSystem", "ConceptMap", "StructureDefinition", "ValueSet")

_ID: Final = re.compile(r"[A-Za-z0-9\-.]{1,64}", re.ASCII)
_VERSION: Final = re.compile(r"[1-9][0-9]{0,8}", re.ASCII)


@dataclass(frozen=True, slots=True)
class Base:
    """One edition's base address.

    Attributes:
        edition: "R4", "R4B" or "R5".
        url: absolute address, without a slash at its end.
    """

    edition: Edition
    url: str

    def of(self, type_: str, fhir_id: str, version: int | None = None) -> str:
        """Absolute address of a resource, or of one version of it."""
        tail = "" if version is None else f"/_history/{version}"
        return f"{self.url}/{type_}/{fhir_id}{tail}"


def base(request: Request, edition: EditionPath) -> Base:
    """The base that a request came to."""
    settings: Settings = request.app.state.settings
    home = settings.address or str(request.base_url)
    return Base(NAMES[edition], f"{home.rstrip('/')}/fhir/{edition}")


def known_type(edition: Edition, type_: str, *, among: tuple[str, ...] = KEPT + PUBLISHED) -> str:
    """`type_`, or a refusal where nothing of that type is kept here."""
    if type_ in among:
        return type_
    text = f"Resources of this type are not served here; there are {', '.join(among)}."
    if type_ not in registry(edition).edition.resources:
        text = f"FHIR {edition} has no resource type of that name."
    raise answers.refusal(404, "not-supported", "http-unknown-type", text)


def is_id(text: str) -> bool:
    """Whether it is a FHIR id.

    Source: FHIR R4 data type id.
    """
    return _ID.fullmatch(text) is not None


def version_number(text: str) -> int | None:
    """The version that a versionId of ours names; None when it can be none."""
    return int(text) if _VERSION.fullmatch(text) else None


def not_found() -> answers.RefusalError:
    """404, the same for what is not there and for what may not be seen."""
    text = "There is no such resource here, or it may not be seen with this token."
    return answers.refusal(404, "not-found", "http-unknown-resource", text)
