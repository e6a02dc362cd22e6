"""Writes the small journal that tests/fixtures keeps: every kind of record, at fixed times, in segments of 4 KiB.

Run once for each released version of the format, never again for an old one:

    python tests/journal_of_ages.py tests/fixtures/journal-1

What is kept is what an old service left behind; `test_old_journals.py` reads it with today's code.
"""

from __future__ import annotations

import hashlib
import json
import sys
from pathlib import Path

import numpy as np
from strandline.core.columns import Arrival, Batch, Fault, RequestKey
from strandline.core.effects import Append, Deliver, Effect
from strandline.core.feed import Feed
from strandline.core.settings import SECOND_NS, Settings
from strandline.journal.disk import LocalDisk
from strandline.journal.journal import Journal
from strandline.lines import JournalLines

DIRECTORY = "feeds/river-gauges"
BEGIN_NS = 1_700_000_000 * SECOND_NS
SETTINGS = Settings(
    "river-gauges",
    slack_ns=2 * SECOND_NS,
    idle_after_ns=20 * SECOND_NS,
    expect_sources=("ford",),
    batch_events_at_most=3,
)


def arrival(
    rows: list[tuple[float, int, int]], *, new: tuple[str, ...] = (), faults: tuple[Fault, ...] = ()
) -> Arrival:
    """Rows of (second, source, id)."""
    lines = [b'{"second":%.1f,"id":%d}' % (second, identity) for second, _, identity in rows]
    return Arrival(
        times=np.array([BEGIN_NS + round(second * SECOND_NS) for second, _, _ in rows], dtype=np.int64),
        sources=np.array([source for _, source, _ in rows], dtype=np.uint32),
        lengths=np.array([len(line) for line in lines], dtype=np.uint32),
        payload=b"".join(line + b"\n" for line in lines),
        new_sources=new,
        line_numbers=np.arange(1, len(rows) + 1) + len(faults) if faults else None,
        faults=faults,
        identities=np.array([identity + 1 for _, _, identity in rows], dtype=np.uint64),
    )


def digest(batch: Batch, lines: JournalLines) -> str:
    """What a batch is, in one word: lane, number, times, sources and bytes."""
    rows = [batch.lane, batch.number, batch.times.tolist(), batch.refs["source"].tolist()]
    rows += [line.decode() for line in lines.lines(batch)]
    return hashlib.sha256(json.dumps(rows).encode()).hexdigest()[:16]


class Writer:
    """A feed and its journal, carried out step by step."""

    def __init__(self, folder: Path) -> None:
        self.disk = LocalDisk(folder)
        self.journal = Journal.open(self.disk, DIRECTORY, segment_bytes=4096, journal_bytes_at_most=1 << 20)
        self.feed = Feed(SETTINGS)
        self.lines = JournalLines(self.journal, self.feed)
        self.digests: dict[str, str] = {}

    def do(self, effects: list[Effect]) -> None:
        """Append, sync, note what was delivered."""
        for effect in effects:
            if isinstance(effect, Append):
                self.journal.reserve([sum(len(part) for part in effect.parts)], of_headroom=True)
                self.journal.append(effect.lsn, effect.kind, effect.parts)
        for effect in self.feed.synced(self.journal.flush()):
            if isinstance(effect, Deliver):
                self.digests[f"{effect.batch.lane} {effect.batch.number}"] = digest(effect.batch, self.lines)


def history(writer: Writer) -> None:
    """A short life with everything in it."""
    feed, at = writer.feed, lambda second: BEGIN_NS + round(second * SECOND_NS)
    sinks = {"store": ("ordered", "late"), "lanes": ("late", "quarantine")}
    writer.do(feed.start(at(0), sinks, {"store": {"ordered": 4}}))  # type: ignore[arg-type]
    for step in range(12):
        rows = [(step + k / 10 - (k % 3), 1 + k % 2, 100 * step + k) for k in range(8)]
        fault = Fault(1, "malformed", "the line is not JSON", b"not json") if step % 4 == 3 else None
        new = ("weir", "mill") if step == 0 else ()
        key = RequestKey(f"request-{step}", bytes(16)) if step % 5 == 0 else None
        writer.do(feed.arrive(arrival(rows, new=new, faults=(fault,) if fault else ()), at(step + 0.5), step, key))
    writer.do(feed.arrive(arrival([(3.0, 1, 9000), (11.7, 2, 1107), (500.0, 1, 9001)]), at(12), 50))
    writer.do(feed.promise("ford", at(10), at(12.5), 51))
    writer.do(feed.excuse("ford", "the ford's radio is down", at(13), 52))
    writer.do(feed.taken("store", "ordered", 6, at(13)))
    writer.do(feed.tick(at(40)))
    writer.do(feed.arrive(arrival([(39.0, 2, 9002), (4.0, 1, 9003), (5.0, 2, 9004)]), at(41), 53))
    writer.do(feed.start(at(50), sinks))  # type: ignore[arg-type]
    writer.do(feed.drain(at(51), 54))
    acts(writer)


def acts(writer: Writer) -> None:
    """What operators did (since fixture 2)."""
    feed, at = writer.feed, lambda second: BEGIN_NS + round(second * SECOND_NS)
    writer.do(feed.excuse("mill", "its link is down until noon", at(52), 60, "the night shift"))
    writer.do(feed.set_slack(8 * SECOND_NS, 4 * SECOND_NS, "a storm", at(53), 61, "the night shift"))
    writer.do(feed.arrive(arrival([(50.0, 1, 9100), (53.5, 1, 9101), (53.0, 2, 9102)]), at(54), 62))
    writer.do(feed.pause("store", True, "its disk is changed", at(55), 63, "the day shift"))
    writer.do(feed.tick(at(58)))
    writer.do(feed.arrive(arrival([(58.0, 1, 9103), (57.0, 2, 9104), (52.0, 2, 9105)]), at(59), 64))
    writer.do(feed.pause("store", False, "the disk is changed", at(60), 65, "the day shift"))
    writer.do(feed.set_slack(SECOND_NS, 3600 * SECOND_NS, "a calm day", at(61), 66, "the day shift"))
    writer.do(feed.pause("lanes", True, "a look at it", at(62), 67, "the day shift"))
    writer.do(feed.drain(at(63), 68, "the day shift", "the shift ends"))


def main(folder: Path) -> None:
    """Write the journal and what it must give."""
    writer = Writer(folder)
    history(writer)
    state = writer.feed.state
    expected = {
        "ledger": {name: getattr(state.ledger, name) for name in state.ledger.__slots__},
        "watermark_ns": state.watermark_ns,
        "sources": state.sources.names,
        "next_number": state.outbox.next_number,
        "positions": state.outbox.positions,
        "digests": writer.digests,
        "slack_ns": state.slack_ns,
        "paused": sorted(state.acts.paused),
        "acts": [[act.act, act.subject, act.who, act.reason] for act in state.acts.kept],
        "kinds": sorted({frame.kind for frame in writer.journal.frames()}),
    }
    writer.journal.close()
    (folder / "expected.json").write_text(json.dumps(expected, indent=1) + "\n")


if __name__ == "__main__":
    main(Path(sys.argv[1]))
