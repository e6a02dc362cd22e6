"""Replays into a store: the batches of a replay, written by a sink of the service. No decision is taken here."""

from __future__ import annotations

import asyncio
from collections.abc import Iterator
from pathlib import Path

from strandline.core.columns import Batch, Lane
from strandline.errors import CaptureError
from strandline.ports import Sink
from strandline.sinks.sqlite import SqliteSink

from .lines import CapturedLines

GROUP_EVENTS = 50_000  # in one transaction
GROUP_BATCHES = 5_000


def write_sqlite(path: Path, feed: str, batches: Iterator[Batch], lines: CapturedLines) -> int:
    """Write ordered and late batches to a new SQLite file; how many events. Raises CaptureError and sink errors."""
    if path.exists():
        raise CaptureError(f"{path} exists already; a replay writes to a new file: remove it or name another")
    return asyncio.run(_write(SqliteSink(path, feed), batches, lines))


async def _write(sink: Sink, batches: Iterator[Batch], lines: CapturedLines) -> int:
    written = 0
    try:
        await sink.open()
        groups: dict[Lane, list[Batch]] = {lane: [] for lane in sink.lanes}
        for batch in batches:
            if batch.lane not in groups or not len(batch):
                continue
            group = groups[batch.lane]
            group.append(batch)
            place = int(batch.refs["place"].min())
            lines.kept_place = place if lines.kept_place is None else min(lines.kept_place, place)
            if sum(map(len, group)) >= GROUP_EVENTS or len(group) >= GROUP_BATCHES:
                written += await _take_all(sink, groups, lines)
        return written + await _take_all(sink, groups, lines)
    finally:
        await sink.close()


async def _take_all(sink: Sink, groups: dict[Lane, list[Batch]], lines: CapturedLines) -> int:
    written = 0
    for lane, group in groups.items():
        if group:
            reached = (await sink.take(group, lines)).get(lane, 0)
            if reached < group[-1].number:
                raise CaptureError(f"the store took lane {lane} only up to batch {reached} of {group[-1].number}")
            written += sum(map(len, group))
            group.clear()
    lines.kept_place = None
    return written
