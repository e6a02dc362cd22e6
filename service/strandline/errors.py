"""Every error that leaves a module, and the closed lists of reasons that answers, metrics and documents share.

No HTTP, no logging: a reason's status code lives here because the list must be one, its rendering in the endpoint.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence

# Why one line is no event of its feed: reason -> what to do about it (shown in the documentation).
FAULT_REASONS: dict[str, str] = {
    "malformed": "the line is not one JSON object, or not UTF-8: mend the producer's encoder",
    "time_missing": "nothing stands at the feed's `time.at`: check the pointer against a sample line",
    "time_invalid": "the value there is no time in the feed's unit: check `time.unit` against a sample line",
    "time_out_of_range": "the time cannot be held in int64 nanoseconds (1677-09-21 to 2262-04-11)",
    "source_missing": "nothing stands at the feed's `source` pointer",
    "source_invalid": "a source must be a string or an integer of at most 256 bytes, without U+0000",
    "id_missing": "nothing stands at the feed's `id` pointer",
    "id_invalid": "an id must be a string or an integer of at most 1024 bytes",
    "too_large": "the line is longer than `event_bytes_at_most`",
    "cloudevent_invalid": "the event breaks a rule of CloudEvents 1.0, which the detail names: mend the producer",
    "too_deep": "the value is nested deeper than `nesting_at_most`",
    "body_refused": "a broker's message cannot be taken as a whole, which the detail explains: mend its producer",
    "ahead": "the event time lies further than `ahead_limit` beyond the arrival clock: check the sender's clock",
}

# Why a whole request was refused: reason -> (HTTP status, title).
REFUSALS: dict[str, tuple[int, str]] = {
    "held_full": (429, "Too many events are held"),
    "journal_full": (429, "The journal has reached its limit"),
    "sources_full": (429, "Too many sources"),
    "key_in_flight": (409, "The first request with this key is not answered yet"),
    "key_reused": (422, "This key came before with another body"),
    "too_many_faults": (422, "Too many lines are no events of this feed"),
    "lanes_full": (429, "The late lane or the quarantine has reached its limit"),
    "disk_full": (503, "The disk has no room for the journal"),
    "promise_ahead": (422, "The promise lies in the future"),
    "stream_only": (422, "The feed takes its events from a stream"),
    "header_unreadable": (400, "Bad Request"),
    "body_slow": (408, "Request Timeout"),
    "body_too_large": (413, "Content Too Large"),
    "body_unsupported": (415, "Unsupported Media Type"),
    "body_unreadable": (422, "Unprocessable Content"),
    "sink_paused": (409, "The sink is paused"),
    "stopping": (503, "The service is stopping"),
    "failed": (503, "The feed has stopped after a failed write"),
}

# A body that is refused before its events are looked at is counted under the reason of its status.
BODY_REASONS: dict[int, str] = {
    status: reason for reason, (status, _) in REFUSALS.items() if reason.startswith(("body_", "header_"))
}


class StrandlineError(Exception):
    """Base of every error this package raises on purpose. str() is a sentence for a person."""


class ConfigError(StrandlineError):
    """The configuration cannot be used; `faults` lists every fault found, each with its place."""

    def __init__(self, faults: list[str]) -> None:
        super().__init__("\n".join(faults))
        self.faults = faults


class BodyError(StrandlineError):
    """A whole body is refused: it cannot be read as what it says it is, or is beyond a limit."""

    def __init__(self, status: int, title: str, detail: str, accept_encoding: str | None = None) -> None:
        super().__init__(detail)
        self.status, self.title, self.detail, self.accept_encoding = status, title, detail, accept_encoding


class TooManyFaults(StrandlineError):
    """A whole body is refused because more of its lines are no events than `faults_at_most`.

    `faults` are the first of them: line, reason and detail of each.
    """

    reason = "too_many_faults"  # a key of REFUSALS

    def __init__(self, detail: str, faults: Sequence[tuple[int, str, str]]) -> None:
        super().__init__(detail)
        self.faults = faults


class JournalError(StrandlineError):
    """The journal on disk cannot be read; the text names file, position and what to do."""


class CaptureError(StrandlineError):
    """A capture cannot be read, or nothing can be captured; the text names file and byte and what to do."""


class JournalFull(StrandlineError):
    """No room can be reserved; nothing was written. `reason` is a key of REFUSALS."""

    def __init__(self, reason: str, detail: str) -> None:
        super().__init__(detail)
        self.reason = reason


class JournalFailed(StrandlineError):
    """A write or a sync failed. It is final: what was not yet synced may or may not be on disk. Restart to recover."""


class SinkRetry(StrandlineError):
    """The store did not take the batches now; the same batches should be offered again."""

    def __init__(self, detail: str, retry_after_s: float | None = None) -> None:
        super().__init__(detail)
        self.retry_after_s = retry_after_s


class SinkRefused(StrandlineError):
    """The store will never take these batches; or, of those in `rows`, never these rows, and it has all others."""

    def __init__(self, detail: str, numbers: list[int], rows: Mapping[int, Sequence[int]] | None = None) -> None:
        super().__init__(detail)
        self.numbers, self.rows = numbers, rows or {}
