"""Leases: entries of a key-value bucket on the brokers that vanish unless they are renewed in time.

Taking, renewing and giving back one, and looking at all. Who should take which is `balance`; when to renew, and what to
do about a lease that is lost, is `member`. Safety rests on the log's compare-and-set, never on what is valid here.

The bucket's own time to live is used: an entry's is not renewed by nats-py's `update`. The bucket lies in files: its
revisions are fences and must ascend over restarts of the brokers.
"""

from __future__ import annotations

import math
import re
import time
from collections.abc import Callable
from dataclasses import dataclass, field
from typing import Self

import msgspec
from nats.js import JetStreamContext, api
from nats.js.errors import APIError, BucketNotFoundError, KeyNotFoundError, KeyWrongLastSequenceError, NotFoundError
from nats.js.kv import KeyValue

from ..errors import StrandlineError
from ..nats_client import NOT_THERE, Client, words_of
from .balance import Partition
from .link import Away
from .looks import Look, Seen

# Validity ends a tenth of the lease before the entry can: in this time an owner that learns nothing any more must have
# stopped. 1.5 s of 15: a loop that lags, a processor that is taken away, clocks that run at different rates (500 ppm at
# most, 8 ms of 15 s). Renewing at a fifth leaves 10.5 s to try again: of three brokers the leader was killed, and after
# 4 to 8 s all leases were renewed.
MARGIN_SHARE = 0.1
# An answer is waited for so long: 1.5 s of 15. What is asked while there is no leader is lost, and must be asked again.
ANSWER_SHARE = 0.1
ANSWER_AT_LEAST_S, ANSWER_AT_MOST_S = 0.3, 2.5
MAKE_WITHIN_S = 5.0  # a bucket of three replicas must elect a leader first
VALUE_BYTES_AT_MOST = 512 * 1024  # of an entry: the status of an instance with some 2,000 partitions
NO_STREAM = 10059  # the server's error code
TRIES = 2  # of one call, where the entry turns out to be ours still; compare-and-set makes the second one safe
_INSTANCE, _OWNER = "instance.", "owner."
_KEY = re.compile(r"[A-Za-z0-9_=/-]+(?:\.[A-Za-z0-9_=/-]+)*", re.ASCII)
_TROUBLE = (APIError, *NOT_THERE)


class BucketGone(Away):
    """There is no bucket any more: `open` makes it anew."""


class LeaseLost(StrandlineError):
    """It is no longer ours, or could not be renewed in time."""


@dataclass(slots=True)
class Held:
    """A lease of ours. Changed only by `Leases`, on one event loop."""

    key: str
    fence: int  # the revision of its taking: ascends over the life of the bucket
    revision: int
    valid_until_s: float  # on the monotonic clock
    sent: set[bytes] = field(default_factory=set, repr=False)  # what may stand in the entry by our doing

    def valid(self, now_monotonic_s: float) -> bool:
        """Whether nobody else can have it yet."""
        return now_monotonic_s < self.valid_until_s


def instance_key(instance: str) -> str:
    """The key of an instance's heartbeat. Raises StrandlineError for a name that the brokers would not take."""
    return _checked(_INSTANCE + instance)


def owner_key(partition: Partition) -> str:
    """The key of the ownership of a partition. Raises StrandlineError as `instance_key` does."""
    return _checked(f"{_OWNER}{partition.feed}.{partition.number}")


