"""The terminology operations, one by one: what each takes, and what it answers.

All of them only read, so that they may be called by GET where their parameters are simple.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Final

from fhirgallop.observations.editions import Edition
from fhirgallop.service.answers import refusal
from fhirgallop.service.fhir import parameters, terminology, translate
from fhirgallop.service.fhir.parameters import Given, text
from fhirgallop.service.fhir.published import Artefact, Library


@dataclass(frozen=True, slots=True)
class Asked:
    """One call of an operation.

    Attributes:
        library: the definitions that are known here.
        edition: FHIR edition.
        given: parameters.
        instance: the definition that the address names; None where it names the type alone.
        at: now, as a FHIR instant.
    """

    library: Library
    edition: Edition
    given: Given
    instance: Artefact | None
    at: str

    @property
    def url(self) -> str:
        """Canonical of the definition that is meant; empty where none is named."""
        return str(self.instance.resource["url"]) if self.instance else text(self.given, "url")


@dataclass(frozen=True, slots=True)
class Operation:
    """One operation on a type of definition.

    Attributes:
        type: resource type it is called on.
        name: without the dollar sign.
        known: parameters with their types, by edition.
        act: makes the answer.
        on_instance: whether it may be called on one definition.
    """

    type: str
    name: str
    known: Callable[[Edition], Mapping[str, str]]
    act: Callable[[Asked], bytes]
    on_instance: bool = True

    @property
    def definition(self) -> str:
        """Canonical of its OperationDefinition."""
        return f"http://hl7.org/fhir/OperationDefinition/{self.type}-{self.name}"


def _translate(asked: Asked) -> bytes:
    codings = translate.sources(asked.given, asked.edition)
    if "conceptMap" in asked.given:
        said = "A concept map that is sent along is not read; name one that is known here."
        raise refusal(422, "not-supported", "translate-own-map", said)
    if asked.instance is not None:
        maps = [asked.instance]
    elif asked.url:
        version = text(asked.given, "conceptMapVersion")
        found = asked.library.canonical(asked.edition, "ConceptMap", asked.url, version)
        if found is None:
            said = "This concept map, or this version of it, is not known here; GET ConceptMap lists them."
            raise refusal(404, "not-found", "unknown-concept-map", said)
        maps = [found]
    else:
        maps = [one for one in asked.library.all(asked.edition, "ConceptMap") if one.current]
    matches, left_out = translate.translate([one.resource for one in maps], codings, asked.given)
    return parameters.write(translate.told(matches, asked.edition, left_out=left_out))


def _expand(asked: Asked) -> bytes:
    return terminology.expand(asked.edition, _named(asked), asked.given, asked.at)


def _in_value_set(asked: Asked) -> bytes:
    return parameters.write(terminology.in_value_set(asked.edition, _named(asked), asked.given))


def _in_code_system(asked: Asked) -> bytes:
    url = asked.url
    if not url and "code" in asked.given:
        raise refusal(400, "required", "code-system-url", "A code needs the url of its code system.")
    return parameters.write(terminology.in_code_system(asked.edition, url, asked.given))


def _lookup(asked: Asked) -> bytes:
    return parameters.write(terminology.lookup(asked.edition, asked.given))


def _named(asked: Asked) -> str:
    if not asked.url:
        raise refusal(400, "required", "value-set-url", "Name the value set by its url.")
    return asked.url


OPERATIONS: Final = (
    Operation("ConceptMap", "translate", translate.known_parameters, _translate),
    Operation("ValueSet", "expand", lambda _: terminology.EXPAND, _expand),
    Operation("ValueSet", "validate-code", lambda _: terminology.VALUE_SET_CODE, _in_value_set),
    Operation("CodeSystem", "validate-code", lambda _: terminology.CODE_SYSTEM_CODE, _in_code_system),
    Operation("CodeSystem", "lookup", lambda _: terminology.LOOKUP, _lookup, on_instance=False),
)
