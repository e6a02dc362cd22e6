"""Taking from JetStream, with a real server: each message once, whatever is refused, repeated, broken or restarted."""

from __future__ import annotations

import asyncio
import gzip
import json
import signal
from contextlib import AbstractAsyncContextManager
from pathlib import Path
from typing import Any

import pytest
from helpers_brokers import STREAM, Nats, counts_of, jetstream_intake, received
from helpers_service import (
    FEED,
    NDJSON,
    Running,
    configuration,
    event_line,
    events,
    eventually,
    running,
    stored,
)

DURABLE = f"strandline-{FEED}"


def with_intake(folder: Path, server: Nats, intake: dict[str, object] | None = None, **keys: Any) -> str:
    return configuration(folder, more=jetstream_intake(server, **(intake or {})), **keys)


def taking(
    folder: Path, server: Nats, intake: dict[str, object] | None = None, **keys: Any
) -> AbstractAsyncContextManager[Running]:
    return running(with_intake(folder, server, intake, **keys))


async def acknowledged(server: Nats, number: int) -> None:
    await server.settled(DURABLE, number)


async def test_each_message_is_one_arrival_and_is_settled(tmp_path: Path) -> None:
    with Nats(tmp_path) as server:
        await server.make_stream()
        await server.publish([events([1, 2]), events([3]), events([2])])
        async with taking(tmp_path, server) as service:
            await eventually(lambda: received(service) == 4)
            await acknowledged(server, 3)
            await server.publish([events([5])])
            await eventually(lambda: received(service) == 5)
            await acknowledged(server, 4)
            found = (await service.document())["intake"]["jetstream"]
            assert found["connected"] and found["messages"] == {"taken": 4, "quarantined": 0, "put_back": 0}
            assert found["redelivered"] == found["in_flight_messages"] == found["in_flight_bytes"] == 0
            ledger = service.runtime.view().ledger
            assert (ledger["late"], ledger["duplicate"]) == (1, 0), "with a slack of 0 s the second 2 s comes late"
            page = (await service.get("/metrics")).content.decode()
            labels = f'feed="{FEED}",intake="jetstream"'
            assert f"strandline_intake_connected{{{labels}}} 1.0" in page
            assert f'strandline_intake_messages_total{{{labels},outcome="taken"}} 4.0' in page
            assert f'strandline_intake_broker_seconds_bucket{{{labels},le="+Inf"}} 4.0' in page
            await service.post("drain")
        assert stored(tmp_path) == [1, 2, 3, 5] and stored(tmp_path, "late") == [2]


async def test_headers_name_format_coding_and_what_tells_a_repeat(tmp_path: Path) -> None:
    array = b"[" + event_line(1) + b"," + event_line(2) + b"]"
    packed = gzip.compress(events([3]))
    headers = [
        {"Content-Type": "application/json", "Nats-Msg-Id": "one"},
        {"Content-Encoding": "gzip"},
        {"Nats-Msg-Id": "two"},
    ]
    with Nats(tmp_path) as server:
        await server.make_stream(duplicate_window=0.1)
        await server.publish([array, packed, events([4])], headers=headers)
        async with taking(tmp_path, server) as service:
            await eventually(lambda: received(service) == 4)
            # The broker's own window is over by the time it takes these.
            await server.publish([events([4]), array], headers=[{"Nats-Msg-Id": "two"}, headers[0]])
            await acknowledged(server, 5)
            assert received(service) == 4, "answered from the kept answers"
            assert counts_of(service).outcomes["taken"] == 5


async def test_a_body_that_can_never_be_taken_is_in_quarantine_with_the_reason(tmp_path: Path) -> None:
    wrong = [b"\x00" * 70_000, events([1]), b"<xml/>", b"no gzip", events([9])]
    headers = [None, {"Content-Type": "text/plain"}, None, {"Content-Encoding": "gzip"}, {"Nats-Msg-Id": "twice"}]
    limits = {"body_bytes_at_most": "64KiB", "event_bytes_at_most": "64KiB"}
    with Nats(tmp_path) as server:
        await server.make_stream(duplicate_window=0.1)
        await server.publish(wrong, headers=headers)
        await server.publish([events([10])], headers=[{"Nats-Msg-Id": "twice"}])
        await server.publish([events([20])])
        async with taking(tmp_path, server, **limits) as service:
            await acknowledged(server, 7)
            await eventually(lambda: service.runtime.feed.state.outbox.undelivered_events == 0)
            rows = (await service.get("quarantine")).json["quarantine"]
            reasons = ["body_refused", "body_refused", "malformed", "body_refused", "body_refused"]
            assert [row["reason"] for row in rows] == reasons
            details = [row["detail"] for row in rows]
            assert "message 1 of stream RIVER: the message has 70,000 bytes, body_bytes_at_most" in details[0]
            assert "the first 65,536 of its 70,000 bytes are kept here" in details[0]
            assert "text/plain is not taken here" in details[1] and rows[1]["event"].encode() == wrong[1]
            assert "gzip" in details[3] and rows[3]["event"] == "no gzip"
            assert "came before with another body" in details[4] and rows[4]["event"].encode() == events([10])
            assert counts_of(service).outcomes == {"taken": 3, "quarantined": 4, "put_back": 0}
            ledger = service.runtime.view().ledger
            assert ledger["received"] == 2 + 5 and ledger["quarantined"] == 5


