"""Advice on how long to wait: chosen and verified as a plain count says, drift caught, too short said, sources."""

from __future__ import annotations

from itertools import pairwise

import numpy as np
import pytest
from helpers_advice import SECOND, Columns, exponential, feed
from helpers_slack import Feed, simulate
from hypothesis import given, settings
from hypothesis import strategies as st
from strandline.replay.advice import VERDICTS, Advice, Rule, Wanted, advise, compare, cut_of, rounded_up
from strandline.replay.basis import Requests
from strandline.replay.intervals import wilson

NOBODY_IDLE = Rule("sources", None)


def advice_of(columns: Columns, share: float, rule: Rule = NOBODY_IDLE, **more: object) -> Advice:
    return advise(columns.blocks, columns.span_ns, rule, Wanted(share, **more))  # type: ignore[arg-type]


@st.composite
def feeds(draw: st.DrawFn) -> list[Requests]:
    """Some requests of one to four events of three sources, in ns, cut into blocks anywhere."""
    requests = draw(st.integers(4, 40))
    instants = np.cumsum(draw(st.lists(st.integers(0, 300), min_size=requests, max_size=requests))) + 1_000_000
    sizes = draw(st.lists(st.integers(1, 4), min_size=requests, max_size=requests))
    rows = sum(sizes)
    behind = draw(st.lists(st.integers(0, 2_000), min_size=rows, max_size=rows))
    sources = np.array(draw(st.lists(st.integers(0, 2), min_size=rows, max_size=rows)), dtype=np.uint32)
    times = np.repeat(instants, sizes) - np.array(behind)
    bounds = sorted({0, requests, *draw(st.lists(st.integers(1, requests), max_size=3))})
    starts = np.cumsum([0, *sizes])
    blocks = []
    for begin, end in pairwise(bounds):
        part = slice(int(starts[begin]), int(starts[end]))
        blocks.append(Requests(times[part], starts[begin:end] - starts[begin], instants[begin:end], sources[part]))
    return blocks


def plain(blocks: list[Requests]) -> Feed:
    """The same feed for the second opinion."""
    found = []
    for block in blocks:
        ends = [*block.starts[1:].tolist(), len(block.times)]
        for begin, end, instant in zip(block.starts.tolist(), ends, block.instants.tolist(), strict=True):
            assert block.sources is not None
            rows = [(int(block.times[row]), int(block.sources[row]), 1) for row in range(begin, end)]
            found.append((instant, rows))
    return Feed(found)


@settings(max_examples=150, deadline=None)
@given(feeds(), st.sampled_from(("sources", "event", "arrival")), st.sampled_from((0.5, 0.2, 0.05)))
def test_choice_and_count_are_those_of_a_plain_walk(blocks: list[Requests], basis: str, share: float) -> None:
    span = int(blocks[0].instants[0]), int(blocks[-1].instants[-1])
    cut = cut_of(span, 2 / 3)
    walked = simulate(plain(blocks), 0, basis)
    instants = [instant for instant, rows in plain(blocks).requests for _ in rows]
    lateness = [max(each, 0) for each in walked.lateness]
    first = [each for each, instant in zip(lateness, instants, strict=True) if instant < cut]
    second = [each for each, instant in zip(lateness, instants, strict=True) if instant >= cut]
    rule = Rule(basis, None)  # type: ignore[arg-type]
    if not first or not second:
        with pytest.raises(ValueError, match="empty"):
            advise(lambda: iter(blocks), span, rule, Wanted(share))
        return
    advice = advise(lambda: iter(blocks), span, rule, Wanted(share))
    least = min(slack for slack in {0, *first} if sum(each > slack for each in first) <= share * len(first))
    assert least <= advice.least_ns <= least * 1.0021 + 1
    assert advice.slack_ns == rounded_up(advice.least_ns)
    assert (advice.first.events, advice.second.events) == (len(first), len(second))
    assert advice.second.late == sum(each > advice.slack_ns for each in second)
    assert advice.interval == wilson(advice.second.late, len(second))
    assert sum(part.events for part in advice.tenths) == len(second)
    assert sum(part.late for part in advice.tenths) == advice.second.late
    found = compare(lambda: iter(blocks), advice, [0, 700], 3)
    for each in found.alternatives:
        assert each.first_share == pytest.approx(sum(late > each.slack_ns for late in first) / len(first))
        assert each.second_share == pytest.approx(sum(late > each.slack_ns for late in second) / len(second))
    late = sum(each > advice.slack_ns for each in lateness)
    assert sum(cost.late for cost in found.sources) == late
    assert sum(cost.events for cost in found.sources) == len(lateness)


