"""Files of released batches that roll: in one folder, named, each complete or absent. What any format has in common.

A file is written under a temporary name, synced, renamed, and its folder synced; only then are its batches reported as
durable. Names tell the lane and the first and last batch, so the folder itself is the position, and whoever collects
the files recognises a repeat. Before a file is completed a hidden one notes its numbers: should it be complete and
fetched before this service could say so, then after a crash files begin and end where that one did, and none holds
repeats and new batches together. When to roll by age is asked from outside; no timer lives here, and what a file holds
is each format's own.
"""

from __future__ import annotations

import contextlib
import errno
import hashlib
import os
import re
from abc import ABC, abstractmethod
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any, ClassVar, Protocol
from urllib.parse import quote

from ..core.columns import Batch, Lane
from ..errors import SinkRetry, StrandlineError
from ..ports import Clock, Lines
from .files import make_directory, sync_data, sync_directory, write_all
from .repairs import Repair
from .rows import LANES, one_lane
from .worker import OwnThread

ROLL_BYTES = 64 * 1024 * 1024
ROLL_EVERY_S = 10.0
# A name holds 255 bytes on every common file system, and lane, numbers and endings take 63 of them.
FEED_PART_AT_MOST = 190
_DIGITS = 20  # the greatest uint64 has as many
_NUMBER = rf"([0-9]{{{_DIGITS}}})"


class Contents(Protocol):
    """What one file holds, in its format, from its begin to its end. It writes to the descriptor it was made for."""

    def write(self, block: Any) -> int:
        """Write what a batch became; the size of the file with it, in bytes. Raises OSError."""

    def finish(self) -> None:
        """Write what a complete file ends with. Raises OSError."""

    def abandon(self) -> None:
        """Write nothing more: the file is about to be closed and removed. Never raises."""


@dataclass(slots=True)
class _Part:
    """The file of a lane that is being written: complete up to `last`, or thrown away."""

    descriptor: int
    path: Path
    contents: Contents
    first: int
    last: int
    size: int
    begun_ns: int


