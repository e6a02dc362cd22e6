"""Laws of runs: how an arrival falls into them, how they are dealt over the open runs, and how those are cut.

Outside opinions: list.sort, and the length of the longest strictly decreasing subsequence (Dilworth: that many runs are
needed at least), computed here by the plain quadratic definition.
"""

from __future__ import annotations

import itertools

import numpy as np
from helpers_strands import constants, held_rows, in_order, numbered, rows_of, strand
from hypothesis import event, given, settings
from hypothesis import strategies as st
from strandline.core.columns import TIME_MAX, TIME_MIN
from strandline.core.merge import Merger
from strandline.core.runs import OpenRuns, Strand, minimum_run, runs_of, stretches

few = st.integers(-3, 3)
some = st.integers(-50, 50)
any_time = st.one_of(few, some, st.sampled_from((TIME_MIN, TIME_MIN + 1, TIME_MAX - 1, TIME_MAX)))


@st.composite
def pieces(draw: st.DrawFn) -> list[int]:
    """Stretches that ascend, stand still or descend: what arrivals of real gateways look like."""
    found: list[int] = []
    for _ in range(draw(st.integers(0, 6))):
        start, length = draw(some), draw(st.integers(1, 12))
        step = draw(st.sampled_from((-3, -1, 0, 1, 2)))
        found += [start + step * index for index in range(length)]
    return found


columns = st.one_of(st.lists(few, max_size=40), st.lists(some, max_size=40), st.lists(any_time, max_size=40), pieces())


# ---- natural runs of an arrival -------------------------------------------------------------------------------------


@settings(max_examples=300)
@given(columns, st.one_of(st.none(), st.integers(1, 45)), st.integers(1, 13))
def test_the_runs_of_an_arrival_sorted_together_are_the_arrival_sorted(
    times: list[int], minimum: int | None, bits: int
) -> None:
    given_rows = strand(times)
    with constants(MINIMUM_RUN_BITS=bits):
        runs = runs_of(given_rows.times, given_rows.refs, minimum)
    assert in_order(rows_of(*runs)) == in_order(numbered(times))
    for run in runs:
        assert np.all(run.times[1:] >= run.times[:-1]) and len(run.times) == len(run.refs) > 0
    event(f"{min(len(runs), 5)} runs")


@settings(max_examples=300)
@given(columns, st.integers(1, 45))
def test_stretches_cover_the_arrival_and_are_what_they_say(times: list[int], minimum: int) -> None:
    found = stretches(np.array(times, dtype=np.int64), minimum)
    assert [row for stretch in found for row in range(stretch.start, stretch.stop)] == list(range(len(times)))
    for number, (start, stop, order) in enumerate(found):
        rows = times[start:stop]
        pairs = list(itertools.pairwise(rows))
        assert order != "ascending" or all(one <= other for one, other in pairs)
        assert order != "descending" or all(one > other for one, other in pairs)
        assert order in ("ascending", "descending", "mixed")
        if number + 1 < len(found):  # only the last one may be short
            assert stop - start >= minimum
    orders = [stretch.order for stretch in found]
    assert ("mixed", "mixed") not in set(itertools.pairwise(orders))


