"""`strandline advise`: how long to wait, chosen on the first part of a capture and verified on the rest.

The choice itself lives in `replay.advice`; here are what was asked for, and how the answer looks.
"""

from __future__ import annotations

import argparse
import sys
import time
from collections.abc import Iterator, Sequence
from dataclasses import asdict
from typing import Any

import msgspec
import numpy as np

from .cli_answers import FINE, NO, complain, harmless, write_table
from .cli_progress import bar
from .config_units import duration_text
from .core.settings import Settings
from .errors import ConfigError
from .ingest.timestamps import format_rfc3339
from .replay.advice import LEARN_PART, VERDICTS, Advice, Comparison, Rule, Wanted, advise, compare, rounded_up
from .replay.basis import Requests
from .replay.capture import Capture
from .replay.reorder_figures import reorder_figures
from .replay.requests import CapturedRequests

GOOD = ("shown", "open")
REORDER_EVENTS_AT_MOST = 2_000_000  # the first ones of a longer capture; some 300 bytes each
REORDER_THRESHOLD = 10_000  # of RFC 5236: what is displaced by more counts as lost there
SECOND_NS = 1_000_000_000
HEADINGS = ("slack", "late, first part", "late, second part", "hold mean", "hold p99", "held mean", "held peak", "")
SOURCE_HEADINGS = (
    *("source", "events", "late", "mean delay"),
    *("slack without it", "watermark nearer without it", "late if excused"),
)


def advise_on(options: argparse.Namespace) -> int:
    """Say how long to wait. Exit code 1 where the target was missed, cannot be kept, or cannot be shown."""
    begin = time.perf_counter()
    with Capture(options.capture_file) as capture:
        if capture.cut:
            complain(capture.cut)
        captured = CapturedRequests(capture)
        wanted = _wanted(options)
        passes = (1 if options.quick else 3) + options.reordering
        with bar("read", "events", passes * capture.events) as tell:
            told = _Told(captured, tell)
            try:
                advice = advise(told.blocks, (capture.first_ns, capture.last_ns), _rule(options, captured), wanted)
            except ValueError as error:
                complain(f"{options.capture_file}: the capture is too short for this claim: {error}")
                return NO
            found = None
            if not options.quick:
                found = compare(told.blocks, advice, _others(advice, captured.settings), options.sources)
            reordering = _reordering(told) if options.reordering else None
        seconds = time.perf_counter() - begin
    answer = _document(capture, captured, advice, found, reordering)
    answer["seconds"], answer["events_per_s"] = seconds, capture.events / seconds
    if captured.settings_changed:
        complain("settings changed within the capture: those at its begin were taken for all of it")
    if options.json:
        sys.stdout.write(msgspec.json.encode(answer).decode() + "\n")
    else:
        _write(capture, advice, found, answer)
    return FINE if advice.verdict in GOOD else NO


class _Told:
    """The requests, pass after pass, with the bar going on from where the last pass ended."""

    def __init__(self, captured: CapturedRequests, tell: Any) -> None:
        self._captured, self._tell, self._before, self._done = captured, tell, 0, 0
        captured.tell = self._note

    def _note(self, done: int) -> None:
        self._done = self._before + done
        self._tell(self._done)

    def blocks(self) -> Iterator[Requests]:
        """One pass."""
        self._before = self._done
        return self._captured.blocks()


def _wanted(options: argparse.Namespace) -> Wanted:
    if not 0 < options.late_share < 1:
        raise ConfigError([f"--late-share {options.late_share:g} must lie between 0 and 1, such as 0.001"])
    if not 0 < options.learn < 1:
        raise ConfigError([f"--learn {options.learn:g} must lie between 0 and 1; {LEARN_PART:.2g} is the default"])
    return Wanted(options.late_share, None if options.at_most is None else int(options.at_most), options.learn)


def _rule(options: argparse.Namespace, captured: CapturedRequests) -> Rule:
    """What the watermark follows: as asked for, else as the capture's settings say, else as is the default."""
    settings = captured.settings or Settings("")
    if (options.clock or settings.clock) == "arrival":
        return Rule("arrival")
    return Rule("sources", settings.idle_after_ns if options.idle_after is None else int(options.idle_after))


