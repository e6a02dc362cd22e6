"""One SQLite file as a store: connecting, the shape of its tables, bulk insertion, and errors as sentences.

What the tables mean is the business of `sqlite` and `lanes`. The connection lives in a thread of its own; every piece
of work is one transaction there, so that rows and the position reached become durable together or not at all.
"""

from __future__ import annotations

import contextlib
import logging
import os
import sqlite3
from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TypeVar

from ..errors import SinkRetry, StrandlineError
from .files import make_directory
from .worker import OwnThread

Result = TypeVar("Result")
BUSY_WAIT_S = 2.0  # how long a locked file is waited for in the thread, before the delivery's own backing off
PAGE_BYTES = 8192  # against the customary 4096: x1.05 rows/s at events of 143 bytes, x1.1 at 500, x1.4 at 1500
ROWS_AT_ONCE = 50  # rows in one INSERT: x1.4 rows/s against one row each; 100 gain nothing more
WAL_BYTES_KEPT = 64 * 1024 * 1024  # the log shrinks back to this after a reader held it open for long

logger = logging.getLogger(__name__)


@dataclass(frozen=True, slots=True)
class Table:
    """A table as it must be: its columns (name, declared type) in order, and what follows them in its definition."""

    name: str
    columns: tuple[tuple[str, str], ...]
    constraint: str = ""
    options: str = ""

    @property
    def definition(self) -> str:
        """The statement that makes it."""
        parts = [*(f"{name} {kind}" for name, kind in self.columns), self.constraint]
        return f"CREATE TABLE IF NOT EXISTS {self.name} ({', '.join(filter(None, parts))}) {self.options}"


class Database:
    """One file, opened when it is first needed and again after every error."""

    def __init__(
        self,
        path: str | os.PathLike[str],
        tables: Sequence[Table],
        *,
        own: bool = False,
        busy_wait_s: float = BUSY_WAIT_S,
    ) -> None:
        """`own`: the file is this service's alone, so its folder is made, and the file shrinks when rows go."""
        self.path = Path(path)
        self._tables = tables
        self._own = own
        self._busy_wait_s = busy_wait_s
        self._thread = OwnThread(f"sqlite {self.path.name}")
        self._connection: sqlite3.Connection | None = None
        self._identity: tuple[int, int] | None = None

    async def transaction(
        self, work: Callable[[sqlite3.Connection], Result], then: Callable[[sqlite3.Connection], None] | None = None
    ) -> Result:
        """Run `work` in the thread, in one write transaction that is durable when this returns; `then` after it.

        Raises SinkRetry where the file is locked, full, read-only or out of reach, StrandlineError where it is no
        database of this shape, and whatever `work` raises; then nothing was written, or (an error of the commit itself)
        all of it was: the position in the file tells which.
        """
        return await self._thread.run(lambda: self._transaction(work, then))

    async def close(self) -> None:
        """Release the file, after what still runs."""
        await self._thread.close(self._disconnect)

    def _transaction(
        self, work: Callable[[sqlite3.Connection], Result], then: Callable[[sqlite3.Connection], None] | None
    ) -> Result:
        try:
            connection = self._connected()
            connection.execute("BEGIN IMMEDIATE")
            result = work(connection)
            connection.execute("COMMIT")
            if then is not None:
                then(connection)
            return result
        except sqlite3.Error as error:
            self._disconnect()
            raise trouble(self.path, error) from error
        except OSError as error:
            self._disconnect()
            raise SinkRetry(f"the folder of {self.path} cannot be made: {error.strerror or error}") from error
        except BaseException:
            self._disconnect()  # rolls back
            raise

    def _connected(self) -> sqlite3.Connection:
        if self._connection is not None and self._identity != _identity(self.path):
            logger.warning("%s was moved or deleted while it was in use; it is opened anew", self.path)
            self._disconnect()
        if self._connection is None:
            if self._own:
                make_directory(self.path.parent)
            self._connection = connect(self.path, self._tables, shrinking=self._own, busy_wait_s=self._busy_wait_s)
            self._identity = _identity(self.path)
        return self._connection

    def _disconnect(self) -> None:
        connection, self._connection = self._connection, None
        if connection is not None:
            with contextlib.suppress(sqlite3.Error):
                connection.close()


