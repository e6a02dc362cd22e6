"""What stands around a body: its media type and its content codings (RFC 9110 sections 8.3 and 8.4).

Here live the reading of the two headers and bounded decompression. What the bytes mean is not decided here.
"""

from __future__ import annotations

import re
import zlib
from collections.abc import Callable, Container, Iterator
from io import BytesIO

import zstandard

from ..errors import BodyError
from .formats import MEDIA_TYPES

ACCEPT_ENCODING = "gzip, zstd"
CODINGS_AT_MOST = 2
# Output of one step, beyond the limit on the whole: how far a bomb gets.
STEP_BYTES = 2 * 1024 * 1024

_TOKEN = r"[!#$%&'*+.^_`|~0-9A-Za-z-]+"
_MEDIA_TYPE = re.compile(rf"[ \t]*({_TOKEN}/{_TOKEN})[ \t]*")
_PARAMETER = re.compile(rf'[ \t]*;[ \t]*(?:({_TOKEN})=({_TOKEN}|"(?:[^"\\]|\\.)*+"))?[ \t]*')
# zlib hands back what follows a gzip member by copying it: short pieces keep that cheap, also with many tiny members.
_GZIP_PIECE_BYTES = 16 * 1024
_ZSTD_BLOCKS_PER_STEP = 16  # a block holds at most 128 KiB (RFC 8878 section 3.1.1.2)
_ZSTD_WINDOW_BYTES = 8 * 1024 * 1024  # RFC 9659: no larger window in the content coding zstd
# gzip members, zstd frames and blocks in one body: room for one per event; each costs up to 10 µs, whatever it holds.
_PARTS_AT_MOST = 200_000

_UTF8 = ("utf-8", "utf8")
_BINARY_MODE = ("ce-specversion", "ce-id", "ce-source", "ce-type")

Steps = Callable[[bytes], Iterator[bytes]]


def media_type_of(content_type: str | None, headers: Container[str] = ()) -> str:
    """The body's media type, one of formats.MEDIA_TYPES. Raises BodyError 415, also for a charset other than UTF-8.

    `headers` are the names of all header fields, in any case: a CloudEvent whose attributes stand there, in binary mode
    (HTTP Protocol Binding for CloudEvents 1.0.2 section 3.1), would be taken for its data alone.
    """
    is_structured = (content_type or "").lstrip(" \t").lower().startswith("application/cloudevents")
    if not is_structured and any(name in headers for name in _BINARY_MODE):
        raise _unsupported("CloudEvents in binary mode (attributes in header fields) are not taken here")
    match = _MEDIA_TYPE.match(content_type or "")
    if match is None:
        raise _unsupported("the request names no media type")
    media_type, place = match[1].lower(), match.end()
    if media_type not in MEDIA_TYPES:
        raise _unsupported(f"{media_type[:80]} is not taken here")
    while place < len(content_type or ""):
        match = _PARAMETER.match(content_type or "", place)
        if match is None:
            raise _unsupported("the parameters of the media type cannot be read")
        if match[1] is not None and match[1].lower() == "charset" and match[2].strip('"').lower() not in _UTF8:
            raise _unsupported("bodies are UTF-8, and the request names another charset")
        place = match.end()
    return media_type


def _unsupported(why: str) -> BodyError:
    return BodyError(415, "Unsupported Media Type", f"{why}: send one of {', '.join(MEDIA_TYPES)}")


def decompress(body: bytes, content_encoding: str | None, decoded_bytes_at_most: int) -> bytes:
    """The body with its content codings undone, the last one first. `content_encoding` is the header's value.

    Raises BodyError: 415 for a coding other than gzip, x-gzip, zstd and identity, or for more than two of them; 413
    when any stage has more than `decoded_bytes_at_most` bytes, of which no more than one step beyond the limit is ever
    held; 422 for a stream that is damaged or does not end. An empty body under a coding counts as one that was cut.
    """
    names = [name.strip(" \t").lower() for name in (content_encoding or "").split(",")]
    codings = [name for name in names if name not in ("", "identity")]
    for name in codings:
        if name not in _CODINGS:
            raise _bad_coding(f"the content coding {name[:40]!a} is not known here")
    if len(codings) > CODINGS_AT_MOST:
        raise _bad_coding(f"the body has {len(codings)} content codings, {CODINGS_AT_MOST} are allowed")
    if not codings and len(body) > decoded_bytes_at_most:
        raise _too_large(decoded_bytes_at_most)
    for name in reversed(codings):
        body = _bounded(name, body, decoded_bytes_at_most)
    return body