def _others(advice: Advice, settings: Settings | None) -> list[int]:
    chosen = advice.slack_ns
    others = [0, rounded_up(chosen // 2), min(2 * chosen, 2**61), advice.wanted.at_most_ns]
    others.append(settings.slack_ns if settings is not None and settings.late_share is None else None)
    return [other for other in others if other is not None]


def _reordering(told: _Told) -> dict[str, Any]:
    times, arrivals, events = [], [], 0
    for block in told.blocks():
        sizes = np.diff(block.starts, append=len(block.times))
        times.append(block.times)
        arrivals.append(np.repeat(block.instants, sizes))
        events += len(block.times)
        if events >= REORDER_EVENTS_AT_MOST:
            break
    first = slice(REORDER_EVENTS_AT_MOST)
    return reorder_figures(np.concatenate(times)[first], np.concatenate(arrivals)[first], REORDER_THRESHOLD)


# ---- how it looks ---------------------------------------------------------------------------------------------------


def _document(
    capture: Capture,
    captured: CapturedRequests,
    advice: Advice,
    found: Comparison | None,
    reordering: dict[str, Any] | None,
) -> dict[str, Any]:
    compared: dict[str, Any] = {}
    if found is not None:
        compared = asdict(found)
        compared["sources"] = [asdict(cost) | {"source": _name(captured.names, cost.source)} for cost in found.sources]
    return {
        "feed": capture.meta.feed,
        **asdict(advice),
        "wanted": advice.wanted._asdict(),
        "rule": advice.rule._asdict(),
        "explanation": VERDICTS[advice.verdict],
        **compared,
        "reordering": reordering,
        "configuration": configuration_lines(capture.meta.feed, advice),
    }


def _name(names: Sequence[str], number: int) -> str:
    return names[number] if number < len(names) else f"number {number}"


def configuration_lines(feed: str, advice: Advice) -> list[str]:
    """Lines to paste: the slack chosen, and how the service would keep the share itself."""
    longest = advice.wanted.at_most_ns or max(2 * advice.slack_ns, SECOND_NS)
    steered = f'{{ late_share = {_decimal(advice.wanted.late_share)}, at_most = "{spelled(longest)}" }}'
    return [
        "[[feed]]",
        f"name = {msgspec.json.encode(feed).decode()}",
        f'slack = "{spelled(advice.slack_ns)}"',
        f"# or, kept by the service itself: slack = {steered}",
    ]


def spelled(ns: int) -> str:
    """A duration as a configuration takes it, exactly: in seconds from one second up, such as 19.1s."""
    if ns < SECOND_NS:
        return duration_text(ns)
    whole, rest = divmod(ns, SECOND_NS)
    return f"{whole}.{rest:09d}".rstrip("0").rstrip(".") + "s"


def _decimal(share: float) -> str:
    return np.format_float_positional(share, trim="0")


def _write(capture: Capture, advice: Advice, found: Comparison | None, answer: dict[str, Any]) -> None:
    sys.stdout.write("".join(f"{line}\n" for line in _lines(capture, advice, answer)) + "\n")
    if found is not None:
        write_table(HEADINGS, map(_alternative, found.alternatives, [advice.slack_ns] * len(found.alternatives)))
    if found is not None and found.sources_known > 1:
        sys.stdout.write(f"\nthe sources that cost most, {len(answer['sources'])} of {found.sources_known:,}\n")
        write_table(SOURCE_HEADINGS, map(_source, answer["sources"]))
    if answer["reordering"]:
        sys.stdout.write("\nreordering by event time (RFC 4737, RFC 5236)\n")
        write_table(("figure", "value"), [(name, _value(value)) for name, value in _flat(answer["reordering"])])
    sys.stdout.write("\n" + "".join(f"{line}\n" for line in answer["configuration"]))


def _lines(capture: Capture, advice: Advice, answer: dict[str, Any]) -> Iterator[str]:
    first, second, wanted = advice.first, advice.second, advice.wanted
    sure = f"{100 * wanted.confidence:g} %"
    yield f"{harmless(capture.meta.feed)}, {format_rfc3339(capture.first_ns)} to {format_rfc3339(capture.last_ns)}"
    longest = "" if wanted.at_most_ns is None else f", waiting at most {spelled(wanted.at_most_ns)}"
    yield f"wanted    late share {wanted.late_share:g}{longest}"
    between = ""
    if advice.interval_ns is not None:
        between = f" ({sure}: {_time(advice.interval_ns[0])} to {_time(advice.interval_ns[1])})"
    yield f"chosen    slack {spelled(advice.slack_ns)}{between}"
    yield f"          on {first.events:,} events, up to {format_rfc3339(first.to_ns)}"
    low, high = advice.interval
    yield f"verified  late share {advice.late_share:.3g} ({sure}: {low:.3g} to {high:.3g}), {second.late:,} late"
    yield f"          of {second.events:,} events that had no say in the choice"
    yield "tenths    " + " ".join("-" if not t.events else f"{t.late / t.events:.2g}" for t in advice.tenths)
    yield f"verdict   {advice.verdict.replace('_', ' ')}: {VERDICTS[advice.verdict]}"
    if advice.verdict == "too_short":
        yield f"          {advice.events_needed:,} events are needed in each part for {sure}"
    if advice.attainable is not None:
        yield f"          the longest wait gives {advice.attainable:.3g}; the target needs {_time(advice.least_ns)}"
    if "lag_ns_mean" in answer:
        yield f"lag       what the watermark follows is {_time(answer['lag_ns_mean'])} behind the clock, on average"
    yield f"read in   {answer['seconds']:.2f} s, {answer['events_per_s']:,.0f} events/s"


def _alternative(each: Any, chosen_ns: int) -> Sequence[str]:
    figure = each.figure
    p99 = figure.hold_ns_quantiles[0.99] if figure.hold_ns_quantiles else None
    return (
        spelled(each.slack_ns),
        f"{each.first_share:.3g}",
        f"{each.second_share:.3g}",
        _time(figure.hold_ns_mean),
        _time(p99),
        _value(figure.held_events_mean),
        _value(figure.held_events_peak),
        "chosen" if each.slack_ns == chosen_ns else "",
    )


def _source(cost: dict[str, Any]) -> Sequence[str]:
    return (
        cost["source"],
        f"{cost['events']:,}",
        f"{cost['late']:,}",
        _time(cost["delay_ns_mean"]),
        _time(cost["slack_without_ns"]),
        _time(cost["lag_saved_ns"]),
        _value(cost["late_if_excused"]),
    )


def _flat(figures: dict[str, Any]) -> Iterator[tuple[str, Any]]:
    for name, value in figures.items():
        if isinstance(value, dict):
            yield from ((f"{name} {key}", each) for key, each in value.items())
        else:
            yield name, value


def _value(value: float | None) -> str:
    if value is None:
        return "unknown"
    return f"{value:,}" if isinstance(value, int) else f"{value:,.4g}" if value < 1000 else f"{value:,.0f}"


def _time(ns: float | None) -> str:
    return "unknown" if ns is None else f"{ns / 1e9:.3f}s"
