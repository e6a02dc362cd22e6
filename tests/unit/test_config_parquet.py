"""The parquet sink in the configuration: its keys, its columns, and what cannot be."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import pytest
from helpers_sinks import VirtualTime
from strandline.config import parse
from strandline.errors import ConfigError
from strandline.sinks import make_sink
from strandline.sinks.postgres_columns import Column

PARQUET = '[[feed]]\nname = "river-gauges"\n[[feed.sink]]\nkind = "parquet"\n'


def sink_of(text: str) -> Any:
    (sink,) = parse(text, {}).feeds[0].sinks
    return sink


def test_what_it_becomes() -> None:
    options = sink_of(PARQUET).options()
    assert options == {
        "directory": Path("strandline-data/river-gauges-parquet"),
        "roll_bytes": 64 * 2**20,
        "roll_every_s": 60.0,
        "rows_per_group": 100_000,
        "compression": "zstd",
        "columns": (),
    }
    text = 'roll_every = "5m"\nroll_bytes = "1GiB"\nrows_per_group = 1000\ncompression = "snappy"\n'
    text += 'columns = [ { name = "time" }, { name = "level", at = "/level", type = "double precision" } ]\n'
    options = sink_of(PARQUET + text + 'late = { deliver = "repair", every = "1h" }').options()
    assert options["columns"] == (Column("time"), Column("level", at="/level", type="double precision"))
    assert (options["roll_every_s"], options["roll_bytes"]) == (300.0, 2**30)
    assert (options["rows_per_group"], options["compression"]) == (1000, "snappy")


def test_its_options_make_a_sink(tmp_path: Path) -> None:
    columns = 'columns = [ { name = "time_ns" }, { name = "n", at = "/n", type = "jsonb" } ]\n'
    options = sink_of(f'{PARQUET}directory = "{tmp_path}"\n{columns}').options()
    assert make_sink("parquet", "river-gauges", VirtualTime(), **options).lanes == ("ordered", "late")


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ('columns = [ { name = "source" } ]', "has no column for the time"),
        ('columns = [ { name = "time" }, { name = "time" } ]', "is the name of columns[1] already"),
        ('columns = [ { name = "time" }, { name = "event_aside", at = "/x" } ]', "the sink keeps for itself"),
        ('columns = [ { name = "time" }, { name = "late_by_ns", at = "/x" } ]', "the sink keeps for itself"),
        ('columns = [ { name = "time" }, { name = "level" } ]', "needs `at`, a JSON Pointer into the event"),
        ('columns = [ { name = "time", type = "text" } ]', "holds time, which is timestamptz and never text"),
        ('columns = [ { name = "time" }, { name = "x", at = "x" } ]', "columns[2].at"),
        ('compression = "lz5"', "zstd, snappy, none"),
        ("rows_per_group = 0", "rows_per_group"),
    ],
)
def test_what_cannot_be(text: str, words: str) -> None:
    with pytest.raises(ConfigError) as caught:
        parse(PARQUET + text, {}, "s.toml")
    (fault,) = caught.value.faults
    assert words in fault


def test_two_sinks_of_a_feed_may_not_share_a_folder() -> None:
    other = '[[feed.sink]]\nkind = "parquet"\nname = "other"\n'
    with pytest.raises(ConfigError, match="writes already"):
        parse(PARQUET + other, {})
