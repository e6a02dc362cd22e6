"""Captures out of a journal's folder, a running service and files of events: what is in them, and what is told."""

from __future__ import annotations

import asyncio
import json
from pathlib import Path

import pyarrow
import pytest
from helpers_captures import figures_of, folded
from helpers_service import BEGIN_S, FEED, body_of, configuration, event_line, eventually, problem_of, running
from pyarrow import parquet
from strandline.core.records import Kind, SourcesRecord, decode_small
from strandline.errors import CaptureError
from strandline.journal.disk import LocalDisk
from strandline.replay.capture import Capture
from strandline.replay.from_file import PIECE_BYTES, Fields, capture_file
from strandline.replay.from_journal import Wanted, capture_journal
from strandline.replay.replaying import Folding
from strandline.replay.verifying import Verifying

SECOND_NS = 1_000_000_000
FIELDS = Fields(FEED, "/received_at", "rfc3339", "/observed_at", "rfc3339", "/station", None)


class Hands:
    """A clock that is moved by hand."""

    def __init__(self) -> None:
        self.ns = BEGIN_S * SECOND_NS

    def now_ns(self) -> int:
        return self.ns


def from_folder(folder: Path, out: Path, **wanted: object) -> Path:
    """A capture of the feed of `configuration`."""
    with out.open("wb") as file:
        disk = LocalDisk(folder / "data" / "feeds", read_only=True)
        capture_journal(disk, FEED, Wanted(FEED, 7, **wanted), file.write)  # type: ignore[arg-type]
    return out


async def lived(service, clock: Hands, first: int, requests: int) -> None:
    """Requests a second apart, each with an event of two gauges, one of them out of order."""
    for second in range(first, first + requests):
        clock.ns = (BEGIN_S + second) * SECOND_NS
        body = body_of(event_line(second), event_line(second - second % 3, "gw-2"))
        assert (await service.post("events", body)).status == 200


def counts(path: Path) -> tuple[int, int, int]:
    """Requests, events, records."""
    with Capture(path) as capture:
        return capture.requests, capture.events, capture.records


async def test_a_journal_is_captured_while_the_service_runs_and_verifies(tmp_path: Path) -> None:
    clock = Hands()
    async with running(configuration(tmp_path, slack="2s"), clock=clock) as service:
        await lived(service, clock, 0, 40)
        path = from_folder(tmp_path, tmp_path / "all.capture")
        assert counts(path)[:2] == (40, 80)
        with Capture(path) as capture:
            assert (capture.meta.feed, capture.meta.origin, capture.meta.start_lsn) == (FEED, "journal", 0)
            assert (capture.first_ns, capture.last_ns) == (BEGIN_S * SECOND_NS, (BEGIN_S + 39) * SECOND_NS)
            verifying = Verifying(capture)
            figures = figures_of(verifying)
        assert figures.verified, verifying.unlike
        shown = (await service.document())["ledger"]
        assert (figures.received, figures.released, figures.late) == (80, shown["released"], shown["late"])


async def test_from_and_to_cut_by_the_arrival_clock_and_keep_the_state(tmp_path: Path) -> None:
    clock = Hands()
    async with running(configuration(tmp_path, slack="5s"), clock=clock) as service:
        await lived(service, clock, 0, 40)
    whole = folded(from_folder(tmp_path, tmp_path / "all.capture"))
    begin, end = (BEGIN_S + 10) * SECOND_NS, (BEGIN_S + 20) * SECOND_NS
    path = from_folder(tmp_path, tmp_path / "part.capture", from_ns=begin, to_ns=end)
    assert counts(path)[:2] == (11, 22)
    part = folded(path)
    numbers = [batch.number for batch, _ in part if batch.lane == "ordered"]
    assert numbers and [lines for _, lines in part] == [
        lines for batch, lines in whole if begin <= batch.instant_ns <= end
    ]
    with Capture(path) as capture:
        state = capture.state()
        assert state is not None and state.runs.held > 0 and state.sources.names == ["gw-1", "gw-2"]
    with pytest.raises(CaptureError, match="--from"):
        from_folder(tmp_path, tmp_path / "none.capture", from_ns=(BEGIN_S + 100) * SECOND_NS)


def small_journal(retain: str) -> str:
    return (
        f'journal = {{ segment_bytes = "64KiB", at_most = "64MiB", retain = "{retain}" }}\n'
        'body_bytes_at_most = "64KiB"\ndecoded_bytes_at_most = "64KiB"\nevent_bytes_at_most = "64KiB"'
    )


