"""The command line: what can be asked, what it answers with (exit code), and help that a newcomer understands.

Every command's work is done elsewhere and imported when it is asked for: `strandline --help` takes 40 ms, not 400.
Results go to stdout, everything else to stderr. Exit codes: 0 fine; 1 the answer is no; 2 wrong use or configuration;
3 a store, a file or a service could not be reached.
"""

from __future__ import annotations

import argparse
import os
import sys
import textwrap
from collections.abc import Callable, Sequence
from pathlib import Path
from typing import Any

from . import cli_cluster, cli_holds, cli_operate, cli_report, cli_token, cli_trace
from .caution import CAUTION
from .cli_answers import DEFAULT_FILE, FINE, INTERRUPTED, NOT_REACHED, WRONG_USE, chosen_file, complain
from .cli_options import add_access, add_command, add_service
from .cli_values import amount, connections, demo_seconds, hold, pace, recorded_seconds, rows
from .errors import FAULT_REASONS, ConfigError, StrandlineError

NARROW: dict[str, dict[str, Any]] = {
    "source": {"metavar": "NAME"},
    "sink": {"metavar": "NAME"},
    "reason": {"choices": sorted(FAULT_REASONS), "metavar": "REASON"},
}

UNITS = ("rfc3339", "s", "ms", "us", "ns")

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
        "`strandline COMMAND --help` explains a command and gives an example.\n\n" + textwrap.fill(CAUTION, 98),
        formatter_class=argparse.RawDescriptionHelpFormatter,
    )
    top.add_argument("--version", action=_Version, help="print the version and stop")
    commands = top.add_subparsers(title="commands", metavar="COMMAND", required=True)
    _add_serve(commands)
    _add_demo(commands)
    _add_check(commands)
    _add_capture(commands)
    _add_replay(commands)
    _add_advise(commands)
    _add_lane(commands, "late", "events that came too late to be put in order", "late event", "source")
    _add_lane(commands, "quarantine", "lines that could not be events of their feed", "line in quarantine", "reason")
    _add_lane(commands, "refused", "events of batches that a sink refused for good", "refused event", "sink")
    cli_cluster.add(commands)
    cli_holds.add(commands)
    cli_operate.add(commands)
    cli_report.add(commands)
    cli_trace.add(commands)
    cli_token.add(commands)
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
    added = add_command(commands, name, help, about, example)
    added.set_defaults(command=command)
    return added


