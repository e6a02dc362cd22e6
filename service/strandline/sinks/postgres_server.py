"""A PostgreSQL server as a store: connecting, tables that are there or made, the position reached, errors as sentences.

What rows mean is the business of `postgres_rows`, when to write them of `postgres`. Only these two know the driver.
"""

from __future__ import annotations

import os
from collections.abc import Collection, Sequence
from dataclasses import dataclass
from typing import TypeAlias
from urllib.parse import parse_qs, unquote, urlsplit

import asyncpg

from ..core.columns import Lane
from ..errors import SinkRetry, StrandlineError
from .postgres_columns import POSITION_TABLE, TYPES, Column, definition, quoted
from .postgres_rows import POSITION_KEY, POSITIONS

Connection: TypeAlias = "asyncpg.Connection[asyncpg.Record]"
CONNECT_WITHIN_S = 10.0
LOCK_SHARE = 0.8  # of the time for an answer: then it is the server that says what it waited for
# What an earlier owner's transaction may hold up the next one: it is waited for so long, and ended at the next try if
# it has waited as long for its client. A commit takes milliseconds; a client that is stopped or gone may take hours.
LOCK_IN_TURN_S = 2.0
MAKING_LOCK = 0x5374726E646C696E  # of pg_advisory_xact_lock: two feeds that start together make their tables in turn


@dataclass(frozen=True, slots=True)
class Table:
    """A table as it must be. `writes`: the privileges that are needed on it."""

    name: str
    columns: Sequence[Column]
    key: tuple[str, ...]
    writes: tuple[str, ...] = ("INSERT",)


POSITION = Table(POSITION_TABLE, POSITIONS, POSITION_KEY, ("SELECT", "INSERT", "UPDATE"))


def place_of(dsn: str) -> str:
    """The server and database that an address names, for a person: without user, password and parameters."""
    parts = urlsplit(dsn)
    asked = parse_qs(parts.query).get("host", [""])[0]
    hosts = parts.netloc.rpartition("@")[2] or asked or os.environ.get("PGHOST", "") or "its default host"
    database = unquote(parts.path.lstrip("/")) or os.environ.get("PGDATABASE", "")
    return f"PostgreSQL at {hosts}{', database ' + database if database else ''}"


async def connect(dsn: str, timeout_s: float, *, in_turn: bool = False) -> Connection:
    """A connection whose commits are on the server's disk when they are answered. Raises what the driver raises.

    Locks are not waited for longer than `timeout_s`, nor is the transaction of a process that stands still kept open.
    `in_turn`: owners follow one another, and none waits long for one before it (see `end_what_stands_still`).
    """
    connection = await asyncpg.connect(
        dsn,
        timeout=min(CONNECT_WITHIN_S, timeout_s),
        command_timeout=timeout_s,
        server_settings={"application_name": "strandline"},
    )
    try:
        patience_s = min(timeout_s * LOCK_SHARE, LOCK_IN_TURN_S if in_turn else timeout_s)
        timeout = f"{max(1, round(patience_s * 1000))}ms"
        for setting in ("lock_timeout", "idle_in_transaction_session_timeout"):
            await connection.execute("SELECT set_config($1, $2, false)", setting, timeout)
        if await connection.fetchval("SHOW synchronous_commit") == "off":  # else a crash loses what was answered
            await connection.execute("SET synchronous_commit = on")
        encoding = await connection.fetchval("SHOW server_encoding")
        if encoding != "UTF8":
            raise StrandlineError(f"the database's encoding is {encoding}, which cannot hold every event: make it UTF8")
        return connection
    except BaseException:
        connection.terminate()
        raise


# ---- tables ---------------------------------------------------------------------------------------------------------

_COLUMNS = """
    SELECT a.attname, format_type(a.atttypid, a.atttypmod) AS type,
        a.attnotnull AND NOT a.atthasdef AND a.attidentity = '' AS needed
    FROM pg_attribute a WHERE a.attrelid = $1 AND a.attnum > 0 AND NOT a.attisdropped ORDER BY a.attnum
"""
_RELATION = """
    SELECT c.oid, c.relkind, c.relpersistence FROM pg_class c JOIN pg_namespace n ON n.oid = c.relnamespace
    WHERE n.nspname = $1 AND c.relname = $2
"""
_KEYS = """
    SELECT c.conname FROM pg_constraint c WHERE c.conrelid = $1 AND c.contype IN ('p', 'u') AND $2::text[] = (
        SELECT array_agg(a.attname::text ORDER BY a.attname::text COLLATE "C")
        FROM pg_attribute a WHERE a.attrelid = $1 AND a.attnum = ANY (c.conkey)
    )
"""


