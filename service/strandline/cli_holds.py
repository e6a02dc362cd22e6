"""`strandline holds`: who held a feed, from when to when and why, as a running service tells it.

Options and tables only; light, since `--help` imports it.
"""

from __future__ import annotations

import argparse
import json
import sys
import time
from typing import Any
from urllib.parse import urlencode

from .cli_answers import FINE, complain, write_table
from .cli_values import add_access

URL = "http://127.0.0.1:8600"
HOLDS_AT_MOST = 2_000  # as the service
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
        "example:\n"
        "  strandline holds --feed river-gauges --from 8h --totals\n"
        "  strandline holds --feed river-gauges --from 2026-05-01T02:00:00Z --to 2026-05-01T04:00:00Z"
    )
    holds = commands.add_parser(
        "holds",
        help="who held a feed, when, and why",
        description=about,
        epilog=example,
        formatter_class=argparse.RawDescriptionHelpFormatter,
    )
    holds.add_argument("--feed", required=True, metavar="NAME", help="the feed")
    holds.add_argument("--from", dest="from_time", metavar="TIME", help="since: 8h ago, or an RFC 3339 time")
    holds.add_argument("--to", dest="to_time", metavar="TIME", help="until: 1h ago, or an RFC 3339 time")
    holds.add_argument("--limit", type=_count, default=500, metavar="N", help="holds at most (default: 500)")
    shortest = "only holds that lasted so long (default: 10s); 0s: all"
    holds.add_argument("--at-least", type=_duration, default=AT_LEAST, metavar="TIME", help=shortest)
    holds.add_argument("--totals", action="store_true", help="how long each held it, instead of each hold")
    holds.add_argument("--url", default=URL, help=f"the service (default: {URL})")
    holds.add_argument("--json", action="store_true", help="the whole answer as one JSON object")
    add_access(holds)
    holds.set_defaults(command=_holds)


def _holds(options: argparse.Namespace) -> int:
    from .cli_acts import ask  # noqa: PLC0415 - --help needs none of it

    query = {"limit": str(options.limit), "at_least": options.at_least}
    for name, text in (("from", options.from_time), ("to", options.to_time)):
        if text is not None:
            query[name] = _instant(f"--{name}", text)
    answer = ask(options, f"holds?{urlencode(query)}")
    if isinstance(answer, int):
        return answer
    if options.json:
        sys.stdout.write(json.dumps(answer) + "\n")
    elif options.totals:
        rows = ([_for(row["for_s"]), f"{row['count']:,}", _who(row), row["why"]] for row in answer["summary"])
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
        told = f"{shorter['count']:,} {holds} shorter than {at_least} left out, {_for(shorter['for_s'])} in all"
        complain(f"{told}; --at-least 0s shows them")


def _cells(row: dict[str, Any]) -> list[str]:
    """Times to the second, below which a hold is no hold; `--json` has them whole."""
    until = _second(row["to"]) if row["to"] else "it lasts"
    return [_second(row["from"]), until, _for(row["for_s"]), _who(row), row["why"], row["explanation"]]


def _second(time_text: str) -> str:
    return time_text.partition(".")[0].removesuffix("Z") + "Z"


def _who(row: dict[str, Any]) -> str:
    return row["source"] or (f"sink {row['sink']}" if row["sink"] else "")


def _for(seconds: float) -> str:
    return f"{seconds:.1f}s" if seconds < 600 else f"{seconds / 60:.0f}m"


def _instant(option: str, text: str) -> str:
    """A time as the service takes it: so long ago, or one that is given. Raises ConfigError."""
    from .config_units import duration_ns  # noqa: PLC0415
    from .errors import ConfigError  # noqa: PLC0415
    from .ingest.timestamps import format_rfc3339, parse_rfc3339  # noqa: PLC0415

    try:
        return format_rfc3339(time.time_ns() - duration_ns(text))
    except ValueError:
        pass
    try:
        return format_rfc3339(parse_rfc3339(text))
    except ValueError:
        says = f"{option} {text!a} is neither a duration such as 8h nor a time such as 2026-01-31T03:00:00Z"
        raise ConfigError([says]) from None


def _duration(text: str) -> str:
    """A duration, as it was written: the service reads it. For argparse."""
    from .config_units import duration_ns  # noqa: PLC0415

    try:
        duration_ns(text)
    except ValueError as error:
        raise argparse.ArgumentTypeError(f"{text!a} {error}") from None
    return text


def _count(text: str) -> int:
    given = int(text) if text.isascii() and text.isdecimal() and len(text) < 10 else 0
    if not 1 <= given <= HOLDS_AT_MOST:
        raise argparse.ArgumentTypeError(f"{text!a} is outside of 1 to {HOLDS_AT_MOST:,}")
    return given
