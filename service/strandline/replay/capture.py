"""A capture: a stretch of one feed's journal in one portable file, written front to end and read block by block.

Here live what a capture says of itself, the writer that takes records, and the reader. The file's envelopes are
`sections`, its columns `blocks`, its grammar for readers capture.md. Where records come from is `from_journal`,
`from_file` and `recording`; what is done with them is `replaying`. Nothing of a capture is ever in memory but the block
at work and, for lines, a bounded number of sections (`lines`).
"""

from __future__ import annotations

import os
from collections.abc import Callable, Iterator, Sequence
from types import TracebackType
from typing import Literal, NamedTuple, Self

import msgspec
import numpy as np
from numpy.typing import NDArray

from strandline.core.columns import REF, as_refs
from strandline.core.effects import Buffer
from strandline.core.records import VERSION, Kind, instant_of
from strandline.core.saved import restore
from strandline.core.state import State
from strandline.errors import CaptureError

from .blocks import Block, Gathered
from .sections import Holds, Section, SectionReader, SectionWriter, Summary

Origin = Literal["journal", "service", "file"]

# A block is closed by whatever comes first; a request is never cut.
BLOCK_EVENTS = 1 << 16
BLOCK_RECORDS = 1 << 14
BLOCK_LINE_BYTES = 8 << 20


class Meta(msgspec.Struct, frozen=True):
    """What a capture says of itself. Unknown members of later versions are passed over."""

    feed: str
    origin: Origin
    made_ns: int
    start_lsn: int = 0  # position of the first record; with a state, what stood before is in it
    lines: bool = True  # the events' bytes are there, not only their columns
    decided: bool = True  # marks are there: what the feed decided can be replayed
    record_version: int = VERSION


class HeldLine(NamedTuple):
    """Where the lines of the events stand that were held when the capture began: places in the journal, ascending."""

    places: NDArray[np.int64]
    lengths: NDArray[np.int64]


def held_lines(state: State) -> HeldLine:
    """The lines of everything that a state holds, in the order in which a capture keeps them."""
    refs = [as_refs(chunk.refs) for run in state.runs.runs for chunk in run.chunks]
    joined = np.concatenate(refs) if refs else np.empty(0, REF)
    order = np.argsort(joined["place"], kind="stable")
    return HeldLine(joined["place"][order].astype(np.int64), joined["length"][order].astype(np.int64))


class CaptureWriter:
    """Takes records in their order and writes the capture as it goes; `write` needs no seeking. End it with `close`."""

    def __init__(
        self, write: Callable[[bytes], object], meta: Meta, *, state: Sequence[Buffer] = (), held: bytes = b""
    ) -> None:
        """`state` is what `core.saved.save` gave at `meta.start_lsn`, `held` the lines of `held_lines`."""
        if meta.record_version != VERSION:
            raise CaptureError(f"records of version {meta.record_version} cannot be written, only {VERSION}")
        self.meta = meta
        self._sections = SectionWriter(write)
        self._sections.add(Holds.META, msgspec.msgpack.encode(meta))
        self._gathered = Gathered()
        self._first_line = self.events = self.requests = self.records = 0
        self._first_ns: int | None = None
        self._now_ns = 0
        if state:
            summary = Summary(line_bytes=len(held))
            if meta.lines and held:
                self._sections.add(Holds.LINES, held, summary)
            self._sections.add(Holds.STATE, b"".join(state), summary)
            self._first_line = len(held)

    @property
    def bytes_written(self) -> int:
        """Bytes of the file so far."""
        return self._sections.bytes_written

    def add(self, kind: int, version: int, lsn: int, body: Buffer) -> None:
        """One record of the journal, the next one. Raises CaptureError for a version that is not read here."""
        if version != VERSION:
            raise CaptureError(f"the record at position {lsn} is of version {version}; this program reads {VERSION}")
        gathered = self._gathered
        if kind == Kind.ARRIVAL:
            self._note(gathered.add_arrival(lsn, body))
        else:
            self._note(instant_of(kind, body))
            gathered.add_small(kind, lsn, body)
        if (
            gathered.events >= BLOCK_EVENTS
            or gathered.line_bytes >= BLOCK_LINE_BYTES
            or len(gathered.kinds) >= BLOCK_RECORDS
        ):
            self.end_block()

    def _note(self, instant_ns: int | None) -> None:
        if instant_ns is not None:
            self._first_ns = instant_ns if self._first_ns is None else self._first_ns
            self._now_ns = max(self._now_ns, instant_ns)

    def end_block(self) -> None:
        """Write what was gathered."""
        gathered, self._gathered = self._gathered, Gathered()
        if not gathered.kinds:
            return
        first_ns = self._now_ns if self._first_ns is None else self._first_ns
        summary = Summary(
            records=len(gathered.kinds),
            requests=len(gathered.requests),
            events=gathered.events,
            first_line=self._first_line,
            line_bytes=gathered.line_bytes,
            first_ns=first_ns,
            last_ns=self._now_ns,
        )
        if self.meta.lines and gathered.line_bytes:
            self._sections.add(Holds.LINES, b"".join(gathered.lines), summary)
        self._sections.add(Holds.RECORDS, gathered.encoded(), summary)
        self._first_line += gathered.line_bytes
        self.events += gathered.events
        self.requests += len(gathered.requests)
        self.records += len(gathered.kinds)
        self._first_ns = None

    def close(self) -> None:
        """Write the last block and the index: the capture is whole. The file itself is the caller's."""
        self.end_block()
        self._sections.close()


