"""A simulated world: lives of the service, one after the other, under faults, then without; and the judgement.

Two phases. With faults on everything is safe: what was answered is kept, nothing is invented, nothing comes out twice
or out of order. With faults off everything is alive: all senders get their answers and all that was accepted comes out
within a bounded number of rounds.
"""

from __future__ import annotations

from collections import Counter
from dataclasses import asdict, dataclass, field
from pathlib import Path

from sim_clients import Crowd
from sim_history import History
from sim_loop import PowerCut, SimLoop
from sim_process import Process, SimClock
from sim_scenario import SECOND_NS, Scenario
from sim_stores import MOODS, Stores
from sim_verdict import judge_stores
from sim_weather import Weather
from simdisk import SimDisk
from strandline.errors import JournalError

ROUNDS_AT_MOST = 600


@dataclass
class Tally:
    """What happened in a world."""

    events: int = 0
    steps: int = 0
    operations: int = 0  # on the disk
    counts: Counter[str] = field(default_factory=Counter)

    def add(self, other: Tally) -> None:
        self.events += other.events
        self.steps += other.steps
        self.operations += other.operations
        self.counts += other.counts

    @property
    def crashes(self) -> int:
        """Deaths of the process: killed, or without power."""
        return self.counts["killed"] + self.counts["power cut"]


