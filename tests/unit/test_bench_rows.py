"""Rows of the benchmark that need a disk, a store or a process, at a small scale; exact counts are asserted."""

from __future__ import annotations

import asyncio
import os
from pathlib import Path

import numpy as np
import pytest
from strandline.core.records import frame_bytes
from strandline_loadgen.bench import durable, growth, idle, latency_child, limits, service, sqlite
from strandline_loadgen.bench.harness import Scale

TINY = Scale(events=4_000, held=(2_000,), body_events=500, is_quick=True)


def test_the_journal_row_syncs_once_a_group_and_writes_frames_only(tmp_path: Path) -> None:
    groups = durable.groups_of(500, TINY)
    journal = durable.OurJournal(tmp_path)
    for group in groups:
        journal.write(group)
    counters = journal._journal.counters
    assert counters.syncs == len(groups)
    assert counters.frames == sum(map(len, groups))
    assert counters.bytes_written == sum(frame_bytes(len(record)) for group in groups for record in group)
    journal.close()
    raw = durable.RawFile(tmp_path / "raw", 1 << 20)
    raw.write([b"one", b"two"])
    raw.close()
    assert (tmp_path / "raw").read_bytes()[:7] == b"onetwo\0"
    (row, _) = durable.rows(TINY)
    assert row.prepare(TINY)().value > 0


@pytest.mark.parametrize("case", [growth.held_case(2_000, wider=True), growth.sources_case(50)])
def test_growth_takes_in_every_event(case: growth.Case, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(growth, "MEASURED_EVENTS", 5_000)
    cost, held = growth.ns_per_event(case, TINY)
    assert cost > 0
    # An event waits for what is left of the slack when it comes: its mean times the rate (Little's law).
    assert held == pytest.approx(growth.EVENTS_PER_S * (case.slack_s - case.mean_s), rel=0.1)


def test_the_sqlite_row_compares_what_both_have_stored(tmp_path: Path) -> None:
    batches, lines = sqlite.course_of(500, TINY)
    tuples = [sqlite._tuples(batch, lines) for batch in batches]
    assert sqlite._bulk_load(tmp_path / "bare.db", tuples) > 0
    assert asyncio.run(sqlite._sink_load(tmp_path / "sink.db", batches, lines)) > 0
    sqlite._require_equal(tmp_path / "sink.db", tmp_path / "bare.db")
    sqlite._bulk_load(tmp_path / "less.db", tuples[1:])
    for one, other in (("less", "bare"), ("bare", "less")):
        with pytest.raises(RuntimeError, match="the two files differ"):
            sqlite._require_equal(tmp_path / f"{one}.db", tmp_path / f"{other}.db")


def test_a_release_latency_begins_at_the_arrival_that_let_the_watermark_pass() -> None:
    timings = latency_child.Timings()
    timings.arrived, timings.watermarks = [1_000, 2_000, 3_000], [-5, 10, 20]
    timings.committed = [(2_500, np.array([3, 10])), (9_000, np.array([11, 20, 21]))]
    assert timings.latencies().tolist() == [500, 500, 6_000, 6_000], "21 was let go by the drain: it has none"
    timings.syncs, timings.commits = [10**9] * 99 + [3 * 10**9], [2 * 10**9]
    found = latency_child.result(timings)
    assert found["syncs"] == 100
    assert found["commit p99"] == 2.0
    assert found["release p50"] == pytest.approx(3_250 / 1e9)


def test_passing_through_changes_nothing_but_times() -> None:
    course = service.course_of(500, TINY)
    through = service.passing_through(course)
    assert [len(body.payload) for body in through.bodies] == [len(body.payload) for body in course.bodies]
    assert len(set(through.trace.times.tolist())) == 1
    assert np.array_equal(through.trace.ids, course.trace.ids)
    assert through.slack == "0s"


def test_a_service_row_and_the_limits_of_the_same_bodies() -> None:
    """The judge reads the files that the service wrote; it raises where they are not right."""
    (row,) = [row for row in service.rows(TINY) if row.name.endswith("ordering on against off, bodies of 500 events")]
    assert row.prepare(TINY)().beside["passing through events/s"] > 0
    copying, discarding, _ = limits.rows(TINY)
    assert copying.prepare(TINY)().value > 0
    assert discarding.prepare(TINY)().value > 0


def test_processor_time_is_this_process_own() -> None:
    before = idle.processor_s(os.getpid())
    spent = sum(os.times()[:2])
    assert before == pytest.approx(spent, abs=0.1)
