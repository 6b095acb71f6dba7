"""The plain part of a form: what one schema says, presence of keys included.

It leaves out values of seldom types, for the sake of speed; what is refused here may still be right.
"""

from __future__ import annotations

from typing import Any

from fhirgallop.conformance.editions import Edition
from fhirgallop.conformance.fast_residue import OFTEN
from fhirgallop.conformance.fast_schema import Form, Schema


def plain(form: Form, kind: str, edition: Edition) -> Schema | None:
    """The schema of plain resources of a form, presence of keys included; None when there are none."""
    definition = edition.type(kind)
    keys = definition.keys if definition else {}
    seldom = {
        key
        for key, child in keys.items()
        if child.element.is_choice and child.type_name not in OFTEN and key not in form.checks
    }
    schema = {**form.presence, **form.schema}
    if seldom.intersection(schema.get("required", ())):
        return None
    properties = {key: held for key, held in schema["properties"].items() if key not in seldom}
    schema["properties"] = properties
    rules: dict[str, Any] = {}
    for key, rule in schema.pop("dependentSchemas", {}).items():
        ruled_out = {other: False for other in rule["properties"] if other in properties}
        if key in properties and ruled_out:
            rules[key] = {"properties": ruled_out}
    if rules:
        schema["dependentSchemas"] = rules
    return schema