class RollingSink(ABC):
    """Takes the ordered and the late lane of one feed into files that roll by size or age.

    `take` writes to a file named `.part`; a file is completed once it has `roll_bytes` or, looked at after each `take`,
    is older than `roll_every_s`; `flush` completes what there is. Complete files are the collector's: this sink never
    touches them again. While at least one of a lane is left the newest one tells the position; where none is left the
    lane's position is unknown here. A format says what its files' names end with, what a batch and a repair become,
    and what writes them into a file.
    """

    ending: ClassVar[str]
    note_ending: ClassVar[str]  # tells the notes of formats apart that share a folder

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
        self._thread = OwnThread(f"{self.ending} {self._prefix}")
        self._parts: dict[Lane, _Part] = {}
        self._reached: dict[Lane, int] = {}
        self._bounds: dict[Lane, tuple[int, ...]] = {}  # batches behind which a file must end, ascending

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
        """Write batches of one lane. Raises SinkRetry; then the lane's incomplete file is gone, its room free again.

        Where reading a batch fails, as `block` says, the file stays: it holds all up to the batch before.
        """
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
        path = self._directory / f"{self._prefix}-repair-{number}-{number}.{self.ending}"
        beside = path.with_name(f"{path.name}.part")
        try:
            if not path.exists():
                descriptor = os.open(beside, os.O_WRONLY | os.O_CREAT | os.O_TRUNC | os.O_CLOEXEC, 0o644)
                with os.fdopen(descriptor, "wb") as file:
                    file.write(self.repair_block(repair))
                    file.flush()
                    sync_data(file.fileno())
                beside.rename(path)
            sync_directory(self._directory)  # a repeat too: nobody knows whether the first one came as far as this
        except OSError as error:
            raise self._trouble(error) from error

    async def close(self) -> None:
        """Release the folder; what is not complete is removed, and will be taken again."""
        await self._thread.close(self._discard_all)

    # ---- what a format says; called in the thread --------------------------------------------------------------------

    @abstractmethod
    def block(self, batch: Batch, lines: Lines) -> Any:
        """What a batch becomes, as `Contents.write` takes it. Raises SinkRefused, StrandlineError."""

    def blocks(self, batches: Sequence[Batch], lines: Lines) -> Iterator[Any]:
        """The same of batches of one lane, each in its turn; for formats that gain from reading several together."""
        return (self.block(batch, lines) for batch in batches)

    @abstractmethod
    def begin(self, lane: Lane, descriptor: int) -> Contents:
        """The contents of a new file of the lane, which is open and empty. Raises OSError."""

    @abstractmethod
    def repair_block(self, repair: Repair) -> bytes:
        """A repair batch as a whole file."""

    # ---- in the thread ----------------------------------------------------------------------------------------------

    def _open(self) -> dict[Lane, int]:
        self._discard_all()
        try:
            make_directory(self._directory)
            names = [entry.name for entry in self._directory.iterdir()]
            self._reached = {}
            for name in filter(self._incomplete().fullmatch, names):
                (self._directory / name).unlink()
            for lane in LANES:
                complete = filter(None, map(self._complete(lane).fullmatch, names))
                last = max((int(match[2]) for match in complete), default=0)
                if last:
                    self._reached[lane] = last
                self._bounds[lane] = self._noted(lane)
            sync_directory(self._directory)  # who renamed the newest file may have died before this
        except (FileExistsError, NotADirectoryError, ValueError) as error:
            raise StrandlineError(
                f"{self._directory} cannot be a folder: {error}. Name another for this sink"
            ) from error
        except OSError as error:
            raise self._trouble(error) from error
        return dict(self._reached)

    def _take(self, batches: Sequence[Batch], lines: Lines) -> dict[Lane, int]:
        fresh = [batch for batch in batches if batch.number > self._last(batch.lane)]
        for batch, block in zip(fresh, self.blocks(fresh, lines), strict=True):
            part = self._parts.get(batch.lane)
            with self._or_discarded(batch.lane):
                if part and any(part.last <= bound < batch.number for bound in self._bounds[batch.lane]):
                    self._roll(batch.lane)
                part = self._append(batch, block)
                if part.size >= self._roll_bytes:
                    self._roll(batch.lane)
        self._roll_aged()
        return dict(self._reached)

    def _last(self, lane: Lane) -> int:
        """Number of the last batch that a file has, complete or not."""
        part = self._parts.get(lane)
        return part.last if part else self._reached.get(lane, 0)

    def _append(self, batch: Batch, block: Any) -> _Part:
        part = self._parts.get(batch.lane)
        if part is None:
            path = self._directory / f"{self._prefix}-{batch.lane}-{batch.number:0{_DIGITS}}.{self.ending}.part"
            descriptor = os.open(path, os.O_WRONLY | os.O_CREAT | os.O_TRUNC | os.O_CLOEXEC, 0o644)
            try:
                contents = self.begin(batch.lane, descriptor)
            except BaseException:
                _remove(descriptor, path)
                raise
            part = _Part(descriptor, path, contents, batch.number, batch.number, 0, self._clock.now_ns())
            self._parts[batch.lane] = part
        part.size = part.contents.write(block)
        part.last = batch.number
        return part

    def _roll_aged(self) -> None:
        now = self._clock.now_ns()
        for lane in list(self._parts):
            if now - self._parts[lane].begun_ns >= self._roll_every_s * 1e9:
                with self._or_discarded(lane):
                    self._roll(lane)

    def _roll_all(self) -> dict[Lane, int]:
        for lane in list(self._parts):
            with self._or_discarded(lane):
                self._roll(lane)
        return dict(self._reached)

    @contextlib.contextmanager
    def _or_discarded(self, lane: Lane) -> Iterator[None]:
        """Throw a lane's file away after any error: nobody knows how far it got. An OSError becomes a SinkRetry."""
        try:
            yield
        except BaseException as error:
            self._discard(lane)
            if isinstance(error, OSError):
                raise self._trouble(error) from error
            raise

    def _roll(self, lane: Lane) -> None:
        """Complete a lane's file. After a sync that failed nothing of it can be trusted: the caller throws it away."""
        part = self._parts[lane]
        part.contents.finish()
        sync_data(part.descriptor)
        self._note(lane, part)
        name = f"{self._prefix}-{lane}-{part.first:0{_DIGITS}}-{part.last:0{_DIGITS}}.{self.ending}"
        part.path.rename(self._directory / name)
        part.path = self._directory / name  # until the folder is synced it may still vanish
        sync_directory(self._directory)
        del self._parts[lane]
        self._reached[lane] = part.last
        os.close(part.descriptor)

    def _note(self, lane: Lane, part: _Part) -> None:
        """Say durably which batches the next complete file holds, before there is one: first and last.

        Behind them stand the bounds further on that are known: a file that was fetched may have ended there.
        """
        ahead = [bound for bound in self._bounds[lane] if bound > part.last]
        path = self._note_path(lane)
        beside = path.with_name(f"{path.name}.part")
        descriptor = os.open(beside, os.O_WRONLY | os.O_CREAT | os.O_TRUNC | os.O_CLOEXEC, 0o644)
        try:
            write_all(descriptor, (" ".join(map(str, (part.first, part.last, *ahead))) + "\n").encode())
            sync_data(descriptor)
        finally:
            os.close(descriptor)
        beside.replace(path)
        self._bounds[lane] = (part.first - 1, part.last, *ahead)  # the file may be fetched before its folder is synced
        sync_directory(self._directory)

    def _noted(self, lane: Lane) -> tuple[int, ...]:
        """Where the last file that may be complete began and ended: the batch before its first, and its last.

        Then where earlier ones ended that went further. Raises OSError where the note is there and cannot be read.
        """
        with contextlib.suppress(FileNotFoundError, ValueError):
            first, last, *ahead = map(int, self._note_path(lane).read_text().split())
            return first - 1, last, *ahead
        return ()

    def _note_path(self, lane: Lane) -> Path:
        return self._directory / f".{self._prefix}-{lane}{self.note_ending}.completing"

    def _complete(self, lane: Lane) -> re.Pattern[str]:
        """The names of a lane's complete files."""
        return re.compile(rf"{re.escape(self._prefix)}-{lane}-{_NUMBER}-{_NUMBER}\.{self.ending}")

    def _incomplete(self) -> re.Pattern[str]:
        """The names of what was never completed: files of lanes and of repairs, and notes."""
        prefix, lanes = re.escape(self._prefix), "|".join(LANES)
        files = rf"{prefix}-(({lanes})|repair-{_NUMBER})-{_NUMBER}\.{self.ending}\.part"
        return re.compile(rf"{files}|\.{prefix}-({lanes}){re.escape(self.note_ending)}\.completing\.part")

    def _discard(self, lane: Lane) -> None:
        part = self._parts.pop(lane, None)
        if part is not None:
            try:
                part.contents.abandon()
            finally:
                _remove(part.descriptor, part.path)

    def _discard_all(self) -> None:
        for lane in list(self._parts):
            self._discard(lane)

    def _trouble(self, error: OSError) -> SinkRetry:
        what = _SENTENCES.get(error.errno or 0, "see whether its disk is failing")
        return SinkRetry(f"{self._directory} could not be written ({error.strerror or error}): {what}")


def _remove(descriptor: int, path: Path) -> None:
    with contextlib.suppress(OSError):
        os.close(descriptor)
    with contextlib.suppress(OSError):
        path.unlink()


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
