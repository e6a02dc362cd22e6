"""Where bodies are decoded: what would hold the loop up is decoded aside, and numbered by the table as it is then."""

from __future__ import annotations

import asyncio
import json
from functools import partial
from threading import Event

import msgspec
import pytest
from helpers_arrival import check_arrival, plain, source_names
from strandline.core.columns import Arrival
from strandline.errors import BodyError, TooManyFaults
from strandline.ingest.decode import Decoder
from strandline.ingest.limits import BodyLimits
from strandline.ingest.offload import JUDGED_BYTES, JUDGED_LINES, Aside, decoded

NDJSON, JSON, MSGPACK = "application/x-ndjson", "application/json", "application/vnd.msgpack"
FEED = Decoder("river", "/ts", "ns", "/station")


def lines(count: int, more: str = "", note: str = "x") -> bytes:
    """Events of as many stations, with a line behind them."""
    events = [json.dumps({"ts": number, "station": f"gw-{number}", "note": note}) for number in range(count)]
    return "\n".join([*events, more]).encode()


EVENTS = [{"ts": number, "station": f"gw-{number}", "note": "x" * 90} for number in range(3000)]
ASIDE = {
    "many lines of which one is odd": (lines(JUDGED_LINES + 1, "odd"), NDJSON),
    "long lines of which one is odd": (lines(100, "odd", "x" * (JUDGED_BYTES // 100)), NDJSON),
    "much MessagePack": (msgspec.msgpack.encode(EVENTS), MSGPACK),
    "a large body": (lines(50_000, note="x" * 90), NDJSON),
    "a large array": (b"[" + b" " * 5_000_000 + b'{"ts":1,"station":"gw-7"}]', JSON),
}
AT_ONCE = {
    "many good lines": (lines(20_000), NDJSON),
    "few odd lines": (lines(100, "odd"), NDJSON),
    "little MessagePack": (msgspec.msgpack.encode(EVENTS[:100]), MSGPACK),
    "nothing": (b"", NDJSON),
}


async def while_the_thread_is_busy(body: bytes, media_type: str, table: dict[str, int]) -> tuple[Arrival, bool]:
    """The arrival, and whether it waited for the thread; the table grows by "gw-7" while it does."""
    aside, free = Aside(), Event()
    before = asyncio.create_task(aside.run(partial(hold, free)))
    await asyncio.sleep(0)
    task = asyncio.create_task(decoded(FEED, body, media_type, table, aside))
    for _ in range(3):
        await asyncio.sleep(0)
    waited = not task.done()
    if waited:
        table["gw-7"] = len(table)
    free.set()
    await before
    arrival = await task
    aside.close()
    return arrival, waited


def hold(free: Event) -> Arrival:
    """Work that lasts until it may end."""
    free.wait()
    return FEED.decode(b"", NDJSON, {})


@pytest.mark.parametrize(("body", "media_type"), ASIDE.values(), ids=ASIDE)
async def test_what_takes_long_is_decoded_aside_and_numbered_last(body: bytes, media_type: str) -> None:
    table = {"gw-5": 0, "else": 1}
    arrival, waited = await while_the_thread_is_busy(body, media_type, table)
    assert waited
    assert table["gw-7"] == 2
    check_arrival(arrival, table)
    assert plain(arrival) == plain(FEED.decode(body, media_type, table))
    assert "gw-7" in source_names(arrival, table) and "gw-7" not in arrival.new_sources


@pytest.mark.parametrize(("body", "media_type"), AT_ONCE.values(), ids=AT_ONCE)
async def test_what_does_not_is_decoded_at_once(body: bytes, media_type: str) -> None:
    arrival, waited = await while_the_thread_is_busy(body, media_type, {})
    assert not waited
    assert plain(arrival) == plain(FEED.decode(body, media_type, {}))


async def test_the_loop_turns_meanwhile() -> None:
    """A body at the limit on events, of which no line is an event, takes the best part of a second."""
    turns = 0

    async def turn() -> None:
        nonlocal turns
        while True:
            await asyncio.sleep(0)
            turns += 1

    patient = Decoder("river", "/ts", "ns", "/station", limits=BodyLimits(faults_at_most=100_000))
    aside = Aside()
    turning = asyncio.create_task(turn())
    arrival = await decoded(patient, b"{}\n" * 100_000, NDJSON, {}, aside)
    turning.cancel()
    aside.close()
    assert len(arrival.faults) == 100_000
    assert turns > 10


@pytest.mark.parametrize(
    ("body", "media_type", "error"),
    [
        (b"{}\n" * 10_001, NDJSON, TooManyFaults),
        (b"{}\n" * 100_001, NDJSON, BodyError),
        (b"[" + b" " * 5_000_000 + b"}", JSON, BodyError),
        (b"x", "text/plain", BodyError),
    ],
)
async def test_what_is_refused_is_refused_from_there_too(body: bytes, media_type: str, error: type[Exception]) -> None:
    aside = Aside()
    with pytest.raises(error):
        await decoded(FEED, body, media_type, {}, aside)
    aside.close()


async def test_who_is_cancelled_keeps_nothing_in_memory_but_work_that_has_begun() -> None:
    aside, free = Aside(), Event()
    begun = asyncio.create_task(aside.run(partial(hold, free)))
    await asyncio.sleep(0)
    body = bytearray(b"{}\n" * (JUDGED_LINES + 1))
    waiting = [asyncio.create_task(decoded(FEED, bytes(body), NDJSON, {}, aside)) for _ in range(20)]
    for _ in range(3):
        await asyncio.sleep(0)
    for task in (begun, *waiting):
        task.cancel()
    await asyncio.wait(waiting)
    went, ended = all(task.cancelled() for task in waiting), begun.done()
    free.set()
    assert went, "they go at once"
    assert not ended, "what has begun ends first"
    await asyncio.wait([begun])
    assert begun.cancelled()
    assert len((await decoded(FEED, lines(JUDGED_LINES, "odd\nodd"), NDJSON, {}, aside)).faults) == 2
    aside.close()
