"""A real disk that fails or stands when a test says so, and sinks that a test holds: what a service must survive.

`FaultyDisk` is a Disk over a real folder. Nothing here knows what must come of a fault.
"""

from __future__ import annotations

import errno
import os
import threading
from collections.abc import Callable, Sequence
from pathlib import Path

from helpers_delivery import ScriptedSink
from strandline.core.effects import Buffer
from strandline.journal.disk import LocalDisk
from strandline.ports import Clock, File, Sink
from strandline.sinks import make_sink


class FaultyDisk:
    """A Disk. `errors`: operations that fail from now on, and how; `syncing` holds every sync while it is clear."""

    def __init__(self, root: Path) -> None:
        self._disk = LocalDisk(root)
        self.errors: dict[str, int] = {}
        self.syncing = threading.Event()
        self.syncing.set()
        self.waits_in_sync = threading.Event()

    def fail(self, operation: str, code: int = errno.EIO) -> None:
        """From now on `operation` (create, write, sync, remove) fails with this error."""
        self.errors[operation] = code

    def heal(self) -> None:
        self.errors.clear()

    def meet(self, operation: str) -> None:
        if operation in self.errors:
            raise OSError(self.errors[operation], os.strerror(self.errors[operation]))

    def names(self, directory: str) -> list[str]:
        return self._disk.names(directory)

    def create(self, path: str, size: int) -> File:
        self.meet("create")
        return _FaultyFile(self, self._disk.create(path, size))

    def open(self, path: str) -> File:
        return _FaultyFile(self, self._disk.open(path))

    def rename(self, old: str, new: str) -> None:
        self._disk.rename(old, new)

    def remove(self, path: str) -> None:
        self.meet("remove")
        self._disk.remove(path)

    def sync_directory(self, directory: str) -> None:
        self._disk.sync_directory(directory)


class _FaultyFile:
    def __init__(self, disk: FaultyDisk, file: File) -> None:
        self._disk, self._file = disk, file

    @property
    def size(self) -> int:
        return self._file.size

    def write(self, offset: int, buffers: Sequence[Buffer]) -> None:
        self._disk.meet("write")
        self._file.write(offset, buffers)

    def sync(self) -> None:
        self._disk.meet("sync")
        if not self._disk.syncing.is_set():
            self._disk.waits_in_sync.set()
            assert self._disk.syncing.wait(30)
        self._file.sync()

    def view(self) -> memoryview:
        return self._file.view()

    def data_end(self, start: int) -> int:
        return self._file.data_end(start)

    def close(self) -> None:
        self._file.close()


def planted(**sinks: Sink) -> Callable[..., Sink]:
    """Makes sinks like `make_sink`, but for a SQLite sink whose path ends in one of these names takes the one given."""

    def make(kind: str, feed: str, clock: Clock, **options: object) -> Sink:
        name = Path(str(options.get("path", ""))).stem
        return sinks[name] if name in sinks else make_sink(kind, feed, clock, **options)

    return make


def scripted(*names: str) -> tuple[str, dict[str, ScriptedSink]]:
    """The TOML of SQLite sinks of these names and a scripted sink for each, for `planted`."""
    toml = "\n".join(f'[[feed.sink]]\nkind = "sqlite"\nname = "{name}"\npath = "{name}.db"' for name in names)
    return toml, {name: ScriptedSink() for name in names}
