"""The PostgreSQL sink while connections break, commits are not answered, locks are held and others write: nothing is
lost, nothing is there twice (P1, P5), and what stands still says why (P7)."""

from __future__ import annotations

import asyncio
import hashlib
import threading
from collections.abc import AsyncIterator, Sequence
from contextlib import asynccontextmanager
from pathlib import Path
from typing import Any

import asyncpg
import pytest
from helpers_pgproxy import Proxy
from helpers_postgres import ask, make_schema, shared
from helpers_service import DEADLINE_S
from helpers_sinks import HeldLines
from hypothesis import given, settings
from hypothesis import strategies as st
from strandline.core.columns import Batch, Lane
from strandline.errors import SinkRefused, SinkRetry, StrandlineError
from strandline.sinks import postgres, postgres_server
from strandline.sinks.postgres import PostgresSink


@pytest.fixture
def schema(tmp_path: Path) -> str:
    return make_schema(shared(), tmp_path)


def stored(schema: str, lane: Lane = "ordered") -> list[bytes]:
    table = "events" if lane == "ordered" else "late"
    found = ask(shared(), f"SELECT event FROM {schema}.{table} ORDER BY batch, position")
    return [row[0].encode() for row in found]


async def opened(schema: str, dsn: str = "", timeout_s: float = 30.0) -> PostgresSink:
    sink = PostgresSink(dsn or shared(), "river", schema=schema, timeout_s=timeout_s)
    await sink.open()
    return sink


@asynccontextmanager
async def shell() -> AsyncIterator[asyncpg.Connection[asyncpg.Record]]:
    """Another client of the same server."""
    connection = await asyncpg.connect(shared())
    try:
        yield connection
    finally:
        connection.terminate()


# ---- connections that break -----------------------------------------------------------------------------------------

CUTS = st.lists(
    st.one_of(st.sampled_from(["before", "after"]), st.integers(1, 4_000), st.integers(4_000, 60_000)), max_size=6
)


@settings(max_examples=30)
@given(CUTS, st.lists(st.integers(1, 4), min_size=1, max_size=6))
def test_wherever_a_connection_breaks_each_event_is_there_once(cuts: list[str | int], groups: list[int]) -> None:
    """Two lanes in turns, in groups of these sizes, each cut at a byte that is sent or around a commit."""
    name = hashlib.sha256(repr((cuts, groups)).encode()).hexdigest()
    schema = make_schema(shared(), Path(name))
    try:
        asyncio.run(deliver_through_cuts(schema, cuts, groups))
    finally:
        ask(shared(), f"DROP SCHEMA {schema} CASCADE")


async def deliver_through_cuts(schema: str, cuts: Sequence[str | int], groups: Sequence[int]) -> None:
    lines, left = HeldLines(), list(reversed(cuts))
    everything: dict[Lane, list[Batch]] = {lane: lines.batches(lane, range(1, 9), 40) for lane in ("ordered", "late")}
    told: dict[Lane, int] = {"ordered": 0, "late": 0}
    async with Proxy(shared()) as proxy:
        sink = PostgresSink(proxy.dsn, "river", schema=schema)
        step = 0
        while any(told[lane] < 8 for lane in told):
            step += 1
            assert step < 100, "it does not go on"
            lane: Lane = "ordered" if step % 2 else "late"
            if left:
                cut = left.pop()
                proxy.at_commit, proxy.cut_after = (cut, None) if isinstance(cut, str) else (None, cut)
            group = everything[lane][told[lane] :][: groups[step % len(groups)]]
            try:
                if step == 1:
                    await sink.open()
                answer = await sink.take(group, lines)
            except SinkRetry:
                continue
            assert all(answer[lane] >= told[lane] for lane in told)
            told = answer
        await sink.close()
    for lane, batches in everything.items():
        assert stored(schema, lane) == [row[-1] for row in lines.expected(batches)]


@pytest.mark.parametrize("told", ["before", "after"])
async def test_a_commit_without_an_answer(schema: str, told: str) -> None:
    lines = HeldLines()
    first, second, third = lines.batches("ordered", [1, 2, 3])
    async with Proxy(shared()) as proxy:
        sink = await opened(schema, proxy.dsn)
        await sink.take([first], lines)
        proxy.at_commit = told
        with pytest.raises(SinkRetry, match="the connection was lost"):
            await sink.take([second], lines)
        assert proxy.cuts == 1
        assert len(stored(schema)) == (6 if told == "after" else 3)
        assert (await sink.take([second, third], lines))["ordered"] == 3
        await sink.close()
    assert stored(schema) == lines.held


