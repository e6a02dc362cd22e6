"""Laws of records and saved states: what is written is what is read back, and what is read back behaves the same."""

from __future__ import annotations

import dataclasses
import struct

import msgspec
import numpy as np
import pytest
from helpers_feed import Shell, arrival, patient, saved_bytes
from hypothesis import given, settings
from hypothesis import strategies as st
from strandline.core.columns import NO_SOURCE, TIME_MAX, TIME_MIN, Arrival, Fault
from strandline.core.feed import Feed
from strandline.core.records import (
    FRAME_HEADER_BYTES,
    ActRecord,
    Cause,
    ExcuseRecord,
    IdleRecord,
    Mark,
    NumbersRecord,
    PromiseRecord,
    SettingsRecord,
    SmallRecord,
    SourcesRecord,
    TakenRecord,
    arrival_body,
    arrival_body_bytes,
    arrival_parts,
    decode_arrival,
    decode_mark,
    decode_small,
    encode_mark,
    encode_small,
    frame_bytes,
)
from strandline.core.saved import restore, save
from strandline.core.settings import Settings
from strandline.core.slack import SteeredSlack

int64 = st.integers(TIME_MIN, TIME_MAX)
names = st.text(max_size=8)
lanes = st.sampled_from(("ordered", "late", "quarantine"))


@st.composite
def arrivals(draw: st.DrawFn) -> Arrival:
    times = draw(st.lists(int64, max_size=12))
    count = len(times)
    lines = draw(st.lists(st.binary(max_size=9).map(lambda b: b.replace(b"\n", b" ")), min_size=count, max_size=count))
    given_numbers = draw(st.booleans())
    made = arrival(
        times,
        draw(st.lists(st.integers(0, 3), min_size=count, max_size=count)),
        lines=lines,
        line_numbers=list(range(5, 5 + count)) if given_numbers else None,
        faults=draw(st.lists(st.builds(Fault, st.integers(1, 99), names, names, st.binary(max_size=9)), max_size=3)),
    )
    if draw(st.booleans()):
        drawn = draw(st.lists(st.integers(0, 2**64 - 1), min_size=count, max_size=count))
        return dataclasses.replace(made, identities=np.array(drawn, dtype=np.uint64))
    return made


@settings(max_examples=200)
@given(arrivals(), int64, st.integers(0, 2**40).map(lambda lsn: lsn * 8))
def test_an_arrival_record_gives_back_its_columns_and_its_lines(given_arrival: Arrival, now_ns: int, lsn: int) -> None:
    body = b"".join(bytes(part) for part in arrival_parts(given_arrival, now_ns))
    read, told = decode_arrival(body, lsn), arrival_body(given_arrival, now_ns, lsn)
    for column in ("times", "lengths", "sources", "line_numbers", "identities"):
        one, other = getattr(read, column), getattr(told, column)
        assert (one is None) == (other is None)
        assert one is None or (one.dtype == other.dtype and one.tolist() == other.tolist())
    assert (read.arrived_ns, list(read.faults)) == (told.arrived_ns, list(told.faults))
    assert (read.payload_place, read.faults_place) == (told.payload_place, told.faults_place)
    frame = bytes(FRAME_HEADER_BYTES) + body
    start = read.payload_place - lsn
    assert frame[start : start + len(given_arrival.payload)] == bytes(given_arrival.payload)
    place = read.faults_place - lsn
    for fault in given_arrival.faults:
        assert frame[place : place + len(fault.raw)] == fault.raw
        place += len(fault.raw)
    bound = arrival_body_bytes(given_arrival)
    assert len(body) <= bound <= len(body) + 64 * len(given_arrival.faults)
    for size in range(len(body)):
        with pytest.raises((ValueError, struct.error, msgspec.MsgspecError)):
            decode_arrival(body[:size], lsn)


@given(int64, int64, st.integers(0, 2**64 - 1), st.integers(1, 2**32 - 1), st.sampled_from((0, 7, NO_SOURCE)))
def test_a_mark_is_read_as_it_was_written(now_ns: int, watermark: int, first: int, at_most: int, source: int) -> None:
    for cause in Cause:
        mark = Mark(now_ns, watermark, first, at_most, source, cause)
        assert len(encode_mark(mark)) == 40 and decode_mark(encode_mark(mark)) == mark


positions = st.dictionaries(names, st.dictionaries(lanes, st.integers(0, 2**60)))
small_records = st.one_of(
    st.builds(
        SettingsRecord,
        int64,
        st.builds(Settings, names, slack_ns=int64, clock=st.sampled_from(("event", "arrival"))),
        st.dictionaries(names, st.lists(lanes)),
        st.booleans(),
        positions,
    ),
    st.builds(SourcesRecord, st.integers(0, 2**32), st.lists(names)),
    st.builds(TakenRecord, int64, names, lanes, st.integers(0, 2**60)),
    st.builds(PromiseRecord, int64, st.integers(0, 2**32), int64),
    st.builds(ExcuseRecord, int64, st.integers(0, 2**32), names, names),
    st.builds(ActRecord, int64, st.sampled_from(("drain", "slack", "pause")), names, names, names, int64, int64),
    st.builds(NumbersRecord, int64, lanes, st.integers(1, 2**60)),
    st.builds(IdleRecord, int64),
)


