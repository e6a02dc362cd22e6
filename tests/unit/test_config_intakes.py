"""Intakes and the JetStream sink in the configuration: what is read, every fault at once, what variables override."""

from __future__ import annotations

import sys

import pytest
from strandline import intake
from strandline.broker_access import BrokerAccess
from strandline.config import parse
from strandline.config_intakes import INTAKE_KINDS, JetstreamIntake, MqttIntake
from strandline.errors import ConfigError, StrandlineError

FEED = '[[feed]]\nname = "river-gauges"\n'
JETSTREAM = '[[feed.intake]]\nkind = "jetstream"\nurls = ["nats://127.0.0.1:4222"]\nstream = "RIVER"\n'
MQTT = '[[feed.intake]]\nkind = "mqtt"\nurl = "mqtt://127.0.0.1"\ntopics = ["river/#"]\n'
SINK = '[[feed.sink]]\nkind = "jetstream"\nurls = ["nats://127.0.0.1:4222"]\nstream = "ORDERED"\n'


def faults(text: str) -> list[str]:
    with pytest.raises(ConfigError) as caught:
        parse(text, {})
    return caught.value.faults


def test_defaults_name_the_feed() -> None:
    first, second = parse(FEED + JETSTREAM + MQTT, {}).feeds[0].intakes
    assert isinstance(first, JetstreamIntake) and isinstance(second, MqttIntake)
    assert (first.name, first.durable, first.ack_wait_ns) == ("jetstream", "strandline-river-gauges", 10 * 10**9)
    assert (second.name, second.client_id, second.version) == ("mqtt", "strandline-river-gauges", "5")
    assert first.source is None and second.source is None


def test_each_kind_can_be_made() -> None:
    assert INTAKE_KINDS.keys() == intake.INTAKE_KINDS.keys()
    made = [intake.make_broker(config) for config in parse(FEED + JETSTREAM + MQTT, {}).feeds[0].intakes]
    assert [broker.takes_back for broker in made] == [True, False]


def test_a_client_that_is_not_installed_is_named_with_its_extra(monkeypatch: pytest.MonkeyPatch) -> None:
    for text, package, extra in ((JETSTREAM, "nats", "nats"), (MQTT, "paho", "mqtt")):
        (config,) = parse(FEED + text, {}).feeds[0].intakes
        for name in [name for name in sys.modules if name.partition(".")[0] == package]:
            monkeypatch.delitem(sys.modules, name)
        monkeypatch.setitem(sys.modules, package, None)  # importing it fails as where it is not installed
        monkeypatch.delitem(sys.modules, f"strandline.intake.{intake.INTAKE_KINDS[config.kind][0]}", raising=False)
        with pytest.raises(StrandlineError, match=rf"package {package}.*pip install 'strandline\[{extra}\]'"):
            intake.make_broker(config)


