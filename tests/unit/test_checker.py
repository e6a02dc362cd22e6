"""The judge: every planted fault is found and named, nothing is found where nothing is wrong.

The law compares it with a judge that is slow and plain: lists, dictionaries and pairs.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterator
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from strandline_loadgen.bodies import cut_by_count
from strandline_loadgen.checker import FAULTS, Rows, Sent, Verdict, judge
from strandline_loadgen.evidence import EXAMPLES_AT_MOST
from strandline_loadgen.shapes import shape

Event = tuple[int, int, int]  # id, time, source


def sent_of(*events: Event) -> Sent:
    return Sent(Rows.of(events))


def faults(verdict: Verdict) -> dict[str, int]:
    """Those that were found, with their counts."""
    return {fault: getattr(verdict, fault) for fault in FAULTS if getattr(verdict, fault)}


# ------------------------------------------------------------------------------------------------ a plain judge


def plain_judge(
    sent: list[Event], requests: list[int], spans: list[tuple[int, int]], answered: list[bool], lanes: dict[str, list]
) -> dict[str, int]:
    """The six faults (but miscounted), straight from their meaning. Repeats that are absent are excused."""
    copies = Counter(event[0] for event in sent)
    told = {event[0]: event for event in sent}
    found = dict.fromkeys(FAULTS, 0)
    held: dict[str, Counter[int]] = {}
    for lane, events in lanes.items():
        right = [event for event in events if told.get(event[0]) == event]
        found["unexpected"] += len(events) - len(right)
        held[lane] = Counter(event[0] for event in right)
    for number, allowed in copies.items():
        in_lane = [held[lane][number] for lane in lanes]
        twice = sum(max(0, count - allowed) for count in in_lane)
        found["duplicated"] += twice
        found["misplaced"] += max(0, sum(in_lane) - allowed) - twice
        promised = sum(answered[r] for e, r in zip(sent, requests, strict=True) if e[0] == number)
        repeated = allowed > 1 and sum(in_lane) > 0
        found["lost"] += 0 if repeated else max(0, promised - sum(in_lane))
    found["disordered"] = plain_disorder(sent, requests, spans, lanes["ordered"], told)
    return {fault: count for fault, count in found.items() if count}


def plain_disorder(
    sent: list[Event], requests: list[int], spans: list[tuple[int, int]], ordered: list[Event], told: dict
) -> int:
    """Rows behind a later time, and rows behind one of equal time that certainly arrived after them."""
    where: dict[int, list[int]] = {}
    for line, event in enumerate(sent):
        where.setdefault(event[0], []).append(line)

    def certainly_after(one: int, two: int) -> bool:
        """Did event `one` certainly arrive after event `two`?"""
        begins = min(spans[requests[line]][0] for line in where[one])
        ends = max(spans[requests[line]][1] for line in where[two])
        if ends < begins:
            return True
        single = len(where[one]) == len(where[two]) == 1
        (first, *_), (second, *_) = where[one], where[two]
        return single and requests[first] == requests[second] and first > second

    count = 0
    for place, event in enumerate(ordered):
        if place and event[1] < ordered[place - 1][1]:
            count += 1
        start = place
        while start and ordered[start - 1][1] == event[1]:
            start -= 1
        group = [other for other in ordered[start:place] if told.get(other[0]) == other]
        if told.get(event[0]) == event and any(certainly_after(other[0], event[0]) for other in group):
            count += 1
    return count


@st.composite
def cases(draw: st.DrawFn) -> tuple:
    """A few events in a few requests, and lanes that hold about what was sent, with faults of every kind."""
    n = draw(st.integers(0, 12))
    base = draw(st.sampled_from([0, 100, 2**40]))
    step = draw(st.sampled_from([1, 3]))
    known = [(base + step * i, draw(st.integers(0, 3)), draw(st.integers(0, 2))) for i in range(n)]
    sent = draw(st.lists(st.sampled_from(known), max_size=14)) if known else []
    requests = sorted(draw(st.lists(st.integers(0, 4), min_size=len(sent), max_size=len(sent))))
    spans = [tuple(sorted((draw(st.integers(0, 9)), draw(st.integers(0, 9))))) for _ in range(5)]
    answered = draw(st.lists(st.booleans(), min_size=5, max_size=5))
    strange = st.tuples(st.integers(base - 1, base + 40), st.integers(0, 3), st.integers(0, 2))
    some = st.one_of(st.sampled_from(sent), strange) if sent else strange
    kept = draw(st.lists(st.booleans(), min_size=len(sent), max_size=len(sent)))
    ordered = [event for event, keep in zip(sent, kept, strict=True) if keep]
    if draw(st.booleans()):
        ordered.sort(key=lambda event: event[1])
    ordered = ordered + draw(st.lists(some, max_size=3))
    late = [event for event, keep in zip(sent, kept, strict=True) if not keep] + draw(st.lists(some, max_size=2))
    quarantined = draw(st.lists(st.sampled_from(sent), max_size=2)) if sent else []
    return sent, requests, spans, answered, {"ordered": ordered, "late": late, "quarantine": quarantined}


@settings(max_examples=600)
@given(case=cases(), piece=st.integers(1, 6))
def test_law_it_finds_what_the_plain_judge_finds(case: tuple, piece: int) -> None:
    sent, requests, spans, answered, lanes = case

    def pieces(events: list[Event]) -> Iterator[Rows]:
        for at in range(0, len(events), piece):
            yield Rows.of(events[at : at + piece])

    begins, ends = np.array(spans, dtype=np.int64).reshape(-1, 2).T
    evidence = Sent(Rows.of(sent), np.array(requests, dtype=np.int64), begins, ends, np.array(answered))
    ids = np.array([event[0] for event in lanes["quarantine"]], dtype=np.int64)
    verdict = judge(evidence, pieces(lanes["ordered"]), pieces(lanes["late"]), quarantined=ids)
    assert faults(verdict) == plain_judge(sent, requests, spans, answered, lanes)
    whole = judge(evidence, Rows.of(lanes["ordered"]), Rows.of(lanes["late"]), quarantined=ids)
    assert faults(whole) == faults(verdict), "in pieces or whole: the same"
    assert all(len(examples) <= EXAMPLES_AT_MOST for examples in verdict.examples.values())


# ------------------------------------------------------------------------------------------------ planted faults

GOOD = [(1, 10, 0), (2, 20, 1), (3, 20, 0), (4, 30, 1)]


def test_nothing_is_found_where_nothing_is_wrong() -> None:
    verdict = judge(sent_of(*GOOD), Rows.of(GOOD[:1] + GOOD[2:]), Rows.of(GOOD[1:2]))
    assert verdict.ok
    assert (verdict.sent, verdict.ordered, verdict.late) == (4, 3, 1)
    assert judge(sent_of(), Rows.of([])).ok, "nothing sent, nothing held"


@pytest.mark.parametrize(
    ("ordered", "late", "found"),
    [
        (GOOD[:3], [], {"lost": 1}),
        ([], [], {"lost": 4}),
        ([*GOOD, (9, 40, 0)], [], {"unexpected": 1}),
        ([GOOD[0], (2, 21, 1), *GOOD[2:]], [], {"unexpected": 1, "lost": 1, "disordered": 1}),  # another time
        ([GOOD[0], (2, 20, 0), *GOOD[2:]], [], {"unexpected": 1, "lost": 1}),  # another source
        ([GOOD[0], *GOOD], [], {"duplicated": 1}),
        (GOOD, [GOOD[3]], {"misplaced": 1}),
        (GOOD[:3], [GOOD[3], GOOD[3]], {"duplicated": 1}),
        ([GOOD[1], GOOD[0], *GOOD[2:]], [], {"disordered": 1}),  # time goes back
        ([GOOD[0], GOOD[2], GOOD[1], GOOD[3]], [], {"disordered": 1}),  # a tie against its arrival
        ([GOOD[0], GOOD[2], GOOD[3]], [GOOD[1]], {}),  # late is no disorder
    ],
)
def test_a_planted_fault_is_found_and_named(ordered: list[Event], late: list[Event], found: dict[str, int]) -> None:
    verdict = judge(sent_of(*GOOD), Rows.of(ordered), Rows.of(late))
    assert faults(verdict) == found
    assert verdict.ok == (not found)
    assert {fault for fault, examples in verdict.examples.items() if examples} == set(found)


def test_bytes_that_changed_are_not_what_was_sent() -> None:
    sent = replace(Rows.of(GOOD), digests=np.array([7, 8, 9, 10], dtype=np.uint32))
    assert judge(Sent(sent), sent).ok
    changed = replace(sent, digests=np.array([7, 8, 9, 11], dtype=np.uint32))
    assert faults(judge(Sent(sent), changed)) == {"unexpected": 1, "lost": 1}


def test_requests_that_overlap_may_have_arrived_either_way() -> None:
    rows, swapped = Rows.of(GOOD), Rows.of([GOOD[0], GOOD[2], GOOD[1], GOOD[3]])
    requests = np.array([0, 0, 1, 1])
    apart = Sent(rows, requests, np.array([0, 10]), np.array([9, 19]))
    overlapping = Sent(rows, requests, np.array([0, 9]), np.array([9, 19]))
    assert faults(judge(apart, swapped)) == {"disordered": 1}
    assert judge(overlapping, swapped).ok
    together = Sent(rows, np.array([0, 0, 0, 0]), np.array([0]), np.array([9]))
    assert faults(judge(together, swapped)) == {"disordered": 1}, "inside one request the lines' order counts"


def test_an_event_without_an_answer_may_be_there_or_not() -> None:
    sent = Sent(Rows.of(GOOD), np.array([0, 0, 1, 1]), answered=np.array([True, False]))
    for held in (2, 3, 4):
        verdict = judge(sent, Rows.of(GOOD[:held]))
        assert verdict.ok
        assert verdict.unpromised == 2
    assert faults(judge(sent, Rows.of(GOOD[:1]))) == {"lost": 1}
    assert faults(judge(sent, Rows.of([*GOOD, GOOD[3]]))) == {"duplicated": 1}


def test_quarantined_by_id_or_by_number() -> None:
    sent, held = sent_of(*GOOD), Rows.of(GOOD[1:])
    assert judge(sent, held, quarantined=np.array([1])).ok
    assert judge(sent, held, quarantined=1).ok
    assert faults(judge(sent, held, quarantined=np.array([2]))) == {"lost": 1, "misplaced": 1}
    assert faults(judge(sent, held, quarantined=np.array([1, 77]))) == {"unexpected": 1}
    assert faults(judge(sent, held, quarantined=0)) == {"lost": 1}
    assert faults(judge(sent, held, quarantined=3)) == {"miscounted": 2}
    assert judge(sent, held, quarantined=1).quarantined == 1


def test_repeats_by_id_by_number_or_unsaid() -> None:
    sent, once = sent_of(*GOOD, GOOD[3]), Rows.of(GOOD)
    twice = Rows.of([*GOOD, GOOD[3]])
    for duplicates in (None, 1, np.array([4])):
        verdict = judge(sent, once, duplicates=duplicates)
        assert verdict.ok
        assert verdict.duplicates == 1
    assert judge(sent, twice, duplicates=0).ok, "a feed without ids keeps both"
    assert faults(judge(sent, once, duplicates=0)) == {"lost": 1}
    assert faults(judge(sent, once, duplicates=2)) == {"miscounted": 1}
    assert faults(judge(sent, twice, duplicates=1)) == {"miscounted": 1}
    assert faults(judge(sent, twice, duplicates=np.array([4]))) == {"duplicated": 1}
    assert faults(judge(sent, Rows.of(GOOD[:3]))) == {"lost": 2}, "no copy at all is no repeat"


def test_the_sums_that_were_answered_must_be_there() -> None:
    sent = sent_of(*GOOD)
    assert judge(sent, Rows.of(GOOD[:3]), Rows.of(GOOD[3:]), told={"accepted": 3, "late": 1}).ok
    verdict = judge(sent, Rows.of(GOOD[:3]), Rows.of(GOOD[3:]), told={"accepted": 4, "late": 0})
    assert faults(verdict) == {"miscounted": 2}
    assert "4 were answered as accepted, 3 are there" in str(verdict)


def test_a_person_can_read_it_aloud() -> None:
    good = str(judge(sent_of(*GOOD), Rows.of(GOOD)))
    assert good.startswith("Sent 4 events. The store holds 4 in order and 0 in the late lane; 0 went to quarantine")
    assert good.endswith("Verdict: all is well.")
    bad = str(judge(sent_of(*GOOD), Rows.of(GOOD[:3])))
    assert "lost                  1  sent and answered, yet in no lane" in bad
    assert "event 4 of source 1, time 30 ns" in bad
    assert bad.endswith("Verdict: NOT well.")


def test_evidence_that_contradicts_itself_is_refused() -> None:
    rows = Rows.of(GOOD)
    with pytest.raises(AssertionError):
        judge(Sent(rows, np.array([1, 0, 1, 1])), rows)
    with pytest.raises(AssertionError, match="spans belong to requests"):
        judge(Sent(rows, None, np.array([0]), np.array([1])), rows)


@pytest.mark.parametrize("name", ["random_order", "duplicates", "low_tide"])
def test_a_whole_trace_sorted_is_well_and_one_fault_of_each_kind_is_found(name: str) -> None:
    trace = shape(name, 20_000, 1, clock_ns=10_000_000)
    bounds = cut_by_count(trace, 700)
    sent = Sent.of(trace, bounds)
    order = np.argsort(trace.times, kind="stable")
    held = Rows(trace.ids[order], trace.times[order], trace.sources[order])
    assert np.count_nonzero(held.times[1:] == held.times[:-1]) > 50, "there are ties to judge"
    assert judge(sent, (held.part(at, at + 999) for at in range(0, 20_000, 999)), duplicates=0).ok
    assert judge(Sent.of(trace), held, duplicates=0).ok
    keep = np.ones(20_000, dtype=bool)
    keep[[5, 6_000]] = False
    less = Rows(held.ids[keep], held.times[keep], held.sources[keep])
    late = held.part(5, 6)
    assert faults(judge(sent, less, late, duplicates=0)) == {"lost": 1}
    assert faults(judge(sent, held, late, duplicates=0)) == {"misplaced": 1}
