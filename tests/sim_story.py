"""A simulated world without chance: a short trace, settings as given, and one step after the other as a test tells it.

For cases that a seed has found, and for failing each operation of one story. What happens by chance is `sim_world`.
"""

from __future__ import annotations

import random
from collections.abc import Sequence
from pathlib import Path

import numpy as np
from sim_clients import Habits
from sim_loop import PowerCut
from sim_scenario import FEED, FOR_EVER_NS, SECOND_NS, Scenario
from sim_stores import ReceiverConfig
from sim_verdict import judge_stores
from sim_world import World
from strandline.config_model import EventTime, Feed, Journal, NdjsonConfig, SinkConfig, SqliteConfig
from strandline_loadgen.shapes import START_NS
from strandline_loadgen.trace import FIRST_ID, Trace


def trace_of(events: Sequence[tuple[int, float]], sources: int = 3) -> Trace:
    """(source, event time in seconds) in order of arrival; each event arrives 0.1 s after the one before it."""
    count = len(events)
    return Trace(
        "story",
        START_NS + np.array([int(second * SECOND_NS) for _, second in events], dtype=np.int64),
        START_NS + np.arange(count, dtype=np.int64) * (SECOND_NS // 10),
        np.array([source for source, _ in events], dtype=np.uint32),
        tuple(f"gauge-{number:02d}" for number in range(sources)),
        np.arange(FIRST_ID, FIRST_ID + count, dtype=np.int64),
    )


class _Told(Scenario):
    """Settings that are given, not drawn."""

    told: Feed

    def feed(self, folder: Path, before: Feed | None = None) -> Feed:
        return self.told


class Story(World):
    """Requests are sent in the order of the trace, as they were cut; all that can run has run after each step."""

    def __init__(
        self,
        folder: Path,
        events: Sequence[tuple[int, float]],
        *,
        sinks: Sequence[str] = ("store",),
        journal: Journal | None = None,
        events_a_request: int = 1,
        **settings: object,
    ) -> None:
        habits = Habits(storm_share=0.0, faulty_share=0.0, events_a_request=events_a_request)
        scenario = _Told(0, "story", random.Random(0), trace_of(events), 0, habits=habits)
        scenario.told = feed_of(folder, sinks, journal or Journal(8192, 1 << 20), **settings)
        super().__init__(scenario, folder)
        self._calm = True  # nothing happens by chance
        for request in self.crowd.requests:
            request.repeats = True

    def start(self) -> None:
        """A new life, up and working unless a store hangs or the disk fails."""
        self._start()
        self.work()

    def require_up(self) -> None:
        """Start again where the process has ended; a disk that fails does so at the first try only."""
        for _ in range(3):
            if self.process is None:
                self.start()

    def work(self, rounds: int = 1, seconds: float = 0.0) -> None:
        """Everything that can run does, after each passing of time, with a tick."""
        for _ in range(rounds):
            self.work_only(seconds)
            if self.process is not None and self.loop is not None:
                self._tick(self.process)
                self._run_all()

    def work_only(self, seconds: float = 0.0) -> None:
        """Everything that can run without a tick."""
        self.pass_time(seconds)
        self._run_all()

    def send(self, requests: int = 1) -> None:
        """The next requests, answered or refused if the disk lets them."""
        for _ in range(requests):
            if self.process is not None:
                self._send(self.process)
                self._run_all()

    def _run_all(self) -> None:
        if self.loop is None:
            return
        try:
            self.loop.work_off()
            self._look()
        except PowerCut:
            self._die(power=True)

    def stop(self) -> None:
        """An orderly stop."""
        try:
            if self.process is not None:
                self._stop(self.process)
        except PowerCut:
            self._die(power=True)

    def die(self, *, power: bool = False) -> None:
        """The process is gone."""
        self._die(power=power)

    def finish(self) -> None:
        """Faults off, until all is quiet; an orderly stop; the judgement."""
        self._be_calm()
        self._live_on()
        self._end()
        judge_stores(self.scenario, self.config, self.stores, self.crowd, self.folder)


def feed_of(folder: Path, sinks: Sequence[str], journal: Journal, **settings: object) -> Feed:
    """A feed that is patient unless settings say otherwise."""
    kinds: dict[str, SinkConfig] = {
        "store": SqliteConfig("store", folder / "river.db"),
        "files": NdjsonConfig("files", folder / "files", 1000, SECOND_NS),
        "receiver": ReceiverConfig("receiver"),
    }
    chosen: dict[str, object] = {
        "slack_ns": 0,
        "idle_after_ns": 20 * SECOND_NS,
        "hold_at_most_ns": 60 * SECOND_NS,
        "ahead_limit_ns": FOR_EVER_NS,
        **settings,
    }
    event = EventTime("/observed_at", "ns")
    made = tuple(kinds[name] for name in sinks)
    return Feed(FEED, event, "/station", journal=journal, sinks=made, **chosen)  # type: ignore[arg-type]
