"""A disk in memory that keeps what is synced apart from what is not, loses power when told to, and fails when told to.

`SimDisk` and `SimFile` are a Disk and a File of strandline.ports. What the model says of a real disk:

* A write reaches the live content at once (mappings show it) and the medium at a sync, or earlier, or never, sector
  by sector in any order: after a power failure each sector holds what was synced last, or any version written since;
  with `torn_sectors` even the first bytes of a newer version and the rest of an older one, with `flipped_bits` one bit
  turned in what was being written.
* A name made, moved or removed reaches the medium at a sync of its directory, or earlier, or never. `any_order`
  lets a later change of a directory survive an earlier one (a file system that keeps no order of its own).
* A failed sync loses the pages: they read well, count as clean, and no later sync writes them (`Faults`).
* Room is reserved by `create`; `capacity_bytes` limits the sum of all files that a name leads to.

Choices are the caller's: `crash(choose)` calls `choose(n)` for a number below n, so that a seeded generator or a
property test decides, and the same choices give the same disk.
"""

from __future__ import annotations

import errno
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass, field

SECTOR_BYTES = 512
Choose = Callable[[int], int]
Buffer = bytes | bytearray | memoryview


@dataclass(eq=False)
class Inode:
    """A file's content: what a process sees, what the medium holds, and the versions of each sector between them."""

    live: bytearray
    durable: bytearray
    dirty: dict[int, list[bytes]] = field(default_factory=dict)

    @classmethod
    def of_zeros(cls, size: int) -> Inode:
        """A reserved file. Its size is part of the reservation, which a real disk syncs with its name."""
        return cls(bytearray(size), bytearray(size))

    def write(self, offset: int, data: bytes) -> None:
        """Change the live content; the sectors touched are dirty."""
        self.live[offset : offset + len(data)] = data
        for sector in range(offset // SECTOR_BYTES, -(-(offset + len(data)) // SECTOR_BYTES)):
            begin = sector * SECTOR_BYTES
            self.dirty.setdefault(sector, []).append(bytes(self.live[begin : begin + SECTOR_BYTES]))

    def sync(self) -> None:
        """The medium holds what was dirty. Pages that a failed sync dropped are clean, and stay lost."""
        for sector, versions in self.dirty.items():
            begin = sector * SECTOR_BYTES
            self.durable[begin : begin + SECTOR_BYTES] = versions[-1]
        self.dirty.clear()

    def lose(self) -> None:
        """A failed sync: what was dirty counts as clean, and is not on the medium."""
        self.dirty.clear()

    def after_power_failure(self, choose: Choose, torn_sectors: bool, flipped_bits: bool) -> Inode:
        """The file as the next start finds it."""
        found = bytearray(self.durable)
        for sector, versions in sorted(self.dirty.items()):
            begin = sector * SECTOR_BYTES
            candidates = [bytes(self.durable[begin : begin + SECTOR_BYTES]), *versions]
            chosen = candidates[choose(len(candidates))]
            if torn_sectors:
                older = candidates[choose(len(candidates))]
                cut = choose(len(chosen) + 1)
                chosen = chosen[:cut] + older[cut:]
            if flipped_bits and choose(2):
                chosen = _flipped(chosen, candidates, choose)
            found[begin : begin + SECTOR_BYTES] = chosen
        return Inode(bytearray(found), found)


def _flipped(chosen: bytes, candidates: list[bytes], choose: Choose) -> bytes:
    """One bit turned, in a byte that was being changed; bytes that were written again as they stood keep."""
    changing = [at for at in range(len(chosen)) if len({candidate[at] for candidate in candidates}) > 1]
    if not changing:
        return chosen
    at = changing[choose(len(changing))]
    return chosen[:at] + bytes([chosen[at] ^ 1 << choose(8)]) + chosen[at + 1 :]


@dataclass(frozen=True)
class _Change:
    """One change of a directory that is not synced yet: `name` leads to `inode`, `gone` leads nowhere any more."""

    name: str | None
    inode: Inode
    gone: str | None = None


class Directory:
    """Names: what a process sees, what the medium holds, the changes between them in order."""

    def __init__(self, names: dict[str, Inode] | None = None) -> None:
        self.live: dict[str, Inode] = dict(names or {})
        self.durable: dict[str, Inode] = dict(names or {})
        self.changes: list[_Change] = []

    def change(self, change: _Change) -> None:
        """Make a change that is not durable yet."""
        _apply(self.live, change)
        self.changes.append(change)

    def sync(self) -> None:
        """The medium holds all changes."""
        for change in self.changes:
            _apply(self.durable, change)
        self.changes.clear()

    def after_power_failure(self, choose: Choose, any_order: bool) -> dict[str, Inode]:
        """The names that the next start finds: some of the changes survived, without `any_order` the first few."""
        names = dict(self.durable)
        if any_order:
            survivors = [change for change in self.changes if choose(2)]
        else:
            survivors = self.changes[: choose(len(self.changes) + 1)]
        for change in survivors:
            _apply(names, change)
        return names


def _apply(names: dict[str, Inode], change: _Change) -> None:
    if change.gone is not None and names.get(change.gone) is change.inode:
        del names[change.gone]
    if change.name is not None:
        names[change.name] = change.inode


class SimFile:
    """A File on a SimDisk."""

    def __init__(self, disk: SimDisk, path: str, inode: Inode) -> None:
        self._disk, self._path, self.inode = disk, path, inode
        self._open = True

    @property
    def size(self) -> int:
        return len(self.inode.live)

    def write(self, offset: int, buffers: Sequence[Buffer]) -> None:
        self._must_be_open()
        data = b"".join(buffers)
        if offset < 0 or offset + len(data) > self.size:
            raise ValueError(f"{len(data)} bytes at {offset} do not fit a file of {self.size}")
        self._disk.faults.meet("write", self._path, partly=lambda: self.inode.write(offset, data[: len(data) // 2]))
        self.inode.write(offset, data)

    def sync(self) -> None:
        self._must_be_open()
        self._disk.faults.meet("sync", self._path, partly=self.inode.lose)
        self.inode.sync()

    def view(self) -> memoryview:
        self._must_be_open()
        self._disk.faults.meet("view", self._path)
        return memoryview(self.inode.live).toreadonly()

    def data_end(self, start: int) -> int:
        self._must_be_open()
        return max(start, -(-len(self.inode.live.rstrip(b"\0")) // SECTOR_BYTES) * SECTOR_BYTES)  # by whole ones

    def close(self) -> None:
        if self._open:
            self._open = False
            self._disk.handles -= 1

    def _must_be_open(self) -> None:
        if not self._open:
            raise ValueError(f"{self._path}: used after close")


class Faults:
    """Counts operations and makes the n-th one fail, once; `names` are all operations met, for choosing n.

    What fails has not happened, except: a write has written its first half, a sync has lost what it should have kept.
    """

    def __init__(self, fail_at: int | None = None, error: Callable[[], BaseException] | None = None) -> None:
        self.fail_at = fail_at
        self.names: list[str] = []
        self.failed: str | None = None
        self._error = error or (lambda: OSError(errno.EIO, "simulated"))

    def meet(self, name: str, path: str, partly: Callable[[], None] = lambda: None) -> None:
        """One operation is about to happen."""
        self.names.append(name)
        if len(self.names) - 1 == self.fail_at:
            self.failed = f"{name} {path}"
            partly()
            raise self._error()


class SimDisk:
    """A Disk in memory. `faults` decides what fails; `handles` counts the files that are open."""

    def __init__(self, capacity_bytes: int | None = None, faults: Faults | None = None) -> None:
        self.capacity_bytes = capacity_bytes
        self.faults = faults or Faults()
        self.handles = 0
        self._directories: dict[str, Directory] = {}

    # ---- the port -------------------------------------------------------------------------------------------------

    def names(self, directory: str) -> list[str]:
        self.faults.meet("names", directory)
        found = self._directories.get(directory)
        return sorted(found.live) if found else []

    def create(self, path: str, size: int) -> SimFile:
        directory, name = self._split(path)
        if name in directory.live:
            raise FileExistsError(errno.EEXIST, "exists", path)
        self.faults.meet("create", path)
        if self.capacity_bytes is not None and self.bytes_used + size > self.capacity_bytes:
            raise OSError(errno.ENOSPC, "No space left on device", path)
        inode = Inode.of_zeros(size)
        directory.change(_Change(name, inode))
        return self._file(path, inode)

    def open(self, path: str) -> SimFile:
        self.faults.meet("open", path)
        return self._file(path, self._inode(path))

    def rename(self, old: str, new: str) -> None:
        inode = self._inode(old)
        directory, old_name = self._split(old)
        other, new_name = self._split(new)
        assert directory is other, "a rename within one directory"
        self.faults.meet("rename", old)
        directory.change(_Change(new_name, inode, gone=old_name))

    def remove(self, path: str) -> None:
        inode = self._inode(path)
        directory, name = self._split(path)
        self.faults.meet("remove", path)
        directory.change(_Change(None, inode, gone=name))

    def sync_directory(self, directory: str) -> None:
        self.faults.meet("sync_directory", directory)
        if directory not in self._directories:
            raise FileNotFoundError(errno.ENOENT, "no such directory", directory)
        self._directories[directory].sync()

    # ---- what a test does -----------------------------------------------------------------------------------------

    @property
    def bytes_used(self) -> int:
        """Bytes of the files that a name leads to."""
        return sum(len(inode.live) for directory in self._directories.values() for inode in directory.live.values())

    def crash(
        self, choose: Choose, *, torn_sectors: bool = False, any_order: bool = False, flipped_bits: bool = False
    ) -> SimDisk:
        """The disk as it is found after a power failure now. This one stays as it is, so that many can be tried."""
        after = SimDisk(self.capacity_bytes)
        inodes: dict[Inode, Inode] = {}
        for path, directory in sorted(self._directories.items()):
            names = directory.after_power_failure(choose, any_order)
            for inode in names.values():
                if inode not in inodes:
                    inodes[inode] = inode.after_power_failure(choose, torn_sectors, flipped_bits)
            after._directories[path] = Directory({name: inodes[inode] for name, inode in names.items()})
        return after

    def restarted(self) -> SimDisk:
        """The same disk for a new process: nothing lost, handles of the old one closed, faults over."""
        after = SimDisk(self.capacity_bytes)
        after._directories = self._directories
        return after

    def content(self, path: str) -> bytearray:
        """The live bytes of a file, for a test to look at or to damage together with what the medium holds."""
        return self._inode(path).live

    def damage(self, path: str, offset: int, data: bytes) -> None:
        """Change the medium and the live bytes behind everyone's back."""
        inode = self._inode(path)
        for content in (inode.live, inode.durable):
            content[offset : offset + len(data)] = data

    def paths(self) -> Iterator[str]:
        """Every path, sorted."""
        for directory_path, directory in sorted(self._directories.items()):
            for name in sorted(directory.live):
                yield f"{directory_path}/{name}"

    @contextmanager
    def failing(self, fail_at: int, error: Callable[[], BaseException] | None = None) -> Iterator[Faults]:
        """From here on the operation number `fail_at`, counted from 0, fails; the counting ends with the block."""
        before, self.faults = self.faults, Faults(fail_at, error)
        try:
            yield self.faults
        finally:
            self.faults = before

    # ---- within ---------------------------------------------------------------------------------------------------

    def _file(self, path: str, inode: Inode) -> SimFile:
        self.handles += 1
        return SimFile(self, path, inode)

    def _split(self, path: str) -> tuple[Directory, str]:
        directory, _, name = path.rpartition("/")
        return self._directories.setdefault(directory, Directory()), name

    def _inode(self, path: str) -> Inode:
        directory, name = self._split(path)
        if name not in directory.live:
            raise FileNotFoundError(errno.ENOENT, "No such file or directory", path)
        return directory.live[name]
