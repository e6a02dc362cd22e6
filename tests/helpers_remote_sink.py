"""What tests of the remote-write sink share: one series by station, events of it, and what a model holds of them."""

from __future__ import annotations

from pathlib import Path
from typing import Any

from helpers_remote_write import Events, Labels, Served
from helpers_sinks import START_NS, VirtualTime
from strandline.core.columns import Lane
from strandline.sinks.remote_write import RemoteWriteSink
from strandline.sinks.remote_write_series import SeriesRule

LEVEL = SeriesRule("water_level_meters", "/level", (("station", "/station"),))
MS = 1_000_000


def sink_for(server: Served, place: Path, *rules: SeriesRule, **options: Any) -> RemoteWriteSink:
    series = rules or (LEVEL,)
    return RemoteWriteSink(server.url, "river", VirtualTime(), series, place / "progress.db", **options)


def event(time_ms: int, level: object, station: object = "weir-1", **more: object) -> tuple[int, object]:
    return START_NS + time_ms * MS, {"level": level, "station": station, **more}


def station(name: str) -> Labels:
    return (("__name__", "water_level_meters"), ("station", name))


def counted(sink: RemoteWriteSink) -> dict[str, int]:
    return {reason: count for reason, count in sink.counts().items() if count}


def held(server: Served) -> dict[Labels, dict[int, float]]:
    """What the model stores, times from START_NS on."""
    start = START_NS // MS
    return {key: {time - start: value for time, value in found.items()} for key, found in server.model.series.items()}


async def take(sink: RemoteWriteSink, events: Events, *groups: list[tuple[int, object]], lane: Lane = "ordered") -> int:
    """Open, take these batches in one take, close; the position told."""
    await sink.open()
    answer = await sink.take([events.batch(number, group, lane) for number, group in enumerate(groups, 1)], events)
    sink.check()
    await sink.close()
    return answer[lane]
