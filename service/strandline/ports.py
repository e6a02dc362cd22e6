"""The only seams to the world: Clock, Disk, Sink. Everything behind them can be replaced, in tests and in simulation.

Protocols only; implementations live in their own modules. Disk is blocking on purpose: the shell runs it in a thread,
a simulation calls it directly.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from typing import Protocol, runtime_checkable

from .core.columns import Batch, Lane
from .core.effects import Buffer


class Clock(Protocol):
    """The arrival clock."""

    def now_ns(self) -> int:
        """Nanoseconds since 1970 UTC; does not go back while the process lives."""


class File(Protocol):
    """One open file of a fixed, reserved size."""

    @property
    def size(self) -> int:
        """Bytes that are reserved for it."""

    def write(self, offset: int, buffers: Sequence[Buffer]) -> None:
        """Write the buffers one after the other from `offset`. Raises OSError."""

    def sync(self) -> None:
        """Make all that was written durable. Raises OSError; after that the file must not be trusted nor used."""

    def view(self) -> memoryview:
        """The whole file, read-only, mapped: it shows what is written later too."""

    def data_end(self, start: int) -> int:
        """From where on, at or behind `start`, the file is known to hold nothing but zeros. Raises OSError."""

    def close(self) -> None:
        """Release the handle; views that are still held stay valid."""


class Disk(Protocol):
    """A directory tree of files. Paths are relative to the disk's root, with `/` between names."""

    def names(self, directory: str) -> list[str]:
        """Sorted names in a directory; an absent directory is empty."""

    def create(self, path: str, size: int) -> File:
        """A new file of `size` zero bytes whose room is reserved (a full disk raises OSError here, not later)."""

    def open(self, path: str) -> File:
        """An existing file, for reading and writing."""

    def rename(self, old: str, new: str) -> None:
        """Replace `new` by `old` in one step."""

    def remove(self, path: str) -> None:
        """Delete a file."""

    def sync_directory(self, directory: str) -> None:
        """Make creations, renames and removals in it durable."""


class Lines(Protocol):
    """Reads event lines back out of the journal.

    Sinks call it from threads of their own while the loop goes on appending, so every method must be safe to call from
    any thread. The lines of a batch stay readable until every sink that serves its lane has reported it as durable.
    """

    def lines(self, batch: Batch) -> list[bytes]:
        """The batch's lines, one bytes object each, without line feeds (for stores that take rows).

        A quarantine batch too: the line of each of its entries, in their order; such lines may be any bytes at all.
        """

    def ndjson(self, batch: Batch) -> bytes:
        """The batch's lines, each followed by a line feed, as one block (for stores that take bytes).

        For the lanes "ordered" and "late" only: a line in quarantine may hold a line feed of its own.
        """

    def ndjson_each(self, batches: Sequence[Batch]) -> Iterator[bytes | memoryview]:
        """`ndjson` of each of these batches of one lane, in their order; small ones may be read together."""
        return map(self.ndjson, batches)

    def source_names(self) -> Sequence[str]:
        """Names of the sources by number. It only grows: a number once given keeps its name."""


class Sink(Protocol):
    """A store that takes batches. One object serves one feed; calls never overlap.

    Numbers of batches ascend within a lane. `open` and `take` answer how far the store durably is: per lane the number
    of the last batch that can never be lost (0: none yet); a lane that is missing means "I cannot know", and the
    journal's own memory of the last answer is used. `take` may answer with less than it was given (it buffers); then
    `flush` makes the rest durable. Errors: strandline.errors.SinkRetry (try the same batches again) and
    SinkRefused (permanent; the batches named in it will never be taken). After any error from `take` or `flush`, every
    batch above the durable position is offered again, those too that an earlier `take` had buffered; a sink skips the
    ones that it still holds. A call may be cancelled; `close` then follows and must wait for what still runs.
    """

    @property
    def lanes(self) -> tuple[Lane, ...]:
        """The lanes that this sink takes."""

    @property
    def flush_after_s(self) -> float:
        """Seconds that what was buffered may wait for `flush`; 0: flush as soon as nothing more waits to be taken."""

    async def open(self) -> dict[Lane, int]:
        """Connect, create what is absent, and tell the position reached."""

    async def take(self, batches: Sequence[Batch], lines: Lines) -> dict[Lane, int]:
        """Take batches of one lane, in order; a batch at or below the position reached is skipped."""

    async def flush(self, lines: Lines) -> dict[Lane, int]:
        """Make durable what was taken so far."""

    async def close(self) -> None:
        """Release the store. Does not flush."""


@runtime_checkable
class Counting(Protocol):
    """What a sink may have besides: counts of samples that its store does not hold, or held already, by reason.

    Reasons are from a closed list, never from an event. Since the start of the process; shown to observers.
    """

    def counts(self) -> Mapping[str, int]:
        """The counts so far. Called on the loop at any time; must not wait."""
