"""What is asked of a trace, and how a line is held against it: by the feed's own pointers, since digests can collide.

No journal is read here, and nothing is decided about events.
"""

from __future__ import annotations

from collections.abc import Sequence
from contextlib import suppress
from dataclasses import dataclass
from typing import Any

import msgspec

from ..config import Feed as FeedConfig
from ..core.columns import TIME_MAX, TIME_MIN
from ..ingest.pointer import Fields
from ..ingest.timestamps import TimestampError, from_unit, parse_rfc3339
from ..ingest.values import (
    ID_BYTES_AT_MOST,
    SOURCE_BYTES_AT_MOST,
    LineFault,
    Unit,
    check_id,
    check_source,
    check_time,
    identity_column,
    is_source,
)

SHOWN_CHARACTERS = 80


class QuestionError(ValueError):
    """A question that cannot be asked; str() is a sentence for a person."""


@dataclass(frozen=True, slots=True)
class Read:
    """What a line says of itself; None for what stands nowhere in it or is none."""

    id: str | None
    time_ns: int | None
    source: str | None


class LineReader:
    """Reads time, source and id of single lines as the feed does, of lines too that are no events of it."""

    def __init__(self, feed: str, time_at: str, unit: Unit, source: str | None, id: str | None) -> None:
        """The pointers are those of the configuration. Raises pointer.PointerError."""
        self._feed, self._time_at, self.unit, self._source, self.id_at = feed, time_at, unit, source, id
        self._fields = Fields(time_at, Any, source, id)

    @classmethod
    def of(cls, config: FeedConfig) -> LineReader:
        """The reader for a configured feed."""
        return cls(config.name, config.time.at, config.time.unit, config.source, config.id)

    def read(self, line: bytes) -> Read | None:
        """What the line says; None where it is no JSON object."""
        try:
            values = self._fields.read(line)
        except (msgspec.DecodeError, UnicodeDecodeError, RecursionError):
            return None
        id = source = time_ns = None
        with suppress(LineFault):
            time_ns = check_time(values.time, self.unit, self._time_at)
        with suppress(LineFault):
            source = self._feed if self._source is None else check_source(values.source, self._source)
        with suppress(LineFault):
            id = None if self.id_at is None else check_id(values.id, self.id_at)
        return Read(id, time_ns, source)


@dataclass(frozen=True, slots=True)
class Question:
    """Which events are wanted: by `id`, or by `time_ns`; of one `source`, if named.

    `reader` None: the feed's pointers are not known, so that only the columns of the journal can be compared.
    `partition`: the feed is known to be a partition of a cluster, whose journal is a short copy.
    """

    feed: str
    id: str | None = None
    time_ns: int | None = None
    source: str | None = None
    reader: LineReader | None = None
    partition: bool = False

    def identities(self, names: Sequence[str]) -> list[int]:
        """The digests under which the journal knows the id, for each source that may have sent it."""
        if self.id is None:
            return []
        senders = names if self.source is None else [self.source]
        digests, _ = identity_column(senders, [self.id] * len(senders))
        return [int(digest) for digest in digests.tolist()]

    def is_met(self, read: Read) -> bool:
        """Whether a line that says this of itself is one of those wanted."""
        if self.source is not None and read.source != self.source:
            return False
        return read.id == self.id if self.id is not None else read.time_ns == self.time_ns


def question_of(
    feed: str, reader: LineReader | None, id: str | None, time: str | None, source: str | None, *,
    partition: bool = False,
) -> Question:  # fmt: skip
    """The question that texts ask. Raises QuestionError."""
    if (id is None) == (time is None):
        raise QuestionError("name either an id or a time of the event")
    if id is not None and not _is_id(id):
        raise QuestionError(f"the id must be a text of 1 to {ID_BYTES_AT_MOST} bytes")
    if id is not None and reader is not None and reader.id_at is None:
        raise QuestionError(f"feed {feed} has no `id` in its configuration, so its events have none: name a time")
    if source is not None and not is_source(source):
        raise QuestionError(f"the source must be a text of 1 to {SOURCE_BYTES_AT_MOST} bytes without U+0000")
    time_ns = None if time is None else time_of(time, None if reader is None else reader.unit)
    return Question(feed, id, time_ns, source, reader, partition)


def _is_id(text: str) -> bool:
    try:
        return 1 <= len(text.encode()) <= ID_BYTES_AT_MOST
    except UnicodeEncodeError:
        return False


def time_of(text: str, unit: Unit | None) -> int:
    """An event time: RFC 3339, or for a feed whose times are integers such an integer. Raises QuestionError."""
    shown = text[:SHOWN_CHARACTERS]
    digits = text.removeprefix("-")
    if unit not in (None, "rfc3339") and digits.isascii() and digits.isdecimal() and len(digits) <= 20:
        try:
            time_ns = from_unit(int(text), unit)
        except TimestampError as error:
            raise QuestionError(f"the time {shown!a}: {error}") from None
        assert TIME_MIN <= time_ns <= TIME_MAX
        return time_ns
    try:
        return parse_rfc3339(text)
    except ValueError as error:
        hint = "; in an address + is written %2B" if " " in text else ""
        also = "" if unit in (None, "rfc3339") else f", nor an integer of {unit}"
        raise QuestionError(f"the time {shown!a} is no RFC 3339 time{also}: {error}{hint}") from None
