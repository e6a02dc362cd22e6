"""What a replay is summed up in, its bars, where lines are found, and what the command line refuses."""

from __future__ import annotations

import asyncio
from pathlib import Path

import numpy as np
import pytest
from helpers_captures import captured, figures_of, kept
from helpers_feed import Shell, arrival, patient
from helpers_service import FEED, configuration, running
from strandline import cli
from strandline.core.records import Cause, Kind, Mark, encode_mark
from strandline.errors import CaptureError, ConfigError
from strandline.replay.capture import Capture
from strandline.replay.figures import RELATIVE_ERROR, Bar, Figures, Holds, judge
from strandline.replay.into_service import send
from strandline.replay.lines import Places
from strandline.replay.replaying import Folding, WhatIf

SECOND_NS = 1_000_000_000


def test_holds_have_the_quantiles_that_numpy_has() -> None:
    random = np.random.default_rng(1)
    values = random.exponential(2e9, 20_000).astype(np.int64)
    times = random.integers(1, 5, len(values))
    holds = Holds()
    for part in np.array_split(np.arange(len(values)), 7):
        holds.add(values[part], times[part])
    holds.add(np.array([5], np.int64))
    holds.add_same(7, 3)
    every = np.sort(np.concatenate([np.repeat(values, times), [5, 7, 7, 7]]))
    assert holds.events == len(every)
    assert holds.mean_ns() == pytest.approx(every.mean())
    for q in (0.0, 0.5, 0.99, 1.0):
        expected = every[int(q * (len(every) - 1))]
        assert holds.quantile_ns(q) == pytest.approx(expected, rel=RELATIVE_ERROR, abs=1)
    assert Holds().quantile_ns(0.5) is None and Holds().mean_ns() is None


def test_a_bar_that_is_just_met_is_met_and_an_unknown_figure_meets_nothing() -> None:
    figures = Figures(FEED, 0, 0, late_share=0.001, peak_held=5)
    bars = [Bar("late share", "late_share", 0.001), Bar("held", "peak_held", 4), Bar("hold", "hold_p99_ns", 1e9, True)]
    assert not judge(figures, bars)
    assert [bar["met"] for bar in figures.bars] == [True, False, False]
    assert judge(figures, bars[:1]) and judge(figures, [])


def test_a_feed_small_enough_to_reckon_by_hand(tmp_path: Path) -> None:
    """Events at 0, 3, 1, 6 s come at those seconds' order 0, 1, 2, 3; slack 2 s; a drain at 10 s lets the rest go."""
    shell = Shell(patient(slack_ns=2 * SECOND_NS))
    for second, time in enumerate((0, 3, 1, 6)):
        shell.events([time * SECOND_NS], second * SECOND_NS)
    shell.act("drain", now_ns=10 * SECOND_NS)
    with Capture(kept(tmp_path / "a.capture", captured(shell))) as capture:
        # 0 goes at 1 s (hold 1), 1 at once at 2 s (hold 0: the watermark stands at 1), 3 at 3 s (hold 2), 6 at 10 (7).
        figures = figures_of(Folding(capture))
        assert (figures.released, figures.late, figures.late_share, figures.peak_held) == (4, 0, 0.0, 2)
        assert figures.hold_mean_ns == 2.5 * SECOND_NS and figures.hold_max_ns == 7 * SECOND_NS
        # With no slack 1 comes behind the watermark at 3.
        figures = figures_of(WhatIf(capture, patient(slack_ns=0)))
        assert (figures.released, figures.late, figures.late_share, figures.hold_max_ns) == (3, 1, 0.25, 0)
        figures = figures_of(WhatIf(capture, patient(slack_ns=0, held_events_at_most=0)))
        assert (figures.released, figures.refused, figures.late_share) == (0, 4, None)


