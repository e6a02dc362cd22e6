"""Journals of released formats must read for ever: what an old service left behind gives the same today.

tests/fixtures/journal-N was written once, by the code that first wrote format N (see journal_of_ages.py), and is never
written again. Expected results stand beside it.
"""

from __future__ import annotations

import json
import shutil
from pathlib import Path

import pytest
from journal_of_ages import DIRECTORY, digest
from strandline.core.effects import Deliver
from strandline.core.feed import Feed
from strandline.core.records import Kind
from strandline.core.settings import SECOND_NS, Settings
from strandline.journal.disk import LocalDisk
from strandline.journal.journal import Journal
from strandline.lines import JournalLines

FIXTURES = Path(__file__).parents[1] / "fixtures"
BEFORE_ACTS = (2 * SECOND_NS, [], [["excuse", "ford", "unknown", "the ford's radio is down"]])
JOURNALS = sorted(path.name for path in FIXTURES.glob("journal-*"))


def test_there_is_one() -> None:
    assert JOURNALS


@pytest.mark.parametrize("name", JOURNALS)
def test_it_folds_to_what_it_was(name: str, tmp_path: Path) -> None:
    shutil.copytree(FIXTURES / name, tmp_path / name)
    expected = json.loads((tmp_path / name / "expected.json").read_text())
    journal = Journal.open(LocalDisk(tmp_path / name, read_only=True), DIRECTORY, read_only=True)
    feed, kinds = Feed(Settings("river-gauges")), set()
    for frame in journal.frames():
        feed.fold(frame.kind, frame.version, frame.body, frame.lsn)
        feed.check()
        kinds.add(frame.kind)
    state = feed.state
    assert {column: getattr(state.ledger, column) for column in state.ledger.__slots__} == expected["ledger"]
    assert (state.watermark_ns, state.sources.names) == (expected["watermark_ns"], expected["sources"])
    assert state.outbox.next_number == expected["next_number"]
    assert state.outbox.positions == expected["positions"]
    assert sorted(kinds) == expected["kinds"]
    acts = [[act.act, act.subject, act.who, act.reason] for act in state.acts.kept]
    told = ("slack_ns", "paused", "acts")  # not in what was written before acts were kept
    assert (state.slack_ns, sorted(state.acts.paused), acts) == tuple(
        expected.get(name, before) for name, before in zip(told, BEFORE_ACTS, strict=True)
    )
    lines = JournalLines(journal, feed)
    found = {f"{batch.lane} {batch.number}": digest(batch, lines) for lane in ("ordered", "late", "quarantine")
             for batch in state.outbox.undelivered(lane)}  # fmt: skip
    assert len(found) > 10
    assert found == {key: value for key, value in expected["digests"].items() if key in found}


def test_the_newest_fixture_holds_every_kind_of_record() -> None:
    expected = json.loads((FIXTURES / JOURNALS[-1] / "expected.json").read_text())
    assert expected["kinds"] == sorted(int(kind) for kind in Kind)


@pytest.mark.parametrize("name", JOURNALS)
def test_a_service_goes_on_from_it(name: str, tmp_path: Path) -> None:
    """Opened for writing, as a service would, and continued."""
    shutil.copytree(FIXTURES / name, tmp_path / name)
    expected = json.loads((tmp_path / name / "expected.json").read_text())
    journal = Journal.open(
        LocalDisk(tmp_path / name), DIRECTORY, segment_bytes=4096, journal_bytes_at_most=1 << 20
    )  # fmt: skip
    feed = Feed(Settings("river-gauges"))
    for frame in journal.frames():
        feed.fold(frame.kind, frame.version, frame.body, frame.lsn)
    feed.start(feed.state.now_ns + 1, {"store": ("ordered", "late"), "lanes": ("late", "quarantine")})
    lines = JournalLines(journal, feed)
    delivered = [effect.batch for effect in feed.synced(feed.next_lsn) if isinstance(effect, Deliver)]
    found = {f"{batch.lane} {batch.number}": digest(batch, lines) for batch in delivered}
    assert found and found.items() <= expected["digests"].items()
    journal.close()
