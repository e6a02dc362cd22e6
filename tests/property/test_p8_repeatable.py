"""P8 repeatable: the same journal gives the same releases, byte for byte.

A digest of each batch as it left the live feed is compared with that of the batch that the journal gives when it is
folded again: from its start, from every snapshot, in another process's memory, after stops and crashes.
"""

from __future__ import annotations

import asyncio
import hashlib
from collections.abc import Sequence
from pathlib import Path

from helpers_faulty import planted, scripted
from helpers_feed import batches_of
from helpers_history import History, Player, digest, histories, some_settings
from helpers_service import FEED, body_of, config_of, configuration, event_line, eventually, running
from hypothesis import given, settings
from strandline.core.columns import Batch
from strandline.core.feed import Feed
from strandline.core.settings import Settings
from strandline.journal.disk import LocalDisk
from strandline.journal.journal import Journal
from strandline.lines import JournalLines
from strandline.ports import Lines

# ---- random histories -----------------------------------------------------------------------------------------------


@settings(max_examples=300)
@given(some_settings, histories)
def test_the_fold_gives_every_batch_that_left(chosen: Settings, history: History) -> None:
    player = Player(chosen).play(history).end()
    again = {(batch.lane, batch.number): batch for batch in batches_of(player.shell.records, chosen)}
    left = {(lane, number): batch for lane, found in player.batches.items() for number, batch in found.items()}
    assert set(left) == set(again)
    for key, batch in left.items():
        assert digest(player.shell, batch) == digest(player.shell, again[key])


# ---- a service on a real folder -------------------------------------------------------------------------------------


class Witness:
    """Writes down a digest of each batch that a running service hands to a sink, and of its lines."""

    lanes = ("ordered", "late")
    flush_after_s = 0.0

    def __init__(self) -> None:
        self.seen: dict[tuple[str, int], str] = {}
        self.reached: dict[str, int] = {"ordered": 0, "late": 0}

    async def open(self) -> dict[str, int]:
        return dict(self.reached)

    async def take(self, batches: Sequence[Batch], lines: Lines) -> dict[str, int]:
        for batch in batches:
            told = whole_digest(batch, lines)
            assert self.seen.setdefault((batch.lane, batch.number), told) == told
            self.reached[batch.lane] = batch.number
        return dict(self.reached)

    async def flush(self, lines: Lines) -> dict[str, int]:
        return dict(self.reached)

    async def close(self) -> None: ...


def whole_digest(batch: Batch, lines: Lines) -> str:
    """Lane, number, instants, watermark, times, refs and lines."""
    names = lines.source_names()
    sources = [names[number] for number in batch.refs["source"].tolist()]
    facts = [batch.lane, batch.number, batch.instant_ns, batch.ready_lsn, batch.behind_ns, sources]
    found = hashlib.sha256(repr(facts).encode())
    for part in (batch.times.tobytes(), batch.refs.tobytes(), lines.ndjson(batch)):
        found.update(part)
    return found.hexdigest()


def folded(folder: Path, snapshot: int | None) -> dict[tuple[str, int], str]:
    """The digests that the journal gives: every batch that becomes final from there on, none taken by anybody."""
    journal = Journal.open(LocalDisk(folder, read_only=True), f"feeds/{FEED}", read_only=True)
    feed = Feed(Settings(FEED))
    if snapshot is not None:
        lsn, body = journal.snapshots()[snapshot]
        feed.restore(body, lsn)
    seen: dict[tuple[str, int], str] = {}
    lines = JournalLines(journal, feed)
    for frame in journal.frames(feed.next_lsn):
        before = dict(feed.state.outbox.next_number)
        feed.fold(frame.kind, frame.version, frame.body, frame.lsn)
        lines.watch(feed)
        for lane in ("ordered", "late"):
            for batch in feed.state.outbox.undelivered(lane):
                if batch.number >= before[lane]:
                    seen[lane, batch.number] = whole_digest(batch, lines)
    journal.close()
    return seen


async def test_the_journal_of_a_service_gives_what_its_sinks_got_from_every_snapshot_too(tmp_path: Path) -> None:
    """Disorder from four senders at once, three starts, a snapshot at each stop."""
    toml, _ = scripted("a")
    text = configuration(tmp_path, sinks=toml, slack="3s", batch_events_at_most=50)
    assert config_of(text).feeds[0].name == FEED
    witness = Witness()
    for start in range(3):
        async with running(text, make=planted(a=witness)) as service:  # type: ignore[arg-type]

            async def send(sender: int, service=service, start=start) -> None:  # type: ignore[no-untyped-def]
                for request in range(12):
                    first = start * 40 + request * 3 - 7 * (sender % 2)
                    lines = [event_line(first + (7 * n + sender) % 11, f"gw-{sender}", n=n) for n in range(25)]
                    assert (await service.post("events", body_of(*lines))).status == 200

            await asyncio.gather(*(send(sender) for sender in range(4)))
            await eventually(lambda: service.runtime.feed.state.outbox.undelivered_events == 0)
    assert len(witness.seen) > 30 and any(lane == "late" for lane, _ in witness.seen)
    assert folded(tmp_path / "data", None) == witness.seen
    for snapshot in (0, 1):
        again = folded(tmp_path / "data", snapshot)
        assert again == {key: witness.seen[key] for key in again}
    assert again, "the older snapshot lies before the last releases"