@given(small_records)
def test_a_small_record_is_read_as_it_was_written(record: SmallRecord) -> None:
    kind, body = encode_small(record)
    assert decode_small(kind, body) == record
    assert frame_bytes(len(body)) % 8 == 0 and frame_bytes(len(body)) - len(body) - FRAME_HEADER_BYTES in range(8)


# ---- saved states ---------------------------------------------------------------------------------------------------


@st.composite
def shells(draw: st.DrawFn) -> Shell:
    """A feed with something in every drawer: held, undelivered in each lane, sources in each condition."""
    shell = Shell(
        patient(slack_ns=draw(st.integers(0, 40)), idle_after_ns=20, batch_events_at_most=3),
        sinks={"store": ["ordered", "late"], "lanes": ["quarantine"]},
    )
    for now_ns in range(draw(st.integers(0, 8))):
        rows = draw(st.lists(st.tuples(st.integers(0, 60), st.sampled_from(("a", "b", "c"))), min_size=1, max_size=5))
        bad = [Fault(1, "malformed", "no object", b"{")] * draw(st.integers(0, 1))
        shell.events([time for time, _ in rows], 3 * now_ns, [name for _, name in rows], bad)
        if draw(st.booleans()):
            shell.act("excuse", rows[0][1], "why", now_ns=3 * now_ns)
        shell.taken("store", "ordered", draw(st.integers(0, 3)), 3 * now_ns)
    return shell


@settings(max_examples=100)
@given(shells())
def test_a_restored_state_is_the_same_state_and_goes_on_the_same_way(shell: Shell) -> None:
    body = saved_bytes(shell.feed)
    state = restore(body)
    state.check()
    assert b"".join(bytes(part) for part in save(state)) == body
    other = Feed(shell.settings)
    other.restore(body, shell.feed.next_lsn)
    other.check()
    assert other.snapshot(50).ledger == shell.feed.snapshot(50).ledger
    folded = shell.folded()
    for feed in (folded, other):
        feed.start(60, shell.sinks)
        feed.arrive(arrival([30, 70, 10], 0, new_sources=() if feed.state.sources.names else ["a"]), 61, 99)
        feed.tick(300)
        feed.check()
    assert saved_bytes(other) == saved_bytes(folded)
    assert other.needed_place == folded.needed_place


@settings(max_examples=30)
@given(shells(), st.data())
def test_a_damaged_state_is_refused_or_at_least_read_to_its_end(shell: Shell, data: st.DataObject) -> None:
    """The file carries a CRC; this guards against a body that is cut or that another program wrote."""
    body = saved_bytes(shell.feed)
    cut = data.draw(st.integers(0, len(body) - 1))
    with pytest.raises(ValueError, match="snapshot"):
        restore(body[:cut])
    with pytest.raises(ValueError, match="snapshot"):
        restore(body + bytes(data.draw(st.integers(1, 9))))


def test_a_steered_slack_is_restored_to_the_last_bit() -> None:
    """Its sketch fades by halving; after some 45 times its counts no longer add up exactly in float64."""
    generator, steered = np.random.default_rng(1), SteeredSlack(0.05, 10**12)
    for second in range(1000):
        lateness = generator.exponential(1e9, 777).astype(np.int64)
        late = int(np.count_nonzero(lateness > steered.slack_ns))
        steered.learn(second * 10**9, len(lateness), late, lateness)
        if second % 50 == 0:
            restored = SteeredSlack(0.05, 10**12)
            restored.restore(steered.saved())
            assert restored.saved() == steered.saved()
            assert restored.sketch.total == steered.sketch.total


def test_the_layout_of_a_saved_sketch_stays() -> None:
    """Snapshots hold counts by place: 1,556 of them, of which these hold 1 ms, 1 s and 1 h."""
    sketch = SteeredSlack(0.05, 10**12).sketch
    assert len(sketch.counts) == 1556
    assert [sketch.buckets.place(value) for value in (0, 999_999, 10**9, 3600 * 10**9)] == [0, 346, 692, 1101]


def test_a_steered_slack_reads_a_snapshot_that_lacks_the_greatest_lateness() -> None:
    steered, restored = SteeredSlack(0.05, 10**12), SteeredSlack(0.05, 10**12)
    for second in range(100):
        lateness = np.full(10, second * 10**8, dtype=np.int64)
        steered.learn(second * 10**9, 10, 0, lateness)
    *before, greatest_ns = steered.saved()
    restored.restore(before)
    restored.sketch.check()
    assert greatest_ns <= restored.sketch.greatest_ns <= greatest_ns * restored.sketch.buckets.gamma
    assert restored.saved()[:-1] == before
