"""`strandline token make`: a new token, shown once, and the lines that let it in. Nothing is written to any file."""

from __future__ import annotations

import argparse
import sys
from typing import Any

from .cli_options import add_command

ROLE_NAMES = ("ingest", "read", "operate")


def add(commands: Any) -> None:
    """The commands, for the command line."""
    group = commands.add_parser("token", help="make a token for the service", description="Tokens for the service.")
    acts = group.add_subparsers(title="commands", metavar="COMMAND", required=True)
    about = (
        "Makes a token and prints it once, then the lines to paste into the file that access.tokens names.\n"
        "Those hold only its hash. Have the service read them with SIGHUP. Touches no file and no service."
    )
    example = "  strandline token make --name gateway-north --role ingest --feed river-gauges"
    make = add_command(acts, "make", "print a new token and its entry", about, example)
    make.add_argument("--name", required=True, metavar="NAME", help="who it is for; acts are noted under this name")
    make.add_argument(
        "--role", required=True, action="append", choices=ROLE_NAMES, metavar="ROLE",
        help="ingest, read or operate; give it again for more than one",
    )  # fmt: skip
    make.add_argument("--feed", action="append", metavar="NAME", help="only for this feed (default: every feed)")
    make.add_argument("--expires", metavar="TIME", help="from when on it is not taken, RFC 3339: 2027-01-01T00:00:00Z")
    make.add_argument("--json", action="store_true", help="the answer as one JSON object")
    make.set_defaults(command=_make)


def _make(options: argparse.Namespace) -> int:
    from . import access, access_tokens  # noqa: PLC0415 - --help needs none of it
    from .cli_answers import FINE  # noqa: PLC0415

    token = access.new_token()
    feeds = options.feed or [access.EVERY]
    grants = dict.fromkeys(options.role, feeds)
    entry = "\n".join(access_tokens.entry_lines(options.name, token, grants, options.expires)) + "\n"
    known = [feed for feed in feeds if feed != access.EVERY]
    access_tokens.parse_tokens(entry, known, "strandline token make")  # so that what is pasted has no fault
    if options.json:
        import json  # noqa: PLC0415

        sys.stdout.write(json.dumps({"name": options.name, "token": token, "entry": entry}) + "\n")
        return FINE
    sys.stdout.write(f"The token, which is not shown again:\n\n{token}\n\n")
    sys.stdout.write(f"Paste into the file that access.tokens names, then send the service SIGHUP:\n\n{entry}")
    return FINE
