"""The ordering rows at a small scale: peers agree with the runs on every shape, courses hold what they say, counts."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from strandline_loadgen.bench import courses, ordering, peers
from strandline_loadgen.bench.harness import Scale

SMALL = Scale(events=0, held=(2_000,), body_events=500)


@pytest.mark.parametrize("name", courses.SHAPES)
def test_all_contestants_release_the_same_on_every_shape(name: str) -> None:
    course = courses.course_of(name, 2_000, SMALL)
    ordering.check_alike(course, courses.Pairs(course), peers.peers_at(2_000, full=True), course.measured)


@pytest.mark.parametrize("name", courses.SHAPES)
def test_a_course_holds_what_it_says_and_stays_filled(name: str) -> None:
    """Closed forms in the makers' docstrings (for exponential: check-values, section 9 (1))."""
    course = courses.course_of(name, 20_000, Scale(body_events=500))
    runs = peers.Runs()
    runs.fill(course, courses.Pairs(course))
    held = [runs.held.held]
    for batch in range(course.measured):
        runs.turn(course, courses.Pairs(course), batch)
        held.append(runs.held.held)
        runs.held.check()
    assert np.mean(held) == pytest.approx(20_000, rel=0.15 if name == "reversed" else 0.06)
    assert len(course.held_columns()[0]) == held[0]


def test_a_peer_that_does_not_agree_is_found_out() -> None:
    class Hasty(peers.ListSort):
        def turn(self, course: courses.Course, pairs: courses.Pairs, batch: int) -> Any:
            return super().turn(course, pairs, batch)[1:]

    course = courses.course_of("exponential", 2_000, SMALL)
    with pytest.raises(RuntimeError, match="runs and hasty do not release the same"):
        ordering.check_alike(course, courses.Pairs(course), [peers.Peer("hasty", Hasty)], 2)


def test_slow_peers_need_the_full_run_and_are_measured_over_one_batch() -> None:
    (insort,) = [peer for peer in peers.PEERS if peer.name == "bisect.insort"]
    assert insort in peers.peers_at(10_000, full=False)
    assert insort not in peers.peers_at(1_000_000, full=False)
    assert insort in peers.peers_at(1_000_000, full=True)
    assert (peers.batches_of(insort, 10_000, 20), peers.batches_of(insort, 1_000_000, 20)) == (20, 1)


def test_who_sorts_all_anew_is_measured_over_a_few_batches_where_that_is_much() -> None:
    few = {peer.name for peer in peers.PEERS if peers.batches_of(peer, 10_000_000, 40) == 4}
    assert few == {"numpy stable re-sort", "re-sort of packed keys", "list.sort", "polars sort"}
    assert all(peers.batches_of(peer, 10_000, 80) == 80 for peer in peers.PEERS)


def test_a_row_names_the_best_peer_and_both_ratios() -> None:
    (row,) = [row for row in ordering.rows(SMALL) if row.place["shape"] == "random"]
    sample = row.prepare(SMALL)()
    peer = sample.note.partition("; ")[0].removeprefix("best peer: ")
    assert sample.value == pytest.approx(sample.beside[f"{peer} ns/event"] / sample.beside["runs ns/event"])
    assert [also.name for also in row.also] == list(sample.also)
    assert sample.also[row.also[0].name] >= sample.value


def counts_of(name: str, held: int) -> tuple[int, int, int]:
    """Comparisons and copies of the measured batches, and the events that came in them."""
    course = courses.course_of(name, held, SMALL)
    runs = peers.Runs()
    pairs = courses.Pairs(course)
    runs.fill(course, pairs)
    merger = runs.held._merger
    before = runs.held.comparisons + merger.counts.comparisons, merger.counts.copies
    for batch in range(course.measured):
        runs.turn(course, pairs, batch)
    after = runs.held.comparisons + merger.counts.comparisons, merger.counts.copies
    return after[0] - before[0], after[1] - before[1], course.events_in(course.measured)


def test_exact_counts() -> None:
    """The same feed, the same counts; a sorted one is never merged; a merge is never dearer than k-way by halves."""
    for name in courses.SHAPES:
        comparisons, copies, events = counts_of(name, 100_000)
        assert (comparisons, copies, events) == counts_of(name, 100_000)
        assert comparisons <= events * np.log2(100_000), name
        assert copies <= events * np.log2(1000), name
    comparisons, copies, events = counts_of("sorted", 100_000)
    assert copies == 0
    assert comparisons <= 20 * courses.MEASURED_BATCHES, "a search or two for each batch, none for an event"
