"""The demonstration: a storm on an invented river, played over real HTTP at a real service, and judged at the end.

Here live the order of events and what a person sees. The feed is made in `demo_story`, the service runs in a process of
its own (`child`), the verdict is the checker's, read from the store itself. Nothing outside a temporary folder
is touched.
"""

from __future__ import annotations

import asyncio
import contextlib
import sys
import tempfile
import time
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import numpy as np
from rich.console import Console
from rich.live import Live
from rich.text import Text
from strandline.caution import CAUTION

from .bodies import Body, bodies, cut_by_window
from .checker import Verdict, judge
from .child import ChildServer, ServiceTrouble, free_port, serve
from .demo_story import GATEWAYS, Moment, Pace, Story, story
from .driver import Delivery, Target, as_arrived, send
from .evidence import Digests
from .exits import FINE, INTERRUPTED, NO, NOT_REACHED, WRONG_USE
from .stores import Reading, digests_of, read_sqlite, with_digests
from .trace import Int64s, Trace

FEED = "river-gauges"
WINDOW_NS = 100_000_000  # a request for what arrives in a tenth of a second
LOOKS_PER_S = 4
PLAIN_LINES = 12  # status lines over the whole time where there is no terminal


def run(seconds: float = 60, *, seed: int = 1, console: Console | None = None) -> int:
    """Play it for so many seconds; the exit code: 0 when the judge finds all well, 1 when not, 2 and 3 for trouble."""
    screen = console or Console(highlight=False)
    try:
        told = story(seconds, seed)
        with tempfile.TemporaryDirectory(prefix="strandline-demo-") as folder:
            verdict = asyncio.run(_play(told, seconds, Path(folder), screen))
    except ValueError as error:
        print(error, file=sys.stderr)
        return WRONG_USE
    except ServiceTrouble as error:
        print(error, file=sys.stderr)
        return NOT_REACHED
    except KeyboardInterrupt:
        say(screen, "Stopped before the end; the service is stopped too, and the temporary folder is gone.")
        return INTERRUPTED
    return FINE if verdict.ok else NO


def configuration(port: int, folder: Path, pace: Pace) -> str:
    """The service's configuration file."""
    return f"""listen = "127.0.0.1:{port}"
data_dir = "{folder.as_posix()}/data"
[[feed]]
name = "{FEED}"
time = {{ at = "/observed_at", unit = "rfc3339" }}
source = "/station"
slack = "{_ms(pace.slack_s)}"
idle_after = "{_ms(pace.idle_after_s)}"
hold_at_most = "{_ms(pace.hold_at_most_s)}"
ahead_limit = "{_ms(pace.ahead_limit_s)}"
[[feed.sink]]
kind = "sqlite"
path = "{store_in(folder).as_posix()}"
"""


def store_in(folder: Path) -> Path:
    """Where the SQLite sink of a service in this folder writes."""
    return folder / "river.db"


def _ms(seconds: float) -> str:
    return f"{round(seconds * 1000)}ms"


async def _play(told: Story, seconds: float, folder: Path, screen: Console) -> Verdict:
    """Start the service, send the feed, tell what happens, drain, stop, judge."""
    pace = told.pace
    say(
        screen,
        f"Six gateways on an invented river ({', '.join(GATEWAYS)}) gather readings and send them in bursts.\n"
        f"A service of its own puts their feed in order: it waits {pace.slack_s:.3g} s for stragglers (slack), and "
        f"holds no reading longer than {pace.hold_at_most_s:.3g} s (hold_at_most).",
    )
    port, file = free_port(), folder / "strandline.toml"
    file.write_text(configuration(port, folder, pace))
    async with ChildServer(serve(file), port, folder / "service.log") as service:
        dashboard = f", its dashboard is at {service.url}/" if await service.has_dashboard() else f" at {service.url}"
        say(screen, f"The service listens{dashboard}. This takes {seconds:g} s.\n")
        begin_ns = time.time_ns()
        trace = told.trace.shifted(begin_ns)
        bounds = cut_by_window(trace, WINDOW_NS)
        digests: list[Digests] = []
        rendered = _digested(bodies(trace, bounds), digests)
        target = Target(service.url, FEED, connections=2, encodings=("identity", "gzip", "zstd"), keys="demo")
        telling = asyncio.create_task(_tell(service, told.moments, seconds, screen))
        try:
            done = await send(rendered, target, as_arrived(trace, begin_ns=begin_ns))
        finally:
            telling.cancel()
            with contextlib.suppress(asyncio.CancelledError):
                await telling
        say(screen, "The feed has ended. What is still held is let go, in order (drain), and the service is stopped.")
        await service.drain(FEED)
        code = await service.stop()
        if code != 0:
            raise ServiceTrouble(f"the service ended with {code}:\n{service.last_words()}")
    return _judge(trace, bounds, done, np.concatenate(digests), folder, screen)


