"""Laws of a partition's log: whatever the entries and the room, the same records at the same places."""

from __future__ import annotations

from itertools import pairwise

import msgspec
import pytest
from hypothesis import given
from hypothesis import strategies as st
from strandline.cluster.entries import (
    ENTRY_BYTES,
    FORMAT,
    Entry,
    Group,
    Origin,
    Placed,
    Saved,
    Taken,
    Whole,
    decode,
    encode,
    entry_of,
    groups_of,
    newest_saved,
    placed,
)
from strandline.core.records import VERSION, Kind, frame_bytes
from strandline.journal.frame import extend_crc

NUMBERS = st.integers(0, 2**63 - 1)
TEXTS = st.text(st.characters(exclude_categories=["Cs"]), max_size=60)
WHOLES = st.builds(Whole, st.integers(0, 255), st.integers(0, 255), st.binary(max_size=200))
TAKENS = st.builds(
    Taken, NUMBERS, st.integers(-(2**63), 2**63 - 1), st.integers(0, 2**40), st.integers(0, 2**32 - 1), TEXTS
)
SAVEDS = st.builds(Saved, NUMBERS, NUMBERS, st.integers(0, 2**20), NUMBERS, NUMBERS)
ENTRIES = st.lists(st.one_of(WHOLES, TAKENS, SAVEDS), max_size=40)
ROOMS = st.integers(600, 5_000)  # bytes; an entry of these takes up to 48 + 48 + 240
BEGINS = st.integers(0, 2**50)


def records(lsn: int, entries: list[Entry]) -> list[Placed]:
    """The law's own reckoning: one frame after the other."""
    found = []
    for entry in entries:
        if not isinstance(entry, Saved):
            found.append(Placed(lsn, entry))
            lsn += frame_bytes(entry.body_bytes)
    return found


@given(NUMBERS, BEGINS, ENTRIES, ROOMS)
def test_the_same_records_come_back_at_the_same_places(fence: int, lsn: int, entries: list[Entry], room: int) -> None:
    messages = [encode(group) for group in groups_of(fence, lsn, entries, room)]
    found = [decode(message) for message in messages]
    assert list(placed(found)) == records(lsn, entries)
    assert [entry for group in found for entry in group.entries] == entries
    assert all(group.fence == fence for group in found)
    assert all(len(message) <= room for message in messages)


@given(BEGINS, ENTRIES, ROOMS)
def test_groups_follow_one_another_to_the_end(lsn: int, entries: list[Entry], room: int) -> None:
    groups = groups_of(1, lsn, entries, room)
    assert bool(groups) == bool(entries)
    ends = [lsn, *(group.end_lsn for group in groups)]
    assert [group.lsn for group in groups] == ends[:-1]
    assert ends[-1] == lsn + sum(frame_bytes(entry.body_bytes) for entry in entries if not isinstance(entry, Saved))


@given(BEGINS, st.lists(WHOLES | TAKENS, min_size=3, max_size=30), st.data())
def test_a_missing_group_is_found(lsn: int, entries: list[Entry], data: st.DataObject) -> None:
    groups = [Group(FORMAT, 1, each.lsn, [each.entry]) for each in records(lsn, entries)]
    gone = data.draw(st.integers(1, len(groups) - 2))
    with pytest.raises(ValueError, match="the log goes on at position"):
        list(placed(groups[:gone] + groups[gone + 1 :]))


@given(BEGINS, ENTRIES, ROOMS)
def test_the_newest_snapshot_is_the_last_that_is_named(lsn: int, entries: list[Entry], room: int) -> None:
    named = [entry for entry in entries if isinstance(entry, Saved)]
    assert newest_saved(groups_of(1, lsn, entries, room)) == (named[-1] if named else None)


@given(st.integers(0, 2000), ROOMS)
def test_a_record_that_fits_in_no_message_is_refused_before_anything_is_written(size: int, room: int) -> None:
    entries: list[Entry] = [Whole(Kind.ACT, VERSION, bytes(size))]
    if size + 2 * ENTRY_BYTES > room:
        with pytest.raises(ValueError, match="fits in no message of the log"):
            groups_of(1, 0, entries, room)
    else:
        (group,) = groups_of(1, 0, entries, room)
        assert len(encode(group)) <= room


@given(st.binary(min_size=8, max_size=300), st.lists(st.integers(0, 300), max_size=4), NUMBERS, TEXTS)
def test_an_arrival_is_told_by_its_clock_its_size_and_its_crc(
    body: bytes, cuts: list[int], sequence: int, refused: str
) -> None:
    places = [0, *sorted(8 + cut % (len(body) - 7) for cut in cuts), len(body)]
    parts = [body[begin:end] for begin, end in pairwise(places)]
    entry = entry_of(Kind.ARRIVAL, parts, Origin(sequence, refused))
    arrived_ns = int.from_bytes(body[:8], "little", signed=True)
    assert entry == Taken(sequence, arrived_ns, len(body), extend_crc(0, body), refused)
    assert entry_of(Kind.MARK, parts, None) == Whole(Kind.MARK, VERSION, body)
    with pytest.raises(ValueError, match="an arrival without a message"):
        entry_of(Kind.ARRIVAL, parts, None)


@given(st.binary(max_size=200))
def test_bytes_that_are_no_group_say_so(data: bytes) -> None:
    try:
        group = decode(data)
    except ValueError as error:
        assert "not a group" in str(error) or "newer than this program" in str(error)
    else:
        assert decode(encode(group)) == group


@given(st.integers(FORMAT + 1, 2**31), st.lists(st.binary(max_size=20) | st.integers(0, 9), max_size=5))
def test_a_newer_format_says_so_whatever_else_it_holds(number: int, more: list[object]) -> None:
    with pytest.raises(ValueError, match=f"format {number} of the log is newer than this program"):
        decode(msgspec.msgpack.encode([number, *more]))
