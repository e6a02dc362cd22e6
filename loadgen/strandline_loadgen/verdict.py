"""The verdict on a sending: lets the feed go, waits until its sinks have all of it, and has the store's rows judged.

Only published HTTP and the published forms of stores are used. The store must hold nothing else of this feed.
"""

from __future__ import annotations

import asyncio
import sqlite3
from pathlib import Path
from typing import Any

import aiohttp
import msgspec
from yarl import URL

from .checker import judge
from .driver import Delivery, Target
from .evidence import Verdict
from .stores import Reading, read_ndjson, read_sqlite
from .trace import Int64s, Trace

SETTLED_S_AT_MOST = 120.0
POLL_S = 0.1


async def settle(target: Target) -> None:
    """Drain the feed and wait until no event is held or waits for a sink. Raises OSError, TimeoutError."""
    address, caller = URL(target.url) / "v1" / "feeds" / target.feed, target.caller
    connector = aiohttp.TCPConnector(ssl=caller.context or True)
    async with (
        aiohttp.ClientSession(connector=connector, headers=caller.headers) as session,
        asyncio.timeout(SETTLED_S_AT_MOST),
    ):
        try:
            async with session.post(address / "drain") as answer:
                if answer.status >= 400:
                    raise OSError(f"the drain was refused: {answer.status} {(await answer.text())[:300]}")
            while not await _is_settled(session, address):
                await asyncio.sleep(POLL_S)
        except aiohttp.ClientError as error:
            raise OSError(f"the feed could not be drained: {error}") from error


async def _is_settled(session: aiohttp.ClientSession, address: URL) -> bool:
    async with session.get(address) as answer:
        if answer.status != 200:
            return False
        seen: dict[str, Any] = msgspec.json.decode(await answer.read())
    lanes = [lane for sink in seen["sinks"].values() for lane in sink["lanes"].values()]
    return not seen["ledger"]["buffered"] and not any(lane["waiting_events"] for lane in lanes)


def judged(store: Path, feed: str, trace: Trace, bounds: Int64s, done: Delivery) -> Verdict:
    """The verdict on what a SQLite file or a folder of NDJSON files holds. Raises ValueError, OSError."""
    reading = Reading(trace.source_names)
    read = read_ndjson if store.is_dir() else read_sqlite
    told = {"accepted": done.sums["accepted"], "late": done.sums["late"]}
    try:
        lanes = [read(store, feed, lane, reading) for lane in ("ordered", "late")]
        return judge(
            done.evidence(trace, bounds), *lanes,
            quarantined=done.sums["quarantined"], duplicates=done.sums["duplicate"], told=told,
        )  # fmt: skip
    except sqlite3.Error as error:
        raise OSError(f"{store} cannot be read: {error}") from error
