"""A state machine over the core without its shell: anything in any order, syncs late, crashes that cut the journal.

It is held against two small readings of the journal's records in plain Python, made anew after each step: `Model` is
what must come out, given the marks; `Waited` is where a mark must stand. Both follow a crash by themselves, for they
know nothing but the records that are left.
"""

from __future__ import annotations

import copy
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from typing import Any

from helpers_feed import FOR_EVER_NS, LANES, Shell, Written, same_batch, saved_bytes
from helpers_strands import NEAR, near_at_most
from hypothesis import event
from hypothesis import strategies as st
from hypothesis.stateful import RuleBasedStateMachine, initialize, invariant, precondition, rule
from strandline.core.columns import Batch, Fault, Lane
from strandline.core.records import Kind, decode_arrival, decode_mark, decode_small, frame_bytes
from strandline.core.settings import Settings

NEVER = -(2**63)
NAMES = ("gw-0", "gw-1", "gw-2")
SINKS: dict[str, list[Lane]] = {"store": ["ordered", "late"], "lanes": ["late", "quarantine"]}
Event = tuple[int, bytes]  # event time, line


# ---- the ten-line model ---------------------------------------------------------------------------------------------


class Model:
    """What a feed puts out: the late by themselves, all others in stable order of time, as far as marks let them."""

    def __init__(self) -> None:
        self.stands, self.held, self.out, self.late = NEVER, list[Event](), list[bytes](), list[bytes]()

    def arrive(self, events: Sequence[Event]) -> None:
        self.late += [line for time, line in events if time < self.stands]
        self.held += [each for each in events if each[0] >= self.stands]

    def mark(self, to: int) -> None:
        assert to >= self.stands, "the watermark goes back"
        self.out += [line for time, line in sorted(self.held, key=lambda each: each[0]) if time <= to]
        self.held, self.stands = [each for each in self.held if each[0] > to], to


class Waited:
    """Who is waited for, and since when each event is held."""

    def __init__(self) -> None:
        self.now, self.settings = NEVER, Settings("none")
        self.names: list[str] = []
        self.newest: dict[str, int] = {}
        self.heard: dict[str, int] = {}
        self.active: set[str] = set()
        self.excused: set[str] = set()
        self.vouched: dict[str, int] = {}
        self.promised: dict[str, int] = {}
        self.slack_set: tuple[int, int] | None = None  # slack, until when
        self.paused: set[str] = set()
        self.came: list[tuple[int, int]] = []  # when, event time

    def advance(self, now: int) -> None:
        self.now = max(self.now, now)
        if self.slack_set and self.slack_set[1] <= self.now:
            self.set_slack(None)
        self.active = {name for name in self.active if self.heard[name] > self.now - self.settings.idle_after_ns}

    @property
    def slack(self) -> int:
        return self.slack_set[0] if self.slack_set else self.settings.slack_ns

    def set_slack(self, chosen: tuple[int, int] | None) -> None:
        self.slack_set = chosen
        self.vouched = {name: time + self.slack for name, time in self.promised.items()}

    def speaks(self, name: str, now: int) -> None:
        self.heard[name] = now
        self.active.add(name)
        self.excused.discard(name)

    def place(self, now: int, held: Sequence[Event]) -> int:
        """Where the watermark may stand at this instant."""
        self.advance(now)
        chosen = self.settings
        counted = [max(self.newest.get(n, NEVER), self.vouched.get(n, NEVER)) for n in self.active - self.excused]
        basis = min(counted, default=max(self.newest.values(), default=NEVER))
        if chosen.clock == "arrival":
            basis = self.now
        times_held = {time for time, _ in held}
        due = [time for came, time in self.came if came <= self.now - chosen.hold_at_most_ns and time in times_held]
        return max([NEVER, basis - self.slack, *due])


