"""A feed: inputs to effects. It decides; whoever calls it carries the effects out, in order.

Every decision becomes a record before it has any consequence outside, and every record is folded into the state at
once; what leaves (answers, batches) waits here until the record that justifies it is synced. Time is an argument.
Nothing awaits, reads a clock or touches a file here; what records do to the state is `state.py`.
"""

from __future__ import annotations

from collections import deque
from collections.abc import Mapping, Sequence

from .columns import TIME_MIN, Arrival, Lane, RequestKey, require_consistent
from .effects import Answer, Append, Buffer, Deliver, Effect, Outcome, Pause, Refuse, Sync
from .records import (
    ActRecord,
    ExcuseRecord,
    IdleRecord,
    KeyRecord,
    Kind,
    Mark,
    NumbersRecord,
    PromiseRecord,
    SettingsRecord,
    SmallRecord,
    SourcesRecord,
    TakenRecord,
    arrival_body,
    arrival_parts,
    decode_arrival,
    decode_mark,
    decode_small,
    encode_mark,
    encode_small,
    frame_bytes,
    require_readable,
)
from .saved import restore, save
from .settings import Settings
from .state import State
from .view import View, hold_of, view_of
from .watermark import Candidate
from .within import drained, further, leaves_be, step

RETRY_AFTER_S = 5


