"""The configuration, case by case: defaults, every kind of fault and its advice."""

from __future__ import annotations

import re
from pathlib import Path

import pytest
from strandline import config_model, sinks
from strandline.clock import SystemClock
from strandline.config import Address, Config, Feed, NdjsonConfig, SqliteConfig, load, parse
from strandline.config_read import declared, tables_of
from strandline.core.settings import Settings
from strandline.errors import ConfigError

DEPLOY = Path(__file__).resolve().parents[2] / "deploy"
FEED = '[[feed]]\nname = "river-gauges"\n'


def faults(text: str, **environ: str) -> list[str]:
    """The faults of a text, which must have some."""
    with pytest.raises(ConfigError) as caught:
        parse(text, environ, "s.toml")
    return caught.value.faults


def only_fault(text: str, **environ: str) -> str:
    """The one fault of a text."""
    found = faults(text, **environ)
    assert len(found) == 1, found
    return found[0]


def feed_of(text: str, **environ: str) -> Feed:
    """The one feed of a text without faults."""
    (feed,) = parse(text, environ).feeds
    return feed


def test_a_name_is_enough() -> None:
    config = parse(FEED, {})
    assert config.listen == Address("127.0.0.1", 8600)
    assert (config.data_dir, config.drain_at_most_ns) == (Path("strandline-data"), 20 * 10**9)
    (feed,) = config.feeds
    assert feed.settings() == Settings(name="river-gauges")
    assert feed.settings().slack_ns == 5 * 10**9
    assert (feed.time.at, feed.time.unit, feed.source, feed.id) == ("/time", "rfc3339", None, None)
    assert feed.sinks == (SqliteConfig(name="sqlite", path=Path("strandline-data/river-gauges.db")),)
    assert config.feed("river-gauges") is feed
    assert config.feed("other") is None
    assert config.feed_dir(feed) == Path("strandline-data/feeds/river-gauges")


def test_the_committed_files_load() -> None:
    full = load(DEPLOY / "strandline.toml", {})
    assert [feed.name for feed in full.feeds] == ["river-gauges", "radio-gateways"]
    assert isinstance(full.feeds[0].sinks[1], NdjsonConfig)
    assert load(DEPLOY / "minimal.toml", {}) == parse(FEED, {})


def test_the_full_file_shows_the_defaults() -> None:
    """What the example does not mark with "here:" is the default."""
    lines = (DEPLOY / "strandline.toml").read_text().splitlines()
    kept = [line for line in lines if "here:" not in line]
    first = parse("\n".join(kept), {}).feeds[0]
    plain = feed_of(FEED + "[[feed.sink]]\nkind = 'sqlite'\n[[feed.sink]]\nkind = 'ndjson'\n")
    assert first == plain


def test_the_full_file_shows_every_key() -> None:
    text = (DEPLOY / "strandline.toml").read_text()
    for title, struct in tables_of(Config):
        for key in declared(struct):
            assert re.search(rf"(^|[ {{]){key} = |\[{key}\]|\[(feed\.)?{key}\]\]", text, re.MULTILINE), (title, key)


