"""`[cluster]` and `partitions` in the configuration: what is read, what a partition's feed is, every fault at once."""

from __future__ import annotations

import socket
from pathlib import Path

import pytest
from strandline.app import fixed_changes
from strandline.broker_access import BrokerAccess
from strandline.cli import main
from strandline.config import Config, Feed, NdjsonConfig, PostgresConfig, SqliteConfig, parse
from strandline.config_cluster import Partitions
from strandline.config_cluster_checks import overlap
from strandline.config_sinks import RemoteWriteConfig
from strandline.errors import ConfigError

CLUSTER = '[cluster]\nname = "river"\ninstance = "strandline-0"\nurls = ["nats://127.0.0.1:4222"]\n'
PARTITIONS = 'partitions = { stream = "RIVER", subject = "part.{partition}.>", count = 4 }\n'
FEED = '[[feed]]\nname = "river-gauges"\n'
PLAIN = '[[feed]]\nname = "radio"\n'


def read(text: str) -> Config:
    return parse(text, {}, "x.toml")


def faults(text: str) -> list[str]:
    with pytest.raises(ConfigError) as caught:
        read(text)
    return caught.value.faults


def of(subject: str, count: int = 4) -> Partitions:
    return Partitions(stream="RIVER", subject=subject, count=count)


def test_neither_is_there_by_default() -> None:
    config = read(FEED)
    assert config.cluster is None
    assert config.feeds[0].partitions is None
    assert config.feeds[0].partition_feeds() == ()


def test_every_key_is_read() -> None:
    config = read(
        "[cluster]\n"
        'name = "river"\ninstance = "north"\nurls = ["nats://a:4222", "tls://b:4222"]\nreplicas = 5\nlease = "20s"\n'
        'log_at_most = "2GiB"\nuser = "strandline"\npassword_file = "secret"\nca_file = "ca.pem"\n'
        + FEED
        + 'partitions = { stream = "RIVER", subject = "part.*.{partition}.>", count = 8, '
        'source = { subject_token = 4 }, content_type = "application/json", '
        "fetch_at_most = 7, in_flight_at_most = 9 }\n"
    )
    cluster, partitions = config.cluster, config.feeds[0].partitions
    assert cluster is not None and partitions is not None
    assert (cluster.name, cluster.instance, cluster.replicas) == ("river", "north", 5)
    assert cluster.urls == ("nats://a:4222", "tls://b:4222")
    assert (cluster.lease_ns, cluster.log_at_most_bytes) == (20 * 10**9, 2 * 2**30)
    assert cluster.access() == BrokerAccess("strandline", None, "secret", ca_file="ca.pem")
    assert (partitions.stream, partitions.count, partitions.content_type) == ("RIVER", 8, "application/json")
    assert partitions.source is not None and partitions.source.subject_token == 4
    assert (partitions.fetch_at_most, partitions.in_flight_at_most) == (7, 9)
    assert partitions.subject_of(7) == "part.*.7.>"
    assert not config.feeds[0].one_source


def test_defaults() -> None:
    config = read(CLUSTER + FEED + PARTITIONS)
    assert config.cluster is not None and config.feeds[0].partitions is not None
    assert (config.cluster.replicas, config.cluster.lease_ns, config.cluster.log_at_most_bytes) == (
        3,
        15 * 10**9,
        2**30,
    )
    assert config.cluster.access() == BrokerAccess()
    assert config.feeds[0].partitions == of("part.{partition}.>")
    assert config.feeds[0].one_source


@pytest.mark.parametrize(
    ("host", "instance"),
    [("strandline-2", "strandline-2"), ("Gauge_Host.north.example", "gauge-host-north-example"), ("_x", "x")],
)
def test_the_instance_is_the_host_of_the_moment(monkeypatch: pytest.MonkeyPatch, host: str, instance: str) -> None:
    text = CLUSTER.replace('instance = "strandline-0"\n', "") + FEED + PARTITIONS
    monkeypatch.setattr(socket, "gethostname", lambda: host)
    cluster = read(text).cluster
    assert cluster is not None and cluster.instance == instance
    named = parse(text, {"STRANDLINE_CLUSTER__INSTANCE": "strandline-7"}).cluster
    assert named is not None and named.instance == "strandline-7"


