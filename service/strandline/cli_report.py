"""`strandline report`: what happened to a feed in a stretch of time, for an incident's ticket.

Options, and where the answer goes; light, since `--help` imports it. The service gathers the facts, the same pure
modules as there write them here, so that an HTML file and a Markdown file of one call say the same.
"""

from __future__ import annotations

import argparse
import json
import sys
from pathlib import Path
from typing import TYPE_CHECKING, Any
from urllib.parse import urlencode

from .cli_answers import FINE, NOT_REACHED, complain
from .cli_options import add_command, add_service
from .cli_values import stretch
from .errors import ConfigError

if TYPE_CHECKING:
    from .reporting.facts import Facts

SUFFIXES = (".html", ".md")


def add(commands: Any) -> None:
    """The command, for the command line."""
    about = (
        "Tells what happened to a feed from one time to another, in sentences to be pasted into a ticket:\n"
        "who held it and why, what came late and whose it was, whether the books balance, what was done by\n"
        "whom, and how far the output was behind. Asks the running service. Without --out the report goes\n"
        "to stdout, as Markdown; --out FILE.html or FILE.md writes one file, --out DIR both.\n"
        "Exit codes: 0 fine; 2 wrong use: no such feed, no such time, no token or one that may\n"
        "not; 3 not reached, or it could not answer now."
    )
    example = (
        "  strandline report --feed river-gauges --from 2h\n"
        "  strandline report --feed river-gauges --from 2h --out .\n"
        "  strandline report --feed river-gauges --from 2026-05-01T02:00:00Z --to 2026-05-01T04:00:00Z"
    )
    report = add_command(commands, "report", "what happened to a feed, for an incident's ticket", about, example)
    report.add_argument("--feed", required=True, metavar="NAME", help="the feed")
    since, until = "since: 2h ago, or an RFC 3339 time (default: 1h)", "until, likewise (default: now)"
    report.add_argument("--from", dest="from_time", metavar="TIME", help=since)
    report.add_argument("--to", dest="to_time", metavar="TIME", help=until)
    report.add_argument("--out", type=Path, metavar="DIR|FILE", help="a folder, FILE.html or FILE.md")
    report.add_argument("--json", action="store_true", help="the facts and the summary as one JSON object")
    add_service(report)
    report.set_defaults(command=_report)


def _report(options: argparse.Namespace) -> int:
    from .cli_acts import ask  # noqa: PLC0415 - --help needs none of it

    _check(options.out)
    query = {"format": "json"} | stretch(options)
    answer = ask(options, f"report?{urlencode(query)}")
    if isinstance(answer, int):
        return answer
    facts = _facts(answer)
    if facts is None:
        complain("the service answers in another version's words: use the strandline of the service's own version")
        return NOT_REACHED
    files = _files(options.out, facts)
    for file in files:
        file.parent.mkdir(parents=True, exist_ok=True)
        file.write_text(_written(facts, file.suffix), encoding="utf-8")
        complain(f"wrote {file}")
    if options.json:
        sys.stdout.write(json.dumps({"summary": _summary(facts), **answer}) + "\n")
    elif not files:
        sys.stdout.write(_written(facts, ".md"))
    return FINE


def _check(out: Path | None) -> None:
    """Raises ConfigError where a file is named that would be neither."""
    if out is not None and out.suffix and out.suffix not in SUFFIXES and not out.is_dir():
        raise ConfigError([f"--out {out}: must be a folder, or end in .html or .md"])


def _files(out: Path | None, facts: Facts) -> list[Path]:
    if out is None:
        return []
    if out.suffix in SUFFIXES and not out.is_dir():
        return [out]
    from .reporting.words import full  # noqa: PLC0415

    begin = full(facts.from_ns).partition(".")[0].replace("-", "").replace(":", "").replace(" ", "T")
    return [out / f"report-{facts.feed}-{begin}Z{suffix}" for suffix in SUFFIXES]


def _facts(answer: dict[str, Any]) -> Facts | None:
    import msgspec  # noqa: PLC0415

    from .reporting.facts import Facts  # noqa: PLC0415

    try:
        return msgspec.convert(answer, Facts)
    except msgspec.ValidationError:
        return None


def _written(facts: Facts, suffix: str) -> str:
    if suffix == ".html":
        from .reporting.html import report_html  # noqa: PLC0415

        return report_html(facts)
    from .reporting.markdown import report_markdown  # noqa: PLC0415

    return report_markdown(facts)


def _summary(facts: Facts) -> list[str]:
    from .reporting.sentences import summary  # noqa: PLC0415
    from .reporting.words import plain  # noqa: PLC0415

    return [plain(words) for words in summary(facts)]
