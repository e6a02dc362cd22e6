"""What several commands share on the command line: how one is added, and options of those that ask a service.

Light: `--help` imports this. How values are read is `cli_values`.
"""

from __future__ import annotations

import argparse
from pathlib import Path
from typing import Any

URL = "http://127.0.0.1:8600"


def add_command(commands: Any, name: str, help: str, about: str, example: str) -> argparse.ArgumentParser:
    """One command with its explanation and its examples, which stand as they are written."""
    added: argparse.ArgumentParser = commands.add_parser(
        name,
        help=help,
        description=about,
        epilog=f"example:\n{example}",
        formatter_class=argparse.RawDescriptionHelpFormatter,
    )
    return added


def add_service(command: argparse.ArgumentParser) -> None:
    """Options of a command that asks a running service."""
    command.add_argument("--url", default=URL, help=f"the service (default: {URL})")
    add_access(command)


def add_access(command: argparse.ArgumentParser) -> None:
    """Options of a command that calls a service which may ask for a token, or speak TLS."""
    command.add_argument("--token-file", type=Path, metavar="FILE", help="the token for it (default: STRANDLINE_TOKEN)")
    command.add_argument("--ca", type=Path, metavar="FILE", help="for https: the certificates to trust (PEM)")
