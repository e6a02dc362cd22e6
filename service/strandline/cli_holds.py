"""`strandline holds`: who held a feed, from when to when and why, as a running service tells it.

Options and tables only; light, since `--help` imports it.
"""

from __future__ import annotations

import argparse
import json
import sys
from typing import Any
from urllib.parse import urlencode

from .cli_answers import FINE, complain, lasting, to_the_second, write_table
from .cli_options import add_command, add_service
from .cli_values import duration, holds, stretch
from .hold_limits import HOLDS_UNASKED

# Of several sources one is always furthest behind, a second or two at a time: ten healthy minutes gave 280 such rows.
AT_LEAST = "10s"


def add(commands: Any) -> None:
    """The command, for the command line."""
    about = (
        "Shows which source or sink held a feed for ten seconds or longer, from when to when and why,\n"
        "the newest first; with --totals what each had of that time, short ones too. Asks the running\n"
        "service. A hold shorter than a second is told together with its neighbours, under the name of\n"
        "the one that had most of that second.\n"
        "Exit codes: 0 fine; 2 wrong use: no such feed, no such time, no token or one that may\n"
        "not; 3 not reached, or it could not answer now."
    )
    example = (
        "  strandline holds --feed river-gauges --from 8h --totals\n"
        "  strandline holds --feed river-gauges --from 2026-05-01T02:00:00Z --to 2026-05-01T04:00:00Z"
    )
    asked = add_command(commands, "holds", "who held a feed, when, and why", about, example)
    asked.add_argument("--feed", required=True, metavar="NAME", help="the feed")
    asked.add_argument("--from", dest="from_time", metavar="TIME", help="since: 8h ago, or an RFC 3339 time")
    asked.add_argument("--to", dest="to_time", metavar="TIME", help="until: 1h ago, or an RFC 3339 time")
    most = f"holds at most (default: {HOLDS_UNASKED})"
    asked.add_argument("--limit", type=holds, default=HOLDS_UNASKED, metavar="N", help=most)
    shortest = "only holds that lasted so long (default: 10s); 0s: all"
    asked.add_argument("--at-least", type=duration, default=AT_LEAST, metavar="TIME", help=shortest)
    asked.add_argument("--totals", action="store_true", help="how long each held it, instead of each hold")
    asked.add_argument("--json", action="store_true", help="the whole answer as one JSON object")
    add_service(asked)
    asked.set_defaults(command=_holds)


def _holds(options: argparse.Namespace) -> int:
    from .cli_acts import ask  # noqa: PLC0415 - --help needs none of it

    query = {"limit": str(options.limit), "at_least": options.at_least} | stretch(options)
    answer = ask(options, f"holds?{urlencode(query)}")
    if isinstance(answer, int):
        return answer
    if options.json:
        sys.stdout.write(json.dumps(answer) + "\n")
    elif options.totals:
        rows = ([lasting(row["for_s"]), f"{row['count']:,}", _who(row), row["why"]] for row in answer["summary"])
        write_table(("for", "holds", "who", "why"), rows)
    else:
        write_table(("from", "to", "for", "who", "why", "what it means"), map(_cells, answer["holds"]), wrap=True)
        if len(answer["holds"]) == options.limit:
            complain(f"there may be more: go on with --to {answer['holds'][-1]['from']}")
        _tell_shorter(answer.get("shorter"), options.at_least)
    return FINE


def _tell_shorter(shorter: dict[str, Any] | None, at_least: str) -> None:
    """On stderr, so that stdout stays a table. An older service says nothing of it."""
    if shorter and shorter["count"]:
        holds = "hold" if shorter["count"] == 1 else "holds"
        told = f"{shorter['count']:,} {holds} shorter than {at_least} left out, {lasting(shorter['for_s'])} in all"
        complain(f"{told}; --at-least 0s shows them")


def _cells(row: dict[str, Any]) -> list[str]:
    """Times to the second, below which a hold is no hold; `--json` has them whole."""
    until = to_the_second(row["to"]) if row["to"] else "it lasts"
    return [to_the_second(row["from"]), until, lasting(row["for_s"]), _who(row), row["why"], row["explanation"]]


def _who(row: dict[str, Any]) -> str:
    return row["source"] or (f"sink {row['sink']}" if row["sink"] else "")
