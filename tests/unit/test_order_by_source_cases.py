"""Cases of `order = "source"`: what it is for, what each way of becoming final does, and what observers see."""

from __future__ import annotations

import itertools
from pathlib import Path

import numpy as np
import pytest
from helpers_captures import captured, kept
from helpers_feed import Shell, patient, saved_bytes
from strandline.cli import main
from strandline.core.columns import REF, TIME_MIN, as_refs, as_rows
from strandline.core.held_by_source import HeldBySource
from strandline.core.records import Cause, Kind, decode_mark
from strandline.core.settings import Settings
from strandline.dashboard.strands import ROWS_AT_MOST, look_into
from strandline.replay.capture import Capture
from strandline.replay.replaying import Folding, WhatIf
from strandline.replay.verifying import LOOK_AHEAD, Verifying
from strandline.sinks.rows import late_by_ns, rows_of

SECOND = 1_000_000_000
MINUTE = 60 * SECOND


def own(shell: Shell) -> dict[str, int]:
    state = shell.feed.state
    assert state.own is not None
    return dict(zip(state.sources.names, state.own.at.tolist(), strict=True))


def shell_of(**given: object) -> Shell:
    return Shell(patient(order="source", **given), sinks={"store": ["ordered", "late"]})


# ---- what it is for -------------------------------------------------------------------------------------------------


def holds_s(order: str, behind_s: int) -> dict[str, float]:
    """Mean hold of each gateway's events, in s: eight gateways, an event a second each, one of them behind."""
    chosen = {"slack_ns": 5 * SECOND, "idle_after_ns": 30 * SECOND, "hold_at_most_ns": 3600 * SECOND}
    shell = Shell(Settings("river-gauges", **chosen, **({"order": order} if order == "source" else {})), sinks={})
    names = [f"gw-{number}" for number in range(8)]
    for second in range(1, 1801):
        times = [second * SECOND] * 7 + [(second - behind_s) * SECOND]
        shell.events(times, second * SECOND, names)
    source = {}
    for request in shell.requests.values():
        lines = bytes(request.payload).split(b"\n")[:-1]
        source |= {line: names[number] for line, number in zip(lines, request.sources.tolist(), strict=True)}
    came = {line: token for token, request in shell.requests.items() for line in bytes(request.payload).split(b"\n")}
    held: dict[str, list[float]] = {name: [] for name in names}
    for batch in shell.batches["ordered"]:
        for line in shell.lines(batch):
            held[source[line]].append(batch.instant_ns / SECOND - came[line])  # request n came at second n
    assert not shell.batches["late"]
    return {name: float(np.mean(times)) for name, times in held.items()}


def test_a_gateway_15_minutes_behind_holds_the_others_only_where_the_feed_is_in_order_as_a_whole() -> None:
    """The numbers stand in core/ordering.md."""
    of_feed, of_source = holds_s("feed", 900), holds_s("source", 900)
    assert of_feed["gw-0"] == pytest.approx(905)  # what the last is behind, and the slack
    assert of_source["gw-0"] == pytest.approx(5)  # the slack
    assert of_feed["gw-7"] == of_source["gw-7"] == pytest.approx(5)
    assert holds_s("feed", 0) == holds_s("source", 0)  # where nobody is behind there is no difference


# ---- how an event becomes final -------------------------------------------------------------------------------------


def test_a_source_is_passed_by_its_own_newest_event_less_the_slack() -> None:
    shell = shell_of(slack_ns=5)
    shell.events([100, 10], 1, ["a", "b"])
    assert own(shell) == {"a": 95, "b": 5} and shell.out_times("ordered") == []
    shell.events([105, 12], 2, ["a", "b"])
    assert own(shell) == {"a": 100, "b": 7} and shell.out_times("ordered") == [100]
    outcome = shell.events([99, 99, 7, 6], 3, ["a", "b", "b", "b"])
    assert outcome is not None and outcome.late == 2  # 99 of a and 6 of b: each by its own source's watermark
    (late,) = shell.batches["late"]
    assert late.times.tolist() == [99, 6] and late.behind.tolist() == [100, 7] and late.behind_ns == 100


def test_an_event_at_its_sources_watermark_is_not_late_and_follows_at_once() -> None:
    shell = shell_of(slack_ns=5)
    shell.events([100], 1, "a")
    shell.events([95, 95], 2, "a")
    assert shell.out_times("ordered") == [95, 95] and own(shell) == {"a": 95}


