"""What a seed stands for: a trace, a configuration with tiny limits, and how often what happens.

Every limit is drawn so that branches which are rare in a real service are common here. Patterns are named kinds of
trouble; a seed without a named pattern draws one. Nothing is run here.
"""

from __future__ import annotations

import random
from collections.abc import Callable
from dataclasses import dataclass, field, replace
from pathlib import Path

import msgspec
from sim_clients import Habits
from sim_stores import ReceiverConfig
from strandline.config_model import EventTime, Feed, Journal, NdjsonConfig, SinkConfig, SqliteConfig, SteeredSlack
from strandline_loadgen.shapes import SHAPES, shape
from strandline_loadgen.trace import Trace

SECOND_NS = 1_000_000_000
FEED = "river-gauges"
STEERED = SteeredSlack(0.1, 4 * SECOND_NS)
FOR_EVER_NS = 400 * 86_400 * SECOND_NS
# A request of 5 events of 120 bytes with a faulty line, its small records and the headroom of the segment sizes below.
REQUEST_BYTES = 2300

# What can happen in a step, and how often while all is usual.
WEIGHTS: dict[str, float] = {
    "send": 30, "tick": 14, "pass_time": 8, "run_job": 45, "tell_job": 45, "leave": 3, "promise": 1, "excuse": 0.6,
    "drain": 0.4, "reconfigure": 0.6, "mood": 4, "let_go": 6, "step_clock": 0.5, "kill": 1.5, "cut_power": 1.5,
    "arm": 3.5, "arm_store": 1.0, "disk_trouble": 0.7, "disk_room": 1.0, "stop": 0.7, "collect": 2,
}  # fmt: skip


@dataclass
class Scenario:
    """One seed's world."""

    seed: int
    pattern: str
    chance: random.Random
    trace: Trace
    steps: int
    weights: dict[str, float] = field(default_factory=lambda: dict(WEIGHTS))
    habits: Habits = field(default_factory=Habits)
    fixed: dict[str, object] = field(default_factory=dict)  # keys of the feed that never change
    id_lasts: bool = False  # whether every repeat of an event is recognised
    order: str = "feed"
    slow_down_s: float = 1.0  # how long the service is away between two lives, at most

    def feed(self, folder: Path, before: Feed | None = None) -> Feed:
        """A configuration; what cannot change while the service runs stays as it was `before`."""
        choice = self.chance.choice
        chosen: dict[str, object] = {
            "slack_ns": choice((0, 10**7, 5 * 10**8, 2 * SECOND_NS, 6 * SECOND_NS, 20 * SECOND_NS, STEERED)),
            "idle_after_ns": choice((10**7, 3 * 10**8, 2 * SECOND_NS, 30 * SECOND_NS, 30 * SECOND_NS)),
            "hold_at_most_ns": choice((10**7, 3 * SECOND_NS, 20 * SECOND_NS, 20 * SECOND_NS)),
            "ahead_limit_ns": choice((0, 5 * 10**8, 5 * SECOND_NS, FOR_EVER_NS)),
            "clock": choice(("event", "event", "event", "event", "arrival")),
            "expect_sources": choice(((), (), ("gauge-00",), ("gauge-01", "never-heard"))),
            "held_events_at_most": choice((6, 10, 10_000, 10_000)),
            "undelivered_events_at_most": choice((1, 2, 5, 20, 10_000, 10_000)),
            "sources_at_most": choice((2, 10_000, 10_000, 10_000)),
            "batch_events_at_most": choice((1, 2, 3, 50_000)),
            "batch_bytes_at_most": choice((200, 2**25)),
            **self.fixed,
        }
        if self.order == "source":  # which goes with no other clock
            chosen |= {"order": "source", "clock": "event"}
        if before is not None:
            return msgspec.structs.replace(before, **chosen)
        event = EventTime("/observed_at", "ns")
        journal, sinks = self.journal(), self.sinks(folder)
        return Feed(FEED, event, "/station", journal=journal, sinks=sinks, **chosen)  # type: ignore[arg-type]

    def journal(self) -> Journal:
        """Segments from the least size on; the limit from the least that a request fits in."""
        segment_bytes = self.chance.choice((200, 264, 400, 1000, 2504, 8192))
        at_most_bytes = segment_bytes * self.chance.choice((2, 3, 6, 100))
        if segment_bytes < REQUEST_BYTES:  # else two segments must do, as the configuration promises
            at_most_bytes = max(at_most_bytes, 3 * REQUEST_BYTES)
        return Journal(segment_bytes, at_most_bytes, self.chance.choice((0, 0, 2 * SECOND_NS, 100 * SECOND_NS)))

    def sinks(self, folder: Path) -> tuple[SinkConfig, ...]:
        """One to three stores."""
        roll_bytes = self.chance.choice((100, 1000, 10**6))
        roll_every_ns = self.chance.choice((10**7, SECOND_NS, 5 * SECOND_NS))
        all_of_them: list[SinkConfig] = [
            SqliteConfig("store", folder / "river.db"),
            NdjsonConfig("files", folder / "files", roll_bytes, roll_every_ns),
            ReceiverConfig("receiver"),
        ]
        return tuple(self.chance.sample(all_of_them, self.chance.choice((1, 1, 2, 3))))


# ---- patterns -------------------------------------------------------------------------------------------------------


