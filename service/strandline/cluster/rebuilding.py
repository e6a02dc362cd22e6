"""Making a partition's journal again on this machine, from the replicated log and the messages that it refers to.

Out comes what the former owner's journal held from the first record that is still needed on: the same bytes at the same
places, so that the snapshot's places hold and recovery is the same as at any start. The local files are scratch: they
are never synced, and what lay there before is thrown away. Nothing is decided here.
"""

from __future__ import annotations

import contextlib
from collections.abc import AsyncGenerator, Mapping, Sequence

from nats.aio.msg import Msg
from nats.js.errors import APIError, NotFoundError

from ..config import Feed as FeedConfig
from ..config_intakes import JetstreamIntake
from ..core.columns import Arrival
from ..core.effects import Buffer
from ..core.records import Kind, SourcesRecord, arrival_parts, decode_small, frame_bytes
from ..core.saved import restore
from ..decoding import decoder_of
from ..errors import BodyError, StrandlineError, TooManyFaults
from ..ingest.offload import Aside
from ..intake.broker import Message
from ..intake.jetstream import message_of
from ..intake.reading import Reader as MessageReader
from ..journal.disk import LocalDisk
from ..journal.journal import Journal
from ..nats_client import NOT_THERE
from ..tasks import in_thread
from .entries import Origin, Placed, Taken, Whole, entry_of, placed
from .link import Away, Link, Reader, everything
from .log import Contents

FLUSHED_BYTES = 8 << 20  # so much is queued at most before it is written


class Sources:
    """Whom messages are decoded for: a feed of which only the names of its sources are known."""

    def __init__(self, config: FeedConfig) -> None:
        self.config, self.decoder = config, decoder_of(config)
        self.numbers: dict[str, int] = {}

    @property
    def source_numbers(self) -> Mapping[str, int]:
        """The numbers of the sources that are known so far."""
        return self.numbers

    def learn(self, names: list[str], first: int = 0) -> None:
        """Names numbered from `first` on; those that are known already keep their number."""
        for number, name in enumerate(names, first):
            self.numbers.setdefault(name, number)


def _names(snapshot: Buffer) -> list[str]:
    """The sources that a snapshot knows. Raises StrandlineError where it cannot be read."""
    try:
        return restore(snapshot).sources.names
    except (ValueError, LookupError, TypeError) as error:
        raise StrandlineError(
            f"the snapshot in the log cannot be read: {error}. If a newer version of Strandline wrote it, let an "
            "instance of that version own the partition"
        ) from error


