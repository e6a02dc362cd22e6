"""The PostgreSQL sink: COPY of each group of batches and the position reached, in one transaction.

Needs the extra `postgres` (asyncpg). Tables, positions and errors are `postgres_server`, rows are `postgres_rows`.
"""

from __future__ import annotations

import asyncio
import contextlib
from collections.abc import AsyncGenerator, Iterator, Sequence
from functools import partial
from typing import Any

from ..core.columns import Batch, Lane
from ..errors import SinkRefused, SinkRetry, StrandlineError
from ..ports import Lines
from ..tasks import ended
from .postgres_columns import ASIDE_TABLE, DEFAULT, Column, key_of, settled
from .postgres_fields import storable
from .postgres_rows import ASIDE, ASIDE_KEY, LATE, Piece, RowMaker, Rows
from .postgres_server import (
    POSITION,
    Connection,
    Table,
    begin_at,
    connect,
    end_what_stands_still,
    lies_in_rows,
    place_of,
    prepare,
    read_places,
    read_positions,
    trouble,
)
from .rows import LANES, one_lane
from .worker import OwnThread

ROWS_AT_ONCE = 5_000  # of a piece: 1 MB of events of 160 bytes
CLOSE_WITHIN_S = 2.0


class PostgresSink:
    """Takes the ordered and the late lane of one feed, each event exactly once across crashes of both sides.

    Every group of batches is one transaction: it moves the position, if that still stands where this sink knows it to
    stand, and copies the rows. The row of the position is locked by that, so a second process that writes for the same
    feed is noticed before it can do harm, and so is a server that was restored to an older state.

    Where `shared`, a second process is no fault: a feed's owners follow one another, and an earlier one may be at work
    still. Whoever delivers batch n delivers the same rows, so a position that another has moved forward is taken as
    one's own, what is there is skipped, and an earlier owner's transaction that stands still is ended.

    What a table cannot hold is never lost. U+0000, which no text in PostgreSQL holds, makes a text its JSON literal. A
    value that does not fit its column is NULL where the row carries its event; else the row goes to the table
    `strandline_aside`, whole. What a table refuses for reasons of its own (a constraint, a trigger) makes its batch
    refused: SinkRefused.
    """

    def __init__(
        self,
        dsn: str,
        feed: str,
        *,
        schema: str = "public",
        table: str = "events",
        late_table: str = "late",
        columns: Sequence[Column] = (),
        timeout_s: float = 60.0,
        shared: bool = False,
    ) -> None:
        """`columns`: those of `table`, () for all of `postgres_columns.VALUES`. Raises StrandlineError."""
        self._dsn, self._place, self._schema, self._timeout_s = dsn, place_of(dsn), schema, timeout_s
        self._shared = shared
        chosen = _settled(columns) or DEFAULT
        self._feed = storable(feed)
        self._rows = RowMaker(feed, table, late_table, chosen)
        self._stored: dict[Lane, str] = {"ordered": table, "late": late_table}
        self._tables = [
            POSITION,
            Table(table, chosen, key_of(chosen)),
            Table(late_table, LATE, key_of(LATE)),
            *([Table(ASIDE_TABLE, ASIDE, ASIDE_KEY)] if self._rows.sets_aside else []),
        ]
        self._places: dict[Lane, str] = {}
        self._own_keys: set[str] = set()
        self._thread = OwnThread(f"postgres {feed}")
        self._connection: Connection | None = None
        self._positions: dict[Lane, int] = {}
        # Where the store may stand by what this sink did: two numbers while a commit's outcome is not known.
        self._possible: dict[Lane, set[int]] = {}

    @property
    def lanes(self) -> tuple[Lane, ...]:
        """Ordered and late."""
        return LANES

    @property
    def flush_after_s(self) -> float:
        """Nothing waits for a flush."""
        return 0.0

    async def open(self) -> dict[Lane, int]:
        """Connect, make what is absent and tell the position reached.

        Raises SinkRetry where the server cannot be reached or is at work, StrandlineError where a person must act.
        """
        self._possible = {}
        with self._troubles():
            await self._connected()
        return dict(self._positions)

    async def take(self, batches: Sequence[Batch], lines: Lines) -> dict[Lane, int]:
        """Write batches of one lane in one transaction. Errors as for `open`, and SinkRefused."""
        one_lane(batches)
        try:
            await self._take(batches, lines)
        except SinkRefused:
            if len(batches) == 1:
                raise
            for batch in batches:  # one of them is at fault: this finds it, and writes those before it
                await self._take([batch], lines)
        return dict(self._positions)

    async def flush(self, lines: Lines) -> dict[Lane, int]:
        """Everything that was taken is durable already."""
        return {}

    async def close(self) -> None:
        """Release the server, after what still runs."""
        connection, self._connection = self._connection, None
        if connection is not None:
            with contextlib.suppress(Exception):
                await connection.close(timeout=CLOSE_WITHIN_S)
        await self._thread.close(lambda: None)

    # ---- writing ----------------------------------------------------------------------------------------------------

    async def _take(self, batches: Sequence[Batch], lines: Lines) -> None:
        with self._troubles(batches):
            connection = await self._connected()
            while fresh := [batch for batch in batches if batch.number > self._positions[batch.lane]]:
                if await self._write(connection, fresh, lines):
                    break
                await connection.execute("ROLLBACK")
                await self._find_positions(connection)

    async def _write(self, connection: Connection, batches: Sequence[Batch], lines: Lines) -> bool:
        """One transaction: the position first, which locks it, then the rows, made in the thread a piece ahead.

        The first piece is made while the server moves the position: with commits of 1,000 rows 0.75 of the rate of the
        driver's own bulk load, on a machine that is busy, against 0.68 one after the other. To send COMMIT along with
        the COPY, one trip less, gave 0.76. False where another owner has moved the position; then nothing was written.
        """
        lane, number = batches[0].lane, batches[-1].number
        reached = self._positions[lane]
        pieces = self._rows.pieces(batches, lines, ROWS_AT_ONCE)
        making = asyncio.create_task(self._thread.run(partial(next, pieces)))
        try:
            if not await begin_at(connection, self._schema, self._places[lane], reached, number):
                if self._shared:
                    return False
                raise self._moved(lane)
            first = await making
        finally:
            await ended(making)
        aside = [first.aside] if first.aside else []
        if first.last:
            await self._copy(connection, first.rows, memoryview(first.rows.block))  # bytes would be taken for a path
        else:
            async with contextlib.aclosing(self._blocks(first, pieces, aside)) as blocks:
                await self._copy(connection, first.rows, blocks)
        for rows in aside:
            await self._copy(connection, rows, memoryview(rows.block))
        self._possible[lane] = {reached, number}
        if await connection.execute("COMMIT") != "COMMIT":
            raise SinkRetry(f"{self._place}: the server undid the transaction")
        self._positions[lane] = number
        self._possible[lane] = {number}
        return True

    async def _blocks(self, piece: Piece, pieces: Iterator[Piece], aside: list[Rows]) -> AsyncGenerator[bytes, None]:
        """The data of one COPY, piece by piece, the next one being made meanwhile; collects what goes aside."""
        while not piece.last:
            ahead = asyncio.create_task(self._thread.run(partial(next, pieces)))
            try:
                yield piece.rows.block
                piece = await ahead
                aside += [piece.aside] if piece.aside else []
            finally:
                await ended(ahead)
        yield piece.rows.block

    async def _copy(self, connection: Connection, rows: Rows, data: Any) -> None:
        """COPY into the table of these rows. `data`: the bytes, or an iterator of pieces of them."""
        await connection.copy_to_table(
            rows.table, source=data, columns=rows.names, schema_name=self._schema, format="binary"
        )

    # ---- connecting -------------------------------------------------------------------------------------------------

    async def _connected(self) -> Connection:
        """The connection, made anew when it is gone; then the position is read again."""
        if self._connection is not None and self._connection.is_closed():
            self._drop()
        if self._connection is None:
            try:
                self._connection = await connect(self._dsn, self._timeout_s, in_turn=self._shared)
                await self._learn(self._connection)
            except StrandlineError as error:
                raise StrandlineError(f"{self._place}: {error}") from error
        return self._connection

    async def _learn(self, connection: Connection) -> None:
        """See that the tables can take the rows, and where the store stands."""
        self._own_keys = await prepare(connection, self._schema, self._tables)
        self._places = await read_places(connection, self._feed, self._stored)
        if self._shared:
            for place in self._places.values():
                await end_what_stands_still(connection, self._schema, place)
        await self._find_positions(connection)

    async def _find_positions(self, connection: Connection) -> None:
        """Where the store stands. Raises StrandlineError where this sink cannot go on from there."""
        found = await read_positions(connection, self._schema, self._feed, self._stored)
        for lane, possible in self._possible.items():
            if found[lane] not in possible and not (self._shared and found[lane] > min(possible)):
                raise self._moved(lane)
        self._positions = found
        self._possible = {lane: {number} for lane, number in found.items()}

    def _drop(self) -> None:
        """Give the connection up. The server undoes what was not committed."""
        connection, self._connection = self._connection, None
        if connection is not None:
            connection.terminate()

    def _moved(self, lane: Lane) -> StrandlineError:
        left = " or ".join(map(str, sorted(self._possible[lane])))
        return StrandlineError(
            f"the position of lane {lane} of feed {self._feed}, which this service left at {left}, was moved by "
            "another: a second process writes for this feed, or the server was restored to an older state. End the "
            "other one, then restart this service, so that it goes on from where the store stands"
        )

    # ---- errors -----------------------------------------------------------------------------------------------------

    @contextlib.contextmanager
    def _troubles(self, batches: Sequence[Batch] = ()) -> Iterator[None]:
        """Whatever fails, the connection is given up; what the driver raises becomes an error of the port."""
        try:
            yield
        except Exception as error:
            self._drop()
            refused = self._refused(error, batches)
            if refused is not None:
                raise refused from error
            told = trouble(self._place, error, self._own_keys)
            if told is error:
                raise
            raise told from error
        except BaseException:
            self._drop()
            raise

    def _refused(self, error: Exception, batches: Sequence[Batch]) -> SinkRefused | None:
        """SinkRefused where the rows are at fault."""
        if not batches or not lies_in_rows(error, self._own_keys):
            return None
        return SinkRefused(f"{self._place} refuses the rows: {error}", [batch.number for batch in batches])


def _settled(columns: Sequence[Column]) -> list[Column]:
    done = []
    for column in columns:
        try:
            done.append(settled(column))
        except ValueError as error:
            raise StrandlineError(f"column {column.name!r} {error}") from error
    return done