def test_an_idle_source_is_final_up_to_its_newest_event() -> None:
    shell = shell_of(slack_ns=5, idle_after_ns=10)
    shell.events([100, 98], 1, "a")
    shell.events([50], 6, "b")
    shell.tick(11)
    assert own(shell) == {"a": 100, "b": 45} and shell.out_times("ordered") == [98, 100]
    outcome = shell.events([99, 104], 12, "a")
    assert outcome is not None and outcome.late == 1  # 99
    assert own(shell)["a"] == 100  # never back, although 104 - 5 lies before it


def test_an_excused_source_is_final_up_to_its_newest_event_until_it_speaks_again() -> None:
    shell = shell_of(slack_ns=5)
    shell.events([100, 50], 1, ["a", "b"])
    shell.act("excuse", "a", "its link is down", now_ns=2)
    assert own(shell) == {"a": 100, "b": 45} and shell.out_times("ordered") == [100]
    shell.events([110], 3, "a")
    assert own(shell)["a"] == 105


def test_a_promise_is_taken_at_its_word_by_its_own_source_only() -> None:
    shell = shell_of(slack_ns=5)
    shell.events([100, 100], 1, ["a", "b"])
    shell.act("promise", "a", 100, now_ns=2)
    assert own(shell) == {"a": 100, "b": 95} and shell.out_times("ordered") == [100]


def test_hold_at_most_lets_go_what_came_so_long_ago_and_nothing_else() -> None:
    shell = shell_of(slack_ns=50, hold_at_most_ns=60)
    shell.events([100, 80], 1, ["a", "b"])
    shell.events([101, 81], 11, ["a", "b"])
    shell.tick(61)
    assert shell.out_times("ordered") == [80, 100] and own(shell) == {"a": 100, "b": 80}
    last = [decode_mark(record.body) for record in shell.records if record.kind == Kind.MARK][-1]
    assert last.cause == Cause.HOLD_AT_MOST
    shell.tick(71)
    assert shell.out_times("ordered")[2:] == [81, 101]


def test_who_was_touched_is_kept_within_bounds_while_a_full_outbox_lets_no_mark_be_set() -> None:
    shell = shell_of(undelivered_events_at_most=0)
    shell.events([1, 1, 1], 1, ["a", "b", "c"])
    for number in range(100):
        shell.events([2 + number], 2, "a")
    touched = shell.feed.state.sources.touched
    assert touched is not None and sum(map(len, touched.pieces)) <= 3
    shell.taken("store", "ordered", 1, now_ns=3)
    assert own(shell) == {"a": 101, "b": 1, "c": 1} and shell.out_times("ordered")[3:] == list(range(2, 102))


def test_a_drain_lets_all_go_in_order_of_time() -> None:
    shell = shell_of(slack_ns=50)
    shell.events([100, 80, 100, 90], 1, ["a", "b", "b", "c"])
    shell.act("drain", now_ns=2)
    assert shell.out_times("ordered") == [80, 90, 100, 100] and own(shell) == {"a": 100, "b": 100, "c": 90}
    assert shell.out("ordered")[2:] == [b"1.0", b"1.2"]  # equal times in order of arrival


def test_a_shorter_slack_holds_at_once_and_a_longer_one_moves_nothing_back() -> None:
    shell = shell_of(slack_ns=10)
    shell.events([100, 50], 1, ["a", "b"])
    shell.act("set_slack", 2, 100, "why", now_ns=2, who="night shift")
    assert own(shell) == {"a": 98, "b": 48}
    shell.act("set_slack", 20, 100, "why", now_ns=3, who="night shift")
    shell.tick(4)
    assert own(shell) == {"a": 98, "b": 48}


# ---- settings that change -------------------------------------------------------------------------------------------


