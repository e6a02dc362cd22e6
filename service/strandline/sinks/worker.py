"""One thread that belongs to one store: blocking calls run there, one after the other, never on the loop.

Nothing about any store lives here.
"""

from __future__ import annotations

import asyncio
from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from typing import TypeVar

Result = TypeVar("Result")


class OwnThread:
    """A thread that starts with the first call. A call whose awaiting was cancelled still runs to its end."""

    def __init__(self, name: str) -> None:
        self._executor = ThreadPoolExecutor(max_workers=1, thread_name_prefix=name)
        self._closed = False

    async def run(self, work: Callable[[], Result]) -> Result:
        """Run `work` after everything asked before, and give back what it returns or raises."""
        return await asyncio.get_running_loop().run_in_executor(self._executor, work)

    async def close(self, last_work: Callable[[], None]) -> None:
        """Run `last_work` after everything asked before, then let the thread end. A second call does nothing."""
        if self._closed:
            return
        self._closed = True
        try:
            await self.run(last_work)
        finally:
            self._executor.shutdown(wait=False)
