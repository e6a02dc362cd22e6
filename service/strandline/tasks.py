"""Tasks of the loop: ending one, and waiting for the first of several. What they do is their owners' business."""

from __future__ import annotations

import asyncio
from collections.abc import Awaitable
from typing import Any


async def ended(task: asyncio.Future[Any]) -> None:
    """Cancel it and wait for its end; awaiting it itself would swallow a cancelling of the one who waits."""
    task.cancel()
    await asyncio.wait([task])
    if not task.cancelled():
        task.exception()  # looked at, so that asyncio does not report it as forgotten


async def first_of(*calls: Awaitable[Any]) -> None:
    """Wait for the first of these to end; the others are cancelled, and their ends awaited."""
    tasks = [asyncio.ensure_future(call) for call in calls]
    try:
        await asyncio.wait(tasks, return_when=asyncio.FIRST_COMPLETED)
    finally:
        for task in tasks:
            await ended(task)
