"""The SQLite sink: its tables as users see them, its errors, and what is its own beside the shared suite."""

from __future__ import annotations

import sqlite3
import subprocess
import sys
import tempfile
from contextlib import closing
from pathlib import Path

import pytest
from helpers_sinks import LATE_BY_NS, HeldLines
from sink_conformance import SinkConformance
from strandline.core.columns import TIME_MAX, TIME_MIN, Batch, Lane
from strandline.errors import SinkRefused, SinkRetry, StrandlineError
from strandline.ports import Sink
from strandline.sinks import make_sink
from strandline.sinks.database import trouble
from strandline.sinks.rows import late_by_ns
from strandline.sinks.sqlite import SqliteSink

# DESIGN.md, section 5: the columns that users and other programs rely on.
EVENT_COLUMNS = ["feed TEXT", "batch INTEGER", "position INTEGER", "time_ns INTEGER", "source TEXT", "event TEXT"]
LATE_COLUMNS = ["feed", "time_ns", "source", "arrived_ns", "late_by_ns", "event"]


def rows(path: Path, query: str, *values: object) -> list[tuple[object, ...]]:
    with closing(sqlite3.connect(path)) as connection:
        return connection.execute(query, values).fetchall()


def encoded(found: list[tuple[object, ...]]) -> list[tuple[object, ...]]:
    return [(*row[:-1], str(row[-1]).encode()) for row in found]


class TestConformance(SinkConformance):
    def make(self, place: Path, feed: str) -> Sink:
        return SqliteSink(place / "river.db", feed)

    def stored(self, place: Path, feed: str, lane: Lane) -> list[tuple[object, ...]]:
        path = place / "river.db"
        if lane == "ordered":
            return encoded(rows(path, "SELECT event FROM events WHERE feed = ? ORDER BY batch, position", feed))
        query = "SELECT time_ns, source, arrived_ns, late_by_ns, event FROM late WHERE feed = ? ORDER BY rowid"
        return encoded(rows(path, query, feed))


async def filled(path: Path, lines: HeldLines) -> SqliteSink:
    sink = SqliteSink(path, "river", busy_wait_s=0.0)
    await sink.open()
    await sink.take([lines.batch("ordered", 1, 9), lines.batch("ordered", 2, 60)], lines)
    return sink


async def test_the_tables_are_those_of_the_contract(tmp_path: Path) -> None:
    path = tmp_path / "river.db"
    lines = HeldLines()
    sink = await filled(path, lines)
    await sink.take([lines.batch("late", 1, 2)], lines)
    await sink.close()
    assert [f"{row[1]} {row[2]}" for row in rows(path, "PRAGMA table_info(events)")] == EVENT_COLUMNS
    assert [row[1] for row in rows(path, "PRAGMA table_info(late)")] == LATE_COLUMNS
    kinds = "SELECT DISTINCT typeof(feed), typeof(batch), typeof(time_ns), typeof(event) FROM events"
    assert rows(path, kinds) == [("text", "integer", "integer", "text")]
    first = rows(path, "SELECT feed, batch, position, source FROM events ORDER BY feed, batch, position LIMIT 10")
    assert first[:2] == [("river", 1, 0, "gauge-1"), ("river", 1, 1, "gauge-2")]
    assert first[6] == ("river", 1, 6, None)
    assert first[9] == ("river", 2, 0, "gauge-1")
    assert rows(path, "SELECT late_by_ns FROM late") == [(LATE_BY_NS,), (LATE_BY_NS - 1,)]
    assert rows(path, "SELECT lane, batch FROM positions WHERE feed = 'river' ORDER BY lane") == [
        ("late", 1),
        ("ordered", 2),
    ]
    assert rows(path, "PRAGMA journal_mode") == [("wal",)]