def _bad_coding(why: str) -> BodyError:
    detail = f"{why}: use {ACCEPT_ENCODING} or none"
    return BodyError(415, "Unsupported Media Type", detail, accept_encoding=ACCEPT_ENCODING)


def _too_large(bytes_at_most: int) -> BodyError:
    detail = f"the decoded body has more than {bytes_at_most:,} bytes: send it in smaller parts"
    return BodyError(413, "Content Too Large", detail)


def _damaged(coding: str, why: str) -> BodyError:
    return BodyError(422, "Unprocessable Content", f"the body is not a sound {coding} stream: {why}")


def _bounded(coding: str, body: bytes, bytes_at_most: int) -> bytes:
    decoded = BytesIO()  # grows in place, and gives up its buffer without a copy
    size = 0
    try:
        for piece in _CODINGS[coding](body):
            size += len(piece)
            if size > bytes_at_most:
                raise _too_large(bytes_at_most)
            decoded.write(piece)
    except (zlib.error, zstandard.ZstdError) as error:
        raise _damaged(coding, str(error)[:120]) from None
    return decoded.getvalue()


def _gzip_steps(body: bytes) -> Iterator[bytes]:
    """The decoded members of a gzip stream (RFC 1952: any number, one after the other), step by step."""
    member = zlib.decompressobj(wbits=31)
    members = 1
    for place in range(0, len(body), _GZIP_PIECE_BYTES):
        rest = body[place : place + _GZIP_PIECE_BYTES]
        while rest:
            if member.eof:
                member = zlib.decompressobj(wbits=31)
                members += 1
                _check_parts("gzip", members)
            yield member.decompress(rest, STEP_BYTES)
            rest = member.unused_data or member.unconsumed_tail
    # Output may wait inside although all input is taken.
    while not member.eof:
        piece = member.decompress(b"", STEP_BYTES)
        if not piece:
            raise _damaged("gzip", "it does not end")
        yield piece


def _zstd_steps(body: bytes) -> Iterator[bytes]:
    """The decoded frames of a zstd stream, step by step. The step is bounded by what is put in: a few blocks each."""
    place = 0
    if not body:
        raise _damaged("zstd", "it does not end")
    ends = _zstd_ends(body)
    decompressor = zstandard.ZstdDecompressor(max_window_size=_ZSTD_WINDOW_BYTES)
    while place < len(body):
        frame = decompressor.decompressobj()
        while not frame.eof:
            end = next(ends, None)
            if end is None or end > len(body):
                raise _damaged("zstd", "it does not end")
            yield frame.decompress(body[place:end])
            place = end
        if frame.unused_data:
            raise _damaged("zstd", "a frame ends early")


def _zstd_ends(body: bytes) -> Iterator[int]:
    """Where a step's input ends, up to the end of each frame (RFC 8878 section 3.1: header, blocks, checksum).

    The library has no bound on what one call puts out; a block of 4 bytes can hold 128 KiB.
    """
    place = parts = 0
    while place < len(body):
        if body[place + 1 : place + 4] == b"\x2a\x4d\x18" and body[place] & 0xF0 == 0x50:  # a skippable frame
            parts += 1
            place += 8 + int.from_bytes(body[place + 4 : place + 8], "little")
            yield place
            continue
        has_checksum = zstandard.get_frame_parameters(body[place : place + 18]).has_checksum
        place += zstandard.frame_header_size(body[place : place + 18])
        is_last, blocks = False, 0
        while not is_last:
            header = int.from_bytes(body[place : place + 3], "little")
            is_last, is_run, size = bool(header & 1), header >> 1 & 3 == 1, header >> 3
            place += 3 + (1 if is_run else size)
            blocks += 1
            parts += 1
            _check_parts("zstd", parts)
            if blocks % _ZSTD_BLOCKS_PER_STEP == 0 and not is_last:
                yield place
        place += 4 if has_checksum else 0
        yield place


def _check_parts(coding: str, parts: int) -> None:
    if parts > _PARTS_AT_MOST:
        raise _damaged(coding, f"it has more than {_PARTS_AT_MOST:,} parts")


_CODINGS: dict[str, Steps] = {"gzip": _gzip_steps, "x-gzip": _gzip_steps, "zstd": _zstd_steps}
