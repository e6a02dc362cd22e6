"""`strandline late`, `quarantine` and `refused`: list, export and forget what a feed's lane store keeps.

Reads the file <data_dir>/feeds/<feed>/lanes.db through `sinks.lanes`, also while the service runs.
"""

from __future__ import annotations

import argparse
import base64
import contextlib
import os
import sys
import time
from collections.abc import Callable, Iterator, Sequence
from pathlib import Path
from typing import Any

import msgspec

from .cli_answers import FINE, chosen_file, complain, write_table
from .cli_values import instant_ns
from .config import load
from .errors import ConfigError, StrandlineError
from .ingest.timestamps import format_rfc3339
from .sinks.lanes import (
    ROWS_AT_MOST,
    KeptLane,
    LateRow,
    QuarantineRow,
    RefusedRow,
    forget_rows,
    lanes_size,
    late_rows,
    quarantine_rows,
    refused_rows,
)

EVENT_CHARACTERS_AT_MOST = 200  # of an event in a table; `export` and --json give it whole
DETAIL_CHARACTERS_AT_MOST = 100  # of why a sink refused it, likewise

Row = LateRow | QuarantineRow | RefusedRow
NAMES: dict[KeptLane, str] = {"late": "the late lane", "quarantine": "quarantine", "refused": "what sinks refused"}


def list_rows(options: argparse.Namespace, lane: KeptLane) -> int:
    """Show rows, the oldest first, and say on stderr how to go on where there are more."""
    read = _reader(options, lane)
    rows = read(options.after, options.limit)
    if options.json:
        sys.stdout.buffer.write(b"".join(map(_json_line, rows)))
        sys.stdout.buffer.flush()
    else:
        write_table(_HEADINGS[lane], map(_cells, rows))
    if rows and read(rows[-1].number, 1):
        complain(f"there are more: go on with --after {rows[-1].number}")
    return FINE


def export_rows(options: argparse.Namespace, lane: KeptLane) -> int:
    """Write every row to stdout: the line as it came, or with --json all that is known of it."""
    read = _reader(options, lane)
    line: Callable[[Row], bytes] = _json_line if options.json else _raw_line
    after = options.after
    with _progress(lanes_path(options), lane) as advance:
        while rows := read(after, ROWS_AT_MOST):
            sys.stdout.buffer.write(b"".join(map(line, rows)))
            after = rows[-1].number
            advance(len(rows))
    sys.stdout.buffer.flush()
    return FINE


def forget(options: argparse.Namespace, lane: KeptLane) -> int:
    """Delete rows up to a number."""
    count = forget_rows(lanes_path(options), lane, options.through)
    sys.stdout.write(f"{count:,} deleted from {NAMES[lane]}\n")
    return FINE


def lanes_path(options: argparse.Namespace) -> Path:
    """The file that keeps the lanes of the feed that was asked for. Raises ConfigError and StrandlineError."""
    data_dir: Path | None = options.data_dir
    if data_dir is None:
        file = chosen_file(options.config)
        config = load(file, os.environ)
        if config.feed(options.feed) is None:
            names = ", ".join(feed.name for feed in config.runtime_feeds())
            raise ConfigError([f"{file} has no feed {options.feed!a}: there is {names}"])
        data_dir = config.data_dir
    folder = data_dir / "feeds"
    kept = sorted(each.name for each in folder.iterdir()) if folder.is_dir() else []
    if options.feed not in kept:
        there = f"there is {', '.join(kept)}" if kept else "has the service run with this folder yet?"
        raise StrandlineError(f"{folder} holds nothing of a feed {options.feed!a}: {there}")
    return folder / str(options.feed) / "lanes.db"


def since_ns(text: str | None, now_ns: int) -> int | None:
    """The instant that --since means: so long ago, or an RFC 3339 time. Raises ConfigError."""
    return None if text is None else instant_ns("--since", text, now_ns)


def _reader(options: argparse.Namespace, lane: KeptLane) -> Callable[[int, int], Sequence[Row]]:
    """Reads rows after a number, at most so many, as the options narrow them down."""
    path, since = lanes_path(options), since_ns(options.since, time.time_ns())
    if lane == "late":
        return lambda after, limit: late_rows(path, after, limit, options.narrow, since)
    if lane == "refused":
        return lambda after, limit: refused_rows(path, after, limit, options.narrow, since)
    return lambda after, limit: quarantine_rows(path, after, limit, options.narrow, since)


_HEADINGS: dict[KeptLane, tuple[str, ...]] = {
    "late": ("number", "event time", "late by", "arrived", "source", "event"),
    "quarantine": ("number", "arrived", "line", "reason", "what was wrong", "bytes as they came"),
    "refused": ("number", "sink", "lane", "batch", "event time", "source", "why", "event"),
}


def _cells(row: Row) -> tuple[str, ...]:
    if isinstance(row, LateRow):
        late_by = f"{row.late_by_ns / 1e9:.3f}s"
        event, arrived = row.event[:EVENT_CHARACTERS_AT_MOST], format_rfc3339(row.arrived_ns)
        return str(row.number), format_rfc3339(row.time_ns), late_by, arrived, row.source or "", event
    event = row.event[: 4 * EVENT_CHARACTERS_AT_MOST].decode(errors="backslashreplace")[:EVENT_CHARACTERS_AT_MOST]
    if isinstance(row, RefusedRow):
        time = "" if row.time_ns is None else format_rfc3339(row.time_ns)
        detail = row.detail[:DETAIL_CHARACTERS_AT_MOST]
        return str(row.number), row.sink, row.lane, str(row.batch), time, row.source or "", detail, event
    return str(row.number), format_rfc3339(row.arrived_ns), str(row.line), row.reason, row.detail, event


def _raw_line(row: Row) -> bytes:
    return (row.event.encode() if isinstance(row, LateRow) else row.event) + b"\n"


def _json_line(row: Row) -> bytes:
    """All that is known of a row; a late event as JSON within it, other bytes as text or else as base64."""
    known: dict[str, Any] = {name: getattr(row, name) for name in row.__dataclass_fields__ if name != "event"}
    if isinstance(row, LateRow):
        known["event"] = msgspec.Raw(row.event.encode())
    else:
        try:
            known["event"] = row.event.decode()
        except UnicodeDecodeError:
            known["event_base64"] = base64.b64encode(row.event).decode()
    return msgspec.json.encode(known) + b"\n"


@contextlib.contextmanager
def _progress(path: Path, lane: KeptLane) -> Iterator[Callable[[int], None]]:
    """A bar on stderr while the output goes to a file or another program, and a person watches."""
    if not sys.stderr.isatty() or sys.stdout.isatty():
        yield lambda count: None
        return
    from rich.console import Console  # noqa: PLC0415 - 60 ms, only where there is a terminal
    from rich.progress import Progress  # noqa: PLC0415

    total: int = getattr(lanes_size(path), f"{lane}_rows")
    with Progress(console=Console(stderr=True)) as bar:
        task = bar.add_task("exported", total=total)
        yield lambda count: bar.advance(task, count)
