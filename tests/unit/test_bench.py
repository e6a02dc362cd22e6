"""The benchmark at a small scale: rows prepare, check themselves and measure; the harness counts and judges rightly."""

from __future__ import annotations

import io
import json
from pathlib import Path

import numpy as np
import pytest
from rich.console import Console
from strandline_loadgen.bench import heap, path, rows
from strandline_loadgen.bench.harness import Also, Measure, Row, Sample, Scale, main_table, run

TINY = Scale(events=4_000, held=(2_000,), body_events=500)


def scripted(*values: float) -> Row:
    """A row whose visits find these values, after one visit to warm up that finds nonsense."""
    left = [1e9, *values]

    def prepare(scale: Scale) -> Measure:
        return lambda: Sample(left.pop(0), {"beside": 2.0 * len(left)})

    return Row("scripted", "x", prepare, goal=2.0)


def test_rounds_are_interleaved_and_the_warm_up_does_not_count() -> None:
    order: list[str] = []

    def row(name: str) -> Row:
        def prepare(scale: Scale) -> Measure:
            order.append(f"prepare {name}")

            def measure() -> Sample:
                order.append(name)
                return Sample(1.0)

            return measure

        return Row(name, "x", prepare)

    figures = run([row("a"), row("b")], TINY, 2, lambda text: None)
    assert order == ["prepare a", "a", "prepare b", "b", "a", "b", "a", "b"]
    assert [figure.rounds for figure in figures] == [2, 2]
    assert [figure.met for figure in figures] == [None, None]


def test_median_spread_and_goal() -> None:
    (figure,) = run([scripted(3.0, 1.0, 2.0)], TINY, 3, lambda text: None)
    assert (figure.median, figure.least, figure.greatest) == (2.0, 1.0, 3.0)
    assert figure.met is True, "at most 2 is met by 2"
    assert figure.beside == {"beside": 2.0}
    (figure,) = run([scripted(2.1)], TINY, 1, lambda text: None)
    assert figure.met is False
    least = Row("rate", "x", lambda scale: lambda: Sample(0.6), goal=0.5, sense="at least")
    assert run([least], TINY, 1, lambda text: None)[0].met is True


def test_a_row_can_have_a_second_figure_fewer_rounds_and_no_warm_up() -> None:
    visits: list[float] = []

    def measure() -> Sample:
        visits.append(1.0)
        return Sample(2.0, also={"other": float(len(visits))}, note="so it went")

    row = Row("one", "x", lambda scale: measure, 1.0, "at least", False, 2, (Also("other", 3.0),), {"held": 5})
    one, other = run([row], TINY, 9, lambda text: None)
    assert len(visits) == one.rounds == other.rounds == 2
    assert (one.median, one.met, one.note, one.place) == (2.0, True, "so it went", {"held": 5})
    assert (other.name, other.median, other.goal, other.met) == ("other", 1.5, 3.0, False)


def test_the_table_and_the_file_show_machine_goal_and_miss(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    paper, file = io.StringIO(), tmp_path / "bench.json"
    console = Console(file=paper, width=200)
    main_table([scripted(2.5, 2.5)], scale=TINY, rounds=2, only=["script"], json_path=file, console=console)
    text = paper.getvalue()
    assert "numpy " in text
    assert "CPython" in text
    assert "scripted" in text
    assert "2.5x" in text
    assert "at most 2x MISSED" in text
    written = json.loads(file.read_bytes())
    assert written["figures"][0]["median"] == 2.5
    assert written["figures"][0]["met"] is False
    assert written["scale"]["events"] == 4_000
    assert written["machine"]["packages"]["numpy"] == np.__version__
    assert "round 2 of 2: scripted" in capsys.readouterr().err
    with pytest.raises(ValueError, match="no row has 'nothing' in its name; there are:\n  scripted"):
        main_table([scripted(1.0)], scale=TINY, rounds=1, only=["nothing"], json_path=None, console=console)


@pytest.mark.parametrize("name", [*path.GOALS, "sorted, compiled", "exponential, compiled"])
def test_the_path_rows_check_themselves_and_measure(name: str) -> None:
    """`prepare` lets the judge compare what came out with what went in, byte for byte; it raises where that differs."""
    (row,) = [row for row in path.rows(TINY) if row.name.endswith(name)]
    sample = row.prepare(TINY)()
    assert sample.value > 0
    assert sample.value == pytest.approx(sample.beside["ns/event"] / sample.beside["decode_lines ns/event"])


def test_a_path_that_loses_an_event_is_found_out(monkeypatch: pytest.MonkeyPatch) -> None:
    course = path.course_of("exponential", TINY)
    whole = path.MemoryJournal.ndjson
    monkeypatch.setattr(path.MemoryJournal, "ndjson", lambda self, batch: whole(self, batch).partition(b"\n")[2])
    with pytest.raises(RuntimeError, match="what the path released is not right"):
        path.check(course, path.MemoryJournal(course.journal_bytes))


def test_heap_bytes_are_those_of_two_columns_and_little_more() -> None:
    """24 bytes are the two columns (core/columns.py); a wrong count would show the lines' own bytes, 2,000 each."""
    scale = Scale(events=0, held=(50_000,), body_events=5_000)
    assert 24 <= heap.heap_bytes("random_order", 2_000, scale.held[-1], scale).value < 40


def test_rows_are_named_once() -> None:
    names = [row.name for row in rows.all_rows(Scale())]
    assert len(set(names)) == len(names)


def test_every_scale_has_its_rows() -> None:
    default, full = ({row.name for row in rows.all_rows(scale)} for scale in (Scale(), Scale.whole()))
    assert not [name for name in default if "10,000,000 held" in name]
    assert len([name for name in full if name.startswith("ordering alone") and " 10,000,000 held" in name]) == 6
