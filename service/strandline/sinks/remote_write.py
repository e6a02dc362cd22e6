"""The remote-write sink: values of events as samples of series, in order, to a receiver of remote writes 1.0.

What an answer means is decided here; which samples of a refused request are at fault is found out by
`remote_write_settling`, the order of things is `remote_write_sending`, and when to try again is decided by delivery.
"""

from __future__ import annotations

import os
from collections import Counter
from collections.abc import Sequence
from pathlib import Path

from ..core.columns import Batch, Lane
from ..errors import SinkRefused, SinkRetry
from ..ports import Clock, Lines
from .posting import Answered, Poster, shown_url
from .remote_write_progress import Progress, ProgressFile
from .remote_write_samples import MS_NS, Group, SampleMaker
from .remote_write_sending import LaneSender
from .remote_write_series import REASONS, Pairs, SeriesRule
from .remote_write_settling import PERMANENT, Settlement
from .remote_write_wire import CONTENT_HEADERS, request_body
from .repairs import Repair
from .retry_after import SECOND_NS, http_date_ns, retry_after_s
from .rows import LANES, one_lane
from .worker import OwnThread

SAMPLES_AT_MOST = 2_000
AHEAD_AT_MOST_S = 300.0
TIMEOUT_S = 30.0


class RemoteWriteSink:
    """Sends one feed's values to a receiver of remote writes 1.0, in order, and tells which it refused.

    Each event gives one sample of each series that has a number in it; its time is the event's in ms, rounded down.
    `take` answers once the receiver has taken every sample, or is known to refuse it for ever. Refusals raise
    SinkRefused with the rows of the events concerned, and only those. Late events, and repairs, go in requests of their
    own, for a receiver with an out-of-order window. `path` is a file of the sink's own, with the position reached,
    which the sinks of several feeds may share.

    Exact for a receiver that stores no part of a request that it refuses, as long as nobody else writes the same
    series: nothing is lost, and nothing refused is told as stored. Where that does not hold, or where a process ends
    while it tells the samples of a refused request apart, some that were stored may be told as refused.
    """

    def __init__(
        self,
        url: str,
        feed: str,
        clock: Clock,
        series: Sequence[SeriesRule],
        path: Path,
        *,
        external_labels: Pairs = (),
        token: str | None = None,
        token_file: str | os.PathLike[str] | None = None,
        timeout_s: float = TIMEOUT_S,
        samples_at_most: int = SAMPLES_AT_MOST,
        ahead_at_most_s: float = AHEAD_AT_MOST_S,
    ) -> None:
        self._url, self._clock, self._ahead_ns = url, clock, round(ahead_at_most_s * SECOND_NS)
        self._maker = SampleMaker(series, external_labels)
        self._rows_at_most = max(1, samples_at_most // len(series))
        self._thread = OwnThread(f"remote write {feed}")
        file = None if token_file is None else Path(token_file)
        self._poster = Poster(self._thread, timeout_s=timeout_s, token=token or "", token_file=file)
        self._file = ProgressFile(path, feed)
        self._senders: dict[Lane, LaneSender] = {}
        self._counts: Counter[str] = Counter()
        self._receiver_behind_ns = 0

    @property
    def lanes(self) -> tuple[Lane, ...]:
        """Ordered and late."""
        return LANES

    @property
    def flush_after_s(self) -> float:
        """Nothing waits for a flush."""
        return 0.0

    def counts(self) -> dict[str, int]:
        """Samples by reason, since the start of the process."""
        return {reason: self._counts[reason] for reason in REASONS}

    async def open(self) -> dict[Lane, int]:
        """Read the position reached; the receiver is not asked. Errors as for `Database.transaction`, and the token's.

        A lane with refusals that nobody may keep yet tells no position: then they are offered again, if so.
        """
        await self._poster.authorization()
        found = await self._file.read()
        for lane in LANES:
            self._senders[lane] = LaneSender(
                lane,
                found.get(lane, Progress()),
                self._file,
                self._counts,
                settle=self._settle,
                latest_ms=self._latest_ms,
                rows_at_most=self._rows_at_most,
            )
        return {lane: found[lane].reached for lane in LANES if lane in found and not found[lane].refused}

    async def take(self, batches: Sequence[Batch], lines: Lines) -> dict[Lane, int]:
        """Send batches of one lane. Raises SinkRetry, SinkRefused, and errors as for `Database.transaction`.

        After SinkRetry the next take goes on where this one stopped.
        """
        one_lane(batches)
        if not batches:
            return {}
        sender = self._senders[batches[0].lane]
        await sender.forget_refused(batches[0].number)  # delivery offers again what is kept nowhere
        fresh = [batch for batch in batches if batch.number > sender.progress.reached]
        if fresh:
            group = await self._thread.run(lambda: self._maker.group(fresh, lines))
            await self._ask_time(group)
            await sender.send(group)
        self._raise_refused(sender.progress, batches)
        return {batches[0].lane: sender.progress.reached}

    async def flush(self, lines: Lines) -> dict[Lane, int]:
        """Everything that was taken is settled."""
        return {}

    async def repair(self, repair: Repair) -> None:
        """Send late events once more. Raises SinkRetry, and SinkRefused where the receiver never takes one of them.

        A receiver with a window takes a sample that it holds already without a word, so a repeat does no harm.
        """
        group = await self._thread.run(lambda: self._maker.repair(repair))
        refused: Counter[str] = Counter()
        for row in range(0, group.rows, self._rows_at_most):
            samples, faults = group.between(row, row + self._rows_at_most)
            settlement = Settlement(samples, self._latest_ms(), in_order=False, doubtful=False)
            await self._settle(settlement)
            settlement.finish()
            self._counts.update(settlement.counts() + Counter(reason for _, reason in faults))
            refused.update(settlement.refusals().values())
        if refused:
            raise SinkRefused(self._never(refused), [repair.number])

    async def close(self) -> None:
        """Close the connection and the file, after what still runs."""
        await self._poster.close()
        await self._file.close()
        await self._thread.close(lambda: None)

    def check(self) -> None:
        """Assert that what is known of each lane fits together."""
        for sender in self._senders.values():
            sender.check()

    def _raise_refused(self, progress: Progress, batches: Sequence[Batch]) -> None:
        rows = {batch.number: progress.refused.get(batch.number, {}) for batch in batches}
        rows = {number: reasons for number, reasons in rows.items() if reasons}
        if rows:
            told = Counter(reason for reasons in rows.values() for reason in reasons.values())
            parts = {number: sorted(reasons) for number, reasons in rows.items()}
            raise SinkRefused(self._never(told), list(rows), parts)

    def _never(self, events: Counter[str]) -> str:
        shown = ", ".join(f"{count} {reason}" for reason, count in sorted(events.items()))
        return f"{shown_url(self._url)} will never take samples of {events.total()} events ({shown})"

    # ---- one request ------------------------------------------------------------------------------------------------

    def _latest_ms(self) -> int:
        """The latest time to be sent now, by our clock or the receiver's as its answers tell it, whichever is behind.

        A receiver may take a sample of tomorrow, and after it nothing else of any series.
        """
        return (self._clock.now_ns() - self._receiver_behind_ns + self._ahead_ns) // MS_NS

    async def _ask_time(self, group: Group) -> None:
        """Where samples would be held to be of the future by the receiver's clock alone, ask for it once more.

        A clock that was behind may have been set since, and no request would go to hear of it. Raises SinkRetry.
        """
        if self._receiver_behind_ns and any(sample.time_ms > self._latest_ms() for sample in group.samples):
            self._note_time(await self._poster.post(self._url, request_body([]), CONTENT_HEADERS))

    def _note_time(self, answered: Answered) -> None:
        now_ns = self._clock.now_ns()
        date_ns = http_date_ns(answered.headers.get("Date", ""), now_ns)
        if date_ns is not None:  # whole seconds, rounded down
            self._receiver_behind_ns = max(0, now_ns - date_ns - SECOND_NS)

    async def _settle(self, settlement: Settlement) -> None:
        """Send what is pending until nothing is. Raises SinkRetry."""
        while settlement.pending is not None:
            body = await self._thread.run(settlement.body)
            try:
                answered = await self._poster.post(self._url, body, CONTENT_HEADERS)
            except BaseException:  # a cancelled request may have been taken too
                settlement.lost()
                raise
            self._judge(settlement, answered)

    def _judge(self, settlement: Settlement, answered: Answered) -> None:
        """Tell the settlement what an answer means. Raises SinkRetry for one that says nothing about the samples."""
        self._note_time(answered)
        refusal = _refusal(answered)
        if 200 <= answered.status < 300:
            settlement.stored()
        elif refusal is not None:
            settlement.refused(refusal)
        elif answered.status != 413 or not settlement.too_large():
            if answered.status >= 500:
                settlement.lost()
            told = f"{shown_url(self._url)} answered {answered.told}"
            raise SinkRetry(told, retry_after_s(answered.headers.get("Retry-After"), self._clock.now_ns()))


def _refusal(answered: Answered) -> str | None:
    """The reason for which the request will never be taken as it is; None for any other answer.

    Prometheus says 400, but 500 where a sample lies before its out-of-order window: the text tells, not the status.
    """
    if answered.status not in (400, 500):
        return None
    text = answered.content.decode(errors="replace").lower()
    return next((reason for said, reason in PERMANENT.items() if said in text), None)
