"""Laws of the journal: the longest valid prefix and nothing else, on real files and through power failures."""

from __future__ import annotations

import tempfile
from collections.abc import Callable
from pathlib import Path

import pytest
from helpers_journal import FEED, Record, append, ends, flush, opened, records_of, seeded, write
from hypothesis import given, settings
from hypothesis import strategies as st
from simdisk import SimDisk
from strandline.errors import JournalError
from strandline.journal.disk import LocalDisk
from strandline.journal.journal import Journal
from strandline.journal.segments import SEGMENT_HEADER_BYTES

BODIES = st.one_of(st.binary(max_size=60), st.integers(0, 6000).map(lambda size: bytes([size % 251]) * size))
RECORDS = st.lists(st.tuples(st.integers(0, 255), BODIES), max_size=12)
SOME_RECORDS = st.lists(st.tuples(st.integers(0, 255), BODIES), min_size=1, max_size=6)


@given(st.lists(RECORDS, max_size=5))
@settings(max_examples=50)
def test_what_goes_in_comes_out_across_restarts(groups: list[list[Record]]) -> None:
    with tempfile.TemporaryDirectory() as root:
        disk = LocalDisk(root)
        written: list[Record] = []
        for group in groups:
            journal = opened(disk)
            assert records_of(journal) == written
            positions = write(journal, *group)
            assert positions == [0, *ends(written + group)][len(written) : -1]
            written += group
            assert records_of(journal) == written
            journal.close()
        journal = opened(disk)
        assert records_of(journal) == written and journal.next_lsn == ([0, *ends(written)][-1])
        journal.close()


def _last_segment(root: str) -> Path:
    return max((Path(root) / FEED).glob("journal-*.seg"))


def _torn(root: str, synced: list[Record], tail: list[Record]) -> tuple[Path, bytearray, int]:
    """Write `synced`, then `tail` into the same segment; the file, its content as if `tail`'s sync had never returned,
    and where the tail begins in it."""
    journal = opened(LocalDisk(root), segment_bytes=1 << 16)
    write(journal, *synced)
    journal.close()
    path = _last_segment(root)
    header = path.read_bytes()[:SEGMENT_HEADER_BYTES]
    journal = opened(LocalDisk(root), segment_bytes=1 << 16)
    write(journal, *tail)
    journal.close()
    content = bytearray(path.read_bytes())
    content[:SEGMENT_HEADER_BYTES] = header
    return path, content, SEGMENT_HEADER_BYTES + ends(synced)[-1]


def _expect(root: str, records: list[Record]) -> None:
    """The journal holds exactly these records, goes on, and nothing old comes back."""
    journal = opened(LocalDisk(root), segment_bytes=1 << 16)
    assert records_of(journal) == records and journal.next_lsn == ends(records)[-1]
    write(journal, (9, b"next"))
    journal.close()
    journal = opened(LocalDisk(root), segment_bytes=1 << 16)
    assert records_of(journal) == [*records, (9, b"next")]
    journal.close()


@given(SOME_RECORDS, SOME_RECORDS, st.data())
def test_cut_at_any_byte(synced: list[Record], tail: list[Record], data: st.DataObject) -> None:
    with tempfile.TemporaryDirectory() as root:
        path, content, begin = _torn(root, synced, tail)
        whole = bytes(content)
        cut = begin + data.draw(st.integers(0, ends(tail)[-1]))
        content[cut:] = bytes(len(content) - cut)
        path.write_bytes(content)
        # A frame that ends in zeros outlives a cut inside them: what counts is whether its bytes still stand.
        stands = [content[:end] == whole[:end] for end in (begin + end for end in ends(tail))]
        assert sum(stands) >= sum(begin + end <= cut for end in ends(tail))
        _expect(root, synced + tail[: sum(stands)])


