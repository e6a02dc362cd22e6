"""Random histories of a feed with restarts, for the promises that are laws of the core.

A history is steps with the time that passes before each; `Player` plays it on `helpers_feed.Shell` and, at a restart,
goes on with what the journal gives back: folded from its start or from a saved state, after a stop or after a crash
that lost what was not synced.
"""

from __future__ import annotations

import hashlib
from typing import Any

from helpers_feed import FOR_EVER_NS, LANES, Shell, saved_bytes
from hypothesis import strategies as st
from strandline.core.columns import Batch, Fault
from strandline.core.feed import Feed
from strandline.core.records import VERSION, Kind, decode_arrival
from strandline.core.settings import Settings

NAMES = ("gw-0", "gw-1", "gw-2")
SINKS = {"store": ["ordered"], "lanes": ["late", "quarantine"]}
Step = tuple[Any, ...]
History = list[tuple[Step, int]]

times = st.integers(-5, 40)  # few values, so that ties are common
events = st.lists(st.tuples(times, st.sampled_from(NAMES)), min_size=1, max_size=12)
faults = st.lists(
    st.builds(Fault, st.integers(1, 9), st.just("malformed"), st.just("no object"), st.binary()), max_size=2
)
steps: st.SearchStrategy[Step] = st.one_of(
    st.tuples(st.just("events"), events, faults),
    st.tuples(st.just("events"), events, st.just([])),
    st.tuples(st.just("tick")),
    st.tuples(st.just("promise"), st.sampled_from(NAMES), times),
    st.tuples(st.just("excuse"), st.sampled_from(NAMES)),
    st.tuples(st.just("drain")),
    st.tuples(st.just("taken"), st.integers(0, 2)),
    st.tuples(st.just("sync")),
    st.tuples(st.just("restart"), st.sampled_from(("stop", "crash")), st.booleans()),
)
histories: st.SearchStrategy[History] = st.lists(st.tuples(steps, st.sampled_from((0, 0, 1, 1, 2, 5, -2))), max_size=30)
some_settings = st.builds(
    Settings,
    name=st.just("river-gauges"),
    slack_ns=st.sampled_from((0, 1, 3, 10)),
    idle_after_ns=st.sampled_from((2, 10, FOR_EVER_NS)),
    hold_at_most_ns=st.sampled_from((3, 12, FOR_EVER_NS)),
    ahead_limit_ns=st.sampled_from((6, FOR_EVER_NS)),
    clock=st.sampled_from(("event", "arrival")),
    expect_sources=st.sampled_from(((), ("gw-1",))),
    undelivered_events_at_most=st.sampled_from((3, 1_000_000)),
    batch_events_at_most=st.sampled_from((1, 3, 50_000)),
)


class Player:
    """Plays one history. `watermarks` are those that stood after each step, `batches` what has left, by lane."""

    def __init__(self, settings: Settings) -> None:
        self.settings = settings
        self.shell = Shell(settings, sinks=SINKS, synchronous=False)
        self.now_ns = 0
        self.saved, self.saved_lsn = saved_bytes(self.shell.feed), self.shell.feed.next_lsn
        self.watermarks: list[int] = []
        self.batches: dict[str, dict[int, Batch]] = {lane: {} for lane in LANES}
        self.restarts = 0

    @property
    def feed(self) -> Feed:
        return self.shell.feed

    def play(self, history: History) -> Player:
        """All steps, then a drain, all of it synced."""
        for step, passed in history:
            self.now_ns += passed
            self.step(step)
            self.look()
        self.shell.sync()
        self.look()
        return self

    def end(self) -> Player:
        """Let go what is held, so that everything has left."""
        self.shell.taken("store", "ordered", 10**6, self.now_ns)
        self.shell.act("drain", now_ns=self.now_ns + 10**6)
        self.shell.sync()
        self.look()
        return self

    def look(self) -> None:
        """Keep what has left since, each batch by its number: one that leaves again must be the same."""
        self.watermarks.append(self.feed.state.watermark_ns)
        for lane, left in self.shell.batches.items():
            for batch in left:
                before = self.batches[lane].setdefault(batch.number, batch)
                assert digest(self.shell, before) == digest(self.shell, batch), "a number stands for one batch for ever"
            left.clear()

    def step(self, step: Step) -> None:
        shell = self.shell
        match step:
            case ("events", rows, bad):
                shell.events([time for time, _ in rows], self.now_ns, [name for _, name in rows], bad)
            case ("tick",):
                shell.tick(self.now_ns)
            case ("promise", name, time):
                shell.act("promise", name, time, now_ns=self.now_ns)
            case ("excuse", name):
                if name in self.feed.state.sources.numbers:
                    shell.act("excuse", name, "why", now_ns=self.now_ns)
            case ("drain",):
                shell.act("drain", now_ns=self.now_ns)
            case ("taken", behind):
                for sink, lanes in SINKS.items():
                    for lane in lanes:
                        left = max(self.batches[lane], default=0)
                        shell.taken(sink, lane, left - behind, self.now_ns)
            case ("sync",):
                shell.sync()
                self.saved, self.saved_lsn = saved_bytes(shell.feed), shell.feed.next_lsn
            case ("restart", how, from_saved):
                self._restart(how == "crash", from_saved)
            case _:
                raise AssertionError(step)

    def _restart(self, crash: bool, from_saved: bool) -> None:
        """A stop syncs everything; a crash loses the records behind the last sync, and who was not answered."""
        shell = self.shell
        if not crash:
            shell.sync()
            self.look()
        durable = max(shell.feed.durable_lsn, self.saved_lsn)
        shell.records[:] = [record for record in shell.records if record.lsn < durable]
        del shell.journal[durable:]
        shell.sync_asked = min(shell.sync_asked, durable)
        feed = Feed(self.settings)
        if from_saved:
            feed.restore(self.saved, self.saved_lsn)
        for record in shell.records:
            if record.lsn >= feed.next_lsn:
                feed.fold(record.kind, VERSION, record.body, record.lsn)
        feed.synced(feed.next_lsn)
        shell.feed = feed
        shell.do(feed.start(self.now_ns, SINKS))
        self.restarts += 1

    # ---- what came out ----------------------------------------------------------------------------------------------

    def lines(self, lane: str) -> list[bytes]:
        """Every line that left by a lane, by the numbers of the batches."""
        return [line for _, batch in sorted(self.batches[lane].items()) for line in self.shell.lines(batch)]

    def times(self, lane: str) -> list[int]:
        """Every event time that left by a lane, by the numbers of the batches."""
        return [time for _, batch in sorted(self.batches[lane].items()) for time in batch.times.tolist()]

    def kept(self) -> list[tuple[int, bytes]]:
        """(event time, line) of every event that the journal holds, in order of arrival."""
        rows: list[tuple[int, bytes]] = []
        for record in self.shell.records:
            if record.kind == Kind.ARRIVAL:
                body = decode_arrival(record.body, record.lsn)
                payload = bytes(self.shell.journal[body.payload_place : body.faults_place])
                rows += zip(body.times.tolist(), payload.split(b"\n")[:-1], strict=True)
        return rows


def digest(shell: Shell, batch: Batch) -> str:
    """What a batch is, to the byte: lane, number, times, sources, lines, reasons."""
    entries = [(entry.line, entry.reason, entry.detail) for entry in batch.entries]
    parts = [batch.lane, batch.number, batch.times.tolist(), batch.refs["source"].tolist(), shell.lines(batch), entries]
    return hashlib.sha256(repr(parts).encode()).hexdigest()
