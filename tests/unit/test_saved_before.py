"""Snapshots of earlier layouts are read, and release what they held in the same order."""

from __future__ import annotations

import msgspec
import pytest
from helpers_feed import Shell, saved_bytes
from helpers_strands import near_at_most
from strandline.core.settings import Settings

COLUMNS_BEFORE = 7 + 3 + 2  # of sources, arrivals and identities: they stand before the times and refs of strands


def shell_with_runs() -> Shell:
    """Twelve events in four open runs, some of equal times; none is released."""
    with near_at_most(0):
        shell = Shell(Settings("river-gauges", slack_ns=1_000), sinks={"store": ["ordered"]})
        for second, times in enumerate(([10, 20, 30], [5, 20, 25], [4, 5, 30], [3, 3, 10])):
            shell.events(times, 100 + second)
    return shell


def as_before(saved: bytes, *, fresh: bool) -> bytes:
    """The same in an older layout: with a strand of fresh rows behind the runs (here none), or with runs only."""
    size = int.from_bytes(saved[:8], "little")
    header, columns = msgspec.msgpack.decode(saved[8 : 8 + size]), saved[8 + size :]
    count, bound, _ = header.pop("near")
    assert (count, bound) == (0, None) and header["runs"] == 4
    behind = COLUMNS_BEFORE + 2 * header["runs"]
    assert header["lengths"][behind : behind + 4] == [0, 0, 0, 0]  # nothing near, nothing fresh beyond
    del header["lengths"][behind + 2 * fresh : behind + 4]
    if fresh:
        header["fresh_sorted"] = 0
    packed = msgspec.msgpack.encode(header)
    return len(packed).to_bytes(8, "little") + packed + columns


@pytest.mark.parametrize("fresh", [True, False])
@pytest.mark.parametrize("near", [0, 5, 1 << 17])
def test_a_snapshot_of_before_releases_the_same(fresh: bool, near: int) -> None:
    shell, plain = shell_with_runs(), shell_with_runs()
    old = as_before(saved_bytes(shell.feed), fresh=fresh)
    with near_at_most(near):
        shell.feed = shell.folded(old, shell.feed.next_lsn)
        for one in (shell, plain):
            one.events([2, 30, 5], 110)
            one.act("drain", now_ns=120)
    assert shell.out_times("ordered") == sorted([3, 3, 4, 5, 5, 10, 10, 20, 20, 25, 30, 30, 2, 30, 5])
    assert shell.out("ordered") == plain.out("ordered")
