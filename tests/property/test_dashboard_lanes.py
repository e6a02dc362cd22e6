"""Laws of the lanes: who holds the feed is always shown, what was searched for comes next, and nobody twice.

And of what is shown of a lane: held events and strands are those of the open runs, within stated bounds of work.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence

import numpy as np
import pytest
from helpers_feed import Shell, patient
from hypothesis import given, settings
from hypothesis import strategies as st
from strandline.core.columns import NO_SOURCE, as_refs
from strandline.core.held import Held
from strandline.core.sources import NEVER, Sources
from strandline.core.state import State
from strandline.dashboard import strands
from strandline.dashboard.lanes import AHEAD_NS, ROLES, Part, Search, choose
from strandline.dashboard.silence import silence_of
from strandline.dashboard.strands import held_of, look_into

NOW_NS, IDLE_NS = 10**12, 10**11


@st.composite
def many_sources(draw: st.DrawFn) -> Sources:
    """Up to 60 sources of which some are heard, some expected, excused, silent or ahead."""
    sources = Sources()
    sources.add([f"gw-{number}" for number in range(draw(st.integers(1, 60)))])
    for number, name in enumerate(sources.names):
        kind = draw(st.sampled_from(["heard", "heard", "heard", "silent", "ahead", "expected", "unknown"]))
        if kind == "expected":
            sources.expect([name], NOW_NS)
        elif kind != "unknown":
            heard = NOW_NS - draw(st.integers(IDLE_NS // 2, 3 * IDLE_NS)) if kind == "silent" else NOW_NS
            newest = NOW_NS + 2 * AHEAD_NS if kind == "ahead" else draw(st.integers(0, NOW_NS))
            sources.hear(np.array([number], dtype=np.uint32), np.array([newest]), heard)
        if draw(st.integers(0, 9)) == 0:
            sources.excuse(number)
    sources.expire(NOW_NS - IDLE_NS)
    return sources


@given(many_sources(), st.integers(1, 30), st.data())
def test_the_ones_that_matter_are_shown(sources: Sources, at_most: int, data: st.DataObject) -> None:
    count = len(sources.names)
    numbers = st.integers(0, count - 1)
    holder = data.draw(st.sampled_from([NO_SOURCE, *range(count)]))
    late = data.draw(st.lists(numbers, unique=True, max_size=10))
    found = data.draw(st.lists(numbers, unique=True, max_size=10))
    before = data.draw(st.lists(numbers, unique=True, max_size=at_most))
    part = Part(sources, holder, late, NOW_NS, IDLE_NS)
    chosen = choose(part, holder, at_most, found, before)
    assert len(chosen) == len(set(chosen)) <= at_most
    assert all(part.role(number) in ROLES for number in chosen)
    if holder != NO_SOURCE:
        assert chosen[0] == holder and part.role(holder) == "holding"
    first = [] if holder == NO_SOURCE else [holder]
    wanted = first + [number for number in found if number not in first]
    assert chosen[: len(wanted)] == wanted[:at_most]
    # No part is left out for want of room while another one has more than its share.
    roles = Counter(part.role(number) for number in chosen[len(wanted) :])
    room = at_most - len(wanted)
    for role in ("expected", "silent", "late", "ahead", "excused"):
        there = sum(part.role(number) == role and number not in wanted for number in range(count))
        if room >= 6 * max(1, at_most // 6):
            assert roles[role] >= min(there, max(1, at_most // 6)), (role, roles)


@given(many_sources(), st.integers(6, 30))
def test_ordinary_lanes_do_not_jump_about(sources: Sources, at_most: int) -> None:
    """Newest times move on; who was shown as an ordinary source and still is one stays."""
    part = Part(sources, NO_SOURCE, [], NOW_NS, IDLE_NS)
    before = choose(part, NO_SOURCE, at_most)
    heard = np.flatnonzero(sources.active[: len(sources.names)] & (sources.newest[: len(sources.names)] > 0))
    sources.newest[heard] = np.minimum(sources.newest[heard][::-1], NOW_NS)
    after = Part(sources, NO_SOURCE, [], NOW_NS, IDLE_NS)
    chosen = choose(after, NO_SOURCE, at_most, (), before)
    stayed = [number for number in before if part.role(number) == after.role(number) == "other"]
    fresh = [number for number in chosen if number not in before and after.role(number) == "other"]
    assert set(stayed) <= set(chosen) or not fresh


NAMES = ["Elbe-1", "elbe-2", "ELBE straße", "gw", "x" * 300, "<b>elbe</b>"]


@given(st.lists(st.sampled_from(NAMES), max_size=30), st.sampled_from(["elbe", "GW", "STRASSE", "Straße", "zz", "<B>"]))
def test_a_search_finds_every_name_that_contains_it_whatever_its_case(names: list[str], text: str) -> None:
    search, grown = Search(text, 8), []
    for name in names:  # sources are told one by one while it goes on
        grown.append(name)
        search.go_on(grown)
    expected = [number for number, name in enumerate(names) if text.casefold() in name.casefold()]
    assert search.found == expected[:8]


# ---- what is held of a source ----------------------------------------------------------------------------------------


def held_in(state: State) -> Counter[int]:
    """Held events by source, counted one by one."""
    return Counter(
        source for run in state.runs.runs for chunk in run.chunks for source in as_refs(chunk.refs)["source"].tolist()
    )


def shell_of(bodies: Sequence[Sequence[tuple[int, int]]], near_events: int = 0) -> Shell:
    """A feed that holds everything: bodies of (time, source). So many rows gather before they are dealt to runs."""
    shell = Shell(patient(slack_ns=10**15))
    shell.feed.state.runs = Held(shell.feed.state.merger, near_events=near_events)
    for now, body in enumerate(bodies, 1):
        shell.events([time for time, _ in body], now, [f"gw-{source}" for _, source in body])
    return shell


BODIES = st.lists(st.lists(st.tuples(st.integers(0, 1000), st.integers(0, 7)), min_size=1, max_size=30), max_size=12)


@given(BODIES, st.sampled_from([0, 20, 1000]))
@settings(max_examples=50, deadline=None)
def test_what_is_held_is_what_the_runs_hold(bodies: list[list[tuple[int, int]]], near_events: int) -> None:
    state = shell_of(bodies, near_events).feed.state
    look = look_into(state.runs)
    wanted = list(range(len(state.sources.names)))
    held = held_of(look, wanted, len(wanted), 8)
    assert not look.sampled
    assert {number: one.events for number, one in held.items()} == {n: held_in(state)[n] for n in wanted}
    sent = [(time, state.sources.numbers[f"gw-{source}"]) for body in bodies for time, source in body]
    for number, one in held.items():
        times = sorted(time for time, source in sent if source == number)
        assert len(one.strands) <= 8 and one.strands == sorted(one.strands)
        assert all(head <= tail and events for head, tail, events in one.strands)
        if one.strands and len(one.strands) < 8:
            assert (min(row[0] for row in one.strands), max(row[1] for row in one.strands)) == (times[0], times[-1])
            assert sum(row[2] for row in one.strands) == len(times)


@given(BODIES, st.integers(1, 4), st.integers(1, 20))
@settings(max_examples=50, deadline=None)
def test_a_look_is_bounded_and_says_so(bodies: list[list[tuple[int, int]]], pieces: int, rows: int) -> None:
    state = shell_of(bodies).feed.state
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(strands, "PIECES_AT_MOST", pieces)
        patch.setattr(strands, "ROWS_AT_MOST", rows)
        look = look_into(state.runs)
    assert len(look.times) <= max(pieces, rows)
    assert look.sampled == (len(look.times) < state.runs.held)
    assert look.weights.sum() == pytest.approx(state.runs.held)
    known = set(held_in(state))
    assert set(look.sources.tolist()) <= known


def test_runs_that_were_not_looked_at_are_stood_for() -> None:
    """40 open runs, of which 10 are looked at, the first and the last among them: what is held is estimated."""
    state = shell_of([[(1000 - 10 * body, 0), (1001 - 10 * body, 1)] for body in range(40)]).feed.state
    assert len(state.runs.runs) == 40
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(strands, "PIECES_AT_MOST", 10)
        look = look_into(state.runs)
    assert look.sampled and set(look.runs.tolist()) >= {0, 39} and len(set(look.runs.tolist())) == 10
    held = held_of(look, [0, 1], 2, 8)
    assert {number: one.events for number, one in held.items()} == pytest.approx({0: 40, 1: 40})


# ---- silent sources, counted ----------------------------------------------------------------------------------------


@given(many_sources(), st.sampled_from([0, 3599, 3600, 86_399, 86_400]), st.lists(st.integers(0, 59), max_size=3))
def test_the_silent_ones_are_counted(sources: Sources, later_s: int, excused: list[int]) -> None:
    """Judged one by one: idle after it was heard, or excused; how long; and who was heard last."""
    for number in excused:
        if number < len(sources.names):
            sources.excuse(number)
    now_ns = NOW_NS + later_s * 10**9
    known = range(len(sources.names))
    came = [number for number in known if sources.newest[number] != NEVER or sources.promised[number] != NEVER]
    silent = [n for n in known if sources.excused[n] or (n in came and not sources.active[n])]
    since_ns = {number: int(sources.heard[number]) for number in silent if number in came}
    lasting_s = [(now_ns - heard_ns) / 1e9 for heard_ns in since_ns.values()]
    found = silence_of(sources, now_ns)
    assert (found["known"], found["sources"]) == (len(sources.names), len(silent))
    assert found["active"] == sum(bool(sources.active[n] and not sources.excused[n]) for n in known)
    assert found["recent"] == sum(each < 86_400 for each in lasting_s)
    assert found["hour"] == sum(each >= 3_600 for each in lasting_s)
    if since_ns:
        number = sources.numbers[found["source"]]
        assert since_ns[number] == max(since_ns.values())
        assert found["heard_ms"] == since_ns[number] // 10**6 and found["excused"] == bool(sources.excused[number])
    else:
        assert found["heard_ms"] is None and (found["source"] is None) == (not silent)
