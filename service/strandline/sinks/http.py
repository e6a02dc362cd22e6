"""The HTTP sink: one POST of NDJSON for each batch, which its receiver can recognise when it comes again.

The store cannot tell how far it is, so the journal's memory of the last answer counts, and a batch whose answer was
lost is sent again under the same Idempotency-Key. When to try again is decided by delivery.
"""

from __future__ import annotations

import gzip
import io
import os
from collections.abc import Sequence
from functools import partial
from pathlib import Path
from typing import Literal
from urllib.parse import quote

import aiohttp
from yarl import URL

from ..core.columns import Batch, Lane
from ..errors import SinkRefused, SinkRetry, StrandlineError
from ..ports import Clock, Lines
from .ndjson import late_lines
from .retry_after import retry_after_s
from .rows import one_lane
from .worker import OwnThread

LANES: tuple[Lane, ...] = ("ordered", "late")
MEDIA_TYPE = "application/x-ndjson"
GZIP_LEVEL = 1  # 5,000 events of 160 bytes: 3.5 ms to 22 %; level 6 takes 12 ms to 16 %
ANSWER_BYTES_AT_MOST = 64 * 1024
SHOWN_CHARACTERS = 300  # of an answer, in the refusal
CONNECT_WITHIN_S = 10.0

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
        self._headers = dict(headers or {})
        self._token, self._token_file = token, None if token_file is None else Path(token_file)
        self._compress, self._answer_bytes_at_most = compression == "gzip", answer_bytes_at_most
        self._timeout = aiohttp.ClientTimeout(total=timeout_s, sock_connect=min(timeout_s, CONNECT_WITHIN_S))
        self._thread = OwnThread(f"http {feed}")
        self._session: aiohttp.ClientSession | None = None
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
        await self._authorization()
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

    async def flush(self, lines: Lines) -> dict[Lane, int]:
        """Everything that was taken was answered already."""
        return {}

    async def close(self) -> None:
        """Close the connections, after what still runs."""
        session, self._session = self._session, None
        if session is not None:
            await session.close()
        await self._thread.close(lambda: None)

    # ---- one batch --------------------------------------------------------------------------------------------------

    def _body(self, batch: Batch, lines: Lines) -> bytes:
        """In the thread."""
        block = lines.ndjson(batch) if batch.lane == "ordered" else late_lines(batch, lines)
        return gzip.compress(block, GZIP_LEVEL, mtime=0) if self._compress else block

    async def _send(self, batch: Batch, body: bytes) -> None:
        if self._session is None:
            self._session = aiohttp.ClientSession(
                connector=aiohttp.TCPConnector(limit=1),
                timeout=self._timeout,
                cookie_jar=aiohttp.DummyCookieJar(),
                auto_decompress=False,  # an answer's body is only shown to people, and only its beginning
            )
        url = self._urls[batch.lane]
        headers = self._headers_of(batch) | await self._authorization()
        try:
            # A stream, not the bytes: aiohttp would hand them to the system in one piece, however many they are.
            async with self._session.post(url, data=io.BytesIO(body), headers=headers, allow_redirects=False) as answer:
                if 200 <= answer.status < 300:
                    await self._drain(answer)
                else:
                    await self._judge(batch, answer)
        except TimeoutError as error:
            raise SinkRetry(f"{self._shown(url)} did not answer in {self._timeout.total:g} s") from error
        except (aiohttp.ClientError, OSError) as error:
            told = str(error) or type(error).__name__
            raise SinkRetry(f"{self._shown(url)} cannot be reached: {told}") from error

    def _headers_of(self, batch: Batch) -> dict[str, str]:
        own = {
            "Content-Type": MEDIA_TYPE,
            "Accept-Encoding": "identity",
            "Idempotency-Key": f'"{self._feed}-{batch.lane}-{batch.number}"',
            "Strandline-Feed": self._feed,
            "Strandline-Lane": batch.lane,
            "Strandline-Batch": str(batch.number),
        }
        return self._headers | own | ({"Content-Encoding": "gzip"} if self._compress else {})

    async def _authorization(self) -> dict[str, str]:
        """The token's header. Its file is read each time: whoever keeps it there may renew it."""
        token = self._token
        if self._token_file is not None:
            file = self._token_file
            try:
                token = (await self._thread.run(file.read_text)).strip()
            except (OSError, UnicodeDecodeError) as error:
                told = getattr(error, "strerror", None) or error
                raise SinkRetry(f"the token in {file} cannot be read: {told}") from error
            if not (token.isascii() and token.isprintable()):
                raise StrandlineError(f"{file} holds no token: one line of ASCII is expected")
        return {"Authorization": f"Bearer {token}"} if token else {}

    async def _drain(self, answer: aiohttp.ClientResponse) -> bytes:
        """The beginning of the body; where it is longer, late or broken off, the connection is not used again.

        The status stands before the body, so nothing in the body can turn a batch that was taken into one that was not.
        """
        content = b""
        try:
            while len(content) < self._answer_bytes_at_most:
                piece = await answer.content.read(self._answer_bytes_at_most - len(content))
                if not piece:
                    return content
                content += piece
        except (aiohttp.ClientError, TimeoutError, OSError):
            pass
        answer.close()
        return content

    async def _judge(self, batch: Batch, answer: aiohttp.ClientResponse) -> None:
        """Raise what an answer without success means."""
        said = _line_of(await self._drain(answer))
        place = f"{self._shown(self._urls[batch.lane])} answered batch {batch.number} of lane {batch.lane} with "
        told = f"{place}{answer.status} {answer.reason or ''}".rstrip() + (f": {said}" if said else "")
        if 300 <= answer.status < 400:
            location = answer.headers.get("Location", "")
            raise SinkRetry(
                f"{told}; redirects are not followed, name the address {location[:SHOWN_CHARACTERS]!r} itself"
            )
        if 400 <= answer.status < 500 and answer.status not in TRIED_AGAIN:
            raise SinkRefused(told, [batch.number])
        raise SinkRetry(told, retry_after_s(answer.headers.get("Retry-After"), self._clock.now_ns()))

    @staticmethod
    def _shown(url: str) -> str:
        """The address for a person: without what may be a secret in it."""
        return str(URL(url).with_user(None).with_query(None).with_fragment(None))


def _line_of(content: bytes) -> str:
    """The start of an answer's body as one harmless line."""
    text = " ".join(content[: 4 * SHOWN_CHARACTERS].decode(errors="replace").split())
    shown = "".join(character if character.isprintable() else "?" for character in text)
    return shown if len(shown) <= SHOWN_CHARACTERS else shown[: SHOWN_CHARACTERS - 3] + "..."
