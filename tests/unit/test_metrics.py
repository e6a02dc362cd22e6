"""/metrics of a running service, read by two outside opinions: the library's own parsers, and promtool."""

from __future__ import annotations

import math
import shutil
import subprocess
from pathlib import Path

import pytest
from helpers_faulty import planted, scripted
from helpers_service import BEGIN_S, FEED, Running, body_of, configuration, event_line, events, eventually, running
from helpers_sinks import VirtualTime
from prometheus_client import Metric
from prometheus_client.openmetrics.parser import text_string_to_metric_families as open_metrics
from prometheus_client.parser import text_string_to_metric_families as plain_text
from strandline.core.records import Cause
from strandline.core.view import HOLD_WHYS
from strandline.errors import REFUSALS, SinkRetry
from strandline.hops import HOPS
from strandline.metrics_reference import METRICS

HOSTILE = 'gw "1"\\\n}# HELP'
LIMITED = {"held_events_at_most": 100, "events_at_most": 100}
OF_SOME = {  # of sinks that send samples, feeds with a steered slack or an intake, and members of a cluster only
    *(name for name in METRICS if name.startswith(("strandline_intake_", "strandline_cluster_"))),
    "strandline_sink_refused_samples",
    "strandline_late_target_ratio",
}
KNOWN = {  # what may stand in a label: names of the configuration and closed lists, nothing that an event brings
    "feed": {FEED},
    "sink": {"lanes", "a"},
    "lane": {"ordered", "late", "quarantine"},
    "why": set(HOLD_WHYS),
    "reason": set(REFUSALS),
    "hop": set(HOPS),
    "cause": {cause.name.lower() for cause in Cause},
}


async def busy(service: Running) -> None:
    """Something of everything: held, released, late, quarantined, refused; sources with hostile names."""
    await service.send(range(20))
    await service.send([19], HOSTILE)
    await service.send([2], "gw-2")
    await service.post("events", body_of(b"{", event_line(30, HOSTILE)))
    await service.post("events", events(range(90)))
    assert (await service.post("events", events(range(100, 200)))).status == 429
    await eventually(lambda: service.runtime.feed.state.outbox.undelivered_events == 0)


async def scraped(service: Running, **headers: str) -> str:
    answer = await service.get("/metrics", headers=headers)
    assert answer.status == 200
    return answer.content.decode()


def families(text: str) -> dict[str, Metric]:
    return {family.name: family for family in plain_text(text)}


def value(found: dict[str, Metric], name: str, suffix: str = "", **labels: str) -> float:
    wanted = {"feed": FEED, **labels}
    (sample,) = [s for s in found[name].samples if s.name == name + suffix and s.labels == wanted]
    return float(sample.value)


async def test_every_metric_of_the_reference_is_there_and_none_else(tmp_path: Path) -> None:
    toml, sinks = scripted("a")
    async with running(configuration(tmp_path, sinks=toml), make=planted(**sinks)) as service:
        found = families(await scraped(service))
        assert set(found) == set(METRICS)
        for name, meaning in METRICS.items():
            family = found[name]
            assert (family.type, family.documentation) == (meaning.kind, meaning.help), name
            if name not in OF_SOME:
                assert family.samples, f"{name} has no sample in a service that has done nothing yet"


async def test_labels_come_from_the_configuration_only(tmp_path: Path) -> None:
    toml, sinks = scripted("a")
    async with running(configuration(tmp_path, sinks=toml, slack="5s", **LIMITED), make=planted(**sinks)) as service:
        await busy(service)
        text = await scraped(service)
        assert "gw-" not in text and "HELP}" not in text and HOSTILE not in text
        for name, family in families(text).items():
            for sample in family.samples:
                given = {label: said for label, said in sample.labels.items() if label != "le"}
                assert set(given) == {"feed", *METRICS[name].labels}, name
                assert all(said in KNOWN[label] for label, said in given.items()), sample
                assert math.isfinite(sample.value)


async def test_values_are_those_of_the_document(tmp_path: Path) -> None:
    toml, sinks = scripted("a")
    async with running(configuration(tmp_path, sinks=toml, slack="5s", **LIMITED), make=planted(**sinks)) as service:
        for second in range(20):
            await service.send([second])
        await service.send([2], "gw-2")
        await service.post("events", body_of(b"{", event_line(30)))
        await service.post("events", events(range(90)))
        assert (await service.post("events", events(range(100, 200)))).status == 429
        await eventually(lambda: service.runtime.feed.state.outbox.undelivered_events == 0)
        document, found = await service.document(), families(await scraped(service))
        ledger = document["ledger"]
        for column in ("received", "released", "late", "duplicate", "quarantined"):
            assert value(found, f"strandline_events_{column}", "_total") == ledger[column]
        assert value(found, "strandline_events_held") == ledger["buffered"] == document["held"]["events"] > 0
        assert value(found, "strandline_books_unbalanced_events") == 0
        assert value(found, "strandline_requests_refused", "_total", reason="held_full") == 1
        assert value(found, "strandline_requests_refused", "_total", reason="stopping") == 0
        assert value(found, "strandline_open_runs") == document["held"]["open_runs"]
        assert value(found, "strandline_sources") == document["sources"]["known"] == 2
        assert value(found, "strandline_hold", why=document["hold"]["why"]) == 1
        assert sum(sample.value for sample in found["strandline_hold"].samples) == 1
        delivered = value(found, "strandline_sink_delivered_events", "_total", sink="a", lane="ordered")
        assert delivered == ledger["released"] > 0
        assert value(found, "strandline_journal_bytes") == document["journal"]["bytes"]
        assert value(found, "strandline_journal_syncs", "_total") >= 20


