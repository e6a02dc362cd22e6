"""The runbook holds together: alerts, holds and refusals have their entries, and what an entry names is there."""

from __future__ import annotations

import re

import pytest
from helpers_deploy import RUNBOOK, SHOWN, alerts, anchor, dashboard, names_in, sections
from strandline.core.view import HOLD_WHYS
from strandline.errors import REFUSALS
from strandline.metrics_reference import METRICS

ALERTS = {rule["alert"]: rule for rule in alerts()}
WANTED = [*ALERTS, *(f"Held: {why}" for why in HOLD_WHYS), *(f"Refused: {reason}" for reason in REFUSALS)]


def test_every_alert_hold_and_refusal_has_an_entry_and_nothing_else_has() -> None:
    assert sorted(sections()) == sorted(WANTED)


@pytest.mark.parametrize("name", ALERTS)
def test_an_alert_names_its_entry_and_says_what_is_wrong(name: str) -> None:
    rule = ALERTS[name]
    assert rule["annotations"]["runbook"] == f"deploy/runbook.md#{anchor(name)}"
    assert rule["labels"]["severity"] in ("critical", "warning")
    summary, description = rule["annotations"]["summary"], rule["annotations"]["description"]
    assert 30 <= len(summary) <= 120 and summary.endswith("."), "a summary fits into a message on a telephone"
    assert description.endswith(".")
    if any(METRICS[SHOWN[each]].by_feed for each in names_in(rule["expr"])):
        assert "{{ $labels.feed }}" in summary, "which feed it is stands in the first sentence"


@pytest.mark.parametrize("heading", WANTED)
def test_an_entry_says_what_you_see_where_to_look_and_what_to_do(heading: str) -> None:
    text = sections()[heading]
    parts = re.fullmatch(r"\s*- \*\*You see:\*\*(.*)\n- \*\*Look:\*\*(.*)\n- \*\*Do:\*\*(.*)", text, re.DOTALL)
    assert parts, heading
    see, look, do = (part.strip() for part in parts.groups())
    assert see and do
    commands = re.search(r"`(?:curl|strandline|journalctl|systemctl|df|timedatectl|dmesg)\b|`/v1/", look)
    assert commands or re.search(r"`strandline_\w+`", look) or re.search(r"[Pp]anels?\s", look), heading


def test_every_metric_that_is_named_exists() -> None:
    named = set(re.findall(r"`(strandline_[a-z_]+)`", RUNBOOK.read_text()))
    assert named and named <= set(SHOWN) | set(METRICS)


def test_every_panel_that_is_named_is_on_the_dashboard() -> None:
    titles = {panel["title"] for panel in dashboard()["panels"]}
    text = " ".join(RUNBOOK.read_text().split())
    lists = re.findall(r'[Pp]anels? ("[^"]+"(?: and "[^"]+")?)', text)
    named = {title for group in lists for title in re.findall(r'"([^"]+)"', group)}
    assert len(named) >= 10 and named <= titles


def test_a_metric_says_what_to_do_and_not_only_what_it_is() -> None:
    """An action is a sentence of its own: when it is to be taken, then what to do, so it has a colon between them."""
    for name, meaning in METRICS.items():
        assert meaning.act.endswith(".") and len(meaning.act.split()) >= 6, name
        assert ":" in meaning.act or "runbook" in meaning.act, f"{name}: {meaning.act}"
