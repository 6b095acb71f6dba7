"""The fast pass: settles a resource that is plainly right, without a walk; the rest goes the thorough way.

Generated schemas (see `fast_forms`) are run by jsonschema-rs without call-backs. What they cannot say of a
Bundle (targets in other entries, full URLs twice) is looked at here. Whatever is accepted has exactly the
issues returned, as the thorough pass would say; whatever is refused may still be right.
"""

from __future__ import annotations

import re
from collections.abc import Mapping, Sequence
from typing import Any

from fhirgallop.conformance import fast_forms as forms
from fhirgallop.conformance.fast_residue import codes_apart, components_apart
from fhirgallop.conformance.fast_walk import judged_well, no_narrative, without_narrative
from fhirgallop.conformance.registry import Registry
from fhirgallop.conformance.vital_signs import PROFILES as VITAL_SIGNS
from fhirgallop.conformance.vital_signs import profiles_for
from fhirgallop.outcome import Issue

_KINDS = {"transaction": True, "batch": True, "collection": False}
_LONG = re.compile(rb"[0-9.]{17}")
_MAX_KINDS = 32
# not what JSON can hold, or of the wrong shape: the walk says what it is
_ODD = (ValueError, TypeError, AttributeError, KeyError, OverflowError, RecursionError)


def settle(
    value: Any, known: Registry, text: bytes | None = None, *, same: bool = False
) -> list[Issue] | None:
    """All issues of a resource that is plainly right (only missing narratives, then); None when in doubt.

    Args:
        value: the parsed resource, in which it is proved that no key stood twice.
        known: the definitions.
        text: the text it was read from, if it was.
        same: whether that text is the value written again, byte for byte.
    """
    if text is not None and not same and known.edition.name == "R5" and _LONG.search(text):
        return None  # R5 limits the digits of a number, which a float has lost
    try:
        kind = value["resourceType"]
        if kind == "Bundle":
            missing = _bundle(value, known, text)
        else:
            if _accepted(value, kind, known) is None:
                return None
            if "text" in value:
                return []
            missing = [] if kind in no_narrative(known) else [kind]
    except _ODD:
        return None
    if missing is None:
        return None
    if not missing:
        return []
    # the place of a missing narrative in a text has to be found
    return without_narrative(value, missing, known) if text is None else None


def _accepted(resource: dict[str, Any], kind: str, known: Registry) -> forms.Ready | None:
    """The form that a single resource was found to have; None when it is in doubt."""
    ready = forms.fitting(known, _what(resource, kind), tuple(resource))
    if ready is None or not ready.is_valid(resource):
        return None
    if ready.components and not codes_apart(resource):
        return None
    return None if ready.checks and not all(c(resource[key]) for key, c in ready.checks) else ready


def _what(resource: dict[str, Any], kind: str) -> forms.What:
    """The type of a resource, the profiles it declares, and those that its vital-signs codes ask for."""
    declared: tuple[str, ...] = ()
    if "meta" in resource and "profile" in resource["meta"]:
        declared = tuple(resource["meta"]["profile"])
    if kind == "Observation":
        for coding in resource["code"].get("coding", ()):
            if coding.get("code") in VITAL_SIGNS:
                return kind, declared, tuple(dict.fromkeys(profiles_for(resource)))
    return kind, declared, ()


def _bundle(value: dict[str, Any], known: Registry, text: bytes | None) -> list[str] | None:
    """Expressions of the resources without narrative; None when something in the Bundle is in doubt."""
    asks = _KINDS.get(value["type"])
    if asks is None or not forms.bundle_head(known)(value):
        return None
    entries = value["entry"]
    unasked = no_narrative(known)
    urls: dict[str, str] = {}
    alike: dict[forms.What, list[int]] = {}
    missing: list[str] = []
    for index, entry in enumerate(entries):
        resource = entry["resource"]
        kind = urls[entry["fullUrl"]] = resource["resourceType"]
        what = _what(resource, kind)
        places = alike.get(what)
        if places is None:
            alike[what] = [index]
        else:
            places.append(index)
        if "text" not in resource and kind not in unasked:
            missing.append(f"Bundle.entry[{index}].resource")
    if len(urls) != len(entries) or len(alike) > _MAX_KINDS:
        return None
    rest: list[int] = []
    for what, places in alike.items():
        if not _plain_entries([entries[place] for place in places], what, asks, urls, known):
            alone = len(places) == 1
            rest += [p for p in places if alone or not _plain_entries([entries[p]], what, asks, urls, known)]
    doubtful = _doubtful(entries, rest, urls, asks, known) if rest else ()
    if doubtful is None or (doubtful and not judged_well(value, text, doubtful, known)):
        return None
    return missing


def _plain_entries(
    entries: list[dict[str, Any]],
    what: forms.What,
    asks: bool,
    urls: Mapping[str, str],
    known: Registry,
) -> bool:
    """Whether one schema says all of entries of one type and with the same profiles, seen together.

    One call for all is much faster than one for each; and none of them refers to other entries, or most do.
    """
    alone = forms.plain_entries(known, what, asks)
    form = alone.linked if alone.expected else alone
    if not form.is_valid(entries):
        form = alone if alone.expected else alone.linked
        if not form.is_valid(entries):
            return False
    for entry in entries:
        resource = entry["resource"]
        if form.targets and not _led_right(resource, form.targets, urls):
            return False
        if "component" in resource and not components_apart(resource):
            return False
        for key, check in form.checks:
            if key in resource and not check(resource[key]):
                return False
    return True


def _doubtful(
    entries: Sequence[dict[str, Any]],
    places: Sequence[int],
    urls: Mapping[str, str],
    asks: bool,
    known: Registry,
) -> list[int] | None:
    """Which of these entries have a resource to be walked; None when they are too many, or one is wrong.

    `urls`: type of the resource under each full URL.
    """
    around = forms.any_entry(asks)
    doubtful: list[int] = []
    for place in places:
        entry = entries[place]
        resource = entry["resource"]
        kind = resource["resourceType"]
        if not around(entry) or not _consistent(entry, resource, kind):
            return None
        ready = _accepted(resource, kind, known)
        if ready is None:
            doubtful.append(place)
            if len(doubtful) > max(4, len(entries) // 4):
                return None
        elif not _led_right(resource, ready.targets, urls):
            return None
    return doubtful


def _consistent(entry: Mapping[str, Any], resource: Mapping[str, Any], kind: str) -> bool:
    """Whether fullUrl and request agree with the resource's type and id, as the bundles clause asks."""
    place = f"{kind}/{resource['id']}" if "id" in resource else None
    url = entry["fullUrl"]
    if url[:9] != "urn:uuid:" and (place is None or not url.endswith(f"/{place}")):
        return False
    if "request" not in entry:
        return True
    request = entry["request"]
    asked = request["url"]
    if request["method"] == "POST":
        return bool(asked == kind)
    return bool(asked == place or asked.partition("?")[0] == kind != asked)


def _led_right(value: Any, targets: Mapping[str, Any], urls: Mapping[str, str]) -> bool:
    """Whether every reference that is a full URL of the Bundle leads to a type allowed at its place."""
    for held in value if type(value) is list else (value,):
        for key, step in targets.items():
            if key not in held:
                continue
            inner = held[key]
            if type(step) is dict:
                if not _led_right(inner, step, urls):
                    return False
                continue
            for item in inner if type(inner) is list else (inner,):
                if "reference" in item and (led := urls.get(item["reference"])) and led not in step:
                    return False
    return True
