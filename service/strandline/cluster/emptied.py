"""Whether a partition's log had messages once and lost them: marks in the stream of the logs, never deleted by us.

A log without messages is a new one, or one that somebody emptied. Of the latter nothing else would tell: its partition
begins again with the first message of its stream, and what was delivered comes again. So each log has a mark, always
put behind the log's first group: a log that begins behind its mark has lost what was before. That stays evidence until
a mark behind the new first group says that it was told, whoever crashes meanwhile.

The stream has a mark too, put before any log's first group. Where it is gone, and every group with it, somebody has
purged the stream as a whole, the logs' marks included: then another takes its place, and a log without a mark that
begins within a day of that one was emptied. Of a stream that was deleted and made again no mark is left: then the sinks
tell, which `partition` asks.
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
_MADE, _PURGED = b"", b"purged"  # the stream
_BEGUN, _LOST = b"begun", b"lost"  # a log


async def mark_made(stream: JetStreamContext, name: str, *, is_new: bool) -> None:
    """Give the stream its mark, where it has none. Raises what the client raises.

    `is_new`: it never had a message. A stream that has groups of logs but no mark is older than marks: nothing is lost.
    """
    if await _last_of(stream, name, f"{name}.made") is not None:
        return
    is_purged = not is_new and await _last_of(stream, name, f"{name}.groups.>") is None
    headers = {api.Header.EXPECTED_LAST_SUBJECT_SEQUENCE.value: "0"}  # of several instances the first one's stays
    try:
        await stream.publish(f"{name}.made", _PURGED if is_purged else _MADE, stream=name, headers=headers)
    except APIError as error:
        if error.err_code not in WRONG_LAST:
            raise


async def _last_of(stream: JetStreamContext, name: str, subject: str) -> api.RawStreamMsg | None:
    try:
        return await stream.get_last_msg(name, subject)
    except NotFoundError:
        return None


class Marks:
    """Those of one log, in the hands of who owns it, or tries to. Each call raises Away."""

    def __init__(self, link: Link, stream: str, subject: str) -> None:
        self._link, self._stream, self._subject = link, stream, subject

    async def begin(self, begins: int | None) -> int | None:
        """Mark that it has messages. When it was found to have lost earlier ones, ns since 1970 UTC; None: never.

        `begins` is the sequence of the log's very first group; None where that was let go.
        """
        last = await self._last(self._subject)
        if begins is not None and await self._is_emptied(last, begins):
            return await self.lose("it had messages before")
        if last is None:
            await self._put(_BEGUN)
        elif last.data == _LOST:
            return _ns(last)
        return None

    async def _is_emptied(self, last: api.RawStreamMsg | None, begins: int) -> bool:
        if last is not None:
            return (last.seq or 0) < begins
        made = await self._last(f"{self._stream}.made")
        if made is None or made.data != _PURGED:
            return False
        try:
            first = await (await self._link.jetstream()).get_msg(self._stream, begins)
        except (APIError, *NOT_THERE) as error:
            raise self._link.away(f"stream {self._stream} does not answer", error) from error
        return _ns(first) - _ns(made) < TOLD_FOR_NS  # both by the brokers' clock

    async def lose(self, evidence: str) -> int | None:
        """Tell that it has lost its messages, here and to every later owner. When that was; as for `begin`."""
        log.warning(
            "%s: this log was empty, but %s: somebody deleted its messages, or the stream. The partition begins again "
            "with the first message that its own stream still has, and what was delivered comes again. Stop all "
            "instances; the way out: deploy/cluster.md, A partition that cannot be taken over",
            self._subject, evidence,
        )  # fmt: skip
        await self._put(_LOST)
        return await self.begin(None)

    async def _last(self, subject: str) -> api.RawStreamMsg | None:
        try:
            return await _last_of(await self._link.jetstream(), self._stream, subject)
        except (APIError, *NOT_THERE) as error:
            raise self._link.away(f"stream {self._stream} does not answer", error) from error

    async def _put(self, mark: bytes) -> None:
        try:
            await (await self._link.jetstream()).publish(self._subject, mark, stream=self._stream)
        except (APIError, *NOT_THERE) as error:
            raise self._link.away(f"stream {self._stream} takes nothing", error) from error


def _ns(message: api.RawStreamMsg) -> int:
    """When a broker stored it, ns since 1970 UTC."""
    assert message.time is not None, "every broker tells it"
    return int(message.time.timestamp() * 1e9)
