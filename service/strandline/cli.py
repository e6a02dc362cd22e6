"""The command line: what can be asked, what it answers with (exit code), and help that a newcomer understands.

Every command's work is done elsewhere and imported when it is asked for: `strandline --help` takes 40 ms, not 400.
Results go to stdout, everything else to stderr. Exit codes: 0 fine; 1 the answer is no; 2 wrong use or configuration;
3 a store, a file or a service could not be reached.
"""

from __future__ import annotations

import argparse
import os
import sys
from collections.abc import Callable, Sequence
from pathlib import Path
from typing import Any

from .cli_answers import DEFAULT_FILE, FINE, INTERRUPTED, NOT_REACHED, WRONG_USE, chosen_file, complain
from .errors import FAULT_REASONS, ConfigError, StrandlineError

NARROW: dict[str, dict[str, Any]] = {
    "source": {"metavar": "NAME"},
    "sink": {"metavar": "NAME"},
    "reason": {"choices": sorted(FAULT_REASONS), "metavar": "REASON"},
}

Command = Callable[[argparse.Namespace], int]


def main(arguments: Sequence[str] | None = None) -> int:
    """Run one command and return its exit code. argparse itself leaves with 2 on wrong use."""
    options = parser().parse_args(arguments)
    command: Command = options.command
    try:
        code = command(options)
        sys.stdout.flush()
        return code
    except ConfigError as error:
        complain(*error.faults, f"{len(error.faults):,} fault{'s'[: len(error.faults) > 1]}; nothing was done.")
        return WRONG_USE
    except BrokenPipeError:  # whoever read the output has seen enough, as `head` does
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return FINE
    except (StrandlineError, OSError) as error:
        complain(str(error))
        return NOT_REACHED
    except KeyboardInterrupt:
        return INTERRUPTED


def parser() -> argparse.ArgumentParser:
    """The whole command line."""
    top = argparse.ArgumentParser(
        prog="strandline",
        description="Keeps timestamped event feeds in order although events arrive late.",
        epilog="New here? `strandline demo` shows it at work, with nothing to set up.\n"
        "`strandline COMMAND --help` explains a command and gives an example.",
        formatter_class=argparse.RawDescriptionHelpFormatter,
    )
    top.add_argument("--version", action=_Version, help="print the version and stop")
    commands = top.add_subparsers(title="commands", metavar="COMMAND", required=True)
    _add_serve(commands)
    _add_demo(commands)
    _add_check(commands)
    _add_lane(commands, "late", "events that came too late to be put in order", "late event", "source")
    _add_lane(commands, "quarantine", "lines that could not be events of their feed", "line in quarantine", "reason")
    _add_lane(commands, "refused", "events of batches that a sink refused for good", "refused event", "sink")
    return top


class _Version(argparse.Action):
    """Looks the version up only when it is asked for: that alone takes 15 ms."""

    def __init__(self, option_strings: Sequence[str], dest: str, help: str | None = None) -> None:
        super().__init__(option_strings, argparse.SUPPRESS, nargs=0, default=argparse.SUPPRESS, help=help)

    def __call__(self, parser: argparse.ArgumentParser, *_: object) -> None:
        from importlib.metadata import PackageNotFoundError, version  # noqa: PLC0415

        try:
            sys.stdout.write(f"strandline {version('strandline')}\n")
        except PackageNotFoundError:
            sys.stdout.write("strandline, run from its source without being installed\n")
        parser.exit()


def _add(commands: Any, name: str, help: str, about: str, example: str, command: Command) -> argparse.ArgumentParser:
    """One command with its explanation and its examples."""
    added: argparse.ArgumentParser = commands.add_parser(
        name,
        help=help,
        description=about,
        epilog=f"example:\n{example}",
        formatter_class=argparse.RawDescriptionHelpFormatter,
    )
    added.set_defaults(command=command)
    return added


def _add_serve(commands: Any) -> None:
    about = (
        "Takes events over HTTP, puts each feed in order, and writes it to the feed's sinks.\n"
        "Stops on Ctrl-C or SIGTERM, after what was released has been written (at most `drain_at_most`).\n"
        "A second signal stops at once; nothing that was answered is lost by that."
    )
    example = "  strandline serve deploy/minimal.toml"
    serve = _add(commands, "serve", "run the service", about, example, _serve)
    serve.add_argument(
        "file", nargs="?", type=Path, metavar="FILE", help=f"configuration (default: {DEFAULT_FILE} here)"
    )


