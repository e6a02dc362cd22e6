"""What the instances of a cluster say of themselves in their heartbeats, and the document that comes of all of it.

Values in, values out: no broker, no clock, no decision.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping
from typing import Any

import msgspec

from ..config_cluster import partition_name
from ..ingest.timestamps import format_rfc3339
from .balance import Partition
from .looks import Look, Seen

# A heartbeat has room for 1,024 partitions, which is all that leases can be looked at: 230 bytes each, and their words.
WORDS_BYTES_AT_MOST = 200
OWNED, TAKING_OVER, GIVING_BACK, NOBODYS = "owned", "taking over", "giving back", "nobody's"


class Progress(msgspec.Struct, frozen=True, omit_defaults=True):
    """How far an owner is: what is used of `Owner.status()`. The watermark in RFC 3339."""

    behind_messages: int | None = None
    watermark: str | None = None
    watermark_age_s: float | None = None
    words: str = ""  # what hinders it, within WORDS_BYTES_AT_MOST


class PartitionStatus(msgspec.Struct, frozen=True, omit_defaults=True):
    """A partition, as the instance that holds its lease sees it."""

    feed: str
    partition: int
    state: str
    since_ns: int
    fence: int
    progress: Progress = Progress()


class Status(msgspec.Struct, frozen=True, omit_defaults=True):
    """The value of a heartbeat."""

    run: str  # of this process alone
    since_ns: int
    listen: str
    feeds: dict[str, int]  # feed -> number of partitions, as this instance is configured
    unable: bool = False  # it failed to start a partition a short while ago
    leaving: bool = False  # it is being stopped
    trouble: str = ""
    digest: str = ""  # of the settings by which it reads messages; nothing from one that tells none
    partitions: tuple[PartitionStatus, ...] = ()


class Ownership(msgspec.Struct, frozen=True):
    """The value of the lease of a partition; of one taking alone, since no instance takes two things at one time."""

    instance: str
    since_ns: int


def encoded(value: Status | Ownership) -> bytes:
    """As a lease's value."""
    return msgspec.json.encode(value)


def status_in(seen: Seen) -> Status | None:
    """The status in a heartbeat; None where it cannot be read (another version wrote it)."""
    try:
        return msgspec.json.decode(seen.value, type=Status)
    except msgspec.MsgspecError:
        return None


def owner_in(seen: Seen) -> Ownership:
    """Who owns a partition; an unreadable value is somebody's whose name is not known."""
    try:
        return msgspec.json.decode(seen.value, type=Ownership)
    except msgspec.MsgspecError:
        return Ownership("?", 0)


def progress_of(told: Mapping[str, object]) -> Progress:
    """What of an owner's status is shown; nothing where it is not as agreed."""
    try:
        found = msgspec.convert(dict(told), Progress)
    except msgspec.ValidationError:
        return Progress()
    return msgspec.structs.replace(found, words=_shortened(found.words))


def _shortened(words: str) -> str:
    """Within its room as JSON, where a character may take six bytes; no lone surrogates, which that cannot hold."""
    words = words.encode(errors="replace").decode()
    found, kept = words, words[:WORDS_BYTES_AT_MOST]
    while len(msgspec.json.encode(found)) > WORDS_BYTES_AT_MOST:
        kept = kept[:-8]
        found = f"{kept} ..."
    return found


def feeds_of(partitions: Iterable[Partition]) -> dict[str, int]:
    """feed -> number of partitions."""
    found: dict[str, int] = {}
    for each in partitions:
        found[each.feed] = found.get(each.feed, 0) + 1
    return found


def cluster_document(
    me: str, own: Status, look: Look | None, partitions: Iterable[Partition], now_monotonic_s: float
) -> dict[str, Any]:
    """`instances` and `partitions` of GET /v1/cluster: of this instance by itself, of the others as it saw them last.

    What was seen grows older until the next look, and watermarks with it.
    """
    since_s = 0.0 if look is None else max(0.0, now_monotonic_s - look.at_s)
    seen: dict[str, tuple[Status | None, float]] = {
        name: (status_in(each), each.age_s + since_s) for name, each in (look.instances if look else {}).items()
    }
    seen[me] = own, 0.0
    told = {
        Partition(part.feed, part.partition): (name, part, age_s)
        for name, (status, age_s) in seen.items()
        if status is not None
        for part in status.partitions
    }
    owners = {
        each: (found.instance, found.since_ns, entry.revision)
        for each, entry in (look.owners if look else {}).items()
        if (found := owner_in(entry)).instance in seen and found.instance != me
    }
    owners |= {each: (me, part.since_ns, part.fence) for each, (name, part, _) in told.items() if name == me}
    rows = [_partition_row(each, owners.get(each), told.get(each), me) for each in partitions]
    names = [owner[0] for each in partitions if (owner := owners.get(each))]
    return {
        "instances": [_instance_row(name, *seen[name], names.count) for name in sorted(seen)],
        "partitions": rows,
    }


def _instance_row(name: str, status: Status | None, age_s: float, owns: Callable[[str], int]) -> dict[str, Any]:
    return {
        "instance": name,
        "since": format_rfc3339(status.since_ns) if status else None,
        "seen_s": round(age_s, 3),
        "owns": owns(name),
        "listen": status.listen if status else None,
    }


def _partition_row(
    each: Partition, owner: tuple[str, int, int] | None, told: tuple[str, PartitionStatus, float] | None, me: str
) -> dict[str, Any]:
    """One partition. What an instance told counts only where the lease is that instance's."""
    name, since_ns, revision = owner or (None, None, None)
    part, age_s = (told[1], told[2]) if told and told[0] == name else (None, 0.0)
    progress = part.progress if part else Progress()
    age = progress.watermark_age_s
    return {
        "feed": each.feed,
        "partition": each.number,
        "runtime": partition_name(each.feed, each.number),
        "owner": name,
        "since": None if since_ns is None else format_rfc3339(since_ns),
        "fence": part.fence if part else revision,
        "state": NOBODYS if name is None else part.state if part else TAKING_OVER,
        "behind_messages": progress.behind_messages,
        "watermark": progress.watermark,
        "watermark_age_s": None if age is None else round(age + age_s, 3),
        "words": progress.words,
        "here": name == me,
    }
