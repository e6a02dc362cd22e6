"""Named ways in which a feed arrives out of order: pure, seeded generators that yield traces.

Tests, simulation, benchmark, demo and live load share these shapes. `shape(name, events, seed, **parameters)` makes
one; the same arguments give the same trace. Here live only the laws of disorder: no rendering, no sending, no judging,
and no clock, file or hidden randomness. By default 16 gauges give 100 events a second, so 10,000 events
last 100 s.
"""

from __future__ import annotations

import inspect
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from .trace import EVENTS_AT_MOST, FIRST_ID, Int64s, Sources, Trace

SECOND_NS = 1_000_000_000
START_NS = 1_772_344_800 * SECOND_NS  # 2026-03-01T06:00:00Z
Random = np.random.Generator
Floats = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Observations:
    """What the gauges observed, in order of event time, before any of it has travelled."""

    times: Int64s
    sources: Sources
    source_names: tuple[str, ...]

    @property
    def span_ns(self) -> int:
        """From the first to the last event time."""
        return int(self.times[-1] - self.times[0]) if len(self.times) else 0

    def moment_ns(self, share: float) -> int:
        """The moment at which `share` of the span has passed."""
        return int(self.times[0] + share * self.span_ns) if len(self.times) else 0

    def arriving(self, name: str, arrivals: Int64s, times: Int64s | None = None) -> Trace:
        """The trace in which event i arrives at arrivals[i] (and says times[i], where its clock is wrong)."""
        return Trace.arriving(name, self.times if times is None else times, arrivals, self.sources, self.source_names)

    def delayed(self, name: str, delays_s: Floats) -> Trace:
        """The trace in which event i arrives delays_s[i] seconds after its time."""
        return self.arriving(name, self.times + _ns(delays_s))


def _ns(seconds: Floats) -> Int64s:
    return np.rint(seconds * 1e9).astype(np.int64)


def _some(n: int, share: float, random: Random) -> NDArray[np.bool_]:
    """Which of n are hit: `share` of them, at least one."""
    hit = np.zeros(n, dtype=bool)
    hit[random.permutation(n)[: max(1, round(share * n))]] = True
    return hit


def observe(
    events: int,
    random: Random,
    *,
    events_per_s: float = 100.0,
    sources: int = 16,
    start_ns: int = START_NS,
    clock_ns: int = 1,
) -> Observations:
    """A Poisson stream of `events_per_s` over `sources` gauges, each event from a gauge drawn evenly.

    `start_ns`: where it begins. `clock_ns`: the gauges' clocks tick this coarsely (times are rounded down; equal times
    appear). Raises ValueError when a number is out of range.
    """
    _require(0 < events_per_s <= 1e9, f"events_per_s is {events_per_s}; it must be above 0 and at most 1e9")
    _require(1 <= sources <= 1_000_000, f"sources is {sources}; it must be 1 to 1,000,000")
    _require(1 <= clock_ns <= 3600 * SECOND_NS, f"clock_ns is {clock_ns}; it must be 1 ns to 1 h")
    exact = start_ns + np.cumsum(_ns(random.exponential(1 / events_per_s, events)))
    width = max(2, len(str(sources - 1)))
    return Observations(
        exact // clock_ns * clock_ns,
        random.integers(0, sources, events, dtype=np.uint32),
        tuple(f"gauge-{number:0{width}d}" for number in range(sources)),
    )


def _in_order(seen: Observations, random: Random) -> Trace:
    """Every event arrives at once, in order of event time."""
    return seen.arriving("in_order", seen.times.copy())


def _jitter(seen: Observations, random: Random, *, bound_s: float = 1.0) -> Trace:
    """Delays drawn evenly from 0 to bound_s seconds: disorder with a known bound."""
    return seen.delayed("jitter", random.uniform(0, bound_s, len(seen.times)))


def _one_percent_late(
    seen: Observations, random: Random, *, share: float = 0.01, late_s_at_most: float = 180.0
) -> Trace:
    """In order, but for `share` of the events, which come up to late_s_at_most seconds late."""
    late = random.random(len(seen.times)) < share
    return seen.delayed("one_percent_late", late * random.uniform(0, late_s_at_most, len(seen.times)))


def _exponential(seen: Observations, random: Random, *, mean_s: float = 2.0) -> Trace:
    """Independent exponential delays with a mean of mean_s seconds."""
    return seen.delayed("exponential", random.exponential(mean_s, len(seen.times)))


def _heavy_tail(
    seen: Observations,
    random: Random,
    *,
    law: str = "pareto",
    scale_s: float = 0.5,
    tail: float = 1.5,
    delay_s_at_most: float = 3600.0,
) -> Trace:
    """Mostly quick, some very late.

    law pareto: P(delay > x) = (1 + x/scale_s)^-tail. law lognormal: median scale_s, and tail is sigma.
    """
    _require(law in ("pareto", "lognormal"), f"law is {law!r}; it must be pareto or lognormal")
    n = len(seen.times)
    delays = scale_s * (random.pareto(tail, n) if law == "pareto" else random.lognormal(0, tail, n))
    return seen.delayed("heavy_tail", np.minimum(delays, delay_s_at_most))


