"""Laws of the sums over the late lane: they are those of its rows, whatever was forgotten, wherever the time begins."""

from __future__ import annotations

import sqlite3
import tempfile
from collections import defaultdict
from contextlib import closing
from pathlib import Path

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from strandline.errors import StrandlineError
from strandline.sinks import lane_summary
from strandline.sinks.lane_summary import SECOND_NS, LateSums, late_sums, refused_sums
from strandline.sinks.lane_tables import KEPT, LATE, REFUSED

Rows = list[tuple[int, int, str | None, int]]  # number, arrival, source, late by


def file_of(folder: Path, rows: Rows, refused: list[tuple[str, int]]) -> Path:
    path = folder / "lanes.db"
    with closing(sqlite3.connect(path)) as connection:
        for table in (LATE, REFUSED, KEPT):
            columns = ", ".join(f"{name} {kind}" for name, kind in table.columns)
            connection.execute(f"CREATE TABLE {table.name} ({columns})")
        connection.executemany(
            "INSERT INTO late VALUES (?, 1, 0, ?, ?, ?, 0, '{}')",
            [(number, source, arrived, by) for number, arrived, source, by in rows],
        )
        connection.executemany(
            "INSERT INTO refused VALUES (?, ?, 'ordered', 1, ?, ?, 0, 0, 'a', 'too old', '{}')",
            [(number, sink, number, instant) for number, (sink, instant) in enumerate(refused)],
        )
        connection.commit()
    return path


@st.composite
def kept(draw: st.DrawFn) -> Rows:
    """Arrivals ascend with numbers; some numbers are missing, as after rows were forgotten."""
    size = draw(st.integers(0, 40))
    numbers = sorted(draw(st.sets(st.integers(1, 100), min_size=size, max_size=size)))
    arrivals = sorted(draw(st.lists(st.integers(0, 8 * SECOND_NS), min_size=size, max_size=size)))
    sources = draw(st.lists(st.sampled_from(("a", "b", None)), min_size=size, max_size=size))
    late_by = draw(st.lists(st.integers(1, 9), min_size=size, max_size=size))
    return list(zip(numbers, arrivals, sources, late_by, strict=True))


@given(kept(), st.integers(-1, 9 * SECOND_NS), st.integers(-1, 9 * SECOND_NS))
@settings(max_examples=50, deadline=None)
def test_sums_are_those_of_the_rows(rows: Rows, one: int, other: int) -> None:
    from_ns, to_ns = sorted((one, other))
    with tempfile.TemporaryDirectory() as folder:
        found = late_sums(file_of(Path(folder), rows, []), from_ns, to_ns)
    by_source, by_second = defaultdict(list), defaultdict(list)
    for _, arrived, source, late_by in rows:
        if from_ns <= arrived < to_ns:
            by_source[source].append((arrived, late_by))
            by_second[source, arrived // SECOND_NS].append((arrived, late_by))
    assert {
        total.source: (total.events, total.from_ns, total.to_ns, total.late_by_most_ns) for total in found.totals
    } == {
        source: (len(came), min(came)[0], max(came)[0], max(by for _, by in came)) for source, came in by_source.items()
    }
    assert {(each.source, each.from_ns // SECOND_NS): each[1:] for each in found.seconds} == {
        key: (len(came), min(came)[0], max(came)[0], min(by for _, by in came), max(by for _, by in came))
        for key, came in by_second.items()
    }
    assert found.complete


def test_refused_ones_are_counted_by_sink(tmp_path: Path) -> None:
    path = file_of(tmp_path, [], [("a", 5), ("b", 6), ("a", 7), ("a", 9)])
    assert refused_sums(path, 5, 9) == [("a", 2, "too old"), ("b", 1, "too old")]
    assert refused_sums(path, 10, 20) == []


def test_where_there_is_no_file_nothing_is_kept(tmp_path: Path) -> None:
    assert late_sums(tmp_path / "none.db", 0, 1) == LateSums([], [], True)
    assert refused_sums(tmp_path / "none.db", 0, 1) == []


def test_more_seconds_than_are_told_are_said(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(lane_summary, "SECONDS_AT_MOST", 3)
    rows: Rows = [(number, number * SECOND_NS, "a", 1) for number in range(1, 6)]
    found = late_sums(file_of(tmp_path, rows, []), 0, 9 * SECOND_NS)
    assert (len(found.seconds), found.complete, found.totals[0].events) == (3, False, 5)


def test_reading_that_takes_too_long_is_given_up(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(lane_summary, "WITHIN_S", -1.0)
    monkeypatch.setattr(lane_summary, "_STEPS", 1)
    path = file_of(tmp_path, [(1, 1, "a", 1)], [])
    with pytest.raises(StrandlineError, match="ask for a shorter time"):
        late_sums(path, 0, 9)
