"""For tests of traces: a feed in memory whose requests are real bodies, its journal on a disk in memory, what happened.

What happened is told without the code under test: by the batches that left, by the marks in the records, and by a set
of ids in plain Python.
"""

from __future__ import annotations

import json
from collections.abc import Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from helpers_feed import Shell, patient, saved_bytes
from simdisk import SimDisk
from strandline.core.columns import Lane, RequestKey
from strandline.core.records import Kind, Mark, decode_arrival, decode_mark
from strandline.core.settings import Settings
from strandline.ingest.decode import Decoder
from strandline.journal.journal import Journal
from strandline.tracing.answer import document_of
from strandline.tracing.budget import Budget
from strandline.tracing.question import LineReader, Question, question_of
from strandline.tracing.trace import trace

FEED = "river-gauges"
NDJSON = "application/x-ndjson"
SINKS: dict[str, list[Lane]] = {"store": ["ordered", "late"], "lanes": ["late", "quarantine"]}
PLENTY = 1 << 40


def reader() -> LineReader:
    """The pointers of the events here."""
    return LineReader(FEED, "/t", "ns", "/s", "/id")


def line_of(time: int, source: str, id: str) -> bytes:
    """One event."""
    return json.dumps({"t": time, "s": source, "id": id}).encode()


@dataclass(frozen=True, slots=True)
class Sent:
    """One line that was journaled: where, and what it says; `taken` False: no event, or ahead."""

    lsn: int
    line: int
    place: int
    text: bytes
    time: int | None
    source: str | None
    id: str | None
    key: str | None


