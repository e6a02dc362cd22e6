"""What an operator does with the kept lanes: late events and refused ones sent again, lines in quarantine driven again.

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
from .errors import BodyError
from .ingest.endpoint import read_act, runtime_of
from .problems import NotThere, Refused
from .repairing import Repairer
from .runtime import FeedRuntime, decoder_of
from .sinks.lanes import ROWS_AT_MOST, QuarantineRow, forget_exactly, quarantine_rows

LARGEST = 2**63 - 1
RowNumber = Annotated[int, msgspec.Meta(ge=0, le=LARGEST)]


class Resend(msgspec.Struct, forbid_unknown_fields=True):
    """Rows numbered above `after` up to `through` go to `sink` once more, in repair batches."""

    sink: str
    after: RowNumber = 0
    through: RowNumber = LARGEST


class Redrive(msgspec.Struct, forbid_unknown_fields=True):
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


async def post_quarantine_redrive(request: web.Request) -> web.Response:
    """Decode lines in quarantine once more, after a fix, and take those that are events now."""
    runtime, act = runtime_of(request), await read_act(request, Redrive)
    totals = {"driven": 0, "accepted": 0, "late": 0, "duplicate": 0, "quarantined": 0, "still_faulty": 0}
    after, path = act.after, runtime.folder / "lanes.db"
    while True:
        rows = await asyncio.to_thread(quarantine_rows, path, after, ROWS_AT_MOST, act.reason)
        rows = [row for row in rows if row.number <= act.through]
        if not rows:
            return web.json_response(totals)
        after = rows[-1].number
        await _drive_again(runtime, rows, path, totals)


async def _drive_again(runtime: FeedRuntime, rows: Sequence[QuarantineRow], path: Path, totals: dict[str, int]) -> None:
    body = b"".join(row.event.replace(b"\r", b" ").replace(b"\n", b" ") + b"\n" for row in rows)
    sources = runtime.feed.state.sources.numbers
    try:
        # As many faults as rows are allowed: a request is refused for too many, but these are kept already.
        decoder = decoder_of(runtime.config, faults_at_most=len(rows))
        arrival = decoder.decode(body, "application/x-ndjson", sources)
    except BodyError as error:
        raise BodyError(
            error.status, error.title, f"{error.detail} (rows {rows[0].number} to {rows[-1].number})"
        ) from error
    still = {fault.line for fault in arrival.faults}
    settled = [row.number for index, row in enumerate(rows, start=1) if index not in still]
    totals["driven"] += len(rows)
    totals["still_faulty"] += len(still)
    if not settled:
        return
    good = Arrival(
        times=arrival.times,
        sources=arrival.sources,
        lengths=arrival.lengths,
        payload=arrival.payload,
        new_sources=arrival.new_sources,
        identities=arrival.identities,
    )
    # A crash between taking the lines and forgetting their rows must not take them twice: the key tells.
    fingerprint = hashlib.blake2b(body, digest_size=16).digest()
    outcome = await runtime.arrive(good, RequestKey(f"redrive {settled[0]} {settled[-1]}", fingerprint))
    for name in ("accepted", "late", "duplicate", "quarantined"):
        totals[name] += getattr(outcome, name)
    await asyncio.to_thread(forget_exactly, path, "quarantine", settled)