async def test_the_order_of_the_key_needs_no_sorting(tmp_path: Path) -> None:
    sink = await filled(tmp_path / "river.db", HeldLines())
    await sink.close()
    plan = rows(
        tmp_path / "river.db",
        "EXPLAIN QUERY PLAN SELECT * FROM events WHERE feed = 'river' AND batch > 1 ORDER BY batch, position",
    )
    assert "USING INDEX" in str(plan) and "TEMP B-TREE" not in str(plan)


async def test_a_commit_is_synced(tmp_path: Path) -> None:
    # https://www.sqlite.org/pragma.html#pragma_synchronous: 2 is FULL; in WAL mode NORMAL (1) "might roll back a
    # committed transaction following a power loss".
    sink = await filled(tmp_path / "river.db", HeldLines())
    level = await sink._database.transaction(lambda connection: connection.execute("PRAGMA synchronous").fetchone())
    await sink.close()
    assert level == (2,)


async def test_rows_may_be_deleted_by_their_owner(tmp_path: Path) -> None:
    path = tmp_path / "river.db"
    lines = HeldLines()
    sink = await filled(path, lines)
    with closing(sqlite3.connect(path)) as connection, connection:
        connection.execute("DELETE FROM events")
    assert await sink.take([lines.batch("ordered", 2, 60)], lines) == {"ordered": 2, "late": 0}
    await sink.close()
    assert rows(path, "SELECT count(*) FROM events") == [(0,)]


async def test_a_file_that_others_use_too_is_respected(tmp_path: Path) -> None:
    path = tmp_path / "river.db"
    with closing(sqlite3.connect(path)) as connection, connection:
        connection.execute("CREATE TABLE stations (name TEXT)")
        connection.execute("INSERT INTO stations VALUES ('gauge-1')")
    sink = await filled(path, HeldLines())
    await sink.close()
    assert rows(path, "SELECT * FROM stations") == [("gauge-1",)]
    assert rows(path, "SELECT count(*) FROM events") == [(69,)]


@pytest.mark.parametrize(
    "made",
    [
        "CREATE TABLE events (feed TEXT, batch INTEGER)",
        "CREATE TABLE events (batch INTEGER, feed TEXT, position INTEGER, time_ns INTEGER, source TEXT, event TEXT)",
        "CREATE TABLE events (feed TEXT, batch INTEGER, position INTEGER, time_ns TEXT, source TEXT, event TEXT)",
        "CREATE TABLE Late (id INTEGER)",
        "CREATE VIEW positions AS SELECT 1 AS feed, 2 AS lane, 3 AS batch",
    ],
)
async def test_tables_of_another_shape_are_left_alone(tmp_path: Path, made: str) -> None:
    path = tmp_path / "other.db"
    with closing(sqlite3.connect(path)) as connection, connection:
        connection.execute(made)
    before = path.read_bytes()
    sink = SqliteSink(path, "river")
    with pytest.raises(StrandlineError, match="another shape") as caught:
        await sink.open()
    assert not isinstance(caught.value, SinkRetry)
    assert str(path) in str(caught.value) and "expected: feed TEXT" in str(caught.value)
    await sink.close()
    assert path.read_bytes() == before


@pytest.mark.parametrize("content", [b"this is no database, but it is long enough to be looked at" * 20, b"{}" * 300])
async def test_no_database_is_left_alone(tmp_path: Path, content: bytes) -> None:
    path = tmp_path / "notes.txt"
    path.write_bytes(content)
    sink = SqliteSink(path, "river")
    with pytest.raises(StrandlineError, match="no SQLite database") as caught:
        await sink.open()
    assert not isinstance(caught.value, SinkRetry)
    await sink.close()
    assert path.read_bytes() == content


async def test_a_name_that_no_file_can_have() -> None:
    sink = SqliteSink("a\0b.db", "river")
    with pytest.raises(StrandlineError, match="cannot be the name"):
        await sink.open()
    await sink.close()


