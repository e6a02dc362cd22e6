"""A partition's replicated log: groups of entries, each stored by compare-and-set, and snapshots beside them.

What entries mean is `entries`; when to write them is `commit`. The last message of the partition's subject is what the
next one must follow. Whoever else puts one there takes the log over, and every later write of the former owner fails:
that is the fence. It does not rest on clocks or leases.
"""

from __future__ import annotations

import asyncio
from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import Any

from nats.js import api
from nats.js.errors import APIError, NotFoundError

from ..core.effects import Buffer
from ..core.records import IdleRecord, encode_small
from ..errors import StrandlineError
from ..nats_client import NOT_THERE, words_of
from .entries import Entry, Group, Saved, Taken, decode, encode, entry_of, groups_of, newest_saved
from .link import Away, Link, Reader, everything

LOG_MESSAGE_BYTES = 512 * 1024  # of one message of the log, and of a part of a snapshot
WRONG_LAST = frozenset({10071, 10164})  # error codes of the server for an expected last sequence that is not the last
FULL = frozenset({10077})  # the stream has its maximum of bytes
SNAPSHOT_HEADER = "Strandline-Snapshot"  # owner and position: parts of two owners may lie among each other
TRY_AGAIN_S = 0.2
FENCE_TRIES = 20


class TakenOver(StrandlineError):
    """Another instance has written to the partition's log: this one owns it no more."""


@dataclass(frozen=True, slots=True)
class Place:
    """Where a partition's log lies: the stream, and the subjects of its groups and of its snapshots."""

    stream: str
    groups: str
    snapshots: str

    @classmethod
    def of(cls, cluster: str, feed: str, partition: int) -> Place:
        """Of one partition of a feed."""
        return cls(
            f"{cluster}-log", f"{cluster}-log.groups.{feed}.{partition}", f"{cluster}-log.snapshots.{feed}.{partition}"
        )


@dataclass(slots=True)
class Contents:
    """What the log holds: groups that follow one another, and the newest snapshot that stands for what came before."""

    groups: list[Group] = field(default_factory=list)
    sequences: list[int] = field(default_factory=list)  # of each group's message
    saved: Saved | None = None
    snapshot: bytes = b""

    @property
    def end_lsn(self) -> int:
        """Where the journal goes on."""
        return self.groups[-1].end_lsn if self.groups else 0

    @property
    def next_message(self) -> int:
        """Sequence of the stream's first message that may not be taken in yet."""
        taken = [entry.sequence + 1 for group in self.groups for entry in group.entries if isinstance(entry, Taken)]
        return max([*taken, 1 if self.saved is None else self.saved.next_message])


async def make_stream(link: Link, cluster: str, replicas: int, bytes_at_most: int) -> None:
    """The stream of all logs of a cluster, made where it is absent. Raises Away, StrandlineError."""
    name = f"{cluster}-log"
    wanted = api.StreamConfig(
        name=name,
        subjects=[f"{name}.>"],
        retention=api.RetentionPolicy.LIMITS,
        discard=api.DiscardPolicy.NEW,
        storage=api.StorageType.FILE,
        max_bytes=bytes_at_most,
        num_replicas=replicas,
        allow_direct=False,
    )
    try:
        stream = await link.jetstream()
        try:
            found = (await stream.stream_info(name)).config
        except NotFoundError:
            await stream.add_stream(wanted)
            return
        if found.num_replicas != replicas or found.max_bytes != bytes_at_most:
            await stream.update_stream(found.evolve(num_replicas=replicas, max_bytes=bytes_at_most))
    except (APIError, *NOT_THERE) as error:
        raise Away(f"stream {name} could not be made with {replicas} replicas: {words_of(error)}") from error