async def test_a_server_that_falls_silent(schema: str) -> None:
    lines = HeldLines()
    batch = lines.batch("ordered", 1, 3)
    async with Proxy(shared()) as proxy:
        sink = await opened(schema, proxy.dsn, timeout_s=0.3)
        proxy.held = asyncio.Event()
        with pytest.raises(SinkRetry, match="does not answer in time"):
            await sink.take([batch], lines)
        with pytest.raises(SinkRetry, match="does not answer in time"):
            await sink.take([batch], lines)  # nor does it let anybody in
        proxy.held.set()
        assert (await sink.take([batch], lines))["ordered"] == 1
        await sink.close()
    assert stored(schema) == lines.held


async def test_a_session_that_the_server_ends(schema: str) -> None:
    lines = HeldLines()
    first, second = lines.batches("ordered", [1, 2])
    sink = await opened(schema)
    await sink.take([first], lines)
    assert sink._connection is not None
    session = sink._connection.get_server_pid()
    async with shell() as other:
        await other.execute("SELECT pg_terminate_backend($1, 5000)", session)
    for _ in range(2):  # at the first try it may not be known yet
        try:
            reached = await sink.take([second], lines)
            break
        except SinkRetry as error:
            assert "lost" in str(error) or "stopping" in str(error)
    assert reached["ordered"] == 2
    await sink.close()
    assert stored(schema) == lines.held


# ---- locks and time limits ------------------------------------------------------------------------------------------


async def test_a_table_that_is_locked_and_a_take_that_is_cancelled(schema: str) -> None:
    lines = HeldLines()
    batches = lines.batches("ordered", [1, 2])
    sink = await opened(schema)
    async with shell() as other:
        await other.execute(f"BEGIN; LOCK TABLE {schema}.events")
        impatient = await opened(schema, timeout_s=0.3)
        with pytest.raises(SinkRetry, match="another transaction holds a lock for too long: end it"):
            await impatient.take(batches, lines)
        await impatient.close()
        task = asyncio.create_task(sink.take(batches, lines))
        waiting = "SELECT count(*) FROM pg_locks WHERE NOT granted AND relation = $1::regclass"
        while not await other.fetchval(waiting, f"{schema}.events"):
            await asyncio.sleep(0.01)
        task.cancel()
        with pytest.raises(asyncio.CancelledError):
            await task
        await other.execute("ROLLBACK")
    assert (await sink.take(batches, lines))["ordered"] == 2
    await sink.close()
    assert stored(schema) == lines.held


async def test_a_transaction_that_still_runs_is_waited_for(schema: str) -> None:
    """Such as that of a process which was killed in the middle: until it has ended, the position is not known."""
    lines = HeldLines()
    first = await opened(schema)
    await first.take([lines.batch("ordered", 1, 1)], lines)
    await first.close()
    async with shell() as other:
        await other.execute(f"BEGIN; UPDATE {schema}.strandline_position SET batch = 7 WHERE lane = 'ordered'")
        impatient = PostgresSink(shared(), "river", schema=schema, timeout_s=0.3)
        with pytest.raises(SinkRetry, match="another transaction holds a lock"):
            await impatient.open()
        await impatient.close()
        patient = PostgresSink(shared(), "river", schema=schema)
        opening = asyncio.create_task(patient.open())
        waiting = "SELECT count(*) FROM pg_locks WHERE NOT granted AND locktype = 'transactionid'"
        while not await other.fetchval(waiting):
            await asyncio.sleep(0.01)
        await other.execute("COMMIT")
        assert await opening == {"ordered": 7, "late": 0}
        await patient.close()


async def test_a_process_that_stands_still_loses_its_transaction(schema: str) -> None:
    """Its lock would hold up whoever goes on in its place."""
    lines = HeldLines()
    sink = await opened(schema, timeout_s=0.5)
    assert sink._connection is not None
    await sink._connection.execute("BEGIN")
    await sink._connection.execute(f"UPDATE {schema}.strandline_position SET batch = 5 WHERE lane = 'ordered'")
    other = await opened(schema)  # waits until the server has ended the other's transaction
    assert (await other.take([lines.batch("ordered", 1, 1)], lines))["ordered"] == 1
    await other.close()
    await sink.close()


