"""A resource as it is kept (bytes without id, versionId and lastUpdated) and as it is given out.

The kept text always starts with the type and with `meta`, so that what the columns hold is set in without
reading it.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any, Final

from fhirgallop.codes import fhirjson
from fhirgallop.service.fhir.dates import instant

_SET_BY_US: Final = ("versionId", "lastUpdated")


def kept(resource: Mapping[str, Any]) -> bytes:
    """The text to keep of a resource."""
    meta = {name: value for name, value in resource.get("meta", {}).items() if name not in _SET_BY_US}
    rest = {name: value for name, value in resource.items() if name not in ("resourceType", "id", "meta")}
    return fhirjson.write({"resourceType": resource["resourceType"], "meta": meta, **rest})


def given(type_: str, fhir_id: str, version: int, updated: int, text: bytes) -> bytes:
    """The resource with its id, version and time of change."""
    head = len(type_) + len('{"resourceType":"",')
    cut = head + len('"meta":{')
    more = b"" if text[cut : cut + 1] == b"}" else b","
    return b"%b\"id\":\"%b\",\"meta\":{\"versionId\":\"%d\",\"lastUpdated\":\"%b\"%b%b" % (
        text[:head], fhir_id.encode(), version, instant(updated).encode(), more, text[cut:],
    )  # fmt: skip
