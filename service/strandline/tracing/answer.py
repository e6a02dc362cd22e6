"""A trace as a plain document: the same for HTTP, the command line and other programs.

Times leave as RFC 3339 text for people and as `*_ns` for programs. Reads what was found out; no journal, no HTTP.
"""

from __future__ import annotations

from typing import Any

from ..core.columns import NO_SOURCE, TIME_MIN
from ..core.sources import NEVER
from ..core.state import State
from ..core.tracing import Duplicate, Followed, Held, Late, Quarantined, Released, Stood
from ..core.view import HOLD_WHYS, hold_of
from ..documents import time_text
from ..errors import FAULT_REASONS
from ..sinks.lane_tables import LateRow, QuarantineRow
from .scanning import EVENT_BYTES_AT_MOST, MATCHES_AT_MOST, Match
from .trace import Traced, kept_event, kept_lane, place_of
from .words import CAUSES, explained

Json = dict[str, Any]
WITHOUT_JOURNAL = (
    "there is no journal in this folder, so only the lane store was looked through: late events, and by their id lines "
    "in quarantine. What was held, released or a repeat cannot be found here: ask the running service, for a partition "
    "its owner. A former owner of a partition keeps what was late or faulty while it owned it, nothing else"
)
ELSEWHERE = (
    "the stream keeps the message, the stores keep the event; what was late or faulty while another instance owned "
    "the partition is in that one's lane store: `strandline trace --data-dir` there"
)


def document_of(found: Traced) -> Json:
    """The whole answer."""
    matches = [_match(found, match) for match in found.scanned.matches]
    kept: list[LateRow | QuarantineRow] = [*found.kept_late, *found.kept_quarantine]
    older = [_kept(found, row) for row in sorted(kept, key=lambda row: row.arrived_ns)]
    for each in (every := [*older, *matches]):
        each["explanation"] = explained(each)
    return {
        "feed": found.question.feed,
        "asked": {
            "id": found.question.id,
            "time": time_text(found.question.time_ns),
            "time_ns": found.question.time_ns,
            "source": found.question.source,
        },
        "found": len(every),
        "matches": every,
        "searched": _searched(found),
        "notes": _notes(found),
    }


def _match(found: Traced, match: Match) -> Json:
    followed = found.course.followed.get(match.target)
    key = None if followed is None else followed.key
    document: Json = {
        "event": match.event.decode(errors="replace"),
        "event_bytes": match.length,
        "time": time_text(match.target.time_ns),
        "time_ns": match.target.time_ns,
        "source": found.source_name(match.source),
        "matched_by": match.by,
        "verified": match.verified,
        "arrival": {
            "position": match.target.lsn,
            "arrived": time_text(match.arrived_ns),
            "arrived_ns": match.arrived_ns,
            "line": match.target.line,
            "events": match.received,
            "idempotency_key": key,
        },
        "watermark": None,
        "fate": "unknown",
    }
    if followed is None:
        document["unknown"] = _unknown(found, match)
        return document
    stood = found.stood.get(match.target, followed.stood)
    document["watermark"] = None if stood is None else _stood(found, stood)
    fate, details = _fate(found, match, followed)
    return {**document, "fate": fate, fate: details, **_sinks(found, match, followed)}


def _fate(found: Traced, match: Match, followed: Followed) -> tuple[str, Json]:
    fate = followed.fate
    match fate:
        case Held():
            assert found.course.end is not None
            return "held", _held(found, match, fate, found.course.end.state)
        case Released():
            held_ns = fate.at_ns - match.arrived_ns
            return "released", {
                "batch": fate.batch,
                "position": fate.position,
                "events": fate.events,
                "at": time_text(fate.at_ns),
                "at_ns": fate.at_ns,
                "held_for_s": held_ns / 1e9,
                "mark": None if fate.mark is None else _stood(found, fate.mark),
            }
        case Late():
            assert match.target.time_ns is not None
            return "late", {
                "batch": fate.batch,
                "position": fate.position,
                "late_by_s": (fate.behind_ns - match.target.time_ns) / 1e9,
                "late_by_ns": fate.behind_ns - match.target.time_ns,
                "behind": time_text(fate.behind_ns),
            }
        case Quarantined():
            return "quarantined", {
                "batch": fate.batch,
                "position": fate.position,
                "reason": fate.reason,
                "detail": fate.detail,
                "what_to_do": FAULT_REASONS.get(fate.reason),
            }
        case Duplicate():
            return "duplicate", {"of": _origin(found, match)}
        case None:
            return "unknown", {"why": "it was held; reading ended at the limit before it left or the journal ended"}