class Leases:
    """The bucket `{name}-leases`. Lives on one event loop, as long as its connection."""

    def __init__(
        self, client: Client, name: str, lease_s: float, *, clock: Callable[[], float] = time.monotonic
    ) -> None:
        """Over a bucket that is there and was looked at before; nothing is asked. `clock` gives monotonic seconds.

        After a leader is lost, questions about the bucket are answered last of all, and leases must be renewed first.
        """
        self._client, self.lease_s, self._clock = client, lease_s, clock
        self._stream, self._prefix = f"KV_{name}-leases", f"$KV.{name}-leases."
        self._jetstream = client.jetstream(timeout=answer_within_s(lease_s))
        self._bucket = KeyValue(f"{name}-leases", self._stream, self._prefix, self._jetstream, direct=True)
        self._seen: dict[str, tuple[int, float]] = {}  # key -> revision, and when it was seen first

    @classmethod
    async def open(
        cls, client: Client, name: str, lease_s: float, replicas: int, *, clock: Callable[[], float] = time.monotonic
    ) -> Self:
        """Find the bucket or make it.

        Raises Away; StrandlineError where the bucket is there and made otherwise, or cannot be made.
        """
        try:
            await _see_to_bucket(client.jetstream(timeout=MAKE_WITHIN_S), f"{name}-leases", lease_s, replicas)
        except NOT_THERE as error:
            if isinstance(error, APIError) and error.code not in (None, 503):
                raise StrandlineError(f"the lease bucket {name}-leases cannot be made: {words_of(error)}") from error
            raise Away(f"the brokers do not answer for the lease bucket {name}-leases: {words_of(error)}") from error
        return cls(client, name, lease_s, clock=clock)

    async def take(self, key: str, value: bytes) -> Held | None:
        """Take it, or None where somebody has it. `value` must be of this taking alone: by it ours is told from others.

        Raises Away where that cannot be found out. It may turn out to be taken then; nobody renews it, so it ends.
        """
        asked_s = self._clock()
        try:
            revision = await self._bucket.create(key, _small(value))
        except (KeyWrongLastSequenceError, KeyNotFoundError):  # or it ended just now: seen at the next look
            return None
        except _TROUBLE as error:
            found = await self._read(key)
            if found is None:
                raise Away(f"lease {key}: {words_of(error)}") from error
            if found[0] != value:
                return None
            revision = found[1]
        return Held(key, revision, revision, self._until_s(asked_s), {value})

    async def renew(self, held: Held, value: bytes) -> None:
        """Keep it for another lease, counted from now.

        Raises LeaseLost: end at once what rests on it. Raises Away where the brokers do not answer: try again, it is
        ours for as long as it is `valid`.
        """
        held.sent.add(_small(value))
        for tries_left in reversed(range(TRIES)):
            asked_s = self._clock()
            if not held.valid(asked_s):
                raise LeaseLost(f"lease {held.key} could not be renewed in time")
            try:
                revision = await self._bucket.update(held.key, value, last=held.revision)
            except _TROUBLE as error:
                await self._find(held, error, again=tries_left > 0)
            else:
                held.revision, held.valid_until_s, held.sent = revision, self._until_s(asked_s), {value}
                return

    async def give_back(self, held: Held) -> None:
        """Let others take it at once. Nothing happens where it is no longer ours. Raises Away: it ends by itself then.

        From here on it is valid no more, whatever comes of it.
        """
        held.valid_until_s = -math.inf
        for tries_left in reversed(range(TRIES)):
            try:
                await self._bucket.delete(held.key, last=held.revision)
                return
            except _TROUBLE as error:
                found = await self._read(held.key)
                if found is None or found[0] not in held.sent:
                    return
                if not tries_left:
                    raise Away(f"lease {held.key} was not given back: {words_of(error)}") from error
                held.revision = found[1]

    async def look(self) -> Look:
        """All entries, in two requests. Raises Away; StrandlineError above 1,024 instances or owners."""
        at_s = self._clock()
        found = {**await self._all(_INSTANCE), **await self._all(_OWNER)}
        self._seen = {
            key: old if (old := self._seen.get(key)) and old[0] == revision else (revision, at_s)
            for key, (_, revision) in found.items()
        }
        instances: dict[str, Seen] = {}
        owners: dict[Partition, Seen] = {}
        for key, (value, revision) in found.items():
            seen = Seen(value, revision, at_s - self._seen[key][1])
            if key.startswith(_INSTANCE):
                instances[key.removeprefix(_INSTANCE)] = seen
            elif (partition := _partition(key)) is not None:
                owners[partition] = seen
        return Look(at_s, instances, owners)

    # ---- what really stands there -----------------------------------------------------------------------------------

    def _until_s(self, asked_s: float) -> float:
        return asked_s + self.lease_s * (1 - MARGIN_SHARE)

    async def _find(self, held: Held, error: BaseException, *, again: bool) -> None:
        """After an update that was refused or whose answer was lost: learn the revision, if the entry is still ours.

        Validity is not prolonged by that: nobody knows which of our requests wrote it, and when.
        """
        found = await self._read(held.key)
        if found is None or found[0] not in held.sent:
            held.valid_until_s = -math.inf
            raise LeaseLost(f"lease {held.key} is {'nobody' if found is None else 'somebody else'}'s") from error
        held.revision = found[1]
        if not again:
            raise Away(f"lease {held.key} was not renewed: {words_of(error)}") from error

    async def _read(self, key: str) -> tuple[bytes, int] | None:
        """Value and revision, from the leader (a replica may lag behind it); None where nobody has it. Raises Away."""
        try:
            message = await self._jetstream.get_msg(self._stream, subject=self._prefix + key, direct=False)
        except NotFoundError as error:
            if error.err_code == NO_STREAM:
                raise BucketGone(f"the lease bucket is gone: {words_of(error)}") from error
            return None
        except _TROUBLE as error:
            raise Away(f"lease {key} cannot be read: {words_of(error)}") from error
        if (message.headers or {}).get("KV-Operation"):
            return None
        return message.data or b"", message.seq or 0

    async def _all(self, kind: str) -> dict[str, tuple[bytes, int]]:
        """The newest message of every key of one kind: a batched direct get, from server 2.11 on (its ADR-31)."""
        inbox, found = self._client.new_inbox(), dict[str, tuple[bytes, int]]()
        request = msgspec.json.encode({"multi_last": [f"{self._prefix}{kind}>"]})
        subscription = None
        try:
            subscription = await self._client.subscribe(inbox)
            await self._client.publish(f"$JS.API.DIRECT.GET.{self._stream}", request, reply=inbox)
            while True:
                message = await subscription.next_msg(answer_within_s(self.lease_s))
                headers = message.headers or {}
                if (status := headers.get("Status")) is not None:
                    break
                if "KV-Operation" not in headers:
                    key = headers["Nats-Subject"].removeprefix(self._prefix)
                    found[key] = message.data, int(headers["Nats-Sequence"])
        except _TROUBLE as error:
            raise Away(f"the leases cannot be looked at: {words_of(error)}") from error
        finally:
            if subscription is not None and self._client.is_connected:
                await subscription.unsubscribe()
        return _whole(status, headers.get("Nats-Num-Pending"), kind, found)