@given(st.integers(1, 2**40), st.integers(2, 16))
def test_the_minimum_run_cuts_an_arrival_into_at_most_a_power_of_two_pieces(events: int, bits: int) -> None:
    least = minimum_run(events, bits)
    assert least == events if events < 2**bits else 2 ** (bits - 1) <= least <= 2**bits
    pieces_needed = -(-events // least)
    power = 1 << (pieces_needed - 1).bit_length()
    assert power == pieces_needed or power - pieces_needed < power / 2
    assert pieces_needed <= power


# ---- dealing --------------------------------------------------------------------------------------------------------


def longest_falling(times: list[int]) -> int:
    """Length of the longest strictly decreasing subsequence, by definition."""
    best: list[int] = []
    for index, time in enumerate(times):
        best.append(1 + max((best[other] for other in range(index) if times[other] > time), default=0))
    return max(best, default=0)


@settings(max_examples=200)
@given(st.one_of(st.lists(few, max_size=40), st.lists(some, max_size=40), pieces()))
def test_one_by_one_as_many_runs_are_open_as_the_longest_fall_is_long(times: list[int]) -> None:
    open_runs = OpenRuns()
    for number, time in enumerate(times):
        open_runs.deal(strand([time], number))
        open_runs.check()
    assert len(open_runs.runs) == longest_falling(times)


@settings(max_examples=200)
@given(st.lists(columns.map(sorted), max_size=10), st.sampled_from((1, 4, 1024)))
def test_dealing_a_run_at_once_is_dealing_it_one_by_one(runs: list[list[int]], coalesce: int) -> None:
    whole, single = OpenRuns(), OpenRuns()
    first = 0
    with constants(COALESCE_EVENTS=coalesce):
        for times in runs:
            whole.deal(strand(times, first))
            whole.check()
            # The runs of a run dealt one by one: a fall never lies inside an ascending strand.
            for number, time in enumerate(times, first):
                single.deal(strand([time], number))
            first += len(times)
    assert held_rows(whole) == held_rows(single)
    at_once, one_by_one = (rows_of(*(c for run in dealt.runs for c in run.chunks)) for dealt in (whole, single))
    assert at_once == one_by_one


@settings(max_examples=150)
@given(st.lists(st.lists(some, min_size=1, max_size=30).map(sorted), min_size=1, max_size=6), st.randoms())
def test_orderly_sources_need_no_more_open_runs_than_they_are(sources: list[list[int]], random: object) -> None:
    waiting, dealt, number = [list(times) for times in sources], OpenRuns(), 0
    while any(waiting):
        chosen = random.choice([times for times in waiting if times])  # type: ignore[attr-defined]
        dealt.deal(strand([chosen.pop(0)], number))
        number += 1
    assert len(dealt.runs) <= len(sources)


# ---- cutting and dealing in turns -----------------------------------------------------------------------------------

turns = st.lists(st.one_of(columns, st.integers(-50, 50), st.sampled_from((TIME_MIN, TIME_MAX))), max_size=14)


@settings(max_examples=300)
@given(turns, st.sampled_from((1, 3, 1024)), st.sampled_from((2, 13)))
def test_cutting_and_dealing_in_turns_releases_what_a_stable_sort_would(
    steps: list[list[int] | int], coalesce: int, bits: int
) -> None:
    """Against a list that is sorted anew at each cut; late rows (behind the last cut) are not given, as in the feed."""
    open_runs, merger = OpenRuns(), Merger()
    held: list[tuple[int, int]] = []
    number, watermark = 0, TIME_MIN
    with constants(COALESCE_EVENTS=coalesce, MINIMUM_RUN_BITS=bits):
        for step in steps:
            if isinstance(step, list):
                times = [time for time in step if time >= watermark]
                arrived = strand(times, number)
                for run in runs_of(arrived.times, arrived.refs):
                    open_runs.deal(run)
                held += numbered(times, number)
                number += len(times)
            else:
                watermark = max(watermark, step)
                heads = open_runs.cut(watermark)
                held = in_order(held)
                assert rows_of(merger.merge(heads)) == [row for row in held if row[0] <= watermark]
                held = [row for row in held if row[0] > watermark]
            open_runs.check()
            assert open_runs.held == len(held)
            assert open_runs.head_ns == min((time for time, _ in held), default=None)
            assert open_runs.tail_ns == max((time for time, _ in held), default=None)
            assert sum(open_runs.lengths()) == len(held)
    assert in_order([row for run in open_runs.runs for row in rows_of(*run.chunks)]) == in_order(held)


def test_a_cut_that_closes_many_runs_keeps_the_others() -> None:
    open_runs = OpenRuns()
    for number in range(100):
        open_runs.deal(strand([1000 - number, 5000 - number], number * 2))
    assert len(open_runs.runs) == 100
    open_runs.deal(strand([850], 200))  # the last run's second row is 4901: this opens another
    assert len(open_runs.runs) == 101
    heads = open_runs.cut(950)
    open_runs.check()
    assert len(heads) == 51 and open_runs.held == 201 - 51 and len(open_runs.runs) == 100
    heads = open_runs.cut(4950)
    open_runs.check()
    assert len(open_runs.runs) == 50 and open_runs.head_ns == 4951
    open_runs.deal(strand([4950, 6000], 300))
    open_runs.check()
    open_runs.cut(TIME_MAX)
    open_runs.check()
    assert open_runs.held == 0 and open_runs.runs == [] and open_runs.head_ns is None


# ---- memory ---------------------------------------------------------------------------------------------------------


def owned(array: np.ndarray) -> int:
    """Bytes that a column keeps alive."""
    return array.base.nbytes if isinstance(array.base, np.ndarray) else array.nbytes


def kept_bytes(open_runs: OpenRuns) -> int:
    """Bytes that the held columns keep alive, what they are views of included."""
    columns_held = [column for run in open_runs.runs for chunk in run.chunks for column in chunk]
    owners = {id(c.base) if isinstance(c.base, np.ndarray) else id(c): owned(c) for c in columns_held}
    return sum(owners.values())


@settings(max_examples=40)
@given(st.randoms(use_true_random=False), st.integers(1, 6))
def test_what_is_kept_alive_is_at_most_twice_what_is_held(random: object, rounds: int) -> None:
    """24 bytes an event; a view may keep at most twice its own rows, so no small rest pins a large arrival."""
    open_runs, watermark = OpenRuns(), 0
    generator = np.random.default_rng(random.getrandbits(32))  # type: ignore[attr-defined]
    for _ in range(rounds):
        times = watermark + generator.integers(0, 20_000, 5000)
        if generator.random() < 0.5:
            times = np.sort(times)
        arrived = strand(times)
        for run in runs_of(arrived.times, arrived.refs, 64):
            open_runs.deal(run)
        watermark += int(generator.integers(0, 10_000))
        open_runs.cut(watermark)
        open_runs.check()
        assert kept_bytes(open_runs) <= 2 * 24 * open_runs.held + 24


def test_a_strand_without_rows_changes_nothing() -> None:
    open_runs = OpenRuns()
    open_runs.deal(strand([]))
    open_runs.check()
    assert open_runs.runs == [] and open_runs.cut(TIME_MAX) == [] and runs_of(*strand([])) == []
    assert isinstance(strand([1]), Strand)
