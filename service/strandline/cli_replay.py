"""`strandline replay`: what a feed did, what it would have done, whether bars are met, and where to send it again.

The replay itself lives in `replay`; here are what was asked for, and how the answer looks.
"""

from __future__ import annotations

import argparse
import os
import sys
import time
from collections import deque
from collections.abc import Iterator
from dataclasses import asdict
from pathlib import Path
from typing import Any

import msgspec

from .cli_answers import FINE, NO, complain
from .cli_progress import bar
from .client_access import address_of, caller_of, is_address
from .config import load
from .core.columns import Batch
from .core.settings import Settings
from .errors import ConfigError
from .ingest.timestamps import format_rfc3339
from .replay.capture import Capture
from .replay.figures import Bar, Digests, Figures, judge
from .replay.into_service import Sent, send
from .replay.into_store import write_sqlite
from .replay.replaying import Folding, WhatIf
from .replay.verifying import Verifying

Engine = Folding | WhatIf | Verifying


def replay(options: argparse.Namespace) -> int:
    """Replay a capture; exit code 1 where a bar is missed or releases differ."""
    bars = _bars(options)
    _check(options, bars)
    with Capture(options.capture_file) as capture:
        if capture.cut:
            complain(capture.cut)
        if _is_url(options.into):
            return _into_service(options, capture)
        engine = _engine(options, capture)
        figures = _run(options, capture, engine)
    good = judge(figures, bars) and figures.verified is not False
    _write(options, figures)
    return FINE if good else NO


def _check(options: argparse.Namespace, bars: list[Bar]) -> None:
    faults = []
    into_service = _is_url(options.into)
    if options.verify and options.config:
        faults.append("--verify compares what was decided with the capture's own configuration: leave --config out")
    if into_service and (options.config or options.verify or bars):
        faults.append("--into URL only sends: the service there decides; leave --config, --verify and --expect-... out")
    if options.pace is not None and not into_service:
        faults.append("--pace is for --into URL: in process a replay goes as fast as it can")
    if options.into and not into_service and not options.into.endswith(".db"):
        faults.append(f"--into {options.into}: name a service (http://...) or an SQLite file (....db)")
    if faults:
        raise ConfigError(faults)


def _is_url(into: str | None) -> bool:
    return into is not None and is_address(into)


def _bars(options: argparse.Namespace) -> list[Bar]:
    given: list[Bar] = []
    if options.expect_late_share is not None:
        given.append(Bar("late share", "late_share", options.expect_late_share))
    if options.expect_hold_p99 is not None:
        given.append(Bar("hold p99", "hold_p99_ns", options.expect_hold_p99, is_time=True))
    if options.expect_peak_held is not None:
        given.append(Bar("peak held", "peak_held", options.expect_peak_held))
    return given


def settings_of(options: argparse.Namespace, capture: Capture) -> Settings:
    """The settings that --config and --feed name. Raises ConfigError."""
    config = load(options.config, os.environ)
    name = options.feed or (config.feeds[0].name if len(config.feeds) == 1 else capture.meta.feed)
    feed = config.feed(name)
    if feed is None:
        names = ", ".join(each.name for each in config.feeds)
        raise ConfigError([f"{options.config} has no feed {name!a}: name one of {names} with --feed"])
    return feed.settings()


def _engine(options: argparse.Namespace, capture: Capture) -> Engine:
    if options.verify:
        return Verifying(capture)
    if options.config:
        return WhatIf(capture, settings_of(options, capture))
    return Folding(capture)


def _run(options: argparse.Namespace, capture: Capture, engine: Engine) -> Figures:
    begin = time.perf_counter()
    lines = engine.told.lines if isinstance(engine, Verifying) else engine.lines
    with bar("replayed", "events", capture.events) as tell:
        batches = engine.batches(tell)
        if options.digest and not isinstance(engine, Verifying):
            batches = _digested(batches, Digests(lines if capture.meta.lines else None), engine.figures)
        if options.into:
            write_sqlite(Path(options.into), engine.figures.feed, batches, lines)
        else:
            deque(batches, maxlen=0)
    figures = engine.figures
    figures.seconds = time.perf_counter() - begin
    figures.events_per_s = capture.events / figures.seconds
    return figures


