"""README's "Five minutes with curl", pasted into a fresh shell in one go, does what the text beside it says."""

from __future__ import annotations

import json
import os
import re
import signal
import subprocess
import sys
from collections.abc import Iterator
from contextlib import suppress
from pathlib import Path

import pytest
from strandline_loadgen.child import free_port

README = Path(__file__).resolve().parents[2] / "README.md"
TITLE = "## Five minutes with curl\n"
DEADLINE_S = 90


@pytest.fixture(scope="module")
def printed(tmp_path_factory: pytest.TempPathFactory) -> Iterator[list[str]]:
    """What the whole block prints, line by line. Only the port is another one, and the service is ended at the end."""
    folder = tmp_path_factory.mktemp("readme")
    section = README.read_text().partition(TITLE)[2].partition("\n## ")[0]
    block = "\n".join(line[4:] for line in section.splitlines() if line.startswith("    "))
    where = f"localhost:{free_port()}"
    assert "localhost:8600" in block and "strandline serve river.toml &" in block
    block = block.replace("localhost:8600", where)
    block = re.sub(r"\bstrandline (trace|act \w+) ", rf"strandline \1 --url http://{where} ", block)
    (folder / ".venv").symlink_to(Path(sys.executable).parents[1])
    listen = {"STRANDLINE_LISTEN": where.replace("localhost", "127.0.0.1")}
    environment = {"HOME": str(folder), "PATH": os.environ["PATH"], **listen}
    command = ["bash", "--norc", "-c", f"{block}\nkill %1; wait"]
    with subprocess.Popen(
        command, cwd=folder, env=environment, stdout=subprocess.PIPE, stderr=subprocess.STDOUT, text=True,
        start_new_session=True,
    ) as shell:  # fmt: skip
        try:
            out, _ = shell.communicate(timeout=DEADLINE_S)
        finally:
            with suppress(ProcessLookupError):  # else the service may live on where the shell has ended before it
                os.killpg(shell.pid, signal.SIGKILL)
    yield out.splitlines()


def documents(printed: list[str]) -> list[dict[str, object]]:
    """The JSON objects among the lines."""
    return [json.loads(line) for line in printed if line.startswith("{")]


def test_the_requests_are_answered_as_the_text_explains(printed: list[str]) -> None:
    first, second = [found for found in documents(printed) if "accepted" in found]
    assert (first["received"], first["accepted"], first["late"]) == (2, 2, 0)
    assert (second["accepted"], second["late"], second["quarantined"]) == (1, 1, 1)
    assert [fault["line"] for fault in second["faults"]] == [3]  # type: ignore[attr-defined]


def test_the_feed_is_current_and_the_late_event_is_found(printed: list[str]) -> None:
    (feed,) = [found for found in documents(printed) if "watermark_age_s" in found]
    assert 10 < float(feed["watermark_age_s"]) < 60 + DEADLINE_S  # type: ignore[arg-type]
    (late,) = [found for found in documents(printed) if "late" in found and "received" not in found]
    assert len(late["late"]) == 1  # type: ignore[arg-type]
    assert any(line.startswith("late: event of ") for line in printed)
    assert "What feed river-gauges held is released in order" in "\n".join(printed)


def test_ordered_output_and_store_hold_the_three_events_in_order(printed: list[str]) -> None:
    ordered = [found["event"]["level"] for found in documents(printed) if "position" in found]  # type: ignore[index]
    assert ordered == [2.31, 2.33, 2.35]
    rows = [line for line in printed if line.startswith("(")]
    assert [re.search(r'"level":([\d.]+)', row)[1] for row in rows] == ["2.31", "2.33", "2.35"]  # type: ignore[index]


def test_nothing_fails_on_the_way(printed: list[str]) -> None:
    wrong = [line for line in printed if re.search(r"curl: \(|Traceback|command not found|could not be reached", line)]
    assert wrong == []