class Reading:
    """Both, over the records of a journal as they are read one by one."""

    def __init__(self, shell: Shell) -> None:
        self.shell = shell
        self.model, self.waited = Model(), Waited()
        self.quarantine: list[bytes] = []
        self.records = self.arrivals = self.end_lsn = 0

    def on(self, until_lsn: int = 2**62) -> Reading:
        """Read on up to a position."""
        records = self.shell.records
        while self.records < len(records) and end_of(records[self.records]) <= until_lsn:
            self.read(records[self.records])
            self.end_lsn = end_of(records[self.records])
            self.records += 1
        return self

    def read(self, record: Written) -> None:
        model, waited = self.model, self.waited
        match record.kind:
            case Kind.SOURCES:
                waited.names += decode_small(Kind.SOURCES, record.body).names  # type: ignore[union-attr]
            case Kind.ARRIVAL:
                self._arrival(record)
            case Kind.MARK:
                mark = decode_mark(record.body)
                waited.advance(mark.decided_ns)
                model.mark(mark.watermark_ns)
            case kind:
                self._small(decode_small(Kind(kind), record.body))

    def _arrival(self, record: Written) -> None:
        body, journal = decode_arrival(record.body, record.lsn), self.shell.journal
        waited = self.waited
        self.arrivals += 1
        waited.advance(body.arrived_ns)
        bound = body.arrived_ns + waited.settings.ahead_limit_ns
        events, place = list[Event](), body.payload_place
        faulty, at = list[bytes](), body.faults_place
        for fault in body.faults:
            faulty.append(bytes(journal[at : at + fault.length]))
            at += fault.length
        for time, length, source in zip(
            body.times.tolist(), body.lengths.tolist(), body.sources.tolist(), strict=True
        ):
            line = bytes(journal[place : place + length])
            place += length + 1
            if time > bound:
                faulty.append(line)
                continue
            name = waited.names[source]
            waited.speaks(name, body.arrived_ns)
            waited.newest[name] = max(waited.newest.get(name, NEVER), time)
            waited.came.append((body.arrived_ns, time))
            events.append((time, line))
        self.quarantine += faulty
        self.model.arrive(events)

    def _small(self, record: Any) -> None:
        waited = self.waited
        match type(record).__name__:
            case "SettingsRecord":
                before, waited.settings = waited.settings, record.settings
                expected = set(record.settings.expect_sources)
                waited.paused &= set(record.sinks)
                if record.resumed:
                    waited.heard |= dict.fromkeys(waited.active, record.now_ns)
                else:
                    expected -= set(before.expect_sources)
                waited.advance(record.now_ns)
                waited.heard |= dict.fromkeys(expected - waited.active, record.now_ns)
                waited.active |= expected
            case "PromiseRecord":
                waited.advance(record.now_ns)
                name = waited.names[record.source]
                waited.promised[name] = max(waited.promised.get(name, NEVER), record.time_ns)
                waited.vouched[name] = max(waited.vouched.get(name, NEVER), record.time_ns + waited.slack)
                waited.speaks(name, record.now_ns)
            case "ExcuseRecord":
                waited.excused.add(waited.names[record.source])
                waited.advance(record.now_ns)
            case "ActRecord":
                waited.advance(record.now_ns)
                if record.act == "slack":
                    given = record.slack_ns is not None
                    waited.set_slack((record.slack_ns, record.until_ns) if given else None)
                waited.paused |= {record.subject} if record.act == "pause" else set()
                waited.paused -= {record.subject} if record.act == "resume" else set()
            case _:
                waited.advance(record.now_ns)


def end_of(record: Written) -> int:
    return record.lsn + frame_bytes(len(record.body))


# ---- the machine ----------------------------------------------------------------------------------------------------

times = st.integers(-5, 30)  # few values, so that ties are common
rows = st.lists(st.tuples(times, st.sampled_from(NAMES)), max_size=6)
passing = st.sampled_from((0, 0, 1, 1, 2, 6, -2))
faults = st.lists(st.builds(Fault, st.just(1), st.just("malformed"), st.just("no object"), st.binary()), max_size=2)
some_settings = st.builds(
    Settings,
    name=st.just("river-gauges"),
    slack_ns=st.sampled_from((0, 1, 3, 10)),
    idle_after_ns=st.sampled_from((1, 4, 10, FOR_EVER_NS)),
    hold_at_most_ns=st.sampled_from((1, 5, 12, FOR_EVER_NS)),
    ahead_limit_ns=st.sampled_from((0, 6, 20, FOR_EVER_NS)),
    clock=st.sampled_from(("event", "event", "arrival")),
    expect_sources=st.sampled_from(((), ("gw-0",), ("gw-1", "gw-2"))),
    undelivered_events_at_most=st.sampled_from((0, 3, 1_000_000)),
    held_events_at_most=st.sampled_from((6, 1_000_000)),
    batch_events_at_most=st.sampled_from((1, 2, 50_000)),
)


