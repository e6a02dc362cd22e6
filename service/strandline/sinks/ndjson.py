"""The NDJSON sink: files of newline-delimited JSON in one folder, each complete or absent.

A file is written under a temporary name, synced, renamed, and its folder synced; only then are its batches reported as
durable. Names tell the lane and the first and last batch, so the folder itself is the position, and whoever collects
the files recognises a repeat. Before a file is completed a hidden one notes its numbers: should it be complete and
fetched before this service could say so, then after a crash files begin and end where that one did, and none holds
repeats and new batches together. When to roll by age is asked from outside; no timer lives here.
"""

from __future__ import annotations

import contextlib
import errno
import hashlib
import os
import re
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any
from urllib.parse import quote

import msgspec

from ..core.columns import Batch, Lane
from ..errors import SinkRetry, StrandlineError
from ..ports import Clock, Lines
from .files import make_directory, sync_data, sync_directory, write_all
from .repairs import Repair
from .rows import LANES, late_by_ns, one_lane, source_column
from .worker import OwnThread

ROLL_BYTES = 64 * 1024 * 1024
ROLL_EVERY_S = 10.0
# A name holds 255 bytes on every common file system, and lane, numbers and endings take 63 of them.
FEED_PART_AT_MOST = 190
_DIGITS = 20  # the greatest uint64 has as many


@dataclass(slots=True)
class Part:
    """The file of a lane that is being written: complete up to `last`, or thrown away."""

    descriptor: int
    path: Path
    first: int
    last: int
    size: int
    begun_ns: int


