"""What hinders an instance of a cluster, in words: of itself, of others, of the client, of where a partition is."""

from __future__ import annotations

from typing import Any

import msgspec
import pytest
from hypothesis import given
from hypothesis import strategies as st
from nats.errors import Error as NatsError
from nats.errors import TimeoutError as NatsTimeout
from nats.js.errors import APIError, NotFoundError, ServiceUnavailableError
from strandline.cluster.balance import Partition
from strandline.cluster.causes import Cause, of_leases, of_settings, of_takeovers
from strandline.cluster.http import seen_by
from strandline.cluster.leases import VALUE_BYTES_AT_MOST
from strandline.cluster.looks import Look, Seen
from strandline.cluster.running import digest_of
from strandline.cluster.status import (
    WORDS_BYTES_AT_MOST,
    Ownership,
    PartitionStatus,
    Status,
    cluster_document,
    encoded,
    progress_of,
)
from strandline.cluster.whereabouts import parts, where_in
from strandline.config import parse
from strandline.nats_client import words_of

FEED = "river-gauges"


def status(digest: str = "d", **more: Any) -> Status:
    return Status("run", 0, "b:8600", more.pop("feeds", {FEED: 4}), digest=digest, **more)


def test_whose_settings_differ_is_named_and_who_tells_no_digest_is_not() -> None:
    other = "reads messages by other settings than this instance: give all the same configuration"
    assert list(of_settings(status(), {"b": status(), "old": status("")})) == []
    assert list(of_settings(status(""), {"b": status("e")})) == []
    assert [each.words for each in of_settings(status(), {"c": status("e"), "b": status()})] == [f"c {other}"]
    (many,) = of_settings(status(), {name: status("e") for name in "edcbf"})
    assert many.words == f"b, c, d and 2 more {other.replace('reads', 'read')}"
    (counts,) = of_settings(status(), {"b": status("e", feeds={FEED: 5})})
    assert counts.words == "b has other feeds or counts of partitions: give all instances one configuration"


def test_what_becomes_of_leases_without_a_broker() -> None:
    assert list(of_leases(None, [])) == [], "one that owns nothing stops nothing"
    assert list(of_leases(6.6, [])) == [Cause("lease", "what it owns it stops in 7 s unless they answer")]
    assert list(of_leases(0.4, [])) == list(of_leases(-3.0, [])) == [Cause("lease", "what it owns it is stopping now")]
    (stopped,) = of_leases(None, [f"{FEED}-{number}" for number in range(64)])
    assert stopped.words == f"stopped, for want of a renewed lease: {FEED}-0, {FEED}-1, {FEED}-2 and 61 more"


def test_who_could_not_take_over_is_named() -> None:
    found = of_takeovers("a", "x-0: its disk is full", {"c": status(), "b": status(trouble="x-1: no way")})
    assert [each.words for each in found] == [
        "a could not take over x-0: its disk is full",
        "b could not take over x-1: no way",
    ]


def test_who_may_not_see_all_partitions_is_told_of_no_other() -> None:
    causes = [*of_takeovers("a", "x-0: its disk is full", {}), *of_settings(status(), {"b": status("e")})]
    document = {
        "partitions": [{"runtime": name} for name in ("x-0", "y-0")],
        "causes": [each._asdict() for each in causes],
        "words": "; ".join(each.words for each in causes),
        "connected": True,
    }
    assert seen_by(document, lambda name: True) == document
    some = seen_by(document, lambda name: name == "y-0")
    assert some["partitions"] == [{"runtime": "y-0"}] and some["connected"]
    assert [each["about"] for each in some["causes"]] == ["settings"]
    assert "x-0" not in str(some) and some["words"].startswith("b reads messages by other settings")


TEXT = """
[cluster]
name = "river"
urls = ["nats://127.0.0.1:4222"]
[[feed]]
name = "river-gauges"
time = { at = "/t" }
partitions = { stream = "RIVER", subject = "part.{partition}.>", count = 4 }
[[feed]]
name = "radio-5"
"""


@pytest.mark.parametrize(
    ("old", "new", "same"),
    [
        ('at = "/t"', 'at = "/u"', False),
        ("count = 4", "count = 5", False),
        ("count = 4", 'count = 4, content_type = "application/json"', False),
        ('name = "river-gauges"', 'name = "river-gauges"\nsource = "/station"', False),
        ('name = "river-gauges"', 'name = "river-gauges"\nid = "/id"', False),
        ('name = "river-gauges"', 'name = "river-gauges"\nevent_bytes_at_most = "2MiB"', False),
        ('name = "radio-5"', 'name = "radio-5"\nid = "/id"', True),
        ('name = "river"\n', 'name = "river"\ninstance = "b"\n', True),
    ],
)
def test_a_digest_is_of_what_decides_how_messages_are_read(old: str, new: str, same: bool) -> None:
    assert TEXT.count(old) == 1
    assert (digest_of(parse(TEXT, {})) == digest_of(parse(TEXT.replace(old, new), {}))) is same


