"""`strandline capture`: a capture out of a journal's folder, a running service, or a file of events.

What a capture is and how it is made lives in `replay`; here are the choice between its three sources and what is said.
"""

from __future__ import annotations

import argparse
import asyncio
import contextlib
import os
import sys
import time
from collections.abc import Iterator
from pathlib import Path
from typing import BinaryIO

import aiohttp
import msgspec

from .cli_answers import FINE, WRONG_USE, complain
from .cli_progress import bar
from .cli_values import instant_ns
from .client_access import Caller, address_of, caller_of, detail_of, feed_address, is_address, refusal
from .errors import CaptureError, ConfigError
from .journal.disk import LocalDisk
from .replay.capture import Capture, CaptureWriter
from .replay.from_file import Fields, capture_file
from .replay.from_journal import Wanted, capture_journal

PIECE_BYTES = 1 << 20
FILE_OPTIONS = ("arrival", "arrival_unit", "time", "unit", "source", "id")


def capture(options: argparse.Namespace) -> int:
    """Make the capture that was asked for, and say what is in it."""
    out: Path = options.out
    if out.exists():
        raise CaptureError(f"{out} exists already: remove it or name another file")
    source: str = options.capture_source
    if is_address(source) and not Path(source).exists():
        _forbid(options, FILE_OPTIONS, "a file of events")
        _forbid(options, ("from_time", "to_time"), "a folder of a journal")
        _from_service(address_of(source, "SOURCE"), options)
    elif Path(source).is_dir():
        _forbid(options, FILE_OPTIONS, "a file of events")
        _from_folder(Path(source), options)
    else:
        _forbid(options, ("from_time", "to_time"), "a folder of a journal")
        _from_file(Path(source), options)
    return FINE


def _forbid(options: argparse.Namespace, names: tuple[str, ...], needs: str) -> None:
    given = [name for name in names if getattr(options, name) is not None]
    if given:
        spelled = ", ".join(f"--{name.removesuffix('_time').replace('_', '-')}" for name in given)
        raise ConfigError([f"{spelled}: only for {needs}, not for {options.capture_source}"])


@contextlib.contextmanager
def _written(out: Path) -> Iterator[BinaryIO]:
    """A new file; what was begun of it goes where nothing came of it."""
    with out.open("xb") as file:
        try:
            yield file
            file.flush()
            os.fsync(file.fileno())
        except BaseException:
            out.unlink(missing_ok=True)
            raise


def _from_folder(folder: Path, options: argparse.Namespace) -> None:
    """From a feed's folder, or from data_dir and --feed."""
    if options.feed and (folder / "feeds" / options.feed).is_dir():
        folder = folder / "feeds" / options.feed
    if not any(folder.glob("journal-*.seg")):
        feeds = sorted(path.name for path in (folder / "feeds").glob("*") if path.is_dir())
        there = f": name one of its feeds with --feed: {', '.join(feeds)}" if feeds else ""
        raise CaptureError(f"{folder} holds no journal{there}")
    now_ns = time.time_ns()
    wanted = Wanted(
        options.feed or folder.name,
        now_ns,
        _instant("--from", options.from_time, now_ns),
        _instant("--to", options.to_time, now_ns),
        not options.without_events,
    )
    disk = LocalDisk(folder.parent, read_only=True)
    with _written(options.out) as file, bar("journal read", "MB", 1_000_000) as tell:
        writer = capture_journal(
            disk, folder.name, wanted, file.write, lambda done, of: tell(1_000_000 * done // max(of, 1))
        )
    _say(options, writer)


def _instant(option: str, text: str | None, now_ns: int) -> int | None:
    return None if text is None else instant_ns(option, text, now_ns)


def _from_file(path: Path, options: argparse.Namespace) -> None:
    if options.arrival is None:
        raise ConfigError([f"{path}: --arrival is missing: where an event says when it came, such as /received_at"])
    if not path.is_file():
        raise CaptureError(f"{path}: there is no such file, folder or service")
    fields = Fields(
        options.feed or "captured",
        options.arrival,
        options.arrival_unit or options.unit or "rfc3339",
        options.time or "/time",
        options.unit or "rfc3339",
        options.source,
        options.id,
    )
    with _written(options.out) as file, bar("read", "parts", 1_000_000) as tell:
        writer, skipped = capture_file(
            path, fields, time.time_ns(), file.write, lines=not options.without_events,
            progress=lambda done, of: tell(1_000_000 * done // max(of, 1)),
        )  # fmt: skip
    if skipped.count:
        complain(f"{skipped.count:,} lines tell no arrival and were left out, the first of them:", *skipped.first)
    _say(options, writer)


def _from_service(url: str, options: argparse.Namespace) -> None:
    if not options.feed:
        raise ConfigError([f"{url}: --feed is missing: the name of the feed to record"])
    query = {"seconds": str(options.seconds), "events": "0" if options.without_events else "1"}
    address = feed_address(url, options.feed, "capture")
    shown = caller_of(options, url, os.environ)
    out: Path = options.out
    with out.open("xb") as file, bar("recorded", "s", options.seconds) as tell:
        try:
            asyncio.run(_stream(address, query, file, tell, shown))
        except BaseException:
            if not file.tell():
                out.unlink(missing_ok=True)
            raise
    with Capture(out) as found:
        if found.cut:
            raise CaptureError(found.cut)
        _tell(options, found.requests, found.events, out.stat().st_size)


async def _stream(address: str, query: dict[str, str], file: BinaryIO, tell: object, shown: Caller) -> None:
    begin = time.monotonic()
    timeout = aiohttp.ClientTimeout(total=None, sock_connect=10, sock_read=60)
    try:
        async with (
            aiohttp.ClientSession(timeout=timeout, headers=shown.headers) as session,
            session.get(address, params=query, ssl=shown.context or True) as answer,
        ):
            if answer.status != 200:
                content = await answer.read()
                told = detail_of(content) or content[:500].decode(errors="replace")
                code, why = refusal(answer.status, told, shown)
                told = f"{address} answered {answer.status}: {why}"
                raise ConfigError([told]) if code == WRONG_USE else CaptureError(told)
            async for piece in answer.content.iter_chunked(PIECE_BYTES):
                file.write(piece)
                if callable(tell):
                    tell(int(time.monotonic() - begin))
    except aiohttp.ClientPayloadError as error:
        raise CaptureError(f"{address}: the recording ended early ({error}); what came is in the file") from error
    except (aiohttp.ClientError, TimeoutError) as error:
        raise CaptureError(f"{address} cannot be reached: {error}") from error


def _say(options: argparse.Namespace, writer: CaptureWriter) -> None:
    _tell(options, writer.requests, writer.events, writer.bytes_written)


def _tell(options: argparse.Namespace, requests: int, events: int, size: int) -> None:
    found = {"file": str(options.out), "requests": requests, "events": events, "bytes": size}
    if options.json:
        sys.stdout.write(msgspec.json.encode(found).decode() + "\n")
    else:
        sys.stdout.write(f"{options.out}: {requests:,} requests, {events:,} events, {size:,} bytes\n")
