"""The command `send`: one shape, rendered, cut and sent to a service, and what became of it."""

from __future__ import annotations

import argparse
import asyncio
import os
import sys
import time
from collections.abc import Sequence
from pathlib import Path
from typing import Any

import msgspec
import numpy as np
from strandline.client_access import Caller, address_of, caller_of
from strandline.errors import ConfigError

from .bodies import Style, bodies, cut_by_count, cut_by_window
from .driver import Delivery, Schedule, Target, as_arrived, at_once, at_rate, every, send
from .evidence import Verdict
from .exits import FINE, NO, NOT_REACHED
from .progress import Shown
from .shapes import parameters, shape
from .trace import Int64s, Trace
from .verdict import judged, settle

FAILURES_SHOWN = 20
QUANTILES = {"p50": 0.5, "p90": 0.9, "p99": 0.99, "p99.9": 0.999, "max": 1.0}


def send_shape(options: argparse.Namespace) -> int:
    """Carry the command out; its exit code. Raises ValueError on wrong use."""
    target = Target(
        _address(options.url),
        options.feed,
        connections=options.connections,
        encodings=tuple(options.encodings.split(",")),
        format=options.format,
        seconds_at_most=options.seconds_at_most,
        keys=f"send-{time.time_ns()}",
        anywhere=options.anywhere,
        caller=_caller(options),
    )
    trace = shape(options.shape, options.events, options.seed, **_parameters(options.shape, options.given))
    if len(trace):  # what leaves as it arrives begins now, what leaves otherwise has just arrived
        trace = trace.shifted(time.time_ns() - int(trace.arrivals[0 if options.speed else -1]))
    bounds = _cut(trace, options)
    style = Style(options.time_unit, options.event_bytes)
    store: Path | None = options.check
    if store and not store.exists():
        raise ValueError(f"--check {store}: there is no such file or folder; name the sink's own")
    if store and options.format == "cloudevents":
        raise ValueError("--check reads events as they were rendered: use another --format than cloudevents")
    with Shown(len(bounds) - 1) as shown:
        done = asyncio.run(send(bodies(trace, bounds, style), target, _schedule(trace, options), shown.show))
    result = summary(done, len(bounds) - 1)
    verdict = _verdict(store, target, trace, bounds, done) if store else None
    if verdict:
        result["verdict"] = {"ok": verdict.ok, "text": str(verdict)}
    print(msgspec.json.encode(result).decode() if options.json else spoken(result))
    for failure in done.failures[:FAILURES_SHOWN]:
        print(failure, file=sys.stderr)
    if verdict and not verdict.ok:
        return NO
    if result["answered"] == result["bodies"]:
        return FINE
    return NO if result["answered"] or not done.resent else NOT_REACHED


def _verdict(store: Path, target: Target, trace: Trace, bounds: Int64s, done: Delivery) -> Verdict:
    asyncio.run(settle(target))
    return judged(store, target.feed, trace, bounds, done)


def _caller(options: argparse.Namespace) -> Caller:
    try:
        return caller_of(options, _address(options.url), os.environ)
    except ConfigError as error:
        raise ValueError(str(error)) from None


def _address(text: str) -> str:
    try:
        return address_of(text)
    except ConfigError as error:
        raise ValueError(str(error)) from None


def _parameters(name: str, given: Sequence[str]) -> dict[str, Any]:
    """NAME=VALUE texts as the shape's own types. Raises ValueError."""
    known = parameters(name)
    read: dict[str, Any] = {}
    for text in given:
        key, equals, value = text.partition("=")
        if not equals or key not in known:
            raise ValueError(f"--set {text}: the shape {name} has {', '.join(known)}")
        try:
            read[key] = type(known[key])(value)
        except ValueError as error:
            raise ValueError(f"--set {text}: {error}") from error
    return read


def _cut(trace: Trace, options: argparse.Namespace) -> Int64s:
    if options.window_ms is not None:
        return cut_by_window(trace, options.window_ms * 1_000_000)
    return cut_by_count(trace, options.body_events)


def _schedule(trace: Trace, options: argparse.Namespace) -> Schedule:
    if options.speed:
        return as_arrived(trace, options.speed)
    if options.rate:
        return at_rate(options.rate)
    return at_once if options.interval_ms is None else every(options.interval_ms / 1000)


def summary(done: Delivery, bodies_in_all: int) -> dict[str, Any]:
    """What became of a sending, as plain values; latencies in seconds from due to answered."""
    some = done.latencies_s[done.answered]
    quantiles = np.quantile(some, tuple(QUANTILES.values())).tolist() if len(some) else []
    return {
        "bodies": bodies_in_all,
        "answered": len(some),
        **done.sums,
        "refused": done.refused,
        "resent": done.resent,
        "seconds": round(done.seconds, 3),
        "events_per_s": round(done.sums["received"] / max(done.seconds, 1e-9)),
        "latency_s": {key: round(value, 6) for key, value in zip(QUANTILES, quantiles, strict=False)},
        "failures": done.failures[:FAILURES_SHOWN],
    }


def spoken(result: dict[str, Any]) -> str:
    """The same for a person."""
    latencies = ", ".join(f"{key} {value * 1000:.1f} ms" for key, value in result["latency_s"].items())
    return (
        f"{result['answered']:,} of {result['bodies']:,} bodies answered in {result['seconds']:.2f} s, "
        f"{result['events_per_s']:,} events/s; refused {result['refused']}, resent {result['resent']}\n"
        f"received {result['received']:,}: accepted {result['accepted']:,}, late {result['late']:,}, "
        f"duplicate {result['duplicate']:,}, quarantined {result['quarantined']:,}\n"
        f"from due to answered: {latencies or 'none was answered'}"
        + (f"\n{result['verdict']['text']}" if "verdict" in result else "")
    )