@given(SOME_RECORDS, SOME_RECORDS, st.data())
def test_any_bit_flipped_in_the_tail(synced: list[Record], tail: list[Record], data: st.DataObject) -> None:
    with tempfile.TemporaryDirectory() as root:
        path, content, begin = _torn(root, synced, tail)
        bit = data.draw(st.integers(0, 8 * ends(tail)[-1] - 1))
        content[begin + bit // 8] ^= 1 << bit % 8
        path.write_bytes(content)
        _expect(root, synced + tail[: sum(end <= bit // 8 for end in ends(tail))])


@given(SOME_RECORDS, SOME_RECORDS, st.data())
def test_any_bit_flipped_before_the_tail_is_told(synced: list[Record], tail: list[Record], data: st.DataObject) -> None:
    with tempfile.TemporaryDirectory() as root:
        path, content, begin = _torn(root, synced, tail)
        byte = data.draw(st.integers(SEGMENT_HEADER_BYTES, begin - 1))
        content[byte] ^= 1 << data.draw(st.integers(0, 7))
        path.write_bytes(content)
        first = ([0, *ends(synced)])[sum(end <= byte - SEGMENT_HEADER_BYTES for end in ends(synced))]
        with pytest.raises(JournalError, match=rf"byte {SEGMENT_HEADER_BYTES + first} \(position {first}\)"):
            opened(LocalDisk(root), segment_bytes=1 << 16)
        assert path.read_bytes() == content


@given(SOME_RECORDS, SOME_RECORDS, st.data())
def test_any_bit_flipped_in_the_header(synced: list[Record], tail: list[Record], data: st.DataObject) -> None:
    with tempfile.TemporaryDirectory() as root:
        path, content, _begin = _torn(root, synced, tail)
        byte = data.draw(st.integers(0, SEGMENT_HEADER_BYTES - 1))
        content[byte] ^= 1 << data.draw(st.integers(0, 7))
        path.write_bytes(content)
        if byte < 40:
            with pytest.raises(JournalError, match=r"header at byte 0|written in format"):
                opened(LocalDisk(root), segment_bytes=1 << 16)
        else:  # a damaged note proves nothing and costs nothing
            _expect(root, synced + tail)


class _PowerCut(BaseException):
    """The machine stops in the middle of an operation."""


def _run(
    journal: Journal, choose: Callable[[int], int], known: list[Record], acts: list[tuple[str, list[Record]]]
) -> tuple[int, list[Record]]:
    """Carry out the acts until the power fails; returns how many records were answered for, and all appended."""
    appended, answered = list(known), len(known)
    first = 0
    try:
        for act, records in acts:
            match act:
                case "append":
                    for record in records:
                        journal.reserve([len(record[1])])
                        appended.append(record)
                        journal.append(journal.next_lsn, record[0], [record[1]])
                case "flush":
                    journal.flush()
                    answered = len(appended)
                    journal.check()
                case "replenish":
                    journal.replenish()
                case "snapshot":
                    first = choose(answered + 1)
                    journal.write_snapshot([0, *ends(appended)][first], [b"state %d" % first])
                case "reopen":
                    journal.flush()
                    answered = len(appended)
                    journal.close()
                    return answered, appended
    except _PowerCut:
        pass
    return answered, appended


ACTS = st.lists(
    st.one_of(
        st.tuples(st.just("append"), SOME_RECORDS),
        st.tuples(st.just("flush"), st.just([])),
        st.tuples(st.sampled_from(["replenish", "snapshot", "reopen"]), st.just([])),
    ),
    max_size=12,
)


@given(st.lists(st.tuples(ACTS, st.integers(0, 60)), min_size=1, max_size=4), st.integers(0, 2**32), st.booleans())
@settings(max_examples=200)
def test_power_failures_cost_only_what_was_not_answered(lives: list, seed: int, torn_sectors: bool) -> None:
    # P1 and P2 at the journal: after each power failure, in the middle of any operation, with any choice of what the
    # medium kept: everything answered for is there, in order, and what else is there was appended right behind it.
    choose = seeded(seed)
    disk = SimDisk()
    known: list[Record] = []
    for acts, fail_at in lives:
        answered, appended = len(known), known
        with disk.failing(fail_at, _PowerCut):
            try:
                journal = opened(disk)
            except _PowerCut:
                pass
            else:
                assert records_of(journal) == known
                answered, appended = _run(journal, choose, known, acts)
        disk = disk.crash(choose, torn_sectors=torn_sectors, any_order=True)
        journal = opened(disk)
        found = records_of(journal)
        assert len(found) >= answered and found == appended[: len(found)]
        for lsn, body in journal.snapshots():
            assert lsn == [0, *ends(found)][int(bytes(body).split()[1])]
        known = found
        if choose(2):
            disk = disk.crash(choose, torn_sectors=torn_sectors, any_order=True)


@given(st.lists(SOME_RECORDS, min_size=1, max_size=8), st.integers(0, 2**32))
def test_retention_leaves_no_hole_whatever_the_power_does(groups: list[list[Record]], seed: int) -> None:
    choose = seeded(seed)
    disk = SimDisk()
    journal = opened(disk)
    written: list[Record] = []
    for group in groups:
        write(journal, *group)
        written += group
    positions = [0, *ends(written)]
    with disk.failing(choose(12), _PowerCut):
        try:
            journal.drop_before(positions[choose(len(positions))])
            journal.check()
        except _PowerCut:
            pass
    again = opened(disk.crash(choose, any_order=True))
    assert records_of(again) == written[positions.index(again.first_lsn) :]
    assert again.next_lsn == positions[-1]


@given(SOME_RECORDS, SOME_RECORDS, SOME_RECORDS, st.integers(0, 2**32))
def test_what_a_start_has_read_survives_although_an_earlier_sync_failed(
    first: list[Record], second: list[Record], third: list[Record], seed: int
) -> None:
    # A failed sync leaves pages that read well and are not on the medium. The next start of the process (not of the
    # machine) reads them; whatever it found must then outlast a power failure.
    choose = seeded(seed)
    disk = SimDisk()
    journal = opened(disk, segment_bytes=1 << 16)
    write(journal, *first)
    append(journal, *second)
    with disk.failing(1), pytest.raises(Exception, match="simulated"):
        journal.flush()
    disk = disk.restarted()
    again = opened(disk, segment_bytes=1 << 16)
    assert records_of(again) == first + second
    append(again, *third)
    flush(again)
    after = opened(disk.crash(choose, torn_sectors=True, any_order=True), segment_bytes=1 << 16)
    assert records_of(after) == first + second + third