class NdjsonSink:
    """Takes the ordered and the late lane of one feed into files that roll by size or age.

    Ordered lines are the events' own bytes. Late lines wrap the event as it came with what is known of it:
    {"time_ns":...,"source":...,"arrived_ns":...,"late_by_ns":...,"event":{...}} (times in ns since 1970 UTC; source
    null where the feed has none). `take` buffers in a file named `.part`; a file is completed once it has `roll_bytes`
    or, looked at after each `take`, is older than `roll_every_s`; `flush` completes what there is. Complete files are
    the collector's: this sink never touches them again. While at least one of a lane is left the newest one tells the
    position; where none is left the lane's position is unknown here. A format that other files share this with says
    what their names end with, what a batch becomes (`_block`), and how that is written and finished.
    """

    _ending = "ndjson"
    _note_ending = ""

    def __init__(
        self,
        directory: str | os.PathLike[str],
        feed: str,
        clock: Clock,
        *,
        roll_bytes: int = ROLL_BYTES,
        roll_every_s: float = ROLL_EVERY_S,
    ) -> None:
        self._directory = Path(directory)
        self._prefix = feed_part(feed)
        self._clock = clock
        self._roll_bytes = roll_bytes
        self._roll_every_s = roll_every_s
        self._thread = OwnThread(f"{self._ending} {self._prefix}")
        self._parts: dict[Lane, Part] = {}
        self._reached: dict[Lane, int] = {}
        self._bounds: dict[Lane, tuple[int, int]] = {}  # batches behind which a file must end

    @property
    def lanes(self) -> tuple[Lane, ...]:
        """Ordered and late."""
        return LANES

    @property
    def flush_after_s(self) -> float:
        """The age at which a file is completed."""
        return self._roll_every_s

    async def open(self) -> dict[Lane, int]:
        """Make the folder, remove what was never completed, and tell the position reached.

        Raises SinkRetry where the folder cannot be used now, StrandlineError where a file stands in its place.
        """
        return await self._thread.run(self._open)

    async def take(self, batches: Sequence[Batch], lines: Lines) -> dict[Lane, int]:
        """Write batches of one lane. Raises SinkRetry; then the lane's incomplete file is gone, its room free again."""
        one_lane(batches)
        return await self._thread.run(lambda: self._take(batches, lines))

    async def flush(self, lines: Lines) -> dict[Lane, int]:
        """Complete the files that are being written. Errors as for `take`."""
        return await self._thread.run(self._roll_all)

    async def repair(self, repair: Repair) -> None:
        """Write one repair batch as a file of its own, complete or absent; one that is there already is a repeat."""
        await self._thread.run(lambda: self._repair(repair))

    def _repair(self, repair: Repair) -> None:
        number = f"{repair.number:0{_DIGITS}}"
        path = self._directory / f"{self._prefix}-repair-{number}-{number}.{self._ending}"
        beside = path.with_name(f"{path.name}.part")
        if path.exists():
            return
        try:
            descriptor = os.open(beside, os.O_WRONLY | os.O_CREAT | os.O_TRUNC | os.O_CLOEXEC, 0o644)
            with os.fdopen(descriptor, "wb") as file:
                file.write(self._repair_block(repair))
                file.flush()
                sync_data(file.fileno())
            beside.rename(path)
            sync_directory(self._directory)
        except OSError as error:
            raise self._trouble(error) from error

    async def close(self) -> None:
        """Release the folder; what is not complete is removed, and will be taken again."""
        await self._thread.close(self._discard_all)

    # ---- in the thread --------------------------------------------------------------------------------------------

    def _open(self) -> dict[Lane, int]:
        self._discard_all()
        try:
            make_directory(self._directory)
            names = [entry.name for entry in self._directory.iterdir()]
            self._reached = {}
            for lane in LANES:
                for name in filter(self._pattern(lane, r"\.part").fullmatch, names):
                    (self._directory / name).unlink()
                complete = filter(None, map(self._pattern(lane, "").fullmatch, names))
                last = max((int(match[2]) for match in complete), default=0)
                if last:
                    self._reached[lane] = last
                self._bounds[lane] = self._noted(lane)
        except (FileExistsError, NotADirectoryError, ValueError) as error:
            raise StrandlineError(
                f"{self._directory} cannot be a folder: {error}. Name another for this sink"
            ) from error
        except OSError as error:
            raise self._trouble(error) from error
        return dict(self._reached)

    def _take(self, batches: Sequence[Batch], lines: Lines) -> dict[Lane, int]:
        for batch in batches:
            part = self._parts.get(batch.lane)
            if batch.number <= (part.last if part else self._reached.get(batch.lane, 0)):
                continue
            block = self._block(batch, lines)
            try:
                if part and any(part.last <= bound < batch.number for bound in self._bounds[batch.lane]):
                    self._roll(batch.lane)
                part = self._append(batch, block)
                if part.size >= self._roll_bytes:
                    self._roll(batch.lane)
            except OSError as error:
                self._discard(batch.lane)
                raise self._trouble(error) from error
        self._roll_aged()
        return dict(self._reached)

    def _block(self, batch: Batch, lines: Lines) -> Any:
        return lane_lines(batch, lines)

    def _repair_block(self, repair: Repair) -> bytes:
        return repair.ndjson()

    def _append(self, batch: Batch, block: Any) -> Part:
        part = self._parts.get(batch.lane)
        if part is None:
            path = self._directory / f"{self._prefix}-{batch.lane}-{batch.number:0{_DIGITS}}.{self._ending}.part"
            descriptor = os.open(path, os.O_WRONLY | os.O_CREAT | os.O_TRUNC | os.O_CLOEXEC, 0o644)
            part = Part(descriptor, path, batch.number, batch.number, 0, self._clock.now_ns())
            self._parts[batch.lane] = part
        part.size = self._write(batch.lane, part, block)
        part.last = batch.number
        return part

    def _write(self, lane: Lane, part: Part, block: Any) -> int:
        """Write what a batch became; the size of the file with it. Raises OSError."""
        write_all(part.descriptor, block)
        return part.size + len(block)

    def _finish(self, lane: Lane, part: Part) -> None:
        """Write what a complete file ends with. Raises OSError."""

    def _roll_aged(self) -> None:
        now = self._clock.now_ns()
        for lane in list(self._parts):
            if now - self._parts[lane].begun_ns >= self._roll_every_s * 1e9:
                self._roll_or_discard(lane)

    def _roll_all(self) -> dict[Lane, int]:
        for lane in list(self._parts):
            self._roll_or_discard(lane)
        return dict(self._reached)

    def _roll_or_discard(self, lane: Lane) -> None:
        try:
            self._roll(lane)
        except OSError as error:
            self._discard(lane)
            raise self._trouble(error) from error

    def _roll(self, lane: Lane) -> None:
        """Complete a lane's file. After a sync that failed nothing of it can be trusted: the caller throws it away."""
        part = self._parts[lane]
        self._finish(lane, part)
        sync_data(part.descriptor)
        self._note(lane, part)
        name = f"{self._prefix}-{lane}-{part.first:0{_DIGITS}}-{part.last:0{_DIGITS}}.{self._ending}"
        part.path.rename(self._directory / name)
        part.path = self._directory / name  # until the folder is synced it may still vanish
        sync_directory(self._directory)
        del self._parts[lane]
        self._reached[lane] = part.last
        os.close(part.descriptor)

    def _note(self, lane: Lane, part: Part) -> None:
        """Say which batches the next complete file holds, before there is one."""
        path = self._note_path(lane)
        beside = path.with_name(f"{path.name}.part")
        descriptor = os.open(beside, os.O_WRONLY | os.O_CREAT | os.O_TRUNC | os.O_CLOEXEC, 0o644)
        try:
            os.write(descriptor, f"{part.first} {part.last}\n".encode())
            sync_data(descriptor)
        finally:
            os.close(descriptor)
        beside.replace(path)

    def _noted(self, lane: Lane) -> tuple[int, int]:
        """Where the last file that may be complete began and ended: the batch before its first, and its last."""
        with contextlib.suppress(OSError, ValueError):
            first, last = map(int, self._note_path(lane).read_text().split())
            return first - 1, last
        return 0, 0

    def _note_path(self, lane: Lane) -> Path:
        return self._directory / f".{self._prefix}-{lane}{self._note_ending}.completing"

    def _pattern(self, lane: Lane, part: str) -> re.Pattern[str]:
        """The names of a lane's files: complete ones (`part` is empty), or those that never were."""
        last = "" if part else rf"-([0-9]{{{_DIGITS}}})"
        return re.compile(rf"{re.escape(self._prefix)}-{lane}-([0-9]{{{_DIGITS}}}){last}\.{self._ending}{part}")

    def _discard(self, lane: Lane) -> None:
        part = self._parts.pop(lane, None)
        if part is not None:
            with contextlib.suppress(OSError):
                os.close(part.descriptor)
            with contextlib.suppress(OSError):
                part.path.unlink()

    def _discard_all(self) -> None:
        for lane in list(self._parts):
            self._discard(lane)

    def _trouble(self, error: OSError) -> SinkRetry:
        what = _SENTENCES.get(error.errno or 0, "see whether its disk is failing")
        return SinkRetry(f"{self._directory} could not be written ({error.strerror or error}): {what}")