def test_every_fault_at_once() -> None:
    text = FEED + (
        'source = "/station"\nkeys_at_most = 100\nkeys_kept_for = "9s"\n'
        '[[feed.intake]]\nkind = "jetstream"\nurls = ["http://h:1", "nats://u:hush@h:1"]\nstream = "A.B"\n'
        'subjects = ["a..b"]\nbegin = "later"\ndurable = ""\n'
        '[[feed.intake]]\nkind = "mqtt"\nname = "again"\nurl = "mqtt://u:hush@h"\ntopics = ["a/#/b"]\nversion = "4"\n'
        '[[feed.intake]]\nkind = "mqtt"\nname = "again"\nurl = "mqtt://h"\ntopics = ["a+"]\nuzer = "x"\n'
        'source = { topic_level = 2 }\npassword = "a"\npassword_file = "b"\n'
        '[[feed.intake]]\nkind = "jetstreem"\n'
    ) + JETSTREAM.replace('"jetstream"', '"jetstream"\nname = "x"\ntoken = "t"\ncreds_file = "c"')
    found = "\n".join(faults(text))
    assert "hush" not in found
    for place, words in (
        ("intake[1].urls", "holds an entry that is no address"),
        ("intake[1].stream", "is no stream's name"),
        ("intake[1].subjects", 'holds "a..b", which is no subject'),
        ("intake[1].begin", '"later" is none of all, new'),
        ("intake[1].durable", "is no consumer's name"),
        ("intake[2].url", "names a user"),
        ("intake[2].topics", "where # does not stand alone at the end"),
        ("intake[2].version", "is none of 5, 3.1.1"),
        ("intake[3].name", 'is the name of feed[1].intake[2] of "river-gauges" already'),
        ("intake[3].topics", "where + does not stand for a whole level"),
        ("intake[3].uzer", "did you mean `user`?"),
        ("intake[3].user", "is missing: a password needs it"),
        ("intake[3].password_file", "and `password` both say the same"),
        ("intake[3].source.topic_level", 'contradicts the feed\'s source = "/station"'),
        ("intake[4].kind", "did you mean jetstream?"),
        ("intake[5].creds_file", "and `token` both say who to be"),
        ("intake[5].in_flight_at_most", "is more than keys_at_most = 100"),
        ("intake[5].ack_wait", "10s is more than keys_kept_for = 9s"),
    ):
        lines = [line for line in found.splitlines() if f"feed[1].{place} of" in line]
        assert any(words in line for line in lines), (place, words, found)


@pytest.mark.parametrize(
    ("text", "key"), [(JETSTREAM, "durable"), (MQTT, "client_id")], ids=["one consumer", "one session"]
)
def test_two_intakes_do_not_share_what_only_one_can_have(text: str, key: str) -> None:
    other = text.replace("[[feed.intake]]", f'[[feed]]\nname = "other"\n[[feed.intake]]\n{key} = "same"')
    assert len(parse(FEED + text + other, {}).feeds) == 2
    (fault,) = faults(FEED + text.replace("kind", f'{key} = "same"\nkind') + other)
    assert f'feed[2].intake[1].{key} of "other" = "same" is the one of feed[1].intake[1]' in fault


def test_sources_of_topics_may_be_expected() -> None:
    expecting = FEED + 'expect_sources = ["gw-1"]\n'
    assert "has no `source` pointer" in faults(expecting + MQTT)[0]
    config = parse(expecting + MQTT + "source = { topic_level = 2 }\n", {})
    assert not config.feeds[0].one_source and parse(FEED + MQTT, {}).feeds[0].one_source


def test_variables_override_and_secrets_are_not_shown() -> None:
    environ = {
        "STRANDLINE_FEED__RIVER_GAUGES__INTAKE__MQTT__PASSWORD": "hush",
        "STRANDLINE_FEED__RIVER_GAUGES__INTAKE__MQTT__USER": "gauge",
        "STRANDLINE_FEED__RIVER_GAUGES__INTAKE__MQTT__SOURCE__TOPIC_LEVEL": "2",
        "STRANDLINE_FEED__RIVER_GAUGES__INTAKE__JETSTREAM__URLS": "nats://a:1, tls://b:2",
    }
    first, second = parse(FEED + JETSTREAM + MQTT, environ).feeds[0].intakes
    assert isinstance(first, JetstreamIntake) and isinstance(second, MqttIntake)
    assert first.urls == ("nats://a:1", "tls://b:2")
    assert second.source is not None and second.source.topic_level == 2
    assert second.access() == BrokerAccess("gauge", "hush")
    assert "hush" not in repr(second.access())


def test_the_sink_is_checked_likewise() -> None:
    text = FEED + SINK + SINK.replace("kind", 'name = "b"\npassword = "hush"\nkind')
    found = faults(text)
    assert len(found) == 2 and "hush" not in "".join(found)
    assert any("sink[2].user" in line and "a password needs it" in line for line in found)
    assert any("sink[2].subject" in line and "writes already" in line for line in found)
    assert "no wildcards" in faults(FEED + SINK + 'subject = "a.>"\n')[0]