def _digested(batches: Iterator[Batch], digests: Digests, figures: Figures) -> Iterator[Batch]:
    for batch in batches:
        digests.add(batch)
        yield batch
    figures.digest = digests.hexdigest()


def _into_service(options: argparse.Namespace, capture: Capture) -> int:
    speed = 1.0 if options.pace is None else options.pace or None
    feed, url = options.feed or capture.meta.feed, address_of(options.into, "--into")
    with bar("sent", "events", capture.events) as tell:
        sent = send(
            capture, url, feed, speed=speed, connections=options.connections, progress=tell,
            caller=caller_of(options, url, os.environ),
        )  # fmt: skip
    if options.json:
        _write_json(asdict(sent))
    else:
        sys.stdout.write("".join(f"{line}\n" for line in _sent_lines(sent, feed)))
    return FINE


def _sent_lines(sent: Sent, feed: str) -> Iterator[str]:
    rate = sent.events / max(sent.seconds, 1e-9)
    yield f"sent to {feed}: {sent.requests:,} requests, {sent.events:,} events"
    yield f"took {sent.seconds:.1f} s, {rate:,.0f} events/s"
    yield "answered: " + ", ".join(f"{name} {value:,}" for name, value in sent.answers.items())
    yield f"sent again after a refusal: {sent.retried:,}; behind the schedule by at most {sent.behind_s_max:.3f} s"
    if sent.unsendable:
        yield f"left out: {sent.unsendable:,} faulty lines that hold a line feed"


def _write_json(answer: dict[str, Any]) -> None:
    sys.stdout.write(msgspec.json.encode(answer).decode() + "\n")


def _write(options: argparse.Namespace, figures: Figures) -> None:
    if options.json:
        _write_json(figures.plain())
    else:
        sys.stdout.write("".join(f"{line}\n" for line in _lines(figures)))


def _lines(figures: Figures) -> Iterator[str]:
    yield f"{figures.feed}, {format_rfc3339(figures.from_ns)} to {format_rfc3339(figures.to_ns)}"
    yield f"requests      {figures.requests:,}"
    yield f"received      {figures.received:,}"
    if figures.held_at_start:
        yield f"held at start {figures.held_at_start:,} (came before, so not in received)"
    yield f"released      {figures.released:,} in {figures.batches:,} batches"
    yield f"late          {figures.late:,}, late share {_share(figures.late_share)}"
    yield f"duplicate     {figures.duplicate:,}"
    yield f"quarantined   {figures.quarantined:,}"
    if figures.refused:
        yield f"refused       {figures.refused:,} (senders would have come again later)"
    yield (
        f"hold          mean {_time(figures.hold_mean_ns)}, p50 {_time(figures.hold_p50_ns)}, "
        f"p99 {_time(figures.hold_p99_ns)}, longest {_time(figures.hold_max_ns)}"
    )
    yield f"held          {figures.peak_held:,} at most, {figures.held_at_end:,} at the end"
    yield f"slack         {_time(float(figures.slack_at_end_ns))} at the end"
    if figures.digest:
        yield f"digest        {figures.digest}"
    if figures.verified is not None:
        same = "verified      the same releases, byte for byte"
        yield same if figures.verified else f"NOT THE SAME  {figures.unlike}"
    yield f"replayed in   {figures.seconds:.2f} s, {figures.events_per_s:,.0f} events/s"
    for each in figures.bars:
        shown = _time if each["is_time"] else _number
        mark = "met" if each["met"] else "MISSED"
        yield f"bar           {each['bar']}: wanted at most {shown(each['at_most'])}, got {shown(each['got'])}: {mark}"


def _share(share: float | None) -> str:
    return "unknown" if share is None else f"{share:.6g}"


def _number(value: float | None) -> str:
    return "nothing" if value is None else f"{value:,.0f}" if value >= 1000 or value == int(value) else f"{value:.6g}"


def _time(ns: float | None) -> str:
    return "unknown" if ns is None else f"{ns / 1e9:.3f}s"