def say(screen: Console, text: str) -> None:
    """Print plain text; lines are wrapped where there is a terminal to wrap them for, and left whole elsewhere."""
    screen.print(text, soft_wrap=not screen.is_terminal, markup=False, highlight=False)


def _digested(made: Iterator[Body], digests: list[Digests]) -> Iterator[Body]:
    """The bodies as they are, with the digests of their lines noted on the way."""
    for body in made:
        digests.append(digests_of(body.payload))
        yield body


async def _tell(service: ChildServer, moments: tuple[Moment, ...], seconds: float, screen: Console) -> None:
    """Say each moment when it comes, and between them how the feed stands. Runs until it is cancelled."""
    begin = time.monotonic()
    left, plain_every = list(moments), max(1, round(seconds * LOOKS_PER_S / PLAIN_LINES))
    with Live(console=screen, auto_refresh=False, transient=True) as live:
        for look in range(10**9):
            now_s = time.monotonic() - begin
            while left and left[0].at_s <= now_s:
                say(screen, f"{_clock(now_s)}  {left.pop(0).text}")
            status = f"{_clock(now_s)}  {standing(await service.look(FEED))}"
            if screen.is_terminal:
                live.update(Text(status, style="dim", overflow="ellipsis", no_wrap=True), refresh=True)
            elif look % plain_every == 0:
                say(screen, status)
            await asyncio.sleep(1 / LOOKS_PER_S)


def _clock(seconds: float) -> str:
    whole = max(0, int(seconds))
    return f"{whole // 60:02d}:{whole % 60:02d}"


def standing(document: dict[str, Any] | None) -> str:
    """How the feed stands, in a line, from what GET /v1/feeds/{feed} answered; what is missing there is left out."""
    if document is None:
        return "the service does not answer just now"
    hold, ledger = _part(document, "hold"), _part(document, "ledger")
    pieces = [
        f"held {_number(ledger, 'buffered')}, in order {_number(ledger, 'released')}, "
        f"late {_number(ledger, 'late')}, quarantined {_number(ledger, 'quarantined')}"
    ]
    behind, since = document.get("watermark_age_s"), hold.get("for_s")
    if isinstance(behind, int | float):
        pieces.append(f"watermark {behind:.1f} s behind now")
    why = hold.get("explanation") or hold.get("why")
    if why and ledger.get("buffered"):
        lasting = f" ({since:.1f} s)" if isinstance(since, int | float) else ""
        pieces.append(f"{hold['source']}: {why}{lasting}" if hold.get("source") else f"{why}{lasting}")
    return "; ".join(pieces)


def _part(document: dict[str, Any], key: str) -> dict[str, Any]:
    found = document.get(key)
    return found if isinstance(found, dict) else {}


def _number(ledger: dict[str, Any], key: str) -> str:
    found = ledger.get(key)
    return f"{found:,}" if isinstance(found, int) else "?"


def _judge(trace: Trace, bounds: Int64s, done: Delivery, digests: Digests, folder: Path, screen: Console) -> Verdict:
    """The checker's verdict on what the SQLite file holds, said aloud."""
    sent = done.evidence(trace, bounds)
    reading = Reading(trace.source_names, digests=True)
    lanes = {lane: read_sqlite(store_in(folder), FEED, lane, reading) for lane in ("ordered", "late")}
    lines = np.array([bounds[body] + line - 1 for body, line, _ in done.faults], dtype=np.int64)
    every_fault_is_named = len(lines) == done.sums["quarantined"]
    verdict = judge(
        with_digests(sent, digests[: len(sent.rows)]),
        lanes["ordered"],
        lanes["late"],
        quarantined=trace.ids[lines] if every_fault_is_named else done.sums["quarantined"],
        duplicates=done.sums["duplicate"],
        told={"accepted": done.sums["accepted"], "late": done.sums["late"]} if done.answered.all() else None,
    )
    say(screen, "\nThe independent judge has read the store, event by event and byte by byte.")
    say(screen, str(verdict))
    for failure in done.failures[:5]:
        say(screen, f"No answer for {failure}")
    say(screen, f"\n{CAUTION}")
    return verdict