def answer_within_s(lease_s: float) -> float:
    """How long an answer of the brokers is waited for."""
    return min(ANSWER_AT_MOST_S, max(ANSWER_AT_LEAST_S, lease_s * ANSWER_SHARE))


async def _see_to_bucket(stream: JetStreamContext, name: str, lease_s: float, replicas: int) -> None:
    """Make the bucket where there is none. Raises StrandlineError where it is there and made otherwise."""
    try:
        bucket = await stream.key_value(name)
    except BucketNotFoundError:
        wanted = api.KeyValueConfig(
            bucket=name,
            description="Strandline: who lives and who owns which partition",
            ttl=lease_s,
            replicas=replicas,
            history=1,
            direct=True,
            storage=api.StorageType.FILE,
            max_value_size=VALUE_BYTES_AT_MOST,
        )
        bucket = await stream.create_key_value(wanted)  # the same once more changes nothing: several may begin at once
    found = (await bucket.status()).stream_info.config
    faults = []
    if not math.isclose(found.max_age or 0.0, lease_s, abs_tol=1e-6):
        faults.append(f"keeps entries for {found.max_age or 0:g} s, and cluster.lease is {lease_s:g} s")
    if found.num_replicas != replicas:
        faults.append(f"has {found.num_replicas} replicas, and cluster.replicas is {replicas}")
    if found.max_msgs_per_subject != 1 or not found.allow_direct or found.storage != api.StorageType.FILE:
        faults.append("was not made by this service (history 1, in files, direct reads)")
    if faults:
        raise StrandlineError(
            f"the lease bucket {name} {' and '.join(faults)}: give all instances the bucket's values, or stop them all "
            f"and delete the stream KV_{name}; it is then made anew"
        )


def _whole(
    status: str, pending: str | None, kind: str, found: dict[str, tuple[bytes, int]]
) -> dict[str, tuple[bytes, int]]:
    """What a batched get found, if it is all there is."""
    if status == "413":
        raise StrandlineError(f"there are more than 1,024 leases {kind}*: run fewer partitions or instances")
    if status not in ("204", "404") or pending not in (None, "0"):
        raise Away(f"the leases cannot be looked at: the server answers {status}")
    return found


def _small(value: bytes) -> bytes:
    if len(value) > VALUE_BYTES_AT_MOST:
        raise StrandlineError(f"a lease's value of {len(value)} bytes is larger than {VALUE_BYTES_AT_MOST}")
    return value


def _checked(key: str) -> str:
    if _KEY.fullmatch(key) is None:
        name = key.partition(".")[2]
        raise StrandlineError(f"{name!r} cannot be a lease's name: letters, digits, -, _, and dots between them only")
    return key


def _partition(key: str) -> Partition | None:
    feed, _, number = key.removeprefix(_OWNER).rpartition(".")
    return Partition(feed, int(number)) if feed and number.isascii() and number.isdigit() else None
