"""Rules on a cluster that compare keys: what belongs to it, what is not possible in it, names, and who reads what.

A rule is not judged when one of the values that it compares could not be read. One value's own rules are its kind's.
"""

from __future__ import annotations

import re
import socket
from collections.abc import Iterator
from typing import TYPE_CHECKING

from .config_broker_kinds import PARTITION
from .config_cluster import NAME_CHARACTERS_AT_MOST, PARTITIONS_AT_MOST, Partitions, partition_name
from .config_intake_checks import check_secrets
from .config_kinds import quoted
from .config_read import Place, Reading
from .config_units import duration_text

if TYPE_CHECKING:
    from .config_model import Config, Feed

_NUMBER = re.compile(r"0|[1-9][0-9]{0,3}", re.ASCII)


def check_cluster(config: Config, reading: Reading) -> None:
    """Judge `[cluster]` and the `partitions` that could be read; what is wrong becomes a fault of `reading`.

    To be called after the feeds' own names were judged.
    """
    _check_table(config, reading)
    for index, feed, partitions in _partitioned(config, reading):
        if config.cluster is None and not reading.is_faulty(("cluster",)):
            sentence = (
                "needs a cluster: write [cluster] with a name and urls, or take events by HTTP or [[feed.intake]]"
            )
            reading.fault(("feed", index, "partitions"), sentence)
        _check_feed(feed, partitions, index, reading)
        _check_source(feed, partitions, index, reading)
        stream: Place = ("feed", index, "partitions", "stream")
        own = config.cluster is not None and partitions.stream == f"{config.cluster.name}-log"
        if own and not reading.is_faulty(stream) and not reading.is_faulty(("cluster", "name")):
            sentence = "is the cluster's own log: name the stream that producers publish to, or rename the cluster"
            reading.fault(stream, sentence, quoted(partitions.stream))
    _check_total(config, reading)
    _check_names(config, reading)
    _check_subjects(config, reading)


def _check_total(config: Config, reading: Reading) -> None:
    """One look at the bucket of leases reads them all, and no more than PARTITIONS_AT_MOST."""
    total = 0
    for index, _, partitions in _partitioned(config, reading):
        if reading.is_faulty(("feed", index, "partitions", "count")):
            continue
        total += partitions.count
        if total > PARTITIONS_AT_MOST >= total - partitions.count:
            sentence = f"makes {total:,} partitions of all feeds together: {PARTITIONS_AT_MOST:,} is the most"
            reading.fault(("feed", index, "partitions", "count"), sentence, str(partitions.count))


def _partitioned(config: Config, reading: Reading) -> Iterator[tuple[int, Feed, Partitions]]:
    """Every feed with partitions that could be read, with its index."""
    for index, feed in enumerate(config.feeds):
        if feed.partitions is not None and not reading.is_faulty(("feed", index, "partitions")):
            yield index, feed, feed.partitions


def _check_table(config: Config, reading: Reading) -> None:
    if config.cluster is None or reading.is_faulty(("cluster",)):
        return
    check_secrets(config.cluster, ("cluster",), reading)
    if not config.cluster.instance:
        host = quoted(socket.gethostname())
        sentence = f'is missing, and the host\'s name {host} has no letter or digit for it: write instance = "..."'
        reading.fault(("cluster", "instance"), sentence)
    places: list[Place] = [("feed",), *(("feed", index, "partitions") for index in range(len(config.feeds)))]
    if not any(feed.partitions for feed in config.feeds) and not any(map(reading.is_faulty, places)):
        reading.fault(("cluster",), "has nothing to share: give a feed `partitions`, or leave the table out")


def _check_feed(feed: Feed, partitions: Partitions, index: int, reading: Reading) -> None:
    """What a feed with partitions cannot have."""
    intakes: Place = ("feed", index, "intake")
    if feed.intakes and not reading.is_faulty(intakes):
        sentence = "contradicts `partitions`: the cluster reads the feed's stream by itself; take one of them out"
        reading.fault(intakes, sentence)
    retain: Place = ("feed", index, "journal", "retain")
    if feed.journal.retain_ns and not reading.is_faulty(retain):
        sentence = (
            "contradicts `partitions`: in a cluster the journal is made anew by each owner, so no captures are kept; "
            "leave it out, and let the stream keep its messages longer"
        )
        reading.fault(retain, sentence, quoted(duration_text(feed.journal.retain_ns)))
    expected: Place = ("feed", index, "expect_sources")
    places: list[Place] = [expected, ("feed", index, "partitions", "count")]
    if feed.expect_sources and not any(map(reading.is_faulty, places)) and partitions.count > 1:
        sentence = (
            f"contradicts partitions.count = {partitions.count}: a source comes in one partition, and all others would "
            "wait for it; leave it out"
        )
        reading.fault(expected, sentence)


