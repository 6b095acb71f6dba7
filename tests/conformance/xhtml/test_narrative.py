"""Narratives: what may stand in one, what may not, and hostile texts."""

from __future__ import annotations

import re

import pytest
from hypothesis import given
from hypothesis import strategies as st

from fhirgallop.conformance import xhtml

XMLNS = 'xmlns="http://www.w3.org/1999/xhtml"'

# The XPath of txt-1 in the StructureDefinition of Narrative, FHIR R4 4.0.1 (CC0-1.0).
PUBLISHED_XPATH = (
    "not(descendant-or-self::*[not(local-name(.)=('a', 'abbr', 'acronym', 'b', 'big', 'blockquote', 'br', "
    "'caption', 'cite', 'code', 'col', 'colgroup', 'dd', 'dfn', 'div', 'dl', 'dt', 'em', 'h1', 'h2', "
    "'h3', 'h4', 'h5', 'h6', 'hr', 'i', 'img', 'li', 'ol', 'p', 'pre', 'q', 'samp', 'small', 'span', "
    "'strong', 'sub', 'sup', 'table', 'tbody', 'td', 'tfoot', 'th', 'thead', 'tr', 'tt', 'ul', 'var'))]) "
    "and not(descendant-or-self::*/@*[not(name(.)=('abbr', 'accesskey', 'align', 'alt', 'axis', "
    "'bgcolor', 'border', 'cellhalign', 'cellpadding', 'cellspacing', 'cellvalign', 'char', 'charoff', "
    "'charset', 'cite', 'class', 'colspan', 'compact', 'coords', 'dir', 'frame', 'headers', 'height', "
    "'href', 'hreflang', 'hspace', 'id', 'lang', 'longdesc', 'name', 'nowrap', 'rel', 'rev', 'rowspan', "
    "'rules', 'scope', 'shape', 'span', 'src', 'start', 'style', 'summary', 'tabindex', 'title', 'type', "
    "'valign', 'value', 'vspace', 'width'))])"
)


def narrative(content: str) -> str:
    return f"<div {XMLNS}>{content}</div>"


def rules(text: str) -> list[str]:
    return [issue.rule for issue in xhtml.check(text, "Patient.text.div")]


@pytest.mark.parametrize(
    "text",
    [
        narrative("<p>a</p>"),
        f'<div {XMLNS} lang="en" xml:lang="en"><p>a</p></div>',
        narrative('<table class="grid"><thead><tr><th scope="col">a</th></tr></thead></table>'),
        narrative('<a name="x">b</a><a href="#x">a</a>'),
        narrative('<img src="#picture" alt=""/>'),  # a picture says something
        narrative('<p style="color: red; background: url(tbl.png)">a</p>'),
        narrative("&lt;&gt;&amp;&quot;&apos;&#160;&#xa9;"),
        narrative("<![CDATA[a]]>"),
        narrative("<!-- note --><b>a</b>"),
        '\n <h:div xmlns:h="http://www.w3.org/1999/xhtml">a<h:br/></h:div> \n',
        narrative("日本語 𝔘"),
    ],
)
def test_permitted(text: str) -> None:
    assert rules(text) == []


@pytest.mark.parametrize(
    ("text", "says"),
    [
        ("", "well-formed"),
        ("a", "well-formed"),
        (narrative("<p>a"), "well-formed"),
        (narrative("<p>a</b></p>"), "well-formed"),
        (narrative("a & b"), "well-formed"),
        (narrative("<p class=a>b</p>"), "well-formed"),
        (narrative("a") + narrative("b"), "well-formed"),
        (narrative("a\x00"), "well-formed"),
        (narrative("a\ud800"), "surrogate"),
        (narrative("&nbsp;a"), "named entity"),
        (narrative("&copy;"), "named entity"),
        ("<div>a</div>", "namespace"),
        ('<div xmlns="http://www.w3.org/1999/html">a</div>', "namespace"),
        (f"<p {XMLNS}>a</p>", "one div"),
        (f"<?xml version='1.0'?>{narrative('a')}", "XML declaration"),
        (narrative("<?php x ?>a"), "processing"),
        (f"<!DOCTYPE div>{narrative('a')}", "DOCTYPE"),
        (narrative("<svg xmlns='http://www.w3.org/2000/svg'/>a"), "outside the XHTML namespace"),
        *(
            (narrative(f"<{name}>a</{name}>"), f"element {name}")
            for name in (
                "script",
                "form",
                "input",
                "iframe",
                "frame",
                "object",
                "embed",
                "head",
                "body",
                "base",
            )
        ),
        *(
            (narrative(f"<{name}>a</{name}>"), f"element {name}")
            for name in ("link", "style", "meta", "video", "canvas", "button", "font", "applet", "noscript")
        ),
        *(
            (narrative(f'<p {name}="x">a</p>'), f"attribute {name}")
            for name in ("onclick", "onload", "xyz", "data-a")
        ),
        (narrative('<p xlink:href="x" xmlns:xlink="http://www.w3.org/1999/xlink">a</p>'), "attribute href"),
        (narrative('<a href="javascript:alert(1)">a</a>'), "run a script"),
        (narrative('<a href=" JaVaScRiPt:alert(1)">a</a>'), "run a script"),
        (narrative('<img src="data:text/html,x"/>'), "run a script"),
        (narrative('<p style="width: expression(alert(1))">a</p>'), "style"),
        (narrative('<p style="@import url(http://a.example/x.css)">a</p>'), "style"),
    ],
)
def test_refused_by_txt_1(text: str, says: str) -> None:
    [issue] = xhtml.check(text, "Patient.text.div")
    assert issue.rule == "txt-1"
    assert issue.severity == "error"
    assert says in issue.text
    assert issue.expression == "Patient.text.div"