def _add_serve(commands: Any) -> None:
    about = (
        "Takes events over HTTP, puts each feed in order, and writes it to the feed's sinks.\n"
        "Says on stdout where it listens, once it does: with port 0 in `listen`, the free one that it got.\n"
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
    demo.add_argument("--seconds", type=demo_seconds, default=60, metavar="N", help="how long it runs (default: 60)")


def _add_check(commands: Any) -> None:
    about = (
        "Reads the configuration and the STRANDLINE_ variables as `serve` would, and starts nothing.\n"
        "Names every fault at once, with its place and what was likely meant; then the exit code is 2."
    )
    example = "  strandline check deploy/strandline.toml"
    check = _add(commands, "check", "look for faults in a configuration", about, example, _check)
    check.add_argument("file", type=Path, metavar="FILE", help="configuration")
    check.add_argument("--json", action="store_true", help="the answer as one JSON object")


def _add_capture(commands: Any) -> None:
    about = (
        "Takes a stretch of a feed's traffic into one file, for `strandline replay`. SOURCE is one of:\n"
        "  the service's data_dir (or a feed's folder in it): what its journal holds, see `journal.retain`;\n"
        "  http://...: what a running service takes in from now on, for --seconds;\n"
        "  a file of events, NDJSON or .parquet, that tell when they arrived (--arrival)."
    )
    example = (
        "  strandline capture strandline-data --feed river-gauges --from 24h --out yesterday.capture\n"
        "  strandline capture http://127.0.0.1:8600 --feed river-gauges --seconds 600 --out now.capture\n"
        "  strandline capture dump.ndjson --arrival /received_at --time /observed_at --out old.capture"
    )
    capture = _add(commands, "capture", "take a feed's traffic into a file", about, example, _capture)
    capture.add_argument("capture_source", metavar="SOURCE", help="a folder, an address or a file")
    capture.add_argument("--feed", metavar="NAME", help="the feed (for a file: what to call it)")
    capture.add_argument("--out", type=Path, required=True, metavar="FILE", help="the capture to write")
    capture.add_argument("--from", dest="from_time", metavar="TIME", help="arrived since: 24h, or an RFC 3339 time")
    capture.add_argument("--to", dest="to_time", metavar="TIME", help="arrived until")
    capture.add_argument("--seconds", type=recorded_seconds, default=60, metavar="N", help="how long (default: 60)")
    capture.add_argument("--without-events", action="store_true", help="only times, sources and lengths")
    capture.add_argument("--arrival", metavar="POINTER", help="where an event says when it arrived")
    capture.add_argument("--arrival-unit", choices=UNITS, help="of --arrival (default: that of --unit)")
    capture.add_argument("--time", metavar="POINTER", help="where an event's own time stands (default: /time)")
    capture.add_argument("--unit", choices=UNITS, help="of --time (default: rfc3339)")
    capture.add_argument("--source", metavar="POINTER", help="where an event names its source")
    capture.add_argument("--id", metavar="POINTER", help="where an event carries its id")
    capture.add_argument("--json", action="store_true", help="the answer as one JSON object")
    add_access(capture)


def _add_replay(commands: Any) -> None:
    about = (
        "Plays a capture again: what the feed did; with --config what other settings would have done;\n"
        "with --into URL sends it to a service. Bars (--expect-...) make it a test: exit code 1 where one\n"
        "is missed."
    )
    example = (
        "  strandline replay yesterday.capture --verify\n"
        "  strandline replay yesterday.capture --config new.toml --expect-late-share 0.001\n"
        "  strandline replay yesterday.capture --into http://127.0.0.1:8600 --pace 10x"
    )
    replay = _add(commands, "replay", "play a capture again", about, example, _replay)
    replay.add_argument("capture_file", type=Path, metavar="CAPTURE", help="what `strandline capture` made")
    replay.add_argument("--config", type=Path, metavar="FILE", help="decide anew with the settings in this file")
    replay.add_argument("--feed", metavar="NAME", help="the feed in it, or at --into URL (default: the captured one)")
    replay.add_argument("--verify", action="store_true", help="decide anew and compare each release")
    replay.add_argument("--digest", action="store_true", help="a digest of all batches, bytes of events included")
    replay.add_argument("--into", metavar="URL|FILE.db", help="send it there, or write what is released")
    replay.add_argument("--pace", type=pace, metavar="PACE", help="into a service: recorded (the default), 10x, or max")
    replay.add_argument("--connections", type=connections, default=1, metavar="N", help="into a service (default: 1)")
    replay.add_argument("--expect-late-share", type=amount, metavar="SHARE", help="late share at most, such as 0.001")
    replay.add_argument("--expect-hold-p99", type=hold, metavar="TIME", help="99 in 100 are held so long at most: 5s")
    replay.add_argument("--expect-peak-held", type=amount, metavar="N", help="events held at one time at most: 2e6")
    replay.add_argument("--json", action="store_true", help="the answer as one JSON object")
    add_access(replay)


def _add_advise(commands: Any) -> None:
    about = (
        "Says how long a feed should wait so that at most a wanted share of its events is late: chosen on the\n"
        "first part of a capture, verified on the rest. Exit code 1 where that was missed or cannot be shown."
    )
    example = "  strandline advise yesterday.capture --late-share 0.001 --at-most 30s"
    advise = _add(commands, "advise", "how long to wait, from a capture", about, example, _advise)
    advise.add_argument("capture_file", type=Path, metavar="CAPTURE", help="what `strandline capture` made")
    advise.add_argument("--late-share", type=amount, required=True, metavar="SHARE", help="late at most, such as 0.001")
    advise.add_argument("--at-most", type=hold, metavar="TIME", help="the longest wait, such as 30s")
    advise.add_argument("--learn", type=amount, default=2 / 3, metavar="PART", help="to choose on (default: 0.667)")
    advise.add_argument("--clock", choices=("event", "arrival"), help="(default: the captured feed's, else event)")
    advise.add_argument("--order", choices=("feed", "source"), help="(default: the captured feed's, else feed)")
    advise.add_argument("--idle-after", type=hold, metavar="TIME", help="(default: the captured feed's, else 30s)")
    advise.add_argument("--sources", type=rows, default=4, metavar="N", help="sources to look at (default: 4)")
    advise.add_argument("--quick", action="store_true", help="only the choice: no other slacks, no sources")
    advise.add_argument("--reordering", action="store_true", help="figures of RFC 4737 and RFC 5236 as well")
    advise.add_argument("--sequence", metavar="POINTER", help="where events are numbered: what was lost, and what late")
    advise.add_argument("--report", type=Path, action="append", metavar="FILE", help="as FILE.html or FILE.png")
    advise.add_argument("--json", action="store_true", help="the answer as one JSON object")


def _add_lane(commands: Any, lane: str, things: str, thing: str, narrow: str) -> None:
    """`late`, `quarantine` and `refused`: list, export, forget."""
    group = commands.add_parser(lane, help=f"look at {things}", description=f"Look at {things}.")
    acts = group.add_subparsers(title="commands", metavar="COMMAND", required=True)
    example = f"  strandline {lane} list --feed river-gauges --since 1h"
    about = f"Shows {things}, the oldest first.\nThe service may run meanwhile; it is not held up."
    listing = _add(acts, "list", f"show each {thing}", about, example, _on_lane("list_rows", lane))
    listing.add_argument("--limit", type=rows, default=100, metavar="N", help="rows at most (default: 100)")
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
    _add_again(acts, lane, things, narrow)
    for command in (listing, export, forget):
        command.add_argument("--feed", required=True, metavar="NAME", help="the feed")
        place = command.add_mutually_exclusive_group()
        place.add_argument("--config", type=Path, metavar="FILE", help=f"configuration (default: {DEFAULT_FILE} here)")
        place.add_argument("--data-dir", type=Path, metavar="DIR", help="the service's folder, without a configuration")


def _add_again(acts: Any, lane: str, things: str, narrow: str) -> None:
    """`late resend`, `refused resend`, `quarantine readmit`: acts of the running service."""
    act = "readmit" if lane == "quarantine" else "resend"
    example = f"  strandline {lane} {act} --feed river-gauges --through 120"
    if act == "resend":
        short = "have a sink take them once more"
        about = f"Asks the running service to send {things}\nto one sink once more, as repairs. They stay listed."
        example += " --sink archive"
    else:
        short = "take them in once more, after a fix"
        about = (
            "Asks the running service to decode the lines once more, each once. Those that are events now are\n"
            "taken, and go: the ledger counts them as received anew. The others, also those still too far\n"
            "ahead, stay as they were and are not counted again (`still faulty`)."
        )
    again = _add(acts, act, short, about, example, _again(lane, act))
    again.add_argument("--feed", required=True, metavar="NAME", help="the feed")
    again.add_argument("--after", type=int, default=0, metavar="NUMBER", help="only those after this number")
    again.add_argument("--through", type=int, default=2**63 - 1, metavar="NUMBER", help="up to and including this one")
    again.add_argument("--json", action="store_true", help="the answer as JSON")
    add_service(again)
    if act == "resend":
        again.add_argument("--sink", required=True, metavar="NAME", help="the sink, which must take repairs")
    else:
        again.add_argument(f"--{narrow}", dest="narrow", help=f"only those of one {narrow}", **NARROW[narrow])


def _again(lane: str, act: str) -> Command:
    def command(options: argparse.Namespace) -> int:
        from .cli_acts import again  # noqa: PLC0415

        return again(options, lane, act)

    return command


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


def _capture(options: argparse.Namespace) -> int:
    from .cli_capture import capture  # noqa: PLC0415

    return capture(options)


def _replay(options: argparse.Namespace) -> int:
    from .cli_replay import replay  # noqa: PLC0415

    return replay(options)


def _advise(options: argparse.Namespace) -> int:
    from .cli_advise import advise_on  # noqa: PLC0415

    return advise_on(options)


def _on_lane(work: str, lane: str) -> Command:
    def command(options: argparse.Namespace) -> int:
        from . import cli_lanes  # noqa: PLC0415

        done: int = getattr(cli_lanes, work)(options, lane)
        return done

    return command


if __name__ == "__main__":
    sys.exit(main())
