"""Laws of captures: what went in comes out, replays decide the same, and a broken file is told or still counts."""

from __future__ import annotations

import tempfile
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from helpers_captures import captured, continued, figures_of, folded, kept, lines_of, told, written
from helpers_feed import FOR_EVER_NS, Shell, Written, same_batch
from hypothesis import given, settings
from hypothesis import strategies as st
from strandline.core.columns import Batch, Fault, RequestKey
from strandline.core.effects import Deliver
from strandline.core.feed import Feed
from strandline.core.records import Kind, Mark, decode_mark, encode_mark
from strandline.core.settings import Settings
from strandline.errors import CaptureError
from strandline.replay import capture as capture_module
from strandline.replay.capture import Capture, Meta
from strandline.replay.replaying import TICK_NS, WhatIf
from strandline.replay.verifying import LOOK_AHEAD, Verifying

NAMES = ("gw-0", "gw-1", "gw-2")
SINKS = {"store": ["ordered"], "lanes": ["late", "quarantine"]}
times = st.integers(-5, 40)
steps = st.one_of(
    st.tuples(
        st.just("events"),
        st.lists(st.tuples(times, st.sampled_from(NAMES)), max_size=12),
        st.lists(
            st.builds(Fault, st.integers(1, 9), st.just("malformed"), st.just("no object"), st.binary()), max_size=2
        ),
    ),
    st.tuples(st.just("identified"), st.lists(st.tuples(times, st.sampled_from(NAMES)), max_size=5)),
    st.tuples(st.just("keyed"), st.sampled_from("ab"), times),
    st.tuples(st.just("tick")),
    st.tuples(st.just("promise"), st.sampled_from((*NAMES, "gw-9")), times),
    st.tuples(st.just("excuse"), st.sampled_from(NAMES)),
    st.tuples(st.just("drain"), st.sampled_from(("", "night shift"))),
    st.tuples(st.just("set_slack"), st.sampled_from((None, 0, 2, 20)), st.sampled_from((1, 3, 10))),
    st.tuples(st.just("pause"), st.sampled_from(("store", "lanes")), st.booleans()),
    st.tuples(st.just("taken"), st.sampled_from(("store", "lanes")), st.integers(0, 2)),
    st.tuples(st.just("restart")),
)
histories = st.lists(st.tuples(steps, st.sampled_from((0, 0, 1, 1, 2, 3, 7))), max_size=30)
some_settings = st.builds(
    Settings,
    name=st.just("river-gauges"),
    slack_ns=st.sampled_from((0, 1, 3, 10)),
    late_share=st.sampled_from((None, None, 0.1)),
    idle_after_ns=st.sampled_from((1, 4, FOR_EVER_NS)),
    hold_at_most_ns=st.sampled_from((1, 5, FOR_EVER_NS)),
    ahead_limit_ns=st.sampled_from((6, FOR_EVER_NS)),
    clock=st.sampled_from(("event", "arrival")),
    expect_sources=st.sampled_from(((), ("gw-1", "gw-7"))),
    undelivered_events_at_most=st.sampled_from((0, 3, 1_000_000)),
    batch_events_at_most=st.sampled_from((1, 2, 50_000)),
)


def carry_out(shell: Shell, step: tuple[Any, ...], now_ns: int) -> None:
    """One step of a history."""
    match step:
        case ("events", rows, bad):
            shell.events([time for time, _ in rows], now_ns, [name for _, name in rows], bad)
        case ("identified", rows):
            numbers = [abs(time) + 1 for time, _ in rows]
            shell.events([time for time, _ in rows], now_ns, [name for _, name in rows], identities=numbers)
        case ("keyed", text, time):
            shell.events([time], now_ns, key=RequestKey(text, b"%d" % time))
        case ("excuse", _):
            shell.step(step, now_ns, who="night shift" if now_ns % 2 else "")
        case ("drain", who):
            shell.step(("drain",), now_ns, who=who)
        case ("set_slack" | "pause" as act, *given):
            shell.act(act, *given, "why", now_ns=now_ns, who="night shift")
        case ("taken", sink, behind):
            for lane in SINKS[sink]:
                shell.taken(sink, lane, max(0, shell.feed.state.outbox.next_number[lane] - 1 - behind), now_ns)
        case ("restart",):
            shell.feed = continued(shell.feed)
            shell.do(shell.feed.start(now_ns, SINKS))
        case _:
            shell.step(step, now_ns)


