"""Alerts, scrape configuration and dashboard, held against Prometheus' own checker and against what /metrics shows.

Source of what is right: promtool (Prometheus), run on the files as they are delivered.
"""

from __future__ import annotations

from pathlib import Path
from typing import Any

import pytest
import yaml
from helpers_deploy import PROMETHEUS, SHOWN, alerts, check_metrics, dashboard, expressions, names_in, promtool

# Fields without which the importing program shows an empty or a broken board (common practice: its documentation of the
# model names them).
BOARD_FIELDS = {"uid", "title", "schemaVersion", "version", "panels", "templating", "time", "refresh", "tags"}
PANEL_FIELDS = {"id", "type", "title", "description", "datasource", "gridPos", "targets", "fieldConfig", "options"}
COLUMNS = 24


def cases() -> list[tuple[str, list[Any]]]:
    """Alert and expected alerts of each case in alerts_test.yml."""
    document = yaml.safe_load((PROMETHEUS / "alerts_test.yml").read_text())
    return [(case["alertname"], case["exp_alerts"]) for test in document["tests"] for case in test["alert_rule_test"]]


def test_the_configuration_and_its_rules_are_sound() -> None:
    done = promtool("check", "config", PROMETHEUS / "scrape.yml")
    assert done.returncode == 0, done.stdout + done.stderr
    assert f"{len(alerts())} rules found" in done.stdout


def test_the_rules_do_what_their_tests_say() -> None:
    done = promtool("test", "rules", PROMETHEUS / "alerts_test.yml")
    assert done.returncode == 0, done.stdout + done.stderr


@pytest.mark.parametrize("rule", alerts(), ids=lambda rule: str(rule["alert"]))
def test_an_alert_is_shown_to_fire_and_to_be_silent(rule: dict[str, Any]) -> None:
    mine = [expected for name, expected in cases() if name == rule["alert"]]
    assert any(mine), "no case in which it fires"
    assert [] in mine, "no case in which it is silent"


def test_a_rule_that_does_nothing_is_found(tmp_path: Path) -> None:
    """The tests of the rules can fail: without one rule they do."""
    text = (PROMETHEUS / "alerts.yml").read_text()
    (tmp_path / "alerts.yml").write_text(text.replace("strandline_sink_failing == 1", "strandline_sink_failing == 2"))
    (tmp_path / "alerts_test.yml").write_text((PROMETHEUS / "alerts_test.yml").read_text())
    done = promtool("test", "rules", tmp_path / "alerts_test.yml")
    assert done.returncode != 0 and "StrandlineSinkFailing" in done.stdout + done.stderr


@pytest.mark.parametrize("rule", alerts(), ids=lambda rule: str(rule["alert"]))
def test_an_alert_asks_for_metrics_that_exist(rule: dict[str, Any]) -> None:
    check_metrics(rule["expr"])
    assert names_in(rule["expr"]) or "up{" in rule["expr"]


def test_the_checker_of_metrics_finds_what_is_wrong() -> None:
    for wrong in ("strandline_hold_total", "strandline_events_late", 'strandline_hold{sink="a"}'):
        with pytest.raises(AssertionError):
            check_metrics(wrong)
    with pytest.raises(AssertionError):
        check_metrics("sum by (station) (strandline_events_held)")


@pytest.mark.parametrize("place", expressions(), ids="-".join)
def test_a_panel_asks_for_metrics_that_exist(place: tuple[str, str]) -> None:
    check_metrics(expressions()[place])


def test_every_expression_of_the_dashboard_is_one(tmp_path: Path) -> None:
    rules = [{"record": f"panel:{number}", "expr": text} for number, text in enumerate(expressions().values())]
    file = tmp_path / "panels.yml"
    file.write_text(yaml.safe_dump({"groups": [{"name": "panels", "rules": rules}]}))
    done = promtool("check", "rules", file)
    assert done.returncode == 0, done.stdout + done.stderr
    assert f"{len(rules)} rules found" in done.stdout


def test_the_dashboard_has_what_a_dashboard_needs() -> None:
    board = dashboard()
    assert set(board) >= BOARD_FIELDS
    assert len({panel["id"] for panel in board["panels"]}) == len(board["panels"])
    assert len({panel["title"] for panel in board["panels"]}) == len(board["panels"])
    variables = {variable["name"]: variable for variable in board["templating"]["list"]}
    assert set(variables) == {"datasource", "feed"}
    check_metrics(variables["feed"]["query"].removeprefix("label_values(").partition("}")[0] + "}")
    for panel in board["panels"]:
        assert set(panel) >= PANEL_FIELDS, panel["title"]
        assert panel["description"].endswith("."), "each says what to look for"
        references = [target["refId"] for target in panel["targets"]]
        assert references and len(set(references)) == len(references)


def test_panels_fill_the_board_and_none_lies_on_another() -> None:
    taken: set[tuple[int, int]] = set()
    for panel in dashboard()["panels"]:
        place = panel["gridPos"]
        assert place["x"] >= 0 and place["x"] + place["w"] <= COLUMNS, panel["title"]
        cells = {(x, y) for x in range(place["x"], place["x"] + place["w"])
                 for y in range(place["y"], place["y"] + place["h"])}  # fmt: skip
        assert not cells & taken, panel["title"]
        taken |= cells
    assert len(taken) == COLUMNS * (1 + max(y for _, y in taken)), "no gap"


def test_every_metric_of_an_alert_is_on_the_dashboard() -> None:
    """Whoever is woken up by one must be able to see it."""
    shown = {SHOWN[name] for text in expressions().values() for name in names_in(text)}
    assert {SHOWN[name] for rule in alerts() for name in names_in(rule["expr"])} <= shown
