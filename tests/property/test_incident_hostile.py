"""Names, reasons and messages from outside do nothing in a report: no markup, link, mention or row of their own."""

from __future__ import annotations

import re
from html.parser import HTMLParser
from typing import Any

import pytest
from helpers_incident import EXCUSE, at, hold, incident, late_events, no_trouble
from hypothesis import example, given
from hypothesis import strategies as st
from markdown_it import MarkdownIt
from markdown_it.token import Token
from msgspec import structs
from strandline.reporting.facts import Facts, Failing, RefusedRows, SinkState
from strandline.reporting.html import report_html
from strandline.reporting.markdown import foreign, report_markdown
from strandline.reporting.words import Foreign

HOSTILE = [
    "<script>alert(1)</script>",
    "</title></style></svg><img src=x onerror=alert(1)>",
    "a\"onmouseover='x' b=",
    "a | b || c",
    "a\\| b \\",
    "line\nbreak\r\n\n# heading\n\n- item\n\n| a | b |\n|---|---|",
    "[link](http://example.net) ![p](http://example.net/p.png) <http://example.net>",
    "http://example.net www.example.net WWW.example.net someone@example.net @team #12 :smile: $x^2$ ~~gone~~",
    "`code` ``more`` *em* **strong** _em_ __strong__ ***",
    "&lt;b&gt; &amp; &#60;",
    "{now} {0} {name!r} {{",
    "\u202eright to left\u202c \u0000\u0007\u2028end",
    "\U0001f4a5" * 200,
    "| --- | :--- |",
    "--- *** ===",
    " ",
]


def told(name: str) -> Facts:
    """An incident in which everything that comes from outside is this text."""
    act = structs.replace(EXCUSE, subject=name, who=name, reason=name)
    trouble = no_trouble(
        failing=[Failing(sink=name, from_ns=at(0), to_ns=at(9), goes_on=False)],
        sinks=[SinkState(sink=name, failing_since_ns=at(1), last_error=name, paused=False, waiting_events=1)],
        refused_rows=[RefusedRows(sink=name, events=2, detail=name)],
        failure=name,
    )
    held = [hold("silent_source", 100, 880, name), hold("sink_full", 1000, 1100, sink=name)]
    return incident(held, feed=name, late=late_events((name, 3, 1200, 1201, 4)), trouble=trouble, acts=[act])


class Structure(HTMLParser):
    """Tags with their attributes' names, and the text between them."""

    def __init__(self, text: str) -> None:
        super().__init__(convert_charrefs=True)
        self.tags: list[Any] = []
        self.text = ""
        self.feed(text)
        self.close()

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.tags.append((tag, [name for name, _ in attrs]))

    def handle_endtag(self, tag: str) -> None:
        self.tags.append(tag)

    def handle_comment(self, data: str) -> None:
        self.tags.append(("comment", data))

    def handle_data(self, data: str) -> None:
        self.text += data


def kinds(text: str) -> list[Any]:
    """What a reader of CommonMark with tables makes of a text: kinds of tokens, those within lines too."""

    def all_of(tokens: list[Token]) -> list[Any]:
        return [(token.type, token.tag, all_of(token.children or [])) for token in tokens if token.type != "text"]

    return all_of(MarkdownIt("commonmark").enable("table").enable("strikethrough").parse(text))


texts = st.one_of(
    st.text(max_size=40),
    st.text(alphabet="<>&|\\`*_[]()!#@:$~^=-+.\"'\n\t /wht{}", max_size=40),
)


def every(test: Any) -> Any:
    for text in HOSTILE:
        test = example(text)(test)
    return given(texts)(test)


@every
def test_html_has_the_same_elements_whatever_the_names(name: str) -> None:
    plain = Structure(report_html(told("gateway")))
    hostile = Structure(report_html(told(name)))
    if name.strip():  # a reason that is blank is left out, as it would be for any other incident
        assert hostile.tags == plain.tags
    assert {tag[0] for tag in hostile.tags if isinstance(tag, tuple)}.isdisjoint({"script", "img", "a", "iframe"})
    assert Foreign(name).shown in hostile.text


@every
def test_markdown_has_the_same_structure_whatever_the_names(name: str) -> None:
    if name.strip():
        assert kinds(report_markdown(told(name))) == kinds(report_markdown(told("gateway")))


@every
def test_markdown_shows_a_name_as_it_is(name: str) -> None:
    """What a reader makes of it in a sentence and in a cell is the text itself."""
    shown = Foreign(name).shown
    (_, inline, _) = MarkdownIt("commonmark").parse(f"so: {foreign(name)}.")
    assert "".join(child.content for child in inline.children or []) == f"so: {shown}."
    cells = MarkdownIt("commonmark").enable("table").parse(f"| a | b |\n| --- | --- |\n| x{foreign(name)}x | y |")
    found = [token for token in cells if token.type == "inline"]
    assert ["".join(child.content for child in token.children or []) for token in found[2:]] == [f"x{shown}x", "y"]


@every
def test_nothing_in_markdown_looks_like_a_link_or_a_mention(name: str) -> None:
    """Extensions of ticket systems look at the plain text (common practice, no source): it holds none of these."""
    written = foreign(name)
    assert not re.search(r"(?i)://|www\.|(?<!&)#\d|@|\$|:\w+:", written)
    assert written.isprintable() and "\n" not in written


@pytest.mark.parametrize("name", HOSTILE)
def test_the_file_needs_nothing_from_outside(name: str) -> None:
    """Addresses stand in it as text only: no attribute loads or leads anywhere."""
    html = report_html(told(name))
    tags = Structure(html).tags
    attributes = {attribute for tag in tags if isinstance(tag, tuple) for attribute in tag[1]}
    assert attributes.isdisjoint({"src", "href", "xlink:href", "srcset", "action", "style", "data", "onload"})
    assert not any(attribute.startswith("on") for attribute in attributes)
    assert "default-src 'none'" in html and "@import" not in html
