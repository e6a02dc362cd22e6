"""The command line `strandline-loadgen`: what shapes there are, sending one to a service, the benchmark.

Work is done elsewhere and imported when it is asked for. Results go to stdout, everything else to stderr. Exit codes: 0
fine; 1 the answer is no (a body got no success, a goal was missed); 2 wrong use; 3 the service could not be reached.
"""

from __future__ import annotations

import argparse
import sys
from collections.abc import Sequence
from pathlib import Path
from typing import Any

from strandline.cli_options import add_command, add_service

from .exits import FINE, INTERRUPTED, NO, NOT_REACHED, WRONG_USE


def main(arguments: Sequence[str] | None = None) -> int:
    """Run one command and return its exit code. argparse itself leaves with 2 on wrong use."""
    options = _parser().parse_args(arguments)
    try:
        code: int = options.command(options)
        return code
    except ValueError as error:
        print(f"strandline-loadgen: {error}", file=sys.stderr)
        return WRONG_USE
    except OSError as error:
        print(f"strandline-loadgen: {error}", file=sys.stderr)
        return NOT_REACHED
    except KeyboardInterrupt:
        return INTERRUPTED


def _parser() -> argparse.ArgumentParser:
    top = argparse.ArgumentParser(
        prog="strandline-loadgen",
        description="Makes feeds that arrive out of order, sends them to a service, measures how fast it is.",
    )
    commands = top.add_subparsers(title="commands", metavar="COMMAND", required=True)
    _add_shapes(commands)
    _add_send(commands)
    _add_bench(commands)
    return top


def _add(commands: Any, name: str, about: str, example: str) -> argparse.ArgumentParser:
    return add_command(commands, name, about, f"{about[0].upper()}{about[1:]}.", f"  {example}")


def _add_shapes(commands: Any) -> None:
    command = _add(
        commands, "shapes", "list the shapes of disorder, with their parameters", "strandline-loadgen shapes"
    )
    command.add_argument("--json", action="store_true", help="as JSON, for programs")
    command.set_defaults(command=_shapes)


def _add_send(commands: Any) -> None:
    example = "strandline-loadgen send exponential --feed river-gauges --events 100000 --set mean_s=1.5 --speed 10"
    command = _add(commands, "send", "send a shape to a service, on a fixed schedule", example)
    command.add_argument("shape", help="one of those that `shapes` lists")
    command.add_argument("--feed", required=True, help="the feed's name")
    command.add_argument("--events", type=int, default=10_000, help="how many (%(default)s)")
    command.add_argument("--seed", type=int, default=1, help="the same seed, the same events (%(default)s)")
    command.add_argument(
        "--set", action="append", default=[], metavar="NAME=VALUE", dest="given", help="a parameter of the shape"
    )
    command.add_argument(
        "--time-unit", choices=("rfc3339", "ns"), default="rfc3339", help="of observed_at (%(default)s)"
    )
    command.add_argument("--event-bytes", type=int, default=0, help="length of a line (some 150)")
    command.add_argument("--body-events", type=int, default=500, help="events a request (%(default)s)")
    command.add_argument("--window-ms", type=int, help="instead: a request for what arrives in so many ms")
    pace = command.add_mutually_exclusive_group()
    pace.add_argument("--speed", type=float, help="as the shape's events arrive, so many times as fast")
    pace.add_argument("--interval-ms", type=float, help="a request each so many ms")
    pace.add_argument("--rate", type=float, metavar="EVENTS", help="so many events a second")
    command.add_argument("--connections", type=int, default=4, help="at the same time (%(default)s)")
    command.add_argument(
        "--format", default="ndjson", help="ndjson, jsonl, json, json-seq, cloudevents, msgpack (%(default)s)"
    )
    command.add_argument("--encodings", default="identity", help="identity, gzip, zstd: one or several, taken in turn")
    command.add_argument("--seconds-at-most", type=float, default=600.0, help="stop after this (%(default)s)")
    add_service(command)
    command.add_argument(
        "--check", type=Path, metavar="STORE",
        help="then drain the feed and judge what its SQLite file or NDJSON folder holds (nothing else of this feed)",
    )  # fmt: skip
    command.add_argument("--anywhere", action="store_true", help="allow a service on another machine")
    command.add_argument("--json", action="store_true", help="the result as JSON, for programs")
    command.set_defaults(command=_send)


def _add_bench(commands: Any) -> None:
    command = _add(
        commands, "bench", "measure, in interleaved rounds, against yardsticks", "strandline-loadgen bench --quick"
    )
    command.add_argument("--only", action="append", default=[], metavar="WORD", help="rows with this in their name")
    command.add_argument("--rounds", type=int, default=5, help="how often each row is visited (%(default)s)")
    size = command.add_mutually_exclusive_group()
    size.add_argument("--quick", action="store_true", help="a tenth of the events, 3 rounds; goals are not judged")
    size.add_argument("--full", action="store_true", help="also 10^7 held and slow peers: 24 min in 2 rounds, 8 GiB")
    command.add_argument("--list", action="store_true", help="name the rows and stop")
    command.add_argument("--json", type=Path, metavar="FILE", help="write everything there too")
    command.add_argument("--page", type=Path, metavar="FILE", help="measure nothing: write the page of kept results")
    command.add_argument(
        "--results", type=Path, metavar="FOLDER", default=Path("tests/bench/results"),
        help="where the results for --page are (%(default)s)",
    )  # fmt: skip
    command.set_defaults(command=_bench)


def _shapes(options: argparse.Namespace) -> int:
    from .shapes import SHAPES, description, parameters  # noqa: PLC0415

    if options.json:
        import msgspec  # noqa: PLC0415

        plain = [{"name": n, "description": description(n), "parameters": parameters(n)} for n in SHAPES]
        print(msgspec.json.format(msgspec.json.encode(plain), indent=2).decode())
        return FINE
    common = parameters("in_order")
    for name in SHAPES:
        own = {key: value for key, value in parameters(name).items() if key not in common}
        print(f"{name}\n    {description(name)}")
        if own:
            print("    " + ", ".join(f"{key}={value}" for key, value in own.items()))
    print("all shapes\n    " + ", ".join(f"{key}={value}" for key, value in common.items()))
    return FINE


def _send(options: argparse.Namespace) -> int:
    from .cli_send import send_shape  # noqa: PLC0415

    return send_shape(options)


def _bench(options: argparse.Namespace) -> int:
    from rich.console import Console  # noqa: PLC0415

    from .bench.harness import Scale, main_table  # noqa: PLC0415
    from .bench.rows import all_rows  # noqa: PLC0415

    if options.page:
        from .bench.page import write_page  # noqa: PLC0415

        write_page(options.results, options.page)
        return FINE
    scale = Scale.quick() if options.quick else Scale.whole() if options.full else Scale()
    rows = all_rows(scale)
    if options.list:
        print("\n".join(row.name for row in rows))
        return FINE
    if options.rounds < 1:
        raise ValueError("--rounds must be at least 1")
    rounds = min(options.rounds, 3) if options.quick else options.rounds
    out = Console(width=None if sys.stdout.isatty() else 200)
    figures = main_table(rows, scale=scale, rounds=rounds, only=options.only, json_path=options.json, console=out)
    missed = [figure.name for figure in figures if figure.met is False]
    return NO if missed and not options.quick else FINE