def lived(chosen: Settings, history: list[tuple[Any, int]]) -> Shell:
    """A feed that went through a history; behind it come so many requests that the history is decided anew too."""
    shell, now_ns = Shell(chosen, SINKS), 0
    for step, pause in history:
        now_ns += pause
        carry_out(shell, step, now_ns)
    for number in range(LOOK_AHEAD):
        shell.events([100 + number], now_ns + 100 + number)
    return shell


def same(found: list[tuple[Batch, list[bytes]]], expected: list[tuple[Batch, list[bytes]]]) -> bool:
    return len(found) == len(expected) and all(
        same_batch(one, other) and lines == texts for (one, lines), (other, texts) in zip(found, expected, strict=True)
    )


@pytest.fixture(scope="module")
def folder():
    with tempfile.TemporaryDirectory() as name:
        yield Path(name)


@given(some_settings, histories, st.data())
@settings(max_examples=150)
def test_a_capture_replays_to_the_same_batches_from_wherever_it_begins(folder, chosen, history, data) -> None:
    """P8, also from the middle: with the state before it, the records behind it give what they gave then."""
    shell = lived(chosen, history)
    begin = data.draw(st.integers(0, len(shell.records) - 1))
    path = kept(folder / "any.capture", captured(shell, begin))
    assert same(folded(path), told(shell, begin))
    with Capture(path) as capture:
        assert capture.cut is None and capture.records == len(shell.records) - begin


@given(some_settings, histories)
@settings(max_examples=150)
def test_deciding_anew_gives_the_captured_releases(folder, chosen, history) -> None:
    shell = lived(chosen, history)
    with Capture(kept(folder / "verified.capture", captured(shell))) as capture:
        verifying = Verifying(capture)
        assert same(lines_of(verifying), told(shell))
    assert verifying.unlike is None and verifying.figures.verified
    starts = sum(step == ("restart",) for step, _ in history)
    assert verifying.folded_only <= (LOOK_AHEAD + 4) * (starts + 1), "the rest was decided"


@given(some_settings.filter(lambda chosen: not chosen.expect_sources), st.data())
@settings(max_examples=60)
def test_a_decision_that_was_changed_is_found(folder, chosen, data) -> None:
    """A test of the test above: another watermark in any mark, and the verdict is no."""
    history = [(("events", [(index, "gw-0")], []), 1) for index in range(12)]
    shell = lived(chosen, history)
    marks = [n for n, record in enumerate(shell.records[:-LOOK_AHEAD]) if record.kind == Kind.MARK]
    if not marks:
        return
    number = data.draw(st.sampled_from(marks))
    changed = decode_mark(shell.records[number].body)
    moved = Mark(changed.decided_ns, changed.watermark_ns - 1, changed.first_batch, changed.batch_events_at_most,
                 changed.source, changed.cause, changed.batch_bytes_at_most)  # fmt: skip
    records = list(shell.records)
    records[number] = Written(records[number].lsn, Kind.MARK, encode_mark(moved))
    with Capture(kept(folder / "changed.capture", written(records))) as capture:
        verifying = Verifying(capture)
        try:
            for _ in verifying.batches():
                pass
        except CaptureError:
            return  # the fold itself contradicts: the watermark went back
    assert verifying.unlike is not None and not verifying.figures.verified


@pytest.fixture(scope="module")
def sample(folder) -> tuple[bytes, Shell]:
    """A capture of several small blocks, of a lively feed."""
    shell = Shell(Settings("river-gauges", slack_ns=3, ahead_limit_ns=FOR_EVER_NS), SINKS)
    for number in range(60):
        carry_out(shell, ("events", [((number * 7) % 11 + number, NAMES[number % 3])] * (number % 4 + 1), []), number)
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(capture_module, "BLOCK_EVENTS", 12)
        return captured(shell, 20), shell


@given(st.data())
@settings(max_examples=200)
def test_a_capture_cut_anywhere_is_told_or_counts_up_to_there(folder, sample, data) -> None:
    content, shell = sample
    cut = data.draw(st.integers(0, len(content) - 1))
    path = kept(folder / "cut.capture", content[:cut])
    expected = told(shell, 20)
    try:
        found = folded(path)
    except CaptureError as error:
        assert str(path) in str(error)
        return
    assert same(found, expected[: len(found)])
    with Capture(path) as capture:
        assert capture.cut is not None and "cut short" in capture.cut


