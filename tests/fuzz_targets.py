"""What the fuzz lane fuzzes: for each target how an input is drawn from a seed, and the law that holds for every input.

A law answers with the name of what came of the input, always one of a closed list; any other exception, and any broken
assertion, is a finding. `seen` are outcomes that must come up, so that no target tests nothing. `fuzz_targets_journal`
has the journal's.
"""

from __future__ import annotations

import gzip
import json
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from pathlib import Path
from random import Random
from typing import Any

import msgspec
import zstandard
from fuzz_mutate import mutated
from helpers_arrival import check_arrival, plain
from helpers_arrow import ARROW
from helpers_arrow import body_of as arrow_body_of
from strandline.config import parse
from strandline.config_units import duration_ns, size_bytes
from strandline.core.columns import Arrival
from strandline.errors import BodyError, ConfigError, TooManyFaults
from strandline.ingest.decode import Decoder
from strandline.ingest.encodings import decompress, media_type_of
from strandline.ingest.endpoint import request_key
from strandline.ingest.formats import MEDIA_TYPES, NDJSON
from strandline.ingest.limits import BodyLimits
from strandline.ingest.pointer import PointerError, parse_pointer
from strandline.ingest.timestamps import TimestampError, parse_rfc3339, parse_rfc3339_column
from strandline.sinks.retry_after import retry_after_s

DEPLOY = Path(__file__).resolve().parents[1] / "deploy"


@dataclass(frozen=True, slots=True)
class Target:
    """`inputs` of the 100,000 that CI takes; `peak_bytes` is how much one input may take at a time.

    Where inputs are bytes, a fuzzer that is guided by coverage can make them too.
    """

    inputs: int
    make: Callable[[Random], Any]
    run: Callable[[Any], str]
    seen: frozenset[str]
    peak_bytes: int = 2**20


# --- bodies ------------------------------------------------------------------------------------------------------

LIMITS = BodyLimits(
    decoded_bytes_at_most=20_000, event_bytes_at_most=700, events_at_most=60, faults_at_most=20, nesting_at_most=8
)
DECODERS = (
    Decoder("river", "/time", "rfc3339", "/source", "/id", LIMITS),
    Decoder("river", "/ts", "ns", "/from/station", None, LIMITS),
    Decoder("river", "/list/0", "ms", None, "/id", LIMITS),
    Decoder("river", '/a"b', "s", "/a~1b", None, LIMITS),
    Decoder("river", "/ts", "ns", "/station", None, LIMITS, is_compiled=True),
    Decoder("river", "/time", "rfc3339", "/source", None, LIMITS, is_compiled=True),
)
TABLE = {"/gauge/1": 0, "gauge-2": 1}
_CLOUDEVENT = {"specversion": "1.0", "type": "level", "source": "/gauge/1", "id": "1", "time": "2026-01-31T12:34:56Z"}
_EVENTS: tuple[tuple[dict[str, Any], ...], ...] = (
    ({**_CLOUDEVENT, "data": {"level": 2.5}}, {**_CLOUDEVENT, "id": "2", "data_base64": "eA==", "ext": True}),
    (
        {"ts": 1_700_000_000_000_000_000, "from": {"station": "gauge-2"}, "note": '[{"\\'},
        {"ts": -(2**63), "from": {"station": 7}, "long": "x" * 640},
    ),
    ({"list": [2**53, "x"], "id": 5}, {"list": [1], "id": "ö", "deep": [[[[[[1]]]]]]}),
    ({'a"b': 9_223_372_036, "a/b": "gauge-2"}, {'a"b': 0, "a/b": 10**18}),
    ({"ts": 1_700_000_000_000_000_000, "station": "gauge-2", "v": 1.5}, {"ts": -1, "station": "neu", "v": [{}, None]}),
    ({**_CLOUDEVENT, "level": 12345678.5}, {**_CLOUDEVENT, "source": "/gauge/2", "note": 'a "gate"\n'}),
)
_VALUES = (None, True, 0, -1, 2**63, 2**64 - 1, 1e300, "", "a\0b", "\ufdd0", "x" * 257, [], {}, [1, {"b": []}])


