"""A real process against a disk that is really full, and a sink dead for longer than the journal has room."""

from __future__ import annotations

import json
import os
import subprocess
from collections.abc import Iterator
from pathlib import Path

import pytest
from helpers_receiver import Receiver, refuse
from helpers_service import (
    FEED,
    Process,
    body_of,
    configuration,
    event_line,
    problem_of,
    retry_after,
    small_journal,
    stored,
)

PATH = f"/v1/feeds/{FEED}/events"


@pytest.fixture
def small_disk(tmp_path: Path) -> Iterator[Path]:
    """A file system of 600 KiB of its own, which only root can make."""
    if os.geteuid() != 0:
        pytest.skip("mounting a small file system needs root")
    folder = tmp_path / "data"
    folder.mkdir()
    subprocess.run(["mount", "-t", "tmpfs", "-o", "size=600k", "tmpfs", str(folder)], check=True)
    try:
        yield folder
    finally:
        subprocess.run(["umount", "--lazy", str(folder)], check=True)


def post_until_refused(process: Process, first: int, bodies_at_most: int = 500) -> tuple[list[int], object]:
    """Bodies of 20 events until one is refused; the seconds of the events that were taken, and the refusal."""
    taken: list[int] = []
    for number in range(bodies_at_most):
        seconds = range(first + 20 * number, first + 20 * (number + 1))
        answer = process.ask(PATH, body_of(*(event_line(second, pad="x" * 300) for second in seconds)))
        if answer.status != 200:
            return taken, answer
        taken += seconds
    raise AssertionError("nothing was refused")


def test_a_full_disk_refuses_before_the_first_byte_and_loses_nothing(tmp_path: Path, small_disk: Path) -> None:
    text = small_journal(tmp_path, "64MiB", slack="1h", hold_at_most="2h")
    with Process(tmp_path, text) as process:
        taken, answer = post_until_refused(process, 0)
        assert "room" in problem_of(answer, 503, "disk_full")  # type: ignore[arg-type]
        assert retry_after(answer) > 0  # type: ignore[arg-type]
        assert len(taken) > 100
        assert process.document()["ledger"] == {
            **dict.fromkeys(("released", "late", "duplicate", "quarantined"), 0),
            "received": len(taken), "buffered": len(taken), "balanced": True,
        }  # fmt: skip
        process.kill()  # what was answered is still there, with the disk as full as it is
        process.start()
        assert process.document()["ledger"]["buffered"] == len(taken)
        subprocess.run(["mount", "-o", "remount,size=16m", str(small_disk)], check=True)
        assert process.ask(PATH, body_of(event_line(len(taken)))).status == 200
        process.drain()
        assert process.terminate() == 0
    assert stored(tmp_path) == [*taken, len(taken)]


def test_a_sink_dead_for_longer_than_the_journal_has_room_gets_all_when_it_is_back(tmp_path: Path) -> None:
    with Receiver() as receiver:
        receiver.script.extend([refuse(503)] * 100_000)
        sink = f'[[feed.sink]]\nkind = "http"\nurl = "{receiver.url}/ordered"\n'
        limits = dict.fromkeys(("decoded_bytes_at_most", "body_bytes_at_most", "event_bytes_at_most"), "64KiB")
        more = 'journal = { segment_bytes = "64KiB", at_most = "512KiB" }'
        text = configuration(tmp_path, sinks=sink, more=more, slack="0s", **limits)
        with Process(tmp_path, text) as process:
            taken, answer = post_until_refused(process, 0)
            assert "journal.at_most" in problem_of(answer, 429, "journal_full")  # type: ignore[arg-type]
            assert retry_after(answer) > 0  # type: ignore[arg-type]
            sinks = process.document()["sinks"]["http"]
            assert sinks["failing_since"] and "503" in sinks["last_error"]
            receiver.script.clear()

            def goes_on() -> bool:
                return process.ask(PATH, body_of(event_line(len(taken)))).status == 200

            process.until(goes_on, "the feed did not recover when its sink did")
            process.drain()
            assert process.terminate() == 0
        found = [json.loads(line)["observed_at"] for line in receiver.lines("/ordered", f"{FEED}-ordered")]
        assert found == [json.loads(event_line(second))["observed_at"] for second in [*taken, len(taken)]]
        assert receiver.faults == []
