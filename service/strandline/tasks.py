"""Tasks of the loop: ending one, waiting for the first of several, and leaving room for others: turns, a thread.

What they do is their owners' business.
"""

from __future__ import annotations

import asyncio
import time
from collections.abc import Awaitable, Callable
from typing import Any, TypeVar

Result = TypeVar("Result")
TURN_EVERY_S = 0.01  # with a turn at each message a sync of a partition served 9 messages, not 38: 25 % more CPU time


class Turn:
    """For work that goes on and on without waiting: lets the loop do something else now and then, as leases need."""

    def __init__(self) -> None:
        self._due_s = 0.0

    async def give(self) -> None:
        """The first time, and after each hundredth of a second."""
        if time.monotonic() >= self._due_s:
            await asyncio.sleep(0)
            self._due_s = time.monotonic() + TURN_EVERY_S


async def ended(task: asyncio.Future[Any]) -> None:
    """Cancel it and wait for its end; awaiting it itself would swallow a cancelling of the one who waits."""
    task.cancel()
    await asyncio.wait([task])
    _look_at(task)


async def first_of(*calls: Awaitable[Any]) -> None:
    """Wait for the first of these to end; the others are cancelled, and their ends awaited."""
    tasks = [asyncio.ensure_future(call) for call in calls]
    try:
        await asyncio.wait(tasks, return_when=asyncio.FIRST_COMPLETED)
    finally:
        for task in tasks:
            await ended(task)


async def in_thread(work: Callable[[], Result]) -> Result:
    """What `work` returns, done in a thread. A cancelling waits until the thread is through with it.

    So whoever clears up after the cancelling does not do it beside the thread, and what the thread made is there.
    """
    doing = asyncio.ensure_future(asyncio.to_thread(work))
    try:
        return await asyncio.shield(doing)
    except asyncio.CancelledError:
        await through(doing)
        raise


async def through(task: asyncio.Future[Any]) -> None:
    """Wait for its end, which must come, whoever wants this cancelled meanwhile; its error is passed over."""
    while not task.done():
        try:
            await asyncio.wait([task])
        except asyncio.CancelledError:
            continue
    _look_at(task)


async def ended_at_last(task: asyncio.Future[Any], every_s: float = 1.0) -> None:
    """As `ended`, for what passes over some cancellings, as clients of brokers do: it is cancelled again and again."""
    while not task.done():
        task.cancel()
        try:
            await asyncio.wait([task], timeout=every_s)
        except asyncio.CancelledError:
            continue
    _look_at(task)


def _look_at(task: asyncio.Future[Any]) -> None:
    """At the error of one that has ended, so that asyncio does not report it as forgotten."""
    if not task.cancelled():
        task.exception()
