"""What lies in deploy/, read once: alerts, the runbook's sections, the dashboard model's panels; and outside tools.

Reading only; what must hold is the tests' business.
"""

from __future__ import annotations

import json
import re
import shutil
import subprocess
import sys
from pathlib import Path
from typing import Any

import pytest
import yaml
from strandline.metrics_reference import METRICS

ROOT = Path(__file__).resolve().parents[1]
DEPLOY = ROOT / "deploy"
PROMETHEUS = DEPLOY / "prometheus"
RUNBOOK = DEPLOY / "runbook.md"
DASHBOARD = DEPLOY / "grafana" / "strandline.json"
_SUFFIXES = {"counter": ("_total",), "gauge": ("",), "histogram": ("_bucket", "_sum", "_count")}
SHOWN = {name + suffix: name for name, meaning in METRICS.items() for suffix in _SUFFIXES[meaning.kind]}
TOOL_S_AT_MOST = 120  # long, because it decides nothing
TARGET_LABELS = {"job", "instance", "feed", "le", "__name__"}


def tool(name: str, where: str) -> str:
    """Path of an outside tool, beside this Python or on the PATH; skips the test where there is none."""
    found = shutil.which(name, path=str(Path(sys.executable).parent)) or shutil.which(name)
    if found is None:
        pytest.skip(f"{name} is not installed ({where})")
    return found


def promtool(*arguments: str | Path, cwd: Path = ROOT) -> subprocess.CompletedProcess[str]:
    """Run Prometheus' own checker."""
    command = [tool("promtool", "Debian: apt-get install prometheus"), *map(str, arguments)]
    return subprocess.run(command, cwd=cwd, capture_output=True, text=True, check=False, timeout=TOOL_S_AT_MOST)


def alerts() -> list[dict[str, Any]]:
    """The alert rules."""
    document = yaml.safe_load((PROMETHEUS / "alerts.yml").read_text())
    return [rule for group in document["groups"] for rule in group["rules"]]


def dashboard() -> dict[str, Any]:
    """The dashboard model."""
    document: dict[str, Any] = json.loads(DASHBOARD.read_text())
    return document


def expressions() -> dict[tuple[str, str], str]:
    """Panel title and reference -> its expression, with values in the place of the model's variables."""
    return {
        (panel["title"], target["refId"]): target["expr"].replace("$feed", ".+").replace("$__rate_interval", "5m")
        for panel in dashboard()["panels"]
        for target in panel["targets"]
    }


def sections(level: int = 3) -> dict[str, str]:
    """Heading -> text below it, up to the next heading, of the runbook."""
    parts = re.split(rf"^#{{{level}}} (.*)$", RUNBOOK.read_text(), flags=re.MULTILINE)
    return {
        heading: re.split(r"^#", text, maxsplit=1, flags=re.MULTILINE)[0]
        for heading, text in zip(parts[1::2], parts[2::2], strict=True)
    }


def anchor(heading: str) -> str:
    """What a heading can be linked by: lower case, punctuation dropped, blanks to hyphens (common practice)."""
    return re.sub(r"[^\w\- ]", "", heading.lower()).replace(" ", "-")


def names_in(expression: str) -> set[str]:
    """The metrics of ours that an expression names."""
    return set(re.findall(r"\bstrandline_\w+", re.sub(r'"[^"]*"', '""', expression)))


def check_metrics(expression: str) -> None:
    """Assert that every metric is one that /metrics shows, and that it has every label that is asked of it."""
    assert names_in(expression) <= set(SHOWN), expression
    for name, matchers in re.findall(r"\b(strandline_\w+)\{(.*?)\}", expression):
        labels = set(re.findall(r"(\w+)\s*(?:=~|!~|!=|=)", re.sub(r'"[^"]*"', '""', matchers)))
        assert labels <= TARGET_LABELS | set(METRICS[SHOWN[name]].labels), (name, labels)
    known = {label for name in names_in(expression) for label in METRICS[SHOWN[name]].labels} | TARGET_LABELS
    for listed in re.findall(r"\b(?:by|without) \((.*?)\)", expression):
        assert set(listed.replace(" ", "").split(",")) <= known, expression