async def test_what_the_feed_refuses_comes_again_and_is_taken_later(tmp_path: Path) -> None:
    limits = {"held_events_at_most": 100, "events_at_most": 100, "slack": "1h"}
    with Nats(tmp_path) as server:
        await server.make_stream()
        async with taking(tmp_path, server, **limits) as service:
            await server.publish([events(range(90)), events(range(100, 150)), events(range(200, 210))])
            await eventually(lambda: counts_of(service).outcomes["put_back"] > 0)
            document = (await service.document())["intake"]["jetstream"]
            assert document["words"].startswith("paused: the feed refuses (429, Too many events are held)")
            assert document["paused_until"] is not None
            assert received(service) == 90 or received(service) == 100
            await service.post("drain")  # what is held goes, so there is room again
            await eventually(lambda: received(service) == 150)
            await acknowledged(server, 3)
            assert counts_of(service).repeats >= 1
            await service.post("drain")
        assert sorted(stored(tmp_path) + stored(tmp_path, "late")) == [*range(90), *range(100, 150), *range(200, 210)]


async def test_many_messages_share_a_sync(tmp_path: Path) -> None:
    with Nats(tmp_path) as server:
        await server.make_stream()
        await server.publish([events([number]) for number in range(400)])
        async with taking(tmp_path, server) as service:
            await eventually(lambda: received(service) == 400)
            await acknowledged(server, 400)
            assert service.runtime.journal.counters.syncs < 200
            assert service.runtime.view().ledger["late"] == 0, "in the order of the stream"


