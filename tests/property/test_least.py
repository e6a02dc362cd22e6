"""Laws of the tournament, the sources built on it, and the oldest places: against plain lists and dictionaries."""

from __future__ import annotations

from collections import Counter
from dataclasses import dataclass, field

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st
from strandline.core.arrivals import Arrivals
from strandline.core.columns import REF, TIME_MAX, TIME_MIN, Batch, Lane, QuarantineEntry, empty_refs, empty_times
from strandline.core.least import NONE, WIDTH, Least
from strandline.core.outbox import Outbox
from strandline.core.sources import NEVER, Sources

values = st.one_of(st.integers(-3, 3), st.integers(TIME_MIN, TIME_MAX), st.just(NONE))
# Sizes below, at and above one and two levels of 64 children.
sizes = st.sampled_from((1, 2, 63, 64, 65, 200, WIDTH * WIDTH - 1, WIDTH * WIDTH, WIDTH * WIDTH + 1, 5000))


def agree(least: Least, plain: list[int], bound: int) -> None:
    least.check()
    assert least.values()[: len(plain)].tolist() == plain
    lowest = min(plain)
    assert least.least() == ((lowest, plain.index(lowest)) if lowest != NONE else (NONE, -1))
    assert least.below(bound).tolist() == [place for place, value in enumerate(plain) if value < bound]


@settings(max_examples=80)
@given(sizes, st.lists(st.lists(st.tuples(st.integers(0, 4999), values), max_size=8), max_size=8), values)
def test_the_least_is_what_a_plain_list_says(size: int, updates: list[list[tuple[int, int]]], bound: int) -> None:
    least, plain = Least(), [NONE] * size
    least.grow(size)
    for update in updates:
        changed = {place % size: value for place, value in update}  # a place once, or twice with one value
        for place, value in changed.items():
            plain[place] = value
        if len(changed) == 1:
            least.set(*changed.popitem())
        else:
            least.update(np.array(list(changed), dtype=np.intp), np.array(list(changed.values()), dtype=np.int64))
        agree(least, plain, bound)


@settings(max_examples=60)
@given(st.lists(values, min_size=1, max_size=200), st.integers(1, 9000), values)
def test_growing_and_rebuilding_keep_the_values(given_values: list[int], more: int, bound: int) -> None:
    least = Least()
    least.rebuild(np.array(given_values, dtype=np.int64))
    agree(least, given_values, bound)
    least.grow(more)
    agree(least, given_values + [NONE] * max(0, more - len(given_values)), bound)


@given(st.lists(st.tuples(st.integers(0, 99), values), min_size=1, max_size=300))
def test_a_place_named_twice_with_one_value_counts_once(rows: list[tuple[int, int]]) -> None:
    least, plain = Least(), [NONE] * 100
    least.grow(100)
    changed = dict(rows)
    places = [place for place, _ in rows]  # some of them several times
    least.update(np.array(places, dtype=np.intp), np.array([changed[place] for place in places], dtype=np.int64))
    for place, value in changed.items():
        plain[place] = value
    agree(least, plain, 0)


# ---- sources --------------------------------------------------------------------------------------------------------


@dataclass(slots=True)
class Plain:
    newest: int = NEVER
    heard: int = NEVER
    active: bool = False
    excused: bool = False


times = st.one_of(st.integers(-5, 30), st.sampled_from((TIME_MIN + 1, TIME_MAX)))
acts = st.one_of(
    st.tuples(st.just("hear"), st.lists(st.tuples(st.integers(0, 9), times), min_size=1, max_size=6)),
    st.tuples(st.just("promise"), st.integers(0, 9), times),
    st.tuples(st.just("excuse"), st.integers(0, 9)),
    st.tuples(st.just("expect"), st.lists(st.integers(0, 9), max_size=3)),
    st.tuples(st.just("expire"), st.integers(0, 12)),
    st.tuples(st.just("keep_alive")),
)


@settings(max_examples=300)
@given(st.lists(acts, max_size=20))
def test_sources_do_what_a_dictionary_of_them_would(history: list[tuple[object, ...]]) -> None:
    sources, plain = Sources(), [Plain() for _ in range(10)]
    sources.add([f"gw-{number}" for number in range(10)])
    for now_ns, act in enumerate(history, start=1):
        match act:
            case ("hear", rows):
                columns = tuple(zip(*rows, strict=True))  # type: ignore[call-overload]
                sources.hear(np.array(columns[0], np.uint32), np.array(columns[1], np.int64), now_ns)
                for number, time in rows:  # type: ignore[attr-defined]
                    one = plain[number]
                    plain[number] = Plain(max(one.newest, time), now_ns, True, False)
            case ("promise", int(number), int(time)):
                sources.promise(number, time, now_ns, 3)
                plain[number] = Plain(max(plain[number].newest, min(time + 3, NONE - 1)), now_ns, True, False)
            case ("excuse", int(number)):
                sources.excuse(number)
                plain[number].excused = True
            case ("expect", list(numbers)):
                sources.expect([f"gw-{number}" for number in numbers], now_ns)
                for number in numbers:
                    if not plain[number].active:
                        plain[number].active, plain[number].heard = True, now_ns
            case ("expire", int(silence)):
                due = [one for one in plain if one.active and one.heard <= now_ns - silence]
                assert sources.falls_idle(now_ns - silence) == bool(due)
                assert sources.expire(now_ns - silence) == len(due)
                for one in due:
                    one.active = False
            case ("keep_alive",):
                sources.keep_alive(now_ns)
                for one in plain:
                    one.heard = now_ns if one.active else one.heard
        sources.check()
        active = [(number, one) for number, one in enumerate(plain) if one.active]
        waited = [(min(one.newest, NONE - 1), number) for number, one in active if not one.excused]
        assert sources.least() == min(waited, default=None)
        heard = [(one.heard, number) for number, one in active]
        assert sources.next_idle() == min(heard, default=None)
        assert sources.active_count() == len(heard)


