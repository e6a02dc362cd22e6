"""LocalDisk on real files: what the port promises, short writes, many buffers, no room, the lock."""

from __future__ import annotations

import errno
import os
import resource
import subprocess
import sys
from collections.abc import Sequence
from pathlib import Path

import pytest
from strandline.errors import JournalError
from strandline.journal.disk import LocalDisk, reserve, write_all, write_zeros


def test_a_created_file_holds_zeros_and_its_room(tmp_path: Path) -> None:
    disk = LocalDisk(tmp_path)
    file = disk.create("feeds/gauges/a", 300_000)
    assert file.size == 300_000 and bytes(file.view()) == bytes(300_000)
    file.close()
    found = (tmp_path / "feeds/gauges/a").stat()
    assert found.st_size == 300_000 and found.st_blocks * 512 >= 300_000


def test_creating_over_an_existing_file_is_refused(tmp_path: Path) -> None:
    disk = LocalDisk(tmp_path)
    disk.create("a", 8).close()
    with pytest.raises(FileExistsError):
        disk.create("a", 8)


def test_a_view_shows_later_writes_and_outlives_the_handle_and_the_file(tmp_path: Path) -> None:
    disk = LocalDisk(tmp_path)
    file = disk.create("a", 8192)
    view = file.view()
    file.write(4090, [b"water", bytearray(b" "), memoryview(b"level")])
    file.sync()
    file.close()
    disk.remove("a")
    assert bytes(view[4090:4101]) == b"water level" and view.readonly


@pytest.mark.parametrize("count", [1, 1023, 1024, 1025, 5000])
def test_any_number_of_buffers_is_written(tmp_path: Path, count: int) -> None:
    file = LocalDisk(tmp_path).create("a", 40_000)
    buffers = [b"%d," % number for number in range(count)]
    buffers.insert(count // 2, b"")
    file.write(7, buffers)
    expected = b"".join(buffers)
    assert bytes(file.view()[7 : 7 + len(expected)]) == expected
    file.close()


@pytest.mark.parametrize("at_most", [1, 3, 7])
def test_short_writes_are_continued(tmp_path: Path, at_most: int) -> None:
    def short(descriptor: int, buffers: Sequence[bytes | memoryview], offset: int) -> int:
        """As a system may: some bytes of the first buffers only."""
        return os.pwritev(descriptor, [b"".join(buffers)[:at_most]], offset)

    path = tmp_path / "a"
    with path.open("wb") as file:
        write_all(file.fileno(), [memoryview(part) for part in (b"ab", b"cdefgh", b"ijk")], 3, short)
    assert path.read_bytes() == b"\0\0\0abcdefghijk"


def test_a_write_that_does_nothing_is_an_error(tmp_path: Path) -> None:
    with (tmp_path / "a").open("wb") as file, pytest.raises(OSError, match="wrote nothing"):
        write_all(file.fileno(), [memoryview(b"a")], 0, lambda *_: 0)


def test_a_write_beyond_the_end_is_refused_before_it_begins(tmp_path: Path) -> None:
    file = LocalDisk(tmp_path).create("a", 8)
    with pytest.raises(ValueError, match="do not fit"):
        file.write(4, [b"12", b"345"])
    with pytest.raises(ValueError, match="do not fit"):
        file.write(-1, [b"1"])
    assert bytes(file.view()) == bytes(8)
    file.close()
    file.close()


def test_no_room_is_told_by_create_and_leaves_nothing(tmp_path: Path) -> None:
    # A limit on the size of files stands for a full disk: the system refuses the reservation with EFBIG.
    script = (
        "import resource, signal, sys; signal.signal(signal.SIGXFSZ, signal.SIG_IGN);"
        "resource.setrlimit(resource.RLIMIT_FSIZE, (4096, 4096));"
        "from strandline.journal.disk import LocalDisk\n"
        "try: LocalDisk(sys.argv[1]).create('feeds/a', 8192)\n"
        "except OSError as error: print(error.errno)"
    )
    assert resource.getrlimit(resource.RLIMIT_FSIZE)[0] != 4096
    done = subprocess.run([sys.executable, "-c", script, tmp_path], capture_output=True, text=True, check=True)
    assert int(done.stdout) == errno.EFBIG and list((tmp_path / "feeds").iterdir()) == []


def test_a_file_system_that_cannot_reserve_gets_zeros(tmp_path: Path) -> None:
    def refuse(descriptor: int, offset: int, size: int) -> None:
        raise OSError(errno.EOPNOTSUPP, "not supported")

    path = tmp_path / "a"
    with path.open("wb") as file:
        reserve(file.fileno(), (1 << 20) + 5, refuse)
        reserve(file.fileno(), 0, refuse)
    assert path.stat().st_blocks * 512 >= 1 << 20 and path.read_bytes() == bytes((1 << 20) + 5)


def test_no_room_is_not_taken_for_a_refusal(tmp_path: Path) -> None:
    def full(descriptor: int, offset: int, size: int) -> None:
        raise OSError(errno.ENOSPC, "No space left on device")

    with (tmp_path / "a").open("wb") as file, pytest.raises(OSError, match="No space left"):
        reserve(file.fileno(), 8, full)
    assert (tmp_path / "a").stat().st_size == 0


def test_zeros_are_written_to_the_last_byte(tmp_path: Path) -> None:
    path = tmp_path / "a"
    with path.open("wb") as file:
        write_zeros(file.fileno(), (1 << 20) * 2 + 3)
    assert path.stat().st_size == (1 << 20) * 2 + 3


@pytest.mark.parametrize("path", ["", "/a", "a//b", "../a", "a/..", "./a", "a\0b", "a\\b", "a/"])
def test_paths_that_leave_the_root_are_refused(tmp_path: Path, path: str) -> None:
    disk = LocalDisk(tmp_path / "root")
    for act in (disk.names, disk.open, disk.remove, disk.sync_directory, lambda p: disk.create(p, 8)):
        with pytest.raises(ValueError, match="not a path below"):
            act(path)
    with pytest.raises(ValueError, match="not a path below"):
        disk.rename("a", path)


def test_names_are_sorted_and_an_absent_directory_is_empty(tmp_path: Path) -> None:
    disk = LocalDisk(tmp_path)
    for name in ("b", "a", "c"):
        disk.create(f"feeds/{name}", 8).close()
    assert disk.names("feeds") == ["a", "b", "c"] and disk.names("absent") == []
    disk.rename("feeds/c", "feeds/a")
    disk.remove("feeds/b")
    disk.sync_directory("feeds")
    assert disk.names("feeds") == ["a"]


def test_a_read_only_disk_writes_nothing(tmp_path: Path) -> None:
    LocalDisk(tmp_path).create("a", 8).close()
    disk = LocalDisk(tmp_path, read_only=True)
    file = disk.open("a")
    assert bytes(file.view()) == bytes(8)
    with pytest.raises(OSError, match="Bad file descriptor"):
        file.write(0, [b"1"])
    file.close()
    with pytest.raises(OSError, match="reading only"):
        disk.create("b", 8)


def test_one_process_at_a_time_has_the_lock(tmp_path: Path) -> None:
    # Two handles in one process lock each other out just as two processes do.
    first, second = LocalDisk(tmp_path / "data"), LocalDisk(tmp_path / "data")
    first.lock("lock")
    with pytest.raises(JournalError, match="another process"):
        second.lock("lock")
    first.close()
    second.lock("lock")
    second.close()
