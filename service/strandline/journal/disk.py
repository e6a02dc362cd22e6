"""LocalDisk: the Disk of strandline.ports on a directory of the machine's own file system.

Blocking calls only; no asyncio, no frames, no segments. What is asked of the file system: a sector that is written
again with the bytes it holds keeps them even if power fails, a rename is one step, fsync of a file and of a directory
keep what they were asked to keep. Nothing is ever truncated, so a mapping never loses its ground; a device that cannot
read a mapped page back ends the process (SIGBUS), which recovery then treats as any other crash.
"""

from __future__ import annotations

import contextlib
import errno
import fcntl
import mmap
import os
from collections.abc import Callable, Sequence
from pathlib import Path

from strandline.core.effects import Buffer
from strandline.errors import JournalError
from strandline.writeback import begin_writing

BUFFERS_AT_MOST = 1024  # IOV_MAX on Linux: more in one pwritev is EINVAL
ZEROS = bytes(1 << 20)
# What a file system answers that cannot reserve (POSIX and Linux both appear in the wild).
CANNOT_RESERVE = frozenset({errno.EOPNOTSUPP, errno.ENOSYS, errno.EINVAL})


class LocalFile:
    """One open file of fixed size. Not thread-safe: one thread writes; views may be read by any."""

    def __init__(self, descriptor: int, size: int, *, synced: bool = True) -> None:
        self._descriptor = descriptor
        self._size = size
        self._synced = synced

    @property
    def size(self) -> int:
        """Bytes that are reserved for it."""
        return self._size

    def write(self, offset: int, buffers: Sequence[Buffer]) -> None:
        """Write the buffers one after the other from `offset`; the disk begins with long ones at once.

        Raises OSError; ValueError beyond the file's size.
        """
        left = [buffer if type(buffer) is bytes else _plain(buffer) for buffer in buffers]
        total = sum(map(len, left))
        if offset < 0 or offset + total > self._size:
            raise ValueError(f"{total} bytes at {offset} do not fit a file of {self._size}")
        write_all(self._descriptor, left, offset)
        if self._synced:
            begin_writing(self._descriptor, offset, total)

    def sync(self) -> None:
        """Make all that was written durable. Raises OSError; then the file must not be trusted any more."""
        if self._synced:
            os.fdatasync(self._descriptor)

    def view(self) -> memoryview:
        """The whole file, read-only; it shows what is written later too, and outlives `close`."""
        if self._size == 0:
            return memoryview(b"")
        return memoryview(mmap.mmap(self._descriptor, self._size, flags=mmap.MAP_SHARED, prot=mmap.PROT_READ))

    def data_end(self, start: int) -> int:
        """From where on, at or behind `start`, it holds nothing but zeros, as far as the system knows. Raises OSError.

        By the holes that lseek(2) tells of, which read as zeros: room that was reserved and never written nor read. So
        64 MiB of it take some us, where mapping and looking through them takes 12 ms and as much page cache.
        """
        end = offset = min(start, self._size)
        try:
            while offset < self._size:
                offset = os.lseek(self._descriptor, offset, os.SEEK_DATA)
                end = offset = os.lseek(self._descriptor, offset, os.SEEK_HOLE)
        except OSError as error:
            if error.errno == errno.ENXIO:  # no data follows
                return end
            if error.errno not in CANNOT_RESERVE:
                raise
            return self._size
        return end

    def close(self) -> None:
        """Release the handle. A second call does nothing."""
        descriptor, self._descriptor = self._descriptor, -1
        if descriptor >= 0:
            os.close(descriptor)


def write_all(
    descriptor: int,
    buffers: list[bytes | memoryview],
    offset: int,
    pwritev: Callable[[int, Sequence[bytes | memoryview], int], int] = os.pwritev,
) -> None:
    """Write buffers of bytes to the last one, however many they are and however little the system takes at a time."""
    first = 0
    while first < len(buffers):
        some = buffers[first : first + BUFFERS_AT_MOST]
        written = pwritev(descriptor, some, offset)
        if written == 0 and any(some):
            raise OSError(errno.EIO, "the system wrote nothing and named no reason")
        offset += written
        while first < len(buffers) and written >= len(buffers[first]):
            written -= len(buffers[first])
            first += 1
        if written:
            buffers[first] = memoryview(buffers[first])[written:]


def _plain(buffer: Buffer) -> memoryview:
    view = memoryview(buffer)
    return view if view.format == "B" and view.ndim == 1 else view.cast("B")


