"""Where a body is decoded: on the loop, or in the one thread that is kept for what would hold the loop up.

A faulty line costs 3 to 60 µs and a limit on the whole body leaves room for 100,000 of them, or for 64 MiB in one line:
seconds, in which no health check would be answered. Such bodies are decoded aside, one at a time, with sources numbered
by themselves; their numbers in the feed's own table are put in on the loop, so that nothing awaits between the table
and the core.
"""

from __future__ import annotations

import asyncio
import contextlib
from collections.abc import Callable, Mapping
from concurrent.futures import ThreadPoolExecutor
from dataclasses import replace
from functools import partial

import numpy as np

from ..core.columns import Arrival
from .decode import Decoder
from .formats import FORMATS, are_as_sent

# What is done on the loop: up to some 100 ms where everything is hostile, 1 to 12 ms where it is not (measured).
JUDGED_BYTES, JUDGED_LINES = 256 * 1024, 2_000


class Aside:
    """The thread, and the turn to use it. Only one: many would share the interpreter's lock and slow the loop down."""

    def __init__(self) -> None:
        self._thread = ThreadPoolExecutor(1, "decode")
        self._turn = asyncio.Lock()

    async def run(self, work: Callable[[], Arrival]) -> Arrival:
        """Wait for the turn, then for the work.

        Who is cancelled still waits for work that has begun: until it ends it needs its body's place in memory.
        """
        async with self._turn:
            future = asyncio.get_running_loop().run_in_executor(self._thread, work)
            try:
                return await asyncio.shield(future)
            except asyncio.CancelledError:
                await _settled(future)
                raise

    def close(self) -> None:
        """Take no more work."""
        self._thread.shutdown(wait=False, cancel_futures=True)


async def _settled(future: asyncio.Future[Arrival]) -> None:
    while not future.done():
        with contextlib.suppress(asyncio.CancelledError):
            await asyncio.wait([future])
    if not future.cancelled():
        future.exception()  # nobody wants to know it any more


async def decoded(decoder: Decoder, body: bytes, media_type: str, table: Mapping[str, int], aside: Aside) -> Arrival:
    """What `decoder.decode` answers, without holding the loop up. `table` may grow meanwhile: it is read last."""
    if media_type in FORMATS and len(body) > FORMATS[media_type].loop_bytes:
        return numbered(await aside.run(partial(decoder.decode, body, media_type, {})), table)
    arrival = decoder.scanned(body, media_type, table)
    if arrival is not None:
        return arrival
    lines = decoder.split(body, media_type)
    arrival = decoder.at_once(lines, table, was_scanned=are_as_sent(lines, body, media_type))
    if arrival is not None:
        return arrival
    if len(lines.payload) <= JUDGED_BYTES and len(lines.ends) <= JUDGED_LINES:
        return decoder.line_by_line(lines, table)
    return numbered(await aside.run(partial(decoder.line_by_line, lines, {})), table)


def numbered(arrival: Arrival, table: Mapping[str, int]) -> Arrival:
    """An arrival that was decoded for an empty table, as it would be for this one."""
    numbers: list[int] = []
    new: list[str] = []
    for name in arrival.new_sources:
        number = table.get(name)
        if number is None:
            number = len(table) + len(new)
            new.append(name)
        numbers.append(number)
    return replace(arrival, sources=np.array(numbers, np.uint32)[arrival.sources], new_sources=new)
