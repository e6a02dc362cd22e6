"""The rule of `order = "source"` in plain Python, and random histories for it. It shares no code with the service.

Lists and dictionaries only, everything looked at anew each time; costs grow with all that is held.
"""

from __future__ import annotations

from collections.abc import Callable
from contextlib import AbstractContextManager
from dataclasses import dataclass, field
from typing import Any

from helpers_feed import FOR_EVER_NS, Shell
from helpers_model import NEVER, Known
from helpers_strands import constants
from hypothesis import strategies as st
from strandline.core.columns import Lane
from strandline.core.settings import Settings
from strandline.core.slack_by_source import SteeredBySource

NAMES = ("gw-0", "gw-1", "gw-2", "gw-3")
SINKS: dict[str, list[Lane]] = {"store": ["ordered"], "lanes": ["late", "quarantine"]}

times = st.integers(-5, 40)  # few values, so that ties are common
one_event = st.tuples(times, st.sampled_from(NAMES))
steps = st.one_of(
    st.tuples(st.just("events"), st.lists(one_event, max_size=6)),
    st.tuples(st.just("events"), st.lists(one_event, min_size=1, max_size=40)),
    st.tuples(st.just("identified"), st.lists(st.tuples(times, st.sampled_from(NAMES), st.integers(1, 9)), max_size=6)),
    st.tuples(st.just("tick")),
    st.tuples(st.just("promise"), st.sampled_from(NAMES), times),
    st.tuples(st.just("excuse"), st.sampled_from(NAMES)),
    st.tuples(st.just("drain")),
    st.tuples(st.just("slack"), st.sampled_from((0, 2, 20, None))),
    st.tuples(st.just("taken"), st.integers(0, 3)),
)
histories = st.lists(st.tuples(steps, st.sampled_from((0, 0, 1, 1, 2, 3, 7, -2))), max_size=25)
SLACK_HOLDS_NS = 4


def small(fresh_events: int) -> AbstractContextManager[None]:
    """Lots that are full early, and slacks that are steered early, in steps of a nanosecond."""
    steering = {"WARM_UP_EVENTS": 2, "MEMORY_PER_LATE": 1, "MEMORY_EVENTS": 6, "TAIL_LEAST_NS": 8, "LEAST_NS": 1}
    return constants(LOT_EVENTS=fresh_events, **steering)


def small_settings(**fixed: Any) -> st.SearchStrategy[Settings]:
    """Settings of a feed that keeps order within its sources."""
    chosen: dict[str, Any] = {
        "name": st.just("river-gauges"),
        "slack_ns": st.sampled_from((0, 1, 3, 10)),
        "idle_after_ns": st.sampled_from((1, 4, 10, FOR_EVER_NS)),
        "hold_at_most_ns": st.sampled_from((1, 5, 12, FOR_EVER_NS)),
        "ahead_limit_ns": st.sampled_from((0, 6, 20, FOR_EVER_NS)),
        "expect_sources": st.sampled_from(((), ("gw-0",), ("gw-1", "gw-2"))),
        "undelivered_events_at_most": st.sampled_from((0, 3, 1_000_000)),
        "batch_events_at_most": st.sampled_from((1, 2, 50_000)),
        "order": st.just("source"),
        "late_share": st.sampled_from((None, 0.05, 0.3)),
    }
    return st.builds(Settings, **chosen | {name: st.just(value) for name, value in fixed.items()})


def carry_out(shell: Shell, step: tuple[Any, ...], now_ns: int) -> None:
    """One step of a history."""
    match step:
        case ("events" | "identified", rows):
            identities = [row[2] for row in rows] if step[0] == "identified" else None
            shell.events([row[0] for row in rows], now_ns, [row[1] for row in rows], identities=identities)
        case ("slack", slack):
            shell.tokens += 1
            shell.do(shell.feed.set_slack(slack, SLACK_HOLDS_NS, "why", now_ns, shell.tokens, "somebody"))
        case ("taken", behind):
            for sink, lane in ((sink, lane) for sink, lanes in SINKS.items() for lane in lanes):
                shell.taken(sink, lane, shell.feed.state.outbox.next_number[lane] - 1 - behind, now_ns)
        case ("settings", chosen):
            shell.do(shell.feed.start(now_ns, SINKS, {}, chosen))
        case _:
            shell.step(step, now_ns)


def stretch_of(shell: Shell, name: str) -> tuple[int, float, float]:
    """How many stretches of a source's slack have begun, and where and with which step the last one did."""
    state = shell.feed.state
    assert isinstance(state.slack, SteeredBySource)
    begun = state.slack.stretch(state.sources.numbers[name])
    return begun.number, begun.first_ns, begun.eta_ns


@dataclass(slots=True)
class Source(Known):
    """What the rule knows of one source. `stands` is its watermark."""

    promised: int = NEVER
    vouched: int = NEVER
    stands: int = NEVER
    slack: float = 0.0
    eta: float = 0.0
    begun: int = 0  # stretches of constant eta

    @property
    def told(self) -> int:
        """The latest that it said of itself."""
        return max(self.newest, self.vouched)


