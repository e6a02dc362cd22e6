"""One frame: what encodes decodes, and nothing else does."""

from __future__ import annotations

from array import array

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from strandline.core.records import frame_bytes
from strandline.journal.frame import decode_frame, encode_frame, flatten, intact_end, next_intact, octets

POSITIONS = st.integers(0, 2**63 - 1).map(lambda n: n & ~7)


def decoded(data: bytes, lsn: int, offset: int = 0):
    return decode_frame(memoryview(data), octets(data), offset, len(data), lsn)


@given(POSITIONS, st.integers(0, 255), st.integers(0, 255), st.lists(st.binary(max_size=40), max_size=5))
def test_what_is_encoded_is_decoded(lsn: int, kind: int, version: int, parts: list[bytes]) -> None:
    body = b"".join(parts)
    data = b"".join(encode_frame(lsn, kind, flatten(parts), version))
    assert len(data) == frame_bytes(len(body)) and len(data) % 8 == 0
    frame = decoded(data, lsn)
    assert frame is not None
    assert (frame.lsn, frame.kind, frame.version, bytes(frame.body)) == (lsn, kind, version, body)
    assert frame.end_lsn == lsn + len(data)
    assert intact_end(memoryview(data), octets(data), 0, len(data), lsn) == len(data)


@given(POSITIONS, st.binary(max_size=40), st.data())
def test_every_single_bit_is_covered(lsn: int, body: bytes, data: st.DataObject) -> None:
    frame = bytearray(b"".join(encode_frame(lsn, 3, flatten([body]))))
    bit = data.draw(st.integers(0, 8 * len(frame) - 1))
    frame[bit // 8] ^= 1 << bit % 8
    assert decoded(bytes(frame), lsn) is None
    assert intact_end(memoryview(frame), octets(frame), 0, len(frame), lsn) == 0


@given(st.binary(max_size=40), POSITIONS, POSITIONS)
def test_a_frame_at_another_position_is_none(body: bytes, lsn: int, other: int) -> None:
    data = b"".join(encode_frame(lsn, 3, flatten([body])))
    assert (decoded(data, other) is None) == (lsn % 2**32 != other % 2**32)


@given(st.binary(max_size=40), st.data())
def test_a_frame_cut_short_is_none(body: bytes, data: st.DataObject) -> None:
    frame = b"".join(encode_frame(0, 3, flatten([body])))
    kept = data.draw(st.integers(1, len(frame) - 1))
    assert decoded(frame[:kept], 0) is None


def test_zeros_are_no_frame() -> None:
    assert decoded(bytes(64), 0) is None


@pytest.mark.parametrize(
    "part",
    [
        bytearray(b"gauge"),
        memoryview(b"gauge"),
        memoryview(bytearray(b"no gauge"))[3:],
        np.arange(3, dtype="<i8").data,
        np.zeros(2, dtype=[("place", "<i8"), ("length", "<u4")]).data,
        memoryview(array("I", [1, 2])),
        np.arange(6, dtype="<u2").reshape(2, 3).data,
    ],
    ids=["bytearray", "view", "slice", "int64", "structured", "array", "two dimensions"],
)
def test_any_contiguous_part_is_taken_as_its_bytes(part) -> None:
    plain = memoryview(part).tobytes()
    assert b"".join(encode_frame(8, 1, flatten([b"a", part]))) == b"".join(encode_frame(8, 1, [b"a" + plain]))


def test_parts_are_not_copied() -> None:
    part = bytearray(b"before")
    [flat] = flatten([part, b"", memoryview(b""), np.empty(0, "<i8").data])
    part[:] = b"after!"
    assert bytes(flat) == b"after!"


def test_a_part_with_gaps_is_refused() -> None:
    with pytest.raises(BufferError, match="contiguous"):
        flatten([memoryview(b"river-gauges")[::2]])


def test_the_next_intact_frame_is_found_behind_damage() -> None:
    first, second = (b"".join(encode_frame(lsn, 3, [b"level" * 9])) for lsn in (0, 64))
    data = bytearray(first + second)
    data[20] ^= 1
    assert next_intact(memoryview(data), octets(data), 0, len(data), 0) == 64
    data[100] ^= 1
    assert next_intact(memoryview(data), octets(data), 0, len(data), 0) is None
    assert next_intact(memoryview(data), octets(data), len(data), len(data), 128) is None
