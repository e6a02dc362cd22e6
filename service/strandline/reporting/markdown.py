"""A report as Markdown (CommonMark 0.31 with the tables of GitHub's published extension). Pure.

Foreign texts are made so harmless that they can be no markup, no link, no mention, no line and no cell of their own.
"""

from __future__ import annotations

import re
from collections.abc import Iterator

from .facts import Facts
from .report import Report, Section, report_of
from .tables import Table
from .words import Foreign, Words

# What could begin or end a construct. With a backslash where CommonMark 2.4 knows it and a person can still read it;
# as a character reference (2.5) where an extension looks at the plain text: links that are made of bare addresses,
# mentions, references to tickets, mathematics, names of small pictures.
_BACKSLASH = set("\\`*_{}[]~^|=")
_REFERENCE = {"<": "&lt;", ">": "&gt;", "&": "&amp;"} | {character: f"&#{ord(character)};" for character in ":@#$"}
_WWW = re.compile(r"(?i)(www)\.")


def report_markdown(facts: Facts) -> str:
    """The whole file."""
    report = report_of(facts)
    return "\n".join(_lines(report)) + "\n"


def foreign(text: str) -> str:
    """A text that came from outside, as Markdown that shows it and does nothing else."""
    escaped = "".join(
        f"\\{character}" if character in _BACKSLASH else _REFERENCE.get(character, character)
        for character in Foreign(text).shown
    )
    return _WWW.sub(r"\1&#46;", escaped)


def _text(words: Words) -> str:
    return "".join(foreign(part.text) if isinstance(part, Foreign) else part for part in words)


def _lines(report: Report) -> Iterator[str]:
    yield f"# {_text(report.title)}"
    yield ""
    yield report.made
    for section in report.sections:
        yield ""
        yield f"## {section.title}"
        yield from _section(section)


def _section(section: Section) -> Iterator[str]:
    if section.sentences:
        yield ""
        yield from (f"- {_text(words)}" for words in section.sentences)
    for table in section.tables:
        yield ""
        yield f"**{table.caption}**"
        yield ""
        yield from _table(table)


def _table(table: Table) -> Iterator[str]:
    if not table.rows:
        yield table.empty
        return
    yield f"| {' | '.join(table.headings)} |"
    yield f"| {' | '.join('---:' if place in table.numbers else '---' for place in range(len(table.headings)))} |"
    for row in table.rows:
        yield f"| {' | '.join(_text(cell) for cell in row)} |"
