"""Taking from MQTT, with a real broker: both versions, each message settled after the sync, sources out of topics.

What MQTT cannot give is shown too: a message that was stored and whose PUBACK was lost comes again, and only an event's
own `id` tells that it did.
"""

from __future__ import annotations

import gzip
import signal
from contextlib import AbstractAsyncContextManager
from pathlib import Path
from typing import Any

import pytest
import trustme
from helpers_brokers import Mosquitto, counts_of, mqtt_intake, received
from helpers_service import Running, configuration, event_line, events, eventually, running, stored
from strandline.intake.broker import Message
from strandline.intake.mqtt import MqttBroker

VERSIONS = ["5", "3.1.1"]
TOPIC = "river/gw-1/level"


def with_intake(folder: Path, server: Mosquitto, intake: dict[str, object], **keys: Any) -> str:
    text = configuration(folder, more=mqtt_intake(server, **intake), **keys)
    return text.replace('source = "/station"\n', "", 1) if "source" in intake else text


def taking(
    folder: Path, server: Mosquitto, intake: dict[str, object] | None = None, **keys: Any
) -> AbstractAsyncContextManager[Running]:
    return running(with_intake(folder, server, intake or {}, **keys))


async def subscribed(service: Running) -> None:
    await eventually(lambda: counts_of(service).connected, "it does not subscribe")


def everything(folder: Path) -> list[int]:
    return sorted(stored(folder) + stored(folder, "late"))


@pytest.mark.parametrize("version", VERSIONS)
async def test_messages_are_taken_and_settled_and_the_session_is_kept(tmp_path: Path, version: str) -> None:
    with Mosquitto(tmp_path) as server:
        async with taking(tmp_path, server, {"version": version}) as service:
            await subscribed(service)
            server.publish([(TOPIC, events([1, 2])), (TOPIC, event_line(3)), ("river/level", events([99]))])
            await eventually(lambda: received(service) == 3)
            await eventually(lambda: counts_of(service).outcomes["taken"] == 2)
        server.publish([(TOPIC, events([4 + number])) for number in range(50)])  # while nobody is there
        async with taking(tmp_path, server, {"version": version}) as service:
            await eventually(lambda: received(service) == 53)
            assert counts_of(service).repeats == 0, "what was settled does not come again"
            assert (await service.document())["intake"]["mqtt"]["waiting_messages"] is None
            await service.post("drain")
        assert everything(tmp_path) == [*range(1, 54)]


@pytest.mark.parametrize("version", VERSIONS)
async def test_the_source_is_a_level_of_the_topic(tmp_path: Path, version: str) -> None:
    intake = {"version": version, "source": {"topic_level": 2}}
    with Mosquitto(tmp_path) as server:
        async with taking(tmp_path, server, intake, id="/id") as service:
            await subscribed(service)
            for gateway in ("gw-1", "gw-2"):
                server.publish([(f"river/{gateway}/level", event_line(1, "someone", id=7) + b"\n")])
            server.publish([("river//level", events([5]))])
            await eventually(lambda: received(service) == 3)
            await eventually(lambda: service.runtime.feed.state.outbox.undelivered_events == 0)
            sources = (await service.get("sources")).json["sources"]
            assert [row["source"] for row in sources] == ["gw-1", "gw-2"]
            (row,) = (await service.get("quarantine")).json["quarantine"]
            assert row["reason"] == "body_refused" and "level 2 of the address ('river', '', 'level')" in row["detail"]
            ledger = service.runtime.view().ledger
            assert ledger["duplicate"] == 0, "the same id of two sources is two events"


async def test_mqtt_5_names_the_format_and_the_coding(tmp_path: Path) -> None:
    array = b"[" + event_line(1) + b"," + event_line(2) + b"]"
    with Mosquitto(tmp_path) as server:
        async with taking(tmp_path, server) as service:
            await subscribed(service)
            server.publish([(TOPIC, array)], content_type="application/json")
            server.publish([(TOPIC, gzip.compress(events([3])))], own={"Content-Encoding": "gzip"})
            server.publish([(TOPIC, b"<xml/>")], content_type="text/xml")
            await eventually(lambda: received(service) == 4)
            await eventually(lambda: counts_of(service).outcomes == {"taken": 2, "quarantined": 1, "put_back": 0})


@pytest.mark.parametrize("version", VERSIONS)
@pytest.mark.parametrize("with_id", [True, False])
async def test_a_puback_that_was_lost_after_the_sync(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, version: str, with_id: bool
) -> None:
    """The message is stored; its PUBACK never leaves; the service starts anew. Only `id` tells the repeat."""
    keys = {"id": "/id"} if with_id else {}

    async def lose(self: MqttBroker, message: Message) -> None:
        message.handle[0].leaves(len(message.body))

    with Mosquitto(tmp_path) as server:
        with monkeypatch.context() as patch:
            patch.setattr(MqttBroker, "settle", lose)
            async with taking(tmp_path, server, {"version": version}, **keys) as service:
                await subscribed(service)
                server.publish([(TOPIC, event_line(number, id=number) + b"\n") for number in (1, 2, 3)])
                await eventually(lambda: counts_of(service).outcomes["taken"] == 3)
        async with taking(tmp_path, server, {"version": version}, **keys) as service:
            await eventually(lambda: counts_of(service).outcomes["taken"] == 3)
            assert counts_of(service).repeats == 3
            assert service.runtime.view().ledger["duplicate"] == (3 if with_id else 0)
            await service.post("drain")
        assert everything(tmp_path) == ([1, 2, 3] if with_id else [1, 1, 2, 2, 3, 3]), "at least once, and told by id"


