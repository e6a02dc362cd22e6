"""Whether a partition's log had messages once and lost them: marks in the stream of the logs, never deleted by us.

A log without messages is a new one, or one that somebody emptied. Of the latter nothing else would tell: its partition
begins again with the first message of its stream, and what was delivered comes again. So each log that has begun has a
mark, and the stream's very first message is one too: where that is gone, somebody has purged the stream as a whole. Of
a stream that was deleted and made again no mark is left: then the sinks tell, which `partition` asks.
"""

from __future__ import annotations

import logging

from nats.js import api
from nats.js.client import JetStreamContext
from nats.js.errors import APIError, NotFoundError

from ..nats_client import NOT_THERE
from .link import Link

log = logging.getLogger(__name__)
TOLD_FOR_NS = 24 * 3600 * 10**9  # by every owner that follows; a way out, or living with it, is found by then
WRONG_LAST = frozenset({10071, 10164})  # error codes of the server for an expected last sequence that is not the last
WORDS = (
    "its log has lost its messages: it began again with the first message of its stream, so what was delivered comes "
    "again. Stop all instances; see the runbook"
)
_BEGUN, _LOST = b"begun", b"lost"


async def mark_made(stream: JetStreamContext, name: str) -> None:
    """Make a mark the first message of a stream that never had any. Raises what the client raises."""
    try:
        await stream.publish(f"{name}.made", b"", stream=name, headers={api.Header.EXPECTED_LAST_SEQUENCE: "0"})
    except APIError as error:
        if error.err_code not in WRONG_LAST:
            raise


class Marks:
    """Those of one log, in the hands of who owns it, or tries to. Each call raises Away."""

    def __init__(self, link: Link, stream: str, subject: str) -> None:
        self._link, self._stream, self._subject = link, stream, subject

    async def has_begun(self) -> bool:
        """Whether it had messages once, as far as marks tell."""
        if await self._last() is not None:
            return True
        try:
            return (await (await self._link.jetstream()).stream_info(self._stream)).state.first_seq > 1
        except (APIError, *NOT_THERE) as error:
            raise self._link.away(f"stream {self._stream} does not answer", error) from error

    async def begin(self) -> int | None:
        """Mark that it has messages. When it was found to have lost earlier ones, ns since 1970 UTC; None: never."""
        last = await self._last()
        if last is None:
            await self._put(_BEGUN)
        elif last.data == _LOST and last.time is not None:
            return int(last.time.timestamp() * 1e9)
        return None

    async def lose(self, evidence: str) -> int | None:
        """Tell that it has lost its messages, here and to every later owner. When that was; as for `begin`."""
        log.warning(
            "%s: this log was empty, but %s: somebody deleted its messages, or the stream. The partition begins again "
            "with the first message that its own stream still has, and what was delivered comes again. Stop all "
            "instances; the way out: deploy/cluster.md, A partition that cannot be taken over",
            self._subject, evidence,
        )  # fmt: skip
        await self._put(_LOST)
        return await self.begin()

    async def _last(self) -> api.RawStreamMsg | None:
        try:
            return await (await self._link.jetstream()).get_last_msg(self._stream, self._subject)
        except NotFoundError:
            return None
        except (APIError, *NOT_THERE) as error:
            raise self._link.away(f"stream {self._stream} does not answer", error) from error

    async def _put(self, mark: bytes) -> None:
        try:
            await (await self._link.jetstream()).publish(self._subject, mark, stream=self._stream)
        except (APIError, *NOT_THERE) as error:
            raise self._link.away(f"stream {self._stream} takes nothing", error) from error
