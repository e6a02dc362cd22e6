"""The true history of a simulated feed: every record that was journaled, and every batch that left, over all lives.

It holds the service to what only it can see from the outside of all lives: what was once durable stays, byte for byte
(P1); a number names one batch for ever (P5); nothing leaves before a watermark that stood earlier (P4); and folding the
records from the first one on, without snapshots, gives the same state and the same batches (P8). No faults live here.
"""

from __future__ import annotations

import hashlib

import numpy as np
from helpers_feed import saved_bytes
from strandline.core.columns import Batch, Lane, Times
from strandline.core.effects import Buffer
from strandline.core.feed import Feed
from strandline.core.records import VERSION, Kind, Mark, decode_mark, frame_bytes
from strandline.core.settings import Settings
from strandline.core.state import State
from strandline.journal.journal import Journal

Name = tuple[Lane, int]


def digest_of(batch: Batch) -> bytes:
    """What a batch is, to the byte: the places of its lines stand for the lines, whose records are compared."""
    digest = hashlib.blake2b(digest_size=16)
    head = (batch.lane, batch.number, batch.instant_ns, batch.ready_lsn, batch.behind_ns, list(batch.entries))
    digest.update(repr(head).encode())
    digest.update(batch.times.tobytes())
    digest.update(batch.refs.tobytes())
    digest.update(batch.behind.tobytes())
    return digest.digest()


class _Watched(State):
    """A state that hands over the batches that its records determine."""

    left: list[Batch]

    def fold_arrival(self, body, end_lsn):  # type: ignore[no-untyped-def]
        outcome, batches = super().fold_arrival(body, end_lsn)
        self.left.extend(batches)
        return outcome, batches

    def fold_mark(self, mark, end_lsn):  # type: ignore[no-untyped-def]
        batches = super().fold_mark(mark, end_lsn)
        self.left.extend(batches)
        return batches


class History:
    """Records by position, and the digest of each batch by lane and number."""

    def __init__(self, settings: Settings) -> None:
        self.records: dict[int, tuple[int, bytes]] = {}  # position -> kind, body; ascending
        self.next_lsn = self.durable_lsn = 0
        self.left: dict[Name, bytes] = {}
        self.again = 0  # batches that left more than once
        self.cut_records = 0
        # End of its record -> mark, the watermark before it; where each source has its own, these as a column.
        self._marks: dict[int, tuple[Mark, int | Times]] = {}
        self._stands: dict[int, Times] = {}  # and the watermarks after it
        self._folded = Feed(settings)
        state = _Watched(settings)
        state.left = []
        self._folded.state = state
        self._determined: dict[Name, bytes] = {}

    # ---- what happens -----------------------------------------------------------------------------------------------

    def appended(self, lsn: int, kind: int, parts: list[Buffer]) -> None:
        """The service journaled a record."""
        assert lsn == self.next_lsn, "the journal has no gaps"
        body = b"".join(bytes(part) for part in parts)
        self.records[lsn] = (kind, body)
        self.next_lsn = lsn + frame_bytes(len(body))

    def durable(self, lsn: int) -> None:
        """The journal says that it is durable up to here."""
        self.durable_lsn = max(self.durable_lsn, lsn)

    def delivered(self, batch: Batch, durable_lsn: int) -> None:
        """A batch left the core."""
        assert batch.ready_lsn <= durable_lsn, "a batch left before the record that justifies it was durable"
        self._fold(durable_lsn)
        name, digest = (batch.lane, batch.number), digest_of(batch)
        if name in self.left:
            self.again += 1
        assert self.left.setdefault(name, digest) == digest, f"{name} names two batches"
        assert self._determined.get(name) == digest, f"{name} is not what the journal's records determine"
        if batch.lane == "ordered":
            mark, stood = self._marks[batch.ready_lsn]
            if isinstance(stood, int):
                assert int(batch.times[-1]) <= mark.watermark_ns
                assert int(batch.times[0]) >= stood, "an event from before a watermark that stood earlier"
            else:
                numbers = batch.refs["source"]
                assert np.all(batch.times >= stood[numbers]), "an event from before its source's watermark"
                passed = batch.times <= self._stands[batch.ready_lsn][numbers]
                assert np.all(passed), "an event that its source has not passed"

    def recovered(self, journal: Journal, feed: Feed) -> None:
        """A new process has read the journal back: what was durable is there as it was, what else is there was next."""
        self.require_kept(journal)
        kept = {lsn: record for lsn, record in self.records.items() if lsn < journal.next_lsn}
        self.cut_records += len(self.records) - len(kept)
        self.records, self.next_lsn = kept, journal.next_lsn
        self.durable(journal.next_lsn)
        self._fold(journal.next_lsn)
        feed.check()
        assert feed.next_lsn == self.next_lsn
        # Without a record the state is that of the configuration alone.
        same = not self.records or saved_bytes(feed) == saved_bytes(self._folded)
        assert same, "recovered to another state than the records determine"

    def require_kept(self, journal: Journal) -> None:
        """Assert that a journal holds what was durable, and nothing but what was appended, to the byte."""
        assert journal.next_lsn >= self.durable_lsn, (
            f"durable up to {self.durable_lsn}, recovered up to {journal.next_lsn}"
        )
        for frame in journal.frames():
            assert self.records.get(frame.lsn) == (frame.kind, bytes(frame.body)), f"the record at {frame.lsn} changed"

    def folded(self, settings: Settings, until_lsn: int) -> Feed:
        """A feed that has folded the records up to a position, from the first one on."""
        feed = Feed(settings)
        while feed.next_lsn < until_lsn:
            kind, body = self.records[feed.next_lsn]
            feed.fold(kind, VERSION, body, feed.next_lsn)
        return feed

    # ---- the fold without snapshots ---------------------------------------------------------------------------------

    def _fold(self, durable_lsn: int) -> None:
        feed, state = self._folded, self._folded.state
        assert isinstance(state, _Watched)
        while feed.next_lsn < durable_lsn:
            lsn, before = feed.next_lsn, state.watermark_ns
            own = None if state.own is None else state.own.at.copy()
            kind, body = self.records[lsn]
            feed.fold(kind, VERSION, body, lsn)
            if kind == Kind.MARK:
                mark = decode_mark(body)
                assert mark.watermark_ns >= before
                self._marks[feed.next_lsn] = (mark, before if own is None else own)
                if own is not None and state.own is not None:
                    assert np.all(state.own.at >= own), "a source's watermark goes back"
                    self._stands[feed.next_lsn] = state.own.at.copy()
            for batch in state.left:
                self._determined[batch.lane, batch.number] = digest_of(batch)
            state.left.clear()

    def finish(self, feed: Feed) -> None:
        """All is durable: everything that the records determine has left, and the live state is the folded one."""
        self._fold(self.next_lsn)
        assert feed.next_lsn == self.next_lsn
        assert saved_bytes(feed) == saved_bytes(self._folded), "the live state is not what the records determine"
        missing = sorted(set(self._determined) - set(self.left))
        assert not missing, f"never left: {missing[:10]}"
        assert self.left == self._determined
        for name, numbers in self._numbers().items():
            assert numbers == list(range(1, len(numbers) + 1)), f"numbers of lane {name} have gaps"

    def _numbers(self) -> dict[Lane, list[int]]:
        found: dict[Lane, list[int]] = {}
        for lane, number in sorted(self.left):
            found.setdefault(lane, []).append(number)
        return found
