"""The work of `strandline trace`: ask the service, or read its folder where it is down, and say what was found."""

from __future__ import annotations

import argparse
import json
import os
import sys
from collections.abc import Iterator
from pathlib import Path
from typing import Any
from urllib.parse import urlencode

from ..cli_answers import DEFAULT_FILE, FINE, NO, NOT_REACHED, complain, harmless
from ..cli_lanes import lanes_path
from ..cli_options import URL
from ..cli_progress import bar
from ..client_access import address_of
from ..client_asking import Refusal, Unreachable, answer_of
from ..config import Config, load
from ..errors import ConfigError, JournalError, StrandlineError
from ..journal.disk import LocalDisk
from ..journal.journal import Journal
from .answer import document_of
from .budget import Budget
from .question import LineReader, Question, QuestionError, question_of
from .trace import OFFLINE_BYTES_AT_MOST, OPENINGS, trace, trace_kept
from .words import because

ANY_HOST = ("0.0.0.0", "::", "")
MEGABYTE = 1_000_000

Json = dict[str, Any]


def command(options: argparse.Namespace) -> int:
    """Trace what was asked for: 0 found, 1 not found, 2 wrong use, 3 neither service nor folder could be reached."""
    try:
        document = _document(options)
    except Refusal as refused:
        complain(harmless(str(refused)))
        return refused.code
    except Unreachable as error:
        hint = "is the service running there? Name it with --url, or its folder with --data-dir"
        complain(f"{harmless(str(error))}; {hint}")
        return NOT_REACHED
    if options.json:
        sys.stdout.write(json.dumps(document) + "\n")
    else:
        sys.stdout.write("".join(f"{harmless(line)}\n" for line in told(document)))
    return FINE if document["found"] else NO


def _document(options: argparse.Namespace) -> Json:
    if options.data_dir is not None:
        return _offline(options, None)
    file: Path | None = options.config
    if file is None and options.url is None and DEFAULT_FILE.exists():
        file = DEFAULT_FILE
    config = None if file is None else load(file, os.environ)
    url = address_of(options.url) if options.url else URL if config is None else url_of(config)
    if url is None:  # the free port that it got is not written down
        return _offline(options, config)
    try:
        return _asked(options, url)
    except Unreachable as error:
        if config is None:
            raise
        complain(f"{harmless(str(error))}; reading {config.data_dir} instead")
    options.config = file
    return _offline(options, config)


def url_of(config: Config) -> str | None:
    """Where the service of a configuration listens; None where it takes any free port."""
    listen = config.listen
    if listen.port == 0:
        return None
    host = "127.0.0.1" if listen.host in ANY_HOST else listen.host
    scheme = "http" if config.tls.certificate is None else "https"
    return f"{scheme}://[{host}]:{listen.port}" if ":" in host else f"{scheme}://{host}:{listen.port}"


def _asked(options: argparse.Namespace, url: str) -> Json:
    """The service's answer. Raises Refusal, Unreachable, ConfigError."""
    given = {name: getattr(options, name) for name in ("id", "time", "source") if getattr(options, name) is not None}
    try:
        query = urlencode(given, errors="strict")
    except UnicodeEncodeError as error:
        raise ConfigError([f"{error.object!a} is not UTF-8"]) from None
    try:
        return dict(json.loads(answer_of(options, url, f"trace?{query}")))
    except (ValueError, TypeError) as error:
        raise Unreachable(f"{url} could not be reached: {error}") from None


# ---- without a service ----------------------------------------------------------------------------------------------


def _offline(options: argparse.Namespace, config: Config | None) -> Json:
    """From the folder. Raises StrandlineError, OSError, ConfigError."""
    reader, partition = None, False
    if config is not None:
        options.data_dir = None
        feed = config.feed(options.feed)
        if feed is not None:
            reader, partition = LineReader.of(feed), feed.partitions is not None
    lanes = lanes_path(options)
    try:
        question = question_of(
            options.feed, reader, options.id, options.time, options.source, partition=partition
        )  # fmt: skip
    except QuestionError as error:
        raise ConfigError([str(error)]) from None
    for attempt in range(OPENINGS):
        try:
            return _read(question, lanes)
        except FileNotFoundError:  # a service that runs after all deleted a segment meanwhile
            if attempt == OPENINGS - 1:
                raise
    raise AssertionError("the last attempt returns or raises")