async def prepare(connection: Connection, schema: str, tables: Sequence[Table]) -> set[str]:
    """Make the tables that are absent, and see that those which are there can take the rows.

    Returns the names of the constraints that keep a row's place from being taken twice. Raises StrandlineError where a
    person must act (another shape, no schema, no right), and what the driver raises.
    """
    if not await connection.fetchval("SELECT count(*) FROM pg_namespace WHERE nspname = $1", schema):
        raise StrandlineError(f"there is no schema {schema!r}: create it, or name another in `schema`")
    absent = [table for table in tables if await connection.fetchrow(_RELATION, schema, table.name) is None]
    if absent:
        async with connection.transaction():
            await connection.execute("SELECT pg_advisory_xact_lock($1)", MAKING_LOCK)
            for table in absent:
                if await connection.fetchrow(_RELATION, schema, table.name) is None:
                    for statement in definition(schema, table.name, table.columns, table.key):
                        await connection.execute(statement)
    keys: set[str] = set()
    for table in tables:
        keys |= await _check(connection, schema, table)
    return keys


async def _check(connection: Connection, schema: str, table: Table) -> set[str]:
    place = f"{schema}.{table.name}"
    relation = await connection.fetchrow(_RELATION, schema, table.name)
    if relation is None or relation["relkind"] not in (b"r", b"p"):
        raise StrandlineError(f"{place} is no table: name another")
    if relation["relpersistence"] != b"p":
        advice = f"ALTER TABLE {quoted(schema, table.name)} SET LOGGED"
        raise StrandlineError(f"the rows of {place} do not outlive a crash of the server: {advice}, or name another")
    found = {row["attname"]: row for row in await connection.fetch(_COLUMNS, relation["oid"])}
    wanted = {column.name: TYPES[column.type] for column in table.columns}
    shape = {name: found[name]["type"] if name in found else None for name in wanted}
    if shape != wanted:
        listed = ", ".join(f"{name} {kind}" for name, kind in wanted.items() if shape[name] != kind)
        there = ", ".join(f"{name} {row['type']}" for name, row in found.items())
        raise StrandlineError(
            f"the table {place} has another shape ({there}): {listed} is expected; mend or name another"
        )
    needed = [name for name, row in found.items() if row["needed"] and name not in wanted]
    if needed:
        raise StrandlineError(
            f"the table {place} needs {', '.join(needed)}, which is not mapped: map it, or let it be null"
        )
    for right in table.writes:
        if not await connection.fetchval("SELECT has_table_privilege($1::oid, $2)", relation["oid"], right):
            advice = f"GRANT {right} ON {quoted(schema, table.name)} TO the user that this service connects as"
            raise StrandlineError(f"{right} on {place} is not allowed: {advice}")
    return {row["conname"] for row in await connection.fetch(_KEYS, relation["oid"], sorted(table.key))}


# ---- the position ---------------------------------------------------------------------------------------------------


async def read_positions(connection: Connection, schema: str, feed: str, stored: dict[Lane, str]) -> dict[Lane, int]:
    """How far each lane's table is; rows of the position table are made where they are absent.

    Each row is locked for a moment: a transaction that is still at work on it, such as that of a process which was
    killed, is waited for. So what is read here is final.
    """
    place = quoted(schema, POSITION_TABLE)
    positions: dict[Lane, int] = {}
    async with connection.transaction():
        for lane, table in sorted(stored.items()):
            await connection.execute(
                f"INSERT INTO {place} (feed, lane, table_name, batch) VALUES ($1, $2, $3, 0) ON CONFLICT DO NOTHING",
                *(feed, lane, table),
            )
            query = f"SELECT batch FROM {place} WHERE feed = $1 AND lane = $2 AND table_name = $3 FOR UPDATE"
            positions[lane] = await connection.fetchval(query, feed, lane, table)
    return positions


async def read_places(connection: Connection, feed: str, stored: dict[Lane, str]) -> dict[Lane, str]:
    """For each lane the condition that names its row of the position table, as the server itself quotes it."""
    query = "SELECT quote_literal($1::text), quote_literal($2::text), quote_literal($3::text)"
    places: dict[Lane, str] = {}
    for lane, table in stored.items():
        literals = await connection.fetchrow(query, feed, lane, table)
        assert literals is not None
        places[lane] = " AND ".join(f"{name} = {value}" for name, value in zip(POSITION_KEY, literals, strict=True))
    return places