def _add_demo(commands: Any) -> None:
    about = (
        "Starts a service of its own in a temporary folder, plays river gauges at it whose radio links\n"
        "drop and catch up, and shows how the feed is put in order. Touches nothing that you have."
    )
    example = "  strandline demo --seconds 20"
    demo = _add(commands, "demo", "see it at work on an invented feed", about, example, _demo)
    demo.add_argument("--seconds", type=seconds, default=60, metavar="N", help="how long it runs (default: 60)")


def _add_check(commands: Any) -> None:
    about = (
        "Reads the configuration and the STRANDLINE_ variables as `serve` would, and starts nothing.\n"
        "Names every fault at once, with its place and what was likely meant; then the exit code is 2."
    )
    example = "  strandline check deploy/strandline.toml"
    check = _add(commands, "check", "look for faults in a configuration", about, example, _check)
    check.add_argument("file", type=Path, metavar="FILE", help="configuration")
    check.add_argument("--json", action="store_true", help="the answer as one JSON object")


def _add_lane(commands: Any, lane: str, things: str, thing: str, narrow: str) -> None:
    """`late`, `quarantine` and `refused`: list, export, forget."""
    group = commands.add_parser(lane, help=f"look at {things}", description=f"Look at {things}.")
    acts = group.add_subparsers(title="commands", metavar="COMMAND", required=True)
    example = f"  strandline {lane} list --feed river-gauges --since 1h"
    about = f"Shows {things}, the oldest first.\nThe service may run meanwhile; it is not held up."
    listing = _add(acts, "list", f"show each {thing}", about, example, _on_lane("list_rows", lane))
    listing.add_argument("--limit", type=count, default=100, metavar="N", help="rows at most (default: 100)")
    example = f"  strandline {lane} export --feed river-gauges > {lane}.ndjson"
    about = f"Writes {things} to stdout,\neach as the line that came; with --json what is known of it as well."
    export = _add(acts, "export", "write them out, one per line", about, example, _on_lane("export_rows", lane))
    for command in (listing, export):
        command.add_argument("--after", type=int, default=0, metavar="NUMBER", help="only those after this number")
        command.add_argument("--since", metavar="TIME", help="arrived since: 1h for the last hour, or an RFC 3339 time")
        command.add_argument(f"--{narrow}", dest="narrow", help=f"only those of one {narrow}", **NARROW[narrow])
        command.add_argument("--json", action="store_true", help="one JSON object per line")
    example = f"  strandline {lane} forget --feed river-gauges --through 120"
    about = f"Deletes {things} for good, up to\nand including a number that `list` shows. Frees their room."
    forget = _add(acts, "forget", "delete those that you have exported", about, example, _on_lane("forget", lane))
    forget.add_argument("--through", type=int, required=True, metavar="NUMBER", help="the last one to delete")
    for command in (listing, export, forget):
        command.add_argument("--feed", required=True, metavar="NAME", help="the feed")
        place = command.add_mutually_exclusive_group()
        place.add_argument("--config", type=Path, metavar="FILE", help=f"configuration (default: {DEFAULT_FILE} here)")
        place.add_argument("--data-dir", type=Path, metavar="DIR", help="the service's folder, without a configuration")


def seconds(text: str) -> int:
    """A number of seconds, for argparse."""
    given = int(text)
    if not 8 <= given <= 3_600:
        raise argparse.ArgumentTypeError(f"{text} is outside of 8 to 3600 seconds")
    return given


def count(text: str) -> int:
    """A number of rows, for argparse."""
    given = int(text)
    if not 1 <= given <= 10_000:
        raise argparse.ArgumentTypeError(f"{text} is outside of 1 to 10000")
    return given


def _serve(options: argparse.Namespace) -> int:
    from .config import load  # noqa: PLC0415

    file = chosen_file(options.file)
    config = load(file, os.environ)
    from .app import run  # noqa: PLC0415 - half a second, which nobody waits for who has a fault in the file

    return run(config, file)


def _demo(options: argparse.Namespace) -> int:
    from strandline_loadgen.demo import run  # noqa: PLC0415

    return run(options.seconds)


def _check(options: argparse.Namespace) -> int:
    from .cli_check import check  # noqa: PLC0415

    return check(options)


def _on_lane(work: str, lane: str) -> Command:
    def command(options: argparse.Namespace) -> int:
        from . import cli_lanes  # noqa: PLC0415

        done: int = getattr(cli_lanes, work)(options, lane)
        return done

    return command


if __name__ == "__main__":
    sys.exit(main())
