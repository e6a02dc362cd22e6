"""`strandline trace`: its options and what it says. Light: `--help` imports this; the work is `tracing.command`."""

from __future__ import annotations

import argparse
from pathlib import Path
from typing import Any

from .cli_answers import DEFAULT_FILE
from .cli_options import URL, add_access, add_command


def add(commands: Any) -> None:
    """The command, for the command line."""
    about = (
        "Tells where an event is now and why: when it came and in which request; whether it is held, and for\n"
        "what; released, in which batch and by which mark; late, behind which watermark; in quarantine or a\n"
        "repeat; and which sinks durably have it. Asks the running service, and where that is down reads its\n"
        "folder.\n"
        "Exit codes: 0 found; 1 no such event, then it says what was searched; 2 wrong use: no such\n"
        "feed, no such time, no token or one that may not; 3 neither service nor folder reached, or it\n"
        "could not answer now."
    )
    example = (
        "  strandline trace --feed river-gauges --id 8e03978e\n"
        "  strandline trace --feed river-gauges --time 2026-05-01T10:00:04Z --source weir-3\n"
        "  strandline trace --feed river-gauges --id 8e03978e --data-dir strandline-data"
    )
    trace = add_command(commands, "trace", "where an event is now, and why", about, example)
    trace.add_argument("--feed", required=True, metavar="NAME", help="the feed")
    what = trace.add_mutually_exclusive_group(required=True)
    what.add_argument("--id", metavar="ID", help="the event's id, for a feed with an `id`")
    what.add_argument("--time", metavar="TIME", help="the event's own time: RFC 3339, or an integer in the feed's unit")
    trace.add_argument("--source", metavar="NAME", help="only events of this source")
    trace.add_argument("--url", metavar="URL", help=f"the service (default: that of the configuration, else {URL})")
    place = trace.add_mutually_exclusive_group()
    place.add_argument(
        "--config", type=Path, metavar="FILE",
        help=f"configuration: read its journal where the service is down (default: {DEFAULT_FILE} here, without --url)",
    )  # fmt: skip
    place.add_argument("--data-dir", type=Path, metavar="DIR", help="read the journal in the service's folder at once")
    trace.add_argument("--json", action="store_true", help="the answer as one JSON object")
    add_access(trace)
    trace.set_defaults(command=_trace)


def _trace(options: argparse.Namespace) -> int:
    from .tracing.command import command  # noqa: PLC0415 - --help needs none of it

    return command(options)
