"""Members of a cluster on a real server: they share out the partitions, take over from who is gone, let go in time."""

from __future__ import annotations

import asyncio
import time
from collections.abc import AsyncIterator, Iterator
from contextlib import asynccontextmanager
from pathlib import Path

import pytest
from helpers_broker_proxy import BrokerProxy
from helpers_brokers import Nats
from helpers_member import FEED, LONG_S, SHORT_S, Cluster
from strandline.broker_access import BrokerAccess
from strandline.cluster.balance import Partition
from strandline.cluster.leases import Leases, owner_key
from strandline.cluster.words import said


@pytest.fixture(name="server")
def _server(tmp_path: Path) -> Iterator[Nats]:
    with Nats(tmp_path, synced=False) as server:
        yield server


@asynccontextmanager
async def cluster(count: int, lease_s: float) -> AsyncIterator[Cluster]:
    made = Cluster(count, lease_s)
    try:
        yield made
    finally:
        made.drained.set()
        await made.stop()
    assert not made.running


async def test_two_and_then_three_share_and_nothing_moves_that_need_not(server: Nats) -> None:
    async with cluster(5, SHORT_S) as made:
        made.add("a", server.url)
        await made.until(5)
        made.add("b", server.url)
        await made.until(2, 3)
        await made.rests(SHORT_S * 1.5)  # renewals go on beyond the lease
        made.add("c", server.url)
        await made.until(1, 2, 2)
        await made.rests(SHORT_S / 2)
        # 5 to 2 and 3: two moves; to 1, 2 and 2: one. Each was drained while its lease was valid.
        assert len(made.stopped) == 3
        assert all(drained and valid for _, _, drained, valid in made.stopped)
        assert all(fences == sorted(set(fences)) for fences in made.fences.values())


async def test_what_a_killed_one_owned_is_taken_over_once_its_leases_end(server: Nats) -> None:
    async with cluster(4, SHORT_S) as made:
        for name in "abc":
            made.add(name, server.url)
        await made.until(1, 1, 2)
        await made.rests(SHORT_S / 4)
        made.stopped.clear()
        lost = {each for each, owner in made.running.items() if owner.instance == "b"}
        began_s = time.monotonic()
        await made.kill("b")
        await made.becomes(lambda: lost & made.running.keys())
        # It renewed a fifth of a lease before at the earliest, so no entry ends before four fifths.
        assert time.monotonic() - began_s > SHORT_S / 2
        await made.until(2, 2)
        assert not made.stopped
        assert all(made.fences[each] == sorted(set(made.fences[each])) for each in lost)


async def test_after_a_stop_others_take_over_at_once_and_all_was_drained_at_the_same_time(server: Nats) -> None:
    async with cluster(6, LONG_S) as made:
        made.add("a", server.url)
        await made.until(6)
        made.add("b", server.url)
        await made.until(3, 3)
        made.drained.clear()
        made.stopping_at_most, gone, began_s = 0, made.members.pop("a"), time.monotonic()
        stopping = asyncio.create_task(gone.stop())
        await made.becomes(lambda: made.stopping == 3)
        assert all(part["state"] == "giving back" for part in gone.document()["partitions"] if part["here"])
        made.drained.set()
        await stopping
        await gone.stop()  # a second one does nothing
        await made.until(6)
        assert time.monotonic() - began_s < LONG_S / 2
        assert made.stopping_at_most == 3
        assert [drained for name, _, drained, _ in made.stopped[-3:] if name == "a"] == [True] * 3
        await made.becomes(lambda: [one["instance"] for one in made.members["b"].document()["instances"]] == ["b"])


async def test_a_draining_that_takes_too_long_is_cut_short(server: Nats) -> None:
    async with cluster(2, LONG_S) as made:
        member = made.add("a", server.url)
        await made.until(2)
        made.drained.clear()
        await member.stop(within_s=0.1)
        assert sorted(made.stopped) == [("a", 0, False, True), ("a", 1, False, True)]


async def test_while_the_brokers_are_away_owners_go_on_until_their_leases_end(server: Nats) -> None:
    async with BrokerProxy(server.port) as proxy, cluster(2, SHORT_S) as made:
        member = made.add("a", proxy.url)
        await made.until(2)
        proxy.away = True
        await proxy.cut()
        await made.becomes(lambda: not member.connected)
        await made.becomes(lambda: "no server answers" in member.words)
        assert "what it owns it stops in" in member.words or "what it owns it is stopping now" in member.words
        assert made.owned() == {"a": 2}
        await made.becomes(lambda: not made.running)
        assert sorted(each[:3] for each in made.stopped) == [("a", 0, False), ("a", 1, False)]
        await made.becomes(lambda: "stopped, for want of a renewed lease" in member.words)
        proxy.away = False
        await made.until(2)
        await made.becomes(lambda: member.words == "")


