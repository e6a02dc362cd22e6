"""The formats in which a body can be sent, made from its NDJSON lines. No rendering of events and no sending."""

from __future__ import annotations

from collections.abc import Callable
from typing import NamedTuple

import msgspec

RECORD_SEPARATOR = b"\x1e"  # RFC 7464, section 2.1
_ENVELOPE = '{"specversion":"1.0","id":"%d","source":"/gauges","type":"org.example.reading","data":'


class Format(NamedTuple):
    """A media type, and how a body of NDJSON lines (each with its line feed) is written in it."""

    media_type: str
    encode: Callable[[bytes], bytes]


def _array(payload: bytes) -> bytes:
    return b"[" + payload[:-1].replace(b"\n", b",") + b"]"


def _sequence(payload: bytes) -> bytes:
    return RECORD_SEPARATOR + payload[:-1].replace(b"\n", b"\n" + RECORD_SEPARATOR) + b"\n"


def _cloudevents(payload: bytes) -> bytes:
    """Each line is the data of an event that is named by its own id; the feed's pointers begin with /data then."""
    lines = payload.split(b"\n")[:-1]
    ids = (line["id"] for line in msgspec.json.Decoder(dict).decode_lines(payload))
    events = ((_ENVELOPE % number).encode() + line + b"}" for number, line in zip(ids, lines, strict=True))
    return b"[" + b",".join(events) + b"]"


def _messagepack(payload: bytes) -> bytes:
    return msgspec.msgpack.encode(msgspec.json.Decoder().decode_lines(payload))


FORMATS: dict[str, Format] = {
    "ndjson": Format("application/x-ndjson", lambda payload: payload),
    "jsonl": Format("application/jsonl", lambda payload: payload),
    "json": Format("application/json", _array),
    "json-seq": Format("application/json-seq", _sequence),
    "cloudevents": Format("application/cloudevents-batch+json", _cloudevents),
    "msgpack": Format("application/vnd.msgpack", _messagepack),
}
