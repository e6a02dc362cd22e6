"""The JetStream sink: one message of NDJSON for each batch, or several where a batch is larger than a message may be.

The stream itself tells how far it is: each message names its batch and how many of the batch's events came before it,
so the last message of a lane's subject is the position, whatever was lost on the way. Each message is taken only right
behind the one that this sink knows to be its subject's last (`Nats-Expected-Last-Subject-Sequence`), so two sinks that
publish the same batches, one of them late, cannot mix. A repeat that the server takes for one (`Nats-Msg-Id`, within
the stream's window) is dropped there besides. When to try again is decided by delivery.
"""

from __future__ import annotations

import re
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, replace
from functools import partial

import numpy as np
from nats.js import JetStreamContext
from nats.js.api import Header
from nats.js.errors import APIError, NoStreamResponseError, NotFoundError

from ..broker_access import BrokerAccess
from ..core.columns import Batch, Lane
from ..errors import SinkRefused, SinkRetry, StrandlineError
from ..ingest.formats import NDJSON
from ..nats_client import NOT_THERE, Client, connect, disconnect, words_of
from ..ports import Lines
from .ndjson import lane_lines
from .rows import LANES, one_lane
from .worker import OwnThread

HEADER_BYTES = 1024  # of a message, which count among what a server lets be: more than any of ours
_SAFE = re.compile(r"[A-Za-z0-9-]{1,63}", re.ASCII)


@dataclass(frozen=True, slots=True)
class Place:
    """Where a lane stands in the stream: `events` of batch `number` are there, all of them if it is `whole`."""

    number: int = 0
    events: int = 0
    whole: bool = True

    @property
    def reached(self) -> int:
        """The last batch that is there as a whole."""
        return self.number if self.whole else self.number - 1


@dataclass(frozen=True, slots=True)
class Part:
    """What one message holds: events from `first` on, and whether it is the batch's last."""

    first: int
    block: bytes
    is_last: bool