def _bursty_gateways(
    seen: Observations, random: Random, *, gateways: int = 64, shortest_s: float = 5.0, longest_s: float = 20.0
) -> Trace:
    """Store-and-forward gateways: each gathers for its own period, then sends all it has in one burst.

    Periods are drawn from shortest_s to longest_s. The sources are the gateways. Inside a burst the events stand in
    order of event time.
    """
    _require(1 <= gateways <= 100_000, f"gateways is {gateways}; it must be 1 to 100,000")
    _require(0 < shortest_s <= longest_s, f"periods of {shortest_s} to {longest_s} s; they must be above 0 and ascend")
    n = len(seen.times)
    of = random.integers(0, gateways, n, dtype=np.uint32)
    periods = _ns(random.uniform(shortest_s, longest_s, gateways))[of]
    phases = (random.random(gateways)[of] * periods).astype(np.int64)
    bursts = (seen.times + phases) // periods + 1  # the number of the burst that takes the event along
    width = max(2, len(str(gateways - 1)))
    names = tuple(f"gateway-{number:0{width}d}" for number in range(gateways))
    return Observations(seen.times, of, names).arriving("bursty_gateways", bursts * periods - phases)


def _outage_and_catch_up(
    seen: Observations,
    random: Random,
    *,
    sources_hit: float = 0.25,
    from_share: float = 0.3,
    outage_share: float = 0.3,
    catch_up: float = 8.0,
) -> Trace:
    """The link of some sources breaks; when it is back they send what they kept, oldest first.

    `sources_hit` of the sources lose the link after `from_share` of the span, for `outage_share` of it. Then they catch
    up `catch_up` times as fast as they observed, and are in time again once the backlog is gone.
    """
    _require(catch_up > 1, f"catch_up is {catch_up}; below 1 the backlog would never end")
    hit = _some(len(seen.source_names), sources_hit, random)
    begin, end = seen.moment_ns(from_share), seen.moment_ns(from_share + outage_share)
    caught_up = end + ((seen.times - begin) / catch_up).astype(np.int64)
    waits = hit[seen.sources] & (seen.times >= begin) & (seen.times < caught_up)
    return seen.arriving("outage_and_catch_up", np.where(waits, caught_up, seen.times))


def _slow_source(seen: Observations, random: Random, *, behind_s: float = 10.0, jitter_s: float = 0.2) -> Trace:
    """The first source is always behind_s seconds behind; the others come within jitter_s seconds."""
    delays = random.uniform(0, jitter_s, len(seen.times)) + behind_s * (seen.sources == 0)
    return seen.delayed("slow_source", delays)


def _clock_step(
    seen: Observations, random: Random, *, step_s: float = -30.0, at_share: float = 0.5, sources_hit: float = 0.25
) -> Trace:
    """Some sources' clocks jump by step_s seconds at `at_share` of the span and stay wrong. The links are quick."""
    hit = _some(len(seen.source_names), sources_hit, random)
    wrong = hit[seen.sources] & (seen.times >= seen.moment_ns(at_share))
    return seen.arriving("clock_step", seen.times.copy(), seen.times + wrong * int(step_s * 1e9))


def _far_future(
    seen: Observations, random: Random, *, share: float = 0.001, ahead_s: float = 86_400.0, jitter_s: float = 1.0
) -> Trace:
    """Bounded jitter, but `share` of the events (at least one) claim a time ahead_s seconds in the future."""
    n = len(seen.times)
    wrong = _some(n, share, random)
    arrivals = seen.times + _ns(random.uniform(0, jitter_s, n))
    return seen.arriving("far_future", arrivals, seen.times + wrong * int(ahead_s * 1e9))


def _low_tide(
    seen: Observations,
    random: Random,
    *,
    from_share: float = 0.3,
    silent_share: float = 0.3,
    wake_share: float = 0.2,
    ahead_s: float = 8.0,
) -> Trace:
    """All sources but the first fall silent and wake in random order with what they kept; its clock runs ahead.

    Silence begins after `from_share` of the span and lasts `silent_share` of it; the sources wake, each at once and
    whole, over the next `wake_share`. From the silence on the first source's clock is ahead_s seconds ahead.
    """
    begin, earliest = seen.moment_ns(from_share), seen.moment_ns(from_share + silent_share)
    wake = earliest + (random.random(len(seen.source_names)) * wake_share * seen.span_ns).astype(np.int64)
    others = seen.sources != 0
    waits = others & (seen.times >= begin) & (seen.times < wake[seen.sources])
    times = seen.times + (~others & (seen.times >= begin)) * int(ahead_s * 1e9)
    return seen.arriving("low_tide", np.where(waits, wake[seen.sources], seen.times), times)


