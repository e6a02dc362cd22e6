"""What the disk is told to begin with: which pieces, which answers are errors, and that the bytes are the same."""

from __future__ import annotations

import ctypes
import errno
from pathlib import Path

import pytest
from strandline.journal.disk import LocalDisk
from strandline.writeback import BEGUN_FROM_BYTES, begin_writing

PIECE = BEGUN_FROM_BYTES


class Kernel:
    """Stands in for the call: notes what is asked, and answers with an error number, 0 for none."""

    def __init__(self, reason: int = 0) -> None:
        self.asked: list[tuple[int, int, int, int]] = []
        self._reason = reason

    def __call__(self, descriptor: int, offset: int, size: int, flags: int) -> int:
        self.asked.append((descriptor, offset, size, flags))
        ctypes.set_errno(self._reason)
        return -1 if self._reason else 0


def test_only_long_pieces_are_begun_and_nothing_is_waited_for() -> None:
    kernel = Kernel()
    begin_writing(7, 4096, PIECE - 1, kernel)
    assert kernel.asked == []
    begin_writing(7, 4096, PIECE, kernel)
    assert kernel.asked == [(7, 4096, PIECE, 2)]  # SYNC_FILE_RANGE_WRITE alone: sync_file_range(2), linux/fs.h
    begin_writing(7, 0, PIECE, None)  # a system without the call


@pytest.mark.parametrize(
    "reason", [errno.ENOSYS, errno.EOPNOTSUPP, errno.EINVAL, errno.ESPIPE, errno.EPERM, errno.EINTR]
)
def test_a_system_that_cannot_is_left_to_the_sync(reason: int) -> None:
    kernel = Kernel(reason)
    begin_writing(7, 0, PIECE, kernel)
    assert len(kernel.asked) == 1


@pytest.mark.parametrize("reason", [errno.EIO, errno.ENOSPC, errno.EDQUOT, errno.ENOMEM, errno.EBADF])
def test_a_disk_that_says_it_failed_is_believed(reason: int) -> None:
    with pytest.raises(OSError) as caught:
        begin_writing(7, 0, PIECE, Kernel(reason))
    assert caught.value.errno == reason


def test_what_was_begun_is_in_the_file(tmp_path: Path) -> None:
    disk, size = LocalDisk(tmp_path), 3 * PIECE + 100
    file = disk.create("a", size)
    payload = bytes(range(256)) * (size // 256 + 1)
    for first in range(0, size, PIECE + 33):
        file.write(first, [payload[first : min(size, first + PIECE + 33)]])
    file.sync()
    file.close()
    assert (tmp_path / "a").read_bytes() == payload[:size]
