"""Where a body is decoded: on the loop, or in the one thread that is kept for what would hold the loop up.

A faulty line costs 3 to 60 µs and a limit on the whole body leaves room for 100,000 of them, or for 64 MiB in one line:
seconds, in which no health check would be answered. Such bodies are decoded aside, one at a time, with sources numbered
by themselves; their numbers in the feed's own table are put in on the loop, so that nothing awaits between the table
and the core.
"""

from __future__ import annotations

import asyncio
from collections.abc import Mapping
from concurrent.futures import ThreadPoolExecutor
from dataclasses import replace

import numpy as np

from ..core.columns import Arrival
from .decode import Decoder
from .formats import FORMATS

# What is done on the loop: up to some 100 ms where everything is hostile, 1 to 12 ms where it is not (measured).
JUDGED_BYTES, JUDGED_LINES = 256 * 1024, 2_000


def make_thread() -> ThreadPoolExecutor:
    """The thread. A single one: many would share the same interpreter lock, and each would slow the loop down."""
    return ThreadPoolExecutor(1, "decode")


async def decoded(
    decoder: Decoder, body: bytes, media_type: str, table: Mapping[str, int], thread: ThreadPoolExecutor
) -> Arrival:
    """What `decoder.decode` answers, without holding the loop up. `table` may grow meanwhile: it is read last."""
    loop = asyncio.get_running_loop()
    if media_type in FORMATS and len(body) > FORMATS[media_type].loop_bytes:
        return numbered(await loop.run_in_executor(thread, decoder.decode, body, media_type, {}), table)
    lines = decoder.split(body, media_type)
    arrival = decoder.at_once(lines, table)
    if arrival is not None:
        return arrival
    if len(lines.payload) <= JUDGED_BYTES and len(lines.ends) <= JUDGED_LINES:
        return decoder.line_by_line(lines, table)
    return numbered(await loop.run_in_executor(thread, decoder.line_by_line, lines, {}), table)


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
