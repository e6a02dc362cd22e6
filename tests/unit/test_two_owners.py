"""Two sinks for one feed, on a real PostgreSQL: owners that follow one another, the earlier one still at work or waking
late. Whoever delivers, each row is there once, in order, and the position is right (P3, P5)."""

from __future__ import annotations

import asyncio
import hashlib
from collections.abc import Sequence
from pathlib import Path

import asyncpg
import pytest
from helpers_pgproxy import Proxy
from helpers_postgres import ask, make_schema, shared
from helpers_sinks import HeldLines, VirtualTime
from hypothesis import given, settings
from hypothesis import strategies as st
from strandline.core.columns import Batch, Lane
from strandline.errors import SinkRetry, StrandlineError
from strandline.sinks import make_shared_sink, postgres, postgres_server
from strandline.sinks.http import HttpSink
from strandline.sinks.postgres import PostgresSink
from strandline.sinks.postgres_columns import Column

LANES: tuple[Lane, Lane] = ("ordered", "late")
LAST = 8
OWNERS = 2
# A table of the user's own, without feed, batch and position: nothing but the position keeps a row from coming twice.
KEYLESS = "CREATE TABLE {schema}.gauges (id bigserial, raw text)"
MAPPED = {"table": "gauges", "columns": [Column("raw", value="event")]}


@pytest.fixture
def schema(tmp_path: Path) -> str:
    return make_schema(shared(), tmp_path)


def owner(schema: str, dsn: str = "", **options: object) -> PostgresSink:
    return PostgresSink(dsn or shared(), "river", schema=schema, shared=True, **options)  # type: ignore[arg-type]


def stored(schema: str, lane: Lane, *, keyless: bool = False) -> list[bytes]:
    if keyless and lane == "ordered":
        found = ask(shared(), f"SELECT raw FROM {schema}.gauges ORDER BY id")
    else:
        table = "events" if lane == "ordered" else "late"
        found = ask(shared(), f"SELECT event FROM {schema}.{table} ORDER BY batch, position")
    return [row[0].encode() for row in found]


# ---- the law --------------------------------------------------------------------------------------------------------

CUTS = st.one_of(st.none(), st.none(), st.sampled_from(["before", "after"]), st.integers(1, 6_000))
TURNS = st.tuples(st.integers(0, 3), CUTS)  # how many batches an owner takes (0: it sleeps), and where it is cut off
ROUNDS = st.lists(st.tuples(st.sampled_from(LANES), TURNS, TURNS), max_size=10)


@settings(max_examples=40)
@given(ROUNDS, st.booleans())
def test_whoever_delivers_each_row_is_there_once(
    rounds: list[tuple[Lane, tuple[int, str | int | None], tuple[int, str | int | None]]], keyless: bool
) -> None:
    """In each round the owners take at the same moment, each from where it believes the store to be."""
    schema = make_schema(shared(), Path(hashlib.sha256(repr((rounds, keyless)).encode()).hexdigest()))
    try:
        if keyless:
            ask(shared(), KEYLESS.format(schema=schema))
        asyncio.run(race(schema, rounds, keyless))
    finally:
        ask(shared(), f"DROP SCHEMA {schema} CASCADE")


async def race(schema: str, rounds: Sequence[tuple[Lane, object, object]], keyless: bool) -> None:
    lines = HeldLines()
    everything: dict[Lane, list[Batch]] = {lane: lines.batches(lane, range(1, LAST + 1), 9) for lane in LANES}
    async with Proxy(shared()) as one, Proxy(shared()) as other:
        proxies = [one, other]
        sinks = [owner(schema, proxy.dsn, **(MAPPED if keyless else {})) for proxy in proxies]
        told = [await sink.open() for sink in sinks]

        async def turn(which: int, lane: Lane, count: int, cut: str | int | None) -> None:
            group = [batch for batch in everything[lane] if batch.number > told[which][lane]][:count]
            if not group:
                return
            proxy = proxies[which]
            proxy.at_commit, proxy.cut_after = (cut, None) if isinstance(cut, str) else (None, cut)
            try:
                answer = await sinks[which].take(group, lines)
            except SinkRetry:
                return
            assert all(answer[each] >= told[which][each] for each in LANES) and answer[lane] >= group[-1].number
            told[which] = answer

        for lane, *turns in rounds:
            await asyncio.gather(*(turn(which, lane, *given) for which, given in enumerate(turns)))  # type: ignore
        for proxy in proxies:
            proxy.at_commit = proxy.cut_after = None
        for lane in LANES:
            while min(each[lane] for each in told) < LAST:
                await asyncio.gather(*(turn(which, lane, 3, None) for which in range(OWNERS)))
        await asyncio.gather(*(sink.close() for sink in sinks))
    for lane, batches in everything.items():
        wanted = [line for batch in batches for line in lines.lines(batch)]
        assert stored(schema, lane, keyless=keyless) == wanted
    found = ask(shared(), f"SELECT batch FROM {schema}.strandline_position")
    assert found == [(LAST,), (LAST,)]


