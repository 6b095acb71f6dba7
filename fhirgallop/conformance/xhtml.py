# ruff: noqa: ARG002 - the signatures are those of SAX
"""Narrative: is `Narrative.div` well-formed XHTML of the permitted kind, and does it say anything?

Sources: FHIR R4, Narrative.div, rules txt-1 and txt-2 (the XPath published with them lists elements and
attributes) and narrative.html ("The XHTML content": one div in the XHTML namespace, no DOCTYPE, no entities
beyond XML's five, no scripts, forms, frames, objects, event attributes or external style sheets). HTML 4.0,
chapters 7 to 11 and 15. `xml:lang` and `xml:space` are XHTML's own forms and are let through.

No tree is built: the text is read once, element by element, in time linear in its length.
"""

from __future__ import annotations

import re
from collections.abc import Iterator
from typing import Any
from xml.sax import SAXException
from xml.sax.handler import ContentHandler, feature_namespaces

from defusedxml.common import DefusedXmlException
from defusedxml.expatreader import create_parser

from fhirgallop.outcome import Issue

NAMESPACE = "http://www.w3.org/1999/xhtml"
_XML_NAMESPACE = "http://www.w3.org/XML/1998/namespace"

ELEMENTS = frozenset((
    "a", "abbr", "acronym", "b", "big", "blockquote", "br", "caption", "cite", "code", "col", "colgroup",
    "dd", "dfn", "div", "dl", "dt", "em", "h1", "h2", "h3", "h4", "h5", "h6", "hr", "i", "img", "li", "ol",
    "p", "pre", "q", "samp", "small", "span", "strong", "sub", "sup", "table", "tbody", "td", "tfoot",
    "th", "thead", "tr", "tt", "ul", "var",
))  # fmt: skip
ATTRIBUTES = frozenset((
    "abbr", "accesskey", "align", "alt", "axis", "bgcolor", "border", "cellhalign", "cellpadding",
    "cellspacing", "cellvalign", "char", "charoff", "charset", "cite", "class", "colspan", "compact",
    "coords", "dir", "frame", "headers", "height", "href", "hreflang", "hspace", "id", "lang", "longdesc",
    "name", "nowrap", "rel", "rev", "rowspan", "rules", "scope", "shape", "span", "src", "start", "style",
    "summary", "tabindex", "title", "type", "valign", "value", "vspace", "width",
))  # fmt: skip

MAX_DEPTH = 500
MAX_ISSUES = 20
_ENTITY = re.compile(r"&(?!(?:lt|gt|amp|quot|apos);|#)[A-Za-z][A-Za-z0-9]{0,30};", re.ASCII)
_ACTIVE_URL = re.compile(r"[\x00-\x20]*(?:javascript|vbscript|data:text/html)", re.IGNORECASE | re.ASCII)
_ACTIVE_STYLE = re.compile(r"expression\s*\(|javascript:|behaviou?r\s*:|-moz-binding|@import", re.IGNORECASE)
_DECLARATION = re.compile(r"[ \t\r\n]*<\?xml\b", re.ASCII)
_BLANK = re.compile(r"[ \t\r\n\u00a0\u1680\u2000-\u200b\u2028\u2029\u202f\u205f\u3000\ufeff]*")


class _Stop(Exception):  # noqa: N818 - a signal, not a fault
    """Nothing more can be learnt from this text."""


class _Faults:
    """The faults found, each wording once."""

    def __init__(self, expression: str) -> None:
        self.expression = expression
        self.issues: dict[str, Issue] = {}

    def add(self, rule: str, text: str) -> None:
        if len(self.issues) < MAX_ISSUES:
            self.issues.setdefault(text, Issue("error", "invariant", rule, text, self.expression))


