"""What must hold of every arrival, whatever body it came from; and the comparison of two arrivals."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from strandline.core.columns import Arrival
from strandline.errors import FAULT_REASONS


def check_arrival(arrival: Arrival, source_numbers: Mapping[str, int]) -> None:
    """Assert the invariants that core/columns.py states for an arrival."""
    count = len(arrival.times)
    assert (arrival.times.dtype, arrival.sources.dtype, arrival.lengths.dtype) == (np.int64, np.uint32, np.uint32)
    assert len(arrival.sources) == len(arrival.lengths) == count
    payload = bytes(arrival.payload)
    assert len(payload) == int(arrival.lengths.sum()) + count
    lines = payload.split(b"\n")
    assert lines.pop() == b""
    assert [len(line) for line in lines] == arrival.lengths.tolist()
    _check_sources(arrival, source_numbers)
    numbers = line_numbers(arrival)
    assert numbers == sorted(set(numbers))
    assert arrival.line_numbers is None or numbers != list(range(1, count + 1))
    faulty = [fault.line for fault in arrival.faults]
    assert faulty == sorted(set(faulty))
    assert not set(faulty) & set(numbers)
    assert arrival.received == count + len(faulty)
    for fault in arrival.faults:
        assert fault.reason in FAULT_REASONS
        assert 0 < len(fault.detail) <= 200
        assert fault.detail.isascii()
        assert fault.detail.isprintable()
        assert b"\n" not in fault.raw
    if arrival.identities is not None:
        assert arrival.identities.dtype == np.uint64
        assert len(arrival.identities) == count


def _check_sources(arrival: Arrival, source_numbers: Mapping[str, int]) -> None:
    known = len(source_numbers)
    assert len(set(arrival.new_sources)) == len(arrival.new_sources)
    assert not set(arrival.new_sources) & set(source_numbers)
    fresh = [number - known for number in arrival.sources.tolist() if number >= known]
    assert list(dict.fromkeys(fresh)) == list(range(len(arrival.new_sources)))  # first appearance gives the order


def line_numbers(arrival: Arrival) -> list[int]:
    """Numbers of the lines that the events came on."""
    if arrival.line_numbers is None:
        return list(range(1, len(arrival.times) + 1))
    return arrival.line_numbers.tolist()


def source_names(arrival: Arrival, source_numbers: Mapping[str, int]) -> list[str]:
    """The name of each event's source."""
    names = [*sorted(source_numbers, key=source_numbers.__getitem__), *arrival.new_sources]
    return [names[number] for number in arrival.sources.tolist()]


def plain(arrival: Arrival) -> dict[str, object]:
    """The arrival as values that compare with ==."""
    return {
        "times": arrival.times.tolist(),
        "sources": arrival.sources.tolist(),
        "lengths": arrival.lengths.tolist(),
        "payload": bytes(arrival.payload),
        "new_sources": list(arrival.new_sources),
        "line_numbers": line_numbers(arrival),
        "faults": list(arrival.faults),
        "identities": None if arrival.identities is None else arrival.identities.tolist(),
    }