class PartitionLog:
    """The log of one partition in the hands of one owner. Calls never overlap; lives on one event loop."""

    def __init__(self, link: Link, place: Place, fence: int) -> None:
        self._link, self._place, self._fence = link, place, fence
        self._last = 0  # sequence of the subject's last message
        self._sequences: list[tuple[int, int]] = []  # of each message: its sequence, and where its group ends
        self.words = ""  # what hinders it now

    # ---- reading, and taking it over -----------------------------------------------------------------------------

    async def take_over(self) -> Contents:
        """Read the log and put this owner's first group there, so that no former owner can write any more.

        Raises Away, StrandlineError.
        """
        for _ in range(FENCE_TRIES):
            contents = await self._read()
            kind, body = encode_small(IdleRecord(0))  # changes nothing; a record, so that the journal has one
            group = groups_of(self._fence, contents.end_lsn, [entry_of(kind, [body], None)], LOG_MESSAGE_BYTES)[0]
            try:
                await self._store(group)
            except TakenOver:
                continue  # the former owner still writes, or what was read was not the last
            contents.groups.append(group)
            contents.sequences.append(self._last)
            return contents
        raise Away(f"the log {self._place.groups} does not stand still: another instance writes to it")

    async def _read(self) -> Contents:
        contents = Contents()
        async for message in everything(Reader(self._link, self._place.stream, self._place.groups), 1):
            try:
                contents.groups.append(decode(message.data))
            except ValueError as error:
                raise StrandlineError(
                    f"message {message.metadata.sequence.stream} of stream {self._place.stream}: {error}"
                ) from error
            contents.sequences.append(message.metadata.sequence.stream)
        ends = [group.end_lsn for group in contents.groups]
        self._sequences = list(zip(contents.sequences, ends, strict=True))
        self._last = contents.sequences[-1] if contents.sequences else 0
        contents.saved = newest_saved(contents.groups)
        if contents.saved is not None:
            contents.snapshot = await self._read_snapshot(contents.saved)
        elif contents.groups and contents.groups[0].lsn > 0:
            raise StrandlineError(f"the log {self._place.groups} begins in the middle and names no snapshot")
        return contents

    async def _read_snapshot(self, saved: Saved) -> bytes:
        parts: list[bytes] = []
        name = ""
        async for message in everything(Reader(self._link, self._place.stream, self._place.snapshots), saved.sequence):
            told = (message.headers or {}).get(SNAPSHOT_HEADER, "")
            name = name or told
            if told != name:
                continue  # of a former owner that did not know yet that it was one
            parts.append(message.data)
            if len(parts) == saved.parts:
                return b"".join(parts)
        raise StrandlineError(
            f"the snapshot at position {saved.lsn} of the log {self._place.groups} has only {len(parts)} of its "
            f"{saved.parts} parts"
        )

    # ---- writing -------------------------------------------------------------------------------------------------

    async def append(self, lsn: int, entries: Sequence[Entry]) -> None:
        """Store entries behind what is there, the first one's record being at `lsn`; returns once they are replicated.

        Tried until it succeeds: cancel it to give up. Raises TakenOver; ValueError for a record that is too large.
        """
        for group in groups_of(self._fence, lsn, entries, LOG_MESSAGE_BYTES):
            while True:
                try:
                    await self._store(group)
                    self.words = ""
                    break
                except Away as error:
                    self.words = str(error)
                    await asyncio.sleep(TRY_AGAIN_S)

    async def store_snapshot(self, lsn: int, parts: Sequence[Buffer], needed_lsn: int) -> Saved:
        """Store what stands for everything before `lsn`. It counts once the entry that is returned is appended.

        Tried until it succeeds, beside appends. A part that a failed try left behind is never named by an entry.
        """
        body = b"".join(parts)
        while True:
            try:
                first, count = await self._store_parts(body, f"{self._fence}/{lsn}")
                return Saved(lsn, first, count, needed_lsn)
            except Away as error:
                self.words = str(error)
                await asyncio.sleep(TRY_AGAIN_S)

    async def let_go(self, saved: Saved) -> None:
        """Delete what nobody needs once this entry is the last one that was appended. Raises Away: it can wait."""
        named = self._last
        needed_lsn = min(saved.lsn, saved.needed_lsn)
        kept = next((sequence for sequence, end_lsn in self._sequences if end_lsn > needed_lsn), named)
        keep = min(kept, named)
        try:
            stream = await self._link.jetstream()
            await stream.purge_stream(self._place.stream, subject=self._place.groups, seq=keep)
            await stream.purge_stream(self._place.stream, subject=self._place.snapshots, seq=saved.sequence)
        except (APIError, *NOT_THERE) as error:
            raise Away(f"the log {self._place.groups} cannot be shortened: {words_of(error)}") from error
        self._sequences = [each for each in self._sequences if each[0] >= keep]

    async def _store(self, group: Group) -> None:
        """One message behind the last. One whose answer is lost is looked for. Raises TakenOver, Away."""
        data = encode(group)
        headers: dict[str, Any] = {api.Header.EXPECTED_LAST_SUBJECT_SEQUENCE: str(self._last)}
        try:
            stream = await self._link.jetstream()
            answer = await stream.publish(self._place.groups, data, stream=self._place.stream, headers=headers)
            sequence = answer.seq
        except APIError as error:
            if error.err_code not in WRONG_LAST:
                full = " (its room is log_at_most)" if error.err_code in FULL else ""
                raise Away(f"the log {self._place.groups} takes nothing: {words_of(error)}{full}") from error
            sequence = await self._stored_before(data)
        except NOT_THERE as error:
            raise Away(f"the log {self._place.groups} does not answer: {words_of(error)}") from error
        self._last = sequence
        self._sequences.append((sequence, group.end_lsn))

    async def _stored_before(self, data: bytes) -> int:
        """The sequence of the subject's last message if that is this one: its answer was lost. Raises TakenOver, Away.

        A group names its owner and its place in the journal, so no other message is equal to it.
        """
        try:
            stream = await self._link.jetstream()
            last = await stream.get_last_msg(self._place.stream, self._place.groups)
        except (APIError, *NOT_THERE) as error:
            raise Away(f"the log {self._place.groups} does not answer: {words_of(error)}") from error
        if last.data != data or last.seq is None:
            raise TakenOver(f"the log {self._place.groups} was taken over by another instance")
        return last.seq

    async def _store_parts(self, body: bytes, name: str) -> tuple[int, int]:
        """A snapshot in messages that bear its name: sequence of the first, and how many. Raises Away."""
        first, count = 0, 0
        try:
            stream = await self._link.jetstream()
            for begin in range(0, len(body), LOG_MESSAGE_BYTES):
                part = body[begin : begin + LOG_MESSAGE_BYTES]
                answer = await stream.publish(
                    self._place.snapshots, part, stream=self._place.stream, headers={SNAPSHOT_HEADER: name}
                )
                first, count = first or answer.seq, count + 1
        except (APIError, *NOT_THERE) as error:
            raise Away(f"the log {self._place.snapshots} takes nothing: {words_of(error)}") from error
        return first, count