def connect(
    path: Path, tables: Sequence[Table], *, shrinking: bool = False, busy_wait_s: float = BUSY_WAIT_S
) -> sqlite3.Connection:
    """Open or make the file, with its tables, for writing. A file whose tables have another shape is left untouched.

    synchronous=FULL: with a write-ahead log, NORMAL (what many use there) does not sync at a commit, and a commit
    that was answered could be lost with the power.
    """
    try:
        connection = sqlite3.connect(path, timeout=busy_wait_s, isolation_level=None)
    except ValueError as error:
        raise StrandlineError(f"{str(path)!r} cannot be the name of a file: {error}") from error
    try:
        absent = [table for table in tables if not _present(connection, table, path)]
        connection.execute(f"PRAGMA page_size={PAGE_BYTES}")  # this and the next have no effect on a file that exists
        if shrinking:
            connection.execute("PRAGMA auto_vacuum=INCREMENTAL")
        mode = connection.execute("PRAGMA journal_mode=WAL").fetchone()[0]
        if mode != "wal":
            raise StrandlineError(f"{path} cannot keep a write-ahead log where it lies: put it on a local disk")
        connection.execute("PRAGMA synchronous=FULL")
        connection.execute("PRAGMA fullfsync=ON")  # macOS: a plain fsync stops at the drive's own cache
        connection.execute(f"PRAGMA journal_size_limit={WAL_BYTES_KEPT}")
        if absent:
            connection.execute("BEGIN IMMEDIATE")
            for table in absent:
                connection.execute(table.definition)
            connection.execute("COMMIT")
        return connection
    except BaseException:
        connection.close()
        raise


def _present(connection: sqlite3.Connection, table: Table, path: Path) -> bool:
    """Whether the file has the table. Raises StrandlineError where something else has its name."""
    kind = connection.execute("SELECT type FROM sqlite_master WHERE name = ? COLLATE NOCASE", (table.name,)).fetchone()
    if kind is None:
        return False
    found = [(row[1], row[2]) for row in connection.execute(f"PRAGMA table_info({table.name})")]
    alike = [(name.lower(), declared.upper()) for name, declared in found]
    if kind[0] != "table" or alike != [(name, _plain_type(declared)) for name, declared in table.columns]:
        expected = ", ".join(f"{name} {_plain_type(declared)}" for name, declared in table.columns)
        shown = ", ".join(f"{name} {declared}" for name, declared in found) or "no columns"
        raise StrandlineError(
            f"{path} has a {kind[0]} {table.name!r} of another shape ({shown}); expected: {expected}. "
            "Name another file for this sink, or move that one away"
        )
    return True


def _plain_type(declared: str) -> str:
    return declared.partition(" ")[0]


def insert_columns(connection: sqlite3.Connection, table: str, columns: Sequence[Sequence[object]]) -> None:
    """Insert rows that are given as columns of equal length, in the order of the table's own columns."""
    width, rows = len(columns), len(columns[0])
    flat: list[object] = [None] * (width * rows)
    for index, column in enumerate(columns):
        flat[index::width] = column
    row = f"({','.join('?' * width)})"
    whole = rows - rows % ROWS_AT_ONCE
    many = f"INSERT INTO {table} VALUES {','.join([row] * ROWS_AT_ONCE)}"
    connection.executemany(many, _stretches(flat, 0, whole * width, ROWS_AT_ONCE * width))
    connection.executemany(f"INSERT INTO {table} VALUES {row}", _stretches(flat, whole * width, rows * width, width))


def _stretches(flat: list[object], start: int, end: int, length: int) -> Iterable[list[object]]:
    return (flat[place : place + length] for place in range(start, end, length))


def _identity(path: Path) -> tuple[int, int] | None:
    try:
        status = path.stat()
    except OSError:
        return None
    return status.st_dev, status.st_ino


_LOCKED = "{path} is locked by another program: end what holds it, for instance a transaction left open in a shell"
_FORBIDDEN = "{path} cannot be written: allow this service to write to the file and to the folder it lies in"
_SENTENCES = {
    sqlite3.SQLITE_BUSY: _LOCKED,
    sqlite3.SQLITE_LOCKED: _LOCKED,
    sqlite3.SQLITE_READONLY: _FORBIDDEN,
    sqlite3.SQLITE_PERM: _FORBIDDEN,
    sqlite3.SQLITE_FULL: "there is no room left for {path}: free some on its disk",
    sqlite3.SQLITE_CANTOPEN: "{path} cannot be opened: its folder must exist, and this service may write there",
    sqlite3.SQLITE_IOERR: "{path} could not be read or written ({name}): see whether its disk is full or failing",
    sqlite3.SQLITE_CORRUPT: "{path} is damaged: move it away, with the files beside it that begin with its name",
    sqlite3.SQLITE_CONSTRAINT: "{path} holds rows already of batches that its position does not know ({error}): "
    "see whether two services write there for a feed of the same name",
}


def trouble(path: Path, error: sqlite3.Error) -> StrandlineError:
    """The error as a sentence that names the file and what to do: SinkRetry, or StrandlineError for no database."""
    code = getattr(error, "sqlite_errorcode", 0) & 0xFF  # the low byte is the primary code, SQLite's result codes
    if code == sqlite3.SQLITE_NOTADB:
        return StrandlineError(f"{path} is no SQLite database: name another file for this sink, or move that one away")
    name = getattr(error, "sqlite_errorname", type(error).__name__)
    return SinkRetry(_SENTENCES.get(code, "{path}: {error} ({name})").format(path=path, error=error, name=name))
