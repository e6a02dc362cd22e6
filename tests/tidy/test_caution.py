"""Whatever a user decides by says that no alarm path that protects people may depend on the ordered output alone."""

from __future__ import annotations

import json
import re
from pathlib import Path

import pytest
from strandline import openapi
from strandline.caution import CAUTION
from strandline.cli import parser

ROOT = Path(__file__).resolve().parents[2]
DEPLOY = ROOT / "deploy"
# Scripts that set up or show, a picture, and what is about Prometheus alone carry none: nobody decides by them.
WITHOUT = {
    *("deploy/demo.sh", "deploy/set-up.sh", "deploy/benchmark-ordering.svg"),
    *("deploy/prometheus/scrape.yml", "deploy/prometheus/alerts_test.yml"),
}
CARRIERS = sorted(
    str(path.relative_to(ROOT))
    for path in (
        *(path for path in DEPLOY.rglob("*") if path.is_file()),
        *ROOT.glob("*.md"),
        *(ROOT / "service").rglob("*.md"),
    )
)


def words(text: str) -> str:
    """The words of a document or of its comments, without the marks around them."""
    return " ".join(re.sub(r"(?m)^\s*[>#]+|[`*]", "", text).split())


@pytest.mark.parametrize("name", [name for name in CARRIERS if name not in WITHOUT])
def test_a_document_carries_the_caution(name: str) -> None:
    assert words(CAUTION) in words((ROOT / name).read_text())


def test_what_is_left_out_is_there() -> None:
    assert set(CARRIERS) >= WITHOUT and len(CARRIERS) > 20


def test_the_dashboard_model_shows_it() -> None:
    assert CAUTION in json.loads((DEPLOY / "grafana" / "strandline.json").read_text())["description"]


def test_help_and_the_description_of_the_api_carry_it() -> None:
    assert words(CAUTION) in words(parser().format_help())
    assert CAUTION in openapi.document()["info"]["description"]
