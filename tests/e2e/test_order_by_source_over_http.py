"""`order = "source"` end to end: over HTTP, through the journal and the sinks, over a restart and a reload.

A real service with its store; the judge of loadgen reads the store.
"""

from __future__ import annotations

import sqlite3
from pathlib import Path

import numpy as np
import pytest
from helpers_service import BEGIN_S, body_of, config_of, configuration, event_line, eventually, running, store_in
from strandline.errors import ConfigError
from strandline.sinks.lanes import late_rows
from strandline_loadgen.checker import Rows, Sent, judge


def rows_of(folder: Path) -> list[tuple[int, str, str]]:
    with sqlite3.connect(store_in(folder)) as store:
        return store.execute("SELECT time_ns, source, event FROM events ORDER BY batch, position").fetchall()


async def test_a_gateway_behind_holds_nobody_and_a_restart_forgets_no_watermark(tmp_path: Path) -> None:
    text = configuration(tmp_path, slack="5s", order="source")
    sent: list[tuple[float, str]] = []
    async with running(text) as service:
        for second in range(1000, 1020):
            lines = [(second, "gw-1"), (second - 900, "gw-2"), (second + 0.5, "gw-3")]
            sent += lines
            answer = await service.post("events", body_of(*(event_line(*line) for line in lines)))
            assert answer.json["accepted"] == 3
        await eventually(lambda: len(rows_of(tmp_path)) == 45)  # of each source all but the last 5 s
        document = await service.document()
        assert document["order"] == "source" and document["hold"]["source"] is None
        assert document["hold"]["why"] == "slack"
        sources = (await service.get("sources")).json["sources"]
        assert len({row["watermark"] for row in sources}) == 3
    async with running(text) as service:
        late = [(1001, "gw-1"), (110, "gw-2")]
        answer = await service.post("events", body_of(*(event_line(*each) for each in [*late, (120, "gw-2")])))
        assert (answer.json["accepted"], answer.json["late"]) == (1, 2)
        sent.append((120, "gw-2"))
        await eventually(lambda: len(late_rows(service.runtime.lanes_file)) == 2)
        rows = late_rows(service.runtime.lanes_file)
        watermarks = {source["source"]: source for source in (await service.get("sources")).json["sources"]}
        # 1019 - 5 - 1001 s, and 119 - 5 - 110 s: each behind the watermark of its own source, as it stood.
        assert [row.late_by_ns for row in rows] == [13 * 10**9, 4 * 10**9]
        assert [row.late_by_ns + row.time_ns for row in rows] == [row.watermark_ns for row in rows]
        assert watermarks.keys() == {"gw-1", "gw-2", "gw-3"}
        assert (await service.post("drain", {})).status == 204
        await eventually(lambda: len(rows_of(tmp_path)) == len(sent))
    names = ["gw-1", "gw-2", "gw-3"]
    found = rows_of(tmp_path)
    ids = {line: number for number, line in enumerate(event_line(*each).decode() for each in sent)}
    columns = [(ids[event], time_ns, names.index(source)) for time_ns, source, event in found]
    told = Sent(Rows.of([(n, round((BEGIN_S + s) * 10**9), names.index(name)) for n, (s, name) in enumerate(sent)]))
    assert judge(told, Rows.of(columns), by_source=True).ok
    assert judge(told, Rows.of(columns)).disordered > 0, "the feed as a whole is not in order: nobody waited"
    assert np.all(np.diff([time for time, source, _ in found if source == "gw-2"]) > 0)


CONTRADICTIONS = [
    ({"clock": "arrival"}, "", "contradicts clock"),
    ({"slack": "1m", "idle_after": "30s"}, "", "is shorter than slack"),
    ({}, 'source = "/station"\n', "needs a `source` pointer"),
    ({"slack": {}, "idle_after": "4s"}, "slack = {}", "is shorter than slack"),
]


@pytest.mark.parametrize(("keys", "without", "says"), CONTRADICTIONS, ids=str)
def test_what_contradicts_it_is_said_before_anything_starts(
    tmp_path: Path, keys: dict[str, object], without: str, says: str
) -> None:
    text = configuration(tmp_path, order="source", **keys)
    steered = 'slack = { late_share = 0.1, at_most = "5s" }'
    text = text.replace(without, steered if "slack" in without else "") if without else text
    with pytest.raises(ConfigError, match=says):
        config_of(text)
    config_of(configuration(tmp_path, order="source"))
    config_of(text.replace('order = "source"', 'order = "feed"'))


@pytest.mark.parametrize("labels", ['{ gauge = "/gauge" }', '{ gauge = "/gauge", station = "/station" }'])
def test_a_series_must_be_of_one_source(tmp_path: Path, labels: str) -> None:
    sink = f"""[[feed.sink]]
kind = "remote_write"
url = "http://127.0.0.1:9090/api/v1/write"
series = [ {{ name = "water_level_meters", value = "/level", labels = {labels} }} ]
"""
    text = configuration(tmp_path, order="source", sinks=sink)
    config_of(text.replace('order = "source"', 'order = "feed"'))
    if "station" in labels:
        config_of(text)
        return
    with pytest.raises(ConfigError, match="has no label at /station"):
        config_of(text)