def test_every_value_reaches_settings_and_limits() -> None:
    feed = feed_of(
        FEED
        + """
        source = "/station"
        slack = "1.5s"
        idle_after = "2m"
        hold_at_most = "1h"
        ahead_limit = "250ms"
        clock = "arrival"
        expect_sources = ["gw-1", "gw-2"]
        held_events_at_most = 500_000
        undelivered_events_at_most = 400_000
        sources_at_most = 10
        batch_events_at_most = 7
        body_bytes_at_most = "1MB"
        decoded_bytes_at_most = "2MiB"
        event_bytes_at_most = "3kB"
        events_at_most = 9
        nesting_at_most = 5
        lanes_at_most = "2GB"
        journal = { segment_bytes = "4MiB", at_most = "8MiB" }
        """
    )
    assert feed.settings() == Settings(
        name="river-gauges",
        slack_ns=1_500_000_000,
        idle_after_ns=120 * 10**9,
        hold_at_most_ns=3_600 * 10**9,
        ahead_limit_ns=250_000_000,
        clock="arrival",
        expect_sources=("gw-1", "gw-2"),
        held_events_at_most=500_000,
        undelivered_events_at_most=400_000,
        sources_at_most=10,
        batch_events_at_most=7,
    )
    limits = feed.body_limits()
    assert (limits.body_bytes_at_most, limits.decoded_bytes_at_most) == (10**6, 2 * 2**20)
    assert (limits.event_bytes_at_most, limits.events_at_most, limits.nesting_at_most) == (3_000, 9, 5)
    assert (feed.lanes_at_most_bytes, feed.journal.segment_bytes) == (2 * 10**9, 4 * 2**20)
    assert feed.journal.at_most_bytes == 8 * 2**20


