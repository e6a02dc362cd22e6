"""`faults_at_most` over real HTTP: a body with more faults is refused whole; what is kept already is not bound."""

from __future__ import annotations

from pathlib import Path

import pytest
from helpers_service import body_of, configuration, event_line, eventually, problem_of, running

FAULTS = [b"x", b"{}", b'{"observed_at":5}']


@pytest.mark.parametrize("count", [0, 2, 3])
async def test_at_the_limit_and_beyond(tmp_path: Path, count: int) -> None:
    async with running(configuration(tmp_path, faults_at_most=2)) as service:
        answer = await service.post("events", body_of(event_line(1), *FAULTS[:count]))
        document = await service.document()
        if count <= 2:
            assert (answer.status, answer.json["accepted"], answer.json["quarantined"]) == (200, 1, count)
            return
        assert "more than 2 lines" in problem_of(answer, 422, "too_many_faults")
        named = [(fault["line"], fault["reason"]) for fault in answer.json["faults"]]
        assert named == [(2, "malformed"), (3, "time_missing"), (4, "time_invalid")]
        assert "Retry-After" not in answer.headers, "the same body will never be taken"
        assert document["ledger"]["received"] == 0
        assert document["refusals"]["too_many_faults"] == 1
        metrics = (await service.get("/metrics")).content.decode()
        assert 'strandline_requests_refused_total{feed="river-gauges",reason="too_many_faults"} 1.0' in metrics


async def test_lines_in_quarantine_are_driven_again_however_many_are_faulty(tmp_path: Path) -> None:
    async with running(configuration(tmp_path, faults_at_most=2)) as service:
        for _ in range(3):
            assert (await service.post("events", body_of(*FAULTS[:2]))).status == 200
        await eventually(lambda: service.runtime.feed.state.outbox.aside_events == 0)
        answer = await service.post("quarantine/readmit", {})
        assert answer.status == 200, answer.content
        assert (answer.json["tried"], answer.json["still_faulty"]) == (6, 6)
