"""The plain part of a form: what one schema says whole, with no look at keys or numbers beside it.

It leaves out what is looked at apart and values of seldom types; what is refused here may still be right.
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
    seldom = {key for key, child in keys.items() if child.element.is_choice and child.type_name not in OFTEN}
    left_out = seldom | form.checks.keys()
    schema = {**form.presence, **form.schema}
    if left_out.intersection(schema.get("required", ())):
        return None
    properties = {key: held for key, held in schema["properties"].items() if key not in left_out}
    schema["properties"] = properties
    rules: dict[str, Any] = {}
    for key, rule in schema.pop("dependentSchemas", {}).items():
        ruled_out = {other: False for other in rule["properties"] if other in properties}
        if key in properties and ruled_out:
            rules[key] = {"properties": ruled_out}
    if rules:
        schema["dependentSchemas"] = rules
    return schema
