"""The HTTP side of ingest: events and promises in; answers once they are durable. Operators' acts are in `acting`.

Reads bodies within limits and hands columns to the feed. What is accepted, late or refused is decided by the core.
"""

from __future__ import annotations

import asyncio
import hashlib
import re
from collections.abc import Iterator
from contextlib import contextmanager
from typing import TypeVar

import msgspec
from aiohttp import web

from ..cluster.whereabouts import parts, where
from ..config import Config
from ..core.columns import Arrival, RequestKey
from ..errors import BODY_REASONS, BodyError, TooManyFaults
from ..hops import Bodies
from ..problems import NotThere, Refused
from ..runtime import FeedRuntime
from .encodings import decompress, media_type_of
from .offload import Aside, decoded
from .timestamps import parse_rfc3339
from .values import SOURCE_BYTES_AT_MOST, is_source

FEEDS = web.AppKey("feeds", dict[str, FeedRuntime])
CONFIG = web.AppKey("config", Config)
BODIES = web.AppKey("bodies", asyncio.Semaphore)
ASIDE = web.AppKey("aside", Aside)
ACT_BYTES_AT_MOST = 16 * 1024
KEY_CHARACTERS_AT_MOST = 1024
_KEY = re.compile(r'"((?:[\x20-\x21\x23-\x5b\x5d-\x7e]|\\["\\])*)"')
Act = TypeVar("Act", bound=msgspec.Struct)
# Not by naming a partition: the brokers choose it by the source, and one that is guessed breaks a source in two.
STREAM_ONLY = (
    "feed {feed} takes no events by HTTP: publish them by way of stream {stream} (as its producers do: "
    "deploy/cluster.md), not here"
)


class Promise(msgspec.Struct, forbid_unknown_fields=True):
    """Nothing older than `time` (RFC 3339) will come from `source`."""

    source: str
    time: str


def runtime_of(request: web.Request) -> FeedRuntime:
    """The feed that the path names."""
    feeds, name = request.app[FEEDS], request.match_info["feed"]
    runtime = feeds.get(name)
    if runtime is None:
        config = request.app[CONFIG]
        if config.base_of(name) != name:
            raise NotThere(where(request.app, name))
        if (feed := config.feed(name)) is not None and feed.partitions is not None:
            raise NotThere(parts(name, feed.partitions.count))
        raise NotThere(f"there is no feed {name[:100]!r}; there are: {', '.join(sorted(feeds)) or 'none'}")
    return runtime


def refuse_partitions(request: web.Request, sentence: str = STREAM_ONLY) -> None:
    """Events of a feed with partitions come by its stream only, whoever owns them now.

    Raises Refused with the sentence, in which {feed} and {stream} are named.
    """
    config, name = request.app[CONFIG], request.match_info["feed"]
    base = config.base_of(name)
    feed = config.feed(base)
    if feed is None or feed.partitions is None:
        return
    if name in request.app[FEEDS]:
        request.app[FEEDS][name].feed.note_refusal("stream_only")
    raise Refused("stream_only", sentence.format(feed=base, stream=feed.partitions.stream), 0)


async def post_events(request: web.Request) -> web.Response:
    """Take events; answer what became of each once all of it is durable."""
    refuse_partitions(request)
    runtime = runtime_of(request)
    try:
        return await _posted(request, runtime)
    except BodyError as error:
        runtime.feed.note_refusal(BODY_REASONS[error.status])
        raise


async def _posted(request: web.Request, runtime: FeedRuntime) -> web.Response:
    media_type = media_type_of(request.headers.get("Content-Type", ""), request.headers)
    async with request.app[BODIES]:
        with _at(runtime.reading, runtime):
            body = await read_body(request, runtime.config.body_bytes_at_most)
        with _at(runtime.decoding, runtime):
            encodings = ",".join(request.headers.getall("Content-Encoding", []))
            body = decompress(body, encodings, runtime.config.decoded_bytes_at_most)
            key = request_key(request.headers.getall("Idempotency-Key", []), media_type, body)
            arrival = await _arrival(request, runtime, body, media_type)
        # Nothing awaits between decoding and the core: the numbers of new sources are still right.
        outcome = await runtime.arrive(arrival, key)
    return web.Response(body=msgspec.json.encode(outcome), content_type="application/json")