_SENTENCES = {
    errno.ENOSPC: "free some room on its disk",
    errno.EDQUOT: "raise the quota, or free some room",
    errno.EFBIG: "raise the limit on the size of a file, or set a smaller `roll_bytes`",
    errno.EACCES: "allow this service to write there",
    errno.EPERM: "allow this service to write there",
    errno.EROFS: "mount its disk for writing",
    errno.ENOENT: "make the folder again, or mount what it lies on",
    errno.EMFILE: "raise the limit on open files",
    errno.ENAMETOOLONG: "name a folder with a shorter path",
}


def feed_part(feed: str) -> str:
    """A feed's name as the beginning of a file's name: other characters than letters, digits, `-`, `_` and `.` escaped.

    Never begins with a dot, never longer than 190 bytes; two names never give the same.
    """
    escaped = quote(feed, safe="").replace("~", "%7E")
    if escaped.startswith("."):
        escaped = "%2E" + escaped[1:]
    if len(escaped) > FEED_PART_AT_MOST:
        digest = hashlib.sha256(feed.encode()).hexdigest()[:32]
        escaped = f"{escaped[: FEED_PART_AT_MOST - 33]}~{digest}"  # an unabridged name holds no `~`
    return escaped


def lane_lines(batch: Batch, lines: Lines) -> bytes:
    """An ordered or a late batch as NDJSON: events as they came, late ones wrapped."""
    return lines.ndjson(batch) if batch.lane == "ordered" else late_lines(batch, lines)


def late_lines(batch: Batch, lines: Lines) -> bytes:
    """A late batch as NDJSON: each event as it came, wrapped with what is known of it."""
    sources = source_column(batch, lines)
    encoded = {source: msgspec.json.encode(source) for source in set(sources)}
    form = b'{"time_ns":%d,"source":%b,"arrived_ns":%d,"late_by_ns":%d,"event":%b}\n'
    facts = zip(batch.times.tolist(), sources, late_by_ns(batch), lines.lines(batch), strict=True)
    return b"".join(
        form % (time_ns, encoded[source], batch.instant_ns, late_by, event) for time_ns, source, late_by, event in facts
    )
