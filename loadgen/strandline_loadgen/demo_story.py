"""What the demonstration plays: six gauges of an invented river, a storm, and what goes wrong in it. Pure and seeded.

The feed is put together from shapes; the story's moments are read off the feed itself, so that what is said on the
screen is what is sent. No sending and no screen here.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from .shapes import shape
from .trace import Trace, join

GATEWAYS = ("bridge", "ford", "marsh", "mill", "ridge", "weir")
CALM_EVENTS_PER_S, STORM_EVENTS_PER_S = 60.0, 240.0  # over all gateways
STORM_FROM, STORM_TO = 0.15, 0.9  # shares of the whole
SILENT_FROM, SILENT_TO = 0.25, 0.5  # the mill's link
WRONG_FROM, WRONG_TO = 0.6, 0.75  # the ridge's clock
WRONG_BY_S = 3600.0
STRAGGLER_FROM, STRAGGLER_AT = 0.55, 0.8  # observed and heard
SECONDS_AT_LEAST, SECONDS_AT_MOST = 8, 3600


@dataclass(frozen=True, slots=True)
class Pace:
    """The feed's settings for a demonstration of so many seconds: waits shrink with it, so that all are seen."""

    slack_s: float
    idle_after_s: float
    hold_at_most_s: float
    ahead_limit_s: float

    @classmethod
    def of(cls, seconds: float) -> Pace:
        """For 60 s: slack 1.5 s, idle after 6 s, held for 24 s at most, 3 s ahead at most."""
        return cls(seconds / 40, seconds / 10, seconds / 2.5, seconds / 20)


@dataclass(frozen=True, slots=True)
class Moment:
    """Something that happens, and what to say of it. `at_s` from the start of the feed."""

    at_s: float
    text: str


@dataclass(frozen=True, slots=True)
class Story:
    """The feed, beginning at time 0 (shift it to now), and its moments in order."""

    trace: Trace
    pace: Pace
    moments: tuple[Moment, ...]


def story(seconds: float, seed: int) -> Story:
    """A storm of so many seconds. Raises ValueError when it is too short to see anything, or too long to watch."""
    if not SECONDS_AT_LEAST <= seconds <= SECONDS_AT_MOST:
        raise ValueError(f"a demonstration takes {SECONDS_AT_LEAST} to {SECONDS_AT_MOST} seconds, not {seconds:g}")
    pace = Pace.of(seconds)
    trace = _feed(seconds, seed)
    return Story(trace, pace, _moments(trace, pace, seconds))


def _feed(seconds: float, seed: int) -> Trace:
    """Each gateway's stretches, joined. Bursts come 8 to 20 times in a slack."""
    parts: list[Trace] = []
    burst = {"gateways": 1, "shortest_s": seconds / 800, "longest_s": seconds / 320}
    for gateway in GATEWAYS:
        for name, begin, end, given in [
            ("bursty_gateways", 0.0, STORM_FROM, burst),
            *_in_the_storm(gateway, burst),
            ("bursty_gateways", STORM_TO, 1.0, burst),
        ]:
            rate = (STORM_EVENTS_PER_S if STORM_FROM <= begin < STORM_TO else CALM_EVENTS_PER_S) / len(GATEWAYS)
            room, law = rate * (end - begin) * seconds, dict(given, events_per_s=rate, sources=1)
            # An outage is a share of the whole, so its events are as many as go in; of the others more are made, and
            # those are kept that come in time.
            events = int(room) if name == "outage_and_catch_up" else int(1.5 * room) + 20
            made = shape(name, events, seed + len(parts), start_ns=int(begin * seconds * 1e9), **law)
            kept = (
                len(made) if name == "outage_and_catch_up" else int(np.searchsorted(made.arrivals, end * seconds * 1e9))
            )
            parts.append(_of(gateway, made.part(0, kept)))
    behind_s, start_ns = (STRAGGLER_AT - STRAGGLER_FROM) * seconds, int(STRAGGLER_FROM * seconds * 1e9)
    straggler = shape("slow_source", 1, seed, behind_s=behind_s, sources=1, start_ns=start_ns)
    return join("storm", [*parts, _of("ford", straggler)])


def _in_the_storm(gateway: str, burst: dict[str, Any]) -> list[tuple[str, float, float, dict[str, Any]]]:
    """What a gateway goes through while the storm lasts: shape, from, to, parameters."""
    span = STORM_TO - STORM_FROM
    if gateway == "mill":
        link = {"from_share": (SILENT_FROM - STORM_FROM) / span, "outage_share": (SILENT_TO - SILENT_FROM) / span}
        return [("outage_and_catch_up", STORM_FROM, STORM_TO, {"sources_hit": 1.0} | link)]
    if gateway == "ridge":
        clock = {"step_s": WRONG_BY_S, "at_share": 0.0, "sources_hit": 1.0}
        return [
            ("bursty_gateways", STORM_FROM, WRONG_FROM, burst),
            ("clock_step", WRONG_FROM, WRONG_TO, clock),
            ("bursty_gateways", WRONG_TO, STORM_TO, burst),
        ]
    return [("bursty_gateways", STORM_FROM, STORM_TO, burst)]


def _of(gateway: str, trace: Trace) -> Trace:
    """A trace of one source, under the gateway's name."""
    return replace(trace, source_names=(gateway,))


def _moments(trace: Trace, pace: Pace, seconds: float) -> tuple[Moment, ...]:
    """What happens when: read off the feed."""
    mill, ridge, ford = (_rows(trace, name) for name in ("mill", "ridge", "ford"))
    gaps = np.diff(trace.arrivals[mill])
    silent, back = (int(trace.arrivals[mill][int(gaps.argmax()) + step]) for step in (0, 1))
    wrong = trace.arrivals[ridge][trace.times[ridge] > trace.arrivals[ridge] + int(WRONG_BY_S / 2 * 1e9)]
    delays = trace.arrivals[ford] - trace.times[ford]
    straggler = int(delays.argmax())
    told = [
        (STORM_FROM * seconds * 1e9, "The storm begins: four times as many readings."),
        (
            silent,
            f"Gateway mill falls silent, its radio link is down. The feed waits for it, but no longer than "
            f"idle_after ({pace.idle_after_s:.3g} s); then it goes on without it.",
        ),
        (
            back,
            "Gateway mill is back and sends what it kept, oldest first. What lies behind the watermark by now goes to "
            "the late lane: it is not lost.",
        ),
        (
            wrong[0],
            f"The clock of gateway ridge jumps {WRONG_BY_S / 3600:g} h ahead. Its readings go to quarantine and drag "
            "nobody's watermark along.",
        ),
        (wrong[-1], "The clock of gateway ridge is right again."),
        (
            trace.arrivals[ford][straggler],
            f"A straggler: one reading of gateway ford comes {delays[straggler] / 1e9:.1f} s late.",
        ),
        (STORM_TO * seconds * 1e9, "The storm dies down."),
    ]
    return tuple(sorted((Moment(float(at) / 1e9, text) for at, text in told), key=lambda moment: moment.at_s))


def _rows(trace: Trace, gateway: str) -> NDArray[np.intp]:
    return np.flatnonzero(trace.sources == trace.source_names.index(gateway))
