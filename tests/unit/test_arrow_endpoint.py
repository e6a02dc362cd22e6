"""Arrow over real HTTP and out again: answers, quarantine, the SQLite store, and Parquet files, all in one service."""

from __future__ import annotations

import json
import sqlite3
from contextlib import closing
from pathlib import Path
from typing import Any

import pyarrow as pa
import pyarrow.parquet as pq
from helpers_arrow import ARROW, stream
from helpers_service import BEGIN_S, FEED, configuration, event_line, eventually, problem_of, running, store_in

HEADERS = {"Content-Type": ARROW}


def table_of(seconds: list[float | None], stations: list[str | None], **more: Any) -> Any:
    times = [None if second is None else round((BEGIN_S + second) * 1_000_000) for second in seconds]
    return pa.table({"observed_at": pa.array(times, pa.timestamp("us", "UTC")), "station": stations, **more})


async def test_rows_are_answered_as_lines_are(tmp_path: Path) -> None:
    """The same answer, for a good row, a late one, a repeat, one too far ahead and two that are no events."""
    text = configuration(tmp_path, slack="5s", id="/id", ahead_limit="10s")
    seconds = [15, 14.5, None, 20, 10**9, 16]
    stations = ["gw-1", "gw-1", "gw-1", "gw-1", "gw-1", ""]
    body = stream(table_of(seconds, stations, id=[3, 4, 5, 1, 6, 7]), [2, 4], "zstd")
    async with running(text) as service:
        first = stream(table_of([20, 10], ["gw-1", "gw-1"], id=[1, 2]))
        assert (await service.post("events", first, headers=HEADERS)).json["accepted"] == 2
        found = (await service.post("events", body, headers=HEADERS)).json
        faults = [(fault["line"], fault["reason"]) for fault in found.pop("faults")]
        assert found == {"received": 6, "accepted": 1, "late": 1, "duplicate": 1, "quarantined": 3}
        assert faults == [(3, "time_missing"), (5, "ahead"), (6, "source_invalid")]
        # A repeat of an event that came as NDJSON is recognised as well: the same event, whatever it came as.
        again = await service.post("events", event_line(15, id=3) + b"\n")
        assert again.json["duplicate"] == 1
        await eventually(lambda: service.runtime.feed.state.outbox.aside_events == 0)
        kept = (await service.get("quarantine")).json["quarantine"]
        assert len(kept) == 3
        assert '{"observed_at":null,"station":"gw-1","id":5}' in json.dumps(kept).replace("\\", "")
        assert (await service.document())["ledger"]["balanced"] is True


async def test_what_is_refused_says_so(tmp_path: Path) -> None:
    async with running(configuration(tmp_path)) as service:
        answer = await service.post("events", b"no stream at all", headers=HEADERS)
        assert "Arrow IPC stream" in problem_of(answer, 422)
        lists = stream(table_of([1], ["gw-1"], x=[[1]]))
        assert "the column /x is list" in problem_of(await service.post("events", lists, headers=HEADERS), 422)
        none = await service.post("events", b"", headers=HEADERS)
        assert (none.status, none.json["received"]) == (200, 0)


async def test_from_columns_to_columns(tmp_path: Path) -> None:
    """In as Arrow, through the journal, out as Parquet and into SQLite: the same events in order of time."""
    place = tmp_path / "files"
    sinks = (
        f'[[feed.sink]]\nkind = "sqlite"\npath = {json.dumps(str(store_in(tmp_path)))}\n'
        f'[[feed.sink]]\nkind = "parquet"\ndirectory = {json.dumps(str(place))}\nroll_every = "1s"\n'
        'columns = [ { name = "time_ns" }, { name = "station", value = "source" }, '
        '{ name = "level", at = "/level", type = "double precision" } ]\n'
    )
    seconds = [5, 3, 4, 1, 2]
    table = table_of(seconds, ["a", "b", "a", "c", "b"], level=[1.5, 2.0, None, 0.25, 1e-7])
    async with running(configuration(tmp_path, sinks=sinks)) as service:
        answer = await service.post("events", stream(table, [2], "lz4"), headers=HEADERS)
        assert answer.json["accepted"] == 5
        assert (await service.post("drain", {"reason": "the day ends"})).status == 204
        await eventually(lambda: any(place.glob("*.parquet")), "a complete file")
    read = pa.concat_tables(pq.read_table(path) for path in sorted(place.glob("*-ordered-*.parquet")))
    assert read["time_ns"].to_pylist() == [(BEGIN_S + second) * 10**9 for second in sorted(seconds)]
    assert read["station"].to_pylist() == ["c", "b", "b", "a", "a"]
    assert read["level"].to_pylist() == [0.25, 1e-7, 2.0, None, 1.5]
    with closing(sqlite3.connect(store_in(tmp_path))) as connection:
        query = "SELECT event FROM events WHERE feed = ? ORDER BY batch, position"
        rows = connection.execute(query, (FEED,)).fetchall()
    assert rows[0][0] == '{"observed_at":"2023-11-14T22:13:21.000000Z","station":"c","level":0.25}'
    assert [json.loads(event)["level"] for (event,) in rows] == [0.25, 1e-7, 2, None, 1.5]
