"""An asyncio loop whose time and whose threads belong to whoever drives it: the same choices give the same run.

What the service hands to a thread becomes a `Job`; the driver decides when it runs and when the loop hears of it, so a
sync can end late, after other things, or never. Nothing waits here and nothing runs by itself. No service, no disk.
"""

from __future__ import annotations

import asyncio
import selectors
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from functools import partial
from types import SimpleNamespace
from typing import Any

TURNS_AT_MOST = 10_000


class PowerCut(KeyboardInterrupt):
    """The process dies here. Of this kind because asyncio lets nothing else out of a task at once."""


class _IdleSelector(selectors.SelectSelector):
    """Never waits: where the loop would, it stops."""

    def __init__(self) -> None:
        super().__init__()
        self.stop: Callable[[], None] = lambda: None
        self.turns = 0

    def select(self, timeout: float | None = None) -> list[Any]:
        self.turns += 1
        if self.turns > TURNS_AT_MOST:
            raise AssertionError("the loop does not come to rest")
        if timeout is None or timeout > 0:
            self.stop()
        return []


@dataclass(eq=False, slots=True)
class Job:
    """Work for a thread: those of one key run one after the other, those of key None in any order."""

    key: object
    work: Callable[[], Any]
    future: asyncio.Future[Any] | None
    outcome: Callable[[], Any] | None = None  # once it has run: gives the result, or raises

    def run(self) -> None:
        """Do it. PowerCut passes through: the process dies in the middle."""
        try:
            result = self.work()
        except PowerCut:
            raise
        except BaseException as error:
            self.outcome = partial(_raise, error)
        else:
            self.outcome = lambda: result

    def tell(self) -> None:
        """Let the loop hear of it."""
        assert self.outcome is not None
        if self.future is None or self.future.done():
            return
        try:
            result = self.outcome()
        except BaseException as error:
            self.future.set_exception(error)
        else:
            self.future.set_result(result)


def _raise(error: BaseException) -> None:
    raise error


class SimLoop(asyncio.SelectorEventLoop):
    """`settle` runs what is ready; `jobs` have yet to run, `done` have yet to be told of."""

    def __init__(self, seconds: Callable[[], float]) -> None:
        self._idle = _IdleSelector()
        super().__init__(self._idle)
        self._idle.stop = self.stop
        self._seconds = seconds
        self.jobs: list[Job] = []
        self.done: list[Job] = []
        self.complaints: list[str] = []
        self.set_exception_handler(self._complain)

    def time(self) -> float:
        return self._seconds()

    def run_in_executor(  # type: ignore[override]
        self, executor: Any, func: Callable[..., Any], *args: Any
    ) -> asyncio.Future[Any]:
        future: asyncio.Future[Any] = self.create_future()
        self.jobs.append(Job(executor, partial(func, *args), future))
        return future

    def settle(self) -> None:
        """Run everything that can run without time passing, a job ending or a future being set from outside."""
        self._idle.turns = 0
        self.run_forever()

    def runnable(self) -> list[Job]:
        """Jobs that a thread could be running now."""
        busy = {id(job.key) for job in self.done if job.key is not None}
        found = []
        for job in self.jobs:
            if job.key is None or id(job.key) not in busy:
                found.append(job)
            if job.key is not None:
                busy.add(id(job.key))
        return found

    def run(self, job: Job) -> None:
        """Run a job; the loop does not hear of it yet."""
        self.jobs.remove(job)
        job.run()
        self.done.append(job)

    def tell(self, job: Job) -> None:
        """Let the loop hear of a job that has run."""
        self.done.remove(job)
        job.tell()

    def work_off(self) -> None:
        """Run all jobs in their order, and tell, until there is none left."""
        self.settle()
        for _ in range(TURNS_AT_MOST):
            if not self.jobs and not self.done:
                return
            while self.done:
                self.tell(self.done[0])
            if self.jobs:
                self.run(self.runnable()[0])
            self.settle()
        raise AssertionError("there is no end of jobs")

    def kill(self) -> None:
        """The process is gone. Its tasks are ended; what they do while ending must reach nothing that lasts."""
        self.complaints = []
        for _ in range(20):
            self.jobs.clear()
            self.done.clear()
            tasks = asyncio.all_tasks(self)
            if not tasks:
                break
            for task in tasks:
                task.cancel()
            self.settle()
        self.set_exception_handler(lambda loop, context: None)
        self.close()

    def _complain(self, loop: asyncio.AbstractEventLoop, context: dict[str, Any]) -> None:
        error = context.get("exception")
        if not isinstance(error, PowerCut):
            self.complaints.append(f"{context['message']}: {error!r}")


class SimWorker:
    """Stands where a ThreadPoolExecutor of one thread would."""

    def __init__(self, max_workers: int = 1, thread_name_prefix: str = "") -> None:
        assert max_workers == 1, thread_name_prefix
        self._loop: SimLoop | None = None

    def submit(self, work: Callable[[], Any]) -> None:
        """Work that nobody waits for."""
        loop = asyncio.get_running_loop()
        assert isinstance(loop, SimLoop)
        self._loop = loop
        loop.jobs.append(Job(self, work, None))

    def shutdown(self, wait: bool = True) -> None:
        """Let what was handed over run to its end."""
        while self._loop is not None and (mine := [job for job in self._loop.jobs if job.key is self]):
            self._loop.run(mine[0])


@contextmanager
def swapped(holder: Any, name: str, value: Any) -> Iterator[None]:
    """An attribute of a module or class, replaced for a while."""
    before = holder.__dict__[name]
    setattr(holder, name, value)
    try:
        yield
    finally:
        setattr(holder, name, before)


def beside(module: Any, **replaced: Any) -> SimpleNamespace:
    """What the module offers, with some of it replaced."""
    return SimpleNamespace(**{**vars(module), **replaced})
