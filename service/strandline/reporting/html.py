"""A report as one HTML file: no other file, no script, no network, and it says so to the browser. Pure.

What comes from outside is escaped wherever it stands, and set apart in its direction of writing (`bdi`).
"""

from __future__ import annotations

from collections.abc import Iterator
from html import escape

from ..page_style import POLICY
from .facts import Facts
from .picture import picture
from .report import Section, report_of
from .style import STYLE
from .tables import Table
from .words import Foreign, Words, plain


def report_html(facts: Facts) -> str:
    """The whole file."""
    report = report_of(facts)
    parts = (*_head(report.title, report.made), *_sections(report.sections, facts), _FOOT)
    return "".join(f"{part}\n" for part in parts)


_FOOT = "</main>\n</body>\n</html>"


def _head(title: Words, made: str) -> Iterator[str]:
    yield f'<!DOCTYPE html>\n<html lang="en">\n<head>\n<meta charset="utf-8">\n<title>{escape(plain(title))}</title>'
    yield f'<meta http-equiv="Content-Security-Policy" content="{POLICY}">'
    yield '<meta name="viewport" content="width=device-width, initial-scale=1">'
    yield '<meta name="color-scheme" content="light dark">'
    yield f'<style>\n{STYLE}</style>\n</head>\n<body>\n<main>\n<h1>{_text(title)}</h1>\n<p class="soft">{made}</p>'


def _text(words: Words) -> str:
    return "".join(
        f"<bdi>{escape(part.shown)}</bdi>" if isinstance(part, Foreign) else escape(part, quote=False)
        for part in words
    )


def _sections(sections: list[Section], facts: Facts) -> Iterator[str]:
    for section in sections:
        if section.title == "Caution":
            said = "".join(_text(words) for words in section.sentences)
            yield f'<section>\n<h2>{section.title}</h2>\n<p class="caution">{said}</p>\n</section>'
            continue
        yield f"<section>\n<h2>{section.title}</h2>"
        if section.sentences:
            yield "<ul>"
            yield from (f"<li>{_text(words)}</li>" for words in section.sentences)
            yield "</ul>"
        if section.picture:
            yield f"<figure>\n{picture(facts)}</figure>"
        yield from map(_table, section.tables)
        yield "</section>"


def _table(table: Table) -> str:
    if not table.rows:
        return f"<p><strong>{escape(table.caption)}.</strong> {escape(table.empty)}</p>"
    head = _cells("th", [escape(heading) for heading in table.headings], table.numbers, ' scope="col"')
    body = "".join(f"<tr>{_cells('td', list(map(_text, row)), table.numbers)}</tr>\n" for row in table.rows)
    return (
        f'<div class="wide"><table>\n<caption>{escape(table.caption)}</caption>\n<thead><tr>{head}</tr></thead>\n'
        f"<tbody>\n{body}</tbody>\n</table></div>"
    )


def _cells(kind: str, texts: list[str], numbers: tuple[int, ...], more: str = "") -> str:
    classes = [' class="number"' if place in numbers else "" for place in range(len(texts))]
    return "".join(f"<{kind}{more}{each}>{text}</{kind}>" for each, text in zip(classes, texts, strict=True))
