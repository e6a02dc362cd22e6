"""The benchmark at a small scale: rows prepare, check themselves and measure; the harness counts and judges rightly."""

from __future__ import annotations

import io
import json
from pathlib import Path

import numpy as np
import pytest
from rich.console import Console
from strandline_loadgen.bench import heap, path, peers, rows
from strandline_loadgen.bench.harness import Measure, Row, Sample, Scale, main_table, run

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


@pytest.mark.parametrize("name", path.GOALS)
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


@pytest.mark.parametrize("peer", peers.PEERS)
def test_the_peers_release_what_the_runs_release(peer: str) -> None:
    course = peers.course_of(2_000, TINY)
    peers.check_alike(course, [peers.Runs, peers.PEERS[peer]])
    assert peers.ns_per_event(peers.PEERS[peer], course) > 0


def test_a_course_holds_what_it_says() -> None:
    """Four fifths of what comes in the slack are held: the closed form of check-values, section 9 (1), for G(K)."""
    assert len(peers.course_of(20_000, Scale(body_events=500)).held()) == pytest.approx(20_000, rel=0.03)


def test_a_peer_that_does_not_agree_is_found_out() -> None:
    class Hasty(peers.ListSort):
        def turn(self, course: peers.Course, batch: int) -> list[peers.Pair]:
            return super().turn(course, batch)[1:]

    with pytest.raises(RuntimeError, match="do not agree"):
        peers.check_alike(peers.course_of(2_000, TINY), [peers.Runs, Hasty])


def test_heap_bytes_are_those_of_two_columns_and_little_more() -> None:
    """24 bytes are the two columns (core/columns.py); a wrong count would show the lines' own bytes, 2,000 each."""
    scale = Scale(events=0, held=(50_000,), body_events=5_000)
    assert 24 <= heap.heap_bytes("random_order", 2_000, scale.held[-1], scale).value < 40


def test_rows_are_named_once() -> None:
    names = [row.name for row in rows.all_rows(Scale())]
    assert len(set(names)) == len(names)
    assert {row.goal for row in rows.all_rows(Scale()) if "body to ordered" in row.name} == {2.2, 4.0, 11.0}
