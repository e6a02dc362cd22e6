"""The Parquet sink: files of columns in one folder, each complete or absent, with the least and greatest time of every
row group in its footer. Needs pyarrow (the extra `arrow`).

How files are named, rolled and completed is `rolling`'s. A file without its footer cannot be read at all, so one that
was never completed is worthless, is removed, and its batches are taken again. Here lives only what a file holds: rows
are gathered until they fill a row group, so no row group is small but a file's last.
"""

from __future__ import annotations

import contextlib
import io
import os
from collections.abc import Sequence
from typing import Any

import pyarrow as pa
import pyarrow.parquet as pq

from ..core.columns import Batch, Lane
from ..ports import Clock, Lines
from .files import write_all
from .parquet_rows import Rows, repair_table
from .postgres_columns import Column
from .repairs import Repair
from .rolling import ROLL_BYTES, ROLL_EVERY_S, RollingSink

ROWS_PER_GROUP = 100_000
GROUP_BYTES = 16 * 1024 * 1024  # a row group is written out at this size too, so that little is held in memory
FORMAT = {"version": "2.6", "write_statistics": True}


class _Output(io.RawIOBase):
    """Where the writer puts its bytes: a descriptor, until the file is thrown away."""

    def __init__(self, descriptor: int) -> None:
        self.descriptor: int | None = descriptor
        self.size = 0

    def writable(self) -> bool:
        return True

    def write(self, block: Any) -> int:
        view = memoryview(block).cast("B")
        if self.descriptor is not None:
            write_all(self.descriptor, view)
            self.size += len(view)
        return len(view)


class _Groups:
    """A file of row groups: rows wait until they fill one, and its footer makes it a file."""

    def __init__(self, output: _Output, writer: Any, rows_per_group: int) -> None:
        self._output, self._writer, self._rows_per_group = output, writer, rows_per_group
        self._waiting: list[Any] = []
        self._rows = self._nbytes = 0

    def write(self, block: Any) -> int:
        self._waiting.append(block)
        self._rows += len(block)
        self._nbytes += block.nbytes
        if self._nbytes >= GROUP_BYTES:
            self._write_groups(self._rows)
        elif self._rows >= self._rows_per_group:
            self._write_groups(self._rows // self._rows_per_group * self._rows_per_group)
        return self._output.size + self._nbytes

    def finish(self) -> None:
        self._write_groups(self._rows)
        self._writer.close()

    def abandon(self) -> None:
        # Else the writer would still end its file, whoever has the descriptor by then.
        self._output.descriptor = None
        with contextlib.suppress(Exception):  # whatever it makes of an end that it cannot write
            self._writer.close()

    def _write_groups(self, count: int) -> None:
        """Write the first `count` of the rows that wait as row groups. Raises OSError."""
        if count:
            table = pa.Table.from_batches(self._waiting)
            self._writer.write_table(table.slice(0, count), row_group_size=self._rows_per_group)
            rest = table.slice(count)
            self._waiting, self._rows, self._nbytes = rest.to_batches(), len(rest), rest.nbytes


class ParquetSink(RollingSink):
    """Takes the ordered and the late lane of one feed into Parquet files that roll by size or age.

    Without `columns` a file has time_ns, source, batch, position and event; late files arrived_ns and late_by_ns too.
    Rows stand in the order of release, late ones in that of arrival. No metadata says that a column ascends: with
    order = "source" time does so within a batch only, and each row group has its least and greatest time anyway.
    """

    ending = "parquet"
    note_ending = ".parquet"

    def __init__(
        self,
        directory: str | os.PathLike[str],
        feed: str,
        clock: Clock,
        *,
        roll_bytes: int = ROLL_BYTES,
        roll_every_s: float = ROLL_EVERY_S,
        rows_per_group: int = ROWS_PER_GROUP,
        compression: str = "zstd",
        columns: Sequence[Column] = (),
    ) -> None:
        """Raises ValueError for columns that are none."""
        super().__init__(directory, feed, clock, roll_bytes=roll_bytes, roll_every_s=roll_every_s)
        self._rows = Rows(feed, columns)
        self._rows_per_group, self._compression = rows_per_group, compression

    # ---- in the thread ----------------------------------------------------------------------------------------------

    def block(self, batch: Batch, lines: Lines) -> Any:
        """The batch's rows."""
        return self._rows.table(batch, lines)

    def begin(self, lane: Lane, descriptor: int) -> _Groups:
        """Row groups with the lane's columns."""
        output = _Output(descriptor)
        writer = pq.ParquetWriter(
            output,
            self._rows.schema(lane),
            compression=self._compression,
            **self._rows.layout(lane),
            **FORMAT,
        )
        return _Groups(output, writer, self._rows_per_group)

    def repair_block(self, repair: Repair) -> bytes:
        """The repair's rows as a whole file."""
        out = io.BytesIO()
        table = repair_table(repair)
        pq.write_table(table, out, compression=self._compression, row_group_size=self._rows_per_group, **FORMAT)
        return out.getvalue()
