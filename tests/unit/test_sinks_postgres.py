"""The PostgreSQL sink against a real server: its tables as users see them, its errors, and what is its own."""

from __future__ import annotations

import msgspec
import pytest
from pathlib import Path
from helpers_postgres import ask, make_schema, schema_of, shared
from helpers_sinks import HeldLines
from sink_conformance import SinkConformance
from strandline.core.columns import Lane
from strandline.ports import Sink
from strandline.sinks.postgres import PostgresSink
from strandline.sinks.postgres_fields import storable


def plain(text: str | None) -> str | None:
    """A text as it was before `storable`."""
    literal = text is not None and text.startswith('"') and "\\u0000" in text
    return msgspec.json.decode(text, type=str) if literal and text else text


class TestConformance(SinkConformance):
    examples = 25

    def make(self, place: Path, feed: str) -> Sink:
        return PostgresSink(shared(), feed, schema=make_schema(shared(), place))

    def stored(self, place: Path, feed: str, lane: Lane) -> list[tuple[object, ...]]:
        schema = schema_of(place)
        if lane == "ordered":
            query = f"SELECT event FROM {schema}.events WHERE feed = $1 ORDER BY batch, position"
            return [(row[0].encode(),) for row in ask(shared(), query, storable(feed))]
        query = f"""SELECT time_ns, source, arrived_ns, late_by_ns, event FROM {schema}.late
            WHERE feed = $1 ORDER BY batch, position"""
        return [(row[0], plain(row[1]), *row[2:4], row[4].encode()) for row in ask(shared(), query, storable(feed))]
