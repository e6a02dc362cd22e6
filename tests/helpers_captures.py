"""Captures for tests: made from the records of a feed in memory, read back as plain values."""

from __future__ import annotations

import io
from collections.abc import Iterable, Sequence
from pathlib import Path

from helpers_feed import Shell, Written, batches_of, saved_bytes
from strandline.core.columns import Batch
from strandline.core.feed import Feed
from strandline.core.records import VERSION
from strandline.replay.capture import Capture, CaptureWriter, Meta, held_lines
from strandline.replay.figures import Figures
from strandline.replay.replaying import Folding, WhatIf
from strandline.replay.verifying import Verifying

FEED = "river-gauges"
Engine = Folding | WhatIf | Verifying


def written(records: Iterable[Written], meta: Meta | None = None, state: bytes = b"", held: bytes = b"") -> bytes:
    """The capture of some records."""
    out = io.BytesIO()
    writer = CaptureWriter(out.write, meta or Meta(FEED, "journal", 7), state=[state] if state else (), held=held)
    for record in records:
        writer.add(record.kind, VERSION, record.lsn, record.body)
    writer.close()
    assert writer.bytes_written == len(out.getvalue())
    return out.getvalue()


def captured(shell: Shell, begin: int = 0, *, lines: bool = True) -> bytes:
    """The capture of a feed's records from number `begin` on, with the state before it."""
    if not begin:
        return written(shell.records, Meta(FEED, "journal", 7, lines=lines))
    feed = shell.folded(upto=begin)
    places, lengths = held_lines(feed.state)
    held = b"".join(
        bytes(shell.journal[place : place + length]) + b"\n"
        for place, length in zip(places.tolist(), lengths.tolist(), strict=True)
    )
    meta = Meta(FEED, "journal", 7, feed.next_lsn, lines=lines)
    return written(shell.records[begin:], meta, saved_bytes(feed), held if lines else b"")


def kept(path: Path, content: bytes) -> Path:
    """Write it to a file."""
    path.write_bytes(content)
    return path


def told(shell: Shell, begin: int = 0) -> list[tuple[Batch, list[bytes]]]:
    """Every batch that records from number `begin` on make final, with its lines."""
    before = len(batches_of(shell.records[:begin], shell.settings))
    return [(batch, shell.lines(batch)) for batch in batches_of(shell.records, shell.settings)[before:]]


def lines_of(engine: Engine) -> Sequence[tuple[Batch, list[bytes]]]:
    """Every batch of a replay with its lines."""
    lines = engine.told.lines if isinstance(engine, Verifying) else engine.lines
    return [(batch, lines.lines(batch)) for batch in engine.batches()]


def figures_of(engine: Engine) -> Figures:
    """The sum of a replay."""
    for _ in engine.batches():
        pass
    return engine.figures


def folded(path: Path) -> Sequence[tuple[Batch, list[bytes]]]:
    """Every batch of a capture with its lines, folded."""
    with Capture(path) as capture:
        return lines_of(Folding(capture))


def continued(feed: Feed) -> Feed:
    """A feed in the same state as another, started anew by a new process."""
    again = Feed(feed.state.settings)
    again.state, again.next_lsn, again.durable_lsn = feed.state, feed.next_lsn, feed.next_lsn
    return again