# ---- what heartbeats carry ------------------------------------------------------------------------------------------


@given(st.text(max_size=400))
def test_words_of_a_partition_are_carried_within_their_room(words: str) -> None:
    found = progress_of({"behind_messages": 3, "words": words}).words
    assert len(msgspec.json.encode(found)) <= WORDS_BYTES_AT_MOST
    assert found == words or (found.endswith(" ...") and words.startswith(found.removesuffix(" ...")))


def test_a_heartbeat_holds_all_partitions_that_there_can_be_all_of_them_hindered() -> None:
    told = {"behind_messages": 10**9, "watermark": "2026-12-01T20:12:57.123456789Z", "watermark_age_s": 86399.999}
    progress = progress_of({**told, "words": '"' * 999})
    each = [PartitionStatus("f" * 60, number, "taking over", 10**18, 10**9, progress) for number in range(1024)]
    assert len(encoded(status(partitions=tuple(each)))) <= VALUE_BYTES_AT_MOST


def test_words_of_another_instances_partition_come_into_the_document() -> None:
    mine, theirs = (
        PartitionStatus(FEED, number, "owned", 0, 1, progress_of({"words": f"w{number}"})) for number in (0, 1)
    )
    look = Look(
        1.0,
        {"b": Seen(encoded(status(partitions=(theirs,))), 2, 0.0)},
        {Partition(FEED, 1): Seen(encoded(Ownership("b", 0)), 3, 0.0)},
    )
    partitions = [Partition(FEED, number) for number in range(3)]
    document = cluster_document("a", status(partitions=(mine,)), look, partitions, 1.0)
    assert [row["words"] for row in document["partitions"]] == ["w0", "w1", ""]


# ---- errors of the client -------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("error", "words"),
    [
        (ServiceUnavailableError(code=503, err_code=10008, description="system temporarily unavailable"),
         "system temporarily unavailable"),
        (ServiceUnavailableError(), "JetStream is not available there now"),
        (NotFoundError(), "not found"),
        (APIError(), "the server refuses it without a word"),
        (NatsTimeout(), "timeout"),
        (TimeoutError(), "no answer in time"),
        (ConnectionRefusedError(111, "Connect call failed ('127.0.0.1', 4222)"),
         "nobody listens at 127.0.0.1, port 4222"),
        (OSError("Multiple exceptions: [Errno 111] Connect call failed ('::1', 4222, 0, 0), [Errno 111] Connect call "
                 "failed ('127.0.0.1', 4222)"),
         "nobody listens at ::1, port 4222, nobody listens at 127.0.0.1, port 4222"),
        (NatsError("nats: 'Authorization Violation'"),
         "it refuses this user, password or token (Authorization Violation)"),
        (OSError(-2, "Name or service not known"), "Name or service not known"),
        (ValueError("nats: odd\n  thing"), "odd thing"),
    ],
)  # fmt: skip
def test_errors_of_the_client_in_plain_words(error: BaseException, words: str) -> None:
    assert words_of(error) == words


# ---- where a partition is -------------------------------------------------------------------------------------------


def told(owner: str | None, *, here: bool = False, **more: Any) -> dict[str, Any]:
    rows = [{"runtime": f"{FEED}-4", "owner": owner, "here": here}]
    there = [{"instance": "s-0", "listen": None}, {"instance": "s-2", "listen": "10.0.0.3:8600"}]
    return {"instance": "s-0", "connected": True, "away_s": None, "instances": there, "partitions": rows, **more}


@pytest.mark.parametrize(
    ("document", "words"),
    [
        (told("s-2"), "is owned by s-2 (10.0.0.3:8600): ask there"),
        (told("s-9"), "is owned by s-9: ask there"),
        (told(None), "is nobody's now: `strandline cluster`, or GET /v1/cluster, shows what hinders it"),
        (told("s-0", here=True), "is being taken over or given back here: ask again in a moment"),
        (told("s-2", connected=False), "s-0 is cut off from the cluster and cannot tell where it is"),
        (told("s-2", away_s=9.0), "s-0 is cut off from the cluster and cannot tell where it is"),
    ],
)
def test_where_a_partition_is(document: dict[str, Any], words: str) -> None:
    found = where_in(document, f"{FEED}-4")
    assert found.startswith(f"partition {FEED}-4 ") and words in found


def test_a_feed_that_has_partitions_names_them() -> None:
    assert parts(FEED, 6).startswith(f"feed {FEED} has partitions, {FEED}-0 to -5: ask for one of them; `strandline cl")
    assert parts(FEED, 1).startswith(f"feed {FEED} has one partition, {FEED}-0: ")