@pytest.mark.parametrize(
    ("text", "fault"),
    [
        # a key that is not known, with the key that was meant, or the table that it belongs to
        ("listn = 'x'\n" + FEED, "s.toml: listn is no key of the configuration; did you mean `listen`?"),
        (FEED + "slak = '5s'", 's.toml: feed[1].slak of "river-gauges" is no key of a feed; did you mean `slack`?'),
        (FEED + "Hold-At-Most = '5s'", "did you mean `hold_at_most`?"),
        (FEED + "zzz = 1", 's.toml: feed[1].zzz of "river-gauges" is no key of a feed'),
        ("slack = '5s'\n" + FEED, "s.toml: slack is no key of the configuration; it belongs to `feed`"),
        (FEED + "segment_bytes = '1MiB'", "is no key of a feed; it belongs to `feed.journal`"),
        (FEED + "listen = 'a:1'", "is no key of a feed; it belongs to the top of the file, before any [table]"),
        (
            FEED + "[[feed.sink]]\nkind = 'sqlite'\npth = 'x'",
            'feed[1].sink[1].pth of "river-gauges" is no key of a sink',
        ),
        (FEED + "time = { att = '/t' }", "is no key of `time`; did you mean `at`?"),
        # wrong types and units
        (
            FEED + "slack = 5",
            's.toml: feed[1].slack of "river-gauges" = 5 is no duration: write text with a unit, such as "5s"',
        ),
        (FEED + "slack = 5.0", "= 5.0 is no duration"),
        (FEED + "slack = true", "= true is no duration"),
        (FEED + "slack = '5'", '= "5" has no unit: write text such as "5s" (units: ns, us, ms, s, m, h, d)'),
        (FEED + "slack = '5 s'", '= "5 s" is no duration: write one number and one unit, such as "5s"'),
        (FEED + "slack = '5min'", 'has an unknown unit: "min" is none of ns, us, ms, s, m, h, d; did you mean m?'),
        (FEED + "slack = '5µs'", "did you mean us?"),
        (FEED + "slack = '5MiB'", '"MiB" is none of ns'),
        (FEED + "slack = '0.5ns'", "is no whole number of nanoseconds"),
        (FEED + "slack = '400d'\nhold_at_most = '366d'", "is outside of 0s to 366d"),
        (FEED + "idle_after = '0s'", "is outside of 1ms to 366d"),
        (FEED + "lanes_at_most = '64mib'", "did you mean MiB?"),
        (FEED + "lanes_at_most = '64M'", "did you mean MB or MiB?"),
        (FEED + "lanes_at_most = 1073741824", 'is no size: write text with a unit, such as "64MiB"'),
        (FEED + "nesting_at_most = '64'", '= "64" is no whole number: write digits without quotes'),
        (FEED + "nesting_at_most = true", "= true is no whole number"),
        (FEED + "nesting_at_most = 0", "= 0 is outside of 1 to 200"),
        (FEED + "clock = 'wall'", '= "wall" is none of event, arrival'),
        (
            FEED + "time = { unit = 'sec' }",
            'feed[1].time.unit of "river-gauges" = "sec" is none of rfc3339, s, ms, us, ns',
        ),
        (FEED + "time = '/t'", '= "/t" is no table: write time = { ... }'),
        (FEED + "source = 'station'", '= "station" is no JSON Pointer: a slash stands before every name'),
        (FEED + "source = '/a~2'", "is no JSON Pointer"),
        (FEED + "source = ''", "points at the whole event: name a field"),
        (FEED + "id = '" + "/a" * 65 + "'", "has more than 64 steps"),
        (FEED + "id = 5", "= 5 is no text: put it in quotes"),
        (FEED + f"id = '/{'x' * 2000}'", "is longer than 1,024 characters"),
        (FEED + "source = '/s'\nexpect_sources = 'a'", '= "a" is no list'),
        (FEED + "source = '/s'\nexpect_sources = ['a', 1]", "holds 1, which is no source of 1 to 256 bytes"),
        (FEED + "source = '/s'\nexpect_sources = ['a', 'b', 'a']", 'names "a" twice'),
        ("listen = '127.0.0.1'\n" + FEED, 's.toml: listen = "127.0.0.1" is no address: write "127.0.0.1:8600"'),
        ("listen = 'a:65536'\n" + FEED, "is no address"),
        ("listen = '::1:80'\n" + FEED, "is no address"),
        ("data_dir = ''\n" + FEED, "is no path"),
        ("limits = 3\n" + FEED, "s.toml: limits = 3 is no table"),
        # feeds and sinks
        ("", "s.toml: feed is missing: write [[feed]]"),
        ("feed = []", "s.toml: feed is missing"),
        ("[feed]\nname = 'a'", "s.toml: feed = a table is no list of tables: write [[feed]], with two brackets"),
        ("feed = [1]", "s.toml: feed[1] = 1 is no table: write [[feed]]"),
        ("[[feed]]", "s.toml: feed[1].name is missing: a feed needs it"),
        ("[[feed]]\nname = 'River'", 'feed[1].name of "River" = "River" is no name: 1 to 63 of a-z, 0-9 and -'),
        ("[[feed]]\nname = '-a'", "is no name"),
        (f"[[feed]]\nname = '{'a' * 64}'", "is no name"),
        (FEED + FEED, 'feed[2].name of "river-gauges" = "river-gauges" is the name of feed[1] already'),
        (FEED + "[feed.sink]\nkind = 'sqlite'", "is no list of tables: write [[feed.sink]], with two brackets"),
        (
            FEED + "[[feed.sink]]\npath = 'x'",
            'feed[1].sink[1].kind of "river-gauges" is missing: one of sqlite, ndjson',
        ),
        (FEED + "[[feed.sink]]\nkind = 'sqlite'\nname = 'lanes'", "is a name that the service uses itself"),
        (FEED + "[[feed.sink]]\nkind = 'sqllite'", "remote_write, jetstream, parquet; did you mean sqlite?"),
        (FEED + "[[feed.sink]]\nkind = 'parchment'", '= "parchment" is none of sqlite, ndjson, postgres, http, rem'),
        (
            FEED + "[[feed.sink]]\nkind = 'sqlite'\n[[feed.sink]]\nkind = 'sqlite'\npath = 'b.db'",
            'feed[1].sink[2].name of "river-gauges" = "sqlite" is the name of feed[1].sink[1]',
        ),
        (
            FEED + "[[feed.sink]]\nkind = 'sqlite'\n[[feed.sink]]\nkind = 'ndjson'\ndirectory = 'x/../river-gauges.db'",
            'is where feed[1].sink[1].path of "river-gauges" writes already',
        ),
        (FEED + "[[feed.sink]]\nkind = 'sqlite'\npath = 'feeds/x.db'", "lies in the folder that the service keeps its"),
        # keys compared with each other
        (
            FEED + "slack = '90s'",
            'feed[1].hold_at_most of "river-gauges" = "1m" (the default) is shorter than slack = "90s"',
        ),
        (FEED + "slack = '2s'\nhold_at_most = '1s'", '= "1s" is shorter than slack = "2s": no event could wait'),
        (FEED + "body_bytes_at_most = '65MiB'", 'is more than decoded_bytes_at_most = "64MiB" (the default)'),
        (FEED + "event_bytes_at_most = '65MiB'", "such an event could never arrive"),
        (FEED + "decoded_bytes_at_most = '65MiB'", "such a request would fit in no segment"),
        (FEED + "journal = { at_most = '127MiB' }", "is less than twice journal.segment_bytes"),
        (FEED + "held_events_at_most = 99_999", "= 100_000 (the default) is more than held_events_at_most = 99_999"),
        (FEED + "undelivered_events_at_most = 49_999", "such a batch could never leave"),
        (FEED + "expect_sources = ['a']", "names sources, but the feed has no `source` pointer"),
        (
            FEED + "source = '/s'\nexpect_sources = ['a', 'b']\nsources_at_most = 1",
            "names more sources than sources_at_most",
        ),
        (FEED + "source = '/a'\nid = '/a/b'", 'feed[1].id of "river-gauges" = "/a/b" contradicts another pointer: '),
        (FEED + "source = '/time/zone'", '= "/time/zone" contradicts another pointer: '),
        # the file itself
        ("listen = ", "s.toml: is no TOML: Invalid value (at end of document)"),
        ("a = 1\na = 2", "s.toml: is no TOML: Cannot overwrite a value (at end of document)"),
        ("x = " + "[" * 5000, "s.toml: is "),
        ("x = " + "9" * 5000, "s.toml: is no TOML"),
        ("#" * (2**20 + 1), "s.toml: is larger than"),
    ],
)
def test_one_fault_is_named_with_its_place_and_advice(text: str, fault: str) -> None:
    found = only_fault(text)
    assert fault in found
    assert found.startswith("s.toml: ")