class Rebuilding:
    """Makes the journal of one partition again. `messages` and `payload_bytes` tell how far it is."""

    def __init__(self, config: FeedConfig, intake: JetstreamIntake, link: Link, aside: Aside) -> None:
        self._config, self._intake, self._link = config, intake, link
        self._sources = Sources(config)
        self._reader = MessageReader(intake, self._sources, aside)
        self._journal: Journal | None = None
        self.messages = self.payload_bytes = 0

    async def run(self, contents: Contents, disk: LocalDisk) -> None:
        """Write the journal to an empty folder of the disk. Raises Away, StrandlineError, JournalError."""
        saved = contents.saved
        if saved is not None:
            self._sources.learn(await in_thread(lambda: _names(contents.snapshot)))
        begin_lsn = 0 if saved is None else min(saved.lsn, saved.needed_lsn)
        needed = [
            each for each in placed(contents.groups) if each.lsn + frame_bytes(each.entry.body_bytes) > begin_lsn
        ]
        try:
            await in_thread(lambda: self._open(disk, needed[0].lsn))
            await self._fill(self._opened, needed)
            await in_thread(self._opened.flush)
            if saved is not None:
                await in_thread(lambda: self._opened.write_snapshot(saved.lsn, [contents.snapshot]))
        finally:
            await in_thread(self._close)

    def _close(self) -> None:
        """Give the files back, whatever is still queued where this did not come to its end."""
        if self._journal is not None:
            if self._journal.queued_bytes and not self._journal.failed:
                self._journal.flush()
            self._journal.close()

    @property
    def _opened(self) -> Journal:
        assert self._journal is not None
        return self._journal

    def _open(self, disk: LocalDisk, begin_lsn: int) -> None:
        kept = self._config.journal
        directory = f"feeds/{self._config.name}"
        self._journal = Journal.open(
            disk,
            directory,
            segment_bytes=kept.segment_bytes,
            journal_bytes_at_most=kept.at_most_bytes,
            begin_lsn=begin_lsn,
        )

    async def _fill(self, journal: Journal, needed: Sequence[Placed]) -> None:
        """Append the records, those of arrivals made from their messages, which are read along in their order."""
        sequences = [each.entry.sequence for each in needed if isinstance(each.entry, Taken)]
        subject = self._intake.subjects[0]
        messages = everything(Reader(self._link, self._intake.stream, subject), sequences[0] if sequences else 1)
        async with contextlib.aclosing(messages):
            for each in needed:
                entry = each.entry
                if isinstance(entry, Whole):
                    self._learn(entry)
                    journal.append(each.lsn, entry.kind, [entry.body] if entry.body else [], entry.version)
                else:
                    message = message_of(await self._found(messages, entry.sequence))
                    journal.append(each.lsn, Kind.ARRIVAL, await self._made(message, entry))
                    self.messages += 1
                    self.payload_bytes += len(message.body)
                if journal.queued_bytes > FLUSHED_BYTES:
                    await in_thread(journal.flush)

    def _learn(self, entry: Whole) -> None:
        if entry.kind == Kind.SOURCES:
            record = decode_small(Kind.SOURCES, entry.body)
            assert isinstance(record, SourcesRecord)
            self._sources.learn(record.names, record.first)

    async def _found(self, messages: AsyncGenerator[Msg, None], sequence: int) -> Msg:
        """The message of this sequence, of those that are read along. Raises StrandlineError where it is gone."""
        async for message in messages:
            found = message.metadata.sequence.stream
            if found == sequence:
                return message
            if found > sequence:
                break
        await self._require_gone(sequence)
        raise StrandlineError(
            f"message {sequence} of stream {self._intake.stream} is gone, but the log needs it: its events are "
            "held, undelivered, or came since the last snapshot. The stream must keep its messages for longer than "
            "events are held and sinks are away, and a minute (max_age, max_bytes, max_msgs)"
        )

    async def _require_gone(self, sequence: int) -> None:
        """Raises Away where the message is there after all: a broker that lags behind did not give it."""
        try:
            stream = await self._link.jetstream()
            await stream.get_msg(self._intake.stream, sequence)
        except NotFoundError:
            return
        except (APIError, *NOT_THERE) as error:
            raise self._link.away(f"stream {self._intake.stream} cannot be read", error) from error
        raise Away(f"message {sequence} of stream {self._intake.stream} was not read, though it is there: once more")

    async def _made(self, message: Message, entry: Taken) -> Sequence[Buffer]:
        """The body of an arrival's record, which must come out as it was. Raises StrandlineError where it does not."""
        arrival = await self._arrival(message, entry.refused)
        parts = arrival_parts(arrival, entry.arrived_ns)
        made = entry_of(Kind.ARRIVAL, parts, Origin(entry.sequence, entry.refused))
        if made != entry:
            raise StrandlineError(
                f"{message.place} gives another record than when it was taken: `time`, `source`, `id`, `partitions` or "
                "a limit of bodies was changed while its events were held. Set them back, drain the feed, then change "
                "them"
            )
        return parts

    async def _arrival(self, message: Message, refused: str) -> Arrival:
        if refused:
            return self._reader.refused(message, refused)
        try:
            arrival, _ = await self._reader.arrival(message)
        except (BodyError, TooManyFaults) as error:
            return self._reader.refused(message, f"it can be read no more: {error}")  # which its record will not equal
        return arrival