async def test_a_locked_file_is_tried_again(tmp_path: Path) -> None:
    path = tmp_path / "river.db"
    lines = HeldLines()
    sink = await filled(path, lines)
    third = lines.batch("ordered", 3, 4)
    with closing(sqlite3.connect(path, isolation_level=None)) as shell:
        shell.execute("BEGIN IMMEDIATE")
        with pytest.raises(SinkRetry, match=r"river\.db is locked by another program: end what holds it"):
            await sink.take([third], lines)
        shell.execute("ROLLBACK")
    assert (await sink.take([third], lines))["ordered"] == 3
    await sink.close()
    assert rows(path, "SELECT count(*) FROM events") == [(73,)]


async def test_a_full_disk_is_tried_again(tmp_path: Path) -> None:
    """SQLite's own page limit gives the same error as a full disk (SQLITE_FULL), in the middle of the rows."""
    path = tmp_path / "river.db"
    lines = HeldLines()
    sink = await filled(path, lines)
    big = lines.batch("ordered", 3, 20_000)

    def limit(connection: sqlite3.Connection) -> None:
        connection.execute("PRAGMA max_page_count = 60")

    await sink._database.transaction(limit)
    with pytest.raises(SinkRetry, match=r"no room left for .*river\.db: free some"):
        await sink.take([big], lines)
    assert rows(path, "SELECT max(batch) FROM events") == [(2,)]
    assert (await sink.take([big], lines))["ordered"] == 3  # a new connection, without the limit
    await sink.close()
    assert rows(path, "SELECT count(*) FROM events") == [(20_069,)]


UNPRIVILEGED = """
import asyncio, os, sys
sys.path.insert(0, sys.argv[3])
from helpers_sinks import HeldLines
from strandline.errors import SinkRetry
from strandline.sinks.sqlite import SqliteSink
if os.geteuid() == 0:
    os.setgid(65534)
    os.setuid(65534)
async def main():
    sink = SqliteSink(sys.argv[1], "river")
    lines = HeldLines()
    try:
        await sink.open()
        await sink.take([lines.batch("ordered", 3, 1)], lines)
    except SinkRetry as error:
        print(error)
    finally:
        await sink.close()
asyncio.run(main())
"""


@pytest.mark.parametrize("wanted", ["cannot be written: allow this service", "cannot be opened: its folder must exist"])
async def test_a_file_that_may_not_be_written_is_tried_again(wanted: str) -> None:
    """In a process without root's powers: a file for reading only, and a folder in which nothing may be made."""
    with tempfile.TemporaryDirectory() as place:
        path = Path(place) / "river.db"
        if "written" in wanted:
            sink = await filled(path, HeldLines())
            await sink.close()
            path.chmod(0o444)
        Path(place).chmod(0o555)
        command = [sys.executable, "-c", UNPRIVILEGED, str(path), "", str(Path(__file__).parent.parent)]
        done = subprocess.run(command, capture_output=True, text=True, check=False, timeout=60)
        Path(place).chmod(0o755)
    assert wanted in done.stdout and str(path) in done.stdout, done


async def test_an_absent_folder_is_tried_again(tmp_path: Path) -> None:
    path = tmp_path / "absent" / "river.db"
    sink = SqliteSink(path, "river")
    with pytest.raises(SinkRetry, match="its folder must exist"):
        await sink.open()
    path.parent.mkdir()
    assert await sink.open() == {"ordered": 0, "late": 0}
    await sink.close()


async def test_a_file_that_is_moved_away_is_noticed(tmp_path: Path, caplog: pytest.LogCaptureFixture) -> None:
    path = tmp_path / "river.db"
    lines = HeldLines()
    sink = await filled(path, lines)
    for each in list(tmp_path.iterdir()):
        each.rename(tmp_path / f"old-{each.name}")
    await sink.take([lines.batch("ordered", 3, 4)], lines)
    await sink.close()
    assert "moved or deleted" in caplog.text
    assert rows(path, "SELECT batch, count(*) FROM events GROUP BY batch") == [(3, 4)]
    assert rows(tmp_path / "old-river.db", "SELECT max(batch) FROM events") == [(2,)]


