"""What becomes of each sample of one request: which of them the receiver took, which it never will, and why.

A receiver refuses a whole request for one sample, stores nothing of it, and does not say which. So a refused request is
halved by time, the older half first, until single samples stand there: none that could be stored is left out, and none
is sent after a later one of its series, which would make it unstorable. A request of n samples with one bad one takes
some 2 log2(n) further requests; one of n bad ones 2n - 2.

Pure: no HTTP, no clock, no store. Whoever owns a `Settlement` sends `body()` and says what came of it.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterable, Sequence
from dataclasses import dataclass

from .remote_write_samples import Sample, Series
from .remote_write_wire import request_body, series_bytes

STORED, SAME = "stored", "same"  # fates without a reason: taken; or not sent, since its like is sent or was
EQUAL_TIME, FUTURE, ALREADY_THERE = "equal_time", "future", "already_there"
OUT_OF_ORDER = "out_of_order"
# What a receiver says of samples that it will never take (Prometheus 2.42, measured) -> the reason.
PERMANENT: dict[str, str] = {
    "out of order sample": OUT_OF_ORDER,
    "duplicate sample for timestamp": "duplicate_timestamp",
    "out of bounds": "out_of_bounds",
    "too old sample": "too_old",
}
REFUSED = (FUTURE, *PERMANENT.values())  # fates of samples whose events must be kept elsewhere


@dataclass(slots=True)
class Part:
    """Samples that are sent together, by index and in order of time.

    `doubtful`: the receiver may hold them, since no answer came. `tails_of`: these are the last samples of each series
    of another part, sent alone to learn whether all of that is there.
    """

    indices: Sequence[int]
    doubtful: bool = False
    tails_of: Part | None = None


class Settlement:
    """The samples of one request on their way.

    `in_order` tells that they are of the ordered lane, in which the last sample of a series that was taken tells what
    the receiver holds. `doubtful`: the same samples may have been sent before, by a process that is gone. Samples later
    than `latest_ms` are not sent.
    """

    def __init__(self, samples: Iterable[Sample], latest_ms: int, *, in_order: bool, doubtful: bool) -> None:
        self.samples = list(samples) if in_order else sorted(samples, key=lambda sample: sample.time_ms)
        self.fates: list[str | None] = [None] * len(self.samples)
        self._in_order = in_order
        self._finished = False
        for index, sample in enumerate(self.samples):
            if sample.time_ms > latest_ms:
                self.fates[index] = FUTURE
        self._resolve_equal_times()
        left = [index for index, fate in enumerate(self.fates) if fate is None]
        self._parts = [Part(left, doubtful)] if left else []
        self._lost: list[Sequence[int]] = [left] if doubtful else []  # what went together without an answer

    def _resolve_equal_times(self) -> None:
        """One value for each time of a series: the last to come, unless another was sent before."""
        chosen: dict[tuple[Series, int], float] = {}
        for index in reversed(range(len(self.samples))):
            _, series, time_ms, value = self.samples[index]
            if self.fates[index] is not None:
                continue
            if self._in_order and series.last_ms == time_ms:
                self.fates[index] = SAME if value == series.last_value else EQUAL_TIME
            elif (series, time_ms) in chosen:
                self.fates[index] = SAME if value == chosen[series, time_ms] else EQUAL_TIME
            else:
                chosen[series, time_ms] = value

    # ---- what to send, and what came of it ------------------------------------------------------------------------

    @property
    def pending(self) -> Part | None:
        """What is to be sent next; None when all is settled."""
        return self._parts[-1] if self._parts else None

    def body(self) -> bytes:
        """The request that carries what is pending."""
        columns: dict[Series, tuple[list[int], list[float]]] = {}
        for index in self._parts[-1].indices:
            _, series, time_ms, value = self.samples[index]
            times, values = columns.setdefault(series, ([], []))
            times.append(time_ms)
            values.append(value)
        return request_body(series_bytes(series.labels, *column) for series, column in columns.items())

    def stored(self) -> None:
        """The receiver took it."""
        part = self._parts.pop()
        self._settle(part.indices, STORED)
        if part.tails_of is not None:
            tails = set(part.indices)
            self._settle([index for index in part.tails_of.indices if index not in tails], ALREADY_THERE)

    def refused(self, reason: str) -> None:
        """The receiver will never take it as it is; `reason` is one of PERMANENT's."""
        part = self._parts.pop()
        if part.tails_of is not None:
            self._halve(part.tails_of)
        elif len(part.indices) == 1:
            self._settle(part.indices, reason)
        elif part.doubtful and reason == OUT_OF_ORDER and (tails := self._tails(part)):
            self._parts.append(Part(tails, True, part))
        else:
            self._halve(part)

    def lost(self) -> None:
        """No answer came, or one that says nothing: the receiver may hold it."""
        part = self._parts[-1]
        if not part.doubtful or part.tails_of is not None:
            self._lost.append(part.indices)
        part.doubtful = True

    def too_large(self) -> bool:
        """The receiver wants smaller requests. False if there is none that is smaller."""
        whole = self._parts[-1].tails_of or self._parts[-1]
        if len(whole.indices) == 1:
            return False
        self._parts.pop()
        self._halve(whole)
        return True

    def _halve(self, part: Part) -> None:
        middle = len(part.indices) // 2
        self._parts.append(Part(part.indices[middle:]))
        self._parts.append(Part(part.indices[:middle]))

    def _tails(self, part: Part) -> list[int]:
        """The last sample of each series, where it is safe to send these before those in front of them.

        It is where the receiver is known to have held nothing as late as the part's first samples before they were
        sent: then a refusal as out of order tells that they were taken. Nobody else writes these series.
        """
        if not self._in_order:
            return []
        last: dict[Series, int] = {}
        for index in part.indices:
            _, series, time_ms, _ = self.samples[index]
            if series not in last and (series.last_ms is None or series.last_ms >= time_ms):
                return []
            last[series] = index
        return sorted(last.values()) if len(last) < len(part.indices) else []

    def _settle(self, indices: Iterable[int], fate: str) -> None:
        for index in indices:
            self.fates[index] = fate

    # ---- the end ----------------------------------------------------------------------------------------------------

    def finish(self) -> None:
        """All is settled: judge what was in doubt, and remember what the receiver holds. A second call does nothing."""
        if not self._finished:
            self._finished = True
            self._judge_doubts()
            for (_, series, time_ms, value), fate in zip(self.samples, self.fates, strict=True):
                if fate == STORED and self._in_order:
                    series.last_ms, series.last_value = time_ms, value

    def _judge_doubts(self) -> None:
        """A lost request that was taken shows one pattern: of each series all but the last sample are refused as out of
        order, and the last, which the receiver holds with the same value, is taken again without effect.

        Each lost request is judged by itself: pieces of one settlement may be lost one after the other, and that all
        of the earlier piece was taken again says nothing about the later one.
        """
        taken = (OUT_OF_ORDER, ALREADY_THERE)
        for lost in self._lost:
            by_series: dict[Series, list[int]] = {}
            for index in lost:
                by_series.setdefault(self.samples[index].series, []).append(index)
            for *before, last in by_series.values():
                if self.fates[last] == STORED and all(self.fates[index] in taken for index in before):
                    self._settle(before, ALREADY_THERE)

    def counts(self) -> Counter[str]:
        """How many samples came to a fate that has a reason."""
        return Counter(fate for fate in self.fates if fate is not None and fate not in (STORED, SAME))

    def refusals(self) -> dict[int, str]:
        """Row and reason of each event with a sample that must be kept elsewhere."""
        pairs = zip(self.samples, self.fates, strict=True)
        return {sample.row: fate for sample, fate in pairs if fate is not None and fate in REFUSED}

    def check(self) -> None:
        """Assert that each sample is either settled or in exactly one part, and each series in order of time."""
        waiting = [index for part in reversed(self._parts) for index in (part.tails_of or part).indices]
        assert len(set(waiting)) == len(waiting)
        assert all((fate is None) == (index in set(waiting)) for index, fate in enumerate(self.fates))
        assert waiting == sorted(waiting)
        latest: dict[Series, int] = {}
        for _, series, time_ms, _ in self.samples:
            assert latest.setdefault(series, time_ms) <= time_ms
            latest[series] = time_ms