async def _arrival(request: web.Request, runtime: FeedRuntime, body: bytes, media_type: str) -> Arrival:
    try:
        table = runtime.feed.state.sources.numbers
        return await decoded(runtime.decoder, body, media_type, table, request.app[ASIDE])
    except TooManyFaults as error:
        runtime.feed.note_refusal(error.reason)
        raise


def request_key(headers: list[str], media_type: str, body: bytes) -> RequestKey | None:
    """The idempotency key of a request, a structured-field String (RFC 8941 3.3.3), quotes and all.

    Header and meaning: the IETF draft "The Idempotency-Key HTTP Header Field". Raises BodyError 400.
    """
    if not headers:
        return None
    match = _KEY.fullmatch(headers[0].strip(" \t"))
    text = re.sub(r"\\(.)", r"\1", match[1]) if match else ""
    if len(headers) > 1 or not 1 <= len(text) <= KEY_CHARACTERS_AT_MOST:
        detail = (
            f"Idempotency-Key must be one text of 1 to {KEY_CHARACTERS_AT_MOST} printable ASCII characters in double "
            'quotes, such as "8e03978e-40d5-43e8-bc93-6894a57f9324"'
        )
        raise BodyError(400, "Bad Request", detail)
    # SHA-256 has instructions of its own on most processors: 0.5 ns a byte, BLAKE2b and a joined copy 1.0.
    digest = hashlib.sha256(media_type.encode() + b"\0")
    digest.update(body)
    return RequestKey(text, digest.digest()[:16])


@contextmanager
def _at(bodies: Bodies, runtime: FeedRuntime) -> Iterator[None]:
    ticket = bodies.begin(runtime.clock.now_ns())
    advanced = False
    try:
        yield
        advanced = True
    finally:
        bodies.end(ticket, runtime.clock.now_ns(), advanced=advanced)


async def read_body(request: web.Request, bytes_at_most: int) -> bytes:
    """The body as it was sent. Raises BodyError 413 beyond the limit, 408 for one that does not come in time."""
    too_large = BodyError(
        413,
        "Content Too Large",
        f"the body is larger than body_bytes_at_most ({bytes_at_most:,} bytes): send fewer events at a time",
    )
    if (request.content_length or 0) > bytes_at_most:
        raise too_large
    within_s = request.app[CONFIG].limits.body_within_ns / 1e9
    chunks: list[bytes] = []
    size = 0
    try:
        async with asyncio.timeout(within_s):
            async for chunk in request.content.iter_any():
                size += len(chunk)
                if size > bytes_at_most:
                    raise too_large
                chunks.append(chunk)
    except TimeoutError:
        detail = f"the body was not complete within {within_s:g} s, which is body_within ({size:,} bytes came)"
        raise BodyError(408, "Request Timeout", detail) from None
    return chunks[0] if len(chunks) == 1 else b"".join(chunks)


async def post_marks(request: web.Request) -> web.Response:
    """Take a source's promise that nothing older will come from it."""
    runtime = runtime_of(request)
    promise = await read_act(request, Promise)
    if not is_source(promise.source):
        detail = f"/source: a source has 1 to {SOURCE_BYTES_AT_MOST} bytes and no U+0000"
        raise BodyError(422, "Unprocessable Content", detail)
    name, config = promise.source, runtime.config
    if config.one_source and name != config.name:  # it would hold the feed, and no event could ever be its own
        raise NotThere(f"no source {name[:100]!r}: all events of feed {config.name} are of one source, {config.name!r}")
    try:
        time_ns = parse_rfc3339(promise.time)
    except ValueError as error:
        raise BodyError(422, "Unprocessable Content", f"/time: {error}") from error
    await runtime.act(lambda now_ns, token: runtime.feed.promise(promise.source, time_ns, now_ns, token))
    return web.Response(status=204)


async def read_act(request: web.Request, shape: type[Act]) -> Act:
    """The small JSON body of an act. Raises BodyError."""
    body = await read_body(request, ACT_BYTES_AT_MOST)
    try:
        return msgspec.json.decode(body, type=shape)
    except (msgspec.DecodeError, UnicodeDecodeError, RecursionError) as error:
        raise BodyError(422, "Unprocessable Content", f"the body is not what is expected here: {error}") from error