# ---- what the server says -------------------------------------------------------------------------------------------

# https://www.postgresql.org/docs/current/errcodes-appendix.html
STATES: list[tuple[str, type[StrandlineError], str]] = [
    ("40001", SinkRetry, "the transaction was undone by the server"),  # serialization_failure
    ("40P01", SinkRetry, "the transaction was undone by the server"),  # deadlock_detected
    ("53100", SinkRetry, "the server lacks room or connections: free some"),  # disk_full
    ("53300", SinkRetry, "the server lacks room or connections: free some"),  # too_many_connections
    ("57014", SinkRetry, "the server stopped the work"),  # query_canceled, by statement_timeout too
    ("57P01", SinkRetry, "is stopping or is starting"),  # admin_shutdown
    ("58030", SinkRetry, "the server could not read or write its files"),  # io_error
    ("25006", SinkRetry, "the server is read-only"),  # read_only_sql_transaction
    ("XX000", SinkRetry, "the server found itself at fault"),  # internal_error
    ("42501", StrandlineError, "something is not allowed to the user"),  # insufficient_privilege
    ("42703", StrandlineError, "a table has changed"),  # undefined_column
    ("0A000", StrandlineError, "SQLSTATE 0A000"),  # feature_not_supported
    ("22003", SinkRefused, "refuses the rows"),  # numeric_value_out_of_range
    ("23514", SinkRefused, "refuses the rows"),  # check_violation
    ("23505", SinkRefused, "refuses the rows"),  # unique_violation, of a constraint that is not the sink's
    ("54000", SinkRefused, "refuses the rows"),  # program_limit_exceeded
    ("P0001", SinkRefused, "refuses the rows"),  # raise_exception
]


@pytest.mark.parametrize(("state", "kind", "sentence"), STATES)
async def test_each_error_of_the_server_is_what_it_means(
    schema: str, state: str, kind: type[StrandlineError], sentence: str
) -> None:
    """A trigger raises it in the middle of the rows of the second batch; when it is gone, all goes on."""
    lines = HeldLines()
    batches = lines.batches("ordered", [1, 2, 3], 20)
    sink = await opened(schema)
    ask(
        shared(),
        f"""CREATE FUNCTION {schema}.fail() RETURNS trigger LANGUAGE plpgsql AS $$ BEGIN
            IF NEW.batch = 2 AND NEW.position = 9 THEN RAISE EXCEPTION 'as told' USING ERRCODE = '{state}'; END IF;
            RETURN NEW; END $$;
        CREATE TRIGGER fail BEFORE INSERT ON {schema}.events FOR EACH ROW EXECUTE FUNCTION {schema}.fail()""",
    )
    with pytest.raises(kind, match=sentence) as caught:
        await sink.take(batches, lines)
    assert type(caught.value) is kind and "as told" in str(caught.value)
    if isinstance(caught.value, SinkRefused):
        assert caught.value.numbers == [2]
        assert stored(schema) == lines.held[:20], "those before the refused one are there"
    else:
        assert stored(schema) == []
    ask(shared(), f"DROP TRIGGER fail ON {schema}.events")
    assert (await sink.take(batches, lines))["ordered"] == 3
    await sink.close()
    assert stored(schema) == lines.held


async def test_a_time_limit_of_the_server(schema: str) -> None:
    lines = HeldLines()
    sink = await opened(schema)
    ask(
        shared(),
        f"""CREATE FUNCTION {schema}.doze() RETURNS trigger LANGUAGE plpgsql AS
            $$ BEGIN PERFORM pg_sleep(5); RETURN NEW; END $$;
        CREATE TRIGGER doze BEFORE INSERT ON {schema}.events FOR EACH ROW EXECUTE FUNCTION {schema}.doze()""",
    )
    assert sink._connection is not None
    await sink._connection.execute("SET statement_timeout = '100ms'")
    with pytest.raises(SinkRetry, match=r"the server stopped the work.*statement timeout"):
        await sink.take([lines.batch("ordered", 1, 1)], lines)
    await sink.close()


# ---- others who write -----------------------------------------------------------------------------------------------


