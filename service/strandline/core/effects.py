"""What a feed asks the shell to do, in the order in which it must be done.

Effects are values. The shell carries them out and reports back by calling the feed again; nothing in here acts.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from .columns import Batch

Buffer = bytes | bytearray | memoryview


@dataclass(frozen=True, slots=True)
class Append:
    """Put one record at the end of the journal: its frame starts at `lsn`. `parts` joined are the record's body."""

    lsn: int
    kind: int
    parts: Sequence[Buffer]


@dataclass(frozen=True, slots=True)
class Sync:
    """Make the journal durable up to `lsn`, then call `synced(lsn)`. One sync may serve many of these."""

    lsn: int


@dataclass(frozen=True, slots=True)
class AnswerFault:
    """One line that was not accepted, as the answer names it."""

    line: int
    reason: str
    detail: str


@dataclass(frozen=True, slots=True)
class Outcome:
    """The answer's counts. received == accepted + late + duplicate + quarantined."""

    received: int
    accepted: int
    late: int
    duplicate: int
    quarantined: int
    faults: Sequence[AnswerFault] = ()


@dataclass(frozen=True, slots=True)
class Answer:
    """Tell the one who waits for `token` that all of it is durable (emitted only once that is true)."""

    token: int
    outcome: Outcome | None


@dataclass(frozen=True, slots=True)
class Refuse:
    """Tell the one who waits for `token` that nothing was taken, why, and when to try again."""

    token: int
    reason: str  # one of strandline.errors.REFUSALS
    detail: str
    retry_after_s: int


@dataclass(frozen=True, slots=True)
class Deliver:
    """Hand a batch to every sink that serves its lane (emitted only once the record that justifies it is durable)."""

    batch: Batch


@dataclass(frozen=True, slots=True)
class Pause:
    """Hand a sink nothing more (`on`), or go on (emitted only once the act is durable). Repeating it does nothing."""

    sink: str
    on: bool


Effect = Append | Sync | Answer | Refuse | Deliver | Pause
