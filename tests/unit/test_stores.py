"""The judge's readers, on files that are made here by hand in the published forms."""

from __future__ import annotations

import sqlite3
from collections.abc import Callable, Iterator
from contextlib import closing
from pathlib import Path

import google_crc32c
import msgspec
import numpy as np
import pytest
from strandline_loadgen.bodies import Style, bodies, cut_by_count
from strandline_loadgen.checker import UNKNOWN_SOURCE, Rows, Sent, judge
from strandline_loadgen.shapes import shape
from strandline_loadgen.stores import Reading, digests_of, read_ndjson, read_sqlite, with_digests

TRACE = shape("exponential", 300, 1)
READING = Reading(TRACE.source_names, digests=True)
LATE = 40  # the first so many in order of arrival are put into the late lane


def lines_of(style: Style | None = None) -> list[bytes]:
    return next(bodies(TRACE, cut_by_count(TRACE, len(TRACE)), style)).payload.splitlines()


def in_order() -> list[int]:
    """Rows of the ordered lane: all but the late ones, by event time."""
    return (LATE + np.argsort(TRACE.times[LATE:], kind="stable")).tolist()


def write_sqlite(path: Path, lines: list[bytes]) -> None:
    with closing(sqlite3.connect(path)) as connection, connection:
        connection.execute(
            "CREATE TABLE events(feed TEXT, batch INTEGER, position INTEGER, time_ns INTEGER, source TEXT, event TEXT)"
        )
        connection.execute(
            "CREATE TABLE late(feed TEXT, time_ns INTEGER, source TEXT, arrived_ns INTEGER, late_by_ns INTEGER, "
            "event TEXT)"
        )
        rows = [
            ("river", 1 + at // 7, at % 7, int(TRACE.times[row]), station(row), lines[row].decode())
            for at, row in enumerate(in_order())
        ]
        connection.executemany(
            "INSERT INTO events VALUES (?,?,?,?,?,?)", rows[::-1]
        )  # the order is the columns', not the rows'
        connection.execute("INSERT INTO events VALUES ('another', 1, 0, 5, 'x', '{}')")
        late = [("river", int(TRACE.times[row]), station(row), 1, 1, lines[row].decode()) for row in range(LATE)]
        connection.executemany("INSERT INTO late VALUES (?,?,?,?,?,?)", late)


def station(row: int) -> str:
    return TRACE.source_names[TRACE.sources[row]]


def write_ndjson(directory: Path, lines: list[bytes]) -> None:
    ordered = in_order()
    for number, at in enumerate(range(0, len(ordered), 50)):
        name = f"river-ordered-{1 + 3 * number:020d}-{3 + 3 * number:020d}.ndjson"
        (directory / name).write_bytes(b"".join(lines[row] + b"\n" for row in ordered[at : at + 50]))
    form = b'{"time_ns":%d,"source":"%b","arrived_ns":7,"late_by_ns":9,"event":%b}\n'
    late = b"".join(form % (TRACE.times[row], station(row).encode(), lines[row]) for row in range(LATE))
    (directory / f"river-late-{1:020d}-{4:020d}.ndjson").write_bytes(late)
    (directory / f"river-ordered-{99:020d}.ndjson.part").write_bytes(lines[0])
    (directory / f"river-2-ordered-{1:020d}-{4:020d}.ndjson").write_bytes(lines[0] + b"\n")


Store = Callable[[str], Iterator[Rows]]


@pytest.fixture(params=["sqlite", "ndjson"])
def store(request: pytest.FixtureRequest, tmp_path: Path) -> Store:
    if request.param == "sqlite":
        write_sqlite(tmp_path / "river.db", lines_of())
        return lambda lane: read_sqlite(tmp_path / "river.db", "river", lane, READING)
    write_ndjson(tmp_path, lines_of())
    return lambda lane: read_ndjson(tmp_path, "river", lane, READING)


def test_lanes_come_back_row_by_row_in_their_order(store: Store) -> None:
    for lane, expected in (("ordered", in_order()), ("late", list(range(LATE)))):
        pieces = list(store(lane))
        for column in ("ids", "times", "sources"):
            found = np.concatenate([getattr(piece, column) for piece in pieces])
            assert np.array_equal(found, getattr(TRACE, column)[expected])


def test_the_judge_finds_all_well_with_bytes_compared(store: Store) -> None:
    sent = with_digests(Sent.of(TRACE), digests_of(b"".join(line + b"\n" for line in lines_of())))
    verdict = judge(sent, store("ordered"), store("late"))
    assert verdict.ok, str(verdict)
    assert (verdict.ordered, verdict.late) == (len(TRACE) - LATE, LATE)
    changed = with_digests(sent, sent.rows.digests ^ (np.arange(len(TRACE)) == 77))
    assert judge(changed, store("ordered"), store("late")).unexpected == 1


@pytest.mark.parametrize("unit", ["rfc3339", "ns"])
def test_lines_alone_tell_time_source_and_bytes(unit: str) -> None:
    lines = lines_of(Style(unit))  # type: ignore[arg-type]
    rows = READING.rows(b"".join(line + b"\n" for line in lines))
    assert np.array_equal(rows.times, TRACE.times)
    assert np.array_equal(rows.sources, TRACE.sources)
    assert np.array_equal(rows.ids, TRACE.ids)
    assert rows.digests is not None
    assert rows.digests.tolist() == [google_crc32c.value(line) for line in lines]
    assert len(READING.rows(b"")) == 0


def test_what_the_store_says_counts_more_than_the_line() -> None:
    block = lines_of()[0] + b"\n"
    rows = READING.rows(block, [5], ["nobody"])
    assert rows.times.tolist() == [5]
    assert rows.sources.tolist() == [UNKNOWN_SOURCE]
    assert READING.rows(block, [5], [None]).sources.tolist() == [TRACE.sources[0]], "a feed without sources"


def test_a_file_of_batches_that_were_read_is_a_repeat(tmp_path: Path) -> None:
    line = lines_of()[0] + b"\n"
    for first, last in ((1, 5), (2, 4), (3, 5), (6, 6)):
        (tmp_path / f"river-ordered-{first:020d}-{last:020d}.ndjson").write_bytes(line)
    assert len(list(read_ndjson(tmp_path, "river", "ordered", READING))) == 2


@pytest.mark.parametrize(
    ("content", "message"),
    [
        (b'{"id":1}\n', "no event of the river gauges"),
        (b'{"observed_at":"2026-03-01T06:00:00.000000000+01:00","station":"a","id":1}\n', "not in UTC"),
        (lines_of()[0], "ends in the middle of a line"),
    ],
)
def test_a_store_that_cannot_be_read_is_said_to_be_so(content: bytes, message: str, tmp_path: Path) -> None:
    (tmp_path / f"river-ordered-{1:020d}-{1:020d}.ndjson").write_bytes(content)
    with pytest.raises(ValueError, match=message):
        list(read_ndjson(tmp_path, "river", "ordered", READING))
    (tmp_path / f"river-late-{1:020d}-{1:020d}.ndjson").write_bytes(content)
    with pytest.raises(ValueError, match=r"wraps no event|middle of a line"):
        list(read_ndjson(tmp_path, "river", "late", READING))


def test_another_lane_or_an_absent_file_is_an_error(tmp_path: Path) -> None:
    with pytest.raises(ValueError, match="there is no lane 'quarantine'"):
        list(read_ndjson(tmp_path, "river", "quarantine", READING))
    with pytest.raises(sqlite3.OperationalError):
        list(read_sqlite(tmp_path / "absent.db", "river", "ordered", READING))
    assert not (tmp_path / "absent.db").exists(), "reading makes no file"


def test_a_long_file_is_read_in_pieces(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("strandline_loadgen.stores.PIECE_BYTES", 200)
    write_ndjson(tmp_path, lines_of())
    pieces = list(read_ndjson(tmp_path, "river", "ordered", READING))
    assert len(pieces) > 100
    assert np.array_equal(np.concatenate([piece.ids for piece in pieces]), TRACE.ids[in_order()])
    assert msgspec.json.decode(lines_of()[0])["station"] == station(0)