@pytest.mark.parametrize(
    "content", ["", " \n\t ", "<p> </p><br/>", "&#160;", "<!-- a -->", '<img alt="a"/>', '<img src=" "/>']
)
def test_blank_is_refused_by_txt_2(content: str) -> None:
    assert rules(narrative(content)) == ["txt-2"]


def test_several_faults_come_out_together() -> None:
    assert rules("<div><script/><p onclick='x'> </p></div>").count("txt-1") >= 3
    assert "txt-2" in rules(f"<div {XMLNS}><script/></div>")


def test_no_content_is_echoed() -> None:
    text = narrative('<Jane-Doe-born-1970-01-01/><p Jane.Doe="Jane Doe">Jane & Doe</p>')
    assert all("Doe" not in issue.text for issue in xhtml.check(text, "x"))


def _bomb() -> str:
    entities = "".join(f'<!ENTITY e{n} "{f"&e{n - 1};" * 10}">' for n in range(1, 12))
    return f'<!DOCTYPE div [<!ENTITY e0 "ha">{entities}]>{narrative("&e11;")}'


@pytest.mark.parametrize(
    "text",
    [
        _bomb(),
        '<!DOCTYPE div [<!ENTITY a SYSTEM "file:///etc/passwd">]>' + narrative("&a;"),
        f'<!DOCTYPE div [<!ENTITY a "{"x" * 100_000}">]>' + narrative("&a;" * 10_000),
    ],
    ids=["nested entities", "external entity", "large entity"],
)
def test_entities_are_never_expanded(text: str) -> None:
    [issue] = xhtml.check(text, "x")
    assert "DOCTYPE" in issue.text


@pytest.mark.parametrize(
    "text",
    [
        narrative("<p>a</p>" * 200_000),
        narrative("a" * 20_000_000),
        narrative("&#97;" * 500_000),
    ],
    ids=["many elements", "long text", "many references"],
)
def test_long_narratives_are_read(text: str) -> None:
    assert rules(text) == []


@pytest.mark.parametrize(
    "text",
    [
        "<div>" * 200_000,
        narrative("<b>" * 5_000 + "a" + "</b>" * 5_000),
        narrative("&" + "a" * 10_000_000),
        "<div " + " ".join(f'a{n}="1"' for n in range(200_000)) + "/>",
        narrative(f'<p style="{"expression " * 300_000}">a</p>'.replace("expression ", "expression(", 1)),
        "<" * 1_000_000,
        "&" * 1_000_000,
    ],
    ids=["deep", "nested", "endless entity", "many attributes", "style", "brackets", "ampersands"],
)
def test_hostile_narratives_are_refused_with_few_issues(text: str) -> None:
    assert 1 <= len(rules(text)) <= xhtml.MAX_ISSUES


@given(st.text(st.characters(codec=None), max_size=60))
def test_any_text_gives_issues_and_never_raises(content: str) -> None:
    for text in (content, narrative(content), f"<div {content}>"):
        for issue in xhtml.check(text, "x"):
            assert issue.rule in ("txt-1", "txt-2")


def test_allow_list_is_the_published_one() -> None:
    elements, attributes = (
        set(re.findall(r"'([a-z0-9]+)'", group)) for group in re.findall(r"=\(([^)]*)\)", PUBLISHED_XPATH)
    )
    assert elements == xhtml.ELEMENTS
    assert attributes == xhtml.ATTRIBUTES
