"""Files that roll, whatever their format: what an error leaves behind, at whatever step and of whatever kind."""

from __future__ import annotations

import errno
from collections.abc import Callable
from pathlib import Path

import pytest
from helpers_sinks import HeldLines, VirtualTime
from strandline.errors import SinkRetry
from strandline.sinks import ndjson, rolling
from strandline.sinks.ndjson import NdjsonSink
from strandline.sinks.repairs import Repair, RepairRow

REPAIR = Repair(7, 0, (RepairRow(1, 5, "weir", 9, 4, b"{}"),))


async def opened(place: Path) -> tuple[NdjsonSink, HeldLines]:
    sink = NdjsonSink(place, "river-gauges", VirtualTime())
    await sink.open()
    return sink, HeldLines()


def fetching(into: Path, error: Exception) -> Callable[[Path], None]:
    """A sync of the folder that fails once a complete file is there, which has been fetched by then."""

    def sync(folder: Path) -> None:
        for path in folder.glob("*.ndjson"):
            path.rename(into)
            raise error

    return sync


@pytest.mark.parametrize("error", [OSError(errno.EIO, "Input/output error"), RuntimeError("something unforeseen")])
async def test_a_file_that_was_fetched_before_its_folder_was_synced(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, error: Exception
) -> None:
    """Whatever went wrong behind the rename: nothing more is written into that file, and no other begins within it."""
    sink, lines = await opened(tmp_path / "files")
    batches = lines.batches("ordered", [1, 2, 3])
    fetched = tmp_path / "fetched"

    await sink.take(batches[:2], lines)
    with monkeypatch.context() as patch, pytest.raises((SinkRetry, RuntimeError)) as caught:
        patch.setattr(rolling, "sync_directory", fetching(fetched, error))
        await sink.flush(lines)
    assert caught.value is error or caught.value.__cause__ is error
    assert error.__cause__ is None
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


@pytest.mark.parametrize("dies", [False, True])
async def test_a_shorter_file_does_not_forget_where_a_fetched_one_ended(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, dies: bool
) -> None:
    """1 to 5 was fetched and never told; 1 to 3 comes again; then a file must still end behind 5, in any process."""
    place = tmp_path / "files"
    sink, lines = await opened(place)
    batches = lines.batches("ordered", range(1, 9))
    await sink.take(batches[:5], lines)
    with monkeypatch.context() as patch, pytest.raises(SinkRetry):
        patch.setattr(rolling, "sync_directory", fetching(tmp_path / "fetched", OSError(errno.EIO, "")))
        await sink.flush(lines)
    await sink.take(batches[:3], lines)
    assert await sink.flush(lines) == {"ordered": 3}
    if dies:
        await sink.close()
        sink, _ = await opened(place)
    await sink.take(batches, lines)
    assert await sink.flush(lines) == {"ordered": 8}
    await sink.close()
    assert held(place) == [(1, 3), (4, 5), (6, 8)]


def held(place: Path) -> list[tuple[int, int]]:
    """First and last batch of each complete file of the ordered lane."""
    names = sorted(path.stem for path in place.glob("river-gauges-ordered-*.ndjson"))
    return [(int(name.split("-")[-2]), int(name.split("-")[-1])) for name in names]


async def test_a_note_of_before_is_still_read(tmp_path: Path) -> None:
    (tmp_path / ".river-gauges-ordered.completing").write_text("1 2\n")
    sink, lines = await opened(tmp_path)
    await sink.take(lines.batches("ordered", [1, 2, 3]), lines)
    await sink.flush(lines)
    await sink.close()
    assert held(tmp_path) == [(1, 2), (3, 3)]


async def test_a_note_that_cannot_be_read_is_not_taken_for_none(tmp_path: Path) -> None:
    note = tmp_path / ".river-gauges-ordered.completing"
    note.mkdir()
    with pytest.raises(SinkRetry):
        await opened(tmp_path)
    note.rmdir()
    note.write_text("torn")
    sink, _ = await opened(tmp_path)
    await sink.close()


async def test_a_file_counts_as_reached_only_once_its_folder_is_synced(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Who died between the rename and the sync has left a name that a power failure still takes away."""
    sink, lines = await opened(tmp_path)
    await sink.take(lines.batches("ordered", [1]), lines)
    await sink.flush(lines)
    await sink.close()
    again = NdjsonSink(tmp_path, "river-gauges", VirtualTime())
    with monkeypatch.context() as patch, pytest.raises(SinkRetry):
        patch.setattr(rolling, "sync_directory", fetching(tmp_path / "kept", OSError(errno.EIO, "")))
        await again.open()
    (tmp_path / "kept").rename(tmp_path / f"river-gauges-ordered-{1:020}-{1:020}.ndjson")
    assert await again.open() == {"ordered": 1}
    await again.close()


async def test_a_repair_counts_only_once_its_folder_is_synced(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    sink, _ = await opened(tmp_path)
    with monkeypatch.context() as patch:
        patch.setattr(rolling, "sync_directory", fails)
        for _ in range(2):  # the second one finds the file, but nobody knows whether it stays
            with pytest.raises(SinkRetry, match="see whether its disk is failing"):
                await sink.repair(REPAIR)
    await sink.repair(REPAIR)
    await sink.close()
    (path,) = tmp_path.glob("*.ndjson")
    assert path.name == f"river-gauges-repair-{7:020}-{7:020}.ndjson"


async def test_what_a_failure_left_beside_is_removed_at_the_start(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """The unfinished file of a repair, and that of a note; another feed's are left alone."""
    sink, _ = await opened(tmp_path)
    with monkeypatch.context() as patch:
        patch.setattr(rolling, "sync_data", fails)
        with pytest.raises(SinkRetry):
            await sink.repair(REPAIR)
    await sink.close()
    other = tmp_path / f"river-gauges-2-repair-{7:020}-{7:020}.ndjson.part"
    note = tmp_path / ".river-gauges-ordered.completing.part"
    for path in (other, note):
        path.write_bytes(b"half")
    assert len(list(tmp_path.iterdir())) == 3
    sink, _ = await opened(tmp_path)
    assert list(tmp_path.iterdir()) == [other]
    await sink.close()


async def test_a_format_that_cannot_give_up_leaves_nothing_either(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    sink, lines = await opened(tmp_path)
    await sink.take(lines.batches("ordered", [1]), lines)
    (part,) = sink._parts.values()
    with monkeypatch.context() as patch, pytest.raises(OSError):
        patch.setattr(type(part.contents), "abandon", fails)
        await sink.close()
    assert not list(tmp_path.iterdir())


async def test_a_batch_that_cannot_be_read_leaves_those_before_it(tmp_path: Path) -> None:
    sink, lines = await opened(tmp_path)
    batches = lines.batches("ordered", [1, 2, 3])
    lines.fail_at = 3
    with pytest.raises(RuntimeError, match="batch 3 cannot be read"):
        await sink.take(batches, lines)
    assert await sink.flush(lines) == {"ordered": 2}
    await sink.close()
    assert held(tmp_path) == [(1, 2)]


def fails(*_given: object) -> None:
    raise OSError(errno.EIO, "Input/output error")
