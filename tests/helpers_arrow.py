"""Arrow IPC streams for tests: written by pyarrow's own writer, which is an opinion from outside on what one is."""

from __future__ import annotations

from collections.abc import Sequence
from itertools import pairwise
from typing import Any

import pyarrow as pa

ARROW = "application/vnd.apache.arrow.stream"


def stream(table: Any, cuts: Sequence[int] = (), compression: str | None = None) -> bytes:
    """A table as one stream, a record batch between every two of the cuts (which may repeat: an empty batch)."""
    out = pa.BufferOutputStream()
    edges = [0, *sorted(cuts), len(table)]
    with pa.ipc.new_stream(out, table.schema, options=pa.ipc.IpcWriteOptions(compression=compression)) as writer:
        for start, stop in pairwise(edges):
            part = table.slice(start, stop - start).combine_chunks()
            batches = part.to_batches()
            writer.write_batch(batches[0] if batches else pa.RecordBatch.from_pylist([], table.schema))
    return bytes(out.getvalue().to_pybytes())


def body_of(events: Sequence[dict[str, Any]]) -> bytes | None:
    """Events as columns of the types that pyarrow finds; None where it finds none."""
    try:
        return stream(pa.Table.from_pylist(list(events)))
    except (pa.ArrowException, OverflowError, UnicodeEncodeError, ValueError):
        return None