async def test_no_more_is_in_flight_than_is_allowed_and_long_waits_are_told(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Syncs that never end: what is in flight stays so, and the broker sends none of it again."""
    with Nats(tmp_path) as server:
        await server.make_stream()
        async with taking(tmp_path, server, {"in_flight_at_most": 5, "ack_wait": "1s"}) as service:
            with monkeypatch.context() as patch:
                patch.setattr(service.runtime.commit, "kick", lambda: None)
                await server.publish([events([number]) for number in range(20)])
                await eventually(lambda: counts_of(service).in_flight == 5)
                begun = asyncio.get_running_loop().time()
                await eventually(lambda: asyncio.get_running_loop().time() > begun + 2.5)
                assert counts_of(service).in_flight == 5 and counts_of(service).repeats == 0
                assert (await server.consumer(DURABLE)).num_ack_pending == 5
                assert (await server.consumer(DURABLE)).num_redelivered == 0
            service.runtime.commit.kick()
            await eventually(lambda: received(service) == 20)
            await acknowledged(server, 20)


async def test_a_lost_acknowledgement_is_answered_from_the_kept_answer(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    from strandline.intake.jetstream import JetstreamBroker  # noqa: PLC0415

    with Nats(tmp_path) as server:
        await server.make_stream()
        say, lost = JetstreamBroker.settle, []

        async def lose_the_first(self: JetstreamBroker, message: Any) -> None:
            lost.append(message)
            if len(lost) > 3:
                await say(self, message)

        monkeypatch.setattr(JetstreamBroker, "settle", lose_the_first)
        async with taking(tmp_path, server, {"ack_wait": "1s"}) as service:
            await server.publish([events([1]), events([2]), events([3])])
            await acknowledged(server, 3)
            assert counts_of(service).repeats == 3
            assert received(service) == 3
            await service.post("drain")
        assert stored(tmp_path) == [1, 2, 3]


@pytest.mark.parametrize("number", [signal.SIGTERM, signal.SIGKILL])
async def test_a_broker_that_restarts(tmp_path: Path, number: int) -> None:
    with Nats(tmp_path) as server:
        await server.make_stream()
        async with taking(tmp_path, server) as service:
            await server.publish([events([1]), events([2])])
            await acknowledged(server, 2)
            server.end(number)
            await eventually(lambda: not counts_of(service).connected)
            assert counts_of(service).last_error
            assert (await service.send([3]))["accepted"] == 1, "HTTP goes on"
            server.start()
            await eventually(lambda: counts_of(service).connected)
            await server.publish([events([4])])
            await eventually(lambda: received(service) == 4)
            await acknowledged(server, 3)
            await service.post("drain")
        assert stored(tmp_path) == [1, 2, 3, 4]
        assert counts_of(service).losses == 1


async def test_a_stop_leaves_nothing_behind_and_a_start_goes_on(tmp_path: Path) -> None:
    with Nats(tmp_path) as server:
        await server.make_stream()
        for start in (0, 100):
            await server.publish([events([start + number]) for number in range(100)])
            async with taking(tmp_path, server) as service:
                await eventually(lambda start=start: received(service) > start)
            info = await server.consumer(DURABLE)
            assert info.ack_floor is not None and info.num_redelivered == 0
        async with taking(tmp_path, server) as service:
            await eventually(lambda: received(service) == 200)
            await acknowledged(server, 200)
            await service.post("drain")
        assert sorted(stored(tmp_path) + stored(tmp_path, "late")) == [*range(200)]
        assert counts_of(service).connected is False


async def test_the_source_of_a_message_is_a_token_of_its_subject(tmp_path: Path) -> None:
    with Nats(tmp_path) as server:
        text = with_intake(tmp_path, server, {"source": {"subject_token": 2}}).replace('source = "/station"\n', "", 1)
        await server.make_stream()
        for station in ("gw-1", "gw-2"):
            await server.publish([events([1, 2], "someone")], subject=f"river.{station}")
        await server.publish([events([3])], subject=f"river.{'x' * 300}")
        async with running(text) as service:
            await acknowledged(server, 3)
            sources = (await service.get("sources")).json["sources"]
            assert [row["source"] for row in sources] == ["gw-1", "gw-2"]
            assert counts_of(service).outcomes["quarantined"] == 1
            promise = {"source": "gw-2", "time": "2023-11-14T22:13:25Z"}
            assert (await service.post("marks", promise)).status == 204


async def test_what_stands_in_the_way_is_told(tmp_path: Path) -> None:
    with Nats(tmp_path, 'authorization { user: "strandline", password: "quite secret" }') as server:
        password = tmp_path / "password"
        password.write_text("wrong\n")
        password.chmod(0o600)
        intake = {"user": "strandline", "password_file": str(password)}
        async with taking(tmp_path, server, intake) as service:
            await eventually(lambda: "uthorization" in (counts_of(service).last_error or ""))
            password.write_text("quite secret\n")  # read anew at each connection
            await eventually(lambda: "there is no stream RIVER" in (counts_of(service).last_error or ""))
            assert "secret" not in json.dumps(await service.document())
            client = await server.client(user="strandline", password="quite secret")
            stream = client.jetstream()
            await stream.add_stream(name=STREAM, subjects=["river.>"])
            await eventually(lambda: counts_of(service).connected)
            await stream.publish("river.a", events([1]), headers={"Content-Type": NDJSON})
            await eventually(lambda: received(service) == 1)
            await client.close()


async def test_a_consumer_that_would_lose_messages_is_not_used(tmp_path: Path) -> None:
    with Nats(tmp_path) as server:
        await server.make_stream()
        client = await server.client()
        await client.jetstream().add_consumer(STREAM, durable_name=DURABLE, ack_policy="explicit", max_deliver=3)
        await client.close()
        async with taking(tmp_path, server) as service:
            await eventually(lambda: "gives a message up after 3" in (counts_of(service).last_error or ""))


async def test_a_long_time_without_a_broker_is_a_stall(tmp_path: Path) -> None:
    server = Nats(tmp_path)  # never started
    async with taking(tmp_path, server) as service:
        await eventually(lambda: counts_of(service).last_error is not None)
        assert (await service.get("/health/ready")).status == 200
        counts_of(service).since_ns -= 60 * 10**9
        answer = await service.get("/health/ready")
        assert answer.status == 503
        assert "intake jetstream has had no broker for 6" in answer.json["detail"]
