"""The benchmark of a partition of a cluster at a small scale: it measures, and what was delivered is judged."""

from __future__ import annotations

import pytest
from strandline_loadgen.bench import cluster
from strandline_loadgen.bench.harness import Row, Scale

TINY = Scale(events=4_000, held=(2_000,), body_events=500, is_quick=True)


def _rows(monkeypatch: pytest.MonkeyPatch) -> dict[str, Row]:
    monkeypatch.setattr(cluster, "HELD", (2_000,))
    return {row.name: row for row in cluster.rows(TINY)}


def test_a_partition_is_compared_with_an_intake(monkeypatch: pytest.MonkeyPatch) -> None:
    sample = _rows(monkeypatch)["a partition, messages of 500 events"].prepare(TINY)()
    assert sample.value == pytest.approx(sample.beside["events/s"] / sample.beside["intake events/s"])


def test_a_partition_writes_its_log_to_three_brokers(monkeypatch: pytest.MonkeyPatch) -> None:
    sample = _rows(monkeypatch)["a partition with 3 brokers on this machine, messages of 500 events"].prepare(TINY)()
    assert sample.value == pytest.approx(sample.beside["events/s"] / 1e6) and sample.value > 0


def test_a_takeover_reads_every_message_that_is_held_again(monkeypatch: pytest.MonkeyPatch) -> None:
    row = _rows(monkeypatch)["a partition taken over, 2,000 events held"]
    sample = row.prepare(TINY)()
    assert sample.beside["messages"] == 4 and sample.beside["events/s"] == pytest.approx(2_000 / sample.value)


def test_without_a_server_there_is_no_row(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(cluster, "nats_server", lambda: None)
    assert cluster.rows(TINY) == []