def _origin(found: Traced, match: Match) -> Json | None:
    origin = found.origins.get(match.target)
    if origin is None:
        return None
    return {
        "position": origin.target.lsn,
        "arrived": time_text(origin.arrived_ns),
        "arrived_ns": origin.arrived_ns,
        "line": origin.target.line,
        "time": time_text(origin.target.time_ns),
    }


def _stood(found: Traced, stood: Stood) -> Json | None:
    if stood.watermark_ns == TIME_MIN:
        return None
    cause = stood.cause.name.lower()
    return {
        "at": time_text(stood.watermark_ns),
        "at_ns": stood.watermark_ns,
        "since": time_text(stood.since_ns),
        "cause": cause,
        "explanation": CAUSES[cause],
        "source": found.source_name(stood.source),
        "mark_position": stood.lsn,
    }


def _held(found: Traced, match: Match, held: Held, state: State) -> Json:
    assert match.target.time_ns is not None
    now_ns = max(found.standing.now_ns or TIME_MIN, state.now_ns)
    hold = hold_of(state, now_ns)
    newest = None if hold.source == NO_SOURCE else int(state.sources.newest[hold.source])
    stands = None if state.watermark_ns == TIME_MIN else state.watermark_ns
    return {
        "run": held.run,
        "runs": held.runs,
        "before_it": held.before,
        "run_events": held.run_events,
        "held_events": state.runs.held,
        "watermark": time_text(stands),
        "watermark_ns": stands,
        "lacks_s": None if stands is None else (match.target.time_ns - stands) / 1e9,
        "slack_s": _slack_ns(state, match.source) / 1e9,
        "hold": {
            "why": hold.why,
            "explanation": HOLD_WHYS[hold.why],
            "source": found.source_name(hold.source),
            "source_newest": None if newest in (None, NEVER) else time_text(newest),
            "sink": hold.sink or None,
            "since": time_text(hold.since_ns),
        },
        "running": found.standing.now_ns is not None,
        "held_for_s": (now_ns - match.arrived_ns) / 1e9,
        "at_the_latest": time_text(min(match.arrived_ns + state.settings.hold_at_most_ns, 2**63 - 1)),
    }


def _slack_ns(state: State, source: int | None) -> int:
    """The slack in force for a source."""
    slacks_ns = state.slacks_ns
    if isinstance(slacks_ns, int):
        return slacks_ns
    return state.slack_ns if source is None else int(slacks_ns[source])


def _sinks(found: Traced, match: Match, followed: Followed) -> Json:
    """By sink that takes its lane: whether it durably has the event, refused it, or still has to take it."""
    placed = place_of(followed)
    if placed is None:
        return {}
    lane, batch, _ = placed
    refused = found.refused.get(match.target, {})
    sinks: Json = {}
    for sink, lanes in sorted(found.standing.positions.items()):
        reached = next((number for name, number in lanes.items() if name == lane), None)
        if reached is not None:
            state = "refused" if sink in refused else "taken" if reached >= batch else "waiting"
            sinks[sink] = {"state": state, "taken_up_to_batch": reached, "detail": refused.get(sink)}
    document: Json = {"sinks": sinks}
    record = found.late.get(match.target)
    if record is not None:
        document["kept_as"] = record.number
        document["repairs"] = _repairs(record.number, record.repaired_through)
    return document


def _repairs(number: int | None, repaired_through: dict[str, int]) -> Json:
    return {
        sink: {"sent": number is not None and number <= through, "through": through}
        for sink, through in sorted(repaired_through.items())
    }


def _unknown(found: Traced, match: Match) -> Json:
    if found.course.spent:
        return {"why": "reading ended at the limit before its request was folded"}
    return {
        "why": "the feed's state before its request is no longer kept. It is not held, and no sink still waits for it: "
        "it was released, late or a repeat, and every sink that takes it has taken it"
    }


