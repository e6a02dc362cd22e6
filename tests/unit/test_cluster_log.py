"""A partition's replicated log against a real server: owners that follow one another, answers that were lost, room."""

from __future__ import annotations

import asyncio
import signal
from collections.abc import AsyncIterator, Sequence
from pathlib import Path

import pytest
from helpers_brokers import Nats
from helpers_partition import linked, until
from nats.js import api
from strandline.cluster import log as log_module
from strandline.cluster.entries import FORMAT, Entry, Group, Saved, Whole, encode, placed
from strandline.cluster.link import Away, Link
from strandline.cluster.log import SNAPSHOT_HEADER, Contents, PartitionLog, Place, TakenOver, make_stream
from strandline.core.records import VERSION, Kind, frame_bytes
from strandline.errors import StrandlineError

MIB = 1 << 20
PLACE, OTHER = (Place.of("river", "gauges", number) for number in range(2))


@pytest.fixture
async def server(tmp_path: Path) -> AsyncIterator[Nats]:
    """A broker with the stream of logs."""
    with Nats(tmp_path) as found:
        async with linked(found, "maker") as (link,):
            await make_stream(link, "river", 1, 64 * MIB)
        yield found


def record(number: int, size: int = 16) -> Whole:
    """A record that is told by its number."""
    return Whole(Kind.ACT, VERSION, number.to_bytes(8, "little") + bytes(size - 8))


class Owner:
    """One that appends records and knows where its journal ends."""

    def __init__(self, link: Link, fence: int, place: Place = PLACE) -> None:
        self.log, self.lsn, self.contents = PartitionLog(link, place, fence), 0, Contents()

    async def begin(self) -> Owner:
        """Take the log over."""
        self.contents = await self.log.take_over()
        self.lsn = self.contents.end_lsn
        return self

    async def put(self, entries: Sequence[Entry]) -> None:
        """Append records."""
        await self.log.append(self.lsn, entries)
        self.lsn += sum(frame_bytes(entry.body_bytes) for entry in entries if entry.body_bytes is not None)

    async def save(self, body: bytes, lsn: int, needed_lsn: int) -> None:
        """A snapshot, its entry, and the shortening of the log: as `commit` does it."""
        saved = await self.log.store_snapshot(lsn, [body], needed_lsn)
        await self.put([saved])
        await self.log.let_go(saved, self.log.last)

    @property
    def found(self) -> list[int]:
        """The numbers of the records that it found."""
        acts = [each.entry for each in placed(self.contents.groups) if isinstance(each.entry, Whole)]
        return [int.from_bytes(entry.body[:8], "little") for entry in acts if entry.kind == Kind.ACT]


async def test_an_empty_log_is_taken_over_and_holds_the_owners_first_group(server: Nats) -> None:
    async with linked(server, "a") as (link,):
        owner = await Owner(link, 7).begin()
    (group,) = owner.contents.groups
    assert (group.fence, group.lsn, owner.contents.saved, owner.contents.next_message) == (7, 0, None, 1)
    assert owner.lsn == group.end_lsn > 0


async def test_a_filled_log_is_found_whole_and_the_former_owner_can_write_no_more(server: Nats) -> None:
    async with linked(server, "a", "b") as (link_a, link_b):
        former = await Owner(link_a, 1).begin()
        for number in range(5):
            await former.put([record(number), record(number + 100)])
        next_owner = await Owner(link_b, 2).begin()
        assert next_owner.found == [0, 100, 1, 101, 2, 102, 3, 103, 4, 104]
        assert next_owner.contents.groups[-1].lsn == former.lsn
        for _ in range(2):  # from then on, not once
            with pytest.raises(TakenOver, match="taken over by another instance"):
                await former.put([record(9)])
        with pytest.raises(TakenOver):
            await former.save(b"old", former.lsn, 0)
        await next_owner.put([record(5)])
        third = await Owner(link_a, 3).begin()
    assert third.found == [*next_owner.found, 5]


async def test_an_append_whose_answer_was_lost_is_found_and_stored_once(server: Nats) -> None:
    async with linked(server, "a", "b") as (link, other):
        owner = await Owner(link, 1).begin()
        lost = encode(Group(FORMAT, 1, owner.lsn, [record(1)]))
        await (await other.jetstream()).publish(PLACE.groups, lost, stream=PLACE.stream)
        await owner.put([record(1)])
        await owner.put([record(2)])
        assert (await Owner(other, 2).begin()).found == [1, 2]


