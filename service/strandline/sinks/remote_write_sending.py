"""One lane on its way to a receiver of remote writes: where it stands, what is sent next, what became of it.

How a request is sent and what an answer means is `remote_write`. Here is the order of things: what is to be sent is
written down first, then it is settled, and what became of it is durable before anything behind it is on its way.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Awaitable, Callable
from typing import NamedTuple

from ..core.columns import Lane
from .remote_write_progress import NOWHERE, Progress, ProgressFile
from .remote_write_samples import Group
from .remote_write_settling import Settlement

Settle = Callable[[Settlement], Awaitable[None]]


class _UnderWay(NamedTuple):
    """A request that was begun: its rows up to `end` of the group, counts of what cannot be sent, and the rest."""

    group: Group
    end: int
    faults: Counter[str]
    settlement: Settlement


class LaneSender:
    """Sends the groups of one lane. `counts` are shared with the sink's other lanes."""

    def __init__(
        self,
        lane: Lane,
        progress: Progress,
        file: ProgressFile,
        counts: Counter[str],
        *,
        settle: Settle,
        latest_ms: Callable[[], int],
        rows_at_most: int,
    ) -> None:
        """`settle` sends what is pending until nothing is; `latest_ms` is the latest time that may be sent now."""
        self.progress = progress
        self._lane, self._file, self._counts = lane, file, counts
        self._settle, self._latest_ms, self._rows_at_most = settle, latest_ms, rows_at_most
        self._under_way: _UnderWay | None = None

    async def send(self, group: Group) -> None:
        """Send the batches of a group from where the lane stands. They are those behind `progress.reached`, in order.

        Raises what `settle` raises, and errors as for `Database.transaction`; then the next call goes on from there.
        """
        row = group.row(self.progress.part)
        done: _UnderWay | None = None
        while row < group.rows:
            now = self._under_way if done is None else None
            if now is None:
                now = self._next(group, row, first=done is None)
                await self._put(group, row, now.end if now.settlement.pending else row, done)
                self._under_way = now
            await self._settle(now.settlement)
            now.settlement.finish()
            done, row = now, group.row(now.group.place(now.end))
        await self._put(group, row, row, done)

    def _next(self, group: Group, row: int, *, first: bool) -> _UnderWay:
        """The request that begins at a row; the first one is what the file says was on its way, if it says so."""
        sent = group.row(self.progress.sending) if first else 0
        end = sent if sent > row else min(row + self._rows_at_most, group.rows)
        samples, faults = group.between(row, end)
        in_order = self._lane == "ordered"
        settlement = Settlement(samples, self._latest_ms(), in_order=in_order, doubtful=sent > row)
        return _UnderWay(group, end, Counter(reason for _, reason in faults), settlement)

    async def _put(self, group: Group, row: int, sending: int, done: _UnderWay | None) -> None:
        """Make durable that all before `row` is settled, what became of `done`, and what is on its way."""
        whole = group.whole(row)
        reached = self.progress.reached if whole is None else whole
        place = group.place(row) if row else NOWHERE
        part = place if place[0] > reached else NOWHERE
        new = _refusals(done) if done else {}
        refused = {number: self.progress.refused.get(number, {}) | rows for number, rows in new.items()}
        on_its_way = group.place(sending) if sending > row else NOWHERE
        now = Progress(reached, part, on_its_way, self.progress.refused | refused)
        await self._write(now, new)
        if done is not None:
            self._counts.update(done.settlement.counts() + done.faults)
            self._under_way = None

    async def _write(self, now: Progress, new: dict[int, dict[int, str]], settled_below: int = 0) -> None:
        if now != self.progress:
            await self._file.write(self._lane, now, new, settled_below)
            self.progress = now

    async def forget_refused(self, below: int) -> None:
        """Refusals of batches below this number are kept elsewhere now. Errors as for `Database.transaction`."""
        left = {number: rows for number, rows in self.progress.refused.items() if number >= below}
        old = self.progress
        await self._write(Progress(old.reached, old.part, old.sending, left), {}, below)

    def check(self) -> None:
        """Assert that what is known of the lane fits together."""
        self.progress.check()
        if self._under_way is not None:
            self._under_way.settlement.check()


def _refusals(done: _UnderWay) -> dict[int, dict[int, str]]:
    """Reason by row by batch."""
    found: dict[int, dict[int, str]] = {}
    for row, reason in done.settlement.refusals().items():
        number, rows = done.group.place(row + 1)
        found.setdefault(number, {})[rows - 1] = reason
    return found
