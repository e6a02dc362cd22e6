"""The demonstration as a whole: a real service process, real HTTP, a real store, the judge's verdict."""

from __future__ import annotations

import io
from pathlib import Path

import pytest
from rich.console import Console
from strandline_loadgen.child import ChildServer, ServiceTrouble, free_port, serve
from strandline_loadgen.demo import configuration, run
from strandline_loadgen.demo_story import SECONDS_AT_LEAST, Pace


def test_all_is_well_and_every_moment_is_told_without_a_terminal() -> None:
    paper = Console(file=io.StringIO(), width=80)
    assert run(SECONDS_AT_LEAST, console=paper) == 0
    text = paper.file.getvalue()  # type: ignore[attr-defined]
    for words in ("The storm begins", "mill falls silent", "mill is back", "ridge jumps", "A straggler", "dies down"):
        assert words in text
    assert "Verdict: all is well." in text
    assert "  lost                  0\n" in text
    assert "held" in text
    sent = next(line for line in text.splitlines() if line.startswith("Sent "))
    assert " 0 in the late lane" not in sent, "the mill's backlog and the straggler come late"
    assert " 0 went to quarantine" not in sent, "the ridge's clock is wrong for a while"
    assert "\x1b" not in text, "plain lines where there is no terminal"


def test_a_wrong_number_of_seconds_is_wrong_use(capsys: pytest.CaptureFixture[str]) -> None:
    assert run(1) == 2
    assert "a demonstration takes 8 to 3600 seconds, not 1" in capsys.readouterr().err


async def test_a_service_that_cannot_start_is_told_with_its_last_words(tmp_path: Path) -> None:
    (tmp_path / "data").write_text("a file where the folder should be")
    port, file = free_port(), tmp_path / "strandline.toml"
    file.write_text(configuration(port, tmp_path, Pace.of(10)))
    with pytest.raises(ServiceTrouble, match=r"the service did not start:\n.+"):
        async with ChildServer(serve(file), port, tmp_path / "service.log"):
            pass