@pytest.mark.parametrize("version", VERSIONS)
@pytest.mark.parametrize("number", [signal.SIGTERM, signal.SIGKILL])
async def test_a_broker_that_restarts(tmp_path: Path, version: str, number: int) -> None:
    with Mosquitto(tmp_path) as server:
        async with taking(tmp_path, server, {"version": version}, id="/id") as service:
            await subscribed(service)
            server.publish([(TOPIC, event_line(1, id=1))])
            await eventually(lambda: received(service) == 1)
            server.end(number)
            await eventually(lambda: not counts_of(service).connected)
            assert "the connection to mqtt://127.0.0.1" in str(counts_of(service).last_error)
            server.start()
            await subscribed(service)
            server.publish([(TOPIC, event_line(2, id=2))])
            await eventually(lambda: service.runtime.view().ledger["released"] == 2)
            assert counts_of(service).losses == 1


@pytest.mark.parametrize("version", VERSIONS)
async def test_what_the_feed_refuses_is_held_and_taken_later(tmp_path: Path, version: str) -> None:
    limits = {"held_events_at_most": 100, "events_at_most": 100, "slack": "1h"}
    with Mosquitto(tmp_path) as server:
        async with taking(tmp_path, server, {"version": version}, **limits) as service:
            await subscribed(service)
            server.publish([(TOPIC, events(range(90))), (TOPIC, events(range(100, 150)))])
            await eventually(lambda: counts_of(service).paused_until_ns is not None)
            words = (await service.document())["intake"]["mqtt"]["words"]
            assert words.startswith("paused: the feed refuses (429, Too many events are held)")
            await eventually(lambda: counts_of(service).in_flight == 1)
            assert received(service) == 90
            await service.post("drain")
            await eventually(lambda: received(service) == 140)
            await eventually(lambda: counts_of(service).in_flight == 0)
            assert counts_of(service).repeats == 0 and counts_of(service).losses == 0
            await service.post("drain")
        assert everything(tmp_path) == [*range(90), *range(100, 150)]


async def test_a_stop_while_the_feed_refuses_leaves_the_message_to_the_broker(tmp_path: Path) -> None:
    limits = {"held_events_at_most": 100, "events_at_most": 100, "slack": "1h"}
    with Mosquitto(tmp_path) as server:
        async with taking(tmp_path, server, **limits) as service:
            await subscribed(service)
            server.publish([(TOPIC, events(range(90))), (TOPIC, events(range(100, 150)))])
            await eventually(lambda: counts_of(service).paused_until_ns is not None)
            await service.post("drain")
            await service.service.stop()
            assert received(service) == 90
        async with taking(tmp_path, server) as service:
            await eventually(lambda: received(service) == 140)
            await service.post("drain")
        assert everything(tmp_path) == [*range(90), *range(100, 150)]


@pytest.mark.parametrize("version", VERSIONS)
async def test_no_more_is_in_flight_than_is_allowed(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, version: str
) -> None:
    """A broker of version 5 is told (Receive Maximum); of one that is not, no more is read."""
    with Mosquitto(tmp_path, "max_inflight_messages 50") as server:
        async with taking(tmp_path, server, {"version": version, "in_flight_at_most": 4}, id="/id") as service:
            await subscribed(service)
            with monkeypatch.context() as patch:
                patch.setattr(service.runtime.commit, "kick", lambda: None)
                server.publish([(TOPIC, event_line(number, id=number)) for number in range(20)])
                await eventually(lambda: counts_of(service).in_flight == 4)
                if version == "3.1.1":  # which goes on sending: after half the keepalive the connection is ended
                    await eventually(lambda: "more is unsettled than may" in str(counts_of(service).last_error))
                assert counts_of(service).in_flight <= 4
            service.runtime.commit.kick()
            await eventually(lambda: service.runtime.view().ledger["released"] == 20)
            await service.post("drain")
        assert everything(tmp_path) == [*range(20)]


# The client leaves the socket of a handshake that failed to Python's collector, which warns.
@pytest.mark.filterwarnings("ignore::pytest.PytestUnraisableExceptionWarning")
async def test_who_is_let_in_and_tls(tmp_path: Path) -> None:
    authority = trustme.CA()
    issued = authority.issue_cert("127.0.0.1")
    authority.cert_pem.write_to_path(tmp_path / "ca.pem")
    issued.cert_chain_pems[0].write_to_path(tmp_path / "server.pem")
    issued.private_key_pem.write_to_path(tmp_path / "server.key")
    secured = f"cafile {tmp_path}/ca.pem\ncertfile {tmp_path}/server.pem\nkeyfile {tmp_path}/server.key"
    with Mosquitto(tmp_path, secured) as server:
        address = server.url.replace("mqtt:", "mqtts:")
        async with taking(tmp_path, server, {"url": address}) as service:
            await eventually(lambda: "certificate verify failed" in str(counts_of(service).last_error))
        async with taking(tmp_path, server, {"url": address, "ca_file": str(tmp_path / "ca.pem")}) as service:
            await subscribed(service)


async def test_a_password_that_is_wrong_is_told_and_not_shown(tmp_path: Path) -> None:
    file = tmp_path / "password"
    file.write_text("quite secret")
    file.chmod(0o600)
    intake: dict[str, object] = {"user": "strandline", "password_file": str(file)}
    (tmp_path / "nobody").write_text("")
    with Mosquitto(tmp_path, f"allow_anonymous false\npassword_file {tmp_path}/nobody") as server:
        async with taking(tmp_path, server, intake) as service:
            await eventually(lambda: "lets nobody in under these terms" in str(counts_of(service).last_error))
            assert "quite secret" not in (await service.get("")).content.decode()
            file.chmod(0o644)
            await eventually(lambda: "others can read" in str(counts_of(service).last_error))