async def test_where_the_journals_head_is_gone_a_capture_begins_with_a_snapshots_state(tmp_path: Path) -> None:
    clock = Hands()
    text = configuration(tmp_path, slack="2s", more=small_journal("0s"))
    async with running(text, clock=clock) as service:
        for second in range(60):
            clock.ns = (BEGIN_S + second) * SECOND_NS
            assert (await service.post("events", event_line(second, note="x" * 20_000) + b"\n")).status == 200
            if second % 3 == 2:
                service.runtime.tick()
                await eventually(lambda: service.runtime._housekeeping is None or service.runtime._housekeeping.done())
        assert service.runtime.journal.first_lsn > 0
        path = from_folder(tmp_path, tmp_path / "rest.capture")
        with Capture(path) as capture:
            assert capture.meta.start_lsn >= service.runtime.journal.first_lsn and 0 < capture.requests < 60
            verifying = Verifying(capture)
            assert figures_of(verifying).verified, verifying.unlike
        for snapshot in (tmp_path / "data" / "feeds" / FEED).glob("snapshot-*.snap"):
            snapshot.unlink()
        with pytest.raises(CaptureError, match="no state is known"):
            from_folder(tmp_path, tmp_path / "never.capture")


def test_a_folder_without_a_journal_is_told(tmp_path: Path) -> None:
    (tmp_path / "data" / "feeds" / FEED).mkdir(parents=True)
    with pytest.raises(CaptureError, match="no journal in it, or nothing"):
        from_folder(tmp_path, tmp_path / "none.capture")


async def test_a_running_feed_is_recorded_with_what_it_held(tmp_path: Path) -> None:
    clock = Hands()
    async with running(configuration(tmp_path, slack="5s"), clock=clock) as service:
        await lived(service, clock, 0, 10)
        held = service.runtime.feed.state.runs.held
        recording = asyncio.create_task(service.get("capture", params={"seconds": "1"}))
        await eventually(lambda: service.runtime.recording)
        answer = await service.get("capture", params={"seconds": "1"})
        assert "one capture at a time" in problem_of(answer, 429) and answer.headers["Retry-After"] == "60"
        await lived(service, clock, 10, 30)
        answer = await recording
        assert answer.status == 200 and not service.runtime.recording
        path = tmp_path / "now.capture"
        path.write_bytes(answer.content)
        assert counts(path)[:2] == (30, 60)
        with Capture(path) as capture:
            assert capture.cut is None and capture.meta.origin == "service"
            state = capture.state()
            assert state is not None and state.runs.held == held > 0
            verifying = Verifying(capture)
            assert figures_of(verifying).verified, verifying.unlike
        assert sum(len(lines) for batch, lines in folded(path) if batch.lane == "ordered") > 60 - held
        assert "must be 1 to 86400" in problem_of(await service.get("capture", params={"seconds": "0"}), 400)


def line(received: float, observed: float, station: str = "gw-1", **more: object) -> bytes:
    """An event that tells when it arrived, in seconds after BEGIN_S."""
    event = json.loads(event_line(observed, station, **more))
    event["received_at"] = json.loads(event_line(received))["observed_at"]
    return json.dumps(event).encode()


def from_lines(tmp_path: Path, *lines: bytes, fields: Fields = FIELDS):
    """A capture of a file with these lines; the capture's path and what was left out."""
    path, out = tmp_path / "events.ndjson", tmp_path / "file.capture"
    path.write_bytes(body_of(*lines))
    with out.open("wb") as file:
        _, skipped = capture_file(path, fields, 7, file.write)
    return out, skipped


