"""Rules that compare keys with each other; each names the key to change, and says why.

A rule is not judged when one of the values that it compares could not be read. One value's own rules are its kind's.
"""

from __future__ import annotations

import os.path
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path

import msgspec

from .config_access import check_access
from .config_cluster_checks import check_cluster
from .config_intake_checks import check_intakes
from .config_kinds import quoted
from .config_model import Config, Feed, SteeredSlack
from .config_read import Key, Place, Reading, declared
from .config_sink_checks import check_sinks
from .config_sinks import SINK_KINDS, RemoteWriteConfig, SinkConfig
from .ingest.compiled import serves
from .ingest.pointer import Fields, PointerError


@dataclass(frozen=True, slots=True)
class Rule:
    """`broken` tells whether the first of `keys` is wrong, given the second; {} in `sentence` is the second's value."""

    keys: tuple[str, str]
    broken: Callable[[Feed], bool]
    sentence: str


FEED_RULES = (
    Rule(
        ("slack.at_least", "slack.at_most"),
        lambda feed: isinstance(feed.slack_ns, SteeredSlack) and feed.slack_ns.at_least_ns > feed.slack_ns.at_most_ns,
        "is longer than at_most = {}",
    ),
    Rule(
        ("hold_at_most", "slack"),
        lambda feed: feed.hold_at_most_ns < feed.longest_slack_ns,
        "is shorter than slack = {}: no event could wait for all of its slack",
    ),
    Rule(
        ("order", "source"),
        lambda feed: feed.order == "source" and feed.source is None,
        "needs a `source` pointer, so that events can be told apart by their source",
    ),
    Rule(
        ("order", "clock"),
        lambda feed: feed.order == "source" and feed.clock == "arrival",
        "contradicts clock = {}: by the arrival clock no source waits for another, so leave `order` out",
    ),
    Rule(
        ("idle_after", "slack"),
        lambda feed: feed.order == "source" and feed.idle_after_ns < feed.longest_slack_ns,
        'is shorter than slack = {}: with order = "source" what is held of an idle source is let go, so no event could '
        "wait for all of its slack",
    ),
    Rule(
        ("decoding", "id"),
        lambda feed: feed.decoding == "compiled" and not serves(feed.time.at, feed.source, feed.id),
        "reads events whose time and source are two members of the event itself (such as /time), and which have no id "
        'pointer: leave it out, or write decoding = "plain"',
    ),
    Rule(
        ("body_bytes_at_most", "decoded_bytes_at_most"),
        lambda feed: feed.body_bytes_at_most > feed.decoded_bytes_at_most,
        "is more than decoded_bytes_at_most = {}: such a body would be refused after it was read",
    ),
    Rule(
        ("event_bytes_at_most", "decoded_bytes_at_most"),
        lambda feed: feed.event_bytes_at_most > feed.decoded_bytes_at_most,
        "is more than decoded_bytes_at_most = {}: such an event could never arrive",
    ),
    Rule(
        ("decoded_bytes_at_most", "journal.segment_bytes"),
        lambda feed: feed.decoded_bytes_at_most > feed.journal.segment_bytes,
        "is more than journal.segment_bytes = {}: such a request would fit in no segment",
    ),
    Rule(
        ("journal.at_most", "journal.segment_bytes"),
        lambda feed: feed.journal.at_most_bytes < 2 * feed.journal.segment_bytes,
        "is less than twice journal.segment_bytes = {}: one segment is filled while another is still needed",
    ),
    Rule(
        ("events_at_most", "held_events_at_most"),
        lambda feed: feed.events_at_most > feed.held_events_at_most,
        "is more than held_events_at_most = {}: such a request could never be taken",
    ),
    Rule(
        ("batch_events_at_most", "undelivered_events_at_most"),
        lambda feed: feed.batch_events_at_most > feed.undelivered_events_at_most,
        "is more than undelivered_events_at_most = {}: such a batch could never leave",
    ),
    Rule(
        ("expect_sources", "source"),
        lambda feed: bool(feed.expect_sources) and feed.one_source,
        "names sources, but the feed has no `source` pointer to recognise them by",
    ),
    Rule(
        ("expect_sources", "sources_at_most"),
        lambda feed: len(feed.expect_sources) > feed.sources_at_most,
        "names more sources than sources_at_most = {}",
    ),
)


def check(config: Config, reading: Reading) -> None:
    """Judge every rule; what is broken becomes a fault of `reading`."""
    if not config.feeds and not reading.is_faulty(("feed",)):
        reading.fault(("feed",), 'is missing: write [[feed]] and, below it, name = "..."')
    for index, feed in enumerate(config.feeds):
        for rule in FEED_RULES:
            _judge(rule, feed, ("feed", index), reading)
        _check_pointers(feed, ("feed", index), reading)
    check_access(config.access, config.tls, reading)
    _check_names(config, reading)
    _check_sink_names(config, reading)
    _check_sink_paths(config, reading)
    check_sinks(_sinks(config, reading), reading)
    _check_series_of_sources(config, reading)
    check_intakes(config.feeds, reading)
    check_cluster(config, reading)


