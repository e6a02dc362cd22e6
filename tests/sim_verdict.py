"""The judgement of a simulated world: every store's rows against what the senders know, by the one judge of loadgen."""

from __future__ import annotations

from pathlib import Path

import numpy as np
from sim_clients import Crowd, ids_in
from sim_scenario import FEED, Scenario
from sim_stores import Stores
from strandline.config_model import Feed
from strandline.core.columns import Lane
from strandline.sinks.lanes import late_rows, quarantine_rows, refused_rows
from strandline_loadgen.checker import judge
from strandline_loadgen.evidence import Rows
from strandline_loadgen.stores import Reading, read_ndjson, read_sqlite


def judge_stores(
    scenario: Scenario, config: Feed, stores: Stores, crowd: Crowd, folder: Path
) -> None:
    """Each store alone: nothing lost, nothing invented, nothing twice, everything in order. Raises AssertionError."""
    reading = Reading(scenario.trace.source_names, digests=True)
    sent, lanes = crowd.sent(), folder / "lanes.db"
    quarantined = ids_in([row.event for row in quarantine_rows(lanes, limit=10_000)])
    late_ids = ids_in([row.event.encode() for row in late_rows(lanes, limit=10_000)])
    exact = all(attempt.state in ("answered", "refused") for attempt in crowd.attempts)
    repeats = scenario.fixed.get("id") is not None or not crowd.habits.keys_last
    told = crowd.told()
    stores.collect()
    for name in [sink.name for sink in config.sinks]:
        ordered, late = (_rows(name, lane, stores, folder, reading) for lane in ("ordered", "late"))
        elsewhere = _refused(name, folder, reading)
        verdict = judge(
            sent,
            ordered,
            [late, elsewhere],
            quarantined=np.array(quarantined, dtype=np.int64),
            duplicates=None if repeats else 0,  # None: an event that is there may be there less often than it was sent
            by_source=config.order == "source",
            told={key: told[key] for key in ("accepted", "late")} if exact and not len(elsewhere) else None,
        )
        assert verdict.ok, f"{name}: {verdict}"
        all_ids = [*ordered.ids.tolist(), *late.ids.tolist(), *elsewhere.ids.tolist()]
        assert not scenario.id_lasts or len(set(all_ids)) == len(all_ids), f"{name}: a repeat was not recognised"
        if not len(elsewhere):
            assert sorted(late.ids.tolist()) == sorted(late_ids), f"{name} and the lane store hold other late events"
            crowd.check_answers({"ordered": ordered.ids.tolist(), "late": late_ids})
    assert not exact or told["quarantined"] == len(quarantined)


def _refused(name: str, folder: Path, reading: Reading) -> Rows:
    """What this store refused for good, as it is kept for it."""
    rows = refused_rows(folder / "lanes.db", limit=10_000, sink=name)
    block = b"".join(row.event + b"\n" for row in rows)
    return reading.rows(block, [row.time_ns or 0 for row in rows], [row.source for row in rows])


def _rows(name: str, lane: Lane, stores: Stores, folder: Path, reading: Reading) -> Rows:
    """A lane of a store, in the store's own order."""
    if name == "store":
        return _joined(list(read_sqlite(folder / "river.db", FEED, lane, reading)))
    if name == "files":
        return _joined(list(read_ndjson(folder / "fetched", FEED, lane, reading)))
    batches = [taken for _, taken in sorted(stores.receiver.batches[lane].items())]
    lines = [line for taken in batches for line in taken[0]]
    times = [time for taken in batches for time in taken[1]]
    sources = [source for taken in batches for source in taken[2]]
    return reading.rows(b"".join(line + b"\n" for line in lines), times, sources)


def _joined(pieces: list[Rows]) -> Rows:
    columns = ("ids", "times", "sources", "digests")
    empty = [np.empty(0, dtype=kind) for kind in (np.int64, np.int64, np.uint32, np.uint32)]
    pairs = zip(columns, empty, strict=True)
    parts = [[getattr(piece, column) for piece in pieces] or [none] for column, none in pairs]
    return Rows(*(np.concatenate(part) for part in parts))