def _body(draw: Random) -> bytes:
    """A byte that tells decoder and format, and the body."""
    number = draw.randrange(len(DECODERS))
    events = [_event(draw, number) for _ in range(draw.choice((0, 1, 2, 3, 8, 40)))]
    media_type = draw.choice(MEDIA_TYPES)
    if media_type == ARROW:
        body = arrow_body_of(events) or b""
    elif "msgpack" in media_type:
        body = msgspec.msgpack.encode(events[0] if len(events) == 1 and draw.random() < 0.5 else events)
    else:
        texts = [json.dumps(event, ensure_ascii=draw.random() < 0.5).encode() for event in events]
        if media_type.endswith("cloudevents+json") and texts:
            body = texts[0]
        elif media_type.endswith("+json") or media_type == "application/json":
            body = b"[" + draw.choice((b",", b",\n")).join(texts) + b"]"
        elif media_type.endswith("-seq"):
            body = b"".join(b"\x1e" + text + b"\n" for text in texts)
        else:
            body = b"\n".join(texts)
    return bytes([number * len(MEDIA_TYPES) + MEDIA_TYPES.index(media_type)]) + mutated(draw, body)


def _event(draw: Random, number: int) -> dict[str, Any]:
    """An event of this decoder's feed as a rule, with a member or two changed now and then."""
    event = dict(draw.choice(_EVENTS[number] if draw.random() < 0.9 else _EVENTS[0]))
    for _ in range(draw.choice((0, 0, 0, 0, 0, 0, 1, 2))):
        event[draw.choice((*event, "x", "id", "time", "source", "subject"))] = draw.choice(_VALUES)
    return event


def _decode(given: bytes) -> str:
    number, kind = divmod(given[0] if given else 0, len(MEDIA_TYPES))
    decoder, body, media_type = DECODERS[number % len(DECODERS)], given[1:], MEDIA_TYPES[kind]
    found = [_arrival(way, decoder, body, media_type) for way in (Decoder.decode, Decoder.decode_line_by_line)]
    assert found[0] == found[1], "the fast way and the slow way differ"
    arrival = found[0]
    if isinstance(arrival, str):
        return arrival
    faults = arrival["faults"]
    assert len(faults) <= LIMITS.faults_at_most
    return faults[0].reason if faults else "good" if arrival["times"] else "nothing"


def _arrival(way: Callable[..., Arrival], decoder: Decoder, body: bytes, media_type: str) -> Any:
    try:
        arrival = way(decoder, body, media_type, TABLE)
    except BodyError as error:
        _check_sentence(error.detail)
        assert error.status in (413, 422)
        return str(error.status)
    except TooManyFaults as error:
        _check_sentence(str(error))
        return error.reason
    check_arrival(arrival, TABLE)
    return plain(arrival)


def _check_sentence(text: str) -> None:
    """What goes into an answer: one line, not long, harmless on a terminal."""
    assert 0 < len(text) <= 500 and text.isprintable(), text


# --- content codings ---------------------------------------------------------------------------------------------

CODED_LIMIT = 20_000
_PLAIN = (b"", b"x", b'{"ts":1}\n' * 40, bytes(15_000), bytes(20_000), bytes(20_001), bytes(range(256)) * 40)
_CODED = tuple(
    coded
    for text in _PLAIN
    for coded in (gzip.compress(text, mtime=0), zstandard.compress(text), gzip.compress(text, 1, mtime=0) * 2)
)
_CODED += (*(gzip.compress(coded, mtime=0) for coded in _CODED[:6]), b"\x5a\x2a\x4d\x18\x02\0\0\0ab")
_HEADERS = ("gzip", "zstd", "x-gzip", "GZIP", "identity", "", "gzip, zstd", "zstd,gzip", "gzip,gzip", "gzip\t", "br")


def _coded(draw: Random) -> bytes:
    """A byte that tells the header, and the body."""
    return bytes([draw.randrange(len(_HEADERS))]) + mutated(draw, draw.choice(_CODED), _CODED)


def _decompress(given: bytes) -> str:
    try:
        text = decompress(given[1:], _HEADERS[given[0] % len(_HEADERS)] if given else "", CODED_LIMIT)
    except BodyError as error:
        _check_sentence(error.detail)
        assert (error.accept_encoding is not None) == (error.status == 415)
        return str(error.status)
    assert len(text) <= CODED_LIMIT
    return "good"


# --- header fields -----------------------------------------------------------------------------------------------