def _trace(chance: random.Random, name: str, **given: object) -> Trace:
    events = chance.choice((40, 80, 120))
    chosen: dict[str, object] = {"events_per_s": 10.0, "sources": chance.choice((1, 2, 3, 6)), **given}
    return shape(name, events, chance.randrange(2**31), **chosen)


def _usual(scenario: Scenario) -> None:
    """Any shape of disorder."""
    chance = scenario.chance
    scenario.trace = _trace(chance, chance.choice(sorted(SHAPES)))


def _low_tide(scenario: Scenario) -> None:
    """All sources but one fall silent, its clock runs ahead, the others wake in random order."""
    chance = scenario.chance
    ahead_s = chance.choice((0.3, 3.0, 8.0))
    scenario.trace = _trace(chance, "low_tide", sources=chance.choice((3, 6)), ahead_s=ahead_s)
    scenario.fixed |= {"ahead_limit_ns": chance.choice((10 * SECOND_NS, FOR_EVER_NS)), "clock": "event"}


def _far_future(scenario: Scenario) -> None:
    """Some events claim a time that lies days ahead; sometimes the feed takes them."""
    chance = scenario.chance
    scenario.trace = _trace(chance, "far_future", share=0.05)
    scenario.fixed |= {"ahead_limit_ns": chance.choice((SECOND_NS, 10 * SECOND_NS, FOR_EVER_NS))}


def _clock_step(scenario: Scenario) -> None:
    """Clocks of sources jump, and so does the service's own, to and fro."""
    chance = scenario.chance
    scenario.trace = _trace(chance, "clock_step", step_s=chance.choice((-30.0, -2.0, 2.0, 30.0)))
    scenario.weights["step_clock"] = 6


def _storm(scenario: Scenario) -> None:
    """Everything is sent again and again, answered or not."""
    chance = scenario.chance
    scenario.trace = _trace(chance, "duplicates", share=0.5)
    scenario.habits = replace(scenario.habits, storm_share=0.6)
    scenario.weights["leave"] = 12


def _outage(scenario: Scenario) -> None:
    """Links break, and what was kept comes at once."""
    scenario.trace = _trace(scenario.chance, "outage_and_catch_up", outage_share=0.5)


def _ties(scenario: Scenario) -> None:
    """Equal times everywhere."""
    chance = scenario.chance
    clock_ns = chance.choice((SECOND_NS, 10 * SECOND_NS, 3600 * SECOND_NS))
    scenario.trace = _trace(chance, chance.choice(("in_order", "jitter", "exponential")), clock_ns=clock_ns)


def _dead_stores(scenario: Scenario) -> None:
    """Stores are ill most of the time, and the journal has little room."""
    _usual(scenario)
    scenario.weights |= {"mood": 20, "let_go": 2}


def _full_disk(scenario: Scenario) -> None:
    """The disk has no room, has some again, fails now and then."""
    _usual(scenario)
    scenario.weights |= {"disk_room": 8, "disk_trouble": 2}


def _crash_loop(scenario: Scenario) -> None:
    """The process dies again and again, also while it starts."""
    _usual(scenario)
    scenario.weights |= {"kill": 4, "cut_power": 4, "arm": 12, "arm_store": 4}


def _rolling_stops(scenario: Scenario) -> None:
    """Orderly stops, new settings and acts of operators, again and again, and long times away."""
    _usual(scenario)
    scenario.weights |= {"stop": 5, "reconfigure": 4, "promise": 3, "excuse": 3, "drain": 2, "set_slack": 3, "pause": 3}
    scenario.slow_down_s = 60.0


PATTERNS: dict[str, Callable[[Scenario], None]] = {
    "usual": _usual,
    "low_tide": _low_tide,
    "far_future": _far_future,
    "clock_step": _clock_step,
    "storm": _storm,
    "outage": _outage,
    "ties": _ties,
    "dead_stores": _dead_stores,
    "full_disk": _full_disk,
    "crash_loop": _crash_loop,
    "rolling_stops": _rolling_stops,
}


def scenario_of(seed: int, pattern: str | None = None) -> Scenario:
    """The scenario of a seed; the same arguments give the same one."""
    chance = random.Random(f"{seed}/{pattern or ''}")
    name = pattern or chance.choice(sorted(PATTERNS))
    scenario = Scenario(seed, name, chance, None, steps=chance.choice((250, 350, 450)))  # type: ignore[arg-type]
    # Drawn beside the others, so that worlds of before it could be drawn stay as they were.
    scenario.order = random.Random(f"{seed}/order").choice(("feed", "feed", "source"))
    _draw_repeats(scenario)
    PATTERNS[name](scenario)
    return scenario


def _draw_repeats(scenario: Scenario) -> None:
    """Whether and for how long repeats are recognised: by id, by key, not at all."""
    chance = scenario.chance
    last = chance.random() < 0.7
    keyed = chance.choice((0.0, 0.5, 1.0))
    scenario.habits = Habits(keyed_share=keyed, keys_last=last)
    window, by_id = chance.choice((2, 5, 1_000_000, 1_000_000)), chance.random() < 0.4
    scenario.id_lasts = by_id and window == 1_000_000
    scenario.fixed = {
        "id": "/id" if by_id else None,
        "id_window_events": window,
        "keys_at_most": 10_000 if last else chance.choice((0, 1, 3)),
    }
