"""What stands in a partition's replicated log: the records of its journal, arrivals as references to messages.

Pure: bytes in, values out. A group is what one sync of the journal covers; it is contiguous with the group before it.
An arrival's record holds a message's whole payload, which the stream keeps already; so the log only says which message
it was, when it arrived, and by size and CRC how its record must come out when it is made again (`rebuilding`). Every
other record stands there as it is. The log itself is `log`; what a record means is strandline.core.records.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import NamedTuple

import msgspec

from ..core.effects import Buffer
from ..core.records import VERSION, Kind, frame_bytes
from ..journal.frame import bytes_of, extend_crc, flatten

FORMAT = 1
ENTRY_BYTES = 48  # more than an arrival takes


class Whole(msgspec.Struct, frozen=True, array_like=True, tag=0):
    """A record that stands in the log as it stands in the journal."""

    kind: int
    version: int
    body: bytes

    @property
    def body_bytes(self) -> int:
        """Bytes of the record's body."""
        return len(self.body)


class Taken(msgspec.Struct, frozen=True, array_like=True, tag=1):
    """An arrival: the message at `sequence` of the feed's stream. `crc` is CRC-32C of the record's body.

    `refused`: the message as a whole went to quarantine, with this reason.
    """

    sequence: int
    arrived_ns: int
    body_bytes: int
    crc: int
    refused: str = ""


class Saved(msgspec.Struct, frozen=True, array_like=True, tag=2):
    """Not a record: a snapshot that stands for everything before `lsn` lies in `parts` messages from `sequence` on.

    `needed_lsn`: the journal before it is needed neither by held events nor by undelivered batches. `next_message`:
    all of the stream's messages before this sequence are taken in by the records that stand in the log before this.
    """

    lsn: int
    sequence: int
    parts: int
    needed_lsn: int
    next_message: int = 1

    @property
    def body_bytes(self) -> None:
        """It takes no place in the journal."""
        return None


Entry = Whole | Taken | Saved


class Group(msgspec.Struct, frozen=True, array_like=True):
    """One message of the log. The first record's frame starts at `lsn`; `fence` is the owner that wrote it."""

    format: int
    fence: int
    lsn: int
    entries: list[Entry]

    @property
    def end_lsn(self) -> int:
        """Where the next group begins."""
        return self.lsn + sum(frame_bytes(e.body_bytes) for e in self.entries if e.body_bytes is not None)


class _Head(msgspec.Struct, frozen=True, array_like=True):
    format: int


class Origin(NamedTuple):
    """Where an arrival comes from: the message, and why it goes to quarantine as a whole if it does."""

    sequence: int
    refused: str = ""


@dataclass(frozen=True, slots=True)
class Placed:
    """An entry of the journal with the place of its frame."""

    lsn: int
    entry: Whole | Taken


_pack = msgspec.msgpack.Encoder().encode
_unpack = msgspec.msgpack.Decoder(Group).decode
_unpack_head = msgspec.msgpack.Decoder(_Head).decode  # of any format: the rest is passed over


def entry_of(kind: int, parts: Sequence[Buffer], origin: Origin | None) -> Whole | Taken:
    """The entry of a record that is appended to the journal. `origin` is looked at where it is an arrival.

    Raises ValueError for an arrival that came from no message: nobody could make its record again.
    """
    if kind != Kind.ARRIVAL:
        return Whole(int(kind), VERSION, b"".join(parts))
    if origin is None:
        raise ValueError("an arrival without a message: a partition takes its events from its stream only")
    crc, body = 0, flatten(parts)
    for part in body:
        crc = extend_crc(crc, part)
    arrived_ns = int.from_bytes(memoryview(body[0])[:8], "little", signed=True)
    return Taken(origin.sequence, arrived_ns, sum(map(bytes_of, body)), crc, origin.refused)


def encode(group: Group) -> bytes:
    """One message of the log."""
    return _pack(group)


def decode(data: Buffer) -> Group:
    """The group in a message of the log. Raises ValueError where it is none, or of a newer program."""
    try:
        found = _unpack_head(data).format
        group = _unpack(data) if found <= FORMAT else None
    except (msgspec.DecodeError, UnicodeDecodeError) as error:
        raise ValueError(f"not a group of a partition's log: {error}") from error
    if group is None:
        raise ValueError(f"format {found} of the log is newer than this program (it reads {FORMAT})")
    return group


def groups_of(fence: int, lsn: int, entries: Sequence[Entry], room: int) -> list[Group]:
    """Entries from `lsn` on as groups whose messages fit into `room` bytes. Raises ValueError for one that never does.

    An entry is counted with 48 bytes more than its body, which is more than it takes.
    """
    groups: list[Group] = []
    some: list[Entry] = []
    begin, size = lsn, ENTRY_BYTES
    for entry in entries:
        need = ENTRY_BYTES + _text_bytes(entry)
        if need + ENTRY_BYTES > room:
            raise ValueError(f"a record of {need:,} bytes fits in no message of the log ({room:,} bytes)")
        if some and size + need > room:
            groups.append(Group(FORMAT, fence, begin, some))
            begin, some, size = groups[-1].end_lsn, [], ENTRY_BYTES
        some.append(entry)
        size += need
    return [*groups, Group(FORMAT, fence, begin, some)] if some else groups


def _text_bytes(entry: Entry) -> int:
    if isinstance(entry, Whole):
        return len(entry.body)
    return len(entry.refused.encode()) if isinstance(entry, Taken) else 0


def placed(groups: Sequence[Group]) -> Iterator[Placed]:
    """The records of groups that follow one another, with their places. Raises ValueError where one is missing."""
    expected = groups[0].lsn if groups else 0
    for group in groups:
        if group.lsn != expected:
            raise ValueError(f"the log goes on at position {group.lsn}, but what was read of it ends at {expected}")
        lsn = group.lsn
        for entry in group.entries:
            if not isinstance(entry, Saved):
                yield Placed(lsn, entry)
                lsn += frame_bytes(entry.body_bytes)
        expected = lsn


def newest_saved(groups: Sequence[Group]) -> Saved | None:
    """The last snapshot that the groups name."""
    found = [entry for group in groups for entry in group.entries if isinstance(entry, Saved)]
    return found[-1] if found else None
