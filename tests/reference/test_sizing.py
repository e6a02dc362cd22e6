"""The worked figures of deploy/sizing.md follow from its measured ones by the formulas that stand there.

What was measured is read from the page's first table, the rest is computed here once more. The measured figures
themselves come from the benchmark; `measured` names the kept result, and what it holds must be what the page says.
"""

from __future__ import annotations

import json
import math
import re
from pathlib import Path

ROOT = Path(__file__).parents[2]
PAGE = (ROOT / "deploy" / "sizing.md").read_text()
SHARE = 0.5  # of its highest rate that an instance is to carry
HELD_BYTES = 25
SNAPSHOT_EVERY_S = 30


def table(heading: str) -> list[list[str]]:
    """The cells of the first table behind a heading, without its head."""
    part = PAGE.split(f"## {heading}\n", 1)[1]
    rows = next(block for block in part.split("\n\n") if block.startswith("|")).splitlines()
    return [[cell.strip() for cell in row.strip("|").split("|")] for row in rows[2:]]


def number(text: str) -> float:
    """The first number of a cell."""
    found = re.search(r"[\d,]+(?:\.\d+)?", text)
    assert found is not None, text
    return float(found[0].replace(",", ""))


def measured() -> dict[str, float]:
    return {row[0]: number(row[1]) for row in table("What was measured")}


def kept() -> dict[str, dict[str, float]]:
    """The figures of the kept result that the page names."""
    name = re.search(r"tests/bench/results/[\w./-]+\.json", PAGE)
    assert name is not None
    figures = json.loads((ROOT / name[0]).read_text())["figures"]
    return {each["name"]: {"median": each["median"], **each["beside"]} for each in figures}


def test_what_the_page_calls_measured_was_measured() -> None:
    found, told = kept(), measured()
    rate = found["a partition, messages of 500 events"]["events/s"]
    assert told["events/s of an instance, one broker beside it"] == round(rate, -3)
    three = found["a partition with 3 brokers on this machine, messages of 500 events"]["events/s"]
    assert told["events/s of an instance, three brokers beside it"] == round(three, -3)
    for held in ("100,000", "1,000,000"):
        seconds = found[f"a partition taken over, {held} events held"]["median"]
        assert told[f"seconds to take over {held} held events"] == round(seconds, 2)


def test_the_worked_figures_follow() -> None:
    told = measured()
    rate = told["events/s of an instance, one broker beside it"]
    again = 1_000_000 / told["seconds to take over 1,000,000 held events"]
    for row in table("Worked for two feeds"):
        what, *cells = row
        for cell, (events, slack_s, size) in zip(cells, ((1e6, 30.0, 150.0), (1e7, 30.0, 150.0)), strict=True):
            instances = math.ceil(events / (SHARE * rate)) + 1
            held = events * slack_s / instances
            read = events / instances * (slack_s + SNAPSHOT_EVERY_S) / (instances - 1)
            pause_s = 15 + 1 + read / again
            expected = {
                "instances": instances,
                "partitions": 2 ** math.ceil(math.log2(2 * instances)),
                "events held by an instance, millions": round(held / 1e6, 1),
                "memory for them, MiB": round(held * HELD_BYTES / 2**20),
                "its copy of the journal, GiB": round(
                    events / instances * (slack_s + SNAPSHOT_EVERY_S) * (size + 24) / 2**30, 1
                ),
                "log_at_most, GiB": round(2 * events * slack_s * HELD_BYTES / 2**30, 1),
                "pause of a lost instance's partitions, s": round(pause_s),
                "stream for one hour, GB at each of its replicas": round(events * size * 3600 / 1e9),
            }
            assert number(cell) == expected[what], (what, cell, expected[what])
