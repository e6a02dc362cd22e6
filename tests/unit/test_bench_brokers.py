"""The benchmark of taking from JetStream at a small scale: it measures, and what was delivered is judged."""

from __future__ import annotations

from pathlib import Path

import pytest
from helpers_brokers import nats_server
from strandline_loadgen.bench import brokers
from strandline_loadgen.bench.harness import Scale

TINY = Scale(events=4_000, held=(2_000,), body_events=500, is_quick=True)


def test_the_row_compares_three_ways_of_taking_the_same() -> None:
    assert brokers.nats_server() == str(nats_server())
    (row,) = brokers.rows(TINY)
    sample = row.prepare(TINY)()
    assert sample.value == pytest.approx(sample.beside["events/s"] / sample.beside["bare events/s"])
    assert sample.also[brokers.DURABLE] == pytest.approx(sample.beside["events/s"] / sample.beside["durable events/s"])


def test_a_delivery_that_is_not_right_has_no_figure(tmp_path: Path) -> None:
    course = brokers.course_of(brokers.BODY_EVENTS, TINY)
    (tmp_path / "out").mkdir()
    with pytest.raises(RuntimeError, match="no figure would mean anything"):
        brokers._check(course, tmp_path)


def test_without_a_server_there_is_no_row(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(brokers, "nats_server", lambda: None)
    assert brokers.rows(TINY) == []
