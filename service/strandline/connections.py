"""Connections: how many there may be at one time, and the files that they and the journals need.

A connection that is one too many is told so and closed; were it kept, the process would run out of files, and a journal
that cannot open its next segment stops its feed. What goes over a connection is aiohttp's business.
"""

from __future__ import annotations

import asyncio
import logging
import resource
from http import HTTPStatus
from typing import Any, cast

import msgspec
from aiohttp import web

from .problems import of_http, problem

log = logging.getLogger(__name__)
# For segments, stores and programs' own files: each feed maps up to 64 segments, and each sink opens a few.
FILES_KEPT_FREE = 512
RETRY_AFTER_S = 5


def make_room_for(connections: int) -> int:
    """Raise this process's limit on open files as far as it may; how many connections that leaves room for."""
    soft, hard = resource.getrlimit(resource.RLIMIT_NOFILE)
    wanted = connections + FILES_KEPT_FREE
    if soft < wanted:
        soft = wanted if hard == resource.RLIM_INFINITY else min(wanted, hard)
        resource.setrlimit(resource.RLIMIT_NOFILE, (soft, hard))
    room = min(connections, max(soft - FILES_KEPT_FREE, soft // 2))
    if room < connections:
        log.warning(
            "only %d connections at a time, not connections_at_most = %d: the limit on open files is %d (ulimit -n)",
            room, connections, soft,
        )  # fmt: skip
    return room


class Connections:
    """Called for each new connection: makes the protocol that serves it, or one that refuses it.

    `options` are those of aiohttp's `web.RequestHandler`.
    """

    def __init__(self, server: web.Server, at_most: int, **options: Any) -> None:
        self._server, self._at_most, self._options = server, at_most, options
        self.refused = 0
        self._is_full = False

    def __call__(self) -> asyncio.Protocol:
        if len(self._server.connections) < self._at_most:
            if self._is_full:
                log.warning("connections are taken again; %d were refused since the start", self.refused)
                self._is_full = False
            return cast(asyncio.Protocol, _Handler(self._server, loop=asyncio.get_running_loop(), **self._options))
        if not self._is_full:
            log.warning("there are %d connections (connections_at_most): further ones are refused", self._at_most)
            self._is_full = True
        self.refused += 1
        return _Refusal(self._at_most)


class _Handler(web.RequestHandler):
    """Answers what is no HTTP with problem details too, and keeps it out of the log, which strangers must not fill."""

    __slots__ = ()

    def handle_error(
        self,
        request: web.BaseRequest,
        status: int = 500,
        exc: BaseException | None = None,
        message: str | None = None,
    ) -> web.StreamResponse:
        """The answer to a request that no handler saw. Raises ConnectionError where an answer has begun."""
        if isinstance(exc, UnicodeEncodeError) and "Expect" in request.headers and not request.writer.output_size:
            # It quotes an `Expect` that it does not know, and fails where that is no UTF-8.
            return problem(417, HTTPStatus(417).phrase, "of Expect only 100-continue is understood")
        if status >= 500 or request.writer.output_size:
            return super().handle_error(request, status, exc, message)
        log.debug("what came from %s cannot be read: %s", request.remote, message)
        why = (message or "").partition("\n")[0].strip(" :")[:200]
        answer = problem(status, HTTPStatus(status).phrase, f"the request cannot be read: {ascii(why)[1:-1]}")
        answer.force_close()
        return answer

    async def finish_response(
        self, request: web.BaseRequest, resp: web.StreamResponse, start_time: float | None
    ) -> tuple[web.StreamResponse, bool]:
        """Send an answer; what aiohttp refused before any handler (an `Expect` that it does not know) as a problem."""
        if isinstance(resp, web.HTTPException) and resp.status >= 400:
            resp = of_http(request, resp)
        return await super().finish_response(request, resp, start_time)


class _Refusal(asyncio.Protocol):
    """Answers a connection whatever it was going to ask, and closes it."""

    def __init__(self, at_most: int) -> None:
        members = {
            "type": "about:blank",
            "title": "Service Unavailable",
            "status": 503,
            "detail": f"there are {at_most} connections, which is limits.connections_at_most: try again later",
        }
        body = msgspec.json.encode(members)
        head = (
            "HTTP/1.1 503 Service Unavailable\r\nContent-Type: application/problem+json\r\n"
            f"Content-Length: {len(body)}\r\nRetry-After: {RETRY_AFTER_S}\r\nConnection: close\r\n\r\n"
        )
        self._answer = head.encode() + body

    def connection_made(self, transport: asyncio.BaseTransport) -> None:
        wire = cast(asyncio.WriteTransport, transport)
        wire.write(self._answer)
        wire.close()
