"""The page of the benchmark: made from the newest kept result, and the committed one is just that."""

from __future__ import annotations

import json
from pathlib import Path
from xml.etree import ElementTree

import pytest
from strandline_loadgen.bench.harness import Scale
from strandline_loadgen.bench.page import newest, page_of, picture_of, write_page
from strandline_loadgen.bench.page_words import SECTIONS
from strandline_loadgen.bench.pictures import picture
from strandline_loadgen.bench.rows import all_rows
from strandline_loadgen.cli import main

ROOT = Path(__file__).resolve().parents[2]
RESULTS, PAGE = ROOT / "tests" / "bench" / "results", ROOT / "deploy" / "benchmark.md"
BYTES_AT_MOST = 200_000


def test_the_committed_page_is_what_the_kept_result_gives(tmp_path: Path) -> None:
    """After a new result: python -m strandline_loadgen bench --page deploy/benchmark.md"""
    write_page(RESULTS, tmp_path / PAGE.name)
    for made in tmp_path.iterdir():
        assert made.read_text() == (PAGE.parent / made.name).read_text(), f"{made.name} is not of the newest result"
    assert all(path.stat().st_size < BYTES_AT_MOST for path in (*RESULTS.iterdir(), *PAGE.parent.glob("bench*")))


def test_a_page_shows_every_figure_and_every_missed_goal() -> None:
    path, kept = newest(RESULTS)
    text = page_of(kept, path.name, "a.svg")
    for figure in kept.figures:
        if figure.met is False:
            assert f"* {figure.name}: " in text
        if not figure.name.startswith("ordering alone"):
            assert f"| {figure.name} |" in text
    assert "## More" not in text, "a row has no section of its own: name it in page_words.SECTIONS"


def test_every_row_has_its_section() -> None:
    prefixes = ("ordering alone", *(prefix for section in SECTIONS for prefix in section.prefixes))
    names = [name for row in all_rows(Scale.whole()) for name in (row.name, *(also.name for also in row.also))]
    assert [name for name in names if not name.startswith(prefixes)] == []


def test_the_picture_is_well_formed_and_has_a_point_for_each_figure() -> None:
    panels = {"a < b": {"one": [(10.0, 5.0), (1000.0, 50.0)], "two": [(10.0, 7.0)]}, "c": {"one": [(10.0, 1.0)]}}
    drawn = ElementTree.fromstring(picture("<title>", panels))
    space = "{http://www.w3.org/2000/svg}"
    assert len(drawn.findall(f".//{space}circle")) == 4
    texts = [text.text for text in drawn.iter(f"{space}text")]
    assert {"a < b", "c", "one", "two", "10", "100", "1,000"} <= set(texts)
    assert drawn.findtext(f"{space}title") == "<title>"


def test_without_a_result_the_command_says_how_to_make_one(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    given = ["bench", "--page", str(tmp_path / "page.md"), "--results", str(tmp_path)]
    assert main(given) == 2
    assert "there is no kept result" in capsys.readouterr().err
    (tmp_path / "a.json").write_text(json.dumps({"figures": []}))
    assert main(given) == 2
    assert "is no result of `bench --json`" in capsys.readouterr().err


def test_the_newest_result_is_taken_by_its_date(tmp_path: Path) -> None:
    path, _ = newest(RESULTS)
    for name, when in (("b.json", "2026-01-01"), ("a.json", "2026-01-02")):
        plain = json.loads(path.read_bytes()) | {"figures": []}
        plain["machine"]["when"] = when
        (tmp_path / name).write_text(json.dumps(plain))
    assert newest(tmp_path)[0].name == "a.json"
    assert picture_of(newest(tmp_path)[1]) == ""