# ---- what the journal is needed for ---------------------------------------------------------------------------------


@dataclass(slots=True)
class Sent:
    """Batches as a plain list would keep them."""

    places: dict[Lane, list[int]] = field(default_factory=lambda: {"ordered": [], "late": [], "quarantine": []})
    taken: dict[Lane, int] = field(default_factory=lambda: {"ordered": 0, "late": 0, "quarantine": 0})

    def least(self) -> int | None:
        return min((p for lane, found in self.places.items() for p in found[self.taken[lane] :]), default=None)


lanes = st.sampled_from(("ordered", "late", "quarantine"))


@settings(max_examples=200)
@given(st.lists(st.tuples(lanes, st.integers(0, 99), st.booleans()), max_size=40))
def test_the_oldest_place_is_the_least_over_all_that_is_undelivered(steps: list[tuple[Lane, int, bool]]) -> None:
    outbox, plain = Outbox(), Sent()
    outbox.serve({"one": ["ordered", "late", "quarantine"], "two": ["ordered"]}, {})
    for lane, place, takes in steps:
        if takes:
            number = min(plain.taken[lane] + place % 4, len(plain.places[lane]))
            outbox.taken("one", lane, number)
            if lane == "ordered":
                outbox.taken("two", lane, number)
            plain.taken[lane] = max(plain.taken[lane], number)
        else:
            refs = np.zeros(2, dtype=REF)
            refs["place"] = place + 1, place
            number = outbox.next_number[lane]
            if lane == "quarantine":
                entries = [QuarantineEntry(1, "malformed", "", place + 3, 1), QuarantineEntry(2, "ahead", "", place, 1)]
                batch = Batch(lane, number, empty_times(), empty_refs(), 0, 0, entries=entries)
            else:
                batch = Batch(lane, number, np.zeros(2, dtype=np.int64), refs, 0, 0)
            outbox.add(batch)
            plain.places[lane].append(place)
        outbox.check()
        assert outbox.oldest_place == plain.least()


@settings(max_examples=100)
@given(st.lists(st.tuples(st.integers(1, 5), st.integers(0, 5)), max_size=60), st.integers(0, 60))
def test_arrivals_know_when_each_held_event_came(steps: list[tuple[int, int]], restore_at: int) -> None:
    arrivals = Arrivals()
    held: list[tuple[int, int]] = []  # (place, arrival clock) of each held event
    for now_ns, (came, leave) in enumerate(steps):
        place = now_ns * 10
        arrivals.note(place, now_ns, came)
        held += [(place + index, now_ns) for index in range(came)]
        out, held = held[1 : 1 + leave], held[:1] + held[1 + leave :]  # the oldest one stays for a while
        if now_ns % 7 == 6:
            out, held = [*out, *held], []
        if out:
            refs = np.zeros(len(out), dtype=REF)
            refs["place"] = [place for place, _ in out]
            instants, counts = arrivals.release(refs)
            released = Counter(came_ns for _, came_ns in out)
            assert {
                when: many for when, many in zip(instants.tolist(), counts.tolist(), strict=True) if many
            } == released
        if now_ns == restore_at:
            restored = Arrivals()
            restored.restore(*arrivals.columns())
            arrivals = restored
        arrivals.check(len(held))
        oldest = min(held, default=None)
        assert arrivals.oldest_ns == (oldest and oldest[1])
        assert arrivals.oldest_place == (oldest and oldest[0] - oldest[0] % 10)


def test_a_release_of_few_events_does_not_walk_over_the_arrivals_between_them() -> None:
    arrivals = Arrivals()
    for now_ns in range(10_000):
        arrivals.note(now_ns * 100, now_ns, 2)
    refs = np.zeros(3, dtype=REF)
    refs["place"] = 0, 500_000, 999_900
    came_ns, counts = arrivals.release(refs)
    assert came_ns.tolist() == [0, 5000, 9999] and counts.tolist() == [1, 1, 1]
    arrivals.check(19_997)
