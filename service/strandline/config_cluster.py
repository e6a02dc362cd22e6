"""The keys of a cluster: the table `[cluster]`, the key `partitions` of a feed, and the feeds that partitions become.

Declarations, and what follows from them alone. Rules that compare keys are `config_cluster_checks`; nothing is
connected here, and of this machine only its name is asked.
"""

from __future__ import annotations

import re
import socket
from collections.abc import Iterable
from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import msgspec
from msgspec import field

from .broker_access import BrokerAccess
from .config_broker_access import CaFile, CredsFile, Password, PasswordFile, Token, TokenFile, User
from .config_broker_kinds import PARTITION, broker_addresses, broker_name, partitioned_subject
from .config_intakes import SubjectToken
from .config_kinds import Address, Kind, address, choice, count, duration, name, size
from .config_read import Key, Table, declared
from .core.settings import SECOND_NS
from .ingest.formats import MEDIA_TYPES, NDJSON

if TYPE_CHECKING:
    from .config_model import Feed
    from .config_sinks import SinkConfig

GIB = 2**30
PARTITIONS_AT_MOST = 1024
NAME_CHARACTERS_AT_MOST = 63  # of a feed, of an instance
HOST = "{host}"  # the default of `instance`, until the host's name is in its place
MEMBER_NAME = name("a-z0-9-", "1 to 63 of a-z, 0-9 and -, the first a letter or digit")


def _replicas() -> Kind:
    """How often the brokers keep something. Of an even number no more may fail than of the odd one below it."""
    whole = count(1, 5)

    def read(raw: object) -> int:
        found: int = whole.read(raw)
        if found % 2 == 0:
            raise ValueError(f"is even: write {found - 1} or {found + 1}")
        return found

    return Kind("1, 3 or 5", read, whole.show, whole.from_text)


class ClusterConfig(msgspec.Struct, frozen=True, kw_only=True):
    """Several instances share the partitions of feeds; cluster.md explains it. Needs the extra `nats`."""

    name: Annotated[str, Key(MEMBER_NAME, "what log and leases are called at the brokers; the same for all instances")]
    instance: Annotated[
        str, Key(MEMBER_NAME, "this instance's name, which no other may have; whatever else the host's name holds is -")
    ] = HOST
    address: Annotated[
        Address | None,
        Key(address(), "where this instance is reached, for people who look at another; without it: where it listens"),
    ] = None
    urls: Annotated[
        tuple[str, ...],
        Key(broker_addresses("nats", "tls"), "the servers of the log, the leases and the feeds' streams"),
    ]
    replicas: Annotated[
        int, Key(_replicas(), "how many brokers keep the log and the leases; of 3 one may be lost, of 5 two")
    ] = 3
    lease_ns: Annotated[
        int,
        Key(duration("2s", "1h"), "how long an instance that is gone keeps its partitions; with 3 brokers 15s or more"),
    ] = field(default=15 * SECOND_NS, name="lease")
    log_at_most_bytes: Annotated[
        int, Key(size("1MiB"), "room for the log of all partitions, reserved at each broker that keeps it")
    ] = field(default=GIB, name="log_at_most")
    user: User = None
    password: Password = None
    password_file: PasswordFile = None
    token: Token = None
    token_file: TokenFile = None
    creds_file: CredsFile = None
    ca_file: CaFile = None

    def access(self) -> BrokerAccess:
        """Who to be, and whom to trust."""
        return BrokerAccess.of(self)


class Partitions(msgspec.Struct, frozen=True, kw_only=True):
    """The feed is read from a stream in so many parts, each one a feed by itself, which a cluster's instances share."""

    stream: Annotated[str, Key(broker_name("stream"), "the stream that producers publish to; it must be there")]
    subject: Annotated[str, Key(partitioned_subject(), "which of its subjects; `{partition}` is 0 up to `count` - 1")]
    count: Annotated[
        int,
        Key(
            count(1, PARTITIONS_AT_MOST),
            "how many partitions there are, the number in the brokers' mapping; fixed once events have come",
        ),
    ]
    source: Annotated[SubjectToken | None, Table(SubjectToken)] = None
    content_type: Annotated[str, Key(choice(*MEDIA_TYPES), "the format of a message that does not name one itself")] = (
        NDJSON
    )
    fetch_at_most: Annotated[int, Key(count(1, 10_000), "messages asked for at one time, for each partition")] = 100
    in_flight_at_most: Annotated[
        int, Key(count(1, 10_000), "messages of a partition that are read and not in the log yet; one sync serves many")
    ] = 256

    def subject_of(self, partition: int) -> str:
        """The subjects of one partition."""
        return self.subject.replace(PARTITION, str(partition))


def host_instance() -> str:
    """This machine's name as an instance's: what is not allowed is written -. May be empty."""
    found = re.sub(r"[^a-z0-9-]", "-", socket.gethostname().lower(), flags=re.ASCII)
    return found.lstrip("-")[:NAME_CHARACTERS_AT_MOST]


def settled_cluster(cluster: ClusterConfig | None) -> ClusterConfig | None:
    """With the instance's name where none is configured; asked at each reading, for an image is started elsewhere."""
    if cluster is None or cluster.instance != HOST:
        return cluster
    return msgspec.structs.replace(cluster, instance=host_instance())


def partition_name(feed_name: str, partition: int) -> str:
    """What a partition is called in addresses, metrics, folders and stores."""
    return f"{feed_name}-{partition}"


def base_of(feeds: Iterable[Feed], runtime_name: str) -> str:
    """The configured feed that a runtime belongs to: for a partition its feed, for all else the name itself."""
    head, _, tail = runtime_name.rpartition("-")
    if re.fullmatch(r"0|[1-9][0-9]{0,3}", tail, re.ASCII):
        for feed in feeds:
            if feed.name == head and feed.partitions is not None and int(tail) < feed.partitions.count:
                return feed.name
    return runtime_name


def partition_feeds(feed: Feed) -> tuple[Feed, ...]:
    """The feeds of a feed's partitions, in order: as the feed itself, each with a name and with files of its own.

    A sink's file or folder that bears the feed's name, as by default, bears the partition's instead. Any other is
    shared by the partitions, as every sink lets feeds share it.
    """
    if feed.partitions is None:
        return ()
    names = [partition_name(feed.name, partition) for partition in range(feed.partitions.count)]
    return tuple(
        msgspec.structs.replace(feed, name=name, sinks=tuple(_renamed(sink, feed.name, name) for sink in feed.sinks))
        for name in names
    )


def _renamed(sink: SinkConfig, feed_name: str, name: str) -> SinkConfig:
    changes: dict[str, Path] = {}
    for item in declared(type(sink)).values():
        value = getattr(sink, item.attribute)
        if isinstance(value, Path) and value.name == str(item.default).format(feed=feed_name):
            changes[item.attribute] = value.with_name(str(item.default).format(feed=name))
    return msgspec.structs.replace(sink, **changes)
