"""`strandline act`: excuse a source, drain, set the slack for a time, pause and resume a sink of a running service.

Options, bodies and the sentence of what is true afterwards; light, since `--help` imports it. What an act does is
decided by the core, and what may be asked for by `acting`.
"""

from __future__ import annotations

import argparse
import json
import sys
from collections.abc import Callable
from typing import Any
from urllib.parse import quote

from .cli_answers import FINE, harmless
from .cli_options import add_command, add_service
from .cli_values import duration
from .errors import ConfigError

Told = tuple[str, dict[str, Any], str]  # where to send it, the body, and what is true once it is done
Act = Callable[[argparse.Namespace], Told]


def add(commands: Any) -> None:
    """The command and its acts, for the command line."""
    about = (
        "Acts on a feed of the running service. Each act is kept with who did it and why, survives a\n"
        "restart, and is listed at /v1/feeds/FEED/acts. Says what is true once it is done.\n"
        "Exit codes: 0 done; 1 it cannot be done now; 2 wrong use: no such feed, source or sink, no\n"
        "token or one that may not; 3 not reached, or it could not answer now."
    )
    group = commands.add_parser(
        "act",
        help="excuse a source, drain, set the slack, pause a sink",
        description=about,
        formatter_class=argparse.RawDescriptionHelpFormatter,
    )
    acts = group.add_subparsers(title="commands", metavar="COMMAND", required=True)
    why = "\\\n    --reason 'its link is down' --who 'night shift'"
    excuse = _add(acts, "excuse", "do not wait for a source until it speaks again", f"--source weir-3 {why}", _excuse)
    excuse.add_argument("--source", required=True, metavar="NAME", help="the source")
    _add(acts, "drain", "release all that is held, in order", "--reason 'the feed has ended'", _drain)
    slack = _add(acts, "slack", "another slack for a time", f"--slack 8s --for 30m {why}", _slack)
    slack.add_argument("--slack", type=duration, metavar="TIME", help="the slack, such as 8s; at most hold_at_most")
    slack.add_argument("--for", dest="for_time", type=duration, metavar="TIME", help="for how long: 30m; at most 24h")
    slack.add_argument("--end", action="store_true", help="end it now: the configured slack holds again")
    pause = _add(acts, "pause", "hand a sink nothing more until it is resumed", f"--sink sqlite {why}", _pause)
    resume = _add(acts, "resume", "hand a sink batches again", "--sink sqlite --reason 'it is mended'", _resume)
    for each in (pause, resume):
        each.add_argument("--sink", required=True, metavar="NAME", help="the sink")


def _add(acts: Any, name: str, help: str, example: str, told: Act) -> argparse.ArgumentParser:
    whole = f"  strandline act {name} --feed river-gauges {example}"
    added = add_command(acts, name, help, f"{help[0].upper()}{help[1:]}.", whole)
    added.add_argument("--feed", required=True, metavar="NAME", help="the feed")
    added.add_argument("--reason", required=True, type=_reason, metavar="WHY", help="why; it is kept with the act")
    added.add_argument("--who", default="", metavar="WHO", help="who does it (with a token: the token's name)")
    add_service(added)
    added.set_defaults(command=_command(told))
    return added


def _command(told: Act) -> Callable[[argparse.Namespace], int]:
    def command(options: argparse.Namespace) -> int:
        path, body, now = told(options)
        from .cli_acts import tell  # noqa: PLC0415 - --help needs none of it

        wanted = body | {"reason": options.reason} | ({"who": options.who} if options.who else {})
        refused = tell(options, path, json.dumps(wanted).encode())
        if refused is not None:
            return refused
        sys.stdout.write(harmless(now) + "\n")
        return FINE

    return command


def _excuse(options: argparse.Namespace) -> Told:
    return "excuse", {"source": options.source}, f"{options.source} is not waited for until it speaks again."


def _drain(options: argparse.Namespace) -> Told:
    now = (
        f"What feed {options.feed} held is released in order, as fast as its sinks take it; "
        "what still comes and is older is late."
    )
    return "drain", {}, now


def _slack(options: argparse.Namespace) -> Told:
    """Raises ConfigError where the options do not go together."""
    if options.end:
        if options.slack is not None or options.for_time is not None:
            raise ConfigError(["--end ends the slack that was set: leave --slack and --for out"])
        return "slack", {"slack": None}, f"The configured slack of feed {options.feed} holds again."
    if options.slack is None or options.for_time is None:
        raise ConfigError(["name the slack and for how long, such as --slack 8s --for 30m; or --end to end it"])
    time = f"{options.slack} for {options.for_time}"
    now = f"The slack of feed {options.feed} is {time}; then the configured one holds again."
    return "slack", {"slack": options.slack, "for": options.for_time}, now


def _pause(options: argparse.Namespace) -> Told:
    now = f"Sink {options.sink} is handed nothing more until it is resumed; what waits for it is kept."
    return f"sinks/{quote(options.sink, safe='')}/pause", {}, now


def _resume(options: argparse.Namespace) -> Told:
    now = f"Sink {options.sink} is handed batches again, from where it stands."
    return f"sinks/{quote(options.sink, safe='')}/resume", {}, now


def _reason(text: str) -> str:
    if not text.strip():
        raise argparse.ArgumentTypeError("must say why")
    return text