def test_a_feed_goes_over_to_order_within_its_sources_and_back() -> None:
    shell = Shell(patient(slack_ns=5), sinks={"store": ["ordered", "late"]})
    shell.events([100, 20], 1, ["a", "b"])
    assert shell.feed.state.watermark_ns == 15
    shell.do(shell.feed.start(2, {"store": ["ordered", "late"]}, {}, patient(slack_ns=5, order="source")))
    shell.tick(3)
    assert own(shell) == {"a": 95, "b": 15}
    shell.events([107, 21], 4, ["a", "b"])
    assert shell.out_times("ordered") == [100] and own(shell) == {"a": 102, "b": 16}
    shell.do(shell.feed.start(5, {"store": ["ordered", "late"]}, {}, patient(slack_ns=5)))
    assert shell.feed.state.reordered and shell.feed.state.watermark_ns == 102
    assert saved_bytes(shell.folded()) == saved_bytes(shell.feed)
    shell.tick(6)  # what is held before the watermark is let go, in one release, and from then on there is one order
    assert shell.out_times("ordered") == [100, 20, 21] and not shell.feed.state.reordered
    outcome = shell.events([101, 102, 103], 7, "b")
    assert outcome is not None and outcome.late == 1
    shell.act("drain", now_ns=8)
    assert shell.out_times("ordered") == [100, 20, 21, 102, 103, 107]


def test_settings_that_contradict_it_are_refused() -> None:
    with pytest.raises(ValueError, match='clock = "event" only'):
        Settings("river-gauges", order="source", clock="arrival")


# ---- observers ------------------------------------------------------------------------------------------------------


def test_nobody_is_said_to_hold_the_others() -> None:
    shell = shell_of(slack_ns=5 * SECOND)
    shell.events([1000 * SECOND, 100 * SECOND], 1000 * SECOND, ["a", "b"])
    view = shell.feed.snapshot(1000 * SECOND)
    assert (view.order, view.hold.why, view.hold_source) == ("source", "slack", None)
    assert view.watermark_ns == 95 * SECOND  # of the source furthest behind
    assert shell.feed.snapshot(1001 * SECOND).hold.why == "slack"


def test_the_dashboard_looks_at_a_sample_that_stands_for_all_that_is_held() -> None:
    random, held = np.random.default_rng(3), HeldBySource(fresh_events=1000)
    rows = 3 * ROWS_AT_MOST
    refs = np.zeros(rows, REF)
    refs["place"], refs["source"] = np.arange(rows), random.integers(0, 40, rows)
    times = random.integers(0, 10**6, rows)
    for part in np.array_split(np.arange(rows), 60):
        held.hold(times[part], as_rows(refs[part]))
    at = np.full(40, TIME_MIN)
    at[:20] = 500_000
    held.release(np.arange(20), at)
    held.check()
    look = look_into(held)
    assert look.sampled and len(look.times) <= ROWS_AT_MOST + len(held.lots)
    assert look.weights.sum() == pytest.approx(held.held)
    assert np.all(look.times[1:] >= look.times[:-1]) and np.all(look.times[look.sources < 20] > 500_000)
    assert look_into(HeldBySource()).sampled is False


# ---- what is held ---------------------------------------------------------------------------------------------------


def test_releases_are_those_of_one_sort_of_all_that_came() -> None:
    """Many sources and rows, against numpy's lexsort of everything that was ever held."""
    random, held, sources = np.random.default_rng(7), HeldBySource(fresh_events=200), 300
    at, came = np.full(sources, TIME_MIN), 0
    all_times, all_refs = np.empty(0, np.int64), np.empty(0, REF)
    for _ in range(60):
        rows = int(random.integers(1, 900))
        refs = np.zeros(rows, REF)
        refs["place"], refs["source"] = np.arange(came, came + rows), random.integers(0, sources, rows)
        times = random.integers(1, 50, rows) + np.maximum(at[refs["source"]], 0)
        came += rows
        held.hold(times, as_rows(refs))
        all_times, all_refs = np.concatenate((all_times, times)), np.concatenate((all_refs, refs))
        numbers = np.flatnonzero(random.random(sources) < 0.2)
        at[numbers] = np.maximum(at[numbers], 0) + random.integers(0, 40, len(numbers))
        passed = np.flatnonzero((all_times <= at[all_refs["source"]]) & np.isin(all_refs["source"], numbers))
        order = passed[np.lexsort((all_refs["place"][passed], all_times[passed]))]
        strand = held.release(numbers, at)
        assert np.array_equal(strand.times, all_times[order])
        assert np.array_equal(as_refs(strand.refs)["place"], all_refs["place"][order])
        all_times, all_refs = np.delete(all_times, passed), np.delete(all_refs, passed)
        held.check()
        assert held.held == len(all_times) == sum(held.lengths())
        assert np.array_equal(held.copied().times, all_times)


