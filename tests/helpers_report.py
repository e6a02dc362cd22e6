"""Reads a report as a browser would: elements, tables, numbers. Makes captures of numbered events. No judging."""

from __future__ import annotations

import json
from collections.abc import Sequence
from dataclasses import dataclass, field
from html.parser import HTMLParser
from pathlib import Path

from strandline import cli

VOID = {"meta"}


@dataclass(slots=True)
class Table:
    """A table: cells as (text, exact values in it)."""

    caption: str = ""
    rows: list[list[tuple[str, list[str]]]] = field(default_factory=list)

    def column(self, name: str) -> list[tuple[str, list[str]]]:
        """The cells below a heading."""
        place = [text for text, _ in self.rows[0]].index(name)
        return [row[place] for row in self.rows[1:]]


class Page(HTMLParser):
    """A page taken apart; ends that do not fit their beginnings are an error."""

    def __init__(self, text: str) -> None:
        super().__init__(convert_charrefs=True)
        self.elements: list[tuple[str, dict[str, str]]] = []
        self.tables: list[Table] = []
        self.texts: list[tuple[str, str]] = []  # innermost element, text
        self.values: list[str] = []
        self._open: list[str] = []
        self.feed(text)
        self.close()
        assert not self._open

    def handle_starttag(self, tag: str, attrs: Sequence[tuple[str, str | None]]) -> None:
        given = {name: value or "" for name, value in attrs}
        assert len(given) == len(attrs)
        self.elements.append((tag, given))
        if tag not in VOID:
            self._open.append(tag)
        if tag == "table":
            self.tables.append(Table())
        elif tag == "tr":
            self.tables[-1].rows.append([])
        elif tag in ("th", "td"):
            self.tables[-1].rows[-1].append(("", []))
        elif tag == "data":
            self.values.append(given["value"])
            if "tr" in self._open:
                self.tables[-1].rows[-1][-1][1].append(given["value"])

    def handle_startendtag(self, tag: str, attrs: Sequence[tuple[str, str | None]]) -> None:
        self.elements.append((tag, {name: value or "" for name, value in attrs}))

    def handle_endtag(self, tag: str) -> None:
        assert self._open.pop() == tag

    def handle_data(self, data: str) -> None:
        if self._open:
            self.texts.append((self._open[-1], data))
        if "caption" in self._open:
            self.tables[-1].caption += data
        elif "td" in self._open or "th" in self._open:
            row = self.tables[-1].rows[-1]
            row[-1] = (row[-1][0] + data, row[-1][1])

    def table(self, caption: str) -> Table:
        """The table of that caption."""
        return next(table for table in self.tables if table.caption == caption)

    def within(self, tag: str) -> list[str]:
        """Texts that stand directly in elements of that name."""
        return [text for found, text in self.texts if found == tag]


def numbered_capture(folder: Path, rows: Sequence[tuple[int, int, str, object]]) -> Path:
    """A capture of events (arrival ms, event time ms, source, what stands at /seq), made as a user makes it."""
    with (folder / "feed.ndjson").open("w") as file:
        for received, observed, source, number in rows:
            event = {"received_at": received, "observed_at": observed, "station": source, "seq": number}
            file.write(json.dumps(event) + "\n")
    out = folder / "feed.capture"
    pointers = ["--arrival", "/received_at", "--time", "/observed_at", "--unit", "ms", "--source", "/station"]
    named = ["--feed", "river-gauges", "--out", str(out)]
    assert cli.main(["capture", str(folder / "feed.ndjson"), *pointers, *named]) == 0
    return out