def _read(question: Question, lanes: Path) -> Json:
    journal = _opened(lanes.parent)
    if journal is None:
        if not lanes.exists():
            raise StrandlineError(f"{lanes.parent}: there is no journal in it, or nothing in the journal yet")
        return document_of(trace_kept(question, lanes, Budget(OFFLINE_BYTES_AT_MOST, lambda: False)))
    try:
        size = max(1, (journal.durable_lsn - journal.first_lsn) // MEGABYTE)
        with bar("journal read", "MB", size) as tell:
            budget = Budget(OFFLINE_BYTES_AT_MOST, lambda: False, tell=lambda read: tell(min(read // MEGABYTE, size)))
            found = trace(journal, question, lanes, budget)
        return document_of(found)
    finally:
        journal.close()


def _opened(folder: Path) -> Journal | None:
    """The journal of a feed's folder; None where there is none, or nothing in it yet."""
    disk = LocalDisk(folder.parent, read_only=True)
    for attempt in range(OPENINGS):  # a service that runs after all may begin or delete a segment meanwhile
        try:
            journal = Journal.open(disk, folder.name, read_only=True)
        except JournalError:
            if attempt == OPENINGS - 1:
                raise
            continue
        if journal.durable_lsn == journal.first_lsn == 0:
            journal.close()
            return None
        return journal
    raise AssertionError("the last attempt returns or raises")


# ---- for a person ---------------------------------------------------------------------------------------------------


def told(document: Json) -> Iterator[str]:
    """The answer in lines."""
    matches = document["matches"]
    for number, match in enumerate(matches, 1):
        if number > 1:
            yield ""
        count = "" if len(matches) == 1 else f"{number} of {len(matches)}: "
        source = "" if match["source"] is None else f" from {match['source']}"
        yield f"{count}{match['fate']}: event of {match['time'] or 'no readable time'}{source}"
        yield f"  {match['explanation']}"
        yield from (f"  {name:<10} {text}" for name, text in _rows(match))
    if not matches:
        yield f"no event of feed {document['feed']} with {_question(document['asked'])} was found"
        yield f"  searched   {_searched(document['searched'])}"
    yield from (f"note: {note}" for note in document["notes"])


def _rows(match: Json) -> Iterator[tuple[str, str]]:
    arrival = match["arrival"]
    if arrival["position"] is None:
        yield "arrived", f"{arrival['arrived']}; its request is in no journal here any more"
    else:
        key = "" if arrival["idempotency_key"] is None else f", Idempotency-Key {arrival['idempotency_key']}"
        of = f"line {arrival['line']} of the request at position {arrival['position']} with {arrival['events']:,} lines"
        yield "arrived", f"{arrival['arrived']}, {of}{key}"
        stood = match["watermark"]
        yield "watermark", (
            "none stood then, as far as is known" if stood is None
            else f"stood at {stood['at']} then, since {stood['since']}, because {because(stood)}"
        )  # fmt: skip
    if match["fate"] == "held":
        held = match["held"]
        behind = f"behind {held['before_it']:,} of its {held['run_events']:,} events"
        yield "run", f"{held['run']} of {held['runs']}, {behind}"
    for sink, each in match.get("sinks", {}).items():
        detail = "" if each["detail"] is None else f": {each['detail']}"
        yield "sink", f"{sink}: {each['state']} (has taken up to batch {each['taken_up_to_batch']:,}){detail}"
    for sink, each in match.get("repairs", {}).items():
        yield "repairs", f"{sink}: {'sent' if each['sent'] else 'not sent yet'}"
    yield "event", match["event"]


def _question(asked: Json) -> str:
    what = f"id {asked['id']}" if asked["id"] is not None else f"time {asked['time']}"
    return what if asked["source"] is None else f"{what} of source {asked['source']}"


def _searched(searched: Json) -> str:
    if not searched.get("journal", True):
        return "the lane store; there is no journal in this folder"
    since = "" if searched["arrived_from"] is None else f", which arrived since {searched['arrived_from']}"
    return (
        f"the journal from position {searched['from_position']} to {searched['to_position']}{since}; "
        f"{searched['bytes_read']:,} bytes were read"
    )
