"""The simulated disk itself: what it keeps, what it may lose, and that it fails when told to."""

from __future__ import annotations

import errno
from pathlib import Path

import pytest
from helpers_journal import seeded
from simdisk import SECTOR_BYTES, SimDisk
from strandline.journal.disk import LocalDisk


def never(count: int) -> int:
    """The medium holds nothing but what was synced."""
    return 0


def always(count: int) -> int:
    """The medium holds everything that was written."""
    return count - 1


@pytest.mark.parametrize("make", [lambda path: SimDisk(), LocalDisk], ids=["simulated", "local"])
def test_both_disks_answer_alike(make, tmp_path: Path) -> None:
    disk = make(tmp_path)
    assert disk.names("feeds/a") == []
    file = disk.create("feeds/a/one", 1000)
    view = file.view()
    file.write(990, [b"0123", memoryview(b"456789")])
    file.sync()
    disk.sync_directory("feeds/a")
    assert bytes(view[988:]) == b"\0\x000123456789" and view.readonly and file.size == 1000
    with pytest.raises(ValueError, match="do not fit"):
        file.write(999, [b"ab"])
    with pytest.raises(FileExistsError):
        disk.create("feeds/a/one", 8)
    for act in (disk.open, disk.remove):
        with pytest.raises(FileNotFoundError):
            act("feeds/a/absent")
    disk.rename("feeds/a/one", "feeds/a/two")
    assert disk.names("feeds/a") == ["two"] and bytes(disk.open("feeds/a/two").view()) == bytes(view)
    disk.remove("feeds/a/two")
    assert disk.names("feeds/a") == [] and bytes(view[990:]) == b"0123456789"
    file.close()
    file.close()


def test_what_is_synced_survives_and_the_rest_may_not() -> None:
    disk = SimDisk()
    file = disk.create("a/one", 4 * SECTOR_BYTES)
    file.write(0, [b"x" * SECTOR_BYTES * 2])
    file.sync()
    disk.sync_directory("a")
    file.write(SECTOR_BYTES, [b"y" * SECTOR_BYTES * 2])
    assert bytes(disk.crash(never).content("a/one")) == b"x" * 1024 + bytes(1024)
    assert bytes(disk.crash(always).content("a/one")) == b"x" * 512 + b"y" * 1024 + bytes(512)
    seen = {bytes(disk.crash(seeded(seed)).content("a/one"))[::SECTOR_BYTES] for seed in range(40)}
    assert seen == {b"xx\0\0", b"xy\0\0", b"xxy\0", b"xyy\0"}


def test_a_sector_may_be_torn_when_asked_for() -> None:
    disk = SimDisk()
    file = disk.create("a/one", SECTOR_BYTES)
    disk.sync_directory("a")
    file.write(0, [b"x" * SECTOR_BYTES])
    torn = {bytes(disk.crash(seeded(seed), torn_sectors=True).content("a/one")).rstrip(b"\0") for seed in range(40)}
    assert len(torn) > 3 and all(set(content) <= set(b"x\0") for content in torn)


def test_a_name_is_durable_once_its_directory_is_synced() -> None:
    disk = SimDisk()
    disk.create("a/one", 8)
    assert list(disk.crash(never).paths()) == [] and list(disk.crash(always).paths()) == ["a/one"]
    disk.sync_directory("a")
    disk.rename("a/one", "a/two")
    disk.create("a/three", 8)
    assert list(disk.crash(never).paths()) == ["a/one"]
    assert {tuple(disk.crash(seeded(seed)).names("a")) for seed in range(40)} == {
        ("one",), ("two",), ("three", "two")
    }  # fmt: skip
    assert ("one", "three") in {tuple(disk.crash(seeded(seed), any_order=True).names("a")) for seed in range(40)}


def test_a_failed_sync_loses_the_pages_for_good() -> None:
    disk = SimDisk()
    file = disk.create("a/one", 8)
    file.sync()
    disk.sync_directory("a")
    file.write(0, [b"lost"])
    with disk.failing(0) as faults, pytest.raises(OSError, match="simulated"):
        file.sync()
    assert faults.failed == "sync a/one"
    file.sync()
    assert bytes(file.view()) == b"lost\0\0\0\0" and bytes(disk.crash(always).content("a/one")) == bytes(8)


def test_a_failed_write_has_written_its_first_half() -> None:
    disk = SimDisk()
    file = disk.create("a/one", 8)
    with disk.failing(0, lambda: OSError(errno.ENOSPC, "full")), pytest.raises(OSError, match="full"):
        file.write(0, [b"1234", b"5678"])
    assert bytes(disk.content("a/one")) == b"1234\0\0\0\0"


def test_room_is_limited_and_comes_back() -> None:
    disk = SimDisk(capacity_bytes=100)
    disk.create("a/one", 60)
    with pytest.raises(OSError, match="No space") as full:
        disk.create("a/two", 41)
    assert full.value.errno == errno.ENOSPC and disk.names("a") == ["one"]
    disk.remove("a/one")
    disk.create("a/two", 100)


def test_a_restart_loses_nothing_that_was_written() -> None:
    disk = SimDisk()
    disk.create("a/one", 8).write(0, [b"kept"])
    after = disk.restarted()
    assert bytes(after.open("a/one").view()) == b"kept\0\0\0\0" and after.handles == 1