class World:
    """One seed's world. `run` plays it to its end; a violation leaves as an exception."""

    def __init__(self, scenario: Scenario, folder: Path) -> None:
        self.scenario, self.chance, self.folder = scenario, scenario.chance, folder
        self.tally = Tally()
        self.stores = Stores(folder)
        self.config = scenario.feed(folder)
        self.history = History(self.config.settings())
        trace = scenario.trace
        self.crowd = Crowd.of(trace, self.chance, scenario.habits)
        self.disk = SimDisk()
        self.mono_ns = 0
        self.skew_ns = 0
        self._begin_ns = int(trace.arrivals[0]) - SECOND_NS // 10
        self.process: Process | None = None
        self.loop: SimLoop | None = None
        self._calm = False
        self._action = ""
        self._weights = list(scenario.weights.values())
        self._actions = list(scenario.weights)

    # ---- time -------------------------------------------------------------------------------------------------------

    def wall_ns(self) -> int:
        """What the machine's clock shows."""
        return self._begin_ns + self.mono_ns + self.skew_ns

    def pass_time(self, seconds: float | None = None) -> None:
        """Let time go on."""
        self.mono_ns += int((self.chance.expovariate(10.0) if seconds is None else seconds) * 1e9)

    def choose(self, below: int) -> int:
        return self.chance.randrange(below)

    # ---- the whole --------------------------------------------------------------------------------------------------

    def run(self) -> Tally:
        """Both phases and the judgement."""
        with self.stores.watched():
            for _ in range(self.scenario.steps):
                self._step(self.chance.choices(self._actions, self._weights)[0])
            self._be_calm()
            self._live_on()
            self._end()
        judge_stores(self.scenario, self.config, self.stores, self.crowd, self.folder)
        self._count()
        return self.tally

    def _step(self, action: str) -> None:
        self.tally.steps += 1
        self._action = action
        if self.process is None:
            if self.chance.random() < 0.3:
                self._start()
            else:
                self.pass_time(self.chance.random() * self.scenario.slow_down_s)
            return
        try:
            getattr(self, f"_{action}")(self.process)
            self._settle()
            self._look()
        except PowerCut as where:
            self.tally.counts[f"died in: {str(where).split()[0]}"] += 1
            self._die()

    def _settle(self) -> None:
        if self.loop is not None:
            self.loop.settle()

    def _look(self) -> None:
        """Check everything; a process that has ended by itself goes."""
        if self.process is None:
            return
        self.process.check()
        self.crowd.check()
        if self.process.ended is not None and (self._calm or self.chance.random() < 0.3):
            self.tally.counts[self.process.ended.split(":")[0]] += 1
            if self.chance.random() < 0.5:
                self._stop(self.process)
            else:
                self._die()

    # ---- lives ------------------------------------------------------------------------------------------------------

    def _weather(self) -> Weather:
        """What befalls the next life from its first operation on."""
        weather = Weather(self.chance)
        weather.starved = self.disk.capacity_bytes is not None
        if not self._calm and self.chance.random() < 0.25:
            weather.dies_in = 1 + self.choose(25)  # while it starts
        if not self._calm and self.chance.random() < 0.1:
            weather.error_share = 0.1
        return weather

    def _start(self) -> None:
        weather = self._weather()
        if self.chance.random() < 0.3:
            self.config = self.scenario.feed(self.folder, self.config)
        self.loop = SimLoop(lambda: self.mono_ns / 1e9)
        clock = SimClock(lambda: self.mono_ns, self.wall_ns)
        try:
            self.process = Process(
                self.config, self.folder, self.disk, weather, self.stores, self.history, self.loop, clock
            )
            self.loop.settle()
            self._look()
        except PowerCut:
            self.tally.counts["died while starting"] += 1
            self._die()
        except (JournalError, OSError):
            if not weather.errors:
                raise
            self.tally.counts["did not start"] += 1
            self._release()

    def _die(self, *, power: bool | None = None) -> None:
        """The process is gone; the machine too, or not."""
        self._release()
        if self.chance.random() < 0.5 if power is None else power:
            self.tally.counts["power cut"] += 1
            chance = self.chance.random
            self.disk = self.disk.crash(
                self.choose,
                torn_sectors=chance() < 0.5,
                any_order=chance() < 0.5,
                flipped_bits=chance() < 0.5,
            )
        else:
            self.tally.counts["killed"] += 1
            self.disk = self.disk.restarted()

    def _release(self) -> None:
        """What the system does when a process ends, however it ends."""
        self.crowd.connections_lost()
        if self.process is not None:
            self.tally.operations += self.process.weather.operations
            self.process.weather.dead = True
        if self.loop is not None:
            self.loop.kill()
        self.stores.died()
        self.process = self.loop = None
        self.disk = self.disk.restarted()

    def _stop(self, process: Process) -> None:
        """SIGTERM: an orderly stop, which ends within its time whatever is ill."""
        assert self.loop is not None
        self.tally.counts["stopped"] += 1
        process.stop_opening()
        self.loop.settle()
        closing = self.loop.create_task(process.runtime.close(self.chance.choice((0.0, 2.0))))
        for _ in range(200):
            self.loop.work_off()
            if closing.done():
                break
            self.pass_time(0.5)
        assert closing.done(), "the service does not stop"
        error = closing.exception()
        if error is not None:
            raise error
        process.check()
        self._release()

    # ---- what can happen --------------------------------------------------------------------------------------------

    def _send(self, process: Process) -> None:
        if not process.up and self.chance.random() < 0.9:
            return
        request = self.crowd.next_request()
        if request is not None and self.loop is not None:
            self.mono_ns = max(self.mono_ns, request.due_ns - self._begin_ns)
            self.crowd.send(request, process, self.loop.create_task)

    def _leave(self, process: Process) -> None:
        request = self.crowd.leave()
        if request is not None and self.loop is not None:
            self.crowd.send(request, process, self.loop.create_task)

    def _tick(self, process: Process) -> None:
        assert self.loop is not None
        self.loop.call_soon(process.runtime.tick)

    def _pass_time(self, process: Process) -> None:
        self.pass_time()

    def _run_job(self, process: Process) -> None:
        assert self.loop is not None
        jobs = self.loop.runnable()
        if jobs:
            self.loop.run(jobs[self.choose(len(jobs))])

    def _tell_job(self, process: Process) -> None:
        assert self.loop is not None
        if self.loop.done:
            self.loop.tell(self.loop.done[self.choose(len(self.loop.done))])

    def _promise(self, process: Process) -> None:
        if process.up:
            trace = self.scenario.trace
            source = self.chance.choice(trace.source_names)
            process.act("promise", source, self.wall_ns() - self.choose(2 * SECOND_NS))

    def _excuse(self, process: Process) -> None:
        if process.up:
            process.act("excuse", self.chance.choice(self.scenario.trace.source_names), "its link is down")

    def _drain(self, process: Process) -> None:
        if process.up:
            process.act("drain")

    def _set_slack(self, process: Process) -> None:
        if process.up:
            slack_ns = self.chance.choice((None, 0, SECOND_NS, 20 * SECOND_NS))
            process.act("set_slack", slack_ns, 1 + self.choose(5 * SECOND_NS), "a storm")

    def _pause(self, process: Process) -> None:
        if process.up:
            sink = self.chance.choice([sink.name for sink in self.config.sinks])
            process.act("pause", sink, self.chance.random() < 0.6, "its disk is changed")

    def _reconfigure(self, process: Process) -> None:
        if process.up:
            assert self.loop is not None
            self.config = self.scenario.feed(self.folder, self.config)
            self.loop.call_soon(process.runtime.reconfigure, self.config)

    def _mood(self, process: Process) -> None:
        name = self.chance.choice([sink.name for sink in self.config.sinks])
        self.stores.moods[name] = self.chance.choice(MOODS)

    def _collect(self, process: Process) -> None:
        self.stores.collect()

    def _let_go(self, process: Process) -> None:
        self.stores.let_go(self.choose)

    def _step_clock(self, process: Process) -> None:
        self.skew_ns += self.chance.choice((-20, -2, -1, 1, 2, 20)) * SECOND_NS

    def _kill(self, process: Process) -> None:
        self._die(power=False)

    def _cut_power(self, process: Process) -> None:
        self._die(power=True)

    def _arm(self, process: Process) -> None:
        process.weather.dies_in = 1 + self.choose(12)

    def _arm_store(self, process: Process) -> None:
        process.weather.dies_in_store = 1 + self.choose(12)

    def _disk_trouble(self, process: Process) -> None:
        process.weather.error_share = self.chance.choice((0.0, 0.02, 0.2))

    def _disk_room(self, process: Process) -> None:
        if self.disk.capacity_bytes is None:
            self.disk.capacity_bytes = self.disk.bytes_used + self.chance.choice((0, 300, 3000))
            process.weather.starved = True
        else:
            self.disk.capacity_bytes = None

    # ---- faults off -------------------------------------------------------------------------------------------------

    def _be_calm(self) -> None:
        """From here on nothing fails any more, and every limit lets through what a sender may send."""
        self._calm = self.crowd.calm = True
        self.stores.moods.clear()
        self.disk.capacity_bytes = None
        self.skew_ns = max(self.skew_ns, 0)
        if self.process is not None:
            weather = self.process.weather
            weather.error_share, weather.dies_in, weather.dies_in_store = 0.0, None, None
            weather.store_fails_in = None

    def _live_on(self) -> None:
        """Rounds in which everybody does what there is to do, until there is nothing more.

        Time goes slowly while senders get on, else in steps that take it past holds, silences and rests soon.
        """
        leap_s = max(1.0, self.config.hold_at_most_ns / 3e9, self.config.idle_after_ns / 3e9)
        left = self.crowd.left
        for number in range(ROUNDS_AT_MOST):
            self.pass_time(0.05 if self.crowd.left < left else leap_s)
            left = self.crowd.left
            if self.process is None:
                self._start()
                continue
            self._round(self.process)
            if self.process is not None and self._quiet(self.process):
                self.tally.counts["rounds to quiet"] += number
                return
        raise AssertionError(f"not quiet after {ROUNDS_AT_MOST} rounds: {self._unrest()}")

    def _round(self, process: Process) -> None:
        assert self.loop is not None
        for _ in range(3):
            self._send(process)
        for sink in list(process.runtime.feed.state.acts.paused) if process.up else ():
            process.act("pause", sink, False, "the disk is changed")
        while self.stores.hanging:
            self.stores.let_go(self.choose)
        self.loop.work_off()
        self._tick(process)
        self.loop.work_off()
        self._look()

    def _quiet(self, process: Process) -> bool:
        if not process.up or not self.crowd.finished:
            return False
        state = process.runtime.feed.state
        if state.runs.held or state.outbox.undelivered_events:
            return False
        return all(not lane.batches for d in process.runtime.deliveries.values() for lane in d.state().lanes.values())

    def _unrest(self) -> str:
        if self.process is None:
            return "the service does not start"
        view = self.process.runtime.view()
        sinks = {name: delivery.state().last_error for name, delivery in self.process.runtime.deliveries.items()}
        return (
            f"up {self.process.up}, {len(self.crowd.waiting)} waiting and {len(self.crowd.again)} again, "
            f"held {view.held_events} by {view.hold}, undelivered {view.undelivered_events}, "
            f"refusals {view.refusals}, sinks {sinks}, journal {self.process.runtime.journal.bytes_used}"
        )

    def abandon(self) -> None:
        """Leave nothing open behind."""
        self._calm = True
        self._release()

    def _end(self) -> None:
        """An orderly stop; then the whole history is looked at."""
        assert self.process is not None
        feed = self.process.runtime.feed
        self._stop(self.process)
        self.history.finish(feed)
        for name, number in asdict(feed.state.ledger).items():
            self.tally.counts[f"event {name}"] += number

    def _count(self) -> None:
        self.tally.events += sum(len(request.ids) for request in self.crowd.requests)
        counts = self.tally.counts
        counts["batches"] += len(self.history.left)
        counts["batches again"] += self.history.again
        counts["records cut"] += self.history.cut_records
        counts["receiver repeats"] += self.stores.receiver.repeats
        for attempt in self.crowd.attempts:
            counts[f"request {attempt.state} {attempt.reason}".strip()] += 1
        for mood, number in self.stores.met.items():
            counts[f"store {mood}"] += number
