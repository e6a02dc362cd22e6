"""What an operator does with the kept lanes: late events and refused ones sent again, lines in quarantine readmitted.

Over HTTP; each act answers when it is done. Rows stay listed until they are forgotten, except lines of the quarantine
that were taken this time: those are settled, and go.
"""

from __future__ import annotations

import asyncio
import hashlib
from collections.abc import Sequence
from pathlib import Path
from typing import Annotated

import msgspec
from aiohttp import web

from .core.columns import Arrival, RequestKey
from .decoding import decoder_of
from .errors import BodyError
from .ingest.endpoint import read_act, refuse_partitions, runtime_of
from .ingest.formats import NDJSON
from .problems import NotThere, Refused
from .repairing import Repairer
from .runtime import FeedRuntime
from .sinks.lane_reading import last_number
from .sinks.lanes import ROWS_AT_MOST, QuarantineRow, forget_exactly, quarantine_rows

LARGEST = 2**63 - 1
NOT_READMITTED = (
    "feed {feed} readmits nothing, for all its events come by stream {stream}: mend, export (`strandline quarantine "
    "export`), and publish again (deploy/cluster.md)"
)
RowNumber = Annotated[int, msgspec.Meta(ge=0, le=LARGEST)]


class Resend(msgspec.Struct, forbid_unknown_fields=True):
    """Rows numbered above `after` up to `through` go to `sink` once more, in repair batches."""

    sink: str
    after: RowNumber = 0
    through: RowNumber = LARGEST


class Readmit(msgspec.Struct, forbid_unknown_fields=True):
    """Lines in quarantine numbered above `after` up to `through`, of one reason if given, come in once more."""

    after: RowNumber = 0
    through: RowNumber = LARGEST
    reason: str | None = None


def _repairer(runtime: FeedRuntime, sink: str) -> Repairer:
    repairer = runtime.repairers.get(sink)
    if repairer is None:
        able = ", ".join(sorted(runtime.repairers)) or "none"
        raise NotThere(f"sink {sink[:100]!r} of feed {runtime.config.name} takes no repairs; those that do: {able}")
    if sink in runtime.feed.state.acts.paused:
        raise Refused("sink_paused", f"sink {sink} is paused: resume it, then send again", 60)
    return repairer


async def post_late_resend(request: web.Request) -> web.Response:
    """Send late events to a sink once more."""
    runtime, act = runtime_of(request), await read_act(request, Resend)
    sent = await _repairer(runtime, act.sink).resend(act.after, act.through)
    return web.json_response({"sent": sent})


async def post_refused_resend(request: web.Request) -> web.Response:
    """Send what a sink refused once more."""
    runtime, act = runtime_of(request), await read_act(request, Resend)
    sent = await _repairer(runtime, act.sink).resend_refused(act.after, act.through)
    return web.json_response({"sent": sent})


async def post_quarantine_readmit(request: web.Request) -> web.Response:
    """Decode lines in quarantine once more, after a fix, and take those that are events now.

    Each line is tried once: what comes into quarantine meanwhile is left for the next run. Not in a partition, whose
    events all come from its stream, where whoever takes it over reads them again.
    """
    refuse_partitions(request, NOT_READMITTED)
    runtime, act = runtime_of(request), await read_act(request, Readmit)
    totals = {"tried": 0, "accepted": 0, "late": 0, "duplicate": 0, "quarantined": 0, "still_faulty": 0}
    after, path = act.after, runtime.lanes_file
    through = min(act.through, await asyncio.to_thread(last_number, path, "quarantine"))
    while True:
        rows = await asyncio.to_thread(quarantine_rows, path, after, ROWS_AT_MOST, act.reason)
        rows = [row for row in rows if row.number <= through]
        if not rows:
            return web.json_response(totals)
        after = rows[-1].number
        await _try_again(runtime, rows, path, totals)


async def _try_again(runtime: FeedRuntime, rows: Sequence[QuarantineRow], path: Path, totals: dict[str, int]) -> None:
    """Take the rows that are events now, as one request. The others stay as they are, and no book counts them again."""
    good = _events_now(runtime, rows)
    totals["tried"] += len(rows)
    totals["still_faulty"] += len(rows) - len(good)
    if not good:
        return
    # Decoded again by themselves, so that a source whose lines all stay does not become known.
    arrival, settled = _decoded(runtime, good), [row.number for row in good]
    # A crash between taking the lines and forgetting their rows must not take them twice: the key tells.
    fingerprint = hashlib.blake2b(_body(good), digest_size=16).digest()
    outcome = await runtime.arrive(arrival, RequestKey(f"readmit {settled[0]} {settled[-1]}", fingerprint))
    for name in ("accepted", "late", "duplicate", "quarantined"):
        totals[name] += getattr(outcome, name)
    await asyncio.to_thread(forget_exactly, path, "quarantine", settled)


def _events_now(runtime: FeedRuntime, rows: Sequence[QuarantineRow]) -> list[QuarantineRow]:
    """The rows that the decoder takes and that are not `ahead`. The feed's clock is never behind the one asked here."""
    arrival = _decoded(runtime, rows)
    still = {fault.line for fault in arrival.faults}
    taken = [row for line, row in enumerate(rows, start=1) if line not in still]
    ahead = arrival.times > runtime.feed.state.settings.newest_at_most_ns(runtime.clock.now_ns())
    return [row for row, is_ahead in zip(taken, ahead.tolist(), strict=True) if not is_ahead]


def _body(rows: Sequence[QuarantineRow]) -> bytes:
    return b"".join(row.event.replace(b"\r", b" ").replace(b"\n", b" ") + b"\n" for row in rows)


def _decoded(runtime: FeedRuntime, rows: Sequence[QuarantineRow]) -> Arrival:
    sources = runtime.feed.state.sources.numbers
    try:
        # As many faults as rows are allowed: a request is refused for too many, but these are kept already.
        decoder = decoder_of(runtime.config, faults_at_most=len(rows))
        return decoder.decode(_body(rows), NDJSON, sources)
    except BodyError as error:
        raise BodyError(
            error.status, error.title, f"{error.detail} (rows {rows[0].number} to {rows[-1].number})"
        ) from error