class JetstreamSink:
    """Takes the ordered and the late lane of one feed to subjects of a stream, each event once.

    Headers of each message: `Nats-Msg-Id: SUBJECT/FEED/LANE/NUMBER` (for a further part with `/FIRST` behind it),
    `Strandline-Feed`, `-Lane`, `-Batch`, `-First` (how many of the batch's events came before), `-Last` (1: the batch
    is whole). Lines are those of the NDJSON sink. Nobody else may publish to these subjects, and the stream must keep
    the last message of each.
    """

    def __init__(
        self,
        urls: Sequence[str],
        stream: str,
        feed: str,
        *,
        access: BrokerAccess | None = None,
        subject: str = "strandline",
        message_bytes_at_most: int = 2**20,
        timeout_s: float = 10.0,
    ) -> None:
        """`subject` is what the subjects begin with: the feed and the lane follow."""
        self._urls, self._stream, self._access = tuple(urls), stream, access or BrokerAccess()
        self._feed = feed if _SAFE.fullmatch(feed) else f"_{feed.encode().hex()}"
        self._prefix = subject  # in the ids too: a stream tells repeats over all its subjects
        self._subjects: dict[Lane, str] = {lane: f"{subject}.{self._feed}.{lane}" for lane in LANES}
        self._bytes_at_most, self._timeout_s = message_bytes_at_most, timeout_s
        self._thread = OwnThread(f"jetstream {feed}")
        self._client: Client | None = None
        self._places: dict[Lane, Place] | None = None  # None: to be asked for again
        self._last_sequence: dict[Lane, int] = {}  # of the last message of the lane's subject; 0: there is none
        self._room = message_bytes_at_most  # of one message, as server and stream let it be

    @property
    def lanes(self) -> tuple[Lane, ...]:
        """Ordered and late."""
        return LANES

    @property
    def flush_after_s(self) -> float:
        """Nothing waits for a flush."""
        return 0.0

    async def open(self) -> dict[Lane, int]:
        """Connect and ask the stream how far it is. Raises SinkRetry."""
        self._places = None
        return {lane: place.reached for lane, place in (await self._standing()).items()}

    async def take(self, batches: Sequence[Batch], lines: Lines) -> dict[Lane, int]:
        """Publish batches of one lane, message after message, each stored before the next.

        Raises SinkRetry and SinkRefused.
        After an error the stream is asked again how far it is: a message whose answer was lost may be there.
        """
        one_lane(batches)
        places = await self._standing()
        self._places = None
        for batch in batches:
            place = places[batch.lane]
            if batch.number > place.reached:
                held = place.events if batch.number == place.number else 0
                await self._send(batch, held, await self._thread.run(partial(lane_lines, batch, lines)))
                places[batch.lane] = Place(batch.number, len(batch))
        self._places = places
        return {lane: place.reached for lane, place in places.items()}

    async def flush(self, lines: Lines) -> dict[Lane, int]:
        """Everything that was taken is stored already."""
        return {}

    async def close(self) -> None:
        """Let the connection go, after what still runs."""
        client, self._client, self._places = self._client, None, None
        if client is not None:
            await disconnect(client)
        await self._thread.close(lambda: None)

    # ---- the stream -------------------------------------------------------------------------------------------------

    async def _standing(self) -> dict[Lane, Place]:
        """Where the lanes stand, on a connection that lives."""
        if self._client is None or not self._client.is_connected:
            self._places = None
            await self._connect()
        if self._places is None:
            try:
                self._places = {lane: await self._last(lane) for lane in LANES}
            except (APIError, *NOT_THERE) as error:
                raise SinkRetry(f"stream {self._stream} does not tell how far it is: {words_of(error)}") from error
        return dict(self._places)

    async def _connect(self) -> None:
        client, self._client = self._client, None
        if client is not None:
            await disconnect(client)
        try:
            self._client = await connect(self._urls, self._access, f"strandline sink {self._feed}")
        except StrandlineError as error:
            raise SinkRetry(str(error)) from error
        try:
            info = await self._jetstream.stream_info(self._stream)
        except NotFoundError as error:
            raise SinkRetry(f"there is no stream {self._stream} at {', '.join(self._urls)}: make it") from error
        except (APIError, *NOT_THERE) as error:
            raise SinkRetry(f"stream {self._stream} does not answer: {words_of(error)}") from error
        own = info.config.max_msg_size or -1  # -1: the stream sets no limit of its own
        greatest = min(self._client.max_payload, own if own > 0 else self._client.max_payload)
        self._room = max(1, min(self._bytes_at_most, greatest - HEADER_BYTES))

    @property
    def _jetstream(self) -> JetStreamContext:
        assert self._client is not None
        return self._client.jetstream(timeout=self._timeout_s)

    async def _last(self, lane: Lane) -> Place:
        """What the last message of a lane's subject says. Raises StrandlineError where it is none of a sink's."""
        subject = self._subjects[lane]
        try:
            found = await self._jetstream.get_last_msg(self._stream, subject)
        except NotFoundError:
            self._last_sequence[lane] = 0
            return Place()
        self._last_sequence[lane] = found.seq or 0
        headers: Mapping[str, str] = found.headers or {}
        try:
            number, first = int(headers["Strandline-Batch"]), int(headers["Strandline-First"])
            events = first + (found.data or b"").count(b"\n")
            return Place(number, events, headers["Strandline-Last"] == "1")
        except (KeyError, ValueError):
            told = f"the last message of {subject} (number {found.seq} of stream {self._stream}) is not this sink's"
            raise StrandlineError(f"{told}: give it a `subject` of its own") from None

    # ---- one batch --------------------------------------------------------------------------------------------------

    async def _send(self, batch: Batch, held: int, block: bytes) -> None:
        """Publish what is not there yet of a batch. Rows that fit in no message are refused, the others are sent.

        A batch with refused rows is never marked as whole: after a crash it comes again, and they are refused again,
        until whoever keeps them has them.
        """
        parts, refused = await self._thread.run(partial(_parts, block, held, self._room))
        for part in parts:
            await self._publish(batch, part)
        if refused:
            detail = f"{len(refused)} events of batch {batch.number} fit in no message of {self._room:,} bytes"
            raise SinkRefused(detail, [batch.number], {batch.number: refused})

    async def _publish(self, batch: Batch, part: Part) -> None:
        name = f"{self._prefix}/{self._feed}/{batch.lane}/{batch.number}"
        headers = {
            "Content-Type": NDJSON,
            "Nats-Msg-Id": name if part.first == 0 else f"{name}/{part.first}",
            "Strandline-Feed": self._feed,
            "Strandline-Lane": batch.lane,
            "Strandline-Batch": str(batch.number),
            "Strandline-First": str(part.first),
            "Strandline-Last": str(int(part.is_last)),
            Header.EXPECTED_LAST_SUBJECT_SEQUENCE: str(self._last_sequence[batch.lane]),
        }
        try:
            stored = await self._jetstream.publish(
                self._subjects[batch.lane], part.block, timeout=self._timeout_s, stream=self._stream, headers=headers
            )
        except NoStreamResponseError as error:
            told = f"no stream takes {self._subjects[batch.lane]}: add it to the subjects of stream {self._stream}"
            raise SinkRetry(told) from error
        except (APIError, *NOT_THERE) as error:
            raise SinkRetry(f"stream {self._stream} did not store batch {batch.number}: {words_of(error)}") from error
        if stored.duplicate:  # it was stored before, but stands no longer at the end: messages were deleted since
            told = f"stream {self._stream} held batch {batch.number}, does so no more, and takes it for a repeat"
            raise SinkRetry(f"{told} until its `duplicate_window` has passed")
        self._last_sequence[batch.lane] = stored.seq


def _parts(block: bytes, held: int, room: int) -> tuple[list[Part], list[int]]:
    """A block of lines in parts of at most `room` bytes, without its first `held` lines; and lines that fit in none."""
    ends = np.flatnonzero(np.frombuffer(block, np.uint8) == ord("\n")) + 1
    starts = np.concatenate(([0], ends[:-1])) if len(ends) else ends
    refused = np.flatnonzero(ends - starts > room).tolist()
    parts = list(_cut(block, starts.tolist(), ends.tolist(), held, room, set(refused)))
    if refused:
        return parts, refused
    if not parts:  # a batch without events moves the position all the same
        parts = [Part(held, b"", True)]
    return [*parts[:-1], replace(parts[-1], is_last=True)], refused


def _cut(
    block: bytes, starts: list[int], ends: list[int], held: int, room: int, refused: set[int]
) -> Iterator[Part]:
    """Stretches of lines that fit; one ends where the next line would not fit, or is refused."""
    count, first = len(ends), held
    while first < count:
        if first in refused:
            first += 1
            continue
        stop = int(np.searchsorted(ends, starts[first] + room, side="right"))
        stop = min([stop, *(row for row in refused if first < row < stop)])
        yield Part(first, block[starts[first] : ends[stop - 1]], False)
        first = stop
