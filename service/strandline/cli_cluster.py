"""`strandline cluster`: which instance owns which partition, as a running one tells it, and what needs somebody's eyes.

Options and tables only; light, since `--help` imports it. How things stand is said by the service: `cluster.words`.
"""

from __future__ import annotations

import argparse
import json
import sys
from collections.abc import Iterator, Mapping
from typing import Any

from .cli_answers import FINE, NO, harmless, lasting, to_the_second, write_table
from .cli_options import add_command, add_service


def add(commands: Any) -> None:
    """The command, for the command line."""
    about = (
        "Shows the instances of a cluster and who owns each partition, those first that need somebody's\n"
        "eyes, and says in a sentence how it stands and what to do. Asks one running instance, whichever:\n"
        "it tells what it sees.\n"
        "Exit codes: 0 all is well; 1 it is not: a partition has no owner or is hindered, an instance is\n"
        "missing, or this one is cut off and cannot tell; 2 wrong use: the service is in no cluster, no\n"
        "token or one that may not; 3 not reached, or it could not answer now."
    )
    example = "  strandline cluster --url http://strandline-0:8600"
    asked = add_command(commands, "cluster", "who owns which partition, and is all well", about, example)
    asked.add_argument("--json", action="store_true", help="the whole answer as one JSON object")
    add_service(asked)
    asked.set_defaults(command=_cluster)


def _cluster(options: argparse.Namespace) -> int:
    from .cli_acts import ask_service  # noqa: PLC0415 - --help needs none of it
    from .cluster.words import eyes_first  # noqa: PLC0415

    answer = ask_service(options, "/v1/cluster")
    if isinstance(answer, int):
        return answer
    if options.json:
        sys.stdout.write(json.dumps(answer) + "\n")
    else:
        sys.stdout.write(harmless(answer["says"]) + "\n")
        if answer["level"] != "fine":
            sys.stdout.write(f"Next: {harmless(answer['next'])}\n")
        sys.stdout.write("\n")
        write_table(("instance", "last seen", "partitions", "listens at"), _instances(answer))
        sys.stdout.write("\n")
        headings = ["partition", "state", "owner", "since", "messages behind", "watermark age"]
        if any(row.get("words") for row in answer["partitions"]):
            headings.append("hindered by")
        rows = eyes_first(answer["partitions"])
        known = answer["away_s"] is None and answer["connected"]
        write_table(headings, (_partition(row, known=known)[: len(headings)] for row in rows), wrap=True)
    nobodys = any(row["owner"] is None for row in answer["partitions"])
    return NO if nobodys or answer["level"] != "fine" else FINE


def _instances(answer: dict[str, Any]) -> Iterator[list[str]]:
    """Those that are gone come first."""
    for one in answer["gone"]:
        how = "stopped" if one["stopped"] else "gone, last seen"
        yield [one["instance"], f"{how} {lasting(one['seen_s'])} ago", f"had {one['owned']:,}", one["listen"] or ""]
    for one in answer["instances"]:
        seen = "asked" if one["instance"] == answer["instance"] else f"{lasting(one['seen_s'])} ago"
        yield [one["instance"], seen, f"{one['owns']:,}", one["listen"] or ""]


def _partition(row: Mapping[str, Any], *, known: bool) -> list[str]:
    """`known`: what is seen of other instances is of now. Times to the second; `--json` has them whole."""
    state = row["state"] if row["nobodys_s"] is None else f"{row['state']}, for {lasting(row['nobodys_s'])}"
    if not known and not row["here"]:
        state = "not known"
    since = to_the_second(row["since"]) if row["since"] else ""
    behind = "" if row["behind_messages"] is None else f"{row['behind_messages']:,}"
    age = "" if row["watermark_age_s"] is None else lasting(row["watermark_age_s"])
    return [row["runtime"], state, row["owner"] or "", since, behind, age, row.get("words", "")]