class Feed:
    """One feed. First `restore` and `fold` what the journal holds, then `start`, then the inputs in any order.

    Every input takes `now_ns`, the arrival clock (ns since 1970 UTC); should it step back, the feed's own clock stands
    still until it is caught up with. Inputs return effects, to be carried out in the order given.
    """

    def __init__(self, settings: Settings) -> None:
        self.state = State(settings)
        self.next_lsn = 0
        self.durable_lsn = 0
        self._clock_ns = TIME_MIN  # never goes back while the feed lives; what it decides stands in records
        self._asked_lsn = 0  # a sync up to here was asked for
        self._waiting: deque[tuple[int, Answer | Deliver | Pause]] = deque()
        # A mark that waits for the last of some arrivals, and whether that one is still to come.
        self._put_off: Candidate | None = None
        self._is_open = False
        self.refusals: dict[str, int] = {}
        self._started = False

    # ---- recovery -------------------------------------------------------------------------------------------------

    def save(self) -> list[Buffer]:
        """The state up to `next_lsn`, in parts of one body. It may be kept once the journal is durable up to there."""
        return save(self.state)

    def restore(self, body: Buffer, lsn: int) -> None:
        """Take over a saved state that covers the journal up to lsn. Raises ValueError if it cannot be read."""
        self.state = restore(body)
        self.next_lsn = self.durable_lsn = lsn

    def fold(self, kind: int, version: int, body: Buffer, lsn: int) -> None:
        """Take over one record of the journal, the next one; a journal whose head is gone may start anywhere.

        Raises ValueError for a gap, or for a kind or version that this code cannot read.
        """
        require_readable(version, lsn)
        if lsn != self.next_lsn and self.next_lsn:
            raise ValueError(f"a record at position {lsn}, but what was folded ends at position {self.next_lsn}")
        end = lsn + frame_bytes(len(body))
        match Kind(kind):
            case Kind.ARRIVAL:
                self.state.fold_arrival(decode_arrival(body, lsn), end)
            case Kind.MARK:
                self.state.fold_mark(decode_mark(body), end)
            case small:
                self.state.fold_small(decode_small(small, body))
        self.next_lsn = end

    def start(
        self,
        now_ns: int,
        sinks: Mapping[str, Sequence[Lane]],
        positions: Mapping[str, Mapping[Lane, int]] | None = None,
        settings: Settings | None = None,
    ) -> list[Effect]:
        """Begin to work, or go on with other settings: journal them, and deliver again what the sinks do not hold.

        `positions` are what sinks say of themselves (number of the last batch durably taken, by lane).
        """
        effects: list[Effect] = []
        now = self._now(now_ns)
        chosen = settings or self.state.settings
        known = self.state.sources.numbers
        unknown = [name for name in dict.fromkeys(chosen.expect_sources) if name not in known]
        if unknown:
            self._record(effects, SourcesRecord(len(self.state.sources.names), unknown))
        served = {name: list(lanes) for name, lanes in sinks.items()}
        stand = {
            name: {lane: number for lane, number in (positions or {}).get(name, {}).items() if lane in lanes}
            for name, lanes in served.items()
        }
        for lane, number in ((lane, number) for lanes in stand.values() for lane, number in lanes.items()):
            if number >= self.state.outbox.next_number[lane]:
                # The store has seen more than this journal knows: never use those numbers for something else.
                self._record(effects, NumbersRecord(now, lane, number + 1))
        before = self.state.outbox.positions if self._started else {}
        again = {lane for name, lanes in served.items() for lane in lanes if lane not in before.get(name, {})}
        self._record(effects, SettingsRecord(now, chosen, served, not self._started, stand))
        self._started = True
        self._waiting.extend((self.next_lsn, Pause(sink, True)) for sink in self.state.acts.paused)
        self._redeliver(again)
        return self._done(effects, sync=True)

    def _redeliver(self, lanes: set[Lane]) -> None:
        """Deliver all that is undelivered in these lanes, for a sink is new to them; what else waits here waits on."""
        batches = [batch for lane in sorted(lanes) for batch in self.state.outbox.undelivered(lane)]
        again = {(batch.lane, batch.number) for batch in batches}
        self._waiting = deque(
            (lsn, effect)
            for lsn, effect in self._waiting
            if not isinstance(effect, Deliver) or (effect.batch.lane, effect.batch.number) not in again
        )
        self._waiting.extend((self.next_lsn, Deliver(batch)) for batch in batches)

    # ---- inputs ---------------------------------------------------------------------------------------------------

    def arrive(
        self, arrival: Arrival, now_ns: int, token: int, key: RequestKey | None = None, *, more: bool = False
    ) -> list[Effect]:
        """One request came. Answered, or refused whole, under its token. Raises ValueError if it contradicts itself.

        A request whose key came before is not taken again: it gets the first one's answer, or is refused. `more`:
        others follow at once, so the marks between them may wait for `mark`, as far as nothing is judged otherwise.
        """
        require_consistent(arrival, self.state.sources.numbers)
        if key is not None and (known := self._known(key, self._now(now_ns), token)):
            return [known]
        refusal = self._refusal(arrival, token)
        if refusal and self._is_open:  # the mark that was put off may make room
            return self.mark(now_ns) + self.arrive(arrival, now_ns, token, key, more=more)
        if refusal:
            self.note_refusal(refusal.reason)
            return [refusal]
        if not arrival.received:
            return [Answer(token, Outcome(0, 0, 0, 0, 0))]
        effects: list[Effect] = []
        now = self._now(now_ns)
        self._mark(effects, now, only_releasing=False, following=arrival if more else None)
        if arrival.new_sources:
            names = list(arrival.new_sources)
            self._record(effects, SourcesRecord(len(self.state.sources.names), names))
        if key is not None:
            self._record(effects, KeyRecord(now, key.text, key.fingerprint))
        lsn = self.next_lsn
        self._append(effects, Kind.ARRIVAL, arrival_parts(arrival, now))
        outcome, batches = self.state.fold_arrival(arrival_body(arrival, now, lsn), self.next_lsn)
        self._waiting.append((self.next_lsn, Answer(token, outcome)))
        self._waiting.extend((self.next_lsn, Deliver(batch)) for batch in batches)
        self._is_open = more
        if not more:
            self._mark(effects, now, only_releasing=False)
        return self._done(effects, sync=True)

    def mark(self, now_ns: int) -> list[Effect]:
        """The last of some requests has arrived: set the mark that waited for it."""
        effects: list[Effect] = []
        if self._is_open:
            self._mark(effects, self._now(now_ns), only_releasing=False)
        return self._done(effects, sync=bool(effects))

    def tick(self, now_ns: int) -> list[Effect]:
        """Time has gone on."""
        effects: list[Effect] = []
        now = self._now(now_ns)
        self._mark(effects, now, only_releasing=True)
        return self._done(effects, sync=bool(effects) or self.next_lsn > self._asked_lsn)

    def synced(self, lsn: int) -> list[Effect]:
        """The journal is durable up to lsn: what waited for that may leave."""
        self.durable_lsn = max(self.durable_lsn, lsn)
        effects: list[Effect] = []
        while self._waiting and self._waiting[0][0] <= self.durable_lsn:
            effects.append(self._waiting.popleft()[1])
        return effects

    def taken(self, sink: str, lane: Lane, number: int, now_ns: int) -> list[Effect]:
        """A sink durably holds the lane's batches up to this number: there may be room again."""
        effects: list[Effect] = []
        now = self._now(now_ns)
        if self.state.outbox.is_news(sink, lane, number):
            self._record(effects, TakenRecord(now, sink, lane, number))
        positions_only = len(effects)
        self._mark(effects, now, only_releasing=True)
        return self._done(effects, sync=len(effects) > positions_only)

    def promise(self, source: str, time_ns: int, now_ns: int, token: int) -> list[Effect]:
        """A source promises that nothing older than time_ns will come from it."""
        effects: list[Effect] = []
        now = self._now(now_ns)
        if time_ns > self.state.settings.newest_at_most_ns(now):
            detail = f"the promised time lies {(time_ns - now) / 1e9:.3f} s beyond the arrival clock"
            return [Refuse(token, "promise_ahead", detail, RETRY_AFTER_S)]
        number = self.state.sources.numbers.get(source)
        if number is None:
            refusal = self._too_many_sources(1, token)
            if refusal:
                return [refusal]
            number = len(self.state.sources.names)
            self._record(effects, SourcesRecord(number, [source]))
        self._record(effects, PromiseRecord(now, number, time_ns))
        return self._act(effects, now, token)

    def excuse(self, source: str, reason: str, now_ns: int, token: int, who: str = "") -> list[Effect]:
        """An operator tells the feed not to wait for a source until it speaks again. Raises KeyError if unknown."""
        effects: list[Effect] = []
        now = self._now(now_ns)
        self._record(effects, ExcuseRecord(now, self.state.sources.numbers[source], reason, who))
        return self._act(effects, now, token)

    def drain(self, now_ns: int, token: int, who: str = "", reason: str = "") -> list[Effect]:
        """Let go everything that is held, in order. Noted as an act where `who` names somebody."""
        effects: list[Effect] = []
        now = self._now(now_ns)
        if who:
            self._record(effects, ActRecord(now, "drain", "", who, reason))
        if self.state.runs.held:
            self._set(effects, drained(self.state), now)
        return self._act(effects, now, token)

    def set_slack(
        self, slack_ns: int | None, for_ns: int, reason: str, now_ns: int, token: int, who: str
    ) -> list[Effect]:
        """An operator sets the slack for a time; None: the configured one holds again from now on."""
        effects: list[Effect] = []
        now = self._now(now_ns)
        until_ns = None if slack_ns is None else now + for_ns
        self._record(effects, ActRecord(now, "slack", "", who, reason, until_ns, slack_ns))
        return self._act(effects, now, token)

    def pause(self, sink: str, on: bool, reason: str, now_ns: int, token: int, who: str) -> list[Effect]:
        """An operator has a sink handed nothing more (`on`), or go on. Raises KeyError if the sink is unknown."""
        effects: list[Effect] = []
        now = self._now(now_ns)
        if sink not in self.state.outbox.positions:
            raise KeyError(sink)
        self._record(effects, ActRecord(now, "pause" if on else "resume", sink, who, reason))
        self._waiting.append((self.next_lsn, Pause(sink, on)))
        return self._act(effects, now, token)

    # ---- decisions ------------------------------------------------------------------------------------------------

    def _known(self, key: RequestKey, now: int, token: int) -> Answer | Refuse | None:
        kept = self.state.keys.find(key.text, now - self.state.settings.keys_kept_for_ns)
        if kept is None:
            return None
        if len(kept.fingerprint) == len(key.fingerprint) and kept.fingerprint != key.fingerprint:  # else: other kinds
            detail = f"the key {key.text[:100]!r} came before with another body: use a new key for a new body"
            self.note_refusal("key_reused")
            return Refuse(token, "key_reused", detail, 0)
        if kept.end_lsn > self.durable_lsn:
            detail = f"a request with the key {key.text[:100]!r} is being worked on: ask again for its answer"
            self.note_refusal("key_in_flight")
            return Refuse(token, "key_in_flight", detail, 1)
        return Answer(token, kept.outcome)

    def _refusal(self, arrival: Arrival, token: int) -> Refuse | None:
        state = self.state
        held, limit = state.runs.held + len(arrival.times), state.settings.held_events_at_most
        if held > limit and len(arrival.times):
            detail = (
                f"{state.runs.held} events are held and held_events_at_most is {limit}; "
                f"the feed is held by: {hold_of(state, max(self._clock_ns, state.now_ns)).why}"
            )
            return Refuse(token, "held_full", detail, RETRY_AFTER_S)
        aside, limit = state.outbox.aside_events, state.settings.undelivered_events_at_most
        if aside and aside + arrival.received > limit:
            detail = (
                f"{aside} events that are late or in quarantine are not yet taken by their sinks and "
                f"undelivered_events_at_most is {limit}"
            )
            return Refuse(token, "lanes_full", detail, RETRY_AFTER_S)
        return self._too_many_sources(len(arrival.new_sources), token)

    def _too_many_sources(self, more: int, token: int) -> Refuse | None:
        known, limit = len(self.state.sources.names), self.state.settings.sources_at_most
        if not more or known + more <= limit:
            return None
        detail = f"{known} sources are known, the request names {more} new ones and sources_at_most is {limit}"
        return Refuse(token, "sources_full", detail, 60)

    def _mark(self, effects: list[Effect], now: int, *, only_releasing: bool, following: Arrival | None = None) -> None:
        """Set a mark if the watermark may move (or only if that would release something).

        Before an arrival that is `following` it is put off, if that changes nothing for what the arrival brings.
        """
        state = self.state
        if state.sources.falls_idle(now - state.settings.idle_after_ns) or state.acts.slack_ended(now):
            self._record(effects, IdleRecord(now))
        if state.outbox.undelivered_events > state.settings.undelivered_events_at_most:
            self._put_off, self._is_open = None, False
            return
        best = further(state, step(state, now, only_releasing=only_releasing), self._put_off)
        self._put_off, self._is_open = None, following is not None
        if best is not None and following is not None and leaves_be(state, best, following.times):
            self._put_off = best
        elif best is not None:
            self._set(effects, best, now)

    def _set(self, effects: list[Effect], best: Candidate, now: int) -> None:
        state = self.state
        mark = Mark(
            decided_ns=now,
            watermark_ns=max(best.watermark_ns, state.watermark_ns),
            first_batch=state.outbox.next_number["ordered"],
            batch_events_at_most=state.settings.batch_events_at_most,
            source=best.source,
            cause=best.cause,
            batch_bytes_at_most=state.settings.batch_bytes_at_most,
        )
        self._append(effects, Kind.MARK, [encode_mark(mark)])
        for batch in state.fold_mark(mark, self.next_lsn):
            self._waiting.append((self.next_lsn, Deliver(batch)))

    # ---- records --------------------------------------------------------------------------------------------------

    def _now(self, now_ns: int) -> int:
        self._clock_ns = max(now_ns, self._clock_ns, self.state.now_ns)
        return self._clock_ns

    def _append(self, effects: list[Effect], kind: Kind, parts: Sequence[Buffer]) -> None:
        effects.append(Append(self.next_lsn, int(kind), parts))
        self.next_lsn += frame_bytes(sum(len(part) for part in parts))

    def _record(self, effects: list[Effect], record: SmallRecord) -> None:
        kind, body = encode_small(record)
        self._append(effects, kind, [body])
        self.state.fold_small(record)

    def _act(self, effects: list[Effect], now: int, token: int) -> list[Effect]:
        """End of an operator's or a source's act: its consequences, then its answer once all is durable."""
        self._mark(effects, now, only_releasing=False)
        self._waiting.append((self.next_lsn, Answer(token, None)))
        return self._done(effects, sync=True)

    def _done(self, effects: list[Effect], *, sync: bool) -> list[Effect]:
        self.state.ledger.check(self.state.runs.held)
        if sync:
            self._asked_lsn = self.next_lsn
            if self.next_lsn > self.durable_lsn:
                effects.append(Sync(self.next_lsn))
            else:  # nothing was recorded, so no sync will come that could let go what waits
                effects += self.synced(self.durable_lsn)
        return effects

    # ---- observers ------------------------------------------------------------------------------------------------

    def snapshot(self, now_ns: int) -> View:
        """Everything that observers need, as plain values."""
        return view_of(self.state, max(now_ns, self._clock_ns, self.state.now_ns), dict(self.refusals))

    def unsynced(self) -> tuple[int, int | None]:
        """Events in batches whose record is not durable yet, and the arrival clock of the oldest such batch."""
        batches = [effect.batch for _, effect in self._waiting if isinstance(effect, Deliver)]
        return sum(map(len, batches)), batches[0].instant_ns if batches else None

    def note_refusal(self, reason: str) -> None:
        """Count a request that was refused whole (by the feed, or for it by who keeps its journal and lanes)."""
        self.refusals[reason] = self.refusals.get(reason, 0) + 1

    @property
    def needed_place(self) -> int:
        """Journal bytes before this place are needed neither by held events nor by undelivered batches."""
        places = (self.state.arrivals.oldest_place, self.state.outbox.oldest_place, self.next_lsn)
        return min(place for place in places if place is not None)

    def check(self) -> None:
        """Assert every invariant."""
        self.state.check()
        assert self._put_off is None or self._is_open
        assert self.durable_lsn <= self.next_lsn
        lsns = [lsn for lsn, _ in self._waiting]
        assert lsns == sorted(lsns) and (not lsns or lsns[-1] <= self.next_lsn)
