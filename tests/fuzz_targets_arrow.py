"""The fuzz lane's target for Arrow: streams of every type of column, packed and plain, damaged. See `fuzz_targets`."""

from __future__ import annotations

import struct
from functools import cache
from random import Random

import pyarrow as pa
from fuzz_mutate import TOKENS, mutated
from fuzz_targets import DECODERS, FAULTS, LIMITS, TABLE, Target, _arrival
from helpers_arrow import ARROW, stream
from strandline.ingest.decode import Decoder

# Library memory that one input may take: some copies of what is allowed once decoded.
POOL_BYTES_AT_MOST = 16 * LIMITS.decoded_bytes_at_most
_TOKENS = (*TOKENS[:1], *(struct.pack("<q", number) for number in (-1, 2**31, 2**40, 2**62, 20_001, 61)),
           *(struct.pack("<i", number) for number in (-1, 0, 8, 2**31 - 1)), b"\xff\xff\xff\xff")  # fmt: skip
_TIMES = ["2026-01-31T12:34:56Z", "2026-01-31T12:34:57.5Z", None, "yesterday", "2026-02-28T00:00:00+01:00"]


@cache
def _seeds() -> tuple[bytes, ...]:
    """A byte that tells the decoder, and a stream."""
    count = len(_TIMES)
    stations = pa.array(["gauge-2", "a", None, "x" * 257, ""])
    more = {
        "double": [1.5, float("nan"), None, 2.0, -0.0],
        "stamp": pa.array([1, None, 2**62, -(2**62), 0], pa.timestamp("ms", "UTC")),
        "blob": [b"", b"a", None, b"ab", b"abc"],
        "view": pa.array(["x" * 20, None, "", 'q"', "\n"], pa.string_view()),
        "day": pa.array([0, 1, None, 2**30, -1], pa.int32()).view(pa.date32()),
        "flag": [True, None, False, True, True],
        "nothing": pa.nulls(count),
        "note": pa.array([{"a": 1, "b": "x"}, None, {"a": None, "b": "y"}, {"a": 3, "b": None}, None]),
    }
    base = pa.table({"time": _TIMES, "source": stations.dictionary_encode(), "id": ["1", "2", "3", "", None]})
    integers = pa.table(
        {
            "ts": pa.array([1, 2**62, None, -5, 0], pa.int64()),
            "from": pa.StructArray.from_arrays([stations], ["station"]),
            "long": ["x" * 640, "", None, "y", "z"],
        }
    )
    plain = pa.table({"time": _TIMES[:1] * 3, "source": ["/gauge/1", "gauge-2", "a"], "id": ["1", "2", "3"]})
    tables = [(0, plain), (0, base), (1, integers)]
    tables += [(0, plain.append_column(name, pa.array(values)[:3])) for name, values in more.items()]
    tables += [(1, integers.append_column(name, pa.array(values))) for name, values in more.items()]
    return tuple(
        bytes([number]) + stream(table, cuts, packing)
        for number, table in tables
        for cuts in ([], [1, 1, 2])
        for packing in (None, "lz4", "zstd")
    )


def _body(draw: Random) -> bytes:
    seed = draw.choice(_seeds())
    return seed[:1] + mutated(draw, seed[1:], _seeds(), _TOKENS)


def _decode(given: bytes) -> str:
    decoder, body = DECODERS[given[0] % 2 if given else 0], given[1:]
    before = pa.default_memory_pool()
    pool = pa.proxy_memory_pool(before)
    pa.set_memory_pool(pool)
    try:
        found = [_arrival(way, decoder, body, ARROW) for way in (Decoder.decode, Decoder.decode_line_by_line)]
    finally:
        pa.set_memory_pool(before)
    assert found[0] == found[1], "the fast way and the slow way differ"
    assert pool.max_memory() <= POOL_BYTES_AT_MOST, f"it took {pool.max_memory()} bytes"
    arrival = found[0]
    if isinstance(arrival, str):
        return arrival
    assert TABLE and len(arrival["faults"]) <= LIMITS.faults_at_most
    return arrival["faults"][0].reason if arrival["faults"] else "good" if arrival["times"] else "nothing"


SEEN = frozenset({"good", "nothing", "422", "413", "time_invalid", "malformed", "source_invalid", "too_large"})
assert SEEN - {"good", "nothing", "422", "413"} <= {*FAULTS}
TARGETS = {"arrow": Target(6_000, _body, _decode, SEEN)}