def test_all_faults_are_named_at_once() -> None:
    text = """
    listen = 5
    [[feed]]
    name = "river-gauges"
    slack = "5sec"
    slak = "5s"
    [[feed.sink]]
    kind = "ndjson"
    roll_every = "1ns"
    [[feed.sink]]
    kind = "https"
    [[feed]]
    hold_at_most = "1s"
    [[feed]]
    name = "radio"
    hold_at_most = "1s"
    """
    found = faults(text, STRANDLINE_X="1", STRANDLINE_FEED__RADIO__CLOCK="sun")
    parts = ["variable STRANDLINE_X ", "variable STRANDLINE_FEED__RADIO__CLOCK = ", "listen = 5", "feed[1].slack of"]
    parts += ["feed[1].slak of", "feed[1].sink[1].roll_every of", "feed[1].sink[2].kind of", "feed[2].name is missing"]
    parts += ['feed[3].hold_at_most of "radio"']
    for part in parts:
        assert sum(part in fault for fault in found) == 1, (part, found)
    assert 'feed[2].hold_at_most = "1s" is shorter' in "\n".join(found)
    assert len(found) == len(parts) + 1
    with pytest.raises(ConfigError) as caught:
        parse(text, {}, "s.toml")
    assert str(caught.value) == "\n".join(caught.value.faults)


def test_a_faulty_value_is_not_compared() -> None:
    assert "slack" in only_fault(FEED + "slack = '90'\nhold_at_most = '1s'")


def test_a_steered_slack_stands_in_the_place_of_a_fixed_one() -> None:
    text = FEED + "slack = { late_share = 0.001, at_most = '30s', at_least = '1s' }"
    settings = parse(text, {}).feeds[0].settings()
    assert (settings.late_share, settings.slack_ns, settings.slack_at_least_ns) == (0.001, 30 * 10**9, 10**9)
    assert parse(FEED, {}).feeds[0].settings().late_share is None
    assert "hold_at_most" in only_fault(FEED + "slack = { late_share = 0.1, at_most = '2m' }")
    assert "at_least" in only_fault(FEED + "slack = { late_share = 0.1, at_most = '2s', at_least = '3s' }")
    found = faults(FEED + "slack = { late_share = 1.5, at_mst = '30s' }")
    assert len(found) == 2
    assert 'feed[1].slack.at_mst of "river-gauges" is no key of `slack`; did you mean `at_most`?' in found[0]
    assert "= 1.5 is no share: write a number between 0 and 1" in found[1]