async def test_a_short_absence_of_the_brokers_stops_nothing(server: Nats) -> None:
    async with BrokerProxy(server.port) as proxy, cluster(3, SHORT_S * 2) as made:
        member = made.add("a", proxy.url)
        await made.until(3)
        for _ in range(3):
            proxy.away = True
            await proxy.cut()
            await made.becomes(lambda: not member.connected)
            proxy.away = False
            await made.becomes(lambda: member.connected)
        await made.rests(SHORT_S * 2)
        assert not made.stopped


async def test_one_that_cannot_be_started_here_starves_no_other_and_goes_elsewhere(server: Nats) -> None:
    async with cluster(4, SHORT_S) as made:
        made.failing = {("a", number) for number in (1, 2)}
        sick = made.add("a", server.url)
        await made.until(2)
        await made.becomes(lambda: f"{FEED}-1: its disk is full" in sick.words)
        well = made.add("b", server.url)
        await made.becomes(lambda: len(made.running) == 4)
        assert {owner.partition.number for owner in made.running.values() if owner.instance == "b"} >= {1, 2}
        made.failing.clear()
        await made.until(2, 2)
        await made.becomes(lambda: sick.words == well.words == "")


async def test_one_that_can_be_started_nowhere_is_tried_again_and_told(server: Nats) -> None:
    async with cluster(3, SHORT_S) as made:
        made.failing = {("a", 0), ("b", 0)}
        first, second = made.add("a", server.url), made.add("b", server.url)
        await made.becomes(lambda: sum(made.owned().values()) == 2)  # one each, or two at one, whose fair share that is
        await made.becomes(lambda: "its disk is full" in first.words and "its disk is full" in second.words)
        assert first.document()["partitions"][0]["state"] in ("nobody's", "taking over")
        made.failing.clear()
        await made.until(1, 2)


async def test_one_whose_start_hangs_holds_up_nothing_and_is_called_off_at_a_stop(server: Nats) -> None:
    async with cluster(3, LONG_S) as made:
        made.hanging = {1}
        member = made.add("a", server.url)
        await made.until(2)
        assert [part["state"] for part in member.document()["partitions"]] == ["owned", "taking over", "owned"]
        await member.stop()
        assert len(made.stopped) == 2
        made.hanging.clear()
        made.members.clear()
        made.add("b", server.url)
        await made.until(3)  # its lease was given back


async def test_an_owner_that_ended_by_itself_is_stopped_and_started_again(server: Nats) -> None:
    async with cluster(2, SHORT_S) as made:
        made.add("a", server.url)
        await made.until(2)
        made.running[Partition(FEED, 1)].ended.set()
        await made.becomes(lambda: made.stopped)
        await made.until(2)
        assert made.stopped == [("a", 1, False, True)]
        first, second = made.fences[Partition(FEED, 1)]
        assert first < second


async def test_an_owner_whose_lease_is_lost_is_stopped_at_once_without_draining(server: Nats) -> None:
    async with cluster(2, SHORT_S) as made:
        member = made.add("a", server.url)
        await made.until(2)
        client = await server.client()
        leases = await Leases.open(client, "river", SHORT_S, 1)
        stolen = Partition(FEED, 0)
        await client.jetstream().purge_stream("KV_river-leases", subject=f"$KV.river-leases.{owner_key(stolen)}")
        assert await leases.take(owner_key(stolen), b'{"instance":"thief","since_ns":1}') is not None
        await made.becomes(lambda: made.stopped)
        assert [each[:3] for each in made.stopped] == [("a", 0, False)]
        await made.until(2)  # after the thief's lease has ended
        member.check()
        await client.close()


async def test_two_of_one_name_are_told_apart_and_the_second_takes_nothing(server: Nats) -> None:
    async with cluster(2, SHORT_S) as made:
        made.add("a", server.url)
        await made.until(2)
        second = made.add("a", server.url, key="double")
        await made.becomes(lambda: "another process is called a too" in second.words)
        assert made.owned() == {"a": 2, "double": 0}
        await made.stop(["a"])
        await made.until(2)
        await made.becomes(lambda: second.words == "")


async def test_a_bucket_made_for_another_lease_is_told_and_tried_again(server: Nats) -> None:
    client = await server.client()
    await Leases.open(client, "river", LONG_S, 1)
    async with cluster(1, SHORT_S) as made:
        member = made.add("a", server.url)
        await made.becomes(lambda: "cluster.lease is 2 s" in member.words)
        await client.jetstream().delete_key_value("river-leases")
        await made.until(1)
    await client.close()