def test_a_host_without_a_usable_name_is_a_fault(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(socket, "gethostname", lambda: "-._")
    found = faults(CLUSTER.replace('instance = "strandline-0"\n', "") + FEED + PARTITIONS)
    assert found == [
        'x.toml: cluster.instance is missing, and the host\'s name "-._" has no letter or digit for it: '
        'write instance = "..."'
    ]


def test_a_partition_is_the_feed_with_a_name_and_files_of_its_own() -> None:
    config = read(
        'data_dir = "/d"\n'
        + CLUSTER
        + FEED
        + 'slack = "7s"\n'
        + PARTITIONS
        + '[[feed.sink]]\nkind = "sqlite"\n'
        + '[[feed.sink]]\nkind = "sqlite"\nname = "shared"\npath = "all.db"\n'
        + '[[feed.sink]]\nkind = "ndjson"\ndirectory = "/elsewhere/river-gauges-ndjson"\n'
        + '[[feed.sink]]\nkind = "postgres"\n'
        + '[[feed.sink]]\nkind = "remote_write"\nurl = "http://h/w"\nseries = [{ name = "level", value = "/level" }]\n'
    )
    (feed,) = config.feeds
    found = feed.partition_feeds()
    assert [each.name for each in found] == [f"river-gauges-{number}" for number in range(4)]
    third = found[3]
    own, shared, files, postgres, remote = third.sinks
    assert isinstance(own, SqliteConfig) and own.path == Path("/d/river-gauges-3.db")
    assert isinstance(shared, SqliteConfig) and shared.path == Path("/d/all.db")
    assert isinstance(files, NdjsonConfig) and files.directory == Path("/elsewhere/river-gauges-3-ndjson")
    assert isinstance(postgres, PostgresConfig) and postgres == feed.sinks[3]
    assert isinstance(remote, RemoteWriteConfig) and remote.path == Path("/d/river-gauges-3-remote-write.db")
    same = {key for key in Feed.__struct_fields__ if key not in ("name", "sinks")}
    assert all(getattr(third, key) == getattr(feed, key) for key in same)
    assert third.settings().name == "river-gauges-3"
    assert len({each.sinks[0] for each in found}) == 4


def test_the_feed_of_a_runtime() -> None:
    config = read(CLUSTER + FEED + PARTITIONS + '[[feed]]\nname = "radio-0"\n')
    names = [*(f"river-gauges-{number}" for number in range(4)), "radio-0"]
    assert [feed.name for feed in config.runtime_feeds()] == names
    for number in range(4):
        assert config.base_of(f"river-gauges-{number}") == "river-gauges"
        assert config.feed(f"river-gauges-{number}") == config.feeds[0].partition_feeds()[number]
    assert config.feed("river-gauges") is config.feeds[0] and config.feed("river-gauges-4") is None
    for name in (
        "river-gauges",
        "river-gauges-4",
        "river-gauges-01",
        "river-gauges-",
        "river-gauges--1",
        "radio-0",
        "x",
    ):
        assert config.base_of(name) == name


@pytest.mark.parametrize(
    ("text", "fault"),
    [
        (
            FEED + PARTITIONS,
            'feed[1].partitions of "river-gauges" needs a cluster: write [cluster] with a name and urls',
        ),
        (CLUSTER + FEED, "cluster has nothing to share: give a feed `partitions`"),
        (
            CLUSTER + FEED + PARTITIONS + '[[feed.intake]]\nkind = "mqtt"\nurl = "mqtt://h"\ntopics = ["a"]\n',
            "intake of \"river-gauges\" contradicts `partitions`",
        ),
        (
            CLUSTER + FEED + PARTITIONS + 'journal = { retain = "1d" }\n',
            'feed[1].journal.retain of "river-gauges" = "1d" contradicts `partitions`',
        ),
        (
            CLUSTER + FEED + PARTITIONS + 'source = "/s"\nexpect_sources = ["a"]\n',
            "expect_sources of \"river-gauges\" contradicts partitions.count = 4",
        ),
        (
            CLUSTER + FEED + PARTITIONS + '[[feed]]\nname = "river-gauges-3"\n',
            'feed[1].name of "river-gauges" = "river-gauges" gives a partition the name "river-gauges-3", which is the '
            "name of feed[2] already",
        ),
        (
            CLUSTER + '[[feed]]\nname = "' + "a" * 62 + '"\n' + PARTITIONS,
            'gives a partition the name "' + "a" * 62 + '-3" of more than 63 characters: shorten it',
        ),
        (
            CLUSTER + FEED + PARTITIONS + PLAIN + PARTITIONS.replace("part.{partition}.>", "part.{partition}.north"),
            'feed[2].partitions.subject of "radio" = "part.{partition}.north" has messages of stream RIVER that '
            'feed[1].partitions of "river-gauges" reads too',
        ),
        (
            CLUSTER + FEED + 'source = "/s"\n' + PARTITIONS.replace("4 }", "4, source = { subject_token = 3 } }"),
            "subject_token of \"river-gauges\" = 3 contradicts the feed's source = \"/s\"",
        ),
        (
            CLUSTER + FEED + PARTITIONS.replace("4 }", "4, source = { subject_token = 2 } }"),
            '= 2 is the partition in subject = "part.{partition}.>"',
        ),
        (
            CLUSTER + FEED + PARTITIONS.replace(".>", ".*").replace("4 }", "4, source = { subject_token = 4 } }"),
            '= 4 is beyond subject = "part.{partition}.*", which has 3 tokens',
        ),
        (
            CLUSTER + FEED + PARTITIONS.replace("RIVER", "river-log"),
            'partitions.stream of "river-gauges" = "river-log" is the cluster\'s own log',
        ),
        (CLUSTER + 'lease = "1s"\n' + FEED + PARTITIONS, 'cluster.lease = "1s" is outside of 2s to 1h'),
        (CLUSTER + "replicas = 2\n" + FEED + PARTITIONS, "cluster.replicas = 2 is even: write 1 or 3"),
        (CLUSTER + "replicas = 7\n" + FEED + PARTITIONS, "cluster.replicas = 7 is outside of 1 to 5"),
        (CLUSTER.replace("strandline-0", "a.b") + FEED + PARTITIONS, 'cluster.instance = "a.b" is no name'),
        (CLUSTER + 'password = "hush"\n' + FEED + PARTITIONS, "cluster.user is missing: a password needs it"),
        (
            CLUSTER + 'token = "hush"\ntoken_file = "f"\n' + FEED + PARTITIONS,
            "cluster.token_file and `token` both say the same",
        ),
        (CLUSTER.replace('name = "river"\n', "") + FEED + PARTITIONS, "cluster.name is missing: `cluster` needs it"),
        (CLUSTER.replace("nats://", "nats://u:hush@") + FEED + PARTITIONS, "cluster.urls = (not shown) holds an entry"),
        (CLUSTER + FEED + PARTITIONS.replace("= 4", "= 1025"), "= 1025 is outside of 1 to 1,024"),
    ],
)  # fmt: skip
def test_a_fault_names_place_and_value_and_what_to_do(text: str, fault: str) -> None:
    found = faults(text)
    assert len(found) == 1, found
    assert fault in found[0]
    assert "hush" not in found[0]


@pytest.mark.parametrize(
    "subject",
    ["part.>", "part.{partition}x.>", "part.{partition}.{partition}", "{partitions}.>", "part.>.{partition}",
     "part..{partition}", "part.{partition}.", "part {partition}", ""],
)  # fmt: skip
def test_a_subject_has_the_partition_once_as_a_whole_token(subject: str) -> None:
    (found,) = faults(CLUSTER + FEED + PARTITIONS.replace("part.{partition}.>", subject))
    assert f'feed[1].partitions.subject of "river-gauges" = "{subject}" ' in found
    assert '"part.{partition}.>"' in found


def test_what_cannot_be_read_is_not_judged_further() -> None:
    assert len(faults("cluster = 1\n" + FEED + PARTITIONS)) == 1
    assert len(faults(CLUSTER + FEED + "partitions = 1\n")) == 1
    assert len(faults(CLUSTER + FEED + PARTITIONS.replace('"RIVER"', "1") + PLAIN + PARTITIONS)) == 1
    assert len(faults(CLUSTER + FEED + PARTITIONS + FEED)) == 1  # the name twice, and no word of its partitions


@pytest.mark.parametrize(
    ("first", "second", "both"),
    [
        ("part.{partition}.>", "part.{partition}.>", True),
        ("part.{partition}.>", "part.{partition}", False),  # > stands for one token at least
        ("part.{partition}.a", "part.{partition}.b", False),
        ("part.{partition}.*", "part.{partition}.b", True),
        ("{partition}.3", "3.{partition}", True),
        ("{partition}.4", "3.{partition}", False),  # there is no partition 4
        ("{partition}.03", "3.{partition}", False),
        ("north.{partition}", "south.{partition}", False),
        ("*.{partition}", "{partition}.*", True),
        ("a.{partition}.>", "a.b.{partition}", False),  # b is no partition
        ("a.{partition}.>", "a.*.{partition}", True),
    ],
)
def test_subjects_that_two_feeds_would_both_read(first: str, second: str, both: bool) -> None:
    assert overlap(of(first), of(second)) == overlap(of(second), of(first)) == both


def test_feeds_of_different_streams_do_not_meet() -> None:
    other = PARTITIONS.replace("RIVER", "RADIO")
    assert len(read(CLUSTER + FEED + PARTITIONS + PLAIN + other).feeds) == 2


def test_the_check_says_which_instance_it_is(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    file = tmp_path / "x.toml"
    file.write_text(CLUSTER + FEED + PARTITIONS + PLAIN)
    assert main(["check", str(file)]) == 0
    assert "Is instance strandline-0 of cluster river: 4 partitions to share.\n" in capsys.readouterr().out
    file.write_text(PLAIN)
    assert main(["check", str(file)]) == 0
    assert "cluster" not in capsys.readouterr().out


def test_a_running_service_changes_neither() -> None:
    before = read(CLUSTER + FEED + PARTITIONS)
    assert fixed_changes(before, read(CLUSTER + FEED + PARTITIONS)) == []
    assert fixed_changes(before, read(CLUSTER + 'lease = "16s"\n' + FEED + PARTITIONS)) == ["cluster"]
    more = read(CLUSTER + FEED + PARTITIONS.replace("= 4", "= 5"))
    assert fixed_changes(before, more) == ["partitions of feed river-gauges"]
    assert fixed_changes(before, read(FEED)) == ["cluster", "partitions of feed river-gauges"]
    smaller = 'event_bytes_at_most = "2KiB"\n'
    assert fixed_changes(before, read(CLUSTER + FEED + smaller + PARTITIONS)) == [
        "event_bytes_at_most of feed river-gauges"
    ], "the next owner would read messages otherwise"
    assert fixed_changes(read(FEED), read(FEED + smaller)) == [], "elsewhere it may change"


def test_the_partitions_of_all_feeds_together_have_a_limit() -> None:
    keys = 'stream = "{name}", subject = "p.{{partition}}.>", count = {count}'
    half = '[[feed]]\nname = "{name}"\npartitions = {{ ' + keys + " }}\n"
    both = CLUSTER + half.format(name="gauges", count=512)
    assert len(read(both + half.format(name="radio", count=512)).runtime_feeds()) == 1024
    (fault,) = faults(both + half.format(name="radio", count=513) + half.format(name="rain", count=1))
    assert "radio" in fault and "513" in fault and "1,025 partitions of all feeds together: 1,024 is the most" in fault
