"""A partition's replicated log: groups of entries, each stored by compare-and-set, and snapshots beside them.

What entries mean is `entries`; when to write them is `commit`. The last message of the partition's subject is what the
next one must follow. Whoever else puts one there takes the log over, and every later write of the former owner fails:
that is the fence. It does not rest on clocks or leases.
"""

from __future__ import annotations

import asyncio
import contextlib
import itertools
from collections.abc import Awaitable, Callable, Sequence
from dataclasses import dataclass, field
from functools import partial
from typing import Any, TypeVar

from nats.js import api
from nats.js.errors import APIError, NotFoundError

from ..core.effects import Buffer
from ..core.records import SourcesRecord, encode_small
from ..errors import StrandlineError
from ..nats_client import NOT_THERE, words_of
from .emptied import WRONG_LAST, Marks, mark_made
from .entries import Entry, Group, Saved, Taken, Whole, decode, encode, entry_of, groups_of, newest_saved
from .link import Away, Link, Reader, everything

Result = TypeVar("Result")
LOG_MESSAGE_BYTES = 512 * 1024  # of one message of the log, and of a part of a snapshot
FULL = frozenset({10077})  # the stream has its maximum of bytes
SNAPSHOT_HEADER = "Strandline-Snapshot"  # owner, position, try and number of the part: those of several may be mixed
TRY_AGAIN_S = 0.2
TRIES = 20


class TakenOver(StrandlineError):
    """Another instance has written to the partition's log: this one owns it no more."""


class _Shifted(StrandlineError):
    """What was read does not fit together: it was shortened meanwhile, or a broker that lags behind gave it."""


@dataclass(frozen=True, slots=True)
class Place:
    """Where a partition's log lies: the stream, and the subjects of its groups, its snapshots and its mark."""

    stream: str
    groups: str
    snapshots: str
    begun: str

    @classmethod
    def of(cls, cluster: str, feed: str, partition: int) -> Place:
        """Of one partition of a feed."""
        stream, own = f"{cluster}-log", f"{feed}.{partition}"
        return cls(stream, f"{stream}.groups.{own}", f"{stream}.snapshots.{own}", f"{stream}.begun.{own}")


@dataclass(slots=True)
class Contents:
    """What the log holds: groups that follow one another, and the newest snapshot that stands for what came before."""

    groups: list[Group] = field(default_factory=list)
    sequences: list[int] = field(default_factory=list)  # of each group's message
    saved: Saved | None = None
    snapshot: bytes = b""
    lost_ns: int | None = None  # when it was found empty although it had begun before, ns since 1970 UTC

    @property
    def begins(self) -> int | None:
        """Sequence of the very first group's message; None where that was let go."""
        return self.sequences[0] if self.groups[0].lsn == 0 else None

    @property
    def end_lsn(self) -> int:
        """Where the journal goes on."""
        return self.groups[-1].end_lsn if self.groups else 0

    @property
    def is_new(self) -> bool:
        """Whether no message of the partition's stream was ever taken into it."""
        entries = [entry for group in self.groups for entry in group.entries]
        return self.groups[0].lsn == 0 and all(isinstance(entry, Whole) for entry in entries)

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
            info = await stream.stream_info(name)
        except NotFoundError:
            info = await stream.add_stream(wanted)
        found = info.config
        if fault := _unfit(found, wanted):
            raise StrandlineError(f"stream {name} is there already but {fault}: mend it, or name the cluster otherwise")
        await mark_made(stream, name, is_new=info.state.last_seq == 0)
        if found.num_replicas != replicas or found.max_bytes != bytes_at_most:
            await stream.update_stream(found.evolve(num_replicas=replicas, max_bytes=bytes_at_most))
    except (APIError, *NOT_THERE) as error:
        raise link.away(f"stream {name} could not be made with {replicas} replicas", error) from error


def _unfit(found: api.StreamConfig, wanted: api.StreamConfig) -> str:
    """Why a stream must not hold logs; nothing where it may."""
    if found.subjects != wanted.subjects:
        return f"takes the subjects {found.subjects}, not {wanted.subjects}"
    if found.retention != wanted.retention or found.discard != wanted.discard:
        return f"has retention {found.retention} and discards {found.discard} messages: both lose parts of a log"
    if any((limit or 0) > 0 for limit in (found.max_age, found.max_msgs, found.max_msgs_per_subject)):
        return "deletes messages by age or number, which loses parts of a log"
    return ""