@given(st.integers(0, 2**62))
def test_a_slack_is_rounded_up_to_three_digits(ns: int) -> None:
    found = rounded_up(ns)
    assert ns <= found <= ns * 1.01 and len(str(found).rstrip("0")) <= 4
    assert rounded_up(found) == found


def test_a_feed_that_gets_later_is_caught_out_of_sample() -> None:
    """Delays twice as long in the last third: what was chosen on the first two thirds does not hold there."""
    delays = np.random.default_rng(2).exponential(1, 30_000)
    delays[20_500:] *= 2
    columns = feed(50, delays, 1)
    advice = advice_of(columns, 0.01, Rule("arrival"))
    assert advice.verdict == "missed" and advice.interval[0] > 0.01
    assert advice_of(feed(50, delays[:20_000], 1), 0.01, Rule("arrival")).verdict != "missed"
    half = sum(part.late for part in advice.tenths[5:]) / sum(part.events for part in advice.tenths[5:])
    # Of delays twice as long a share of sqrt(0.01) exceeds the quantile of 0.01.
    assert half == pytest.approx(0.1, rel=0.15)


def test_a_feed_that_gets_better_is_shown_to_keep_the_share() -> None:
    delays = np.random.default_rng(2).exponential(1, 30_000)
    delays[19_000:] /= 2
    advice = advice_of(feed(50, delays, 1), 0.01, Rule("arrival"))
    assert advice.verdict == "shown" and advice.interval[1] <= 0.01


def test_a_longest_wait_that_contradicts_the_target_is_named_with_what_it_gives() -> None:
    columns = exponential(50, 1.0, 30_000, 4)
    advice = advice_of(columns, 0.001, Rule("arrival"), at_most_ns=3 * SECOND)
    assert advice.verdict == "contradiction" and advice.slack_ns == 3 * SECOND
    assert advice.attainable == pytest.approx(np.exp(-3), rel=0.06)
    assert advice.late_share == pytest.approx(np.exp(-3), rel=0.08)
    assert advice.least_ns > 5 * SECOND
    roomy = advice_of(columns, 0.001, Rule("arrival"), at_most_ns=60 * SECOND)
    assert roomy.attainable is None and roomy.verdict != "contradiction"


def test_a_short_capture_is_called_short() -> None:
    advice = advice_of(exponential(50, 1.0, 3_000, 4), 0.001, Rule("arrival"))
    assert (advice.verdict, advice.events_needed) == ("too_short", 2995)
    assert advice.interval_ns is None  # no two of so few events hold that quantile between them


def with_a_gap() -> Columns:
    """Nine events, an hour of quiet, then 2,840: the first two thirds of the time hold nine."""
    columns = exponential(50, 1.0, 3_000, 4)
    later = (np.arange(2_849) >= 9) * 3_600 * SECOND
    return Columns(columns.times[:2_849] + later, columns.arrivals[:2_849] + later, columns.sources[:2_849])


@pytest.mark.parametrize("at_most_ns", [None, 1_000_000])
def test_of_nine_events_no_verdict_is_drawn_and_the_gap_is_named(at_most_ns: int | None) -> None:
    columns = with_a_gap()
    advice = advice_of(columns, 0.01, Rule("arrival"), at_most_ns=at_most_ns)
    assert (advice.first.events, advice.second.events) == (9, 2_840)
    assert (advice.verdict, advice.events_needed, advice.nearly_empty) == ("too_short", 299, "first")
    assert not advice.supported
    coarse = advice_of(columns, 0.3, Rule("arrival"))  # nine are enough for so coarse a claim (0.7^9 < 0.05)
    assert coarse.verdict != "too_short" and coarse.nearly_empty == "first"


