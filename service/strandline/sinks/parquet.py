"""The Parquet sink: files of columns in one folder, each complete or absent, with the least and greatest time of every
row group in its footer. Needs pyarrow (the extra `arrow`).

Names, rolling, positions and what a crash leaves are those of the NDJSON sink: written under a temporary name, synced,
renamed, the folder synced; names tell the lane and the first and last batch. A file without its footer cannot be read
at all, so one that was never completed is worthless, is removed, and its batches are taken again. Here lives only what
a file holds: rows are gathered until they fill a row group, so no row group is small but a file's last.
"""

from __future__ import annotations

import contextlib
import io
import os
from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import Any

import pyarrow as pa
import pyarrow.parquet as pq

from ..core.columns import Batch, Lane
from ..ports import Clock, Lines
from .files import write_all
from .ndjson import ROLL_BYTES, ROLL_EVERY_S, NdjsonSink, Part
from .parquet_rows import Rows, repair_table
from .postgres_columns import Column
from .repairs import Repair

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


@dataclass(slots=True)
class _Open:
    """The writer of a lane's file, and the rows that are not in a row group yet."""

    output: _Output
    writer: Any
    waiting: list[Any] = field(default_factory=list)
    rows: int = 0
    nbytes: int = 0


class ParquetSink(NdjsonSink):
    """Takes the ordered and the late lane of one feed into Parquet files that roll by size or age.

    Without `columns` a file has time_ns, source, batch, position and event; late files arrived_ns and late_by_ns too.
    Rows stand in the order of release, late ones in that of arrival. No metadata says that a column ascends: with
    order = "source" time does so within a batch only, and each row group has its least and greatest time anyway.
    """

    _ending = "parquet"
    _note_ending = ".parquet"

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
        self._open_files: dict[Lane, _Open] = {}

    # ---- in the thread ----------------------------------------------------------------------------------------------

    def _block(self, batch: Batch, lines: Lines) -> Any:
        return self._rows.table(batch, lines)

    def _write(self, lane: Lane, part: Part, block: Any) -> int:
        file = self._open_files.get(lane)
        if file is None:
            file = self._begun(lane, part)
            self._open_files[lane] = file
        file.waiting.append(block)
        file.rows += len(block)
        file.nbytes += block.nbytes
        if file.nbytes >= GROUP_BYTES:
            self._write_groups(file, file.rows)
        elif file.rows >= self._rows_per_group:
            self._write_groups(file, file.rows // self._rows_per_group * self._rows_per_group)
        return file.output.size + file.nbytes

    def _begun(self, lane: Lane, part: Part) -> _Open:
        output = _Output(part.descriptor)
        writer = pq.ParquetWriter(
            output,
            self._rows.schema(lane),
            compression=self._compression,
            **self._rows.layout(lane),
            **FORMAT,
        )
        return _Open(output, writer)

    def _write_groups(self, file: _Open, count: int) -> None:
        """Write the first `count` of the rows that wait as row groups. Raises OSError."""
        if count:
            table = pa.Table.from_batches(file.waiting)
            file.writer.write_table(table.slice(0, count), row_group_size=self._rows_per_group)
            rest = table.slice(count)
            file.waiting, file.rows, file.nbytes = rest.to_batches(), len(rest), rest.nbytes

    def _finish(self, lane: Lane, part: Part) -> None:
        file = self._open_files[lane]
        self._write_groups(file, file.rows)
        file.writer.close()
        del self._open_files[lane]

    def _discard(self, lane: Lane) -> None:
        file = self._open_files.pop(lane, None)
        if file is not None:
            # Else the writer would still end its file, whoever has the descriptor by then.
            file.output.descriptor = None
            with contextlib.suppress(OSError, pa.ArrowException):
                file.writer.close()
        super()._discard(lane)

    def _repair_block(self, repair: Repair) -> bytes:
        out = io.BytesIO()
        table = repair_table(repair)
        pq.write_table(table, out, compression=self._compression, row_group_size=self._rows_per_group, **FORMAT)
        return out.getvalue()