async def test_of_two_that_race_one_wins_and_nothing_stands_there_twice(server: Nats) -> None:
    async with linked(server, "a", "b") as (link_a, link_b):
        before = await Owner(link_a, 1).begin()
        await before.put([record(number) for number in range(20)])
        racing = [Owner(link, fence) for fence, link in enumerate((link_a, link_b) * 2, 2)]

        async def race(owner: Owner) -> int:
            try:
                await owner.begin()
                for number in range(50):
                    await owner.put([record(owner.log._fence * 1000 + number)])
            except (TakenOver, Away):
                return 0
            return owner.log._fence

        won = [fence for fence in await asyncio.gather(*map(race, racing)) if fence]
        found = (await Owner(link_a, 99).begin()).found
    assert won and found[:20] == list(range(20))
    assert len(set(found)) == len(found)
    for fence in won:
        assert [number for number in found if number // 1000 == fence] == [fence * 1000 + n for n in range(50)]


async def test_snapshots_of_several_parts_with_a_zombies_parts_among_them(
    server: Nats, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(log_module, "LOG_MESSAGE_BYTES", 1000)
    body, old = bytes(range(256)) * 20, b"zombie" * 900
    async with linked(server, "a", "b") as (link_a, link_b):
        zombie = await Owner(link_a, 1).begin()
        owner = await Owner(link_b, 2).begin()
        lsn = owner.lsn
        # Both store at one time, so that their parts lie among each other.
        saved, stray = await asyncio.gather(
            owner.log.store_snapshot(lsn, [body[:100], body[100:]], lsn), zombie.log.store_snapshot(lsn, [old], lsn)
        )
        assert min(saved.parts, stray.parts) > 5
        with pytest.raises(TakenOver):
            await zombie.put([stray])
        await owner.put([saved])
        contents = (await Owner(link_a, 3).begin()).contents
    assert (contents.saved, contents.snapshot) == (saved, body)


async def test_parts_of_an_earlier_try_that_arrive_late_are_told_apart(
    server: Nats, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(log_module, "LOG_MESSAGE_BYTES", 100)
    body = bytes(range(250))
    async with linked(server, "a", "b") as (link, other):
        owner = await Owner(link, 1).begin()
        stream = await other.jetstream()
        names = [f"1/{owner.lsn}/{told}" for told in ("1 0", "0 1", "1 1", "0 2", "1 2")]  # try and part
        parts = [body[:100], b"late", body[100:200], b"later", body[200:]]
        answers = [
            await stream.publish(PLACE.snapshots, part, headers={SNAPSHOT_HEADER: name})
            for name, part in zip(names, parts, strict=True)
        ]
        await owner.put([Saved(owner.lsn, answers[0].seq, 3, owner.lsn)])
        assert (await Owner(other, 2).begin()).contents.snapshot == body


async def test_a_snapshot_that_was_cut_off_is_named_by_nobody(server: Nats, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(log_module, "LOG_MESSAGE_BYTES", 1000)
    async with linked(server, "a", "b") as (link_a, link_b):
        zombie = await Owner(link_a, 1).begin()
        await zombie.put([record(1)])
        storing = asyncio.ensure_future(zombie.log.store_snapshot(zombie.lsn, [bytes(500_000)], zombie.lsn))
        stream = await link_b.jetstream()

        async def begun() -> bool:
            return await count(stream, PLACE.snapshots) > 3

        await until(begun, "parts of a snapshot")
        zombie.log.give_up()
        storing.cancel()
        owner = await Owner(link_b, 2).begin()
        assert (owner.contents.saved, owner.found) == (None, [1])
        await owner.save(b"whole", owner.lsn, owner.lsn)
        third = await Owner(link_a, 3).begin()
        assert (third.contents.snapshot, third.found) == (b"whole", [])
        with pytest.raises((asyncio.CancelledError, Away)):
            await storing


async def count(stream: object, subject: str) -> int:
    """How many messages of a subject there are."""
    info = await stream.stream_info(PLACE.stream, subjects_filter=subject)  # type: ignore[attr-defined]
    return int((info.state.subjects or {}).get(subject, 0))


@pytest.mark.parametrize("needed", [0, 1, 4, 9, None])
async def test_what_is_let_go_is_what_the_next_owner_does_not_need(server: Nats, needed: int | None) -> None:
    """`needed`: the record from which on they are still needed; None: nothing before the snapshot is."""
    async with linked(server, "a", "b") as (link_a, link_b):
        owner = await Owner(link_a, 1).begin()
        begins = []
        for number in range(10):
            begins.append(owner.lsn)
            await owner.put([record(number)])
        lsn = owner.lsn
        await owner.put([record(10)])
        # A place inside a frame, as that of a line is: its whole record is needed.
        await owner.save(b"state", lsn, lsn if needed is None else begins[needed] + 5)
        stream = await link_b.jetstream()
        first = 10 if needed is None else needed
        assert await count(stream, PLACE.groups) == 11 - first + 1  # and the entry of the snapshot
        next_owner = await Owner(link_b, 2).begin()
    assert next_owner.found == list(range(first, 11))
    assert next_owner.contents.snapshot == b"state"


async def test_with_nothing_needed_the_snapshots_entry_stays_as_the_last_message(server: Nats) -> None:
    async with linked(server, "a", "b") as (link_a, link_b):
        owner = await Owner(link_a, 1).begin()
        await owner.put([record(1)])
        await owner.save(b"first", owner.lsn, owner.lsn)
        await owner.save(b"second", owner.lsn, owner.lsn)
        stream = await link_b.jetstream()
        assert (await count(stream, PLACE.groups), await count(stream, PLACE.snapshots)) == (1, 1)
        await owner.put([record(2)])  # and the former owner goes on behind it
        next_owner = await Owner(link_b, 2).begin()
    assert (next_owner.found, next_owner.contents.snapshot) == ([2], b"second")
    assert next_owner.lsn == next_owner.contents.groups[-1].end_lsn > owner.lsn


async def test_a_group_that_is_stored_while_the_log_is_shortened_does_not_cost_the_snapshots_entry(
    server: Nats,
) -> None:
    async with linked(server, "a", "b") as (link_a, link_b):
        owner = await Owner(link_a, 1).begin()
        saved = await owner.log.store_snapshot(owner.lsn, [b"state"], owner.lsn)
        await owner.put([saved])
        named = owner.log.last
        await owner.put([record(1)])
        await owner.log.let_go(saved, named)
        next_owner = await Owner(link_b, 2).begin()
    assert (next_owner.found, next_owner.contents.snapshot) == ([1], b"state")


async def test_a_log_that_is_shortened_while_it_is_read_is_read_again(
    server: Nats, monkeypatch: pytest.MonkeyPatch
) -> None:
    """The former owner's snapshot counts, its deletions come while the next one reads: first the parts are gone."""
    async with linked(server, "a", "b") as (link_a, link_b):
        former = await Owner(link_a, 1).begin()
        for number in range(300):
            await former.put([record(number)])
        await former.save(b"first", former.lsn, 0)
        last = await former.log.store_snapshot(former.lsn, [b"second"], former.lsn)
        await former.put([last])
        named = former.log.last
        next_owner = Owner(link_b, 2)
        await asyncio.gather(next_owner.begin(), former.log.let_go(last, named))
    assert next_owner.contents.snapshot == b"second"
    assert next_owner.contents.groups[0].lsn <= last.lsn


async def test_a_snapshot_whose_parts_are_gone_is_told(server: Nats, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(log_module, "TRIES", 2)
    async with linked(server, "a", "b") as (link_a, link_b):
        owner = await Owner(link_a, 1).begin()
        await owner.put([record(1)])
        await owner.save(b"state", owner.lsn, owner.lsn)
        await (await link_b.jetstream()).purge_stream(PLACE.stream, subject=PLACE.snapshots)
        with pytest.raises(StrandlineError, match="only 0 of its 1 parts: messages of stream river-log are missing"):
            await Owner(link_b, 2).begin()


async def test_a_missing_group_is_told(server: Nats, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(log_module, "TRIES", 2)
    async with linked(server, "a", "b") as (link_a, link_b):
        owner = await Owner(link_a, 1).begin()
        for number in range(5):
            await owner.put([record(number)])
        await (await link_b.jetstream()).delete_msg(PLACE.stream, owner.log.last - 2)
        with pytest.raises(StrandlineError, match="messages of stream river-log are missing"):
            await Owner(link_b, 2).begin()


async def waiting_for_room(owner: Owner, stored: int) -> asyncio.Future[None]:
    """An append that waits, behind so many of 300 kB that the stream had room for."""
    for number in range(stored):
        await owner.put([record(number, 300_000)])
    waiting = asyncio.ensure_future(owner.put([record(stored, 300_000)]))
    await until(lambda: "its room is log_at_most" in owner.log.words, "words about room")
    assert not waiting.done()
    return waiting


async def test_a_full_stream_says_so_and_goes_on_once_there_is_room(server: Nats) -> None:
    async with linked(server, "a", "b") as (link_a, link_b):
        await make_stream(link_b, "river", 1, MIB)
        owner = await Owner(link_a, 1).begin()
        waiting = await waiting_for_room(owner, 3)
        await make_stream(link_b, "river", 1, 2 * MIB)  # the limit was changed
        await waiting
        assert owner.log.words == ""
        assert (await Owner(link_b, 2).begin()).found == [0, 1, 2, 3]


async def test_a_full_stream_gets_room_by_a_snapshot_of_another_partition(server: Nats) -> None:
    async with linked(server, "a", "b") as (link_a, link_b):
        await make_stream(link_b, "river", 1, MIB)
        owner, other = await Owner(link_a, 1).begin(), await Owner(link_b, 1, OTHER).begin()
        await other.put([record(0, 500_000)])
        saved = await other.log.store_snapshot(other.lsn, [b"small"], other.lsn)
        await other.put([saved])
        waiting = await waiting_for_room(owner, 1)
        await other.log.let_go(saved, other.log.last)
        await waiting
        assert owner.log.words == ""
        assert (await Owner(link_b, 2).begin()).found == [0, 1]


async def test_a_message_that_is_no_group_says_where_and_what_to_do(server: Nats) -> None:
    async with linked(server, "a", "b") as (link_a, link_b):
        owner = await Owner(link_a, 1).begin()
        stream = await link_b.jetstream()
        answer = await stream.publish(PLACE.groups, b"hello", stream=PLACE.stream)
        with pytest.raises(TakenOver):
            await owner.put([record(1)])
        with pytest.raises(StrandlineError, match=f"message {answer.seq} of stream river-log.*remove it"):
            await Owner(link_b, 2).begin()
        await stream.delete_msg(PLACE.stream, answer.seq)
        assert (await Owner(link_b, 3).begin()).found == []


async def test_a_newer_programs_log_is_left_to_it(server: Nats) -> None:
    async with linked(server, "a", "b") as (link_a, link_b):
        owner = await Owner(link_a, 1).begin()
        newer = encode(Group(FORMAT + 1, 1, owner.lsn, [record(1)]))
        await (await link_b.jetstream()).publish(PLACE.groups, newer, stream=PLACE.stream)
        last = await count(await link_b.jetstream(), PLACE.groups)
        with pytest.raises(StrandlineError, match="newer than this program"):
            await Owner(link_b, 2).begin()
        assert await count(await link_b.jetstream(), PLACE.groups) == last  # its owner can go on


async def test_the_streams_limits_follow_the_configuration(server: Nats) -> None:
    async with linked(server, "a") as (link,):
        await make_stream(link, "river", 1, 5 * MIB)
        config = (await (await link.jetstream()).stream_info(PLACE.stream)).config
        assert (config.max_bytes, config.num_replicas, config.discard) == (5 * MIB, 1, api.DiscardPolicy.NEW)
        with pytest.raises(Away, match="river-log could not be made with 3 replicas"):
            await make_stream(link, "river", 3, 5 * MIB)


async def test_a_stream_that_would_lose_parts_of_a_log_is_not_used(server: Nats) -> None:
    async with linked(server, "a") as (link,):
        stream = await link.jetstream()
        await stream.add_stream(api.StreamConfig(name="lake-log", subjects=["lake-log.>"], max_age=60))
        with pytest.raises(StrandlineError, match="lake-log is there already but"):
            await make_stream(link, "lake", 1, MIB)


async def test_a_broker_that_is_killed_and_started_again_has_everything_once(server: Nats) -> None:
    async with linked(server, "a", "b") as (link_a, link_b):
        owner = await Owner(link_a, 1).begin()
        stored = 0

        async def append() -> None:
            nonlocal stored
            for number in range(400):
                await owner.put([record(number)])
                stored = number + 1

        appending = asyncio.ensure_future(append())
        for level in (60, 180, 300):
            await until(lambda level=level: stored >= level, f"{level} groups")
            server.end(signal.SIGKILL)
            server.start()
        await appending
        assert (await Owner(link_b, 2).begin()).found == list(range(400))
