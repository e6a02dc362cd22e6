"""Remote writes on the wire: what is encoded is read back by google.protobuf, which knows nothing of our encoder."""

from __future__ import annotations

import math
import struct

import pytest
from helpers_remote_write import decoded
from hypothesis import given
from hypothesis import strategies as st
from strandline.sinks.remote_write_wire import CONTENT_HEADERS, labels_bytes, request_body, series_bytes, varint

INT64 = st.integers(-(2**63), 2**63 - 1)
NAMES = st.text(st.characters(exclude_categories=["Cs"]), max_size=300)
LABELS = st.dictionaries(NAMES, NAMES, max_size=5)
SAMPLES = st.lists(st.tuples(INT64, st.floats(allow_nan=False)), max_size=5)


@given(st.lists(st.tuples(LABELS, SAMPLES), max_size=5))
def test_what_is_encoded_is_decoded(series: list[tuple[dict[str, str], list[tuple[int, float]]]]) -> None:
    body = request_body(
        series_bytes(labels_bytes(labels.items()), [time for time, _ in samples], [value for _, value in samples])
        for labels, samples in series
    )
    found = decoded(body)
    assert found == [(tuple(sorted(labels.items())), samples) for labels, samples in series]
    signs = [math.copysign(1, value) for _, samples in found for _, value in samples]
    assert signs == [math.copysign(1, value) for _, samples in series for _, value in samples]


@pytest.mark.parametrize(
    ("number", "expected"),
    [
        (1, "01"),  # protobuf.dev, "Encoding": base 128 varints, the examples 1, 150 and -2
        (150, "9601"),
        (-2, "feffffffffffffffff01"),
        (0, "00"),
        (127, "7f"),
        (128, "8001"),
        (2**63 - 1, "ffffffffffffffff7f"),
        (-(2**63), "80808080808080808001"),
    ],
)
def test_varints_are_those_of_the_encoding(number: int, expected: str) -> None:
    assert varint(number).hex() == expected


def test_labels_are_sorted_as_their_bytes_are() -> None:
    """The receiver wants them sorted; it compares bytes, for which code points stand in the same order."""
    names = ["z", "A", "\U0001f30a", "\ue000", "_b", "a"]
    body = request_body([series_bytes(labels_bytes((name, "x") for name in names), [0], [1.0])])
    found = [name for name, _ in decoded(body)[0][0]]
    assert found == sorted(names, key=lambda name: name.encode())


def test_a_value_keeps_its_bits() -> None:
    values = [0.1, -0.0, 5e-324, math.inf, -math.inf, 2.0**53]
    found = decoded(request_body([series_bytes(b"", range(6), values)]))[0][1]
    assert [struct.pack("<d", value) for _, value in found] == [struct.pack("<d", value) for value in values]


def test_the_headers_are_those_of_the_specification() -> None:
    """Prometheus Remote-Write 1.0 specification, "Protocol"."""
    assert CONTENT_HEADERS == {
        "Content-Encoding": "snappy",
        "Content-Type": "application/x-protobuf",
        "X-Prometheus-Remote-Write-Version": "0.1.0",
    }