async def test_sources_that_fell_silent_are_counted_and_excused_ones_are_not(tmp_path: Path) -> None:
    clock = VirtualTime()
    clock.now = BEGIN_S * 10**9
    async with running(configuration(tmp_path, idle_after="30s"), clock=clock) as service:
        for source in ("gw-1", "gw-2", "gw-3"):
            await service.send([1], source)
        assert value(families(await scraped(service)), "strandline_sources_idle") == 0
        clock.now += 31 * 10**9
        await service.send([32], "gw-3")
        found = families(await scraped(service))
        assert (value(found, "strandline_sources_idle"), value(found, "strandline_sources_active")) == (2, 1)
        assert value(found, "strandline_marks", "_total", cause="silence") == 0, "one is still there"
        assert (await service.post("excuse", {"source": "gw-1"})).status == 204
        assert value(families(await scraped(service)), "strandline_sources_idle") == 1
        await service.send([33], "gw-1")
        assert value(families(await scraped(service)), "strandline_sources_idle") == 1


async def test_limits_are_those_of_the_configuration(tmp_path: Path) -> None:
    """What an alert compares with: "nearly full" and "held too long" need no number of their own in a rule."""
    more = 'slack = { late_share = 0.002, at_most = "3s" }\njournal = { segment_bytes = "64MiB", at_most = "2GiB" }'
    text = configuration(tmp_path, more=more, hold_at_most="90s", held_events_at_most=500_000, lanes_at_most="2MiB")
    async with running(text.replace('slack = "0s"\n', "")) as service:
        found = families(await scraped(service))
        assert value(found, "strandline_late_target_ratio") == 0.002
        assert value(found, "strandline_hold_limit_seconds") == 90
        assert value(found, "strandline_held_limit_events") == 500_000
        assert value(found, "strandline_lanes_limit_bytes") == 2 * 2**20
        assert value(found, "strandline_journal_limit_bytes") == 2 * 2**30
        assert value(found, "strandline_journal_needed_bytes") == 0
        await service.send([10])
        found = families(await scraped(service))
        held = value(found, "strandline_journal_needed_bytes")
        assert 0 < held < value(found, "strandline_journal_bytes")


async def test_histograms_count_what_the_books_count(tmp_path: Path) -> None:
    async with running(configuration(tmp_path, slack="5s")) as service:
        await service.send([10, 20])
        await service.send([16, 17, 30])
        found = families(await scraped(service))
        for name, count in (
            ("strandline_lateness_seconds", 5),
            ("strandline_hold_seconds", 4),
            ("strandline_run_length_events", 2),
        ):
            assert value(found, name, "_count") == value(found, name, "_bucket", le="+Inf") == count
            buckets = [s for s in found[name].samples if s.name.endswith("_bucket")]
            assert [s.value for s in buckets] == sorted(s.value for s in buckets)
            bounds = [float(s.labels["le"]) for s in buckets]
            assert bounds == sorted(set(bounds)) and bounds[-1] == math.inf
        assert value(found, "strandline_lateness_seconds", "_sum") == 7.0  # 16 and 17 came 4 and 3 s behind 20
        assert value(found, "strandline_run_length_events", "_sum") == 5


async def test_a_sink_that_fails_shows(tmp_path: Path) -> None:
    toml, sinks = scripted("a")
    sinks["a"].script.extend(["ok", SinkRetry("no", retry_after_s=3600)])
    async with running(configuration(tmp_path, sinks=toml), make=planted(**sinks)) as service:
        await service.send([1, 2])
        await eventually(lambda: service.runtime.deliveries["a"].state().failing_since_ns is not None)
        found = families(await scraped(service))
        assert value(found, "strandline_sink_failing", sink="a") == 1
        assert value(found, "strandline_sink_retries", "_total", sink="a") == 1
        assert value(found, "strandline_sink_waiting_events", sink="a", lane="ordered") == 2
        assert value(found, "strandline_hop_waiting", hop="sinks") == 2


async def test_the_other_exposition_format_is_negotiated(tmp_path: Path) -> None:
    async with running(configuration(tmp_path)) as service:
        await service.send([1])
        answer = await service.get("/metrics", headers={"Accept": "application/openmetrics-text; version=1.0.0"})
        assert answer.headers["Content-Type"].startswith("application/openmetrics-text")
        assert {family.name for family in open_metrics(answer.content.decode())} == set(METRICS)


async def test_promtool_finds_no_fault(tmp_path: Path) -> None:
    """Outside opinion: `promtool check metrics` (Debian package prometheus) parses and judges names and units."""
    promtool = shutil.which("promtool")
    if promtool is None:
        pytest.skip("promtool is not installed: apt-get install prometheus")
    async with running(configuration(tmp_path, slack="5s", **LIMITED)) as service:
        await service.send(range(20))
        await service.post("events", body_of(b"{"))
        text = await scraped(service)
    done = subprocess.run([promtool, "check", "metrics"], input=text, capture_output=True, text=True, check=False)
    assert (done.returncode, done.stdout, done.stderr) == (0, "", "")