@dataclass(slots=True)
class Story:
    """A feed and all that was sent to it."""

    settings: Settings = field(default_factory=lambda: patient(name=FEED))
    shell: Shell = field(init=False)
    sent: list[Sent] = field(default_factory=list)
    saved: list[tuple[int, bytes]] = field(default_factory=list)
    positions: dict[str, dict[Lane, int]] = field(default_factory=dict)
    keys: int = 0

    def __post_init__(self) -> None:
        self.shell = Shell(self.settings, sinks=SINKS)
        self.positions = {sink: dict.fromkeys(lanes, 0) for sink, lanes in SINKS.items()}

    def send(self, lines: Sequence[bytes], now_ns: int, *, with_key: bool = False) -> None:
        """One request of these lines."""
        shell = self.shell
        decoder = Decoder(FEED, "/t", "ns", "/s", "/id")
        body = b"".join(line + b"\n" for line in lines)
        made = decoder.decode(body, NDJSON, shell.feed.state.sources.numbers)
        self.keys += with_key
        key = RequestKey(f"key {self.keys}", b"print") if with_key else None
        before = len(shell.records)
        shell.send(made, now_ns, key)
        for record in shell.records[before:]:
            if record.kind == Kind.ARRIVAL:
                self._note(record.lsn, record.body, lines, None if key is None else key.text)

    def _note(self, lsn: int, body: bytes, lines: Sequence[bytes], key: str | None) -> None:
        decoded = decode_arrival(body, lsn)
        numbers = decoded.line_numbers
        place = decoded.payload_place
        for row, length in enumerate(decoded.lengths.tolist()):
            line = row + 1 if numbers is None else int(numbers[row])
            says = json.loads(lines[line - 1])
            self.sent.append(Sent(lsn, line, place, lines[line - 1], says["t"], says["s"], says["id"], key))
            place += length + 1
        place = decoded.faults_place
        for fault in decoded.faults:
            self.sent.append(Sent(lsn, fault.line, place, lines[fault.line - 1], None, None, None, key))
            place += fault.length

    def restart(self, now_ns: int, settings: Settings | None = None) -> None:
        """A new process that folds the journal, from the newest saved state if there is one."""
        lsn, body = self.saved[-1] if self.saved else (0, None)
        self.shell.feed = self.shell.folded(body, lsn)
        self.shell.do(self.shell.feed.start(now_ns, SINKS, self.positions, settings or self.settings))

    def save(self) -> None:
        """Keep the state as a snapshot."""
        if self.shell.feed.next_lsn > (self.saved[-1][0] if self.saved else 0):
            self.saved.append((self.shell.feed.next_lsn, saved_bytes(self.shell.feed)))

    def take(self, sink: str, now_ns: int) -> None:
        """A sink takes all that has left."""
        for lane in SINKS[sink]:
            last = max((batch.number for batch in self.shell.batches[lane]), default=0)
            self.positions[sink][lane] = last
            self.shell.taken(sink, lane, last, now_ns)

    # ---- the journal ------------------------------------------------------------------------------------------------

    def journal(self, segment_bytes: int = 1024) -> Journal:
        """The records as a journal on a disk in memory, with the snapshots of `save`."""
        journal = Journal.open(
            SimDisk(), f"feeds/{FEED}", segment_bytes=segment_bytes, journal_bytes_at_most=1 << 30
        )  # fmt: skip
        journal.keeps_snapshots = True
        saved = list(self.saved)
        for record in self.shell.records:
            journal.reserve([len(record.body)], of_headroom=True)
            journal.append(record.lsn, record.kind, [record.body])
            journal.flush()
            journal.replenish()
            while saved and saved[0][0] <= journal.durable_lsn:
                lsn, body = saved.pop(0)
                journal.write_snapshot(lsn, [body])
        return journal

    # ---- what happened ----------------------------------------------------------------------------------------------

    def fates(self) -> dict[tuple[int, int], dict[str, Any]]:
        """By record and line: the fate's name and what is known of it."""
        left: dict[tuple[int, int | None], dict[str, Any]] = {}
        for lane, batches in self.shell.batches.items():
            for batch in batches:
                name = {"ordered": "released", "late": "late", "quarantine": "quarantined"}[lane]
                for position, entry in enumerate(batch.entries):
                    left[entry.place, entry.line] = {
                        "fate": name, "batch": batch.number, "position": position, "reason": entry.reason
                    }  # fmt: skip
                for position, place in enumerate(batch.refs["place"].tolist()):
                    left[place, None] = {"fate": name, "batch": batch.number, "position": position}
        found: dict[tuple[int, int], dict[str, Any]] = {}
        seen: dict[tuple[str | None, str | None], tuple[int, int]] = {}
        for sent in sorted(self.sent, key=lambda sent: (sent.lsn, sent.place, sent.line)):
            known = left.get((sent.place, sent.line))
            if known is None and sent.time is not None:
                known = left.get((sent.place, None))
            who = (sent.source, sent.id)
            if known is None:
                known = {"fate": "duplicate", "of": seen[who]} if who in seen else {"fate": "held"}
            if known["fate"] not in ("duplicate", "quarantined"):
                seen[who] = (sent.lsn, sent.line)
            found[sent.lsn, sent.line] = known
        return found

    def stood(self, lsn: int) -> Mark | None:
        """The mark that had set the watermark which stood when the record at `lsn` arrived."""
        before = [record for record in self.shell.records if record.kind == Kind.MARK and record.lsn < lsn]
        marks = [decode_mark(record.body) for record in before]
        greatest = max((mark.watermark_ns for mark in marks), default=None)
        return next((mark for mark in marks if mark.watermark_ns == greatest), None)


def budget(bytes_at_most: int = PLENTY) -> Budget:
    """A budget that nobody abandons."""
    return Budget(bytes_at_most, lambda: False)


def asked(
    journal: Journal, *, lanes: Path = Path("absent.db"), bytes_at_most: int = PLENTY, read: bool = True, **texts: str
) -> dict[str, Any]:
    """The answer to one question: id, time or source as texts."""
    return told(journal, question(read=read, **texts), lanes, bytes_at_most)


def question(*, read: bool = True, **texts: str) -> Question:
    """The question that these texts ask."""
    given = {name: texts.get(name) for name in ("id", "time", "source")}
    return question_of(FEED, reader() if read else None, **given)  # type: ignore[arg-type]


def told(journal: Journal, asked: Question, lanes: Path, bytes_at_most: int = PLENTY) -> dict[str, Any]:
    """The answer as it leaves: through JSON."""
    document = document_of(trace(journal, asked, lanes, budget(bytes_at_most)))
    return dict(json.loads(json.dumps(document)))