def _after_the_last(seen: Observations) -> Int64s:
    """Arrival times one after the other, as densely as the events were, all after the newest event time."""
    return seen.times + (seen.span_ns + 1)


def _random_order(seen: Observations, random: Random) -> Trace:
    """A backfill in uniformly random order: every permutation is equally likely."""
    return seen.arriving("random_order", random.permutation(_after_the_last(seen)))


def _reversed_order(seen: Observations, random: Random) -> Trace:
    """A backfill from the newest event to the oldest."""
    return seen.arriving("reversed_order", _after_the_last(seen)[::-1].copy())


def _duplicates(
    seen: Observations, random: Random, *, share: float = 0.05, again_s_at_most: float = 5.0, jitter_s: float = 1.0
) -> Trace:
    """Bounded jitter, and `share` of the rows are copies of earlier events, up to again_s_at_most s after them."""
    _require(0 <= share <= 0.5, f"share is {share}; it must be 0 to 0.5, for each event is copied once at most")
    copies = int(share * len(seen.times))
    n = len(seen.times) - copies
    again = np.sort(random.permutation(n)[:copies])
    rows = np.concatenate([np.arange(n), again])
    arrivals = (seen.times[:n] + _ns(random.uniform(0, jitter_s, n)))[rows]
    arrivals[n:] += _ns(random.uniform(0, again_s_at_most, copies))
    ids = (FIRST_ID + rows).astype(np.int64)
    return Trace.arriving("duplicates", seen.times[rows], arrivals, seen.sources[rows], seen.source_names, ids=ids)


SHAPES: dict[str, Callable[..., Trace]] = {
    "in_order": _in_order,
    "jitter": _jitter,
    "one_percent_late": _one_percent_late,
    "exponential": _exponential,
    "heavy_tail": _heavy_tail,
    "bursty_gateways": _bursty_gateways,
    "outage_and_catch_up": _outage_and_catch_up,
    "slow_source": _slow_source,
    "clock_step": _clock_step,
    "far_future": _far_future,
    "low_tide": _low_tide,
    "random_order": _random_order,
    "reversed_order": _reversed_order,
    "duplicates": _duplicates,
}


def parameters(name: str) -> dict[str, Any]:
    """The parameters of a shape with their defaults: its own ones first, then those that all shapes share."""
    found: dict[str, Any] = {}
    for maker in (_maker(name), observe):
        for parameter in inspect.signature(maker).parameters.values():
            if parameter.kind is inspect.Parameter.KEYWORD_ONLY:
                found[parameter.name] = parameter.default
    return found


def description(name: str) -> str:
    """A few sentences on what the shape does."""
    return " ".join((inspect.getdoc(_maker(name)) or "").split())


def shape(name: str, events: int, seed: int, **given: Any) -> Trace:
    """`events` rows of the named shape, in order of arrival. Raises ValueError, which says what may be given."""
    _require(0 <= events <= EVENTS_AT_MOST, f"events is {events}; it must be 0 to {EVENTS_AT_MOST:,}")
    known, maker = parameters(name), _maker(name)
    for key, value in given.items():
        _require(key in known, f"the shape {name} has no parameter {key!r}; it has {', '.join(known)}")
        kind = (int, float) if isinstance(known[key], float) else type(known[key])
        right = isinstance(value, kind) and not isinstance(value, bool)
        _require(right, f"{key} is {value!r}; give it like {known[key]!r}")
        if not isinstance(value, str):
            _require(bool(np.isfinite(value)), f"{key} is {value}; it must be a finite number")
            _require(key in ("step_s", "start_ns") or value >= 0, f"{key} is {value}; it must not be negative")
    common = {key: value for key, value in given.items() if key in inspect.signature(observe).parameters}
    own = {key: value for key, value in given.items() if key not in common}
    random = np.random.default_rng([seed, *name.encode()])
    return maker(observe(events, random, **common), random, **own)


def poisson_exponential(rate: float, mean_s: float, events: int, seed: int) -> Trace:
    """Poisson events of `rate` a second with Exp(mean_s) delays from one source: the model of the closed forms."""
    return shape("exponential", events, seed, events_per_s=rate, mean_s=mean_s, sources=1)


def poisson_uniform(rate: float, delay_s_at_most: float, events: int, seed: int) -> Trace:
    """Poisson events of `rate` a second with delays drawn evenly from 0 to delay_s_at_most, from one source."""
    return shape("jitter", events, seed, events_per_s=rate, bound_s=delay_s_at_most, sources=1)


def _maker(name: str) -> Callable[..., Trace]:
    _require(name in SHAPES, f"there is no shape {name!r}; there are {', '.join(SHAPES)}")
    return SHAPES[name]


def _require(condition: bool, message: str) -> None:
    if not condition:
        raise ValueError(message)
