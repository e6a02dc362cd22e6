"""`strandline advise`: how long to wait, chosen on the first part of a capture and verified on the rest.

The choice itself lives in `replay.advice`; here are what was asked for, and the answer as plain values. How it reads
is in `cli_advice_text`, the report in `replay.report`.
"""

from __future__ import annotations

import argparse
import sys
import time
from collections.abc import Callable, Iterator, Sequence
from dataclasses import asdict, dataclass, replace
from pathlib import Path
from typing import Any

import msgspec
import numpy as np

from . import cli_advise_by_source as by_source
from .cli_advice_text import write_advice
from .cli_answers import FINE, NO, WRONG_USE, complain
from .cli_progress import bar
from .core.settings import Settings
from .errors import ConfigError
from .replay.advice import LEARN_PART, VERDICTS, Advice, Comparison, Rule, Wanted, advise, compare, rounded_up
from .replay.advice_by_source import advise_by_source
from .replay.basis import Requests
from .replay.capture import Capture
from .replay.patterns import Patterns, patterns
from .replay.pictures import pictures_of, png, require_matplotlib
from .replay.reorder_figures import reorder_figures
from .replay.requests import CapturedRequests
from .replay.sequence import name_of, read_numbers, sequence_figures
from .replay.slacks import SLACK_NS_AT_MOST
from .replay.wording import decimal, spelled

REORDER_EVENTS_AT_MOST = 2_000_000  # the first ones of a longer capture; some 300 bytes each
REORDER_THRESHOLD = 10_000  # of RFC 5236: what is displaced by more counts as lost there
SECOND_NS = 1_000_000_000
CURVE_STEPS = range(-16, 9)  # eighths of a power of ten around the slack chosen, for the report
SOURCES_PICTURED = 64  # some 17 kB of counts each
REPORTS = (".html", ".png")


def advise_on(options: argparse.Namespace) -> int:
    """Say how long to wait. Exit code 1 where the target was missed, cannot be kept, or cannot be shown.

    Exit code 2, after the answer, where the report cannot be drawn.
    """
    wanted = _wanted(options)
    reports, lacking = _drawable(_reports(options))
    begin = time.perf_counter()
    with Capture(options.capture_file) as capture:
        captured = CapturedRequests(capture)
        if _by_source(options, captured.settings):
            return _advise_by_source(options, capture, captured, wanted)
        if capture.cut:
            complain(capture.cut)
        disorder = options.reordering or options.sequence is not None
        passes = (1 if options.quick else 3) + disorder + (options.sequence is not None) + bool(reports)
        with bar("read", "events", passes * capture.events) as tell:
            told = _Told(captured, tell)
            try:
                advice = advise(told.blocks, (capture.first_ns, capture.last_ns), _rule(options, captured), wanted)
            except ValueError as error:
                complain(f"{options.capture_file}: the capture is too short for this claim: {error}")
                return NO
            found = _Found(advice, _others(advice, captured.settings))
            if not options.quick:
                curve = _curve(advice.slack_ns) if reports else []
                found.compared = compare(told.blocks, advice, [*found.slacks_ns, *curve], options.sources)
            if disorder:
                found.reordering = _reordering(told)
            if options.sequence is not None:
                found.sequence = _sequence(told, capture, options)
            if found.compared is not None and reports:
                numbers = [cost.source for cost in found.compared.sources[:SOURCES_PICTURED]]
                span_ns = capture.first_ns, capture.last_ns
                found.patterns = patterns(told.blocks, advice.rule, span_ns, advice.slack_ns, numbers)
        seconds = time.perf_counter() - begin
    answer = _document(capture.meta.feed, captured, found)
    for report in reports:
        _write_report(report, answer)
    _say(options, captured, answer, seconds, capture.events, write_advice)
    if lacking is not None:  # the answer comes first: nobody should have to ask again for it
        complain(*lacking.faults, "no report was written; the answer above is whole without it")
        return WRONG_USE
    return FINE if advice.supported else NO


