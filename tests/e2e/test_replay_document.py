"""The worked example of deploy/replay.md, run as it stands there; and what it says of the other setting."""

from __future__ import annotations

import os
import re
import subprocess
import sys
from pathlib import Path

DOCUMENT = (Path(__file__).resolve().parents[2] / "deploy" / "replay.md").read_text()


def blocks(language: str) -> list[str]:
    return re.findall(rf"^```{language}\n(.*?)^```", DOCUMENT, re.MULTILINE | re.DOTALL)


def told(output: str) -> list[str]:
    """The lines of an answer without the one that depends on the machine."""
    return [line.rstrip() for line in output.splitlines() if not line.startswith("replayed in")]


def run(script: str, folder: Path) -> subprocess.CompletedProcess[str]:
    """With the program of this environment, and without this one's settings."""
    tools = folder / "tools"
    tools.mkdir(exist_ok=True)
    starter = tools / "strandline"
    starter.write_text(f'#!/bin/sh\nexec "{sys.executable}" -m strandline.cli "$@"\n')
    starter.chmod(0o755)
    environ = {name: value for name, value in os.environ.items() if not name.startswith("STRANDLINE_")}
    environ["PATH"] = f"{tools}:{environ['PATH']}"
    command = ["sh", "-c", script]
    return subprocess.run(command, check=False, cwd=folder, env=environ, capture_output=True, text=True, timeout=300)


def test_the_worked_example_answers_what_the_document_says(tmp_path: Path) -> None:
    (script,), (missed, met) = blocks("sh"), blocks("text")
    answer = run(script, tmp_path)
    assert answer.returncode == 1, answer.stderr
    made, *rest = told(answer.stdout)
    assert made.startswith("yesterday.capture: 6,000 requests, 6,000 events, ")
    assert rest == missed.splitlines()
    changed = tmp_path / "new.toml"
    changed.write_text(changed.read_text().replace('slack = "5s"', 'slack = "12s"'))
    answer = run(script.splitlines()[-1], tmp_path)
    assert answer.returncode == 0, answer.stderr
    assert set(met.splitlines()) <= set(told(answer.stdout))