def _check_source(feed: Feed, partitions: Partitions, index: int, reading: Reading) -> None:
    place: Place = ("feed", index, "partitions", "source", "subject_token")
    if partitions.source is None or reading.is_faulty(place):
        return
    number, tokens = partitions.source.subject_token, partitions.subject.split(".")
    subject = f"subject = {quoted(partitions.subject)}"
    if feed.source is not None and not reading.is_faulty(("feed", index, "source")):
        sentence = f"contradicts the feed's source = {quoted(feed.source)}: take it from events, or from the subject"
        reading.fault(place, sentence, str(number))
    if reading.is_faulty(("feed", index, "partitions", "subject")):
        return
    if number <= len(tokens) and tokens[number - 1] == PARTITION:
        reading.fault(place, f"is the partition in {subject}: name the token that has the source", str(number))
    elif number > len(tokens) and tokens[-1] != ">":
        reading.fault(place, f"is beyond {subject}, which has {len(tokens)} tokens: name one of them", str(number))


def _check_names(config: Config, reading: Reading) -> None:
    """A partition's name must fit, and be nobody else's."""
    seen: dict[str, str] = {}
    for index, feed in enumerate(config.feeds):
        if not reading.is_faulty(("feed", index, "name")):
            seen[feed.name] = f"the name of feed[{index + 1}]"
    for index, feed, partitions in _partitioned(config, reading):
        place: Place = ("feed", index, "name")
        if reading.is_faulty(place) or reading.is_faulty(("feed", index, "partitions", "count")):
            continue
        names = [partition_name(feed.name, partition) for partition in range(partitions.count)]
        if len(names[-1]) > NAME_CHARACTERS_AT_MOST:
            sentence = (
                f"gives a partition the name {quoted(names[-1])} of more than {NAME_CHARACTERS_AT_MOST} characters"
            )
            reading.fault(place, f"{sentence}: shorten it", quoted(feed.name))
            continue
        taken = next((name for name in names if name in seen), None)
        if taken is not None:
            sentence = (
                f"gives a partition the name {quoted(taken)}, which is {seen[taken]} already: rename one of the two"
            )
            reading.fault(place, sentence, quoted(feed.name))
        seen |= dict.fromkeys(names, f"the name of a partition of feed[{index + 1}]")


def _check_subjects(config: Config, reading: Reading) -> None:
    """A message belongs to one feed."""
    seen: list[tuple[int, Partitions]] = []
    for index, _, partitions in _partitioned(config, reading):
        place: Place = ("feed", index, "partitions")
        if any(reading.is_faulty((*place, key)) for key in ("stream", "subject", "count")):
            continue
        for first, other in seen:
            if partitions.stream == other.stream and overlap(partitions, other):
                sentence = (
                    f"has messages of stream {partitions.stream} that {reading.spelled(('feed', first, 'partitions'))} "
                    f"reads too, by subject = {quoted(other.subject)}: each message is of one feed; tell them apart"
                )
                reading.fault((*place, "subject"), sentence, quoted(partitions.subject))
                break
        seen.append((index, partitions))


def overlap(first: Partitions, second: Partitions) -> bool:
    """Whether a subject could belong to partitions of both."""
    one, two = first.subject.split("."), second.subject.split(".")
    for ours, theirs in zip(one, two, strict=False):
        if ">" in (ours, theirs):  # it stands for one token at least, and the other has one here
            return True
        if not (_holds(ours, theirs, first.count) or _holds(theirs, ours, second.count)):
            return False
    return len(one) == len(two)


def _holds(token: str, other: str, count: int) -> bool:
    """Whether a token of a filter stands for what another one names, or may stand for."""
    if token == PARTITION:
        return other == PARTITION or (_NUMBER.fullmatch(other) is not None and int(other) < count)
    return token in ("*", other)
