"""Reads what a store really holds, for the judge: SQLite files, folders of NDJSON files, blocks of lines.

Only published forms are read (the tables, the file names, the wrapped late lines); no code of the sinks is shared. Rows
come in pieces, in the store's own order. No judging lives here.
"""

from __future__ import annotations

import re
import sqlite3
from collections.abc import Iterator, Sequence
from contextlib import closing
from dataclasses import dataclass, field
from operator import attrgetter
from pathlib import Path
from urllib.parse import quote

import google_crc32c
import msgspec
import numpy as np

from .evidence import UNKNOWN_SOURCE, Digests, Rows, Sent
from .trace import Int64s

PIECE_ROWS = 50_000
PIECE_BYTES = 8_000_000
LANES = ("ordered", "late")


class _Line(msgspec.Struct, gc=False):
    """The members of an event of the river gauges that the judge compares."""

    observed_at: int | str
    station: str
    id: int


class _LateLine(msgspec.Struct, gc=False):
    """What a late line of an NDJSON file wraps around the event."""

    time_ns: int
    source: str | None
    arrived_ns: int
    late_by_ns: int
    event: msgspec.Raw


_LINES, _LATE_LINES = msgspec.json.Decoder(_Line), msgspec.json.Decoder(_LateLine)


@dataclass(frozen=True, slots=True)
class Reading:
    """How events are read back: `source_names` as the sender numbers them; `digests`: compare the bytes as well.

    Reading a line costs 0.6 us, its digest 0.2 us more.
    """

    source_names: Sequence[str]
    digests: bool = False
    numbers: dict[str, int] = field(init=False, repr=False)

    def __post_init__(self) -> None:
        object.__setattr__(self, "numbers", {name: number for number, name in enumerate(self.source_names)})

    def rows(self, block: bytes, times: Sequence[int] | None = None, sources: Sequence[str | None] = ()) -> Rows:
        """Rows from lines, each followed by a line feed. `times` and `sources`: what the store itself says of them.

        Where the store says nothing, the line's own members count. Raises ValueError when the lines cannot be read.
        """
        try:
            lines = _LINES.decode_lines(block)
        except msgspec.MsgspecError as error:
            raise ValueError(f"the store holds a line that is no event of the river gauges: {error}") from error
        n = len(lines)
        named = [source or line.station for source, line in zip(sources, lines, strict=True)] if sources else None
        stations = named or map(attrgetter("station"), lines)
        numbers = (self.numbers.get(name, UNKNOWN_SOURCE) for name in stations)
        return Rows(
            np.fromiter(map(attrgetter("id"), lines), np.int64, n),
            instants(list(map(attrgetter("observed_at"), lines))) if times is None else np.array(times, dtype=np.int64),
            np.fromiter(numbers, np.uint32, n),
            digests_of(block) if self.digests else None,
        )


def instants(values: Sequence[int | str]) -> Int64s:
    """Event times in ns from what `bodies` writes: integers, or RFC 3339 in UTC with nine decimals and a Z."""
    if not values or isinstance(values[0], int):
        return np.array(values, dtype=np.int64)
    texts = np.array(values, dtype="U30")
    if not bool(np.all(np.char.endswith(texts, "Z"))):
        raise ValueError("an event time is not in UTC: this reader takes only what `bodies` writes")
    return texts.astype("U29").astype("datetime64[ns]").astype(np.int64)


def digests_of(block: bytes) -> Digests:
    """CRC32C of each line of a block, without its line feed."""
    lines = block.split(b"\n")[:-1]
    return np.fromiter(map(google_crc32c.value, lines), np.uint32, len(lines))


def with_digests(sent: Sent, digests: Digests) -> Sent:
    """What was sent, with the digests of its lines in the same order: then the bytes are compared too."""
    rows = Rows(sent.rows.ids, sent.rows.times, sent.rows.sources, digests)
    return Sent(rows, sent.requests, sent.begins, sent.ends, sent.answered)


def read_sqlite(path: Path, feed: str, lane: str, reading: Reading) -> Iterator[Rows]:
    """A lane of a feed in a SQLite file: `ordered` by (batch, position), `late` as it was written.

    Raises sqlite3.Error when the file cannot be read, ValueError for another lane.
    """
    queries = {
        "ordered": "SELECT time_ns, source, event FROM events WHERE feed = ? ORDER BY batch, position",
        "late": "SELECT time_ns, source, event FROM late WHERE feed = ? ORDER BY rowid",
    }
    query = _of_lane(queries, lane)
    with closing(sqlite3.connect(f"file:{quote(str(path.absolute()))}?mode=ro", uri=True)) as connection:
        cursor = connection.execute(query, (feed,))
        while found := cursor.fetchmany(PIECE_ROWS):
            times, sources, events = zip(*found, strict=True)
            yield reading.rows("".join(f"{event}\n" for event in events).encode(), times, sources)


def read_ndjson(directory: Path, feed: str, lane: str, reading: Reading) -> Iterator[Rows]:
    """A lane of a feed in a folder of complete files, in order of their batch numbers.

    A file whose batches have all been read already is a repeat, and is passed over. Files that are not complete
    (`.part`) are not the reader's. `feed` is the name as it stands in the files' names.
    """
    prefix = _of_lane({name: f"{feed}-{name}-" for name in LANES}, lane)
    pattern = re.compile(re.escape(prefix) + r"(\d{20})-(\d{20})\.ndjson")
    matches = sorted(filter(None, (pattern.fullmatch(path.name) for path in directory.iterdir())), key=lambda m: m[0])
    reached = 0
    for match in matches:
        if int(match[2]) <= reached:
            continue
        reached = int(match[2])
        for block in _blocks(directory / match[0]):
            yield reading.rows(block) if lane == "ordered" else _late_rows(block, reading)


def _of_lane(choices: dict[str, str], lane: str) -> str:
    if lane not in choices:
        raise ValueError(f"there is no lane {lane!r} to read; there are {', '.join(choices)}")
    return choices[lane]


def _late_rows(block: bytes, reading: Reading) -> Rows:
    try:
        lines = _LATE_LINES.decode_lines(block)
    except msgspec.MsgspecError as error:
        raise ValueError(f"the late lane holds a line that wraps no event: {error}") from error
    events = b"".join(bytes(line.event) + b"\n" for line in lines)
    return reading.rows(events, [line.time_ns for line in lines], [line.source for line in lines])


def _blocks(path: Path) -> Iterator[bytes]:
    """A file's bytes in blocks of whole lines. A last line without a line feed is an error of the store."""
    rest = b""
    with path.open("rb") as file:
        while piece := file.read(PIECE_BYTES):
            whole, feed, rest = (rest + piece).rpartition(b"\n")
            if feed:
                yield whole + feed
    if rest:
        raise ValueError(f"{path} ends in the middle of a line")