class LocalDisk:
    """The directory tree below `root`. Paths are relative, with `/` between names; `..` and the like are refused.

    Not `synced`: for files that no other process will read, and that need not outlive this one; a sync does nothing.
    """

    def __init__(self, root: str | os.PathLike[str], *, read_only: bool = False, synced: bool = True) -> None:
        self._root = Path(root)
        self._read_only, self._synced = read_only, synced
        self._locks: list[int] = []

    def names(self, directory: str) -> list[str]:
        """Sorted names in a directory; an absent directory is empty."""
        try:
            return sorted(path.name for path in self._at(directory).iterdir())
        except FileNotFoundError:
            return []

    def create(self, path: str, size: int) -> LocalFile:
        """A new file of `size` zero bytes with its room reserved, its size synced; directories above it are made.

        Raises OSError (ENOSPC where there is no room); then no file is left behind. On a file system that copies on
        write a later write can still lack room: there the reservation is only as good as that file system's.
        """
        if self._read_only:
            raise OSError(errno.EROFS, "this disk was opened for reading only", path)
        target = self._at(path)
        self._make_directory(target.parent)
        descriptor = os.open(target, os.O_RDWR | os.O_CREAT | os.O_EXCL | os.O_CLOEXEC, 0o640)
        try:
            reserve(descriptor, size)
            if self._synced:
                os.fsync(descriptor)
        except BaseException:
            os.close(descriptor)
            with contextlib.suppress(OSError):
                target.unlink()
            raise
        return LocalFile(descriptor, size, synced=self._synced)

    def open(self, path: str) -> LocalFile:
        """An existing file, for reading and writing (for reading only where the disk is read-only)."""
        mode = os.O_RDONLY if self._read_only else os.O_RDWR
        descriptor = os.open(self._at(path), mode | os.O_CLOEXEC)
        try:
            return LocalFile(descriptor, os.fstat(descriptor).st_size, synced=self._synced)
        except BaseException:
            os.close(descriptor)
            raise

    def rename(self, old: str, new: str) -> None:
        """Replace `new` by `old` in one step."""
        self._at(old).replace(self._at(new))

    def remove(self, path: str) -> None:
        """Delete a file."""
        self._at(path).unlink()

    def sync_directory(self, directory: str) -> None:
        """Make creations, renames and removals in it durable."""
        if self._synced:
            _sync_directory(self._at(directory))

    def lock(self, path: str) -> None:
        """Take the file at `path` as a lock that lasts until `close` or the end of the process, however it ends.

        Raises JournalError where another process holds it: two writers would destroy each other's journal.
        """
        target = self._at(path)
        self._make_directory(target.parent)
        descriptor = os.open(target, os.O_RDWR | os.O_CREAT | os.O_CLOEXEC, 0o640)
        try:
            fcntl.flock(descriptor, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except BlockingIOError:
            os.close(descriptor)
            raise JournalError(
                f"{target}: another process uses this directory; stop it, or give this one a data_dir of its own"
            ) from None
        self._locks.append(descriptor)

    def close(self) -> None:
        """Give the locks back."""
        while self._locks:
            os.close(self._locks.pop())

    def _at(self, path: str) -> Path:
        names = path.split("/")
        if any(name in ("", ".", "..") or "\0" in name or "\\" in name for name in names):
            raise ValueError(f"{path!r} is not a path below the disk's root")
        return self._root.joinpath(*names)

    def _make_directory(self, directory: Path) -> None:
        """Make it and those above it, each one's entry durable in the one above."""
        if directory.is_dir():
            return
        self._make_directory(directory.parent)
        directory.mkdir(mode=0o750, exist_ok=True)
        _sync_directory(directory.parent)


def _sync_directory(directory: Path) -> None:
    descriptor = os.open(directory, os.O_RDONLY | os.O_DIRECTORY | os.O_CLOEXEC)
    try:
        os.fsync(descriptor)
    finally:
        os.close(descriptor)


def reserve(descriptor: int, size: int, allocate: Callable[[int, int, int], None] = os.posix_fallocate) -> None:
    """Take the room for `size` zero bytes; by writing them where the file system refuses to do it. Raises OSError."""
    if size == 0:
        return
    try:
        allocate(descriptor, 0, size)
    except OSError as error:
        if error.errno not in CANNOT_RESERVE:
            raise
        write_zeros(descriptor, size)


def write_zeros(descriptor: int, size: int) -> None:
    """Reserve by writing. Raises OSError."""
    offset = 0
    while offset < size:
        offset += os.pwrite(descriptor, ZEROS[: size - offset], offset)