def test_places_find_what_was_noted_and_forget_what_is_behind() -> None:
    places = Places()
    starts = np.arange(0, 100_000, 10)
    for part in np.array_split(starts, 30):
        places.note(part, part * 2)
        places.forget_before(max(0, int(part[0]) - 50))
    asked = np.array([99_990, 99_999, 99_931, 99_940])
    assert places.positions(asked).tolist() == [2 * (place // 10 * 10) + place % 10 for place in asked.tolist()]
    assert len(places) < 3_500


def test_records_that_do_not_follow_are_told(tmp_path: Path) -> None:
    shell = Shell(patient())
    shell.events([5], 1)
    shell.records[-1] = shell.records[-1].__class__(
        shell.records[-1].lsn, Kind.MARK, encode_mark(Mark(2, 5, 9, 1, 0, Cause.SOURCES))
    )
    with (
        Capture(kept(tmp_path / "a.capture", captured(shell))) as capture,
        pytest.raises(CaptureError, match="does not follow from those before it"),
    ):
        figures_of(Folding(capture))


def called(*arguments: str) -> int:
    """The command line in this process."""
    return cli.main(arguments)


@pytest.mark.parametrize(
    ("arguments", "sentence"),
    [
        (["--verify", "--config", "new.toml"], "leave --config out"),
        (["--into", "http://127.0.0.1:1", "--verify"], "--into URL only sends"),
        (["--into", "http://127.0.0.1:1", "--expect-late-share", "0"], "--into URL only sends"),
        (["--pace", "max"], "--pace is for --into URL"),
        (["--into", "out.csv"], "name a service"),
    ],
)
def test_options_that_contradict_each_other_are_refused(
    tmp_path: Path, capsys: pytest.CaptureFixture[str], arguments: list[str], sentence: str
) -> None:
    assert called("replay", str(tmp_path / "absent.capture"), *arguments) == 2
    assert sentence in capsys.readouterr().err


@pytest.mark.parametrize(
    "arguments",
    [["--pace", "fast"], ["--pace", "0x"], ["--expect-late-share", "-1"], ["--expect-hold-p99", "5"],
     ["--expect-peak-held", "many"], ["--connections", "0"]],
)  # fmt: skip
def test_values_that_mean_nothing_are_refused(capsys: pytest.CaptureFixture[str], arguments: list[str]) -> None:
    with pytest.raises(SystemExit, match="2"):
        called("replay", "a.capture", *arguments)
    assert arguments[0] in capsys.readouterr().err


def test_capture_says_what_is_wrong(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    out = ["--out", str(tmp_path / "a.capture")]
    for arguments, code, sentence in [
        (["http://127.0.0.1:1", *out], 2, "--feed is missing"),
        (["http://127.0.0.1:1", "--feed", "a", "--arrival", "/a", *out], 2, "--arrival: only for a file of events"),
        ([str(tmp_path), *out], 3, "holds no journal"),
        ([str(tmp_path / "absent.ndjson"), "--arrival", "/a", *out], 3, "there is no such file, folder or service"),
        ([str(tmp_path / "absent.ndjson"), *out], 2, "--arrival is missing"),
        ([str(tmp_path / "a.ndjson"), "--from", "1h", "--arrival", "/a", *out], 2, "--from: only for a folder"),
    ]:
        assert called("capture", *arguments) == code
        assert sentence in capsys.readouterr().err
    assert not (tmp_path / "a.capture").exists()


async def test_a_service_that_refuses_is_asked_again_and_one_that_cannot_is_told(tmp_path: Path) -> None:
    """held_events_at_most makes it refuse with Retry-After until a drain has let go what it holds."""
    shell = Shell(patient())
    for second in range(3):
        line = b'{"observed_at":"2023-11-14T22:13:2%dZ","station":"gw-1"}' % second
        shell.send(arrival([0], lines=[line], new_sources=() if second else ("gw-1",)), second * SECOND_NS)
    path = kept(tmp_path / "a.capture", captured(shell))
    text = configuration(tmp_path, slack="1h", held_events_at_most=2, events_at_most=2, batch_events_at_most=2)
    async with running(text) as service:
        with Capture(path) as capture:
            sending = asyncio.create_task(
                asyncio.to_thread(
                    send, capture, service.url, FEED, speed=1000.0, connections=1, progress=lambda done: None
                )
            )
            while not service.runtime.feed.refusals:
                await asyncio.sleep(0.01)
            assert (await service.post("drain")).status == 204
            sent = await sending
            assert sent.answers == {"received": 3, "accepted": 3, "late": 0, "duplicate": 0, "quarantined": 0}
            assert sent.retried >= 1 and sent.requests == 3
            absent = service.url, "absent", "answered 404", ConfigError
            nobody = "http://127.0.0.1:1", FEED, "reached", CaptureError
            for url, feed, sentence, kind in (absent, nobody):
                with pytest.raises(kind, match=sentence):
                    await asyncio.to_thread(
                        send, capture, url, feed, speed=None, connections=2, progress=lambda done: None
                    )


def test_what_was_held_at_the_start_is_named_and_the_books_add_up(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """Six events come at 0 to 5 s with a slack of 3 s; the capture begins when three of them are held."""
    shell = Shell(patient(slack_ns=3 * SECOND_NS))
    for second in range(5):
        shell.events([second * SECOND_NS], second * SECOND_NS)
    begin = len(shell.records)
    shell.events([5 * SECOND_NS], 5 * SECOND_NS)
    path = kept(tmp_path / "now.capture", captured(shell, begin))
    with Capture(path) as capture:
        found = figures_of(Folding(capture))
    assert found.held_at_start == 3 and found.received == 1 < found.released + found.held_at_end
    gone = found.released + found.late + found.duplicate + found.quarantined
    assert found.received + found.held_at_start == gone + found.held_at_end
    assert called("replay", str(path)) == 0
    assert "held at start 3 " in capsys.readouterr().out
    whole = kept(tmp_path / "whole.capture", captured(shell))
    assert called("replay", str(whole)) == 0
    assert "held at start" not in capsys.readouterr().out