async def end_what_stands_still(connection: Connection, schema: str, place: str) -> None:
    """End the session of an earlier owner whose transaction holds this position while it waits for its client.

    In the middle of a COPY no time limit of the server ends it, be its process stopped or its machine gone. Nothing is
    lost: what it had not committed comes again. Only sessions of this user and of this program are touched.
    """
    query = f"""SELECT pg_terminate_backend(held.pid) FROM {quoted(schema, POSITION_TABLE)} AS position
        JOIN pg_locks AS held ON held.locktype = 'transactionid' AND held.granted
            AND held.transactionid = position.xmax
        JOIN pg_stat_activity AS session ON session.pid = held.pid
        WHERE {place} AND session.usename = current_user AND session.wait_event = 'ClientRead'
            AND session.application_name = current_setting('application_name')
            AND session.state_change < clock_timestamp() - make_interval(secs => $1)"""
    await connection.execute(query, LOCK_IN_TURN_S)


async def begin_at(connection: Connection, schema: str, place: str, reached: int, number: int) -> bool:
    """Begin a transaction and move the position from `reached` to `number`, which locks its row, in one trip.

    False where the position does not stand at `reached`.
    """
    update = f"UPDATE {quoted(schema, POSITION_TABLE)} SET batch = {number:d} WHERE batch = {reached:d} AND {place}"
    return await connection.execute(f"BEGIN; {update}") == "UPDATE 1"


# ---- errors ---------------------------------------------------------------------------------------------------------

# SQLSTATE or its class -> what to do. https://www.postgresql.org/docs/current/errcodes-appendix.html
_RETRIED = {
    "08": "the connection was lost",
    "40": "the transaction was undone by the server",
    "53": "the server lacks room or connections: free some",
    "57": "the server stopped the work, is stopping or is starting",
    "58": "the server could not read or write its files: see its log",
    "55P03": "another transaction holds a lock for too long: end it",
    "25006": "the server is read-only: name the one that takes writes, or wait until it is promoted",
    "25P03": "the transaction took too long",
    "XX": "the server found itself at fault: see its log",
}
_STANDS = {
    "28": "the server lets nobody in with this user and password: see `dsn`",
    "3D": "there is no such database: create it, or see `dsn`",
    "3F": "there is no such schema: create it, or name another",
    "42501": "something is not allowed to the user that this service connects as",
    "42": "a table has changed: mend it, or name another",
}
# Data exception, integrity constraint violation, program limit exceeded, an error that a trigger raises.
_OF_ROWS = ("22", "23", "54", "P0")


def lies_in_rows(error: BaseException, own_keys: Collection[str]) -> bool:
    """Whether the server will never take the rows as they are: not where `own_keys` say that it has them already."""
    return _state(error).startswith(_OF_ROWS) and not _is_repeat(error, own_keys)


def _is_repeat(error: BaseException, own_keys: Collection[str]) -> bool:
    return _state(error) == "23505" and getattr(error, "constraint_name", None) in own_keys


def _state(error: BaseException) -> str:
    """The SQLSTATE of an error of the server; empty for any other."""
    return str(getattr(error, "sqlstate", None) or "")


def trouble(place: str, error: Exception, own_keys: Collection[str] = ()) -> Exception:
    """The error as a sentence that names the store and what to do.

    SinkRetry where time may mend it, StrandlineError where a person must; an error of another kind is given back.
    """
    if isinstance(error, asyncpg.ClientConfigurationError):
        return StrandlineError(f"{place}: `dsn` cannot be used as it is written")  # its text may hold a password
    if _is_repeat(error, own_keys):
        return StrandlineError(
            f"{place} holds rows already of batches that its position does not know ({error}): see whether two "
            "services write there for a feed of the same name"
        )
    state = _state(error)
    for table, kind in ((_RETRIED, SinkRetry), (_STANDS, StrandlineError)):
        advice = table.get(state) or table.get(state[:2])
        if advice:
            return kind(f"{place}: {advice} ({error})")
    if isinstance(error, asyncpg.PostgresError):
        return StrandlineError(f"{place}: {error} (SQLSTATE {state})")
    if isinstance(error, TimeoutError):
        return SinkRetry(f"{place} does not answer in time")
    if isinstance(error, OSError):
        return SinkRetry(f"{place} cannot be reached: {error}")
    # The driver's own state is what it complains of where the server ends a session just before it is asked something.
    is_ended = isinstance(error, asyncpg.InterfaceError) and not isinstance(error, asyncpg.DataError)
    if is_ended or isinstance(error, asyncpg.InternalClientError):
        return SinkRetry(f"{place}: the connection was lost ({error})")
    return error