def test_a_sink_is_handed_the_rows_watermarks_with_the_rows_that_it_keeps() -> None:
    shell = shell_of(slack_ns=5)
    shell.events([100, 10], 1, ["a", "b"])
    shell.events([20, 4, 3], 2, ["a", "b", "b"])
    (late,) = shell.batches["late"]
    kept_rows = rows_of(late, [0, 2])
    assert kept_rows.behind.tolist() == [95, 5] and late_by_ns(kept_rows) == [75, 2]
    restored = shell.folded(saved_bytes(shell.feed), shell.feed.next_lsn)
    (again,) = restored.state.outbox.undelivered("late")
    assert again.behind.tolist() == [95, 5, 5]


# ---- replays --------------------------------------------------------------------------------------------------------


def lived() -> Shell:
    """Two gauges, one of them 20 s behind; a promise, an excuse, and a drain."""
    chosen = patient(slack_ns=2 * SECOND, order="source", idle_after_ns=30 * SECOND)
    shell = Shell(chosen, sinks={"store": ["ordered", "late"]}, start_ns=100 * SECOND)
    for second in range(101, 121):
        shell.events([second * SECOND, (second - 20) * SECOND], second * SECOND, ["a", "b"])
        if second == 105:
            shell.act("promise", "b", 90 * SECOND, now_ns=105 * SECOND)
        if second == 107:
            shell.events([100 * SECOND], 107 * SECOND, "a")  # late
        if second == 110:
            shell.act("excuse", "b", "it is repaired", now_ns=110 * SECOND)
        if second == 118:
            shell.act("drain", now_ns=118 * SECOND, who="night shift", reason="the shift ends")
    for second in range(LOOK_AHEAD):
        shell.events([(122 + second) * SECOND], (122 + second) * SECOND, "a")
    return shell


def test_a_replay_folds_to_the_same_and_deciding_anew_decides_the_same(tmp_path: Path) -> None:
    shell = lived()
    assert len(shell.out("late")) > 1
    with Capture(kept(tmp_path / "a.capture", captured(shell))) as capture:
        folding = Folding(capture)
        told = [time for batch in folding.batches() for time in batch.times.tolist() if batch.lane == "ordered"]
        assert told == shell.out_times("ordered")
    with Capture(kept(tmp_path / "b.capture", captured(shell))) as capture:
        verifying = Verifying(capture)
        assert sum(len(batch) for batch in verifying.batches()) > 0
        assert verifying.unlike is None and verifying.folded_only <= LOOK_AHEAD + 1


def test_a_what_if_shows_what_the_other_order_would_have_held(tmp_path: Path) -> None:
    found = {}
    shell = lived()
    for order in ("feed", "source"):
        more = {"order": "source"} if order == "source" else {}
        chosen = patient(slack_ns=2 * SECOND, idle_after_ns=30 * SECOND, **more)
        with Capture(kept(tmp_path / f"{order}.capture", captured(shell))) as capture:
            what_if = WhatIf(capture, chosen)
            batches = [batch for batch in what_if.batches() if batch.lane == "ordered"]
            assert order == "feed" or what_if.figures.late == len(shell.out("late"))
            found[order] = sum(len(batch) for batch in batches if batch.instant_ns < 110 * SECOND)
    assert found["source"] > found["feed"]


def test_marks_tell_all_that_moves_watermarks() -> None:
    """Not one watermark of a source stands in the journal, and yet the fold knows them at each mark."""
    shell = lived()
    moved = 0
    for (one, other), record in zip(itertools.pairwise(range(len(shell.records))), shell.records, strict=False):
        if record.kind == Kind.MARK:
            before, after = (shell.folded(upto=upto).state.own for upto in (one, other))
            assert before is not None and after is not None and np.all(after.at >= before.at)
            moved += bool(np.any(after.at > before.at))
    assert moved > 20
    folded = shell.folded().state.own
    assert folded is not None and dict(zip(["a", "b"], folded.at.tolist(), strict=True)) == own(shell)


def test_advice_on_so_little_is_given_by_source_and_called_too_short(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    kept(tmp_path / "a.capture", captured(lived()))
    assert main(["advise", str(tmp_path / "a.capture"), "--late-share", "0.1"]) == 1
    assert "in order within each source" in (out := capsys.readouterr().out) and "too short" in out
