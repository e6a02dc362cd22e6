"""The HTTP sink: one POST of NDJSON for each batch, which its receiver can recognise when it comes again.

The store cannot tell how far it is, so the journal's memory of the last answer counts, and a batch whose answer was
lost is sent again under the same Idempotency-Key. When to try again is decided by delivery.
"""

from __future__ import annotations

import gzip
import os
from collections.abc import Sequence
from functools import partial
from pathlib import Path
from typing import Literal
from urllib.parse import quote

from ..core.columns import Batch, Lane
from ..errors import SinkRefused, SinkRetry
from ..ingest.formats import NDJSON
from ..ports import Clock, Lines
from .ndjson import lane_lines
from .posting import ANSWER_BYTES_AT_MOST, SHOWN_CHARACTERS, Answered, Poster, shown_url
from .repairs import Repair
from .retry_after import retry_after_s
from .rows import LANES, one_lane
from .worker import OwnThread

GZIP_LEVEL = 1  # 5,000 events of 160 bytes: 3.5 ms to 22 %; level 6 takes 12 ms to 16 %

# 4xx that say nothing about the batch itself. 408 and 429: RFC 9110, 15.5.9, and RFC 6585; try again. 409: the
# Idempotency-Key draft has it answered while the first request under the same key is still at work. 425: RFC 8470, "too
# early", asks for a repeat. 401 and 407: RFC 9110 speaks of the credentials, which are read anew from their file.
TRIED_AGAIN = (401, 407, 408, 409, 425, 429)


class HttpSink:
    """Takes the ordered and the late lane of one feed to a URL, at least once, under a key that tells a repeat.

    Headers of each request: `Idempotency-Key: "river-gauges-ordered-42"` (a structured-field string: the quotes are
    part of it), `Strandline-Feed`, `Strandline-Lane`, `Strandline-Batch`. Lines are those of the NDJSON sink: events as
    they came, late ones wrapped with what is known of them. 2xx: taken, whatever the body says. 4xx, but for
    TRIED_AGAIN: refused for good. Everything else is tried again. A batch without events is not sent.
    """

    def __init__(
        self,
        url: str,
        feed: str,
        clock: Clock,
        *,
        late_url: str | None = None,
        headers: Sequence[tuple[str, str]] = (),
        token: str | None = None,
        token_file: str | os.PathLike[str] | None = None,
        compression: Literal["none", "gzip"] = "none",
        timeout_s: float = 30.0,
        answer_bytes_at_most: int = ANSWER_BYTES_AT_MOST,
    ) -> None:
        """`late_url` None: the same one. `token` or the content of `token_file` is sent as a bearer token."""
        self._urls: dict[Lane, str] = {"ordered": url, "late": late_url or url}
        self._feed, self._clock = quote(feed, safe=""), clock
        self._headers, self._compress = dict(headers), compression == "gzip"
        self._thread = OwnThread(f"http {feed}")
        self._poster = Poster(
            self._thread,
            timeout_s=timeout_s,
            token=token or "",
            token_file=None if token_file is None else Path(token_file),
            answer_bytes_at_most=answer_bytes_at_most,
        )
        self._reached: dict[Lane, int] = {}

    @property
    def lanes(self) -> tuple[Lane, ...]:
        """Ordered and late."""
        return LANES

    @property
    def flush_after_s(self) -> float:
        """Nothing waits for a flush."""
        return 0.0

    async def open(self) -> dict[Lane, int]:
        """Ask nothing of the receiver, which cannot tell a position. Raises SinkRetry where the token is not there."""
        await self._poster.authorization()
        self._reached = {}
        return {}

    async def take(self, batches: Sequence[Batch], lines: Lines) -> dict[Lane, int]:
        """Send batches of one lane, one after the other. Raises SinkRetry and SinkRefused.

        After an error those that were answered before it are skipped when they are offered again.
        """
        one_lane(batches)
        for batch in batches:
            if batch.number > self._reached.get(batch.lane, 0):
                if len(batch):
                    await self._send(batch, await self._thread.run(partial(self._body, batch, lines)))
                self._reached[batch.lane] = batch.number
        return dict(self._reached)

    async def repair(self, repair: Repair) -> None:
        """Send one repair batch to the late events' URL. Raises SinkRetry and SinkRefused."""
        body = await self._thread.run(lambda: self._packed(repair.ndjson()))
        answered = await self._poster.post(self._urls["late"], body, self._headers_of("repair", repair.number))
        if not 200 <= answered.status < 300:
            self._judge("repair", repair.number, self._urls["late"], answered)

    async def flush(self, lines: Lines) -> dict[Lane, int]:
        """Everything that was taken was answered already."""
        return {}

    async def close(self) -> None:
        """Close the connections, after what still runs."""
        await self._poster.close()
        await self._thread.close(lambda: None)

    # ---- one batch --------------------------------------------------------------------------------------------------

    def _body(self, batch: Batch, lines: Lines) -> bytes:
        """In the thread."""
        return self._packed(lane_lines(batch, lines))

    def _packed(self, block: bytes) -> bytes:
        return gzip.compress(block, GZIP_LEVEL, mtime=0) if self._compress else block

    async def _send(self, batch: Batch, body: bytes) -> None:
        url = self._urls[batch.lane]
        answered = await self._poster.post(url, body, self._headers_of(batch.lane, batch.number))
        if not 200 <= answered.status < 300:
            self._judge(batch.lane, batch.number, url, answered)

    def _headers_of(self, lane: str, number: int) -> dict[str, str]:
        own = {
            "Content-Type": NDJSON,
            "Idempotency-Key": f'"{self._feed}-{lane}-{number}"',
            "Strandline-Feed": self._feed,
            "Strandline-Lane": lane,
            "Strandline-Batch": str(number),
        }
        return self._headers | own | ({"Content-Encoding": "gzip"} if self._compress else {})

    def _judge(self, lane: str, number: int, url: str, answered: Answered) -> None:
        """Raise what an answer without success means."""
        status = answered.status
        told = f"{shown_url(url)} answered batch {number} of lane {lane} with {answered.told}"
        if 300 <= status < 400:
            location = answered.headers.get("Location", "")[:SHOWN_CHARACTERS]
            raise SinkRetry(f"{told}; redirects are not followed: name the address {location!a} itself")
        if 400 <= status < 500 and status not in TRIED_AGAIN:
            raise SinkRefused(told, [number])
        raise SinkRetry(told, retry_after_s(answered.headers.get("Retry-After"), self._clock.now_ns()))