def _say(
    options: argparse.Namespace, captured: CapturedRequests, answer: dict[str, Any], seconds: float, events: int,
    write: Callable[[dict[str, Any]], None],
) -> None:  # fmt: skip
    """The answer, for a program or, by `write`, for a person, with how long it took."""
    answer["seconds"], answer["events_per_s"] = seconds, events / seconds
    if captured.settings_changed:
        complain("settings changed within the capture: those at its begin were taken for all of it")
    if options.json:
        sys.stdout.write(msgspec.json.encode(answer).decode() + "\n")
    else:
        write(answer)


def _advise_by_source(options: argparse.Namespace, capture: Capture, captured: CapturedRequests, wanted: Wanted) -> int:
    """Say which source needs how long. Exit codes as `advise_on` has them."""
    for name in ("report", "reordering", "sequence"):
        if getattr(options, name):
            reason = "is about one watermark for all sources, and this feed has one for each"
            raise ConfigError([f"--{name} {reason}: leave it out, or give --order feed"])
    begin, idle_after_ns = time.perf_counter(), _idle_after_ns(options, captured)
    if capture.cut:
        complain(capture.cut)
    with bar("read", "events", (1 if options.quick else 2) * capture.events) as tell:
        told, span_ns = _Told(captured, tell), (capture.first_ns, capture.last_ns)
        try:
            advice = advise_by_source(told.blocks, span_ns, idle_after_ns, wanted, holding=not options.quick)
        except ValueError as error:
            complain(f"{options.capture_file}: no advice can be given: {error}")
            return NO
    shown = by_source.SOURCES_IN_JSON if options.json else options.sources
    answer = by_source.document(capture.meta.feed, captured.names, advice, shown, options.quick)
    _say(options, captured, answer, time.perf_counter() - begin, capture.events, by_source.write)
    return FINE if answer["configuration"] else NO


@dataclass(slots=True)
class _Found:
    """What was found out; None: it was not asked for. `slacks_ns`: the slacks that the text compares with."""

    advice: Advice
    slacks_ns: list[int]
    compared: Comparison | None = None
    reordering: dict[str, Any] | None = None
    sequence: dict[str, Any] | None = None
    patterns: Patterns | None = None


class _Told:
    """The requests, pass after pass, with the bar going on from where the last pass ended."""

    def __init__(self, captured: CapturedRequests, tell: Any) -> None:
        self._captured, self._tell, self._before, self._done = captured, tell, 0, 0
        captured.tell = self._note

    def _note(self, done: int) -> None:
        self._done = self._before + done
        self._tell(self._done)

    @property
    def names(self) -> Sequence[str]:
        """Names of the sources by number: whole after one pass."""
        return self._captured.names

    def blocks(self) -> Iterator[Requests]:
        """One pass."""
        self._before = self._done
        return self._captured.blocks()

    def begin(self) -> Any:
        """A pass of another kind, which says itself how far it is."""
        self._before = self._done
        return self._note


def _wanted(options: argparse.Namespace) -> Wanted:
    if not 0 < options.late_share < 1:
        raise ConfigError([f"--late-share {options.late_share:g} must lie between 0 and 1, such as 0.001"])
    if not 0 < options.learn < 1:
        raise ConfigError([f"--learn {options.learn:g} must lie between 0 and 1; {LEARN_PART:.2g} is the default"])
    return Wanted(options.late_share, None if options.at_most is None else int(options.at_most), options.learn)


def _reports(options: argparse.Namespace) -> list[Path]:
    """The files to write, checked before anything is read. Raises ConfigError."""
    reports: list[Path] = options.report or []
    for file in reports:
        if file.suffix.lower() not in REPORTS:
            raise ConfigError([f"--report {file}: a report is a .html or a .png file"])
        if not file.parent.is_dir():
            raise ConfigError([f"--report {file}: there is no folder {file.parent}: make it first"])
        if file.resolve() == options.capture_file.resolve():
            raise ConfigError([f"--report {file}: that is the capture itself: name another file"])
    if reports and options.quick:
        raise ConfigError(["--report needs what --quick leaves out: give one of the two"])
    return reports


def _drawable(reports: list[Path]) -> tuple[list[Path], ConfigError | None]:
    """The reports that can be drawn here: all of them, or none and why."""
    try:
        if reports:
            require_matplotlib()
    except ConfigError as error:
        return [], error
    return reports, None


