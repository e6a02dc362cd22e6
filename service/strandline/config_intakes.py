"""The kinds of intakes, brokers that a feed takes events from, as a configuration describes them: one struct each.

What an intake does is `strandline.intake`. Rules that compare keys are `config_intake_checks`.
"""

from __future__ import annotations

from typing import Annotated, ClassVar, Literal

import msgspec
from msgspec import field

from .broker_access import BrokerAccess
from .config_broker_access import CaFile, CredsFile, Password, PasswordFile, Token, TokenFile, User
from .config_broker_kinds import broker_address, broker_addresses, broker_name, subjects, topics
from .config_kinds import choice, count, duration, name, size
from .config_read import Key, Table
from .core.settings import SECOND_NS
from .ingest.formats import MEDIA_TYPES, NDJSON

MIB = 2**20

INTAKE_NAME = name("a-z0-9_-", "1 to 63 of a-z, 0-9, - and _, the first a letter or digit")


class IntakeConfig(msgspec.Struct, frozen=True, kw_only=True):
    """What every kind of intake has. A further kind is one more struct and one line in INTAKE_KINDS."""

    kind: ClassVar[str] = ""
    name: Annotated[str, Key(INTAKE_NAME, "unique within the feed; in metrics and in the feed's document")] = "{kind}"
    content_type: Annotated[
        str, Key(choice(*MEDIA_TYPES), "the format of a message that does not name one itself")
    ] = NDJSON
    in_flight_at_most: Annotated[
        int, Key(count(1, 10_000), "messages taken from the broker that are not settled yet; one sync serves many")
    ] = 256
    in_flight_bytes_at_most: Annotated[
        int, Key(size("1MiB", "1GiB"), "their bytes together; a single larger message is still taken")
    ] = 64 * MIB
    user: User = None
    password: Password = None
    password_file: PasswordFile = None
    ca_file: CaFile = None

    def access(self) -> BrokerAccess:
        """Who to be, and whom to trust."""
        return BrokerAccess.of(self)


class SubjectToken(msgspec.Struct, frozen=True):
    """The source of all events of a message is one token of its subject; in the place of a pointer into events."""

    subject_token: Annotated[int, Key(count(1, 64), "which token, counted from 1: `river.gw-7` has gw-7 as token 2")]


class TopicLevel(msgspec.Struct, frozen=True):
    """The source of all events of a message is one level of its topic; in the place of a pointer into events."""

    topic_level: Annotated[int, Key(count(1, 64), "which level, counted from 1: `river/gw-7` has gw-7 as level 2")]


class JetstreamIntake(IntakeConfig, frozen=True, kw_only=True):
    """Messages of a JetStream stream, through a durable pull consumer. Needs the extra `nats`."""

    kind: ClassVar[str] = "jetstream"
    urls: Annotated[tuple[str, ...], Key(broker_addresses("nats", "tls"), "the servers; one that answers is used")]
    stream: Annotated[str, Key(broker_name("stream"), "the stream; it must be there")]
    durable: Annotated[
        str, Key(broker_name("consumer"), "the durable consumer, made if absent; no two intakes may share one")
    ] = "strandline-{feed}"
    subjects: Annotated[tuple[str, ...], Key(subjects(), "which of the stream's subjects; without it all of them")] = ()
    begin: Annotated[
        Literal["all", "new"],
        Key(choice("all", "new"), "where a new consumer begins: with all that the stream holds, or what comes then"),
    ] = "all"
    fetch_at_most: Annotated[int, Key(count(1, 10_000), "messages asked for at one time")] = 100
    ack_wait_ns: Annotated[
        int,
        Key(
            duration("1s", "1h"),
            "the broker sends a message again that was neither settled nor reported as in progress for so long",
        ),
    ] = field(default=10 * SECOND_NS, name="ack_wait")
    token: Token = None
    token_file: TokenFile = None
    creds_file: CredsFile = None
    source: Annotated[SubjectToken | None, Table(SubjectToken)] = None


class MqttIntake(IntakeConfig, frozen=True, kw_only=True):
    """Messages of an MQTT broker at QoS 1, through a session that the broker keeps. Needs the extra `mqtt`."""

    kind: ClassVar[str] = "mqtt"
    url: Annotated[str, Key(broker_address("mqtt", "mqtts"), "the broker; `mqtts` speaks TLS")]
    topics: Annotated[tuple[str, ...], Key(topics(), "topic filters to subscribe to")]
    version: Annotated[Literal["5", "3.1.1"], Key(choice("5", "3.1.1"), "the version of MQTT")] = "5"
    client_id: Annotated[
        str, Key(broker_name("client"), "the name of the session at the broker; no two clients may share one")
    ] = "strandline-{feed}"
    session_expiry_ns: Annotated[
        int,
        Key(duration("1s", "366d"), "how long the broker keeps the session while nobody is there (version 5)"),
    ] = field(default=7 * 86_400 * SECOND_NS, name="session_expiry")
    keepalive_ns: Annotated[
        int, Key(duration("5s", "1h"), "silence after which either side asks whether the other is there")
    ] = field(default=30 * SECOND_NS, name="keepalive")
    source: Annotated[TopicLevel | None, Table(TopicLevel)] = None


INTAKE_KINDS: dict[str, type[IntakeConfig]] = {"jetstream": JetstreamIntake, "mqtt": MqttIntake}
