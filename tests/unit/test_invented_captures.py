"""The invented captures on which advice and replay are measured: whole, in order of arrival, as large as asked for."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from strandline.replay.capture import Capture
from strandline_loadgen.captures import LINE, main


@pytest.mark.parametrize(("events", "per_request", "lines"), [(1000, 1, True), (1010, 50, True), (3000, 50, False)])
def test_a_capture_is_whole(events: int, per_request: int, lines: bool, tmp_path: Path) -> None:
    out = tmp_path / "made.capture"
    arguments = [str(out), "--events", str(events), "--per-request", str(per_request), "--sources", "7"]
    assert main(arguments + ([] if lines else ["--without-events"])) == 0
    with Capture(out) as capture:
        assert capture.cut is None
        assert (capture.requests, capture.events) == (events // per_request, events // per_request * per_request)
        arrived = np.concatenate([block.arrived for block in capture.blocks()])
        assert np.all(np.diff(arrived) == 100_000 * per_request)
        for block in capture.blocks():
            assert np.all(block.times <= block.event_arrivals())
            assert int(block.sources.max()) < 7 and np.all(block.lengths == len(LINE) - 1)
            bodies = block.times.reshape(-1, per_request)
            assert np.all(bodies[:, 1:] >= bodies[:, :-1])
        assert bool(capture.line_sections()) == lines


@pytest.mark.parametrize("arguments", [["--per-request", "0"], ["--events", "10"], ["--sources", "0"]])
def test_wrong_use_is_said(arguments: list[str], tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert main([str(tmp_path / "none.capture"), *arguments]) == 2
    assert "--per-request <= --events" in capsys.readouterr().err