@dataclass(slots=True)
class Model:
    """One feed. Times in ns; `held` are (event time, number of the event, when it came, source)."""

    slack: int
    idle_after: int
    hold_at_most: int
    ahead_limit: int
    undelivered_at_most: int
    now: int = NEVER
    until: int | None = None  # when the slack that was set ends
    set_slack: int | None = None
    sources: dict[str, Source] = field(default_factory=dict)
    held: list[tuple[int, int, int, str]] = field(default_factory=list)
    released: list[tuple[int, int]] = field(default_factory=list)
    late: list[tuple[int, int]] = field(default_factory=list)  # number, the watermark it came behind
    ahead: list[int] = field(default_factory=list)
    repeats: list[int] = field(default_factory=list)
    identities: set[int | None] = field(default_factory=set)
    undelivered: int = 0
    target: float | None = None
    begun: Callable[[str], tuple[int, float, float]] = lambda name: (0, 0.0, 0.0)

    @classmethod
    def of(cls, chosen: Settings, shell: Shell | None = None) -> Model:
        """A feed that begins at 0. Where a stretch of a steered slack begins, the slack and its step are the shell's,
        which goes ahead: how they are chosen has tests of its own."""
        limits = chosen.idle_after_ns, chosen.hold_at_most_ns, chosen.ahead_limit_ns
        model = cls(chosen.slack_ns, *limits, chosen.undelivered_events_at_most, now=0)
        for name in chosen.expect_sources:
            model.sources[name] = Source(active=True, heard=0, slack=chosen.slack_ns)
        if shell is not None and chosen.late_share is not None:
            model.target, model.begun = chosen.late_share, lambda name: stretch_of(shell, name)
        return model

    def slack_of(self, name: str) -> int:
        """The slack in force for a source."""
        steered = self.slack if self.target is None else round(self.sources[name].slack)
        return steered if self.set_slack is None else self.set_slack

    def steer(self, name: str, lateness: list[int], late: int) -> None:
        """S(t+1) = S(t) + eta (late(t) - target), summed over a source's events of one request."""
        source = self.sources[name]
        if self.target is not None:
            if self.set_slack is not None:  # then those count that the steered slack would have made late
                late = sum(each > round(source.slack) for each in lateness)
            wanted = source.slack + source.eta * (late - self.target * len(lateness))
            source.slack = min(max(wanted, 0.0), float(self.slack))
            begun, first, eta = self.begun(name)
            if begun != source.begun:
                assert not source.begun or first == source.slack, "a stretch begins with another slack"
                source.begun, source.slack, source.eta = begun, first, eta

    def vouch_again(self) -> None:
        """Another slack is in force."""
        for name, source in self.sources.items():
            if source.promised != NEVER:
                source.vouched = source.promised + self.slack_of(name)

    def stand_up_to(self, name: str) -> int:
        """Where a source's watermark may stand."""
        source = self.sources[name]
        slack = self.slack_of(name) if source.active and not source.excused else 0
        heard = max(NEVER, source.newest - slack)
        due = [time for time, _, came, of in self.held if of == name and came <= self.now - self.hold_at_most]
        return max([source.stands, heard, source.promised, *due])

    def at(self, now: int) -> None:
        """The arrival clock goes on."""
        self.now = max(self.now, now)
        if self.until is not None and self.until <= self.now:
            self.set_slack = self.until = None
            self.vouch_again()
        for source in self.sources.values():
            source.active = source.active and source.heard > self.now - self.idle_after

    def mark(self) -> None:
        if self.undelivered > self.undelivered_at_most:
            return
        for name, place in [(name, self.stand_up_to(name)) for name in self.sources]:
            self.sources[name].stands = place
        self.let_go()

    def let_go(self) -> None:
        out = sorted((time, number) for time, number, _, name in self.held if time <= self.sources[name].stands)
        self.held = [row for row in self.held if row[0] > self.sources[row[3]].stands]
        self.released += out
        self.undelivered += len(out)

    def arrive(self, events: list[tuple[int, int, str, int | None]], now: int) -> None:
        """Events (time, number, source, identity or None) of one request."""
        self.at(now)
        self.mark()
        stood = {name: source.stands for name, source in self.sources.items()}
        told = {name: source.told for name, source in self.sources.items()}
        lateness: dict[str, list[int]] = {}
        before = len(self.late)
        for time, number, name, identity in events:
            source = self.sources.setdefault(name, Source(slack=self.slack))
            if time > self.now + self.ahead_limit:
                self.ahead.append(number)
                continue
            source.newest, source.heard = max(source.newest, time), self.now
            source.active, source.excused = True, False
            if identity in self.identities:
                self.repeats.append(number)
                continue
            self.identities |= {identity} - {None}
            lateness.setdefault(name, []).append(max(told.get(name, NEVER) - time, 0))
            if time < stood.get(name, NEVER):
                self.late.append((number, stood[name]))
            else:
                self.held.append((time, number, self.now, name))
        named = {number: name for _, number, name, _ in events}
        for name, each in lateness.items():
            self.steer(name, each, sum(named[number] == name for number, _ in self.late[before:]))
        self.mark()

    def tell(self, step: tuple[Any, ...], now: int, first: int) -> None:
        """A step of a history; events of a request are numbered from `first`."""
        match step:
            case ("events" | "identified", rows):
                if rows:
                    told = [(*row, None)[:3] for row in rows]
                    self.arrive([(time, first + index, *of) for index, (time, *of) in enumerate(told)], now)
                return
            case ("promise", name, time):
                self.now = max(self.now, now)
                if time > self.now + self.ahead_limit:
                    return
                self.at(now)
                source = self.sources.setdefault(name, Source(slack=self.slack))
                source.vouched = max(source.vouched, time + self.slack_of(name))
                source.promised, source.heard = max(source.promised, time), self.now
                source.active, source.excused = True, False
            case ("excuse", name):
                if name not in self.sources:
                    return
                self.at(now)
                self.sources[name].excused = True
            case ("drain",):
                self.at(now)
                if self.held:
                    for source in self.sources.values():
                        source.stands = max(source.stands, source.newest, source.promised)
                    self.let_go()
            case ("slack", slack):
                self.at(now)
                self.set_slack, self.until = slack, None if slack is None else self.now + SLACK_HOLDS_NS
                self.vouch_again()
            case _:  # taken, or a tick
                self.undelivered *= step[0] != "taken"
                self.at(now)
        self.mark()