def _by_source(options: argparse.Namespace, settings: Settings | None) -> bool:
    """Whether each source is to be judged by itself: as asked for, else as the captured feed was."""
    if options.order == "source" and options.clock == "arrival":
        raise ConfigError(["--order source contradicts --clock arrival: by that clock no source waits for another"])
    asked = options.order or ("feed" if options.clock else None)
    return asked == "source" or (asked is None and settings is not None and settings.order == "source")


def _rule(options: argparse.Namespace, captured: CapturedRequests) -> Rule:
    """What the watermark follows: as asked for, else as the capture's settings say, else as is the default."""
    if (options.clock or (captured.settings or Settings("")).clock) == "arrival":
        return Rule("arrival")
    return Rule("sources", _idle_after_ns(options, captured))


def _idle_after_ns(options: argparse.Namespace, captured: CapturedRequests) -> int:
    """As asked for, else as the capture's settings say, else as is the default."""
    settings = captured.settings or Settings("")
    return settings.idle_after_ns if options.idle_after is None else int(options.idle_after)


def _others(advice: Advice, settings: Settings | None) -> list[int]:
    chosen = advice.slack_ns
    others = [0, rounded_up(chosen // 2), chosen, min(2 * chosen, SLACK_NS_AT_MOST), advice.wanted.at_most_ns]
    others.append(settings.slack_ns if settings is not None and settings.late_share is None else None)
    return [other for other in others if other is not None]


def _curve(chosen_ns: int) -> list[int]:
    """Slacks around the one chosen, or around a second where none is needed, evenly on a log axis."""
    middle = chosen_ns or SECOND_NS
    return [min(rounded_up(round(middle * 10 ** (step / 8))), SLACK_NS_AT_MOST) for step in CURVE_STEPS]


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


def _sequence(told: _Told, capture: Capture, options: argparse.Namespace) -> dict[str, Any]:
    found = read_numbers(capture, options.sequence, told.begin())
    return {"pointer": options.sequence, **sequence_figures(found, told.names, options.sources)}


# ---- the answer -----------------------------------------------------------------------------------------------------


def _document(feed: str, captured: CapturedRequests, found: _Found) -> dict[str, Any]:
    advice, compared, names = found.advice, found.compared, captured.names
    document = {
        "feed": feed,
        **asdict(advice),
        "wanted": advice.wanted._asdict(),
        "rule": advice.rule._asdict(),
        "nearly_empty": advice.nearly_empty,
        "explanation": VERDICTS[advice.verdict],
    }
    if compared is not None:
        shown = [each for each in compared.alternatives if each.slack_ns in found.slacks_ns]
        document |= asdict(replace(compared, alternatives=shown))
        lateness = found.patterns.sources if found.patterns is not None else {}
        document["sources"] = [
            asdict(cost) | {"source": name_of(names, cost.source)}
            | ({"lateness": lateness.get(cost.source)} if found.patterns is not None else {})
            for cost in compared.sources
        ]  # fmt: skip
    document |= {
        "reordering": found.reordering,
        "sequence": found.sequence,
        "configuration": configuration_lines(feed, advice) if advice.supported else [],
    }
    if compared is not None and found.patterns is not None:
        by_time = {"by_day": found.patterns.by_day, "steps": found.patterns.steps}
        document["pictures"] = {"curve": compared.alternatives, **by_time}
    plain: dict[str, Any] = msgspec.json.decode(msgspec.json.encode(document))  # as a program reads it
    return plain


def _write_report(file: Path, answer: dict[str, Any]) -> None:
    if file.suffix.lower() == ".png":
        file.write_bytes(png(answer, pictures_of(answer)))
    else:
        from .replay.report import report_html  # noqa: PLC0415 - 40 ms, only for who asks for one

        file.write_text(report_html(answer), encoding="utf-8")


def configuration_lines(feed: str, advice: Advice) -> list[str]:
    """Lines to paste: the slack chosen, and how the service would keep the share itself."""
    longest = advice.wanted.at_most_ns or max(2 * advice.slack_ns, SECOND_NS)
    steered = f'{{ late_share = {decimal(advice.wanted.late_share)}, at_most = "{spelled(longest)}" }}'
    return [
        "[[feed]]",
        f"name = {msgspec.json.encode(feed).decode()}",
        f'slack = "{spelled(advice.slack_ns)}"',
        f"# or, kept by the service itself: slack = {steered}",
    ]