# ---- cases ----------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("keyless", [False, True])
async def test_an_earlier_owner_that_wakes_late_writes_nothing_twice(schema: str, keyless: bool) -> None:
    lines = HeldLines()
    batches = lines.batches("ordered", range(1, 8))
    if keyless:
        ask(shared(), KEYLESS.format(schema=schema))
    options = MAPPED if keyless else {}
    earlier, later = owner(schema, **options), owner(schema, **options)
    await earlier.open()
    await earlier.take(batches[:2], lines)
    assert (await later.open())["ordered"] == 2
    assert (await later.take(batches[2:6], lines))["ordered"] == 6
    assert (await earlier.take(batches[2:4], lines))["ordered"] == 6, "it is told how far the store is by now"
    assert (await earlier.take(batches[4:7], lines))["ordered"] == 7, "what is there is skipped, the rest is written"
    assert (await later.take(batches[6:], lines))["ordered"] == 7
    await earlier.close()
    await later.close()
    assert stored(schema, "ordered", keyless=keyless) == lines.held


async def test_a_commit_without_an_answer_and_another_behind_it(schema: str) -> None:
    """What the first owner's commit came to is not known to it, and by then another has gone on."""
    lines = HeldLines()
    batches = lines.batches("ordered", range(1, 6))
    async with Proxy(shared()) as proxy:
        earlier, later = owner(schema, proxy.dsn), owner(schema)
        await earlier.open()
        for told in ("before", "after"):
            proxy.at_commit = told
            start = (await later.open())["ordered"]
            with pytest.raises(SinkRetry):
                await earlier.take(batches[start : start + 1], lines)
            await later.close()
            later = owner(schema)
            reached = (await later.open())["ordered"]
            assert reached == start + (told == "after")
            await later.take(batches[reached : reached + 2], lines)
            assert (await earlier.take(batches[start : start + 1], lines))["ordered"] == reached + 2
        await earlier.close()
    await later.close()
    assert stored(schema, "ordered") == lines.held


async def test_a_store_that_went_back_is_an_error_all_the_same(schema: str) -> None:
    lines = HeldLines()
    batches = lines.batches("ordered", [1, 2, 3])
    sink = owner(schema)
    await sink.open()
    await sink.take(batches[:2], lines)
    ask(shared(), f"UPDATE {schema}.strandline_position SET batch = 1; DELETE FROM {schema}.events WHERE batch = 2")
    for _ in range(2):
        with pytest.raises(StrandlineError, match="left at 2, was moved by another") as caught:
            await sink.take(batches[2:], lines)
        assert not isinstance(caught.value, SinkRetry)
    await sink.close()
    assert stored(schema, "ordered") == lines.held[:3]


# ---- an earlier owner that stands still -----------------------------------------------------------------------------


async def until_taken(sink: PostgresSink, group: Sequence[Batch], lines: HeldLines) -> dict[Lane, int]:
    async with asyncio.timeout(20):
        while True:
            try:
                return await sink.take(group, lines)
            except SinkRetry:
                await asyncio.sleep(0)


async def test_an_owner_that_stands_still_in_the_middle_of_its_rows(
    schema: str, monkeypatch: pytest.MonkeyPatch
) -> None:
    """It holds the lock, and no limit of the server ends a COPY whose client is silent: the next owner ends it."""
    monkeypatch.setattr(postgres_server, "LOCK_IN_TURN_S", 0.3)
    monkeypatch.setattr(postgres, "ROWS_AT_ONCE", 3)
    earlier_lines, later_lines = HeldLines(), HeldLines()
    earlier, later = owner(schema), owner(schema)
    await earlier.open()
    await later.open()
    earlier_lines.hold_at = 3
    group = earlier_lines.batches("ordered", range(1, 5))
    stuck = asyncio.create_task(earlier.take(group, earlier_lines))
    await asyncio.to_thread(earlier_lines.entered.wait)
    same = later_lines.batches("ordered", range(1, 5))
    with pytest.raises(SinkRetry, match="another transaction holds a lock"):
        await later.take(same[:2], later_lines)
    assert (await until_taken(later, same[:2], later_lines))["ordered"] == 2
    earlier_lines.go_on.set()
    with pytest.raises(SinkRetry):
        await stuck
    earlier_lines.hold_at = None
    assert (await earlier.take(group, earlier_lines))["ordered"] == 4
    assert (await later.take(same, later_lines))["ordered"] == 4
    await earlier.close()
    await later.close()
    assert stored(schema, "ordered") == earlier_lines.held == later_lines.held


async def test_a_person_s_transaction_is_waited_for_and_never_ended(
    schema: str, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(postgres_server, "LOCK_IN_TURN_S", 0.2)
    lines = HeldLines()
    batch = lines.batch("ordered", 1, 2)
    sink = owner(schema)
    await sink.open()
    person = await asyncpg.connect(shared())
    await person.execute(f"BEGIN; SELECT * FROM {schema}.strandline_position FOR UPDATE")
    for _ in range(3):
        with pytest.raises(SinkRetry, match="another transaction holds a lock for too long: end it"):
            await sink.take([batch], lines)
    assert await person.fetchval("SELECT 1") == 1
    await person.execute("ROLLBACK")
    await person.close()
    assert (await sink.take([batch], lines))["ordered"] == 1
    await sink.close()


# ---- making them ----------------------------------------------------------------------------------------------------


def test_only_kinds_that_ask_for_it_are_told(tmp_path: Path) -> None:
    made = make_shared_sink("postgres", "river", VirtualTime(), dsn="postgres://")
    assert isinstance(made, PostgresSink) and made._shared
    assert isinstance(make_shared_sink("http", "river", VirtualTime(), url="http://127.0.0.1:1"), HttpSink)
    with pytest.raises(StrandlineError, match="there is no kind of sink named 'paper'"):
        make_shared_sink("paper", "river", VirtualTime())
