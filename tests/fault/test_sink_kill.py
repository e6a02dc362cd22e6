"""Promise P5 for the stores that keep it: a process is killed again and again in the middle of its takes, and in the
end every event is there exactly once; and what a sink told before it died is there at the next start (P1).

SIGKILL shows what a crash of the process leaves; that synced bytes outlive the power is the disk's part, and that they
are synced is tested beside each sink.
"""

from __future__ import annotations

import random
import signal
import sqlite3
import subprocess
import sys
import tempfile
from collections.abc import Iterator
from contextlib import closing
from pathlib import Path

import pyarrow.parquet as pq
import pytest
from helpers_sinks import HeldLines
from sink_child import BATCHES, everything, make
from strandline.sinks.lanes import late_rows, quarantine_rows

CHILD = Path(__file__).resolve().parents[1] / "sink_child.py"

# Where the process dies, each time in a new process that goes on from what the last one left.
POINTS = {
    "sqlite": [
        ("PRAGMA journal_mode", 1),
        ("CREATE TABLE", 2),
        ("COMMIT", 1),  # of the tables
        ("BEGIN", 2),
        ("INSERT INTO events", 3),
        ("INSERT OR REPLACE", 1),
        ("COMMIT", 2),  # of the first take
        ("BEGIN", 3),  # after it
        ("lines", 7),
        ("INSERT INTO late", 11),
        ("INSERT INTO events", 17),
        ("COMMIT", 4),
    ],
    "lanes": [
        ("CREATE TABLE", 3),
        ("INSERT INTO late", 2),
        ("INSERT INTO kept", 1),
        ("COMMIT", 3),
        ("BEGIN", 3),
        ("INSERT INTO quarantine", 5),
        ("lines", 6),
        ("INSERT INTO kept", 3),
        ("COMMIT", 5),
    ],
    "ndjson": [
        ("lines", 1),
        ("lines", 3),
        ("open", 1),
        ("os.rename", 1),
        ("os.rename", 2),
        ("os.remove", 1),
        ("open", 4),
        ("open", 5),
        ("lines", 9),
        ("os.rename", 3),
        ("open", 6),
    ],
    "parquet": [
        ("lines", 1),
        ("open", 1),
        ("os.rename", 1),
        ("lines", 7),
        ("os.rename", 2),
        ("os.remove", 1),
        ("open", 4),
        ("os.rename", 3),
    ],
}


@pytest.fixture
def place() -> Iterator[Path]:
    with tempfile.TemporaryDirectory(prefix="strandline-kill") as name:
        yield Path(name)


def positions(line: str) -> dict[str, int]:
    return {lane: int(number) for lane, number in (pair.split("=") for pair in line.split()[1:])}


def judge(told: dict[str, int], output: list[str]) -> dict[str, int]:
    """What was told never goes back, also not from one process to the next."""
    for line in output:
        now = positions(line)
        for lane, number in now.items():
            assert number >= told.get(lane, 0), (line, told)
        told = told | now
    return told


def run(kind: str, place: Path, point: str, nth: int) -> tuple[int, list[str]]:
    command = [sys.executable, "-W", "error", str(CHILD), kind, str(place), point, str(nth)]
    done = subprocess.run(command, capture_output=True, text=True, check=False, timeout=120)
    assert done.stderr == ""
    return done.returncode, done.stdout.splitlines()


def finished(kind: str, place: Path, told: dict[str, int]) -> None:
    """A last process finishes the work; then everything is there once and in order."""
    code, output = run(kind, place, "none", 1)
    assert code == 0
    lines = HeldLines()
    sink = make(kind, place)
    told = judge(told, output)
    assert told == dict.fromkeys(sink.lanes, BATCHES)
    for lane, batches in everything(lines, sink.lanes).items():
        assert stored(kind, place, lane) == [row[-1] for row in lines.expected(batches)]


def stored(kind: str, place: Path, lane: str) -> list[bytes]:
    """A lane's events as the store has them, in its order."""
    if kind == "parquet":
        paths = sorted(place.glob(f"files/river-{lane}-*"))
        assert all(path.suffix == ".parquet" for path in paths)
        return [text.encode() for path in paths for text in pq.read_table(path)["event"].to_pylist()]
    if kind == "ndjson":
        paths = sorted(place.glob(f"files/river-{lane}-*"))
        assert all(path.suffix == ".ndjson" for path in paths)
        found = b"".join(path.read_bytes() for path in paths).split(b"\n")[:-1]
        return [line.split(b',"event":', 1)[1][:-1] for line in found] if lane == "late" else found
    if kind == "lanes":
        path = place / "lanes" / "lanes.db"
        if lane == "quarantine":
            return [row.event for row in quarantine_rows(path, limit=10_000)]
        return [row.event.encode() for row in late_rows(path, limit=10_000)]
    order = "SELECT event FROM events ORDER BY feed, batch, position"
    with closing(sqlite3.connect(place / "river.db")) as connection:
        rows = connection.execute(order if lane == "ordered" else "SELECT event FROM late ORDER BY rowid").fetchall()
    return [row[0].encode() for row in rows]


@pytest.mark.parametrize("kind", POINTS)
def test_killed_at_every_kind_of_point(kind: str, place: Path) -> None:
    told: dict[str, int] = {}
    for point, nth in POINTS[kind]:
        code, output = run(kind, place, point, nth)
        assert code == -signal.SIGKILL, f"the process never came to {point} for the {nth}th time: {output}"
        told = judge(told, output)
    assert any(told.values()) and not all(number == BATCHES for number in told.values())
    finished(kind, place, told)


@pytest.mark.parametrize("kind", POINTS)
def test_killed_from_outside_at_any_moment(kind: str, place: Path) -> None:
    """The moment is the machine's: whatever it is, the outcome is the same."""
    chance = random.Random(20_260_501)
    told: dict[str, int] = {}
    for _ in range(5):
        command = [sys.executable, "-W", "error", str(CHILD), kind, str(place), "none", "1"]
        output: list[str] = []
        with subprocess.Popen(command, stdout=subprocess.PIPE, text=True) as child:
            assert child.stdout is not None
            for _ in range(chance.randint(1, 4)):
                output.append(child.stdout.readline())
            child.kill()
            output += child.stdout.readlines()
        assert child.returncode in {-signal.SIGKILL, 0}
        told = judge(told, [line for line in output if line.endswith("\n")])
    finished(kind, place, told)