class _Handler(ContentHandler):
    """Sees elements and text go by."""

    def __init__(self, faults: _Faults) -> None:
        super().__init__()
        self._faults = faults
        self._depth = 0
        self.says_something = False

    def startElementNS(self, name: tuple[str | None, str], qname: str | None, attrs: Any) -> None:  # noqa: N802
        namespace, local = name
        self._depth += 1
        if self._depth > MAX_DEPTH:
            self._faults.add(
                "txt-1", f"The narrative is nested more than {MAX_DEPTH} elements deep. Flatten it."
            )
            raise _Stop
        if self._depth == 1:
            self._root(namespace, local)
        elif namespace != NAMESPACE:
            self._faults.add(
                "txt-1",
                "The narrative holds an element outside the XHTML namespace. Take it out or put it in XHTML.",
            )
        elif local not in ELEMENTS:
            self._faults.add("txt-1", f"The narrative may not hold the element {_shown(local)}. Take it out.")
        for (space, attribute), value in attrs.items():
            self._attribute(space, attribute, value)
        if local == "img" and attrs.get((None, "src"), "").strip():
            self.says_something = True

    def endElementNS(self, name: tuple[str | None, str], qname: str | None) -> None:  # noqa: N802
        self._depth -= 1

    def characters(self, content: str) -> None:
        if not self.says_something and not _BLANK.fullmatch(content):
            self.says_something = True

    def processingInstruction(self, target: str, data: str) -> None:  # noqa: N802
        self._faults.add("txt-1", "The narrative may not hold processing instructions. Take them out.")

    def _root(self, namespace: str | None, local: str) -> None:
        if local != "div":
            self._faults.add("txt-1", "The narrative must be one div element. Put all of it into a div.")
        if namespace != NAMESPACE:
            self._faults.add(
                "txt-1", f'The div of the narrative must stand in the namespace xmlns="{NAMESPACE}".'
            )

    def _attribute(self, space: str | None, name: str, value: str) -> None:
        if space == _XML_NAMESPACE and name in ("lang", "space"):
            return
        if space is not None or name not in ATTRIBUTES:
            self._faults.add(
                "txt-1", f"The narrative may not hold the attribute {_shown(name)}. Take it out."
            )
        elif name in ("href", "src", "cite", "longdesc") and _ACTIVE_URL.match(value):
            self._faults.add(
                "txt-1", f"The attribute {name} of the narrative may not run a script. Take it out."
            )
        elif name == "style" and _ACTIVE_STYLE.search(value):
            self._faults.add(
                "txt-1",
                "A style of the narrative may not run a script or import a sheet. Keep plain properties.",
            )


def check(text: str, expression: str) -> Iterator[Issue]:
    """Everything that is wrong with a narrative.

    Args:
        text: content of `Narrative.div`.
        expression: FHIRPath of that element, for the issues.

    Yields:
        Errors with rule txt-1 (kind of XHTML) or txt-2 (blank); at most 20.
    """
    faults = _Faults(expression)
    handler = _Handler(faults)
    if _DECLARATION.match(text):
        faults.add("txt-1", "The narrative must be one div element: take out the XML declaration before it.")
    elif _read(text, handler, faults) and not handler.says_something:
        faults.add(
            "txt-2", "The narrative is blank. Write what the resource says, or leave the narrative out."
        )
    yield from faults.issues.values()


def _read(text: str, handler: _Handler, faults: _Faults) -> bool:
    """Feeds the text to the parser; False when it could not be read to its end."""
    parser = create_parser(forbid_dtd=True)
    parser.setFeature(feature_namespaces, True)
    parser.setContentHandler(handler)
    try:
        # in one piece: in several, a token that goes on for ever would be read again with each
        parser.feed(text.encode("utf-8"))
        parser.close()
    except UnicodeEncodeError:
        faults.add(
            "txt-1", "The narrative holds half a character (a lone surrogate). Write the whole character."
        )
    except DefusedXmlException:
        faults.add("txt-1", "The narrative may not hold a DOCTYPE or define entities. Take them out.")
    except SAXException:
        faults.add("txt-1", _not_well_formed(text))
    except _Stop:
        pass
    else:
        return True
    return False


def _not_well_formed(text: str) -> str:
    if _ENTITY.search(text):
        return (
            "The narrative uses a named entity that XML does not know (such as nbsp). "
            "Write the character itself or its number (&#160;)."
        )
    return (
        "The narrative is not well-formed XML. Close every element, quote every attribute, write & as &amp;."
    )


def _shown(name: str) -> str:
    """A name from the narrative, cut so that nothing but a name can be echoed."""
    return name if re.fullmatch(r"[A-Za-z][A-Za-z0-9-]{0,19}", name, re.ASCII) else "with that name"