def _kept_sinks(found: Traced, row: LateRow | QuarantineRow) -> Json:
    """By sink that takes its lane now. What stands before its batch was not given it: the journal would be kept."""
    lane, sinks = kept_lane(row), dict[str, Json]()
    refused = found.kept_refused[lane, row.number]
    for sink, lanes in sorted(found.standing.positions.items()):
        if lane in lanes:
            state = "refused" if sink in refused else "taken" if lanes[lane] >= row.batch else "behind"
            sinks[sink] = {"state": state, "taken_up_to_batch": lanes[lane], "detail": refused.get(sink)}
    return sinks


def _kept(found: Traced, row: LateRow | QuarantineRow) -> Json:
    """A row of the lane store whose request is no longer in the journal."""
    event = kept_event(row)
    line = None if isinstance(row, LateRow) else row.line
    document: Json = {
        "event": event[:EVENT_BYTES_AT_MOST].decode(errors="replace"),
        "event_bytes": len(event),
        "time": time_text(row.time_ns) if isinstance(row, LateRow) else None,
        "time_ns": row.time_ns if isinstance(row, LateRow) else None,
        "source": row.source if isinstance(row, LateRow) else None,
        "matched_by": "kept",
        "verified": True,
        "arrival": {"position": None, "arrived": time_text(row.arrived_ns), "arrived_ns": row.arrived_ns,
                    "line": line, "events": None, "idempotency_key": None},
        "watermark": None,
        "kept_as": row.number,
        "sinks": _kept_sinks(found, row),
    }  # fmt: skip
    if isinstance(row, LateRow):
        return document | {"fate": "late", "repairs": _repairs(row.number, found.repaired_through), "late": {
            "batch": row.batch, "position": None, "late_by_s": row.late_by_ns / 1e9, "late_by_ns": row.late_by_ns,
            "behind": time_text(row.watermark_ns),
        }}  # fmt: skip
    return document | {"fate": "quarantined", "quarantined": {
        "batch": row.batch, "position": None, "reason": row.reason, "detail": row.detail,
        "what_to_do": FAULT_REASONS.get(row.reason),
    }}  # fmt: skip


def _searched(found: Traced) -> Json:
    scanned = found.scanned
    return {
        "from_position": scanned.begin_lsn,
        "to_position": scanned.end_lsn,
        "arrived_from": time_text(scanned.begin_ns),
        "journal_begins_at": found.first_lsn,
        "complete": scanned.complete,
        "journal": not found.without_journal,
        "bytes_read": found.budget.read,
        "bytes_at_most": found.budget.bytes_at_most,
    }


def _notes(found: Traced) -> list[str]:
    scanned, notes = found.scanned, list[str]()
    if found.without_journal:
        notes.append(WITHOUT_JOURNAL)
    if scanned.more:
        notes.append(
            f"there are more: the newest {MATCHES_AT_MOST} are shown, and the search ended there; "
            "narrow it down with a source, or with an id instead of a time"
        )
    elif not scanned.complete:
        notes.append(
            f"reading ended at the limit of {found.budget.bytes_at_most:,} bytes: the journal before position "
            f"{scanned.begin_lsn} was not searched; `strandline trace --data-dir` reads without this limit"
        )
    if found.first_lsn > 0:
        since = f", which arrived at {time_text(scanned.begin_ns)}" if scanned.complete and scanned.begin_ns else ""
        partition = found.question.partition
        begins = f"the journal {'of a partition is short: it is here' if partition else 'is kept'} from position"
        notes.append(
            f"{begins} {found.first_lsn} on{since}; what came before and was taken by every sink is no longer in it: "
            + (ELSEWHERE if partition else "look in the stores, or keep it for longer with `journal.retain`")
        )
    if scanned.without_ids:
        notes.append(
            f"{scanned.without_ids:,} requests came before the feed had an `id`, so their ids were not written down: "
            "ask for a time instead"
        )
    if any(not match.verified for match in scanned.matches):
        notes.append(
            "the id was compared by its 64-bit digest only, since the feed's pointers are not known: name the "
            "configuration with --config to compare the events themselves"
        )
    if found.course.spent:
        notes.append(f"reading ended at the limit of {found.budget.bytes_at_most:,} bytes before all was followed")
    return notes