async def test_two_processes_for_one_feed_cannot_mix(schema: str) -> None:
    lines = HeldLines()
    first, second = await opened(schema), await opened(schema)
    await first.take([lines.batch("ordered", 1, 2)], lines)
    foreign_lines = HeldLines()
    foreign = foreign_lines.batch("ordered", 1, 5)
    for _ in range(2):
        with pytest.raises(StrandlineError, match=r"which this service left at 0, was moved by another") as caught:
            await second.take([foreign], foreign_lines)
        assert not isinstance(caught.value, SinkRetry | SinkRefused)
    await second.close()
    restarted = PostgresSink(shared(), "river", schema=schema)
    assert (await restarted.open())["ordered"] == 1
    await restarted.take([lines.batch("ordered", 2, 2)], lines)
    with pytest.raises(StrandlineError, match=r"which this service left at 1, was moved by another"):
        await first.take([lines.batch("ordered", 2, 1)], lines)
    await first.close()
    await restarted.close()
    assert stored(schema) == lines.held[:4]


async def test_a_server_that_was_restored_to_an_older_state(schema: str) -> None:
    lines = HeldLines()
    sink = await opened(schema)
    await sink.take(lines.batches("ordered", [1, 2]), lines)
    ask(shared(), f"UPDATE {schema}.strandline_position SET batch = 1; DELETE FROM {schema}.events WHERE batch = 2")
    with pytest.raises(StrandlineError, match="restored to an older state"):
        await sink.take([lines.batch("ordered", 3, 1)], lines)
    await sink.close()
    assert len(stored(schema)) == 3


async def test_rows_that_the_position_does_not_know_are_named_and_not_refused(schema: str) -> None:
    lines = HeldLines()
    sink = await opened(schema)
    batch = lines.batch("ordered", 1, 3)
    await sink.take([batch], lines)
    await sink.close()
    ask(shared(), f"DELETE FROM {schema}.strandline_position")
    again = await opened(schema)
    with pytest.raises(StrandlineError, match="rows already of batches that its position does not know") as caught:
        await again.take([batch], lines)
    assert not isinstance(caught.value, SinkRefused)
    await again.close()
    assert stored(schema) == lines.held


async def test_many_feeds_make_their_tables_at_the_same_moment(schema: str) -> None:
    sinks = [PostgresSink(shared(), f"river-{number}", schema=schema) for number in range(12)]
    assert await asyncio.gather(*(sink.open() for sink in sinks)) == [{"ordered": 0, "late": 0}] * 12
    await asyncio.gather(*(sink.close() for sink in sinks))


@pytest.mark.parametrize("error", [asyncpg.InternalClientError, asyncpg.InterfaceError])
def test_what_the_driver_says_of_a_session_that_just_ended_is_tried_again(error: type[Exception]) -> None:
    """asyncpg's words where it is asked while it learns that the server ended the session; seen on a busy machine."""
    said = error("cannot switch to state 15; another operation (2) is in progress")
    told = postgres_server.trouble("PostgreSQL at the weir", said)
    assert isinstance(told, SinkRetry) and "PostgreSQL at the weir: the connection was lost" in str(told)


class MadeMeanwhile(HeldLines):
    """Lines whose bytes are given once the server has moved the position, and not before."""

    def __init__(self) -> None:
        super().__init__()
        self.moved = threading.Event()

    def ndjson(self, batch: Batch) -> bytes:
        assert self.moved.wait(DEADLINE_S), "rows are made before the position is asked for"
        return super().ndjson(batch)


async def test_rows_are_made_while_the_position_is_moved_and_nothing_is_left_where_it_is_not(
    schema: str, monkeypatch: pytest.MonkeyPatch
) -> None:
    lines, sink = MadeMeanwhile(), PostgresSink(shared(), "river", schema=schema)

    async def begin_at(*given: Any) -> bool:
        try:
            return await postgres_server.begin_at(*given)
        finally:
            lines.moved.set()

    monkeypatch.setattr(postgres, "begin_at", begin_at)
    await sink.open()
    before = asyncio.all_tasks()
    await sink.take([lines.batch("ordered", 1, 9)], lines)
    ask(shared(), f"UPDATE {schema}.strandline_position SET batch = 7 WHERE lane = 'ordered'")
    lines.moved.clear()
    with pytest.raises(StrandlineError, match="a second process writes for this feed"):
        await sink.take([lines.batch("ordered", 2, 9)], lines)
    assert asyncio.all_tasks() == before
    await sink.close()
    assert ask(shared(), f"SELECT DISTINCT batch FROM {schema}.events") == [(1,)]