class PartitionLog:
    """The log of one partition in the hands of one owner. Appends never overlap; a snapshot may be stored beside them.

    Lives on one event loop.
    """

    def __init__(self, link: Link, place: Place, fence: int) -> None:
        self._link, self._place, self._fence = link, place, fence
        self._marks = Marks(link, place.stream, place.begun)
        self._last = 0  # sequence of the subject's last message
        self._sequences: list[tuple[int, int]] = []  # of each message: its sequence, and where its group ends
        self.words = ""  # what hinders it now
        self._given_up = False

    # ---- reading, and taking it over -----------------------------------------------------------------------------

    async def take_over(self) -> Contents:
        """Put this owner's first group behind the last, so that no former owner can write any more; read what is there.

        In this order, so that a former owner that still writes is overtaken by one short step, not by a long read.
        Raises Away, TakenOver, StrandlineError.
        """
        for _ in range(TRIES):
            if await self._put_fence():
                break
            await asyncio.sleep(TRY_AGAIN_S)
        else:
            raise Away(f"the log {self._place.groups} does not stand still: another instance writes to it")
        told = ""
        for _ in range(TRIES):
            try:
                contents = await self._read()
                contents.lost_ns = await self._marks.begin(contents.begins)
                return contents
            except _Shifted as error:
                told = str(error)
                await asyncio.sleep(TRY_AGAIN_S)
        raise StrandlineError(told)

    async def _put_fence(self) -> bool:
        """Store a group of one's own behind the last one; whether that was still the last one then."""
        last = await self._last_message()
        self._last = end_lsn = 0
        if last is not None:
            self._last, end_lsn = last.seq or 0, self._decoded(last.seq or 0, last.data or b"").end_lsn
        kind, body = encode_small(SourcesRecord(0, []))  # changes nothing; a record, so that the journal has one
        group = groups_of(self._fence, end_lsn, [entry_of(kind, [body], None)], LOG_MESSAGE_BYTES)[0]
        try:
            await self._store(group)
        except TakenOver:
            return False
        return True

    async def lose(self, evidence: str) -> int | None:
        """What was taken over as a new log is none, by other evidence: tell it, now and to later owners. Raises Away.

        When that was, ns since 1970 UTC.
        """
        return await self._marks.lose(evidence)

    async def _last_message(self) -> api.RawStreamMsg | None:
        try:
            stream = await self._link.jetstream()
            return await stream.get_last_msg(self._place.stream, self._place.groups)
        except NotFoundError:
            return None
        except (APIError, *NOT_THERE) as error:
            raise self._link.away(f"the log {self._place.groups} does not answer", error) from error

    def _decoded(self, sequence: int, data: bytes) -> Group:
        try:
            return decode(data)
        except ValueError as error:
            raise StrandlineError(
                f"message {sequence} of stream {self._place.stream}, subject {self._place.groups}: {error}. If "
                "something else than Strandline wrote it, remove it from the stream; nothing else may write there"
            ) from error

    async def _read(self) -> Contents:
        """All groups up to this owner's own. Raises _Shifted where some were deleted meanwhile or are not there yet."""
        contents, expected = Contents(), None
        reader = Reader(self._link, self._place.stream, self._place.groups)
        async with contextlib.aclosing(everything(reader, 1)) as messages:
            async for message in messages:
                sequence = message.metadata.sequence.stream
                if sequence > self._last:
                    raise TakenOver(f"the log {self._place.groups} was taken over by another instance")
                group = self._decoded(sequence, message.data)
                if expected not in (None, group.lsn):
                    raise _Shifted(
                        f"the log {self._place.groups} goes on at position {group.lsn} with message {sequence}, but "
                        f"what was read before ends at {expected}: messages of stream {self._place.stream} are missing"
                    )
                expected = group.end_lsn
                contents.groups.append(group)
                contents.sequences.append(sequence)
        if not contents.sequences or contents.sequences[-1] != self._last:
            raise _Shifted(f"the log {self._place.groups} was read without message {self._last}, which is its last")
        await self._find_snapshot(contents)
        ends = [group.end_lsn for group in contents.groups]
        self._sequences = list(zip(contents.sequences, ends, strict=True))
        return contents

    async def _find_snapshot(self, contents: Contents) -> None:
        saved, begin_lsn = newest_saved(contents.groups), contents.groups[0].lsn
        needed_lsn = 0 if saved is None else min(saved.lsn, saved.needed_lsn)
        if begin_lsn > needed_lsn:
            raise _Shifted(
                f"the log {self._place.groups} begins at position {begin_lsn}, but {needed_lsn} is needed: messages of "
                f"stream {self._place.stream} are missing"
            )
        if saved is not None:
            contents.saved, contents.snapshot = saved, await self._read_snapshot(saved)

    async def _read_snapshot(self, saved: Saved) -> bytes:
        parts: list[bytes] = []
        name = ""
        reader = Reader(self._link, self._place.stream, self._place.snapshots)
        async with contextlib.aclosing(everything(reader, saved.sequence)) as messages:
            async for message in messages:
                told, _, number = (message.headers or {}).get(SNAPSHOT_HEADER, "").rpartition(" ")
                name = name or told
                if told != name or number != str(len(parts)):
                    continue  # of a former owner that did not know yet that it was one, or of another try
                parts.append(message.data)
                if len(parts) == saved.parts:
                    return b"".join(parts)
        raise _Shifted(
            f"the snapshot at position {saved.lsn} of the log {self._place.groups} has only {len(parts)} of its "
            f"{saved.parts} parts: messages of stream {self._place.stream} are missing"
        )

    # ---- writing -------------------------------------------------------------------------------------------------

    async def append(self, lsn: int, entries: Sequence[Entry]) -> None:
        """Store entries behind what is there, the first one's record being at `lsn`; returns once they are replicated.

        Tried until it succeeds or is given up. Raises TakenOver; Away once it was given up; ValueError for a record
        that is too large.
        """
        for group in groups_of(self._fence, lsn, entries, LOG_MESSAGE_BYTES):
            await self._until_done(partial(self._store, group))

    async def _until_done(self, work: Callable[[], Awaitable[Result]]) -> Result:
        while not self._given_up:
            try:
                done = await work()
                self.words = ""
                return done
            except Away as error:
                self.words = str(error)
                await asyncio.sleep(TRY_AGAIN_S)
        raise Away(f"the log {self._place.groups} was given up")

    def give_up(self) -> None:
        """Store nothing more. What is under way may still arrive; a cancelling alone does not do: the client passes
        over some.
        """
        self._given_up = True

    @property
    def last(self) -> int:
        """Sequence of the message that was stored last."""
        return self._last

    async def store_snapshot(self, lsn: int, parts: Sequence[Buffer], needed_lsn: int) -> Saved:
        """Store what stands for everything before `lsn`. It counts once the entry that is returned is appended.

        Tried until it succeeds or is given up, beside appends. A part that a failed try left behind is never named by
        an entry, and one that arrives late is told by its try. Raises Away once it was given up.
        """
        body, tries = b"".join(parts), itertools.count()
        first, count = await self._until_done(lambda: self._store_parts(body, f"{self._fence}/{lsn}/{next(tries)}"))
        return Saved(lsn, first, count, needed_lsn)

    async def let_go(self, saved: Saved, named: int) -> None:
        """Delete what nobody needs once this entry stands in message `named`. Raises Away: it can wait."""
        needed_lsn = min(saved.lsn, saved.needed_lsn)
        kept = next((sequence for sequence, end_lsn in self._sequences if end_lsn > needed_lsn), named)
        keep = min(kept, named)
        try:
            stream = await self._link.jetstream()
            await stream.purge_stream(self._place.stream, subject=self._place.groups, seq=keep)
            await stream.purge_stream(self._place.stream, subject=self._place.snapshots, seq=saved.sequence)
        except (APIError, *NOT_THERE) as error:
            raise self._link.away(f"the log {self._place.groups} cannot be shortened", error) from error
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
            raise self._link.away(f"the log {self._place.groups} does not answer", error) from error
        self._last = sequence
        self._sequences.append((sequence, group.end_lsn))

    async def _stored_before(self, data: bytes) -> int:
        """The sequence of the subject's last message if that is this one: its answer was lost. Raises TakenOver, Away.

        A group names its owner and its place in the journal, so no other message is equal to it.
        """
        last = await self._last_message()
        if last is None:
            raise Away(
                f"the log {self._place.groups} has lost its messages: somebody deleted them or the stream. Nothing is "
                "stored any more, so that nothing goes out twice; stop the cluster and see the runbook"
            )
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
                    self._place.snapshots,
                    part,
                    stream=self._place.stream,
                    headers={SNAPSHOT_HEADER: f"{name} {count}"},
                )
                first, count = first or answer.seq, count + 1
        except (APIError, *NOT_THERE) as error:
            raise self._link.away(f"the log {self._place.snapshots} takes nothing", error) from error
        return first, count
