"""`strandline check`: a configuration's faults, or what it amounts to. Reading it is `strandline.config`."""

from __future__ import annotations

import argparse
import os
import sys
from typing import Any

import msgspec

from .cli_answers import FINE, WRONG_USE, write_table
from .config import Config, Feed, load
from .config_access import literal_beyond, needs_tokens
from .config_notes import notes
from .config_read import Reading
from .config_units import duration_text
from .errors import ConfigError


def check(options: argparse.Namespace) -> int:
    """Answer for one file. Without --json, faults are raised as ConfigError for the command line to tell."""
    try:
        config = load(options.file, os.environ, _check_reach)
    except ConfigError as error:
        if not options.json:
            raise
        _write_json({"file": str(options.file), "ok": False, "faults": error.faults})
        return WRONG_USE
    if options.json:
        feeds = [_feed(feed) for feed in config.feeds]
        _write_json({"file": str(options.file), "ok": True, "faults": [], "notes": notes(config), "feeds": feeds})
    else:
        _write(str(options.file), config)
    return FINE


def _check_reach(config: Config, reading: Reading) -> None:
    """A host that is a name is looked up at the start only: here nothing is asked."""
    if any(map(reading.is_faulty, (("listen",), ("access", "tokens"), ("access", "open")))):
        return
    if fault := needs_tokens(config.access, config.listen.host, literal_beyond(config.listen.host)):
        reading.faults.append(f"{reading.file}: {fault}")


def _write(file: str, config: Config) -> None:
    sys.stdout.write(f"{file} has no fault. Listens on {config.listen}, keeps its data in {config.data_dir}.\n")
    if (cluster := config.cluster) is not None:
        parts = sum(feed.partitions.count for feed in config.feeds if feed.partitions is not None)
        sys.stdout.write(f"Is instance {cluster.instance} of cluster {cluster.name}: {parts} partitions to share.\n")
    headings = ("feed", "slack", "idle after", "hold at most", "sinks")
    write_table(headings, ((feed.name, *_waits(feed), ", ".join(_sinks(feed))) for feed in config.feeds))
    for note in notes(config):
        sys.stdout.write(f"note: {note}.\n")


def _waits(feed: Feed) -> list[str]:
    return [duration_text(ns) for ns in (feed.longest_slack_ns, feed.idle_after_ns, feed.hold_at_most_ns)]


def _sinks(feed: Feed) -> list[str]:
    return [sink.name if sink.name == sink.kind else f"{sink.name} ({sink.kind})" for sink in feed.sinks]


def _feed(feed: Feed) -> dict[str, Any]:
    sinks = [{"name": sink.name, "kind": sink.kind} for sink in feed.sinks]
    settings: dict[str, Any] = msgspec.to_builtins(feed.settings())
    return settings | {"sinks": sinks}


def _write_json(answer: dict[str, Any]) -> None:
    sys.stdout.write(msgspec.json.encode(answer).decode() + "\n")
