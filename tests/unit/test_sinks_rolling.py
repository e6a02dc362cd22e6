"""Files that roll, whatever their format: what an error leaves behind, at whatever step and of whatever kind."""

from __future__ import annotations

import errno
from pathlib import Path

import pytest
from helpers_sinks import HeldLines, VirtualTime
from strandline.errors import SinkRetry
from strandline.sinks import ndjson, rolling
from strandline.sinks.ndjson import NdjsonSink


async def opened(place: Path) -> tuple[NdjsonSink, HeldLines]:
    sink = NdjsonSink(place, "river-gauges", VirtualTime())
    await sink.open()
    return sink, HeldLines()


@pytest.mark.parametrize("error", [OSError(errno.EIO, "Input/output error"), RuntimeError("something unforeseen")])
async def test_a_file_that_was_fetched_before_its_folder_was_synced(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, error: Exception
) -> None:
    """Whatever went wrong behind the rename: nothing more is written into that file, and no other begins within it."""
    sink, lines = await opened(tmp_path / "files")
    batches = lines.batches("ordered", [1, 2, 3])
    fetched = tmp_path / "fetched"

    def sync(folder: Path) -> None:
        (path,) = folder.glob("*.ndjson")
        path.rename(fetched)
        raise error

    await sink.take(batches[:2], lines)
    with monkeypatch.context() as patch, pytest.raises((SinkRetry, RuntimeError)):
        patch.setattr(rolling, "sync_directory", sync)
        await sink.flush(lines)
    await sink.take(batches, lines)
    assert await sink.flush(lines) == {"ordered": 3}
    await sink.close()
    first, second = sorted((tmp_path / "files").glob("*.ndjson"))
    assert fetched.read_bytes() == first.read_bytes()  # a repeat of what was fetched, under the same numbers
    assert first.name.endswith("1-00000000000000000002.ndjson")
    assert second.name.endswith("3-00000000000000000003.ndjson")


@pytest.mark.parametrize("step", ["write", "begin"])
async def test_an_error_that_nobody_foresaw_leaves_nothing_half_written(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, step: str
) -> None:
    sink, lines = await opened(tmp_path)
    batches = lines.batches("ordered", [1, 2])

    def fail(*_given: object) -> None:
        raise RuntimeError("something unforeseen")

    await sink.take(batches[:1], lines)
    if step == "begin":
        await sink.flush(lines)
    with monkeypatch.context() as patch, pytest.raises(RuntimeError):
        if step == "write":
            patch.setattr(ndjson, "write_all", fail)
        else:
            patch.setattr(NdjsonSink, "begin", fail)
        await sink.take(batches[1:], lines)
    assert not list(tmp_path.glob("*.ndjson.part"))
    await sink.take(batches, lines)
    assert await sink.flush(lines) == {"ordered": 2}
    await sink.close()
    written = b"".join(path.read_bytes() for path in sorted(tmp_path.glob("*.ndjson")))
    assert written.splitlines() == [row[0] for row in lines.expected(batches)]