class FeedMachine(RuleBasedStateMachine):
    """One feed over several lives. A store's position outlives the process, as does what is durable."""

    @initialize(chosen=some_settings, near=st.sampled_from(NEAR))
    def begin(self, chosen: Settings, near: int) -> None:
        self.near = near_at_most(near)
        self.near.__enter__()
        self.shell = Shell(chosen, sinks=SINKS, synchronous=False)
        self.now = 0
        self.known: dict[tuple[Lane, int], Batch] = {}
        self.positions = {sink: dict.fromkeys(lanes, 0) for sink, lanes in SINKS.items()}
        self.saved: tuple[bytes, int] | None = None
        self.clock = 0  # the feed's own: it does not go back while it lives
        self.all, self.durable = Reading(self.shell), Reading(self.shell)
        self.durable_lsn = 0
        self.started_lsn = self.shell.feed.next_lsn

    def teardown(self) -> None:
        self.near.__exit__(None, None, None)

    def pass_time(self, passed: int) -> int:
        self.now += passed
        self.clock = max(self.clock, self.now)
        return self.now

    # ---- inputs -----------------------------------------------------------------------------------------------------

    @contextmanager
    def placed(self, *, arriving: bool = False, only_releasing: bool = False) -> Iterator[None]:
        """The watermark stands where it may then, if there is room for a release; an arrival finds it up to date."""
        stood, earlier = self.all.on().model.stands, copy.deepcopy(self.all.waited)
        held, records = self.all.model.held, len(self.shell.records)
        yield
        state, after = self.shell.feed.state, self.all.on()
        if state.outbox.undelivered_events > state.settings.undelivered_events_at_most:
            return
        place = max(stood, copy.deepcopy(after.waited).place(self.clock, held))
        if only_releasing:
            assert all(time > place for time, _ in after.model.held), "something is held that may be released"
        elif len(self.shell.records) > records:
            place = max(place, earlier.place(self.clock, held)) if arriving else place
            assert after.model.stands == place, "the watermark stands elsewhere"

    @rule(given=rows, bad=faults, passed=passing)
    def arrive(self, given: list[tuple[int, str]], bad: list[Fault], passed: int) -> None:
        clock, records = self.clock, len(self.shell.records)
        now = self.pass_time(passed)
        with self.placed(arriving=True):
            self.shell.events([time for time, _ in given], now, [name for _, name in given], bad)
        if len(self.shell.records) == records:
            self.clock = clock  # refused, or nothing was in it: the feed has not looked at its clock

    @rule(passed=passing)
    def tick(self, passed: int) -> None:
        now = self.pass_time(passed)
        with self.placed(only_releasing=True):
            self.shell.tick(now)

    @rule(name=st.sampled_from(NAMES), time=times, passed=passing)
    def promise(self, name: str, time: int, passed: int) -> None:
        now = self.pass_time(passed)
        with self.placed():
            self.shell.act("promise", name, time, now_ns=now)

    @rule(name=st.sampled_from(NAMES), passed=passing)
    def excuse(self, name: str, passed: int) -> None:
        if name in self.shell.feed.state.sources.numbers:
            now = self.pass_time(passed)
            with self.placed():
                self.shell.act("excuse", name, "why", now_ns=now)

    @rule(passed=passing)
    def drain(self, passed: int) -> None:
        self.shell.act("drain", now_ns=self.pass_time(passed), who="night shift" if passed else "")
        assert not self.shell.feed.state.runs.held and not self.all.on().model.held

    @rule(slack=st.sampled_from((None, 0, 2, 20)), lasts=st.sampled_from((1, 3, 10)), passed=passing)
    def set_slack(self, slack: int | None, lasts: int, passed: int) -> None:
        now = self.pass_time(passed)
        with self.placed():
            self.shell.act("set_slack", slack, lasts, "a storm", now_ns=now, who="night shift")

    @rule(sink=st.sampled_from(sorted(SINKS)), on=st.booleans(), passed=passing)
    def pause(self, sink: str, on: bool, passed: int) -> None:
        now = self.pass_time(passed)
        with self.placed():
            self.shell.act("pause", sink, on, "its disk is changed", now_ns=now, who="day shift")

    @rule(sink=st.sampled_from(sorted(SINKS)), behind=st.integers(0, 2), passed=passing)
    def taken(self, sink: str, behind: int, passed: int) -> None:
        for lane in SINKS[sink]:
            left = max((number for name, number in self.known if name == lane), default=0)
            self.positions[sink][lane] = max(self.positions[sink][lane], left - behind)
            self.shell.taken(sink, lane, self.positions[sink][lane], self.pass_time(passed))

    @rule(chosen=some_settings, passed=passing)
    def other_settings(self, chosen: Settings, passed: int) -> None:
        self.shell.do(self.shell.feed.start(self.pass_time(passed), SINKS, settings=chosen))

    # ---- the journal ------------------------------------------------------------------------------------------------

    @rule()
    def sync(self) -> None:
        self.shell.sync()

    @rule(share=st.floats(0, 1))
    def sync_a_part(self, share: float) -> None:
        ends = [end for end in map(end_of, self.shell.records) if self.durable_lsn <= end <= self.shell.sync_asked]
        if ends:
            self.shell.do(self.shell.feed.synced(ends[int(share * (len(ends) - 1))]))

    @precondition(lambda self: self.shell.feed.durable_lsn == self.shell.feed.next_lsn)
    @rule()
    def save(self) -> None:
        self.saved = (saved_bytes(self.shell.feed), self.shell.feed.next_lsn)
        assert self.saved[0] == saved_bytes(self.shell.folded()), "the live state is not the folded one"
        assert self.saved[0] == saved_bytes(self.shell.folded(*self.saved)), "the saved state is another one"

    @rule(kept=st.integers(0, 6), from_saved=st.booleans(), told=st.booleans(), passed=passing, chosen=some_settings)
    def crash(self, kept: int, from_saved: bool, told: bool, passed: int, chosen: Settings) -> None:
        """What was not durable is cut behind the first few records; a new process folds what is left."""
        shell = self.shell
        unsynced = [record for record in shell.records if record.lsn >= self.durable_lsn]
        shell.records = [each for each in shell.records if each.lsn < self.durable_lsn] + unsynced[:kept]
        self.durable_lsn = end_of(shell.records[-1]) if shell.records else 0
        del shell.journal[self.durable_lsn :]
        saved, lsn = self.saved if from_saved and self.saved else (None, 0)
        shell.feed = shell.folded(saved, lsn)
        assert saved_bytes(shell.feed) == saved_bytes(shell.folded()), "the saved state is another one"
        self.all = Reading(shell).on()
        self.clock = self.all.waited.now
        shell.do(shell.feed.start(self.pass_time(passed), SINKS, self.positions if told else {}, chosen))
        self.started_lsn = shell.feed.next_lsn
        event("crashed and lost something" if unsynced[kept:] else "crashed with nothing to lose")

    # ---- what must hold ---------------------------------------------------------------------------------------------

    def durably(self) -> Reading:
        """The records that can never be lost."""
        self.durable_lsn = max(self.durable_lsn, self.shell.feed.durable_lsn)
        return self.durable.on(self.durable_lsn)

    @invariant()
    def what_left_is_what_the_records_say(self) -> None:
        shell, durable = self.shell, self.durably()
        for lane in LANES:
            for batch in shell.batches[lane]:
                known = self.known.setdefault((lane, batch.number), batch)
                assert same_batch(known, batch), "a number names two batches"
            shell.batches[lane].clear()
        lines: dict[Lane, list[bytes]] = {lane: [] for lane in LANES}
        for (lane, _), batch in sorted(self.known.items()):
            lines[lane] += shell.lines(batch)
        says: dict[Lane, list[bytes]] = {
            "ordered": durable.model.out, "late": durable.model.late, "quarantine": durable.quarantine
        }  # fmt: skip
        # After a crash what is durable and had not left yet leaves once the start's own record is durable.
        settled = shell.feed.durable_lsn >= self.started_lsn
        for lane, expected in says.items():
            assert lines[lane] == (expected if settled else expected[: len(lines[lane])]), f"lane {lane}"

    @invariant()
    def the_state_is_what_the_records_say(self) -> None:
        state, reading = self.shell.feed.state, self.all.on()
        assert reading.end_lsn == self.shell.feed.next_lsn
        assert state.watermark_ns == reading.model.stands, "another watermark than the records say"
        waited = reading.waited
        assert (state.slack_ns, set(state.acts.paused)) == (waited.slack, waited.paused), "other acts are in force"
        ledger = state.ledger
        held = len(reading.model.held)
        assert state.runs.held == held == ledger.buffered and not ledger.balance(), f"{held} must be held: {ledger}"
        counts = (len(reading.model.out), len(reading.model.late), len(reading.quarantine))
        assert (ledger.released, ledger.late, ledger.quarantined) == counts, f"the records say {counts}: {ledger}"

    @invariant()
    def nothing_is_answered_before_it_is_durable(self) -> None:
        shell, durable = self.shell, self.durably()
        outcomes = [shell.answers[token] for token in shell.requests if shell.answers.get(token) is not None]
        assert len(outcomes) <= durable.arrivals, "answered before it was durable"
        assert sum(each.late for each in outcomes if each) <= len(durable.model.late), "more answered as late"
        accepted = len(durable.model.out) + len(durable.model.held)
        assert sum(each.accepted for each in outcomes if each) <= accepted, "more answered as accepted"