class Capture:
    """A capture file, open for reading. Raises OSError; CaptureError where it is none or is damaged.

    A file that was cut short counts as far as it is whole: `cut` then says so in a sentence.
    """

    def __init__(self, path: str | os.PathLike[str]) -> None:
        self._reader = SectionReader(path)
        try:
            first = next(iter(self._reader.sections), None)
            if first is None or first.holds != Holds.META:
                raise self._reader.damaged(0, "nothing in it is whole: what it is of cannot be told")
            self.meta = self._decoded(first)
            by_kind = {kind: [s for s in self._reader.sections if s.holds == kind] for kind in Holds}
        except BaseException:
            self._reader.close()
            raise
        self._state, self._lines, self._blocks = by_kind[Holds.STATE], by_kind[Holds.LINES], by_kind[Holds.RECORDS]
        self.records = sum(section.summary.records for section in self._blocks)
        self.requests = sum(section.summary.requests for section in self._blocks)
        self.events = sum(section.summary.events for section in self._blocks)
        self.first_ns = min((section.summary.first_ns for section in self._blocks), default=0)
        self.last_ns = max((section.summary.last_ns for section in self._blocks), default=0)

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()

    def close(self) -> None:
        """Give the file back."""
        self._reader.close()

    def _decoded(self, section: Section) -> Meta:
        try:
            meta = msgspec.msgpack.decode(self._reader.content(section), type=Meta)
        except msgspec.MsgspecError as error:
            raise self._reader.damaged(section.offset, f"what it says of itself cannot be read ({error})") from error
        if meta.record_version > VERSION:
            raise CaptureError(
                f"{self.path}: its records are of version {meta.record_version}, this program reads up to {VERSION}"
            )
        return meta

    @property
    def path(self) -> str:
        """The file."""
        return self._reader.path

    @property
    def cut(self) -> str | None:
        """A sentence if the file was cut short."""
        if self._reader.cut_at is None:
            return None
        return (
            f"{self.path}: the capture was cut short, its index is missing; what stands before byte "
            f"{self._reader.cut_at:,} is whole and counts: {self.requests:,} requests, {self.events:,} events"
        )

    def state(self) -> State | None:
        """The feed's state before the first record; None for a capture that begins with an empty feed.

        Raises CaptureError where this program cannot read it.
        """
        if not self._state:
            return None
        section = self._state[0]
        try:
            return restore(self._reader.content(section))
        except ValueError as error:
            raise CaptureError(
                f"{self.path}: the state that it begins with cannot be used ({error}); it was made by another version "
                "of this program: read it with that one, or replay it with --config, which needs none"
            ) from error

    def source_names(self) -> list[str]:
        """Names of the sources that had numbers before the first record."""
        state = self.state()
        return list(state.sources.names) if state is not None else []

    def blocks(self) -> Iterator[Block]:
        """The records, block by block. Raises CaptureError where one is damaged."""
        for section in self._blocks:
            content = self._reader.content(section)
            try:
                block = Block(content, section.summary.first_line)
            except ValueError as error:
                raise self._reader.damaged(section.offset, str(error)) from error
            if (len(block.times), len(block.counts)) != (section.summary.events, section.summary.requests):
                raise self._reader.damaged(section.offset, "the block does not hold what its header says")
            yield block

    def line_sections(self) -> list[tuple[int, int]]:
        """Where the sections of lines begin, counted over all bytes of lines, and how long each is; ascending."""
        return [(section.summary.first_line, section.plain_bytes) for section in self._lines]

    def line_section(self, number: int) -> memoryview:
        """The bytes of one of `line_sections`. Raises CaptureError where it is damaged. Any thread may call."""
        return self._reader.content(self._lines[number])