def requests_of(path: Path) -> list[tuple[int, list[int], list[str], list[str]]]:
    """Arrival clock, event times, sources and faults of every request, in seconds after BEGIN_S."""
    found, names = [], []
    with Capture(path) as capture:
        for block in capture.blocks():
            for record in block.records():
                if record.kind == Kind.SOURCES:
                    told = decode_small(Kind.SOURCES, record.body)
                    assert isinstance(told, SourcesRecord)
                    names += told.names
                elif record.kind == Kind.ARRIVAL:
                    body = block.arrival_body(record.request, record.lsn)
                    found.append(
                        (
                            body.arrived_ns // SECOND_NS - BEGIN_S,
                            [time // SECOND_NS - BEGIN_S for time in body.times.tolist()],
                            [names[number] for number in body.sources.tolist()],
                            [row.reason for row in body.faults],
                        )
                    )
    return found


def test_lines_of_one_instant_are_one_request(tmp_path: Path) -> None:
    path, skipped = from_lines(tmp_path, line(1, 0), line(2, 3, "gw-2"), line(2, 1), line(2, 2), line(5, 4))
    assert requests_of(path) == [
        (1, [0], ["gw-1"], []),
        (2, [3, 1, 2], ["gw-2", "gw-1", "gw-1"], []),
        (5, [4], ["gw-1"], []),
    ]
    assert skipped.count == 0
    with Capture(path) as capture:
        assert capture.meta.origin == "file" and not capture.meta.decided and capture.events == 5
        with pytest.raises(CaptureError, match="name a configuration with --config"):
            Folding(capture)


def test_what_is_no_event_is_a_fault_of_its_request_and_what_tells_no_arrival_is_left_out(tmp_path: Path) -> None:
    bad = json.dumps({"received_at": "2023-11-14T22:13:22Z", "observed_at": "soon", "station": "gw-1"}).encode()
    path, skipped = from_lines(tmp_path, line(1, 0), bad, line(2, 2), b'{"observed_at":1}', b"{", line(3, 3))
    assert requests_of(path) == [
        (1, [0], ["gw-1"], []),
        (2, [2], ["gw-1"], ["time_invalid"]),
        (3, [3], ["gw-1"], []),
    ]
    assert skipped.count == 2 and skipped.first[0].startswith("line 4: time_missing")
    assert skipped.first[1].startswith("line 5: malformed")


def test_a_file_out_of_order_of_arrival_is_told_with_its_line(tmp_path: Path) -> None:
    with pytest.raises(CaptureError, match=r"line 3 arrived at .* sort the file"):
        from_lines(tmp_path, line(1, 0), line(5, 0), line(4, 0))
    with pytest.raises(CaptureError, match="no line tells when it arrived"):
        from_lines(tmp_path, b"{}", b"[]")


def test_a_request_is_one_however_the_file_is_read(tmp_path: Path) -> None:
    filler = "x" * 100_000
    lines = [line(index // 30, index, f"gw-{index % 7}", note=filler) for index in range(3 * PIECE_BYTES // 100_000)]
    path, _ = from_lines(tmp_path, *lines)
    found = requests_of(path)
    assert [request[0] for request in found] == sorted({index // 30 for index in range(len(lines))})
    assert [len(request[1]) for request in found[:-1]] == [30] * (len(found) - 1)
    assert [name for request in found for name in request[2]] == [f"gw-{index % 7}" for index in range(len(lines))]


def test_units_and_ids(tmp_path: Path) -> None:
    fields = Fields(FEED, "/came", "ms", "/at", "s", None, "/n")
    path, _ = from_lines(
        tmp_path, b'{"came":1700000001500,"at":1700000000,"n":1}', b'{"came":1700000002500,"at":1700000001,"n":1}',
        fields=fields,
    )  # fmt: skip
    assert [request[:3] for request in requests_of(path)] == [(1, [0], [FEED]), (2, [1], [FEED])]
    with Capture(path) as capture:
        (block,) = capture.blocks()
        bodies = [block.arrival_body(r.request, r.lsn) for r in block.records() if r.kind == Kind.ARRIVAL]
        assert all(body.identities is not None for body in bodies)
        assert bodies[0].identities.tolist() == bodies[1].identities.tolist()


def test_parquet_gives_what_the_same_rows_as_ndjson_give(tmp_path: Path) -> None:
    """The columns may be text or timestamps; a timestamp of any unit and zone is the same instant."""
    rows = [(second, second - second % 4, f"gw-{second % 3}") for second in range(50)]
    received = [(BEGIN_S + each[0]) * 1_000_000 for each in rows]
    observed = [(BEGIN_S + each[1]) * SECOND_NS for each in rows]
    table = pyarrow.table(
        {
            "received_at": pyarrow.array(received, pyarrow.timestamp("us")),
            "observed_at": pyarrow.array(observed, pyarrow.timestamp("ns", "Europe/Berlin")),
            "station": [each[2] for each in rows],
            "level": [each[0] / 10 for each in rows],
        }
    )
    path, out = tmp_path / "events.parquet", tmp_path / "parquet.capture"
    parquet.write_table(table, path)
    with out.open("wb") as file:
        capture_file(path, FIELDS, 7, file.write)
    plain, _ = from_lines(tmp_path, *(line(*each) for each in rows))
    assert requests_of(out) == requests_of(plain)
    path.write_bytes(b"PAR1 and nothing behind it PAR1")
    with pytest.raises(CaptureError, match="cannot be read as Parquet"):
        capture_file(path, FIELDS, 7, lambda piece: None)