def _judge(rule: Rule, feed: Feed, place: Place, reading: Reading) -> None:
    first, second = ((*place, *key.split(".")) for key in rule.keys)
    if not reading.is_faulty(first) and not reading.is_faulty(second) and rule.broken(feed):
        sentence = rule.sentence.format(_value(feed, second[2:], second in reading.written))
        reading.fault(first, sentence, _value(feed, first[2:], first in reading.written))


def _value(struct: msgspec.Struct, steps: Place, written: bool) -> str:
    """The value at a place below a struct, as TOML."""
    item = declared(type(struct))[str(steps[0])]
    value = getattr(struct, item.attribute)
    if isinstance(value, msgspec.Struct) and len(steps) == 1:
        return "{ ... }"
    if isinstance(item.mark, Key) and not isinstance(value, msgspec.Struct):
        shown = "unset" if value is None else item.mark.kind.show(value)
        return shown if written else f"{shown} (the default)"
    return _value(value, steps[1:], written)


def _check_pointers(feed: Feed, place: Place, reading: Reading) -> None:
    """No pointer may lead through the value of another: no event could satisfy both."""
    places = [(*place, "time", "at"), (*place, "source"), (*place, "id")]
    if any(map(reading.is_faulty, places)):
        return
    try:
        Fields(feed.time.at, str, feed.source, feed.id)
    except PointerError as error:
        last = [each for each in places if each in reading.written][-1]
        reading.fault(last, f"contradicts another pointer: {error}", _value(feed, last[2:], True))


def _check_series_of_sources(config: Config, reading: Reading) -> None:
    """Where order is kept within each source, samples of two sources in one series would not be in order."""
    for index, place, sink in _sinks(config, reading):
        feed = config.feeds[index]
        if feed.order != "source" or not isinstance(sink, RemoteWriteConfig) or reading.is_faulty(place):
            continue
        for number, series in enumerate(sink.series):
            here = (*place, "series", number)
            if not reading.is_faulty(here) and feed.source not in dict(series.labels).values():
                sentence = f'has no label at {feed.source}: with order = "source" each series must be of one source'
                reading.fault((*here, "labels"), sentence)


def _check_names(config: Config, reading: Reading) -> None:
    seen: dict[str, int] = {}
    for index, name in reading.feed_names.items():
        first = seen.setdefault(name, index)
        if first != index:
            reading.fault(("feed", index, "name"), f"is the name of feed[{first + 1}] already", quoted(name))


def _sinks(config: Config, reading: Reading) -> Iterator[tuple[int, Place, SinkConfig]]:
    """Index of the feed, place and sink of every sink that could be read."""
    for index, feed in enumerate(config.feeds):
        for sink_index, sink in enumerate(feed.sinks):
            place = ("feed", index, "sink", sink_index)
            if not reading.is_faulty(place):
                yield index, place, sink


def _check_sink_names(config: Config, reading: Reading) -> None:
    seen: dict[tuple[int, str], Place] = {}
    for index, place, sink in _sinks(config, reading):
        if reading.is_faulty((*place, "name")):
            continue
        first = seen.setdefault((index, sink.name.replace("-", "_")), place)
        if first != place:
            sentence = f"is the name of {reading.spelled(first)} already: give each sink of a feed a name of its own"
            reading.fault((*place, "name"), sentence, quoted(sink.name))


def _paths(config: Config, reading: Reading) -> Iterator[tuple[int, str, Place, Path]]:
    """Index of the feed, kind of the sink, place and value of every path that can be compared."""
    for index, place, sink in _sinks(config, reading):
        for item in declared(type(sink)).values():
            value, here = getattr(sink, item.attribute), (*place, item.key)
            # A default path is made of the feed's name, whose fault is told already.
            if isinstance(value, Path) and not any(map(reading.is_faulty, (here, ("feed", index, "name")))):
                yield index, sink.kind, here, value


def _check_sink_paths(config: Config, reading: Reading) -> None:
    """Feeds may share a file or a folder of one kind of sink, which tells them apart; two sinks of one feed may not."""
    seen: dict[tuple[Path, int | str], Place] = {}  # by feed, and by kind
    kept = Path(os.path.normpath((config.data_dir / "feeds").absolute()))
    for index, kind, place, value in _paths(config, reading):
        where = Path(os.path.normpath(value.absolute()))
        others: list[int | str] = [index, *(other for other in SINK_KINDS if other != kind)]
        first = next((seen[where, other] for other in others if (where, other) in seen), None)
        if first is not None:
            sentence = f"is where {reading.spelled(first)} writes already: give each sink a place of its own"
            reading.fault(place, sentence, quoted(str(value)))
        elif kept == where or kept in where.parents:
            reading.fault(place, "lies in the folder that the service keeps its journals in", quoted(str(value)))
        seen.setdefault((where, index), place)
        seen.setdefault((where, kind), place)
