"""A real Prometheus scrapes a real service: planted stalls make the delivered alerts fire, and they end with the stall.

The rules are the delivered ones, with seconds in the place of minutes. Nothing waits for a fixed time: Prometheus is
asked again and again until a deadline.
"""

from __future__ import annotations

import json
import re
import sqlite3
import time
from collections.abc import Callable, Iterator
from contextlib import closing
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import pytest
import yaml
from helpers_deploy import PROMETHEUS, alerts, expressions
from helpers_prometheus import Receiver, prometheus
from helpers_service import BEGIN_S, FEED, NDJSON, Process, configuration, events, store_in
from strandline_loadgen.child import free_port

PATH = f"/v1/feeds/{FEED}/events"
DEADLINE_S = 45.0
POLL_S = 0.1
INTERVAL = "300ms"
RANGE = "3s"
# Panels that have nothing to show here: a fixed slack has no wanted share, only remote_write refuses samples, and
# nothing was refused.
EMPTY_HERE = {"Share of late events-B", "Retries and refused samples-B", "Refused requests by reason-A"}
EMPTY_HERE |= {"Brokers of intakes-A", "Messages at intakes-A", "Messages at intakes-B"}  # this feed has no intake
OF_A_CLUSTER = {
    "Partitions without an owner",
    "Instances in the cluster",
    "Takeovers",
    "Partitions owned, and logs in trouble",
}


def quick(text: str) -> str:
    """Rules with seconds in the place of minutes: how long a condition must hold, and over what a mean is taken."""
    text, held = re.subn(r"^( +for:) \w+$", r"\1 500ms", text, flags=re.MULTILINE)
    text, ranges = re.subn(r"\[5m\]", f"[{RANGE}]", text)
    assert held == len(alerts()) and ranges >= 3
    return text


def scraping(folder: Path, port: int) -> str:
    """The delivered configuration, quicker and for this service."""
    document = yaml.safe_load((PROMETHEUS / "scrape.yml").read_text())
    document["global"] = {"scrape_interval": INTERVAL, "evaluation_interval": INTERVAL}
    (job,) = document["scrape_configs"]
    job["scrape_timeout"] = INTERVAL
    job["static_configs"] = [{"targets": [f"127.0.0.1:{port}"]}]
    rules = folder / "alerts.yml"
    rules.write_text(quick((PROMETHEUS / "alerts.yml").read_text()))
    document["rule_files"] = [str(rules)]
    return yaml.safe_dump(document)


@dataclass(frozen=True, slots=True)
class Watched:
    """A service, and the Prometheus that watches it."""

    process: Process
    server: Receiver

    def firing(self) -> dict[str, Any]:
        """The alerts that fire now, by name."""
        found = self.server.ask("/api/v1/alerts")["data"]["alerts"]
        return {alert["labels"]["alertname"]: alert for alert in found if alert["state"] == "firing"}

    def until(self, true: Callable[[], bool], what: str, each_time: Callable[[], object] = lambda: None) -> None:
        """Ask until it is true, doing `each_time` in between; fails after a deadline."""
        deadline = time.monotonic() + DEADLINE_S
        while not true():
            assert time.monotonic() < deadline, f"{what}; firing: {sorted(self.firing())}"
            each_time()
            time.sleep(POLL_S)

    def send(self, *stations: str) -> None:
        """One event of now from each of these."""
        for station in stations:
            answer = self.process.ask(PATH, events([time.time() - BEGIN_S], station), {"Content-Type": NDJSON})
            assert answer.status == 200, answer.content

    def query(self, expression: str) -> list[Any]:
        answer = self.server.ask("/api/v1/query", query=expression)
        assert answer["status"] == "success"
        return list(answer["data"]["result"])


@pytest.fixture(scope="module")
def watched(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Watched]:
    folder, port = tmp_path_factory.mktemp("watched"), free_port()
    text = configuration(folder, hold_at_most="2s", idle_after="1h")
    text = text.replace('listen = "127.0.0.1:0"', f'listen = "127.0.0.1:{port}"')
    with (
        Process(folder, text) as process,
        prometheus(folder / "prometheus", scrape=scraping(folder, port)) as server,
    ):
        both = Watched(process, server)
        both.until(lambda: bool(both.query('up{job="strandline"} == 1')), "it is scraped")
        yield both


def test_a_healthy_feed_fires_nothing_and_fills_the_dashboard(watched: Watched) -> None:
    watched.until(
        lambda: bool(watched.query(f"rate(strandline_events_released_total[{RANGE}]) > 0")),
        "events flow",
        lambda: watched.send("gw-1"),
    )
    watched.until(lambda: watched.firing() == {}, "all is well")
    for (title, reference), expression in expressions().items():
        found = watched.query(expression)
        if title in OF_A_CLUSTER:
            assert not found, "this service is in none"
            continue
        assert found or f"{title}-{reference}" in EMPTY_HERE, f"{title}: {expression}"
    (series,) = watched.query('count({job="strandline"})')
    # Some 10 of them are the scrape's own. The comment at `sample_limit` in scrape.yml goes by this.
    assert 150 <= int(series["value"][1]) <= 400


def test_a_source_that_falls_silent_is_told_and_ends_when_it_speaks(watched: Watched) -> None:
    watched.send("gw-2", "gw-1")
    watched.until(
        lambda: "StrandlineHeldAtLimit" in watched.firing(), "the feed waits for gw-2", lambda: watched.send("gw-1")
    )
    found = watched.firing()["StrandlineHeldAtLimit"]
    assert found["labels"]["feed"] == FEED
    assert found["annotations"]["runbook"] == "deploy/runbook.md#strandlineheldatlimit"
    assert watched.process.document()["hold"]["source"] == "gw-2"
    watched.until(
        lambda: "StrandlineHeldAtLimit" not in watched.firing(), "it ends", lambda: watched.send("gw-1", "gw-2")
    )
    # From here on nobody waits for either of them.
    for station in ("gw-1", "gw-2"):
        body = json.dumps({"source": station, "reason": "the test has ended"}).encode()
        answer = watched.process.ask(f"/v1/feeds/{FEED}/excuse", body, {"Content-Type": "application/json"})
        assert answer.status == 204


def test_a_store_that_takes_nothing_is_told_and_ends_when_it_does(watched: Watched) -> None:
    assert "StrandlineSinkFailing" not in watched.firing()
    with closing(sqlite3.connect(store_in(watched.process.folder), isolation_level=None)) as locker:
        locker.execute("BEGIN EXCLUSIVE")
        watched.send("gw-3")
        watched.until(lambda: "StrandlineSinkFailing" in watched.firing(), "the store is locked")
        found = watched.firing()["StrandlineSinkFailing"]
        assert (found["labels"]["sink"], found["labels"]["severity"]) == ("sqlite", "critical")
        assert found["annotations"]["summary"].startswith(f"Sink sqlite of feed {FEED} takes nothing.")
        locker.execute("ROLLBACK")
    watched.until(lambda: "StrandlineSinkFailing" not in watched.firing(), "it ends")


def test_a_service_that_is_gone_is_told_and_ends_when_it_is_back(watched: Watched) -> None:
    watched.process.kill()
    watched.until(lambda: "StrandlineDown" in watched.firing(), "nobody answers")
    watched.process.start()
    watched.until(lambda: "StrandlineDown" not in watched.firing(), "it ends")
