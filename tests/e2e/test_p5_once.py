"""P5 once: each event is released once or named late once, across kills; what is sent again is recognised.

The real process, killed with SIGKILL under load. A SQLite store holds each event exactly once; files name their
batches, so whoever collects them recognises a repeat.
"""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
from helpers_load import Load, Stubborn, fixed_port, send_with_keys, stored_rows, verdict_of
from helpers_service import FEED, Process, configuration, store_in
from strandline_loadgen.checker import judge
from strandline_loadgen.stores import Reading, read_ndjson, with_digests

SHARES = (0.2, 0.4, 0.6, 0.8)


async def test_with_a_key_each_request_counts_once(tmp_path: Path) -> None:
    """An Idempotency-Key goes with every request; a retry of one that was taken before the kill takes nothing again.

    Two sinks: the store's rows and its position are one transaction; files are judged by the numbers in their names.
    """
    load = Load.of("exponential", 20_000, 100, seed=5)
    files = tmp_path / "files"
    sinks = "\n".join(
        [
            f'[[feed.sink]]\nkind = "sqlite"\npath = {json.dumps(str(store_in(tmp_path)))}',
            f'[[feed.sink]]\nkind = "ndjson"\ndirectory = {json.dumps(str(files))}',
            'roll_bytes = "64KiB"\nroll_every = "1s"',
        ]
    )
    with Process(tmp_path, fixed_port(tmp_path, slack="10s", sinks=sinks)) as process:
        done = await send_with_keys(process, load, [(share, process.kill) for share in SHARES])
        process.drain()
        ledger = process.document()["ledger"]
        assert process.terminate() == 0
    verdict = verdict_of(load, done, tmp_path)
    assert verdict.ok, str(verdict)
    assert verdict.ordered + verdict.late == verdict.sent == ledger["received"] == 20_000
    assert verdict.late > 0 and done.resent > 0 and ledger["duplicate"] == 0
    reading = Reading(load.trace.source_names, digests=True)
    sent = with_digests(done.evidence(load.trace, load.bounds), np.concatenate(load.digests))
    lanes = [read_ndjson(files, FEED, lane, reading) for lane in ("ordered", "late")]
    verdict = judge(sent, *lanes, duplicates=0)
    assert verdict.ok and verdict.ordered + verdict.late == 20_000, str(verdict)


def test_with_an_id_each_event_counts_once(tmp_path: Path) -> None:
    """Senders without keys; the feed's `id` tells that an event came before, whichever request brings it again."""
    load = Load.of("bursty_gateways", 20_000, 100, seed=6)
    with Process(tmp_path, configuration(tmp_path, slack="30s", id="/id")) as process:
        with Stubborn(process, load) as senders:
            for share in SHARES:
                senders.until(share)
                process.kill()
                process.start()
        assert senders.answered.all()
        process.drain()
        ledger = process.document()["ledger"]
        assert process.terminate() == 0
    rows = [stored_rows(load, tmp_path, lane) for lane in ("ordered", "late")]
    assert np.array_equal(np.sort(np.concatenate([lane.ids for lane in rows])), np.sort(load.trace.ids))
    assert ledger["released"] + ledger["late"] == 20_000
    assert ledger["received"] == 20_000 + ledger["duplicate"]
    assert ledger["duplicate"] % 100 == 0, "requests are taken whole or not at all"
    assert bool(np.all(np.diff(rows[0].times) >= 0))