def test_sinks_of_one_feed_and_of_several() -> None:
    text = """
    data_dir = "/var/lib/strandline"
    [[feed]]
    name = "a"
    [[feed.sink]]
    kind = "sqlite"
    path = "/srv/a.db"
    [[feed.sink]]
    kind = "ndjson"
    roll_bytes = "1MiB"
    [[feed]]
    name = "b"
    sink = []
    """
    first, second = parse(text, {}).feeds
    assert first.sinks == (
        SqliteConfig(name="sqlite", path=Path("/srv/a.db")),
        NdjsonConfig(
            name="ndjson",
            directory=Path("/var/lib/strandline/a-ndjson"),
            roll_bytes=2**20,
            roll_every_ns=10 * 10**9,
        ),
    )
    assert [sink.kind for sink in first.sinks] == ["sqlite", "ndjson"]
    assert second.sinks == (SqliteConfig(name="sqlite", path=Path("/var/lib/strandline/b.db")),)


def test_each_kind_of_sink_can_be_made() -> None:
    """The names of kinds and of their options are the ones that `strandline.sinks` knows."""
    assert config_model.SINK_KINDS.keys() == sinks.SINK_KINDS.keys()
    needed = {
        "http": "url = 'http://localhost/'",
        "jetstream": "urls = ['nats://localhost']\nstream = 'ORDERED'",
        "remote_write": "url = 'http://localhost/'\nseries = [ { name = 'level', value = '/level' } ]",
    }
    text = "".join(f"[[feed.sink]]\nkind = '{kind}'\n{needed.get(kind, '')}\n" for kind in config_model.SINK_KINDS)
    for sink in feed_of(FEED + text).sinks:
        assert sinks.make_sink(sink.kind, "river-gauges", SystemClock(), **sink.options()).lanes[0] == "ordered"


def test_feeds_may_share_a_place_of_one_kind() -> None:
    pair = "[[feed]]\nname = 'a'\n[[feed.sink]]\n{}\n[[feed]]\nname = 'b'\n[[feed.sink]]\n{}\n"
    sqlite, ndjson = "kind = 'sqlite'\npath = '/srv/all'", "kind = 'ndjson'\ndirectory = '/srv/all'"
    assert len(parse(pair.format(sqlite, sqlite), {}).feeds) == 2
    assert len(parse(pair.format(ndjson, ndjson), {}).feeds) == 2
    assert 'feed[2].sink[1].directory of "b" = "/srv/all" is where feed[1].sink[1].path of "a" writes' in only_fault(
        pair.format(sqlite, ndjson)
    )


def test_files_that_cannot_be_read(tmp_path: Path) -> None:
    absent, binary = tmp_path / "absent.toml", tmp_path / "binary.toml"
    binary.write_bytes(b"# \xff")
    for path, part in (
        (absent, "No such file"),
        (tmp_path, "Is a directory"),
        (binary, "is not UTF-8 at byte 2"),
        (Path("a\0"), "null"),
    ):
        with pytest.raises(ConfigError, match=part) as caught:
            load(path, {})
        assert len(caught.value.faults) == 1
        assert caught.value.faults[0].startswith(str(path))


def test_a_hostile_file_is_answered_within_its_size() -> None:
    """10^5 unknown keys: each is named, and looking for near misses stops long before."""
    found = faults("\n".join(f"k{n} = 1" for n in range(60_000)) + "\n" + FEED)
    assert len(found) == 60_000