async def test_a_bucket_that_is_deleted_is_made_anew(server: Nats) -> None:
    client = await server.client()
    async with cluster(2, SHORT_S) as made:
        member = made.add("a", server.url)
        await made.until(2)
        await client.jetstream().delete_key_value("river-leases")
        await made.becomes(lambda: not made.running)
        assert sorted(each[:3] for each in made.stopped) == [("a", 0, False), ("a", 1, False)]
        await made.until(2)
        await made.becomes(lambda: member.words == "")
    await client.close()


async def test_what_hinders_an_owner_is_told_by_all(server: Nats) -> None:
    async with cluster(3, SHORT_S) as made:
        members = [made.add(name, server.url) for name in "ab"]
        await made.until(1, 2)
        made.hindered = dict.fromkeys(range(3), "there is no stream NOPE: make it")
        wanted = "3 of 3 partitions are hindered: there is no stream NOPE: make it."
        for member in members:
            await made.becomes(lambda member=member: said(member.document()).says == wanted)
        made.hindered = {}
        for member in members:
            await made.becomes(lambda member=member: said(member.document()).level == "fine")


async def test_one_that_reads_by_other_settings_is_named(server: Nats) -> None:
    async with cluster(2, SHORT_S) as made:
        one, other = made.add("a", server.url, digest="d"), made.add("b", server.url, digest="e")
        await made.until(1, 1)
        await made.becomes(lambda: one.words.startswith("b reads messages by other settings than this instance"))
        await made.becomes(lambda: said(other.document()).says.startswith("a reads messages by other settings"))
        other.digest = "d"  # as at a reload
        await made.becomes(lambda: one.words == other.words == "")


async def test_one_that_never_reached_the_brokers_logs_why_once_and_claims_nothing(
    tmp_path: Path, caplog: pytest.LogCaptureFixture
) -> None:
    secret = tmp_path / "password"
    secret.write_text("not for everybody\n")
    secret.chmod(0o644)
    access = BrokerAccess("gauges", password_file=str(secret))
    async with cluster(2, SHORT_S) as made:
        member = made.add("a", "nats://127.0.0.1:1", access=access)
        await made.becomes(lambda: "has mode 644" in member.words)
        await made.rests(SHORT_S / 2)  # it is tried several times meanwhile
        logged = [record.getMessage() for record in caplog.records if record.levelname == "WARNING"]
        assert [line for line in logged if "has mode 644" in line] == logged
        (line,) = logged
        assert "chmod" in line and "look at urls and secrets of [cluster]" in line
        secret.chmod(0o600)
        await made.becomes(lambda: "nobody listens at 127.0.0.1, port 1" in member.words)
        await made.rests(SHORT_S / 2)
        logged = [record.getMessage() for record in caplog.records if record.levelname == "WARNING"]
        assert len(logged) == 2 and "no server answers as it should at nats://127.0.0.1:1" in logged[1]
        told = said(member.document())
        assert told.says.startswith("a has had no broker") and "it owns" not in told.says + told.next


async def test_the_document_is_what_the_contract_says_from_both_sides(server: Nats) -> None:
    async with cluster(3, SHORT_S) as made:
        members = [made.add(name, server.url) for name in "ab"]
        await made.until(1, 2)
        await made.becomes(lambda: all(each["state"] == "owned" for one in members for each in rows(one)))
        for me, member in zip("ab", members, strict=True):
            found = member.document()
            assert (found["name"], found["instance"], found["lease_s"]) == ("river", me, SHORT_S)
            assert (found["connected"], found["words"]) == (True, "")
            assert {one["instance"]: (one["owns"], one["listen"]) for one in found["instances"]} == {
                name: (made.owned()[name], f"{name}:8600") for name in "ab"
            }
            for number, row in enumerate(found["partitions"]):
                owner = made.running[Partition(FEED, number)]
                assert (row["feed"], row["partition"], row["runtime"]) == (FEED, number, f"{FEED}-{number}")
                assert (row["owner"], row["fence"], row["here"]) == (owner.instance, owner.fence, owner.instance == me)
                assert (row["behind_messages"], row["watermark"]) == (number, "2026-05-01T00:00:00Z")
                assert 5.0 <= row["watermark_age_s"] < 5.0 + SHORT_S
                assert row["since"].endswith("Z")


def rows(member: object) -> list[dict[str, object]]:
    return member.document()["partitions"]  # type: ignore[attr-defined,no-any-return]