_FIELDS = tuple(
    text.encode()
    for text in (
        *MEDIA_TYPES, "application/json; charset=utf-8", 'a/b; c="d\\"e"', '"8e03978e-40d5"', '"a\\\\b\\"c"',
        "gzip, zstd", "120", "Fri, 31 Dec 1999 23:59:59 GMT", "Sunday, 06-Nov-94 08:49:37 GMT",
        "Sun Nov  6 08:49:37 1994", "text/plain",
    )
)  # fmt: skip
_FIELD_TOKENS = (b'"', b"\\", b";", b",", b"=", b" ", b"\t", b"/", b"+", b"charset=", b"\x80", b"\xff", b"0", b"GMT")


def _field(draw: Random) -> bytes:
    return mutated(draw, draw.choice(_FIELDS), _FIELDS, _FIELD_TOKENS)


def _read_field(given: bytes) -> str:
    text, found = given.decode("latin-1"), []
    for read in (lambda: media_type_of(text), lambda: request_key([text], "", b""), lambda: decompress(b"", text, 9)):
        try:
            found.append(bool(read()))
        except BodyError as error:
            _check_sentence(error.detail)
            found.append(False)
    seconds = retry_after_s(text, 10**18)
    assert seconds is None or seconds >= 0
    return "media type" if found[0] else "key" if found[1] else "time" if seconds is not None else "refused"


# --- pointers and times ------------------------------------------------------------------------------------------

_POINTERS = (b"", b"/", b"/a/0/b~1c~0", b"/a~2", b"a", b"/01/-/\xc3\xb6", b"/a/a/a/a", b'/"', b"/time", b"/list/1/2")
_EVENT_TEXT = b'{"time":1,"a":[{"b/c~":2}],"list":[0,[1,2,3]],"":3,"01":{"-":{"\xc3\xb6":4}},"\\"":5}'


def _pointers(draw: Random) -> tuple[str, str, bytes]:
    first, second = (mutated(draw, draw.choice(_POINTERS), _POINTERS).decode("utf-8", "replace") for _ in range(2))
    return first, second, mutated(draw, _EVENT_TEXT)


def _point(given: tuple[str, str, bytes]) -> str:
    first, second, line = given
    try:
        assert all(isinstance(token, str) for token in parse_pointer(first))
        decoder = Decoder("river", first, "ns", second, limits=LIMITS)
    except PointerError as error:
        assert "\n" not in str(error)
        return "refused"
    fast, slow = (_arrival(way, decoder, line, NDJSON) for way in (Decoder.decode, Decoder.decode_line_by_line))
    assert fast == slow
    return "good" if isinstance(fast, dict) and fast["times"] else "nothing there"


_TIMES = (
    b"2026-01-31T12:34:56.789Z", b"1998-12-31T23:59:60Z", b"1937-01-01T12:00:27.87+00:20", b"0001-01-01T00:00:00Z",
    b"1985-04-12T23:20:50.999999999999Z", b"2262-04-11T23:47:16.854775807Z", b"1677-09-21T00:12:43.145224192Z",
)  # fmt: skip
_TIME_TOKENS = (b"0", b"9", b"60", b"-", b":", b"T", b"z", b"+", b".", b"\xe0\xa7\xaa", b" ", b"\n", b"02-30", b"24:00")


def _times(draw: Random) -> list[str]:
    """Twenty of one form at a time, so that they are read by columns."""
    base = mutated(draw, draw.choice(_TIMES), _TIMES, _TIME_TOKENS)
    texts = [mutated(draw, base, _TIMES, _TIME_TOKENS) if draw.random() < 0.2 else base for _ in range(20)]
    return [text.decode("utf-8", "replace") for text in texts]


def _read_times(texts: list[str]) -> str:
    times, errors = parse_rfc3339_column(texts)
    for row, text in enumerate(texts):
        try:
            assert parse_rfc3339(text) == times[row] and row not in errors
        except TimestampError as error:
            assert errors[row].reason == error.reason
    return "good" if not errors else errors[min(errors)].reason


# --- configuration -----------------------------------------------------------------------------------------------