def test_a_steady_feed_has_no_part_that_is_nearly_empty() -> None:
    advice = advice_of(exponential(50, 1.0, 3_000, 4), 0.01, Rule("arrival"))
    assert advice.nearly_empty is None


@pytest.mark.parametrize("wanted", [Wanted(0.0), Wanted(1.0), Wanted(0.1, -1), Wanted(0.1, None, 1.0)])
def test_what_cannot_be_asked_for(wanted: Wanted) -> None:
    columns = exponential(50, 1.0, 100, 4)
    with pytest.raises(ValueError, match="between"):
        advise(columns.blocks, columns.span_ns, NOBODY_IDLE, wanted)


def gateways() -> Columns:
    """Three good gateways; gw-3 drops events into a buffer now and then, gw-4 sends all of it a minute later."""
    generator = np.random.default_rng(8)
    sources = generator.integers(0, 5, 40_000).astype(np.uint32)
    delays = generator.exponential(0.2, len(sources))
    buffered = (sources == 3) & (generator.random(len(sources)) < 0.1)
    delays[buffered] += generator.exponential(20, int(np.count_nonzero(buffered)))
    delays[sources == 4] += 60
    return feed(100, delays, 8, sources)


def test_the_sources_that_cost_the_wait_are_found_and_leaving_one_out_is_choosing_without_it() -> None:
    columns = gateways()
    advice = advice_of(columns, 0.005)
    found = compare(columns.blocks, advice, [], 2)
    assert found.sources_known == 5
    buffering, slow = sorted(found.sources, key=lambda cost: cost.source)
    assert (buffering.source, slow.source) == (3, 4)
    assert slow.delay_ns_mean == pytest.approx(60.2 * SECOND, rel=0.01)
    for cost in found.sources:
        rest = columns.without(cost.source)
        alone = advise(rest.blocks, columns.span_ns, NOBODY_IDLE, advice.wanted)
        assert cost.slack_without_ns == rounded_up(alone.least_ns)
    # Without the slow one the watermark follows the others at once, and most of its events would then come late.
    assert slow.lag_saved_ns is not None and slow.lag_saved_ns > 45 * SECOND  # from the 61st second of 400 on
    assert buffering.lag_saved_ns is not None and buffering.lag_saved_ns < SECOND
    assert slow.late_if_excused is not None and slow.late_if_excused > 0.9 * slow.events
    # Who buffers is hidden while the feed waits a minute for another anyway.
    without_slow = columns.without(4)
    again = advice_of(without_slow, 0.005)
    worst = compare(without_slow.blocks, again, [], 1).sources[0]
    assert worst.source == 3 and worst.late > 0.9 * (again.first.late + again.second.late)
    assert worst.slack_without_ns is not None and worst.slack_without_ns < again.slack_ns / 5


def test_blocks_and_their_borders_change_nothing() -> None:
    columns = gateways()
    whole = advise(lambda: columns.blocks(10**6), columns.span_ns, NOBODY_IDLE, Wanted(0.005))
    parts = advise(lambda: columns.blocks(701), columns.span_ns, NOBODY_IDLE, Wanted(0.005))
    assert whole == parts
    one = compare(lambda: columns.blocks(10**6), whole, [SECOND], 3)
    other = compare(lambda: columns.blocks(701), whole, [SECOND], 3)
    for cost, same in zip(one.sources, other.sources, strict=True):
        assert (cost.source, cost.events, cost.late, cost.slack_without_ns, cost.late_if_excused) == (
            same.source, same.events, same.late, same.slack_without_ns, same.late_if_excused
        )  # fmt: skip
        assert cost.lag_saved_ns == pytest.approx(same.lag_saved_ns, rel=1e-6)


def test_every_verdict_has_its_words() -> None:
    assert set(VERDICTS) == {"shown", "open", "missed", "contradiction", "too_short"}