async def test_rows_that_the_position_does_not_know_are_named(tmp_path: Path) -> None:
    path = tmp_path / "river.db"
    lines = HeldLines()
    sink = await filled(path, lines)
    with closing(sqlite3.connect(path)) as connection, connection:
        connection.execute("DELETE FROM positions")
    with pytest.raises(SinkRetry, match="two services"):
        await sink.take([lines.batch("ordered", 1, 9)], lines)
    await sink.close()
    assert rows(path, "SELECT count(*) FROM events") == [(69,)]


async def test_damaged_bytes_are_refused_and_nothing_else_of_the_take_is_written(tmp_path: Path) -> None:
    path = tmp_path / "river.db"
    lines = HeldLines()
    sink = await filled(path, lines)
    good, bad = lines.batch("ordered", 3, 2), lines.batch("ordered", 4, 2)
    lines.held[int(bad.refs["place"][1])] = b'{"broken":"\xff"}'
    with pytest.raises(SinkRefused, match="batch 4 of lane ordered is not UTF-8") as caught:
        await sink.take([good, bad], lines)
    assert caught.value.numbers == [4]
    assert (await sink.take([good], lines))["ordered"] == 3
    await sink.close()
    assert rows(path, "SELECT batch, count(*) FROM events GROUP BY batch") == [(1, 9), (2, 60), (3, 2)]


async def test_a_journal_that_gives_other_lines_than_events_is_an_error(tmp_path: Path) -> None:
    lines = HeldLines()
    sink = await filled(tmp_path / "river.db", lines)
    batch = lines.batch("ordered", 3, 2)
    lines.held[int(batch.refs["place"][0])] = b'{"a":1}\n{"b":2}'
    with pytest.raises(StrandlineError, match="has 2 events, but the journal gave 3 lines"):
        await sink.take([batch], lines)
    await sink.close()


def test_how_late_is_exact_up_to_the_greatest_int64() -> None:
    lines = HeldLines()
    batch = lines.batch("late", 1, 4)
    for behind, times in ((TIME_MAX, (TIME_MIN, -1, 0, TIME_MAX - 1)), (5, (TIME_MIN, -1, 4, 5))):
        batch.times[:] = times
        late = Batch("late", 1, batch.times, batch.refs, 0, 1, behind)
        exact = [behind - time for time in times]  # Python's integers have no bound
        assert late_by_ns(late) == [min(each, TIME_MAX) for each in exact]


def test_every_error_of_the_library_becomes_a_sentence() -> None:
    with closing(sqlite3.connect(":memory:")) as connection, pytest.raises(sqlite3.Error) as caught:
        connection.execute("no such language")
    text = str(trouble(Path("river.db"), caught.value))
    assert text.startswith("river.db: ") and "syntax error" in text


async def test_made_by_kind(tmp_path: Path) -> None:
    sink = make_sink("sqlite", "river", HeldLines(), path=tmp_path / "made.db")  # type: ignore[arg-type]
    assert await sink.open() == {"ordered": 0, "late": 0}
    await sink.close()
    assert (tmp_path / "made.db").exists()


@pytest.mark.parametrize(
    ("kind", "options", "text"),
    [
        ("parchment", {}, "no kind of sink named 'parchment': name one of sqlite, ndjson"),
        ("sqlite", {}, "needs path"),
        ("sqlite", {"path": "a", "table": "b"}, "has no option table"),
        ("ndjson", {"path": "a"}, "has no option path and needs directory"),
    ],
)
def test_what_cannot_be_made_is_named(kind: str, options: dict[str, object], text: str) -> None:
    with pytest.raises(StrandlineError, match=text):
        make_sink(kind, "river", HeldLines(), **options)  # type: ignore[arg-type]