@given(st.data())
@settings(max_examples=200)
def test_a_flipped_bit_is_told_or_changes_nothing(folder, sample, data) -> None:
    content, shell = sample
    bit = data.draw(st.integers(0, 8 * len(content) - 1))
    damaged = bytearray(content)
    damaged[bit // 8] ^= 1 << bit % 8
    path = kept(folder / "flipped.capture", bytes(damaged))
    try:
        with Capture(path) as capture:
            cut = capture.cut
        found = folded(path)
    except CaptureError as error:
        assert str(path) in str(error)
        return
    expected = told(shell, 20)
    # Damage to the trailer makes it a capture that was cut short there: everything before it counts.
    assert same(found, expected) or (cut is not None and same(found, expected[: len(found)]))


def reference(shell: Shell, chosen: Settings) -> tuple[list[bytes], list[bytes], int]:
    """Released and late lines, and the peak held, of a feed that is ticked every 250 ms between the same arrivals."""
    feed, released, late, peak, ticked = Feed(chosen), [], [], 0, 0
    feed.start(0, {})

    def take() -> None:
        for effect in feed.synced(feed.next_lsn):
            if isinstance(effect, Deliver) and effect.batch.lane != "quarantine":
                rows = zip(effect.batch.times.tolist(), effect.batch.refs["source"].tolist(), strict=True)
                (released if effect.batch.lane == "ordered" else late).extend(rows)

    for given_arrival, now_ns in shell.requests.values():  # type: ignore[misc]
        while (ticked // TICK_NS + 1) * TICK_NS < now_ns:
            ticked = (ticked // TICK_NS + 1) * TICK_NS
            feed.tick(ticked)
            take()
        feed.arrive(given_arrival, now_ns, 0)
        take()
        peak = max(peak, feed.state.runs.held)
    return released, late, peak


@given(
    st.lists(
        st.tuples(
            st.integers(0, 3_000_000_000),
            st.lists(st.tuples(st.integers(-4_000, 2_000), st.sampled_from(NAMES)), min_size=1, max_size=6),
        ),
        min_size=1,
        max_size=25,
    ),
    st.builds(
        Settings,
        name=st.just("river-gauges"),
        slack_ns=st.sampled_from((0, 500_000_000, 3_000_000_000)),
        late_share=st.sampled_from((None, 0.2)),
        idle_after_ns=st.sampled_from((400_000_000, 2_000_000_000)),
        hold_at_most_ns=st.sampled_from((600_000_000, 5_000_000_000)),
        ahead_limit_ns=st.sampled_from((1_000_000_000, FOR_EVER_NS)),
        clock=st.sampled_from(("event", "arrival")),
    ),
)
@settings(max_examples=150)
def test_what_would_have_been_is_what_a_service_with_its_ticks_would_have_done(folder, requests, chosen) -> None:
    """Only ticks that can do something are made: that changes nothing against making all of them."""
    shell, now_ns = Shell(Settings("river-gauges", ahead_limit_ns=FOR_EVER_NS), SINKS), 0
    given_requests = {}
    for number, (pause, rows) in enumerate(requests):
        now_ns += pause
        shell.events([now_ns + offset * 1_000_000 for offset, _ in rows], now_ns, [name for _, name in rows])
        given_requests[number] = (shell.requests[shell.tokens], now_ns)
    shell.requests = given_requests  # type: ignore[assignment]
    released, late, _ = reference(shell, chosen)
    with Capture(kept(folder / "whatif.capture", captured(shell))) as capture:
        what_if = WhatIf(capture, chosen)
        found: dict[str, list[Any]] = {"ordered": [], "late": [], "quarantine": []}
        for batch in what_if.batches():
            if batch.lane != "quarantine":
                found[batch.lane] += zip(batch.times.tolist(), batch.refs["source"].tolist(), strict=True)
        what_if.feed.check()
    assert found["ordered"][: len(released)] == released and found["late"] == late
    figures = what_if.figures
    assert figures.released == len(found["ordered"]) == what_if.holds.events
    assert figures.received == sum(len(rows) for _, rows in requests)
    assert figures.received == figures.released + figures.late + figures.quarantined + figures.held_at_end
    assert figures.peak_held >= figures.held_at_end


def test_columns_are_the_same_with_and_without_lines(folder) -> None:
    shell = lived(Settings("river-gauges", slack_ns=3, ahead_limit_ns=FOR_EVER_NS), [])
    with (
        Capture(kept(folder / "with.capture", captured(shell))) as one,
        Capture(kept(folder / "without.capture", captured(shell, lines=False))) as other,
    ):
        assert one.meta == Meta("river-gauges", "journal", 7) and not other.meta.lines
        for mine, theirs in zip(one.blocks(), other.blocks(), strict=True):
            for name in ("times", "lengths", "sources", "arrived", "counts", "first_line", "lsns", "kinds"):
                assert np.array_equal(getattr(mine, name), getattr(theirs, name)), name
        verifying = Verifying(other)
        assert figures_of(verifying).verified
