"""Retained segments: how long they stay, that they go first where room is short, and what a start makes of them."""

from __future__ import annotations

from pathlib import Path

from helpers_service import FEED, configuration, event_line, eventually, running
from strandline.retention import Retention

SECOND_NS = 1_000_000_000


class Hands:
    """A clock that is moved by hand."""

    def __init__(self) -> None:
        self.ns = 1_700_000_000 * SECOND_NS

    def now_ns(self) -> int:
        return self.ns


def test_a_segment_goes_once_it_was_free_for_long_enough_and_never_before_an_older_one() -> None:
    retention = Retention(10)
    retention.note([100, 200, 300], 200, lambda end: {100: 5, 200: 2}[end])
    assert retention.ends == [100, 200]
    assert [retention.through(now) for now in (14, 15)] == [0, 200]  # 200 is free for longer, but 100 goes first
    retention.note([200, 300], 300, lambda end: 20)
    assert [retention.through(now) for now in (11, 12, 29, 30)] == [0, 200, 200, 300]


def test_without_retain_everything_free_goes_at_once() -> None:
    retention = Retention(0)
    retention.note([100, 200, 300], 250, lambda end: 7)
    assert retention.through(7) == 200
    retention.note([300], 250, lambda end: 7)
    assert retention.ends == [] and retention.through(7) == 0


def journal_keys(at_most: str, retain: str) -> str:
    """Small segments, so that a few requests fill some."""
    return (
        f'journal = {{ segment_bytes = "64KiB", at_most = "{at_most}", retain = "{retain}" }}\n'
        'body_bytes_at_most = "64KiB"\ndecoded_bytes_at_most = "64KiB"\nevent_bytes_at_most = "64KiB"'
    )


def segments(folder: Path) -> list[str]:
    """Names of the feed's segments."""
    return sorted(path.name for path in (folder / "data" / "feeds" / FEED).glob("journal-*.seg"))


def snapshots(folder: Path) -> int:
    """How many snapshots there are."""
    return len(list((folder / "data" / "feeds" / FEED).glob("snapshot-*.snap")))


async def fill(service, first: int, requests: int) -> None:
    """Requests of some 20 kB; a tick of the service, and the housekeeping that it begins, after each third."""
    for second in range(first, first + requests):
        answer = await service.post("events", event_line(second, note="x" * 20_000) + b"\n")
        assert answer.status == 200, answer.content
        if second % 3 == 2:
            service.runtime.tick()
            await eventually(lambda: service.runtime._housekeeping is None or service.runtime._housekeeping.done())


async def test_what_is_retained_stays_until_its_time_is_over(tmp_path: Path) -> None:
    clock = Hands()
    text = configuration(tmp_path, more=journal_keys("64MiB", "1h"))
    async with running(text, clock=clock) as service:
        await fill(service, 0, 30)
        assert len(service.runtime._house._retention.ends) > 3
        assert service.runtime.journal.first_lsn == 0 and snapshots(tmp_path) > 2
        free = service.runtime._house._retention.ends
        clock.ns += 3600 * SECOND_NS
        await eventually(lambda: service.runtime.journal.first_lsn >= free[-1], "they go after an hour")
        service.runtime.journal.check()


async def test_retained_segments_go_first_where_room_is_short(tmp_path: Path) -> None:
    text = configuration(tmp_path, more=journal_keys("512KiB", "24h"))
    async with running(text, clock=Hands()) as service:
        for first in range(0, 90, 3):
            await fill(service, first, 3)
            assert service.runtime.journal.bytes_used <= 512 << 10
        assert service.runtime.journal.first_lsn > 0
        assert len(segments(tmp_path)) >= 4, "what there is room for stays"
        assert service.runtime.feed.refusals == {}


async def test_a_start_counts_from_when_the_next_segment_was_begun(tmp_path: Path) -> None:
    clock = Hands()
    text = configuration(tmp_path, more=journal_keys("64MiB", "1h"))
    async with running(text, clock=clock) as service:
        await fill(service, 0, 18)
        assert len(service.runtime._house._retention.ends) > 1
    clock.ns += 3599 * SECOND_NS
    async with running(text, clock=clock) as service:
        kept = service.runtime._house._retention.ends
        assert service.runtime.journal.first_lsn == 0 and len(kept) > 1
        clock.ns += SECOND_NS
        await eventually(lambda: service.runtime.journal.first_lsn >= kept[-1], "an hour after they were filled")