_FILES = tuple((DEPLOY / name).read_bytes() for name in ("minimal.toml", "strandline.toml"))
_LINES = tuple({line.strip() for file in _FILES for line in file.splitlines() if b"=" in line})
_MORE = (
    b'slack = { late_share = 0.001, at_most = "30s" }', b'slack = "5 s"', b"slack = 5", b"nane = 1", b"[[feed]]",
    b'name = "a"', b"time = { at = 5 }", b'source = "station"', b'expect_sources = ["a", "a"]', b"[[feed.sink]]",
    b"[limits]", b'kind = "http"', b'url = "http://user:secret@x/"', b'kind = "postgres"', b"d = 1979-05-27",
    b'dsn = "postgres://a:secret@b/c"', b'listen = "[::1]:99999"', b'headers = { A = "b" }', b'id = "/\\ud800"',
    b'expect_sources = ["\\u0000"]', b"[feed]", b"x = inf",
)  # fmt: skip
_SETTINGS = (b"5s", b"a,b", b"127.0.0.1:1", b"/x", b"")
_VARIABLES = (
    "STRANDLINE_LISTEN", "STRANDLINE_FEED__RIVER_GAUGES__SLACK", "STRANDLINE_LIMITS__BODIES_AT_MOST", "STRANDLINE_FEED",
    "STRANDLINE_FEED__RIVER_GAUGES__TIME__AT", "STRANDLINE_FEED__RIVER_GAUGES__EXPECT_SOURCES", "STRANDLINE___", "PATH",
    "STRANDLINE_FEED__RIVER_GAUGES__SINK__SQLITE__PATH", "STRANDLINE_DATA_DIR", "STRANDLINE_SERVICE_HOST",
)  # fmt: skip


def _settings(draw: Random) -> tuple[str, dict[str, str]]:
    lines = draw.choice(_FILES).splitlines() if draw.random() < 0.7 else [draw.choice(_LINES) for _ in range(6)]
    for _ in range(draw.choice((0, 1, 1, 2, 4))):
        lines.insert(draw.randrange(len(lines) + 1), mutated(draw, draw.choice((*_LINES, *_MORE)), _LINES))
    text = b"\n".join(lines)
    text = mutated(draw, text, _FILES) if draw.random() < 0.3 else text
    names = [draw.choice(_VARIABLES) for _ in range(draw.choice((0, 0, 0, 1, 2)))]
    values = [mutated(draw, draw.choice(_SETTINGS)).decode("utf-8", "surrogateescape") for _ in names]
    return text.decode("utf-8", "replace"), dict(zip(names, values, strict=True))


def _configure(given: tuple[str, Mapping[str, str]]) -> str:
    try:
        config = parse(*given)
    except ConfigError as error:
        assert error.faults
        for fault in error.faults:
            assert fault.isprintable() and len(fault) < 2000, fault
            assert "secret" not in fault
        return "refused"
    for feed in config.feeds:
        feed.settings()
        feed.body_limits()
    return "good"


_AMOUNTS = (b"250ms", b"1.5m", b"5s", b"64MiB", b"1GB", b"0s", b"9223372036s", b"1e3s", b"\xc2\xb5s", b"0.000000001s")


def _amount(draw: Random) -> bytes:
    return mutated(draw, draw.choice(_AMOUNTS), _AMOUNTS)


def _read_amount(given: bytes) -> str:
    text, found = given.decode("utf-8", "replace"), []
    for read in (duration_ns, size_bytes):
        try:
            found.append(type(read(text)) is int)
        except ValueError:
            found.append(False)
    return "duration" if found[0] else "size" if found[1] else "refused"


FAULTS = ("malformed", "time_missing", "time_invalid", "time_out_of_range", "source_missing", "source_invalid")
FAULTS += ("id_missing", "id_invalid", "too_large", "too_deep", "cloudevent_invalid")
TARGETS: dict[str, Target] = {
    "bodies": Target(
        48_000,
        _body,
        _decode,
        frozenset({*FAULTS, "good", "nothing", "413", "422", "too_many_faults"}),
    ),
    "codings": Target(15_000, _coded, _decompress, frozenset({"good", "413", "415", "422"}), 20 * 2**20),
    "fields": Target(14_000, _field, _read_field, frozenset({"media type", "key", "time", "refused"})),
    "pointers": Target(6_000, _pointers, _point, frozenset({"good", "nothing there", "refused"})),
    "times": Target(4_000, _times, _read_times, frozenset({"good", "time_invalid", "time_out_of_range"})),
    "amounts": Target(5_000, _amount, _read_amount, frozenset({"duration", "size", "refused"})),
    "configuration": Target(4_000, _settings, _configure, frozenset({"good", "refused"}), 8 * 2**20),
}
